/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * Edges against the truth of steps that a linear-phase filter has limited to 0.45 of the sample rate: 1/2 + Si(0.9 pi u) / pi
 * (Abramowitz & Stegun 5.2.1 for Si; GSL computes it), which passes half way exactly at its instant.
 */
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <cmocka.h>
#include <gsl/gsl_randist.h>
#include <gsl/gsl_rng.h>
#include <gsl/gsl_sf_expint.h>
#include "limbwatch/pulse.h"

enum { SEED = 4711, MOST = 256 };

struct scene {
	double rate, seconds, width_s, height, ac_hz, noise, hum, lsb;
	double first_s, period_s;       /* of the leading edges; a period of a true second is not quite `rate` frames */
	int polarity;                   /* of the signal */
};

static const struct scene usual = {
	.rate = 48000, .seconds = 20, .width_s = 0.1, .height = 0.5, .first_s = 0.7, .period_s = 1.0000371, .polarity = 1,
};

/*
 * The ripple goes into x, the bare step into `jump`, to be summed up.  Farther than 400 frames out the ripple is below 4e-4: a
 * taper ends it.
 */
static void put_step(double *x, double *jump, size_t n, double at, double height)
{
	for (double k = fmax(0, ceil(at - 400)); k < fmin((double)n, at + 400); k++) {
		double u = k - at, ripple = 0.5 + gsl_sf_Si(0.9 * M_PI * u) / M_PI - (u > 0);

		x[(size_t)k] += height * ripple * pow(cos(M_PI_2 * u / 400), 2);
	}
	if (at < (double)n - 1)
		jump[at < 0 ? 0 : (size_t)at + 1] += height;
}

static double leading(const struct scene *s, int k)
{
	return (s->first_s + k * s->period_s) * s->rate;
}

static double *play(const struct scene *s, size_t *count)
{
	size_t n = (size_t)(s->rate * s->seconds);
	double *x = calloc(n, sizeof(*x)), *jump = calloc(n, sizeof(*jump));
	double level = 0, slow = 0, pole = exp(-2 * M_PI * s->ac_hz / s->rate);
	gsl_rng *rng = gsl_rng_alloc(gsl_rng_mt19937);

	assert_true(x && jump && rng);
	gsl_rng_set(rng, SEED);
	for (int k = 0; s->height > 0 && leading(s, k) < (double)n; k++) {
		put_step(x, jump, n, leading(s, k), s->polarity * s->height);
		put_step(x, jump, n, leading(s, k) + s->width_s * s->period_s * s->rate, -s->polarity * s->height);
	}
	for (size_t k = 0; k < n; k++) {
		level += jump[k];
		x[k] += level;
		if (s->ac_hz > 0) {
			slow = pole * slow + (1 - pole) * x[k];
			x[k] -= slow;
		}
		x[k] += gsl_ran_gaussian_ziggurat(rng, s->noise) + s->hum * sin(2 * M_PI * 50 * (double)k / s->rate);
		if (s->lsb > 0)
			x[k] = rint(x[k] / s->lsb) * s->lsb;
	}
	gsl_rng_free(rng);
	free(jump);
	*count = n;
	return x;
}

static struct pulse_detector *make(double rate, double width_s, int polarity)
{
	const struct pulse_settings settings = { .rate = rate, .width_s = width_s, .polarity = polarity };
	struct pulse_detector *d;

	assert_int_equal(pulse_detector_create(&d, &settings), 0);
	return d;
}

/* Samples [from, to) in blocks. */
static size_t feed(struct pulse_detector *d, const double *x, size_t from, size_t to, size_t block, struct pulse_edge *out)
{
	size_t given = 0;

	for (size_t k = from; k < to; k += block)
		given += pulse_detector_execute(d, x + k, to - k < block ? to - k : block, k, out + given, MOST - given);
	return given;
}

static size_t find(const struct scene *s, double width_s, int polarity, struct pulse_edge *out)
{
	struct pulse_detector *d = make(s->rate, width_s, polarity);
	size_t n, given;
	double *x = play(s, &n);

	given = feed(d, x, 0, n, 1024, out);
	given += pulse_detector_finish(d, out + given, MOST - given);
	pulse_detector_destroy(d);
	free(x);
	return given;
}

struct score { size_t edges; double bias, rms, sigma; };     /* frames */

/* Every edge must be a leading one; the first `skip` are left out of the numbers. */
static struct score score(const struct scene *s, double width_s, int polarity, size_t skip)
{
	struct pulse_edge edge[MOST];
	struct score r = { .edges = find(s, width_s, polarity, edge) };
	double n = (double)(r.edges - skip);

