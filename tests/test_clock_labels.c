/* SPDX-License-Identifier: GPL-3.0-or-later */
/* A computer without a clock battery, and one whose clock is set while it runs: no time is wrong without saying so. */
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <string.h>
#include <cmocka.h>
#include <gsl/gsl_rng.h>
#include "limbwatch/frame_clock.h"
#include "limbwatch/log.h"

static struct { unsigned sentences; char last[512]; } said;

static void hear(void *context, enum log_level level, const char *sentence)
{
	(void)context;
	(void)level;
	said.sentences++;
	snprintf(said.last, sizeof(said.last), "%s", sentence);
}

static int set_up(void **state)
{
	(void)state;
	memset(&said, 0, sizeof(said));
	log_set_sink(hear, NULL);
	return 0;
}

static int tear_down(void **state)
{
	(void)state;
	log_set_sink(NULL, NULL);
	return 0;
}

static const double card_ppm = 150;             /* of 200 that are allowed for */

static struct frame_clock *make(void)
{
	const struct frame_clock_settings settings = { .rate = 48000, .rate_tolerance = 200e-6, .pulse_sigma_s = 50e-9 };
	struct frame_clock *c;

	assert_int_equal(frame_clock_create(&c, &settings), 0);
	return c;
}

/* True time t, seconds from a whole one; frame 0 is taken at 0.25. */
static struct tai tai_s(double t)
{
	return tai_add((struct tai){ INT64_C(1900000000) * 1000000000 }, t);
}

static double frame_at(double t)
{
	return (t - 0.25) * 48000 * (1 + card_ppm * 1e-6);
}

static double error_at(const struct frame_clock *c, double t, struct clock_reading *r)
{
	frame_clock_at(c, frame_at(t), r);
	return r->quality == TIME_FREE ? NAN : tai_difference(r->when, tai_s(t));
}

/* ------------------------------------------------------------------ no label until the network comes */

static void the_date_comes_afterwards(void **state)
{
	static const double network_s = 600;

	(void)state;
	for (int pulses = 0; pulses < 2; pulses++) {
		struct frame_clock *c = make();
		struct clock_reading r;

		for (int k = 1; k <= network_s; k++)
			if (pulses)
				frame_clock_add_pulse(c, frame_at(k), 1e-3);
		frame_clock_solve(c);
		assert_true(isnan(error_at(c, 30, &r)) && isnan(r.sigma_s));
		/* The first label: everything before is dated by it. */
		frame_clock_add_label(c, frame_at(network_s), tai_s(network_s + 0.004), 0.01, true, TIME_HOST);
		frame_clock_solve(c);
		if (pulses) {
			assert_true(fabs(error_at(c, 30, &r)) < 1e-6 && r.sigma_s < 1e-6);
			assert_true(r.quality == TIME_PULSE && r.second_confirmed);
		} else {
			double near, far;

			error_at(c, network_s - 10, &r);
			near = r.sigma_s;
			assert_true(fabs(error_at(c, 30, &r)) < r.sigma_s && r.quality == TIME_HOST);
			far = r.sigma_s;
			/* 10 ms, 30 ms for the lateness of a single stamp, the card's tolerance. */
			assert_true(fabs(near - hypot(hypot(0.01, 0.03), 10 * 200e-6)) < 1e-4);
			assert_true(fabs(far - hypot(hypot(0.01, 0.03), 570 * 200e-6)) < 1e-3);
		}
		frame_clock_destroy(c);
	}
}

