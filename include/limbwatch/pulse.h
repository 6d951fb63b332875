/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_PULSE_H
#define LIMBWATCH_PULSE_H

#include <stddef.h>
#include <stdint.h>

/*
 * One-second ticks in a sampled channel: DC- or AC-coupled, either polarity.
 *
 * The instant of an edge is where it passes half its height.  For a card whose anti-alias filter has linear phase that is the
 * instant of the pulse plus the filter's delay, to a thousandth of a frame (AC coupling of 20 Hz included, at 48 kHz).  A
 * minimum-phase filter moves it by a constant part of a frame or two, the same for every pulse: it belongs into the delay that is
 * calibrated (pulse_delay_s).  The level is taken within 20 to 64 frames of the edge, so a pulse shorter than 20 frames is not timed.
 */

struct pulse_settings {
	double rate;                    /* frames per second, nominal */
	double width_s;                 /* pulse length, to 0.5; 0: unknown, as good as anything above 2 ms */
	int    polarity;                /* +1 rising edge leads, -1 falling edge leads, 0: find out */
};

struct pulse_edge {
	double frame;                   /* leading edge (half-height instant), fractional frame number */
	double sigma_frames;            /* one standard deviation, from the channel's noise */
	double height;                  /* full scale = 1, signed */
};

struct pulse_detector;

/** -EINVAL when a setting is out of range. Caller destroys. */
int  pulse_detector_create(struct pulse_detector **out, const struct pulse_settings *settings);
void pulse_detector_destroy(struct pulse_detector *detector);

/**
 * Signal thread.  No allocation.  Contiguous samples, or a jump in `first` after lost frames.  Edges come with a delay
 * of at most two seconds.  Spurious ones may be among them: the frame clock judges.
 *
 * @param samples  full scale = 1
 * @param out      room for `max`; further edges come with the next call
 * @return edges given, in order
 */
size_t pulse_detector_execute(struct pulse_detector *detector, const double *samples, size_t count, uint64_t first,
                              struct pulse_edge *out, size_t max);
/** At the end of the data: gives the edges still held back. */
size_t pulse_detector_finish(struct pulse_detector *detector, struct pulse_edge *out, size_t max);

#endif
