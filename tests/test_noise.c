/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <gsl/gsl_linalg.h>
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdlib.h>
#include <string.h>
#include <cmocka.h>
#include "limbwatch/noise.h"
#include "support/series_probe.h"

enum { HOP = NOISE_SEGMENT / 2, SEGMENTS = NOISE_KEPT, LENGTH = HOP * (SEGMENTS + 1) };

static float x[LENGTH];

static void draw(unsigned long seed, double white, double red)
{
	struct series_noise noise = { gsl_rng_alloc(gsl_rng_mt19937), white, red, 20, 0 };

	gsl_rng_set(noise.rng, seed);
	memset(x, 0, sizeof(x));
	series_noise(&noise, x, LENGTH);
	gsl_rng_free(noise.rng);
}

static int measure(struct noise_model *model, int segments)
{
	struct noise *noise;
	int ret;

	assert_int_equal(noise_create(&noise), 0);
	for (int k = 0; k < segments; k++)
		noise_add(noise, x + HOP * k);
	assert_int_equal(noise_count(noise), segments);
	ret = noise_measure(noise, model);
	noise_clear(noise);
	assert_int_equal(noise_count(noise), 0);
	noise_destroy(noise);
	return ret;
}

static void the_autocovariance_is_the_one_drawn_from(void **state)
{
	struct noise_model model;

	(void)state;
	/* Closed form of a first-order autoregression; 80 half-overlapping segments know a variance to about 2 %. */
	draw(1, 1, 2);
	assert_int_equal(measure(&model, SEGMENTS), 0);
	assert_int_equal(model.lines, 0);
	assert_true(fabs(model.covariance[0] - 5) < 0.6);
	for (int lag = 1; lag < 60; lag++)
		assert_true(fabs(model.covariance[lag] - 4 * exp(-lag / 20.0)) < 0.8);
	draw(2, 3, 0);
	assert_int_equal(measure(&model, SEGMENTS), 0);
	assert_true(fabs(model.covariance[0] / 9 - 1) < 0.05);
	for (int lag = 1; lag < 200; lag++)
		assert_true(fabs(model.covariance[lag] / 9) < 0.05);
}

static void bursts_in_a_few_segments_do_not_count(void **state)
{
	struct noise_model clean, model;

	(void)state;
	draw(3, 1, 0);
	assert_int_equal(measure(&clean, SEGMENTS), 0);
	for (int k = 0; k < LENGTH; k++)
		if (k / HOP % 20 == 7)
			x[k] *= 100;
	assert_int_equal(measure(&model, SEGMENTS), 0);
	/* Two segments of twenty see a burst: the median moves to another order statistic, by some 15 %. */
	assert_true(model.covariance[0] / clean.covariance[0] < 1.3);
}

static void mains_lines_are_named_and_taken_out(void **state)
{
	struct noise_model model;

	(void)state;
	draw(4, 1, 0.5);
	for (int k = 0; k < LENGTH; k++)
		x[k] += (float)(2 * sin(2 * M_PI * 0.0548 * k + 1) + sin(2 * M_PI * 0.1644 * k));
	assert_int_equal(measure(&model, SEGMENTS), 0);
	assert_int_equal(model.lines, 2);
	assert_true(fabs(model.line[0] - 0.0548) < 1e-4);
	assert_true(fabs(model.line[1] - 0.1644) < 1e-4);
	assert_true(fabs(model.covariance[0] - 1.25) < 0.2);
}

static int factor(const struct noise_model *model)
{
	gsl_matrix *m = gsl_matrix_alloc(NOISE_LAGS, NOISE_LAGS);
	int ret;

	for (size_t i = 0; i < NOISE_LAGS; i++)
		for (size_t j = 0; j < NOISE_LAGS; j++)
			gsl_matrix_set(m, i, j, model->covariance[i > j ? i - j : j - i]);
	gsl_set_error_handler_off();
	ret = gsl_linalg_cholesky_decomp1(m);
	gsl_matrix_free(m);
	return ret;
}

static void the_covariance_is_positive_definite(void **state)
{
	struct noise_model model;

	(void)state;
	for (unsigned long seed = 10; seed < 14; seed++) {
		draw(seed, seed % 2 ? 1e-3 : 0, 1);
		for (int k = 2; k < LENGTH && seed > 11; k++)           /* band-limited too */
			x[k] = (x[k] + x[k - 1] + x[k - 2]) / 3;
		assert_int_equal(measure(&model, seed % 2 ? 4 : SEGMENTS), 0);
		assert_int_equal(factor(&model), 0);
	}
	noise_assume(2.5, &model);
	assert_true(model.covariance[0] == 2.5 && model.covariance[1] == 0 && model.lines == 0);
	assert_int_equal(factor(&model), 0);
}

static void too_little_or_nothing_is_said(void **state)
{
	struct noise_model model;

	(void)state;
	draw(20, 1, 0);
	assert_int_equal(measure(&model, 3), -ENODATA);
	for (int k = 0; k < LENGTH; k++)
		x[k] = 0.125f;
	assert_int_equal(measure(&model, SEGMENTS), -EDOM);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(the_autocovariance_is_the_one_drawn_from),
		cmocka_unit_test(bursts_in_a_few_segments_do_not_count),
		cmocka_unit_test(mains_lines_are_named_and_taken_out),
		cmocka_unit_test(the_covariance_is_positive_definite),
		cmocka_unit_test(too_little_or_nothing_is_said),
	};

	return cmocka_run_group_tests(tests, NULL, NULL);
}