/* Labels for an hour give the card's rate, so that the beginning is known better than to the tolerance. */
static void the_rate_of_the_labels_reaches_back(void **state)
{
	gsl_rng *rng = gsl_rng_alloc(gsl_rng_mt19937);

	(void)state;
	assert_non_null(rng);
	gsl_rng_set(rng, 5);
	print_message("# seed 5\n");
	for (int late = 0; late < 2; late++) {
		struct frame_clock *c = make();
		struct clock_reading r;
		double error;

		for (int k = 600; k < 4200; k++) {
			double off = late ? 0.01 * gsl_rng_uniform(rng) : 0.001 * (gsl_rng_uniform(rng) - 0.5);

			frame_clock_add_label(c, frame_at(k), tai_s(k + off), 0.01, late, TIME_HOST);
		}
		frame_clock_solve(c);
		error = error_at(c, 1, &r);
		print_message("# %s: 10 minutes before the first label off by %.4f s, sigma %.4f s\n", late ? "late" : "exact", error,
		              r.sigma_s);
		assert_true(fabs(error) < 3 * r.sigma_s && r.sigma_s < 0.03);
		error = error_at(c, 4000, &r);
		assert_true(fabs(error) < 3 * r.sigma_s && r.sigma_s < 0.03);
		frame_clock_destroy(c);
	}
	gsl_rng_free(rng);
}

/* Stamps that step by packets of a millisecond, by a clock that is known far better: 100 nights of 15 minutes. */
static void many_labels_are_better_than_one(void **state)
{
	gsl_rng *rng = gsl_rng_alloc(gsl_rng_mt19937);
	double squares = 0, worst = 0;
	int n = 0;

	(void)state;
	assert_non_null(rng);
	gsl_rng_set(rng, 7);
	for (int night = 0; night < 100; night++) {
		struct frame_clock *c = make();
		struct clock_reading r;

		for (int k = 1; k < 900; k++)
			frame_clock_add_label(c, frame_at(k), tai_s(k + 0.001 * (gsl_rng_uniform(rng) - 0.5)), 1e-5, false, TIME_HOST);
		frame_clock_solve(c);
		for (double t = 100; t < 1000; t += 200, n++) {
			double z = error_at(c, t, &r) / r.sigma_s;

			squares += z * z;
			worst = fmax(worst, fabs(error_at(c, t, &r)));
			assert_true(r.sigma_s < 0.002);
		}
		frame_clock_destroy(c);
	}
	gsl_rng_free(rng);
	print_message("# seed 7: z rms %.2f, worst %.3f ms\n", sqrt(squares / n), worst * 1e3);
	/* The drift that is allowed for does not happen here: sigma may be larger than the errors, not smaller. */
	assert_true(squares / n < 1 + 3 * sqrt(2.0 / 100) && worst < 0.3e-3);
}

/* ------------------------------------------------------------------ the clock is set */

struct step_case { double step_s, sigma_s; bool late, pulses, told; };       /* told: that the clock was set */

/* What a run of labels with a step in it gave: seconds after the step in which a time was wrong, unsaid; and how long until right. */
struct step_result { unsigned unsaid; double right_after_s, unsaid_worst; };

static bool wrong_unsaid(const struct frame_clock *c, double t, double *worst)
{
	struct clock_reading r;
	double error = fabs(error_at(c, t, &r));

	if (error <= 4 * r.sigma_s)
		return false;
	*worst = fmax(*worst, error / r.sigma_s);
	return true;
}

static struct step_result run_step(const struct step_case *s, unsigned long seed)
{
	enum { STEP = 40, END = 60 };
	struct step_result result = { 0, 0, 0 };
	struct frame_clock *c = make();
	gsl_rng *rng = gsl_rng_alloc(gsl_rng_mt19937);

	assert_non_null(rng);
	gsl_rng_set(rng, seed);
	for (int k = 1; k <= END; k++) {
		double wrong = k <= STEP ? -s->step_s : 0, late = s->late ? 0.01 * gsl_rng_uniform(rng) : 0;
		struct clock_reading r;

		if (s->pulses)
			frame_clock_add_pulse(c, frame_at(k), 1e-3);
		if (s->told && k == STEP + 1)
			frame_clock_clock_was_set(c);
		frame_clock_add_label(c, frame_at(k + 0.1), tai_s(k + 0.1 + wrong + late), s->sigma_s, s->late, TIME_HOST);
		frame_clock_solve(c);
		if (k <= STEP)
			continue;
		result.unsaid += wrong_unsaid(c, 5, &result.unsaid_worst) || wrong_unsaid(c, k, &result.unsaid_worst);
		if (fabs(error_at(c, 5, &r)) > 0.05)
			result.right_after_s = k - STEP;
	}
	gsl_rng_free(rng);
	frame_clock_destroy(c);
	return result;
}

