/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * UTC of a sample from the sampled pulse: RMS over 30 seeds, one line per case; then what the pulse detector costs per frame
 * and the clock per solution.  Beside each RMS stands the floor: a straight line fitted to as many pulses of that jitter and noise,
 * which nothing unbiased can beat when the card is steady (a drifting card leaves less).
 */
#include <math.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>
#include <gsl/gsl_randist.h>
#include <gsl/gsl_rng.h>
#include "limbwatch/pulse.h"
#include "../support/clock_probe.h"

enum { SEEDS = 30, SECONDS = 120, COST_SECONDS = 60, MOST = 8 };

static const double jitter_s = 50e-9;

struct bench_case {
	const char *name;
	struct { const char *setting; double value; } with[MOST];
};

static const struct bench_case cases[] = {
	{ "DC, clean, steady card", { { NULL, 0 } } },
	{ "DC, inverted, clean", { { "pulse_polarity", 1 } } },
	{ "AC 5 Hz, clean", { { "pulse_ac_hz", 5 } } },
	{ "AC 20 Hz, inverted, clean", { { "pulse_ac_hz", 20 }, { "pulse_polarity", 1 } } },
	{ "DC, +100 ppm", { { "clock_error_ppm", 100 } } },
	{ "AC 5 Hz, -100 ppm", { { "pulse_ac_hz", 5 }, { "clock_error_ppm", -100 } } },
	{ "DC, noise 1% of the pulse", { { "pulse_noise_rms", 0.005 } } },
	{ "AC 5 Hz, inverted, noise 1%", { { "pulse_ac_hz", 5 }, { "pulse_polarity", 1 }, { "pulse_noise_rms", 0.005 } } },
	{ "DC, noise 3%", { { "pulse_noise_rms", 0.015 } } },
	{ "DC, 5% of full scale, 16-bit", { { "pulse_height", 0.05 }, { "pulse_noise_rms", 2e-5 }, { "format", 0 } } },
	{ "DC, 10% missing, 5% spurious", { { "pulse_missing", 0.1 }, { "pulse_spurious", 0.05 } } },
	{ "DC, drift 1 ppm in 10 minutes", { { "clock_error_ppm", 20 }, { "clock_drift_ppm_per_hour", 6 } } },
	{ "DC, random walk 1 ppm in an hour", { { "clock_wander", 1 } } },
	{ "DC, 8 kHz", { { "rate_hz", 8000 } } },
	{ "DC, 192 kHz", { { "rate_hz", 192000 } } },
};

static double now_s(void)
{
	struct timespec t;

	clock_gettime(CLOCK_PROCESS_CPUTIME_ID, &t);
	return (double)t.tv_sec + 1e-9 * (double)t.tv_nsec;
}

static double with(const struct bench_case *c, const char *setting, double fallback)
{
	for (int k = 0; k < MOST && c->with[k].setting; k++)
		if (!strcmp(c->with[k].setting, setting))
			return c->with[k].value;
	return fallback;
}

/*
 * Line through n points evenly spread: variance at u (in -1/2 ... 1/2 of the span) is s^2 (1 + 12 u^2) / n; averaged over |u| < 0.3 it
 * is s^2 1.36 / n.  One edge in white noise: Cramer-Rao, sigma / height / sqrt(sum of the squared slope), which for a band-limited
 * step of cut-off f is sqrt(2 f) per frame, f = 0.45.
 */
static double floor_s(const struct bench_case *c)
{
	double rate = with(c, "rate_hz", 48000), noise = with(c, "pulse_noise_rms", 1e-4) / with(c, "pulse_height", 0.5);
	double edge = noise / sqrt(2 * 0.45) / rate, n = SECONDS * (1 - with(c, "pulse_missing", 0));

	return hypot(jitter_s, edge) * sqrt(1.36 / n);
}

static void run_case(const struct bench_case *c)
{
	double rms;

	clock_probe_reset();
	for (int k = 0; k < MOST && c->with[k].setting; k++)
		clock_probe_set(c->with[k].setting, c->with[k].value);
	rms = clock_probe_rms(SEEDS, with(c, "rate_hz", 0) > 100000 ? SECONDS / 2 : SECONDS);
	printf("%-34s %8.4f us RMS of UTC over %d seeds (straight-line floor %.4f)\n", c->name, rms * 1e6, SEEDS,
	       floor_s(c) * 1e6 * (with(c, "rate_hz", 0) > 100000 ? M_SQRT2 : 1));
	fflush(stdout);
}

static void detector_cost(void)
{
	const struct pulse_settings settings = { .rate = 48000, .width_s = 0.1 };
	size_t frames = COST_SECONDS * 48000, edges = 0;
	double *x = malloc(frames * sizeof(*x)), t;
	gsl_rng *rng = gsl_rng_alloc(gsl_rng_mt19937);
	struct pulse_detector *detector;
	struct pulse_edge edge[64];

	if (!x || !rng || pulse_detector_create(&detector, &settings) < 0)
		exit(1);
	gsl_rng_set(rng, 1);
	for (size_t k = 0; k < frames; k++)
		x[k] = (k % 48000 < 4800 ? 0.5 : 0) + gsl_ran_gaussian_ziggurat(rng, 1e-3);
	t = now_s();
	for (size_t k = 0; k < frames; k += 4096)
		edges += pulse_detector_execute(detector, x + k, frames - k < 4096 ? frames - k : 4096, k, edge, 64);
	t = now_s() - t;
	printf("pulse detector: %.2f ns a frame, %.0f x real time at 48 kHz (%zu edges)\n", t / (double)frames * 1e9,
	       COST_SECONDS / t, edges);
	pulse_detector_destroy(detector);
	gsl_rng_free(rng);
	free(x);
}

static void solve_cost(int pulses)
{
	const struct frame_clock_settings settings = { .rate = 48000, .rate_tolerance = 200e-6, .pulse_sigma_s = jitter_s };
	gsl_rng *rng = gsl_rng_alloc(gsl_rng_mt19937);
	struct frame_clock *clock;
	double t;
	size_t accepted;

	if (!rng || frame_clock_create(&clock, &settings) < 0)
		exit(1);
	gsl_rng_set(rng, 1);
	frame_clock_add_label(clock, 0, (struct tai){ 0 }, 0.05, false, TIME_HOST);
	for (int k = 1; k <= pulses; k++)
		frame_clock_add_pulse(clock, 48000 * (k * (1 + 30e-6) + gsl_ran_gaussian(rng, jitter_s)), 0.001);
	t = now_s();
	accepted = frame_clock_solve(clock);
	t = now_s() - t;
	printf("solving the clock after %6d pulses: %8.3f ms (%zu accepted)\n", pulses, t * 1e3, accepted);
	frame_clock_destroy(clock);
	gsl_rng_free(rng);
}

int main(void)
{
	for (size_t k = 0; k < sizeof(cases) / sizeof(*cases); k++)
		run_case(&cases[k]);
	detector_cost();
	solve_cost(60);
	solve_cost(3600);
	solve_cost(30000);
	solve_cost(86400);
	return 0;
}