	assert_true(r.edges > skip);
	for (size_t k = skip; k < r.edges; k++) {
		double error = edge[k].frame - leading(s, (int)rint((edge[k].frame / s->rate - s->first_s) / s->period_s));

		if (!(fabs(error) < 0.5))
			fail_msg("edge at frame %.3f is %.3f frames from a leading one", edge[k].frame, error);
		r.bias += error / n;
		r.rms += error * error / n;
		r.sigma += edge[k].sigma_frames * edge[k].sigma_frames / n;
	}
	r.rms = sqrt(r.rms);
	r.sigma = sqrt(r.sigma);
	return r;
}

static void an_edge_is_found_to_a_few_nanoseconds(void **state)
{
	static const double rates[] = { 8000, 44100, 48000, 96000, 192000 };

	(void)state;
	for (size_t k = 0; k < sizeof(rates) / sizeof(*rates); k++) {
		struct scene s = usual;
		struct score r;

		s.rate = rates[k];
		s.seconds = 12;
		r = score(&s, 0.1, 0, 0);
		print_message("# %6.0f Hz: bias %.2e, rms %.2e frames (%.2f ns)\n", s.rate, r.bias, r.rms, r.rms / s.rate * 1e9);
		assert_int_equal(r.edges, 12);
		assert_true(r.rms < 3e-4);
	}
}

/* Half the sag of a one-pole high-pass within the frames where the level is taken must not move the instant. */
static void ac_coupling_does_not_move_an_edge(void **state)
{
	static const double corners[] = { 1, 5, 10, 20 };

	(void)state;
	for (size_t k = 0; k < 2 * sizeof(corners) / sizeof(*corners); k++) {
		struct scene s = usual;
		struct score r;

		s.ac_hz = corners[k / 2];
		s.polarity = k & 1 ? -1 : 1;
		r = score(&s, 0.1, 0, 0);
		print_message("# AC %4.1f Hz, polarity %+d: bias %.2e, rms %.2e frames (%.1f ns)\n", s.ac_hz, s.polarity, r.bias, r.rms,
		              r.rms / s.rate * 1e9);
		assert_int_equal(r.edges, 20);
		assert_true(r.rms < 2e-3);
		s.rate = 8000;
		r = score(&s, 0.1, 0, 0);
		print_message("#    the same at 8 kHz: bias %.2e, rms %.2e frames (%.1f ns)\n", r.bias, r.rms, r.rms / s.rate * 1e9);
		assert_true(r.rms < 8e-3);
	}
}

/*
 * Cramer-Rao bound of the instant of a step h S(t) in white noise sigma, levels known: sigma / (h sqrt(sum S'^2)); S' is a sinc
 * of cut-off 0.45, so the sum is 0.9 (Parseval).
 */
static void noise_costs_little_more_than_the_bound(void **state)
{
	static const struct { double noise, ac_hz; } cases[] = { { 0.0005, 0 }, { 0.005, 0 }, { 0.005, 5 }, { 0.015, 0 }, { 0.025, 1 } };

	(void)state;
	print_message("# seed %d\n", SEED);
	for (size_t k = 0; k < sizeof(cases) / sizeof(*cases); k++) {
		struct scene s = usual;
		struct score r;
		double bound;

		s.seconds = 200;
		s.noise = cases[k].noise;
		s.ac_hz = cases[k].ac_hz;
		bound = s.noise / s.height / sqrt(0.9);
		r = score(&s, 0.1, 0, 20);
		print_message("# noise %4.1f%% of the pulse, AC %g Hz: %.3f of the bound, sigma says %.3f\n", 100 * s.noise / s.height,
		              s.ac_hz, r.rms / bound, r.sigma / bound);
		assert_int_equal(r.edges, 200);
		/* 180 edges: an RMS is known to 5%. */
		assert_true(r.rms / bound < 1.2 * 1.1 && r.rms / bound > 0.85);
		assert_true(fabs(r.bias) < 3.5 * r.rms / sqrt(180));     /* edges err independently of each other */
		assert_true(r.sigma / r.rms > 0.8 && r.sigma / r.rms < 1.25);
	}
}

static void a_faint_pulse_of_a_16_bit_card_with_hum_will_do(void **state)
{
	struct scene s = usual;
	struct score r;

	(void)state;
	s.height = 0.05;
	s.lsb = 1 / 32768.0;
	s.hum = 0.0005;
	s.noise = 2e-5;
	r = score(&s, 0.1, 0, 0);
	print_message("# 5%% of full scale, 16 bit, hum 1%%: rms %.2e frames (%.1f ns)\n", r.rms, r.rms / s.rate * 1e9);
	assert_int_equal(r.edges, 20);
	assert_true(r.rms < 0.02);
}

