/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <cmocka.h>
#include "limbwatch/log.h"
#include "support/series_probe.h"

enum { W = DETECTOR_WINDOW, MOST = 64 };

static struct detector_settings settings;
static struct candidate found[MOST];

static float *series(size_t n, unsigned long seed, double white)
{
	struct series_noise noise = { .rng = gsl_rng_alloc(gsl_rng_mt19937), .white = white };
	float *x = calloc(n, sizeof(*x));

	assert_non_null(x);
	gsl_rng_set(noise.rng, seed);
	series_noise(&noise, x, n);
	gsl_rng_free(noise.rng);
	return x;
}

/* Adds an event whose ideal matched filter would have that SNR in white noise of rms 1; gives its bound, samples. */
static struct series_event add(float *x, size_t n, enum contact_kind kind, double contact, double snr, double *bound)
{
	struct series_event event = { kind, contact, 1, 0, 1 };
	double unit;

	event.flux = snr / series_unit_snr(&settings, &event, &unit);
	if (bound)
		*bound = unit / event.flux;
	series_add_event(&settings, &event, 0, x, n);
	return event;
}

static size_t run(const struct detector_settings *with, const float *x, size_t n, size_t piece, size_t max)
{
	struct detector *detector;
	size_t count = 0, more;

	assert_int_equal(detector_create(&detector, with), 0);
	for (size_t at = 0; at < n; at += piece)
		count += detector_execute(detector, x + at, at + piece < n ? piece : n - at, at, found + count,
		                          max < MOST - count ? max : MOST - count);
	while ((more = detector_finish(detector, found + count, max < MOST - count ? max : MOST - count)) > 0)
		count += more;
	detector_destroy(detector);
	return count;
}

static size_t run_whole(float *x, size_t n)
{
	size_t count = run(&settings, x, n, 1000, MOST);

	free(x);
	return count;
}

/* One detector for several series, far apart in their numbers: building it takes longest.  Positions from the series' beginning. */
static size_t run_next(struct detector *detector, float *x, size_t n)
{
	static uint64_t index;
	size_t count;

	index += 1000000;
	count = detector_execute(detector, x, n, index, found, MOST);
	count += detector_finish(detector, found + count, MOST - count);
	for (size_t k = 0; k < count; k++)
		found[k].position -= (double)index;
	free(x);
	return count;
}

static void contacts_are_found_within_their_uncertainty(void **state)
{
	enum { EVENTS = 24, SPACING = 1400, LEAD = 3000, LENGTH = LEAD + SPACING * EVENTS };
	float *x = series(LENGTH, 1, 1);
	struct series_event event[EVENTS];
	double squares = 0, bounds = 0, pulls = 0;

	(void)state;
	for (int k = 0; k < EVENTS; k++) {
		double bound;

		event[k] = add(x, LENGTH, k % 2 ? CONTACT_IMMERSION : CONTACT_EMERSION, LEAD + SPACING * (k + 0.5) + 0.37 * k, 12,
		               &bound);
		if (k % 2)              /* uncovered to begin with: its level comes off with the next source's */
			for (int j = 0; j < LENGTH; j++)
				x[j] -= (float)event[k].flux;
		bounds += bound * bound;
	}
	assert_int_equal(run_whole(x, LENGTH), EVENTS);
	for (int k = 0; k < EVENTS; k++) {
		double error = found[k].position - event[k].contact;

		assert_int_equal(found[k].kind, event[k].kind);
		assert_true(fabs(error) < 5 * found[k].position_sigma);
		assert_true(fabs(found[k].snr - 12) < 4.5);
		assert_true(fabs(found[k].flux / event[k].flux - 1) < 0.5);
		assert_false(found[k].marked);
		squares += error * error;
		pulls += error * error / (found[k].position_sigma * found[k].position_sigma);
	}
	/* Chi squared of 24 has a standard deviation of sqrt(48): three of them. */
	print_message("seed 1: RMS / bound %.3f, RMS pull %.3f\n", sqrt(squares / bounds), sqrt(pulls / EVENTS));
	assert_true(pulls < EVENTS + 3 * sqrt(2 * EVENTS) && pulls > EVENTS - 3 * sqrt(2 * EVENTS));
	assert_true(squares < 1.2 * bounds * (1 + 3 * sqrt(2.0 / EVENTS)));
}