static struct step_result worst_of(const struct step_case *s)
{
	struct step_result worst = { 0, 0, 0 };

	for (unsigned long seed = 1; seed <= 2; seed++) {
		struct step_result r = run_step(s, seed);

		worst.unsaid = r.unsaid > worst.unsaid ? r.unsaid : worst.unsaid;
		worst.right_after_s = fmax(worst.right_after_s, r.right_after_s);
		worst.unsaid_worst = fmax(worst.unsaid_worst, r.unsaid_worst);
	}
	return worst;
}

/*
 * A step forward among stamps that only err late looks like lateness at first, unless the clock is told: one that is far later
 * than any stall is doubted from the second stamp on, a smaller one when eight stamps agree.
 */
static void a_step_is_never_wrong_for_long_without_saying(void **state)
{
	static const double steps[] = { 0.3, -0.3, 0.7, -0.7, 1.5, -1.5, 12, -12, 3 * 86400.0, -3 * 86400.0, 1.9e9 };
	unsigned cases = 0;

	(void)state;
	for (int which = 0; which < 16; which++) {
		struct step_case s = {
			.sigma_s = which & 1 ? 0.05 : 0.001, .late = which & 2, .pulses = which & 4, .told = which & 8,
		};
		struct step_result most = { 0, 0, 0 };

		for (size_t k = 0; k < sizeof(steps) / sizeof(*steps); k++) {
			struct step_result r;

			s.step_s = steps[k];
			r = worst_of(&s);
			if (r.unsaid > (!s.late || s.told || s.step_s < 0 ? 0 : s.step_s > 2.1 ? 1 : 7) || r.right_after_s > 8)
				fail_msg("step %+g s, case %d: wrong and unsaid for %u s, %.3g sigma; right after %.0f s", s.step_s, which,
				         r.unsaid, r.unsaid_worst, r.right_after_s);
			most.unsaid = r.unsaid > most.unsaid ? r.unsaid : most.unsaid;
			most.right_after_s = fmax(most.right_after_s, r.right_after_s);
			cases++;
		}
		print_message("# steps of 0.3 s to 60 years, sigma %g s, %s, %s, %s: wrong and unsaid for %u s at most, all right after %.0f s\n",
		              s.sigma_s, s.late ? "late stamps" : "exact labels", s.pulses ? "pulses" : "no pulses",
		              s.told ? "told" : "not told", most.unsaid, most.right_after_s);
	}
	assert_int_equal(cases, 176);
	assert_true(said.sentences >= cases);
	assert_non_null(strstr(said.last, "the clock was set, or frames were lost in silence; the newest counts"));
}

/* With pulses a step of less than half a second moves no second, and one of more does not before three labels say so. */
static void the_second_is_unconfirmed_until_labels_agree(void **state)
{
	struct frame_clock *c = make();
	struct clock_reading r;

	(void)state;
	for (int k = 1; k <= 60; k++)
		frame_clock_add_pulse(c, frame_at(k), 1e-3);
	for (int k = 1; k <= 20; k++)
		frame_clock_add_label(c, frame_at(k), tai_s(k + 7), 0.01, false, TIME_HOST);
	frame_clock_solve(c);
	assert_true(fabs(error_at(c, 50, &r) - 7) < 1e-6 && r.second_confirmed);       /* nobody could know */
	for (int k = 21; k <= 22; k++) {
		frame_clock_add_label(c, frame_at(k), tai_s(k), 0.01, false, TIME_HOST);
		frame_clock_solve(c);
		error_at(c, 50, &r);
		assert_true(!r.second_confirmed && r.quality == TIME_HOST && r.sigma_s >= 7);
	}
	frame_clock_add_label(c, frame_at(23), tai_s(23), 0.01, false, TIME_HOST);
	frame_clock_solve(c);
	assert_true(fabs(error_at(c, 50, &r)) < 1e-6 && r.second_confirmed && r.quality == TIME_PULSE);
	assert_true(fabs(error_at(c, 3, &r)) < 1e-6 && r.second_confirmed);
	frame_clock_destroy(c);
}

