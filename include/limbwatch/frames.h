/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_FRAMES_H
#define LIMBWATCH_FRAMES_H

#include <stddef.h>
#include <stdint.h>

/* Samples as the intake delivers them, little-endian; kept so on disk.  S24 sits in the low three bytes of four. */
enum sample_type { SAMPLE_S16, SAMPLE_S24_3, SAMPLE_S24, SAMPLE_S32, SAMPLE_F32 };
enum { SAMPLE_TYPES = 5 };

struct frame_format {
	enum sample_type type;
	unsigned channels;              /* 1 to MAX_CHANNELS, interleaved */
};
enum { MAX_CHANNELS = 8 };

/** "S16", "S24_3", "S24", "S32", "FLOAT". */
const char *sample_type_name(enum sample_type type);
size_t sample_bytes(enum sample_type type);
size_t frame_bytes(struct frame_format format);

/**
 * One channel of interleaved frames as numbers, full scale = 1.
 *
 * @param channel  from 0
 * @param out      count numbers; integers map to [-1, 1), FLOAT is passed through (NaN and infinities too).  The highest
 *                 codes of S32 round to 1 in float
 */
void frames_to_float(float *out, const void *frames, struct frame_format format, unsigned channel, size_t count);
/** The same in double, which S32 and the pulse channel need. */
void frames_to_double(double *out, const void *frames, struct frame_format format, unsigned channel, size_t count);
/** The reverse, rounding and clipping to full scale (no dither); channel by channel into interleaved frames. */
void frames_from_double(void *frames, struct frame_format format, unsigned channel, const double *in, size_t count);

#endif