static void a_very_strong_contact_is_one_with_its_fringes(void **state)
{
	static const double snr[] = { 30, 300, 3000 };
	struct detector *detector;

	(void)state;
	assert_int_equal(detector_create(&detector, &settings), 0);
	for (size_t k = 0; k < 6; k++) {
		float *x = series(9000, 2 + k, 1);
		struct series_event event = add(x, 9000, k % 2 ? CONTACT_EMERSION : CONTACT_IMMERSION, 5000.3, snr[k / 2], NULL);

		assert_int_equal(run_next(detector, x, 9000), 1);
		assert_int_equal(found[0].kind, event.kind);
		assert_int_equal(found[0].verdict, VERDICT_FRINGES);
		assert_true(fabs(found[0].position - 5000.3) < 5 * found[0].position_sigma + 0.005);
		assert_true(fabs(found[0].scale - 1) < 5 * found[0].scale_sigma + 0.001);
	}
	detector_destroy(detector);
}

static void contacts_more_than_a_window_apart_are_two(void **state)
{
	static const double apart[] = { 1.1, 1.3, 1.7, 2.5 };
	struct detector *detector;

	(void)state;
	assert_int_equal(detector_create(&detector, &settings), 0);
	for (size_t k = 0; k < 8; k++) {
		float *x = series(9000, 10 + k, 1);
		double second = 5000 + apart[k / 2] * W;
		enum contact_kind kind = k % 2 ? CONTACT_EMERSION : CONTACT_IMMERSION;

		add(x, 9000, kind, 5000, 15, NULL);
		add(x, 9000, kind, second, 60, NULL);
		assert_int_equal(run_next(detector, x, 9000), 2);
		assert_true(fabs(found[0].position - 5000) < 5 * found[0].position_sigma);
		assert_true(fabs(found[1].position - second) < 5 * found[1].position_sigma);
	}
	detector_destroy(detector);
}

static void a_short_clip_is_enough(void **state)
{
	static const size_t length[] = { 3 * W, 5 * W, 8 * W, 12 * W };

	(void)state;
	for (size_t k = 0; k < 8; k++) {
		size_t n = length[k / 2];
		float *x = series(n, 30 + k, 1);
		double contact = 0.5 * (double)n + 0.2;

		add(x, n, k % 2 ? CONTACT_EMERSION : CONTACT_IMMERSION, contact, 14, NULL);
		assert_int_equal(run_whole(x, n), 1);
		assert_true(fabs(found[0].position - contact) < 5 * found[0].position_sigma);
		assert_true(found[0].noise_prior);
	}
}

static void what_is_no_signal_triggers_nothing(void **state)
{
	static const float level[] = { 0, 0.25f, 1, -1, 1e30f, INFINITY, -INFINITY, NAN };

	(void)state;
	for (size_t k = 0; k < sizeof(level) / sizeof(*level); k++) {
		float *x = calloc(8000, sizeof(*x));

		for (int j = 0; j < 8000; j++)
			x[j] = level[k];
		assert_int_equal(run_whole(x, 8000), 0);
	}
	for (size_t k = 0; k < 2; k++) {
		float *x = series(8000, 40, 1);

		for (int j = 3000; j < 8000; j += 700)
			x[j] = k ? 1e30f : -INFINITY;
		assert_int_equal(run_whole(x, 8000), 0);
	}
}

static void clicks_are_rejected(void **state)
{
	float *x = series(12000, 50, 1);

	(void)state;
	for (int j = 3000, k = 0; j < 12000; j += 900, k++)
		for (int i = 0; i < 1 + k % 3; i++)
			x[j + i] += (k % 2 ? -1.f : 1.f) * (float)(10 + 20 * k);
	assert_int_equal(run_whole(x, 12000), 0);
}

static void a_gap_neither_hides_nor_misplaces_a_contact(void **state)
{
	size_t seen_clear = 0, clear = 0;
	struct detector *detector;

	(void)state;
	assert_int_equal(detector_create(&detector, &settings), 0);
	for (int k = 0; k < 36; k++) {
		float *x = series(9000, 60 + (unsigned long)k, 1);
		enum contact_kind kind = k % 2 ? CONTACT_EMERSION : CONTACT_IMMERSION;
		int gap = 5000 - 3 * W / 2 + (k / 2) * W / 6;
		double first = 5000 - (kind == CONTACT_EMERSION ? 0.21 : 0.79) * W;
		bool whole = gap + 20 < first - 2 || gap > first + W + 2;
		size_t n;

		add(x, 9000, kind, 5000, 40, NULL);
		for (int j = gap; j < gap + 20; j++)
			x[j] = NAN;
		n = run_next(detector, x, 9000);
		assert_true(n <= 1);
		if (n)
			assert_true(fabs(found[0].position - 5000) < 5 * found[0].position_sigma);
		clear += whole;
		seen_clear += whole && n == 1;
	}
	assert_true(clear > 15);
	assert_int_equal(seen_clear, clear);
	detector_destroy(detector);
}