static void polarity_is_found_out_or_obeyed(void **state)
{
	struct pulse_edge edge[MOST];

	(void)state;
	for (int signal = -1; signal <= 1; signal += 2)
		for (int wanted = -1; wanted <= 1; wanted++) {
			struct scene s = usual;
			size_t n;

			s.polarity = signal;
			n = find(&s, 0.1, wanted, edge);
			/* The trailing edge is followed by none within half a second: the wrong polarity gives nothing. */
			assert_int_equal(n, wanted == -signal ? 0 : 20);
			for (size_t k = 0; k < n; k++) {
				assert_true(fabs(edge[k].frame - leading(&s, (int)k)) < 0.01);
				assert_true(fabs(edge[k].height - signal * s.height) < 0.01 * s.height);
			}
		}
}

static void half_second_pulses_lead_with_the_edge_that_is_said(void **state)
{
	struct pulse_edge edge[MOST];

	(void)state;
	for (int ppm = -100; ppm <= 100; ppm += 100)
		for (int polarity = -1; polarity <= 1; polarity++) {
			struct scene s = usual;
			size_t n;

			s.width_s = 0.5;
			s.period_s = 1 + ppm * 1e-6;
			s.polarity = polarity == -1 ? -1 : 1;
			n = find(&s, 0.5, polarity, edge);
			assert_true(n == 19 || n == 20);
			for (size_t k = 0; k < n; k++)
				assert_true(fabs(edge[k].frame - leading(&s, (int)k)) < 0.01);
		}
}

static void short_pulses_are_timed_as_well(void **state)
{
	static const double widths[] = { 0.001, 0.0015, 0.003, 0.01, 0.02, 0.4 };

	(void)state;
	for (size_t k = 0; k < sizeof(widths) / sizeof(*widths); k++) {
		struct scene s = usual;
		struct score r;

		s.width_s = widths[k];
		s.seconds = 20.3;               /* the last one ends, too */
		r = score(&s, widths[k], 0, 0);
		print_message("# %.4f s long: bias %.2e, rms %.2e frames\n", s.width_s, r.bias, r.rms);
		assert_int_equal(r.edges, 20);
		assert_true(r.rms < 5e-3);
	}
}

static void nothing_is_found_where_no_pulse_is(void **state)
{
	static const struct { const char *what; double noise, hum, lsb; } cases[] = {
		{ "silence", 0, 0, 0 }, { "last bit", 1e-5, 0, 1 / 32768.0 }, { "noise", 0.05, 0, 0 }, { "hum", 0, 0.3, 0 },
		{ "hum in 16 bit", 0, 0.01, 1 / 32768.0 }, { "noise and hum", 0.001, 0.1, 0 },
	};
	static const double rates[] = { 8000, 48000, 192000 };

	(void)state;
	for (size_t k = 0; k < 3 * sizeof(cases) / sizeof(*cases); k++) {
		struct pulse_edge edge[MOST];
		struct scene s = usual;
		size_t n;

		s.rate = rates[k % 3];
		s.seconds = 10;
		s.height = 0;
		s.noise = cases[k / 3].noise;
		s.hum = cases[k / 3].hum;
		s.lsb = cases[k / 3].lsb;
		n = find(&s, 0, 0, edge);
		if (n)
			fail_msg("%s at %g Hz: %zu edges", cases[k / 3].what, s.rate, n);
	}
}

static void blocks_of_any_size_give_the_same_edges(void **state)
{
	static const size_t blocks[] = { 1, 7, 480, 4097, 100000 };
	struct pulse_edge whole[MOST], parts[MOST];
	struct scene s = usual;
	size_t n, given;
	double *x;

	(void)state;
	s.seconds = 5;
	s.noise = 0.001;
	given = find(&s, 0.1, 0, whole);
	assert_int_equal(given, 5);
	x = play(&s, &n);
	for (size_t b = 0; b < sizeof(blocks) / sizeof(*blocks); b++) {
		struct pulse_detector *d = make(s.rate, 0.1, 0);
		size_t here = feed(d, x, 0, n, blocks[b], parts);

		here += pulse_detector_finish(d, parts + here, MOST - here);
		assert_int_equal(here, given);
		for (size_t k = 0; k < given; k++)
			assert_true(fabs(parts[k].frame - whole[k].frame) < 1e-7);      /* rounding of the place within the block */
		pulse_detector_destroy(d);
	}
	free(x);
}

