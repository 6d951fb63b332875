/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>
#include <cmocka.h>
#include "limbwatch/frames.h"

/* Codes and values: two's complement, little-endian, full scale = 1 (RIFF/WAVE, Microsoft and IBM 1991). */
static void integers_are_little_endian_twos_complement(void **state)
{
	static const unsigned char s16[] = { 0x00, 0x80, 0xff, 0x7f, 0x01, 0x00, 0xff, 0xff };
	static const unsigned char s24[] = { 0x00, 0x00, 0x80, 0xff, 0xff, 0x7f, 0x01, 0x00, 0x00, 0xff, 0xff, 0xff };
	/* The top byte of S24 in four bytes is not defined: junk there must not matter. */
	static const unsigned char s24_4[] = { 0x00, 0x00, 0x80, 0x00, 0xff, 0xff, 0x7f, 0xaa, 0x01, 0x00, 0x00, 0xff,
		0xff, 0xff, 0xff, 0x00 };
	static const unsigned char s32[] = { 0x00, 0x00, 0x00, 0x80, 0xff, 0xff, 0xff, 0x7f, 0x01, 0x00, 0x00, 0x00,
		0xff, 0xff, 0xff, 0xff };
	static const struct { enum sample_type type; const void *frames; double scale; } cases[] = {
		{ SAMPLE_S16, s16, 0x1p15 }, { SAMPLE_S24_3, s24, 0x1p23 }, { SAMPLE_S24, s24_4, 0x1p23 },
		{ SAMPLE_S32, s32, 0x1p31 },
	};

	(void)state;
	for (size_t k = 0; k < 4; k++) {
		struct frame_format format = { cases[k].type, 1 };
		double scale = cases[k].scale, out[4];
		float rough[4];

		frames_to_double(out, cases[k].frames, format, 0, 4);
		frames_to_float(rough, cases[k].frames, format, 0, 4);
		assert_true(out[0] == -1.0 && out[1] == 1 - 1 / scale && out[2] == 1 / scale && out[3] == -1 / scale);
		for (int j = 0; j < 4; j++)
			assert_true(rough[j] == (float)out[j]);
	}
}

static void every_channel_of_every_type_comes_back(void **state)
{
	unsigned char frames[5 * 8 * 4];

	(void)state;
	for (int type = 0; type < SAMPLE_TYPES; type++)
		for (unsigned channels = 1; channels <= MAX_CHANNELS; channels++) {
			struct frame_format format = { (enum sample_type)type, channels };
			double in[5], out[5];

			memset(frames, 0xee, sizeof(frames));
			for (unsigned c = 0; c < channels; c++) {
				for (int k = 0; k < 5; k++)
					in[k] = (c + 1) / 16.0 * (k - 2) / 2;   /* exact in every type */
				frames_from_double(frames, format, c, in, 5);
			}
			for (unsigned c = 0; c < channels; c++) {
				frames_to_double(out, frames, format, c, 5);
				for (int k = 0; k < 5; k++)
					assert_true(out[k] == (c + 1) / 16.0 * (k - 2) / 2);
			}
			if (frame_bytes(format) * 5 < sizeof(frames))
				assert_int_equal(frames[frame_bytes(format) * 5], 0xee);
		}
}

/* Every byte at random, in memory that ends with the last frame; the value from its definition, sum of bytes by weight. */
static void no_sample_sees_its_neighbours(void **state)
{
	enum { FRAMES = 100, SEED = 20310402 };
	static const double scale[] = { 0x1p15, 0x1p23, 0x1p23, 0x1p31 };
	static const size_t bytes[] = { 2, 3, 3, 4 };   /* of a sample that count */

	(void)state;
	print_message("seed %d\n", SEED);
	srand(SEED);
	for (int type = 0; type < SAMPLE_F32; type++)
		for (unsigned channels = 1; channels <= MAX_CHANNELS; channels++) {
			struct frame_format format = { (enum sample_type)type, channels };
			size_t size = frame_bytes(format) * FRAMES;
			unsigned char *frames = malloc(size);
			double out[FRAMES];
			float rough[FRAMES];

			assert_non_null(frames);
			for (size_t k = 0; k < size; k++)
				frames[k] = (unsigned char)(rand() >> 7);
			for (unsigned c = 0; c < channels; c++) {
				frames_to_double(out, frames, format, c, FRAMES);
				frames_to_float(rough, frames, format, c, FRAMES);
				for (size_t k = 0; k < FRAMES; k++) {
					const unsigned char *p = frames + (k * channels + c) * sample_bytes(format.type);
					double code = 0;

					for (size_t b = 0; b < bytes[type]; b++)
						code += p[b] * ldexp(1, 8 * (int)b);
					if (code >= scale[type])
						code -= 2 * scale[type];
					assert_true(out[k] == code / scale[type]);
					assert_true(rough[k] == (float)out[k]);
				}
			}
			free(frames);
		}
}

static void what_does_not_fit_is_clipped_to_full_scale(void **state)
{
	static const double in[] = { 2, -2, NAN, INFINITY, -INFINITY, 1, -1 };
	unsigned char frames[7 * 4];
	double out[7];

	(void)state;
	for (int type = 0; type < SAMPLE_F32; type++) {
		struct frame_format format = { (enum sample_type)type, 1 };

		frames_from_double(frames, format, 0, in, 7);
		frames_to_double(out, frames, format, 0, 7);
		assert_true(out[0] < 1 && out[0] > 0.9999 && out[1] == -1 && out[2] == 0);
		assert_true(out[3] == out[0] && out[4] == -1 && out[5] == out[0] && out[6] == -1);
	}
}

static void floats_pass_through_with_nan_and_infinity(void **state)
{
	static const double in[] = { NAN, INFINITY, -INFINITY, 1e30, 0.1 };
	unsigned char frames[5 * 4];
	struct frame_format format = { SAMPLE_F32, 1 };
	float out[5];

	(void)state;
	frames_from_double(frames, format, 0, in, 5);
	frames_to_float(out, frames, format, 0, 5);
	assert_true(isnan(out[0]) && out[1] == INFINITY && out[2] == -INFINITY && out[3] == 1e30f && out[4] == 0.1f);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(integers_are_little_endian_twos_complement),
		cmocka_unit_test(every_channel_of_every_type_comes_back),
		cmocka_unit_test(no_sample_sees_its_neighbours),
		cmocka_unit_test(what_does_not_fit_is_clipped_to_full_scale),
		cmocka_unit_test(floats_pass_through_with_nan_and_infinity),
	};

	return cmocka_run_group_tests(tests, NULL, NULL);
}
