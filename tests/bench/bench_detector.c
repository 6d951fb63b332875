/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 *   bench_detector           times of the bank and the fit, worth of the fringes
 *   bench_detector dump      numbers for tests/detector_outside.t, JSON
 *   bench_detector execute N rho of N windows, nothing else: for callgrind
 */
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>
#include "limbwatch/bank.h"
#include "../support/series_probe.h"

enum { W = DETECTOR_WINDOW };

static void print_array(const char *name, const float *x, size_t n)
{
	printf("\"%s\": [", name);
	for (size_t k = 0; k < n; k++)
		printf("%s%.9g", k ? ", " : "", (double)x[k]);
	printf("]");
}

/* Noise model with memory and a mains line, windows, rho: everything scipy needs to say the same by itself. */
static void dump(struct bank *bank, const struct detector_settings *settings)
{
	struct series_noise noise = { gsl_rng_alloc(gsl_rng_mt19937), 1, 2, 30, 0 };
	struct noise_model model = { .lines = 1, .line = { 0.0625 } };
	float window[W], rho[64];

	for (int k = 0; k < NOISE_LAGS; k++)
		model.covariance[k] = (k ? 0 : 1) + 4 * exp(-k / 30.0);
	if (bank_whiten(bank, &model) < 0)
		exit(1);
	printf("{\"rate\": %.17g, \"distance_m\": %.17g, \"speed_mps\": %.17g, \"wavelength_m\": %.17g, \"line\": %.17g,\n\"covariance\": [",
	       settings->rate, settings->curve.distance_m, settings->curve.speed_mps, settings->curve.passband.wavelength_m,
	       model.line[0]);
	for (int k = 0; k < W; k++)
		printf("%s%.17g", k ? ", " : "", k < NOISE_LAGS ? model.covariance[k] : 0);
	printf("],\n\"templates\": [");
	for (size_t k = 0; k < bank_templates(bank); k++) {
		const struct bank_template *t = bank_template(bank, k);

		printf("%s{\"kind\": \"%s\", \"scale\": %.17g, \"size\": %.17g, \"contact\": %.17g}", k ? ",\n" : "",
		       contact_kind_name(t->kind), t->scale, t->size, t->contact);
	}
	printf("],\n\"windows\": [");
	for (int k = 0; k < 4; k++) {
		struct series_event event = { k % 2 ? CONTACT_EMERSION : CONTACT_IMMERSION, k % 2 ? 54.2 : 201.7, 1.1, 0, 6 };

		memset(window, 0, sizeof(window));
		series_noise(&noise, window, W);
		if (k > 1)
			series_add_event(settings, &event, 0, window, W);
		bank_execute(bank, window, rho);
		printf("%s{", k ? ",\n" : "");
		print_array("x", window, W);
		printf(",\n");
		print_array("rho", rho, bank_templates(bank));
		printf("}");
	}
	printf("]}\n");
	gsl_rng_free(noise.rng);
}

static double seconds(void)
{
	struct timespec t;

	clock_gettime(CLOCK_PROCESS_CPUTIME_ID, &t);
	return (double)t.tv_sec + 1e-9 * (double)t.tv_nsec;
}

static double execute(const struct bank *bank, size_t windows)
{
	static float x[2 * W];
	struct series_noise noise = { gsl_rng_alloc(gsl_rng_mt19937), 1, 0, 1, 0 };
	float rho[64];
	double sum = 0;

	series_noise(&noise, x, 2 * W);
	for (size_t k = 0; k < windows; k++) {
		bank_execute(bank, x + k % W, rho);
		sum += (double)rho[k % bank_templates(bank)];
	}
	gsl_rng_free(noise.rng);
	return sum;
}

/* What one verdict costs and how much a point's, and a disc's, fringes are worth: mean of `fringe_gain`. */
static void measure_fits(struct bank *bank, const struct detector_settings *settings)
{
	static const double size[] = { 0, 1, 2 };
	struct series_noise noise = { gsl_rng_alloc(gsl_rng_mt19937), 1, 0, 1, 0 };
	enum { FITS = 60 };

	for (size_t s = 0; s < 3; s++) {
		double gain = 0, squares = 0, begin = seconds(), factor = 0;

		for (int k = 0; k < FITS; k++) {
			struct series_event event = { k % 2 ? CONTACT_EMERSION : CONTACT_IMMERSION, k % 2 ? 53.9 : 202.1, 1, size[s], 1 };
			struct bank_fit fit;
			float x[W] = { 0 };

			event.flux = 12 / series_unit_snr(settings, &event, NULL);
			series_add_event(settings, &event, 0, x, W);
			series_noise(&noise, x, W);
			if (!bank_fit(bank, x, event.kind, &fit))
				continue;
			gain += fit.fringe_gain / FITS;
			squares += fit.fringe_gain * fit.fringe_gain / FITS;
			/* And without noise: what is expected, as SNR^2 times a shape. */
			if (k < 2) {
				memset(x, 0, sizeof(x));
				event.flux *= 10;
				series_add_event(settings, &event, 0, x, W);
				if (bank_fit(bank, x, event.kind, &fit) && fit.fringe_gain > 0)
					factor = fit.rho / sqrt(fit.fringe_gain);
			}
		}
		printf("disc of %g Fresnel units, SNR 12: fringe gain %.1f +- %.1f (one event +- %.1f); a gain of 9 is expected at SNR "
		       "%.1f; %.1f ms a fit\n", size[s], gain, sqrt((squares - gain * gain) / FITS), sqrt(squares - gain * gain),
		       3 * factor, (seconds() - begin) * 1e3 / (FITS + 2));
	}
	gsl_rng_free(noise.rng);
}

int main(int argc, char **argv)
{
	struct detector_settings settings;
	struct noise_model model;
	struct bank *bank;
	double begin = seconds(), built, whitened, done;

	series_settings(&settings);
	if (argc > 1 && strcmp(argv[1], "dump") == 0) {         /* what a few lines of scipy can do exactly */
		settings.curve.passband.shape = PASSBAND_LINE;
		settings.curve.aperture_m = 0;
	}
	if (bank_create(&bank, &settings) < 0)
		return 1;
	built = seconds();
	if (argc > 1 && strcmp(argv[1], "dump") == 0) {
		dump(bank, &settings);
	} else if (argc > 2 && strcmp(argv[1], "execute") == 0) {
		execute(bank, (size_t)atol(argv[2]));
	} else {
		noise_assume(1, &model);
		bank_whiten(bank, &model);
		whitened = seconds();
		execute(bank, 200000);
		done = seconds();
		printf("%zu templates of %d samples: built in %.0f ms, whitened in %.1f ms, %.3f us per sample (%.1f G multiply-adds a "
		       "second)\n", bank_templates(bank), W, (built - begin) * 1e3, (whitened - built) * 1e3, (done - whitened) * 5,
		       200000.0 * W * (double)bank_templates(bank) / (done - whitened) * 1e-9);
		measure_fits(bank, &settings);
	}
	bank_destroy(bank);
	return 0;
}