static void a_jump_in_the_numbers_starts_anew(void **state)
{
	float *x = series(9000, 70, 1);
	struct detector *detector;
	size_t n;

	(void)state;
	add(x, 9000, CONTACT_EMERSION, 5000.5, 20, NULL);
	assert_int_equal(detector_create(&detector, &settings), 0);
	n = detector_execute(detector, x, 4000, 0, found, MOST);
	n += detector_execute(detector, x + 4100, 4900, 1000000, found, MOST);
	n += detector_finish(detector, found + n, MOST);
	assert_int_equal(n, 1);
	assert_true(fabs(found[0].position - 1000900.5) < 5 * found[0].position_sigma);
	detector_destroy(detector);
	free(x);
}

/* A step of the amplifier, dumped, perhaps through a one-pole high-pass of an AC-coupled card. */
static void a_relay_is_step_like(void **state)
{
	(void)state;
	for (int k = 0; k < 8; k++) {
		struct detector_settings with = settings;
		float *x = series(9000, 80 + (unsigned long)k, 1);
		double leak, level = 0;

		with.curve.high_pass_hz = k < 4 ? 0 : 3;
		leak = 1 - exp(-2 * M_PI * with.curve.high_pass_hz / with.rate);
		for (int j = 5000; j < 9000; j++) {
			double step = 4 - level;

			x[j] += (float)((k % 2 ? 1 : -1) * step);
			level += leak * step;
		}
		assert_int_equal(run(&with, x, 9000, 9000, MOST), 1);
		assert_int_equal(found[0].verdict, VERDICT_STEP);
		assert_int_equal(found[0].kind, k % 2 ? CONTACT_EMERSION : CONTACT_IMMERSION);
		free(x);
	}
}

static void noise_that_grows_is_learned(void **state)
{
	enum { BEFORE = 20000, LENGTH = 60000 };
	float *x = series(LENGTH, 90, 1);
	struct detector *detector;
	size_t n;

	(void)state;
	for (int j = BEFORE; j < LENGTH; j++)
		x[j] *= 5;
	add(x, LENGTH, CONTACT_EMERSION, 55000, 60, NULL);      /* 12 in the noise that is there */
	assert_int_equal(detector_create(&detector, &settings), 0);
	n = detector_execute(detector, x, BEFORE, 0, found, MOST);
	assert_int_equal(n, 0);
	assert_true(fabs(detector_noise(detector) * 4 - 1) < 0.15);     /* white: 16 samples of a T_F */
	n = detector_execute(detector, x + BEFORE, LENGTH - BEFORE, BEFORE, found, MOST);
	n += detector_finish(detector, found + n, MOST - n);
	assert_true(fabs(detector_noise(detector) * 4 / 5 - 1) < 0.15);
	assert_int_equal(n, 1);
	assert_true(fabs(found[0].position - 55000) < 5 * found[0].position_sigma);
	detector_destroy(detector);
	free(x);
}

static void a_receiver_switched_on_late_is_heard(void **state)
{
	float *x = series(20000, 100, 1);

	(void)state;
	add(x, 20000, CONTACT_IMMERSION, 15000, 15, NULL);
	for (int j = 0; j < 9000; j++)
		x[j] = 0.5f;
	assert_int_equal(run_whole(x, 20000), 1);
	assert_true(fabs(found[0].position - 15000) < 5 * found[0].position_sigma);
}

static void calls_in_pieces_give_the_same(void **state)
{
	float *x = series(15000, 110, 1);
	struct candidate whole[MOST];
	size_t n;

	(void)state;
	for (int k = 0; k < 4; k++)
		add(x, 15000, CONTACT_EMERSION, 4000 + 2500 * k, 20, NULL);
	n = run(&settings, x, 15000, 15000, MOST);
	assert_int_equal(n, 4);
	memcpy(whole, found, sizeof(whole));
	assert_int_equal(run(&settings, x, 15000, 77, 1), 4);
	for (size_t k = 0; k < n; k++)
		assert_true(found[k].position == whole[k].position && found[k].snr == whole[k].snr);
	free(x);
}

static void a_contact_is_given_within_the_latency(void **state)
{
	float *x = series(12000, 120, 1);
	struct detector *detector;
	size_t n = 0, at;

	(void)state;
	add(x, 12000, CONTACT_EMERSION, 6000, 20, NULL);
	assert_int_equal(detector_create(&detector, &settings), 0);
	for (at = 0; n == 0 && at < 12000; at++)
		n = detector_execute(detector, x + at, 1, at, found, MOST);
	assert_int_equal(n, 1);
	assert_true((double)at - found[0].position <= detector_latency(detector) + 3 * found[0].position_sigma);
	detector_destroy(detector);
	free(x);
}

