/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <endian.h>
#include <math.h>
#include <string.h>
#include "limbwatch/frames.h"

static const struct { const char *name; size_t bytes; double full_scale; } types[SAMPLE_TYPES] = {
	[SAMPLE_S16] = { "S16", 2, 32768.0 },
	[SAMPLE_S24_3] = { "S24_3", 3, 8388608.0 },
	[SAMPLE_S24] = { "S24", 4, 8388608.0 },
	[SAMPLE_S32] = { "S32", 4, 2147483648.0 },
	[SAMPLE_F32] = { "FLOAT", 4, 1.0 },
};

const char *sample_type_name(enum sample_type type)
{
	return types[type].name;
}

size_t sample_bytes(enum sample_type type)
{
	return types[type].bytes;
}

size_t frame_bytes(struct frame_format format)
{
	return types[format.type].bytes * format.channels;
}

/* Little-endian readers of one sample; 24 bits are read into the top of 32, so that the shift back extends the sign. */
static inline int32_t read_s16(const unsigned char *p)
{
	return (int16_t)(uint16_t)(p[0] | p[1] << 8);
}

static inline int32_t read_s24(const unsigned char *p)
{
	return (int32_t)((uint32_t)p[0] << 8 | (uint32_t)p[1] << 16 | (uint32_t)p[2] << 24) >> 8;
}

static inline int32_t read_s32(const unsigned char *p)
{
	uint32_t bits;

	memcpy(&bits, p, sizeof(bits));
	return (int32_t)le32toh(bits);
}

/* Three bytes read together with the one before them, which the shift drops: one load, where three would be. */
static inline int32_t read_s24_after(const unsigned char *p)
{
	return read_s32(p - 1) >> 8;
}

static inline float read_f32(const unsigned char *p)
{
	int32_t bits = read_s32(p);
	float x;

	memcpy(&x, &bits, sizeof(x));
	return x;
}

#define CONVERT(number, reader, scale) \
	for (size_t k = 0; k < count; k++) \
		out[k] = (number)reader(p + k * step) * (number)(scale)

/* Before the very first sample there is no byte. */
#define CONVERT_S24_3(number) \
	do { \
		if (count) { \
			*out++ = (number)read_s24(p) * (number)(1 / 8388608.0); \
			p += step; \
			count--; \
		} \
		CONVERT(number, read_s24_after, 1 / 8388608.0); \
	} while (0)

void frames_to_float(float *out, const void *frames, struct frame_format format, unsigned channel, size_t count)
{
	size_t step = frame_bytes(format);
	const unsigned char *p = (const unsigned char *)frames + channel * types[format.type].bytes;

	switch (format.type) {
	case SAMPLE_S16: CONVERT(float, read_s16, 1 / 32768.0); break;
	case SAMPLE_S24_3: CONVERT_S24_3(float); break;
	case SAMPLE_S24: CONVERT(float, read_s24, 1 / 8388608.0); break;
	case SAMPLE_S32: CONVERT(float, read_s32, 1 / 2147483648.0); break;
	case SAMPLE_F32: CONVERT(float, read_f32, 1); break;
	}
}

void frames_to_double(double *out, const void *frames, struct frame_format format, unsigned channel, size_t count)
{
	size_t step = frame_bytes(format);
	const unsigned char *p = (const unsigned char *)frames + channel * types[format.type].bytes;

	switch (format.type) {
	case SAMPLE_S16: CONVERT(double, read_s16, 1 / 32768.0); break;
	case SAMPLE_S24_3: CONVERT_S24_3(double); break;
	case SAMPLE_S24: CONVERT(double, read_s24, 1 / 8388608.0); break;
	case SAMPLE_S32: CONVERT(double, read_s32, 1 / 2147483648.0); break;
	case SAMPLE_F32: CONVERT(double, read_f32, 1); break;
	}
}

/* Nearest integer within full scale; NaN becomes 0. */
static int32_t quantise(double x, double full_scale)
{
	double y = rint(x * full_scale);

	if (!(y >= -full_scale))
		return isnan(y) ? 0 : (int32_t)-full_scale;
	return y > full_scale - 1 ? (int32_t)(full_scale - 1) : (int32_t)y;
}

void frames_from_double(void *frames, struct frame_format format, unsigned channel, const double *in, size_t count)
{
	size_t step = frame_bytes(format), bytes = types[format.type].bytes;
	unsigned char *p = (unsigned char *)frames + channel * bytes;

	for (size_t k = 0; k < count; k++, p += step) {
		uint32_t bits;

		if (format.type == SAMPLE_F32) {
			float x = (float)in[k];

			memcpy(&bits, &x, sizeof(bits));
		} else {
			bits = (uint32_t)quantise(in[k], types[format.type].full_scale);
		}
		for (size_t b = 0; b < bytes; b++)
			p[b] = (unsigned char)(bits >> 8 * b);
	}
}
