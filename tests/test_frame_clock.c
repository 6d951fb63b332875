/* SPDX-License-Identifier: GPL-3.0-or-later */
/* The clock against the truth of synthetic pulses: pulse.c and frame_clock.c together, and each rule of the labels. */
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <string.h>
#include <cmocka.h>
#include <gsl/gsl_randist.h>
#include <gsl/gsl_rng.h>
#include "limbwatch/frame_clock.h"
#include "limbwatch/log.h"
#include "support/clock_probe.h"

static void expect_rms(const char *what, double limit_s)
{
	double rms = clock_probe_rms(8, 120);

	print_message("# %s: UTC of a sample, RMS over 8 seeds: %.4f us\n", what, rms * 1e6);
	if (!(rms < limit_s))
		fail_msg("%s: %.4f us is above %.4f us", what, rms * 1e6, limit_s * 1e6);
}

/* Two minutes of pulses with 50 ns jitter: a smooth through dozens of them leaves well below one pulse's own jitter. */
static void a_sample_is_timed_better_than_one_pulse(void **state)
{
	(void)state;
	clock_probe_reset();
	clock_probe_set("clock_error_ppm", 37);
	expect_rms("DC-coupled", 40e-9);
}

static void every_coupling_and_polarity_will_do(void **state)
{
	(void)state;
	clock_probe_reset();
	clock_probe_set("clock_error_ppm", -100);
	clock_probe_set("pulse_ac_hz", 5);
	expect_rms("AC-coupled at 5 Hz, card 100 ppm slow", 60e-9);
	clock_probe_set("pulse_polarity", 1);
	expect_rms("AC-coupled, inverted", 60e-9);
	clock_probe_set("pulse_ac_hz", 0);
	clock_probe_set("clock_error_ppm", 100);
	expect_rms("DC-coupled, inverted, card 100 ppm fast", 40e-9);
}

static void missing_spurious_and_drifting_pulses_are_borne(void **state)
{
	(void)state;
	clock_probe_reset();
	clock_probe_set("pulse_missing", 0.1);
	clock_probe_set("pulse_spurious", 0.1);
	clock_probe_set("clock_error_ppm", 20);
	clock_probe_set("clock_drift_ppm_per_hour", 6);
	expect_rms("10% missing, 10% spurious, drifting 1 ppm in 10 minutes", 60e-9);
	clock_probe_reset();
	clock_probe_set("pulse_noise_rms", 0.005);      /* 1% of the pulse */
	expect_rms("pulse channel with 1% noise", 120e-9);
}

static void noise_never_makes_a_pulse_clock(void **state)
{
	struct clock_reading reading;
	unsigned locked = 0;

	(void)state;
	clock_probe_reset();
	clock_probe_set("rate_hz", 8000);
	clock_probe_set("pulse_missing", 1);
	clock_probe_set("pulse_noise_rms", 0.05);
	for (int seed = 1; seed <= 100; seed++) {
		struct frame_clock *clock;

		clock_probe_set("seed", seed);
		clock_probe_set("pulse_spurious", seed % 3 * 0.5);      /* clicks too */
		clock = clock_probe_play(20);
		frame_clock_at(clock, 8000 * 10, &reading);
		locked += reading.quality == TIME_PULSE;
		frame_clock_destroy(clock);
	}
	assert_int_equal(locked, 0);
}

/* ------------------------------------------------------------------ rules, on bare edges */

static const struct frame_clock_settings plain = {
	.rate = 48000, .rate_tolerance = 200e-6, .pulse_sigma_s = 50e-9,
};

static struct tai tai_s(double s)
{
	return tai_add((struct tai){ INT64_C(1900000000) * 1000000000 }, s);
}

/* Pulses at whole seconds from `from` to `to`, frame 0 at second 0.25, card `ppm` fast. */
static void pulses(struct frame_clock *c, int from, int to, double ppm)
{
	for (int k = from; k <= to; k++)
		frame_clock_add_pulse(c, (k - 0.25) * 48000 * (1 + ppm * 1e-6), 0.001);
}

static struct clock_reading read_at(const struct frame_clock *c, double frame)
{
	struct clock_reading r;

	frame_clock_at(c, frame, &r);
	return r;
}