static void a_vigil_lowers_the_threshold_where_the_contact_is_expected(void **state)
{
	struct detector *detector;
	struct detector_settings fixed = settings;
	float *x = series(12000, 130, 1);
	size_t outside, n;

	(void)state;
	add(x, 12000, CONTACT_EMERSION, 8000, 5, NULL);
	outside = run(&settings, x, 12000, 1000, MOST);
	assert_int_equal(outside, 0);
	assert_int_equal(detector_create(&detector, &settings), 0);
	detector_expect(detector, CONTACT_EMERSION, 8100, 300);
	n = detector_execute(detector, x, 12000, 0, found, MOST);
	assert_int_equal(n, 1);
	assert_true(found[0].threshold < detector_threshold(detector));
	assert_true(fabs(found[0].position - 8000) < 5 * found[0].position_sigma);
	detector_destroy(detector);
	assert_int_equal(detector_create(&detector, &settings), 0);
	detector_expect(detector, CONTACT_EMERSION, 4000, 300);         /* 13 sigma away */
	assert_int_equal(detector_execute(detector, x, 12000, 0, found, MOST), 0);
	detector_destroy(detector);
	fixed.threshold = 4.5;
	assert_true(run(&fixed, x, 12000, 1000, MOST) >= 1);
	free(x);
}

static void false_alarms_are_as_many_as_set(void **state)
{
	enum { LENGTH = 1 << 19, PIECE = 1 << 14 };
	struct detector_settings with = settings;
	double expected = 100;

	(void)state;
	with.false_alarms_per_night = expected * 36000 * with.rate / LENGTH;
	for (int red = 0; red < 2; red++) {
		struct series_noise noise = { gsl_rng_alloc(gsl_rng_mt19937), 1, red, 40, 0 };
		struct detector *detector;
		float *x = malloc(PIECE * sizeof(*x));
		size_t n = 0;

		gsl_rng_set(noise.rng, 140);
		assert_int_equal(detector_create(&detector, &with), 0);
		for (size_t at = 0; at < LENGTH; at += PIECE) {
			memset(x, 0, PIECE * sizeof(*x));
			series_noise(&noise, x, PIECE);
			n += detector_execute(detector, x, PIECE, at, found, MOST);
		}
		print_message("seed 140, %s noise, threshold %.2f: %zu, %g set\n", red ? "red" : "white",
		              detector_threshold(detector), n, expected);
		/* Within 1.3, and two standard deviations of a Poisson count more. */
		assert_true((double)n < 1.3 * expected + 2 * sqrt(1.3 * expected));
		assert_true((double)n > expected / 1.6 - 2 * sqrt(expected / 1.6));
		detector_destroy(detector);
		gsl_rng_free(noise.rng);
		free(x);
	}
}

static void swallow(void *context, enum log_level level, const char *sentence)
{
	(void)level;
	snprintf(context, 256, "%s", sentence);
}

static void settings_out_of_range_are_said(void **state)
{
	char said[256];
	struct detector *detector = NULL;

	(void)state;
	log_set_sink(swallow, said);
	for (int k = 0; k < 8; k++) {
		struct detector_settings bad = settings;

		if (k == 0) bad.rate = 0;
		if (k == 1) bad.rate = NAN;
		if (k == 2) bad.scale_min = 2;
		if (k == 3) bad.kind[0] = bad.kind[1] = false;
		if (k == 4) bad.false_alarms_per_night = 0;
		if (k == 5) bad.threshold = -1;
		if (k == 6) bad.scintillation = NAN;
		if (k == 7) bad.curve.speed_mps = -5;
		said[0] = 0;
		assert_int_equal(detector_create(&detector, &bad), -EINVAL);
		assert_null(detector);
		assert_true(strlen(said) > 10);
	}
	log_set_sink(NULL, NULL);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(contacts_are_found_within_their_uncertainty),
		cmocka_unit_test(a_very_strong_contact_is_one_with_its_fringes),
		cmocka_unit_test(contacts_more_than_a_window_apart_are_two),
		cmocka_unit_test(a_short_clip_is_enough),
		cmocka_unit_test(what_is_no_signal_triggers_nothing),
		cmocka_unit_test(clicks_are_rejected),
		cmocka_unit_test(a_gap_neither_hides_nor_misplaces_a_contact),
		cmocka_unit_test(a_jump_in_the_numbers_starts_anew),
		cmocka_unit_test(a_relay_is_step_like),
		cmocka_unit_test(noise_that_grows_is_learned),
		cmocka_unit_test(a_receiver_switched_on_late_is_heard),
		cmocka_unit_test(calls_in_pieces_give_the_same),
		cmocka_unit_test(a_contact_is_given_within_the_latency),
		cmocka_unit_test(a_vigil_lowers_the_threshold_where_the_contact_is_expected),
		cmocka_unit_test(false_alarms_are_as_many_as_set),
		cmocka_unit_test(settings_out_of_range_are_said),
	};

	series_settings(&settings);
	return cmocka_run_group_tests(tests, NULL, NULL);
}