static void a_gap_loses_what_is_in_it_and_shifts_nothing(void **state)
{
	struct scene s = usual;
	struct pulse_detector *d = make(s.rate, 0.1, 0);
	struct pulse_edge edge[MOST];
	size_t n, given;
	double *x = play(&s, &n);

	(void)state;
	/* From the middle of the pulse at 5.7 s to the middle of that at 8.7 s. */
	given = feed(d, x, 0, (size_t)(5.75 * s.rate), 1024, edge);
	given += feed(d, x, (size_t)(8.75 * s.rate), n, 1024, edge + given);
	given += pulse_detector_finish(d, edge + given, MOST - given);
	pulse_detector_destroy(d);
	free(x);
	for (size_t k = 0; k < given; k++) {
		double second = rint(edge[k].frame / s.rate - s.first_s);

		assert_true(second < 6 || second > 8);
		assert_true(fabs(edge[k].frame - leading(&s, (int)second)) < 0.01);
	}
	assert_int_equal(given, 5 + 11);        /* that at 5.7 s lost its other edge */
}

static void a_recording_may_begin_and_end_within_a_pulse(void **state)
{
	struct scene s = usual;
	struct pulse_edge edge[MOST];
	size_t n;

	(void)state;
	s.first_s = -0.04;
	s.seconds = 10;                         /* the last pulse begins at 9.96 s */
	n = find(&s, 0.1, 0, edge);
	assert_int_equal(n, 9);
	for (size_t k = 0; k < n; k++)
		assert_true(fabs(edge[k].frame - leading(&s, (int)k + 1)) < 0.01);
}

static void edges_that_find_no_room_come_later(void **state)
{
	struct scene s = usual;
	struct pulse_detector *d = make(s.rate, 0.1, 0);
	struct pulse_edge edge;
	size_t n, given = 0;
	double *x = play(&s, &n), last = -1;

	(void)state;
	assert_int_equal(pulse_detector_execute(d, x, n, 0, &edge, 0), 0);
	while (pulse_detector_finish(d, &edge, 1) == 1) {
		assert_true(edge.frame > last);
		last = edge.frame;
		given++;
	}
	assert_int_equal(given, 20);
	pulse_detector_destroy(d);
	free(x);
}

static void samples_that_are_no_numbers_do_no_harm(void **state)
{
	struct scene s = usual;
	struct pulse_detector *d = make(s.rate, 0.1, 0);
	struct pulse_edge edge[MOST];
	size_t n, given;
	double *x = play(&s, &n);

	(void)state;
	for (size_t k = 0; k < 5000; k++)
		x[(size_t)(5.2 * s.rate) + k] = k & 1 ? NAN : k & 2 ? INFINITY : -INFINITY;
	given = feed(d, x, 0, n, 1024, edge);
	given += pulse_detector_finish(d, edge + given, MOST - given);
	assert_int_equal(given, 20);
	for (size_t k = 0; k < given; k++)
		assert_true(fabs(edge[k].frame - leading(&s, (int)k)) < 0.01);
	pulse_detector_destroy(d);
	free(x);
}

static void impossible_settings_are_refused(void **state)
{
	static const struct pulse_settings wrong[] = {
		{ .rate = NAN }, { .rate = 0 }, { .rate = 999 }, { .rate = INFINITY }, { .rate = 48000, .width_s = 0.6 },
		{ .rate = 48000, .width_s = -0.1 }, { .rate = 48000, .width_s = NAN }, { .rate = 48000, .polarity = 2 },
	};
	struct pulse_detector *d = NULL;

	(void)state;
	for (size_t k = 0; k < sizeof(wrong) / sizeof(*wrong); k++)
		assert_true(pulse_detector_create(&d, &wrong[k]) < 0 && !d);
	pulse_detector_destroy(NULL);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(an_edge_is_found_to_a_few_nanoseconds),
		cmocka_unit_test(ac_coupling_does_not_move_an_edge),
		cmocka_unit_test(noise_costs_little_more_than_the_bound),
		cmocka_unit_test(a_faint_pulse_of_a_16_bit_card_with_hum_will_do),
		cmocka_unit_test(polarity_is_found_out_or_obeyed),
		cmocka_unit_test(half_second_pulses_lead_with_the_edge_that_is_said),
		cmocka_unit_test(short_pulses_are_timed_as_well),
		cmocka_unit_test(nothing_is_found_where_no_pulse_is),
		cmocka_unit_test(blocks_of_any_size_give_the_same_edges),
		cmocka_unit_test(a_gap_loses_what_is_in_it_and_shifts_nothing),
		cmocka_unit_test(a_recording_may_begin_and_end_within_a_pulse),
		cmocka_unit_test(edges_that_find_no_room_come_later),
		cmocka_unit_test(samples_that_are_no_numbers_do_no_harm),
		cmocka_unit_test(impossible_settings_are_refused),
	};

	return cmocka_run_group_tests(tests, NULL, NULL);
}