static struct frame_clock *make(void)
{
	struct frame_clock *c;

	assert_int_equal(frame_clock_create(&c, &plain), 0);
	return c;
}

static void a_good_label_confirms_the_second(void **state)
{
	struct frame_clock *c = make();
	struct clock_reading r;

	(void)state;
	pulses(c, 1, 30, 50);
	frame_clock_add_label(c, 0, tai_s(0.25 + 0.03), 0.05, false, TIME_HOST);
	assert_int_equal(frame_clock_solve(c), 30);
	r = read_at(c, 9.75 * 48000 * (1 + 50e-6));
	assert_int_equal(r.quality, TIME_PULSE);
	assert_true(r.second_confirmed);
	assert_true(fabs(tai_difference(r.when, tai_s(10))) < 1e-7 && r.sigma_s < 1e-7);
	assert_true(fabs(frame_clock_frame(c, tai_s(10)) - 9.75 * 48000 * (1 + 50e-6)) < 0.005);
	assert_true(fabs(frame_clock_rate(c, 480000) / 48000 - 1 - 50e-6) < 1e-8);
	frame_clock_destroy(c);
}

static void one_poor_label_leaves_the_second_unconfirmed(void **state)
{
	struct frame_clock *c = make();
	struct clock_reading r;

	(void)state;
	pulses(c, 1, 30, 0);
	frame_clock_add_label(c, 0, tai_s(0.25 + 0.1), 0.4, false, TIME_HOST);
	frame_clock_solve(c);
	r = read_at(c, 48000);
	assert_int_equal(r.quality, TIME_HOST);
	assert_false(r.second_confirmed);
	assert_true(r.sigma_s >= 0.4);
	/* A second, independent one that agrees confirms it. */
	frame_clock_add_label(c, 48000, tai_s(1.25 + 0.2), 0.3, true, TIME_HOST);
	frame_clock_solve(c);
	r = read_at(c, 48000);
	assert_int_equal(r.quality, TIME_PULSE);
	assert_true(r.second_confirmed && fabs(tai_difference(r.when, tai_s(1.25))) < 1e-7);
	frame_clock_destroy(c);
}

static char said[256];

static void catch_sentence(void *context, enum log_level level, const char *sentence)
{
	(void)context;
	(void)level;
	snprintf(said, sizeof(said), "%s", sentence);
}

static void a_label_that_contradicts_the_pulses_is_said_and_not_believed(void **state)
{
	struct frame_clock *c = make();

	(void)state;
	pulses(c, 1, 30, 0);
	frame_clock_add_label(c, 0, tai_s(0.25 + 0.4), 0.01, false, TIME_HOST);
	log_set_sink(catch_sentence, NULL);
	frame_clock_solve(c);
	log_set_sink(NULL, NULL);
	assert_non_null(strstr(said, "unconfirmed"));
	assert_int_equal(read_at(c, 48000).quality, TIME_HOST);
	frame_clock_destroy(c);
}

static void without_pulses_the_label_counts_with_the_card_in_its_error(void **state)
{
	struct frame_clock *c = make();
	struct clock_reading r;

	(void)state;
	r = read_at(c, 480000);
	assert_int_equal(r.quality, TIME_FREE);
	assert_true(isnan(r.sigma_s) && r.when.ns == INT64_C(10000000000));
	frame_clock_add_label(c, 0, tai_s(0.25), 0.05, false, TIME_HOST);
	frame_clock_solve(c);
	r = read_at(c, 48000 * 1000);
	assert_int_equal(r.quality, TIME_HOST);
	assert_true(fabs(r.sigma_s - hypot(0.05, 0.2)) < 1e-9);         /* 200 ppm of 1000 s */
	assert_true(fabs(tai_difference(r.when, tai_s(1000.25))) < 1e-9);
	frame_clock_destroy(c);
}

static void pulses_without_a_label_still_count_true_seconds(void **state)
{
	struct frame_clock *c = make();
	struct clock_reading r;

	(void)state;
	pulses(c, 1, 30, 80);
	frame_clock_solve(c);
	r = read_at(c, 20 * 48000 * (1 + 80e-6));
	assert_int_equal(r.quality, TIME_FREE);
	assert_true(fabs((double)r.when.ns * 1e-9 - 20) < 1e-6);
	frame_clock_destroy(c);
}

