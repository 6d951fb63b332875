/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdlib.h>
#include <string.h>
#include <cmocka.h>
#include "limbwatch/bank.h"
#include "support/series_probe.h"

enum { W = DETECTOR_WINDOW };

static struct detector_settings settings;
static struct bank *bank;

static void red_with_a_line(struct noise_model *model)
{
	*model = (struct noise_model){ .lines = 1, .line = { 0.0625 } };
	for (int k = 0; k < NOISE_LAGS; k++)
		model->covariance[k] = (k ? 0 : 1) + 4 * exp(-k / 30.0);
}

static void rho_is_normal_under_the_noise_it_was_made_for(void **state)
{
	enum { WINDOWS = 4000 };
	struct series_noise noise = { gsl_rng_alloc(gsl_rng_mt19937), 1, 2, 30, 0 };
	struct noise_model model;
	double sum = 0, squares = 0;
	float x[W], rho[64];

	(void)state;
	red_with_a_line(&model);
	assert_int_equal(bank_whiten(bank, &model), 0);
	for (int k = 0; k < WINDOWS; k++) {
		memset(x, 0, sizeof(x));
		series_noise(&noise, x, W);
		bank_execute(bank, x, rho);
		sum += (double)rho[k % 32];
		squares += (double)(rho[k % 32] * rho[k % 32]);
	}
	/* Four standard errors; windows follow each other, the red noise remembers 30 samples. */
	assert_true(fabs(sum / WINDOWS) < 4 / sqrt(WINDOWS));
	assert_true(fabs(squares / WINDOWS - 1) < 4 * sqrt(2.0 / WINDOWS));
	gsl_rng_free(noise.rng);
}

static void level_slope_and_mains_do_not_count(void **state)
{
	struct noise_model model;
	float x[W], rho[64];

	(void)state;
	red_with_a_line(&model);
	assert_int_equal(bank_whiten(bank, &model), 0);
	for (int k = 0; k < W; k++)
		x[k] = (float)(100 + 0.3 * k + 20 * sin(2 * M_PI * 0.0625 * k + 0.7));
	bank_execute(bank, x, rho);
	for (size_t k = 0; k < bank_templates(bank); k++)
		assert_true(fabsf(rho[k]) < 2e-3f);     /* single precision of 100 */
}

/* The bar is 0.98 of the SNR for sizes up to two Fresnel units, worst over scale and half a sample of lag. */
static void little_snr_is_lost_between_templates(void **state)
{
	struct noise_model white;
	double worst = 1;

	(void)state;
	noise_assume(1, &white);
	assert_int_equal(bank_whiten(bank, &white), 0);
	for (int k = 0; k < 24; k++) {
		struct series_event event = { k % 2 ? CONTACT_EMERSION : CONTACT_IMMERSION, 0, 0, k % 3, 1 };
		double snr, best = 0;
		float rho[64];

		event.scale = 0.65 * pow(1.5 / 0.65, k / 23.0);
		event.contact = (k % 2 ? 0.21 : 0.79) * W;
		snr = series_unit_snr(&settings, &event, NULL);
		for (int lag = -40; lag <= 40; lag++) {
			float x[W] = { 0 };

			series_add_event(&settings, &event, lag + 0.5, x, W);
			bank_execute(bank, x, rho);
			for (size_t t = 0; t < bank_templates(bank); t++)
				if (bank_template(bank, t)->kind == event.kind)
					best = fmax(best, (double)rho[t]);
		}
		worst = fmin(worst, best / snr);
	}
	print_message("largest loss of SNR between templates, sizes 0 to 2: %.2f%%\n", 100 * (1 - worst));
	assert_true(worst > 0.98);
}

static void a_fit_without_noise_gives_the_truth(void **state)
{
	struct noise_model white;

	(void)state;
	noise_assume(1, &white);
	assert_int_equal(bank_whiten(bank, &white), 0);
	for (int k = 0; k < 8; k++) {
		struct series_event event = { k % 2 ? CONTACT_EMERSION : CONTACT_IMMERSION, 0, 0.75 + 0.08 * k, 0, 50 };
		float x[W];
		struct bank_fit fit;
		double bound, snr;

		event.contact = (k % 2 ? 0.21 : 0.79) * W + 0.3 * (k - 4);
		snr = 50 * series_unit_snr(&settings, &event, &bound);
		for (int j = 0; j < W; j++)
			x[j] = 7;
		series_add_event(&settings, &event, 0, x, W);
		assert_true(bank_fit(bank, x, event.kind, &fit));
		assert_true(fabs(fit.contact - event.contact) < 0.01);
		assert_true(fabs(fit.scale - event.scale) < 0.002);
		assert_true(fabs(fit.flux - 50) < 0.1);
		assert_true(fabs(fit.baseline - 7) < 0.1);
		assert_true(fabs(fit.rho / snr - 1) < 0.02);
		assert_true(fabs(fit.contact_sigma / (bound / 50) - 1) < 0.1);
		assert_true(fit.size == 0 && !fit.flank && fit.fringe_gain > 100);
	}
}

static void alarm_rate_falls_as_a_gaussian_does(void **state)
{
	double ratio;

	(void)state;
	ratio = bank_alarm_rate(bank, CONTACT_EMERSION, 7) / bank_alarm_rate(bank, CONTACT_EMERSION, 6);
	/* exp(-(49 - 36) / 2), and at most 7 / 6 for what more of the neighbours counts. */
	assert_true(ratio > exp(-6.5) && ratio < exp(-6.5) * 7 / 6);
	assert_true(bank_alarm_rate(bank, CONTACT_IMMERSION, 5) > 0);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(rho_is_normal_under_the_noise_it_was_made_for),
		cmocka_unit_test(level_slope_and_mains_do_not_count),
		cmocka_unit_test(little_snr_is_lost_between_templates),
		cmocka_unit_test(a_fit_without_noise_gives_the_truth),
		cmocka_unit_test(alarm_rate_falls_as_a_gaussian_does),
	};
	int failed;

	series_settings(&settings);
	if (bank_create(&bank, &settings) < 0)
		return 1;
	failed = cmocka_run_group_tests(tests, NULL, NULL);
	bank_destroy(bank);
	return failed;
}
