/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef CLOCK_PROBE_H
#define CLOCK_PROBE_H

#include "limbwatch/frame_clock.h"

/* Synthetic pulses through the pulse detector into the clock: for test_frame_clock.c and bench_clock.c. */

/** Fallbacks of the synthetic intake, no contact, with pulse; the label is true +- 0.05 s. */
void clock_probe_reset(void);
void clock_probe_set(const char *name, double value);
/** Plays `seconds` of it. The caller's to destroy. */
struct frame_clock *clock_probe_play(double seconds);
/** UTC of samples all over the middle of the recording against the truth: RMS over seeds 1 to n, seconds.
 *  NAN when one of them did not give a confirmed pulse clock. */
double clock_probe_rms(int n, double seconds);

#endif
