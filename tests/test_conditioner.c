/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <string.h>
#include <cmocka.h>
#include "limbwatch/conditioner.h"
#include "limbwatch/log.h"

static char said[256];

static void catch_sentence(void *context, enum log_level level, const char *sentence)
{
	(void)context;
	(void)level;
	snprintf(said, sizeof(said), "%s", sentence);
}

static struct conditioner_settings settings(unsigned decimation)
{
	return (struct conditioner_settings){
		.format = { SAMPLE_S24_3, 2 }, .column = 1, .measure = MEASURE_VOLTAGE, .polarity = 1,
		.decimation = decimation,
	};
}

/* Stereo frames whose second channel holds value(n) = n / 2^20, exact in 24 bits. */
static void make_frames(unsigned char *to, uint64_t first, size_t count)
{
	struct frame_format format = { SAMPLE_S24_3, 2 };

	for (size_t k = 0; k < count; k++) {
		double left = 0.5, right = (double)((first + k) % 1000) / 0x1p20;

		frames_from_double(to + 6 * k, format, 0, &left, 1);
		frames_from_double(to + 6 * k, format, 1, &right, 1);
	}
}

static void a_sample_is_the_mean_of_its_frames_however_they_come(void **state)
{
	static unsigned char frames[6 * 1000];
	struct conditioner_settings s = settings(60);
	float whole[20], pieces[20];
	uint64_t index;
	size_t given = 0;
	struct conditioner *c;

	(void)state;
	make_frames(frames, 0, 1000);
	assert_int_equal(conditioner_create(&c, &s), 0);
	assert_int_equal(conditioner_execute(c, frames, 1000, 0, whole, &index), 16);
	assert_int_equal(index, 0);
	conditioner_destroy(c);
	for (int k = 0; k < 16; k++)
		assert_true(whole[k] == (float)((60 * k + 29.5) / 0x1p20));
	assert_int_equal(conditioner_create(&c, &s), 0);
	for (size_t first = 0, n = 1; first < 1000; first += n, n = n * 3 % 97 + 1) {
		n = first + n > 1000 ? 1000 - first : n;
		size_t more = conditioner_execute(c, frames + 6 * first, n, first, pieces + given, &index);

		if (more)
			assert_int_equal(index, given);
		given += more;
	}
	assert_int_equal(given, 16);
	assert_memory_equal(whole, pieces, 16 * sizeof(float));
	conditioner_destroy(c);
}

static void a_gap_spoils_only_the_samples_it_touches(void **state)
{
	static unsigned char frames[6 * 1000];
	struct conditioner_settings s = settings(10);
	float out[110];
	uint64_t index;
	struct conditioner *c;

	(void)state;
	assert_int_equal(conditioner_create(&c, &s), 0);
	make_frames(frames, 0, 25);
	assert_int_equal(conditioner_execute(c, frames, 25, 0, out, &index), 2);
	make_frames(frames, 103, 100);
	assert_int_equal(conditioner_execute(c, frames, 100, 103, out, &index), 9);
	assert_int_equal(index, 11);    /* frames 110 to 119 are the first ten that are all there */
	assert_true(out[0] == (float)(114.5 / 0x1p20));
	make_frames(frames, 210, 10);   /* begins on a sample */
	assert_int_equal(conditioner_execute(c, frames, 10, 210, out, &index), 1);
	assert_int_equal(index, 21);
	conditioner_destroy(c);
}

static void what_is_not_finite_becomes_a_missing_sample(void **state)
{
	struct conditioner_settings s = { .format = { SAMPLE_F32, 1 }, .measure = MEASURE_VOLTAGE, .polarity = -1,
		.decimation = 2 };
	static const float frames[] = { 0.25f, 0.75f, NAN, 1, INFINITY, 0, INFINITY, -INFINITY, 0.5f, 0.5f };
	float out[6];
	uint64_t index;
	struct conditioner *c;

	(void)state;
	assert_int_equal(conditioner_create(&c, &s), 0);
	assert_int_equal(conditioner_execute(c, frames, 10, 0, out, &index), 5);
	assert_true(out[0] == -0.5f && isnan(out[1]) && isnan(out[2]) && isnan(out[3]) && out[4] == -0.5f);
	conditioner_destroy(c);
}

static void samples_at_full_scale_are_counted(void **state)
{
	struct conditioner_settings s = { .format = { SAMPLE_S16, 1 }, .measure = MEASURE_VOLTAGE, .polarity = 1,
		.decimation = 2 };
	static const int16_t frames[] = { 0, 32767, 100, 100, -32768, -32768, 32766, 0 };
	float out[6];
	uint64_t index;
	struct conditioner *c;

	(void)state;
	assert_int_equal(conditioner_create(&c, &s), 0);
	conditioner_execute(c, frames, 8, 0, out, &index);
	assert_int_equal(conditioner_clipped(c), 2);
	/* A sample that was dropped for a gap is none. */
	conditioner_execute(c, frames + 1, 1, 8, out, &index);
	conditioner_execute(c, frames + 2, 2, 20, out, &index);
	assert_int_equal(conditioner_clipped(c), 2);
	conditioner_destroy(c);
}

static void a_measure_without_method_is_named(void **state)
{
	static const enum measure none[] = { MEASURE_POWER, MEASURE_CHOPPED, MEASURE_COUNT, MEASURE_PULSE, MEASURE_AUX };
	struct conditioner_settings s = settings(4);
	struct conditioner *c;

	(void)state;
	log_set_sink(catch_sentence, NULL);
	for (size_t k = 0; k < 5; k++) {
		s.measure = none[k];
		assert_int_equal(conditioner_create(&c, &s), -ENOTSUP);
		assert_non_null(strstr(said, measure_name(none[k])));
	}
	log_set_sink(NULL, NULL);
	s = settings(0);
	assert_int_equal(conditioner_create(&c, &s), -EINVAL);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(a_sample_is_the_mean_of_its_frames_however_they_come),
		cmocka_unit_test(a_gap_spoils_only_the_samples_it_touches),
		cmocka_unit_test(what_is_not_finite_becomes_a_missing_sample),
		cmocka_unit_test(samples_at_full_scale_are_counted),
		cmocka_unit_test(a_measure_without_method_is_named),
	};

	return cmocka_run_group_tests(tests, NULL, NULL);
}