static void two_labels_that_disagree_confirm_nothing(void **state)
{
	(void)state;
	for (int pulses = 0; pulses < 2; pulses++) {
		struct frame_clock *c = make();
		struct clock_reading r;

		for (int k = 1; k <= 60; k++)
			if (pulses)
				frame_clock_add_pulse(c, frame_at(k), 1e-3);
		frame_clock_add_label(c, frame_at(1), tai_s(1 - 86400.0), 0.01, false, TIME_HOST);
		frame_clock_add_label(c, frame_at(40), tai_s(40), 0.01, false, TIME_HOST);
		frame_clock_solve(c);
		assert_true(fabs(error_at(c, 50, &r)) < 0.01 && !r.second_confirmed && r.sigma_s > 80000);
		assert_true(strstr(said.last, "disagrees by 86400.") || strstr(said.last, "disagrees by 86399."));
		frame_clock_destroy(c);
	}
}

/* One label among many that is nonsense, anywhere, changes nothing once others follow. */
static void a_single_wrong_label_is_passed_over(void **state)
{
	(void)state;
	for (int late = 0; late < 2; late++)
		for (int at = 1; at <= 30; at++) {
			struct frame_clock *c = make();
			struct clock_reading r;

			for (int k = 1; k <= 60; k++)
				frame_clock_add_pulse(c, frame_at(k), 1e-3);
			for (int k = 1; k <= 40; k++)
				frame_clock_add_label(c, frame_at(k), tai_s(k == at ? k + 3600 : k + 0.001), 0.01, late, TIME_HOST);
			frame_clock_solve(c);
			assert_true(fabs(error_at(c, 50, &r)) < 1e-6 && r.second_confirmed && r.quality == TIME_PULSE);
			frame_clock_destroy(c);
		}
}

/* A disk or a program that stalls makes stamps late, by seconds too: that is no step. */
static void late_stamps_are_only_late(void **state)
{
	gsl_rng *rng = gsl_rng_alloc(gsl_rng_mt19937);

	(void)state;
	assert_non_null(rng);
	gsl_rng_set(rng, 6);
	print_message("# seed 6\n");
	for (int run = 0; run < 50; run++) {
		struct frame_clock *c = make();
		struct clock_reading r;

		for (int k = 1; k <= 200; k++) {
			double late = 0.01 * gsl_rng_uniform(rng);

			if (gsl_rng_uniform(rng) < 0.1)
				late += 0.5 * gsl_rng_uniform(rng);
			frame_clock_add_pulse(c, frame_at(k), 1e-3);
			frame_clock_add_label(c, frame_at(k + 0.1), tai_s(k + 0.1 + late), 0.02, true, TIME_HOST);
			frame_clock_solve(c);
			if (k > 10)
				assert_true(fabs(error_at(c, k, &r)) < 1e-6 && r.second_confirmed);
		}
		frame_clock_destroy(c);
	}
	gsl_rng_free(rng);
	assert_int_equal(said.sentences, 0);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test_setup_teardown(the_date_comes_afterwards, set_up, tear_down),
		cmocka_unit_test_setup_teardown(the_rate_of_the_labels_reaches_back, set_up, tear_down),
		cmocka_unit_test_setup_teardown(many_labels_are_better_than_one, set_up, tear_down),
		cmocka_unit_test_setup_teardown(a_step_is_never_wrong_for_long_without_saying, set_up, tear_down),
		cmocka_unit_test_setup_teardown(the_second_is_unconfirmed_until_labels_agree, set_up, tear_down),
		cmocka_unit_test_setup_teardown(two_labels_that_disagree_confirm_nothing, set_up, tear_down),
		cmocka_unit_test_setup_teardown(a_single_wrong_label_is_passed_over, set_up, tear_down),
		cmocka_unit_test_setup_teardown(late_stamps_are_only_late, set_up, tear_down),
	};

	return cmocka_run_group_tests(tests, NULL, NULL);
}
