/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_PULSE_H
#define LIMBWATCH_PULSE_H

#include <stddef.h>
#include <stdint.h>

/* One-second ticks in a sampled channel: DC- or AC-coupled, either polarity. */

struct pulse_settings {
	double rate;                    /* frames per second, nominal */
	double width_s;                 /* pulse length, 0.001 to 0.5; 0: unknown */
	int    polarity;                /* +1 rising edge leads, -1 falling edge leads, 0: find out */
};

struct pulse_edge {
	double frame;                   /* leading edge (half-height instant of the average pulse), fractional frame number */
	double sigma_frames;            /* from the noise around it */
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