static void the_uncertainty_grows_away_from_the_pulses(void **state)
{
	struct frame_clock *c = make();
	double before, inside, after, later;

	(void)state;
	pulses(c, 100, 200, 10);
	frame_clock_add_label(c, 0, tai_s(0.25), 0.01, false, TIME_HOST);
	frame_clock_solve(c);
	before = read_at(c, 0).sigma_s;
	inside = read_at(c, 150 * 48000).sigma_s;
	after = read_at(c, 300 * 48000).sigma_s;
	later = read_at(c, 2000 * 48000.0).sigma_s;
	print_message("# sigma: %.3g %.3g %.3g %.3g\n", before, inside, after, later);
	assert_true(inside < 50e-9 && before > 2 * inside && after > 2 * inside && later > 3 * after);
	frame_clock_destroy(c);
}

static void a_gap_of_uncertain_length_is_bridged_by_the_pulses_on_both_sides(void **state)
{
	struct frame_clock *c = make();
	double error = 37.25;           /* frames that were miscounted */

	(void)state;
	pulses(c, 1, 30, 0);
	frame_clock_add_gap(c, 30.3 * 48000, 48);
	for (int k = 32; k <= 60; k++)
		frame_clock_add_pulse(c, (k - 0.25) * 48000 + error, 0.001);
	frame_clock_add_label(c, 0, tai_s(0.25), 0.01, false, TIME_HOST);
	frame_clock_solve(c);
	assert_true(fabs(tai_difference(read_at(c, 30.25 * 48000).when, tai_s(30.5))) < 1e-6);
	assert_true(fabs(tai_difference(read_at(c, 30.5 * 48000 + error).when, tai_s(30.75))) < 1e-6);
	frame_clock_destroy(c);
}

static void frames_lost_in_silence_show_in_the_phase(void **state)
{
	struct frame_clock *c = make();
	struct clock_reading r;

	(void)state;
	pulses(c, 1, 60, 0);
	for (int k = 61; k <= 120; k++)
		frame_clock_add_pulse(c, (k - 0.25) * 48000 - 4096, 0.001);
	frame_clock_add_label(c, 0, tai_s(0.25), 0.01, false, TIME_HOST);
	frame_clock_solve(c);
	r = read_at(c, 100 * 48000 - 4096);
	assert_true(fabs(tai_difference(r.when, tai_s(100.25))) < 1e-6);
	r = read_at(c, 30 * 48000);
	assert_true(fabs(tai_difference(r.when, tai_s(30.25))) < 1e-6);
	frame_clock_destroy(c);
}

static void impossible_settings_are_refused(void **state)
{
	struct frame_clock_settings s = plain;
	struct frame_clock *c;

	(void)state;
	s.rate = NAN;
	assert_true(frame_clock_create(&c, &s) < 0);
	s = plain;
	s.pulse_sigma_s = 0;
	assert_true(frame_clock_create(&c, &s) < 0);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(a_sample_is_timed_better_than_one_pulse),
		cmocka_unit_test(every_coupling_and_polarity_will_do),
		cmocka_unit_test(missing_spurious_and_drifting_pulses_are_borne),
		cmocka_unit_test(noise_never_makes_a_pulse_clock),
		cmocka_unit_test(a_good_label_confirms_the_second),
		cmocka_unit_test(one_poor_label_leaves_the_second_unconfirmed),
		cmocka_unit_test(a_label_that_contradicts_the_pulses_is_said_and_not_believed),
		cmocka_unit_test(without_pulses_the_label_counts_with_the_card_in_its_error),
		cmocka_unit_test(pulses_without_a_label_still_count_true_seconds),
		cmocka_unit_test(the_uncertainty_grows_away_from_the_pulses),
		cmocka_unit_test(a_gap_of_uncertain_length_is_bridged_by_the_pulses_on_both_sides),
		cmocka_unit_test(frames_lost_in_silence_show_in_the_phase),
		cmocka_unit_test(impossible_settings_are_refused),
	};

	return cmocka_run_group_tests(tests, NULL, NULL);
}
