/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * Recovery of synthetic contacts by the detector alone, and false triggers in hours of noise.  SNR is that of the ideal matched
 * filter with the true parameters, mean and slope marginalised.  Fixed seeds.
 *
 *   bench_recovery [EVENTS [HOURS]]
 */
#include <math.h>
#include <pthread.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include "../support/series_probe.h"

enum { W = DETECTOR_WINDOW, LEAD = 12 * W, SPACING = 6 * W, CHUNK = 4096 };

struct tally { size_t recovered, fringes, other; double squares, sigma, bound, pulls; size_t inside; };

/* Sources come out and go behind in turns, with the same scale and, by symmetry, the same flux: the level needs no repair. */
static float *make_series(const struct detector_settings *settings, struct series_event *event, double *bound, size_t events,
                          double snr, size_t *length)
{
	struct series_noise noise = { .rng = gsl_rng_alloc(gsl_rng_mt19937), .white = 1 };
	float *x = calloc(*length = LEAD + (events + 2) * SPACING, sizeof(*x));

	if (!x || !noise.rng)
		abort();
	gsl_rng_set(noise.rng, 2031 + (unsigned long)snr);
	for (size_t k = 0; k < events; k++) {
		size_t begin = LEAD + k * SPACING;

		event[k] = (struct series_event){
			.kind = k % 2 ? CONTACT_IMMERSION : CONTACT_EMERSION, .flux = 1,
			.scale = k % 2 ? event[k - 1].scale : 0.8 * pow(1.25 / 0.8, gsl_rng_uniform(noise.rng)),
			.contact = (double)begin + SPACING * (0.4 + 0.2 * gsl_rng_uniform(noise.rng)),
		};
		event[k].flux = snr / series_unit_snr(settings, &event[k], &bound[k]);
		bound[k] /= event[k].flux;
		series_add_event(settings, &event[k], (double)begin, x + begin, SPACING);
	}
	series_noise(&noise, x, *length);
	gsl_rng_free(noise.rng);
	return x;
}

static void note(struct tally *t, const struct candidate *c, const struct series_event *event, const double *bound,
                 size_t events)
{
	for (size_t k = 0; k < events; k++) {
		double error = c->position - event[k].contact;

		if (c->kind != event[k].kind || fabs(error) > 0.1 * SPACING)
			continue;
		t->recovered++;
		t->fringes += c->verdict == VERDICT_FRINGES;
		t->squares += error * error;
		t->sigma += c->position_sigma;
		t->bound += bound[k] * bound[k];
		t->inside += fabs(error) < c->position_sigma;
		return;
	}
	t->other++;
}

static void recover(const struct detector_settings *settings, size_t events, double snr, bool vigil)
{
	struct series_event *event = calloc(events, sizeof(*event));
	double *bound = calloc(events, sizeof(*bound)), ms = 1e3 / settings->rate;
	struct detector *detector;
	struct candidate found[16];
	struct tally t = { 0 };
	size_t length, n;
	float *x = make_series(settings, event, bound, events, snr, &length);

	if (detector_create(&detector, settings) < 0)
		exit(1);
	for (size_t at = 0; at < length; at += SPACING / 2) {
		if (vigil && at >= LEAD) {
			size_t k = (at - LEAD) / SPACING;
			double miss = 640 * sin(12.9898 * (double)k);     /* 0.9 sigma rms */

			for (int kind = 0; kind < CONTACT_KINDS; kind++)
				detector_expect(detector, (enum contact_kind)kind,
				                k < events ? event[k].contact + miss : 0,
				                k < events && kind == (int)event[k].kind ? 731 : 0);
		}
		n = detector_execute(detector, x + at, SPACING / 2, at, found, 16);
		for (size_t k = 0; k < n; k++)
			note(&t, &found[k], event, bound, events);
	}
	n = detector_finish(detector, found, 16);
	for (size_t k = 0; k < n; k++)
		note(&t, &found[k], event, bound, events);
	printf("%s, SNR %2g: %zu of %zu recovered (%.1f%%), %zu with fringes confirmed, %zu other triggers; time error RMS %.3f ms, "
	       "mean position_sigma %.3f ms, Cramer-Rao %.3f ms, RMS / bound %.3f, within 1 sigma %.0f%%\n",
	       vigil ? "in a vigil     " : "always watching", snr, t.recovered, events, 100.0 * (double)t.recovered / (double)events,
	       t.fringes, t.other, ms * sqrt(t.squares / (double)t.recovered), ms * t.sigma / (double)t.recovered,
	       ms * sqrt(t.bound / (double)t.recovered), sqrt(t.squares / t.bound), 100.0 * (double)t.inside / (double)t.recovered);
	fflush(stdout);
	detector_destroy(detector);
	free(x);
	free(event);
	free(bound);
}

struct watch { struct detector_settings settings; double hours, red; unsigned long seed; size_t triggers; double threshold; };

static void *watch_noise(void *argument)
{
	struct watch *w = argument;
	struct series_noise noise = { .rng = gsl_rng_alloc(gsl_rng_mt19937), .white = 1, .red = w->red, .memory = 40 };
	struct detector *detector;
	struct candidate found[16];
	float x[CHUNK];
	size_t length = (size_t)(w->hours * 3600 * w->settings.rate);

	if (detector_create(&detector, &w->settings) < 0)
		exit(1);
	gsl_rng_set(noise.rng, w->seed);
	for (size_t at = 0; at < length; at += CHUNK) {
		memset(x, 0, sizeof(x));
		series_noise(&noise, x, CHUNK);
		w->triggers += detector_execute(detector, x, CHUNK, at, found, 16);
	}
	w->triggers += detector_finish(detector, found, 16);
	w->threshold = detector_threshold(detector);
	detector_destroy(detector);
	gsl_rng_free(noise.rng);
	return NULL;
}

/* White and red side by side, each with its own thread. */
static void count_false_triggers(const struct detector_settings *settings, double hours, double per_night)
{
	struct watch watch[2];
	pthread_t thread[2];

	for (int k = 0; k < 2; k++) {
		watch[k] = (struct watch){ .settings = *settings, .hours = hours, .red = k ? 1 : 0, .seed = 77 + (unsigned long)k };
		watch[k].settings.false_alarms_per_night = per_night;
		if (pthread_create(&thread[k], NULL, watch_noise, &watch[k]))
			exit(1);
	}
	for (int k = 0; k < 2; k++) {
		pthread_join(thread[k], NULL);
		printf("%g h of %s noise, %g a night set (threshold %.2f): %zu false triggers, %.1f expected\n", hours,
		       k ? "red  " : "white", per_night, watch[k].threshold, watch[k].triggers, per_night * hours / 10);
		fflush(stdout);
	}
}

int main(int argc, char **argv)
{
	size_t events = argc > 1 ? (size_t)atoi(argv[1]) : 200;
	double hours = argc > 2 ? atof(argv[2]) : 10;
	struct detector_settings settings;

	series_settings(&settings);
	printf("T_F %.2f ms, %.1f samples per second\n", 16e3 / settings.rate, settings.rate);
	for (int vigil = 0; vigil < 2; vigil++)
		for (int snr = 8; snr <= 15; snr += 7)
			recover(&settings, events, snr, vigil);
	if (!(hours > 0))
		return 0;
	count_false_triggers(&settings, hours / 20, 2000);      /* the calibration, with numbers that count */
	count_false_triggers(&settings, hours, settings.false_alarms_per_night);
	return 0;
}
