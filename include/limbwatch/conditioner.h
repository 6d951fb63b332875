/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_CONDITIONER_H
#define LIMBWATCH_CONDITIONER_H

#include <stddef.h>
#include <stdint.h>
#include "limbwatch/frames.h"

/* Raw frames to series: one channel's intensity at its working rate. */

enum measure { MEASURE_VOLTAGE, MEASURE_POWER, MEASURE_CHOPPED, MEASURE_COUNT, MEASURE_PULSE, MEASURE_AUX };
/** "voltage", "power", ... */
const char *measure_name(enum measure measure);

struct conditioner_settings {
	struct frame_format format;
	unsigned column;                /* channel in the frames, from 0 */
	enum measure measure;
	int      polarity;              /* +1: more light, higher voltage; -1: inverted */
	unsigned decimation;            /* frames per series sample, >= 1 */
};

struct conditioner;

/** -ENOTSUP with a sentence for a measure that has no conditioner yet. Caller destroys. */
int  conditioner_create(struct conditioner **out, const struct conditioner_settings *settings);
void conditioner_destroy(struct conditioner *conditioner);

/**
 * Signal thread.  No allocation.  Series sample k is the mean over frames k*decimation .. (k+1)*decimation - 1
 * (absolute frame numbers), so a gap spoils only the samples it touches.
 *
 * @param first  number of frames[0]; never less than before.  After a jump the broken sample is dropped, and samples
 *               go on with the first one that is whole: *index shows the jump
 * @param out    samples completed by these frames; NAN where a frame was not finite; room for count / decimation + 1
 * @param index  number k of out[0]; consecutive within a call
 * @return samples given
 */
size_t conditioner_execute(struct conditioner *conditioner, const void *frames, size_t count, uint64_t first,
                           float *out, uint64_t *index);
/** Number of samples so far with a frame at full scale (clipping). */
uint64_t conditioner_clipped(const struct conditioner *conditioner);

#endif
