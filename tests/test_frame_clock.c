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
	double rms = clock_probe_rms(6, 90);

	print_message("# %s: UTC of a sample, RMS over 6 seeds: %.4f us\n", what, rms * 1e6);
	if (!(rms < limit_s))
		fail_msg("%s: %.4f us is above %.4f us", what, rms * 1e6, limit_s * 1e6);
}

/*
 * A straight line through 90 pulses with 50 ns jitter leaves 50 ns sqrt(1.36 / 90) = 6.1 ns over the middle 60%; twice that is allowed,
 * as six seeds hold about a dozen independent errors.
 */
static void a_sample_is_timed_better_than_one_pulse(void **state)
{
	(void)state;
	clock_probe_reset();
	clock_probe_set("clock_error_ppm", 37);
	expect_rms("DC-coupled", 12e-9);
}

static void every_coupling_and_polarity_will_do(void **state)
{
	(void)state;
	clock_probe_reset();
	clock_probe_set("clock_error_ppm", -100);
	clock_probe_set("pulse_ac_hz", 5);
	expect_rms("AC-coupled at 5 Hz, card 100 ppm slow", 12e-9);
	clock_probe_set("pulse_polarity", 1);
	expect_rms("AC-coupled, inverted", 12e-9);
	clock_probe_set("pulse_ac_hz", 0);
	clock_probe_set("clock_error_ppm", 100);
	expect_rms("DC-coupled, inverted, card 100 ppm fast", 12e-9);
}

static void missing_spurious_and_drifting_pulses_are_borne(void **state)
{
	(void)state;
	clock_probe_reset();
	clock_probe_set("pulse_missing", 0.1);
	clock_probe_set("pulse_spurious", 0.1);
	clock_probe_set("clock_error_ppm", 20);
	clock_probe_set("clock_drift_ppm_per_hour", 6);
	expect_rms("10% missing, 10% spurious, drifting 1 ppm in 10 minutes", 36e-9);
	clock_probe_reset();
	clock_probe_set("pulse_noise_rms", 0.005);      /* 1% of the pulse */
	expect_rms("pulse channel with 1% noise", 48e-9);
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
	assert_int_equal(read_at(c, 480000).quality, TIME_FREE);       /* not solved yet: no date out of nowhere */
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

static void a_click_after_a_gap_is_not_taken_for_its_end(void **state)
{
	struct frame_clock *c = make();
	struct clock_reading r;
	double error = 37.25;

	(void)state;
	pulses(c, 1, 30, 0);
	frame_clock_add_gap(c, 30.3 * 48000, 48);
	frame_clock_add_pulse(c, 31.4 * 48000, 0.001);
	for (int k = 32; k <= 60; k++)
		frame_clock_add_pulse(c, (k - 0.25) * 48000 + error, 0.001);
	frame_clock_add_label(c, 0, tai_s(0.25), 0.01, false, TIME_HOST);
	assert_int_equal(frame_clock_solve(c), 59);
	assert_true(fabs(tai_difference(read_at(c, 30.25 * 48000).when, tai_s(30.5))) < 1e-6);
	r = read_at(c, 30.5 * 48000 + error);
	assert_true(fabs(tai_difference(r.when, tai_s(30.75))) < 1e-6 && r.sigma_s < 1e-6);
	frame_clock_destroy(c);
}

/* The first pulse after frames were lost is 15 us late: it goes, the jump of the phase stays. */
static void a_poor_first_pulse_after_a_loss_does_not_spoil_the_rest(void **state)
{
	struct frame_clock *c = make();

	(void)state;
	pulses(c, 1, 60, 0);
	for (int k = 61; k <= 120; k++)
		frame_clock_add_pulse(c, (k - 0.25) * 48000 - 4096 + (k == 61 ? 0.72 : 0), 0.001);
	frame_clock_add_label(c, 0, tai_s(0.25), 0.01, false, TIME_HOST);
	assert_int_equal(frame_clock_solve(c), 119);
	assert_true(fabs(tai_difference(read_at(c, 100 * 48000 - 4096).when, tai_s(100.25))) < 1e-6);
	assert_true(fabs(tai_difference(read_at(c, 30 * 48000).when, tai_s(30.25))) < 1e-6);
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

/* Half a millisecond and less lies within what following the comb allows: it bent the smooth on both sides, by up to 80 us. */
static void a_few_frames_lost_in_silence_bend_nothing(void **state)
{
	static const double lost[] = { 1, 2, 5, 20, 100, -1, -5, -100 };

	(void)state;
	for (size_t k = 0; k < sizeof(lost) / sizeof(*lost); k++)
		for (int told = 0; told < 3; told++) {
			struct frame_clock *c = make();
			struct clock_reading r;

			pulses(c, 1, 100, 0);
			for (int n = 101; n <= 200; n++) {
				/* Told before it is found, told when it is found already, or not at all: it counts once. */
				if ((told == 1 && n == 102) || (told == 2 && n == 150))
					assert_int_equal(frame_clock_add_loss(c, 99.75 * 48000, 100.75 * 48000 - lost[k], lost[k], 0), 0);
				frame_clock_add_pulse(c, (n - 0.25) * 48000 - lost[k], 0.001);
			}
			frame_clock_add_label(c, 0, tai_s(0.25), 0.01, false, TIME_HOST);
			assert_int_equal(frame_clock_solve(c), 200);
			for (double t = 5.25; t < 195; t += 1.5) {
				r = read_at(c, (t - 0.25) * 48000 - (t > 100.5 ? lost[k] : 0));
				if (t < 99.9 || t > 101.1)
					assert_true(fabs(tai_difference(r.when, tai_s(t))) < 1e-8 && r.sigma_s < 1e-6);
			}
			/* Where it happened, nobody knows: a frame half way may be off by the loss, or not. */
			r = read_at(c, 100.25 * 48000 - lost[k] / 2);
			assert_true(fabs(r.sigma_s - 0.5 * fabs(lost[k]) / 48000) < 0.01 * r.sigma_s);
			frame_clock_destroy(c);
		}
}

static void a_loss_that_makes_no_sense_is_refused(void **state)
{
	struct frame_clock *c = make();

	(void)state;
	assert_true(frame_clock_add_loss(c, NAN, 1, 1, 0) < 0 && frame_clock_add_loss(c, 0, 1, INFINITY, 0) < 0);
	assert_true(frame_clock_add_loss(c, 2, 1, 1, 0) < 0 && frame_clock_add_loss(c, 0, 1, 1, -1) < 0);
	assert_true(frame_clock_add_loss(c, 0, 1, 1, NAN) < 0);
	/* More given twice than there is room for: still a time for every frame, and a frame for every time. */
	assert_int_equal(frame_clock_add_loss(c, 48000, 48010, -4096, 0), 0);
	frame_clock_add_label(c, 0, tai_s(0), 0.01, false, TIME_HOST);
	frame_clock_solve(c);
	for (double f = 47990; f < 53000; f += 0.7)
		assert_true(isfinite(read_at(c, f).sigma_s) && isfinite(frame_clock_frame(c, read_at(c, f).when)));
	frame_clock_destroy(c);
}

/* A long night with a loss every second: the memory is bounded, and the newest hours are right. */
static void losses_without_end_are_borne(void **state)
{
	struct frame_clock *c = make();
	double lost = 0;

	(void)state;
	for (int k = 1; k <= 40000; k++) {
		frame_clock_add_pulse(c, k * 48000 - lost, 0.001);
		assert_int_equal(frame_clock_add_loss(c, k * 48000 - lost, (k + 1) * 48000 - lost - 64, 64, 0), 0);
		lost += 64;
	}
	frame_clock_add_label(c, 39000 * 48000.0 - 64 * 38999, tai_s(39000), 0.01, false, TIME_HOST);
	assert_true(frame_clock_solve(c) > 20000);
	assert_true(fabs(tai_difference(read_at(c, 39500 * 48000.0 - 64 * 39499).when, tai_s(39500))) < 1e-7);
	frame_clock_destroy(c);
}

/* Clicks at random, from one in half a minute to eight a second: 30 days of them in all. */
static void clicks_at_random_never_make_a_comb(void **state)
{
	static const double per_second[] = { 0.03, 0.1, 0.3, 1, 2, 4, 8 };
	gsl_rng *rng = gsl_rng_alloc(gsl_rng_mt19937);

	(void)state;
	assert_non_null(rng);
	gsl_rng_set(rng, 20);
	print_message("# seed 20\n");
	for (size_t k = 0; k < 2 * sizeof(per_second) / sizeof(*per_second); k++) {
		struct frame_clock *c = make();
		double t = 0;

		for (int n = 0; n < 30000; n++) {
			t += gsl_ran_exponential(rng, 1 / per_second[k / 2]);
			frame_clock_add_pulse(c, t * 48000, 0.01);
		}
		assert_int_equal(frame_clock_solve(c), 0);
		frame_clock_destroy(c);
	}
	gsl_rng_free(rng);
}

/* Spikes of dimmers and motors come 50, 60, 100 or 120 times a second: combs of seconds, but not of pulses. */
static void spikes_of_the_mains_never_make_a_comb(void **state)
{
	static const double rates[] = { 50, 60, 100, 120 };

	(void)state;
	for (size_t k = 0; k < sizeof(rates) / sizeof(*rates); k++) {
		struct frame_clock *c = make();

		for (int n = 0; n < 20000; n++)
			frame_clock_add_pulse(c, n * 48000 / rates[k], 0.01);
		assert_int_equal(frame_clock_solve(c), 0);
		frame_clock_destroy(c);
	}
}

/* The pulse cable comes off: its last pulses drown in clicks that are more than the clock remembers, before it solves again. */
static void pulses_that_are_forgotten_leave_the_label(void **state)
{
	struct frame_clock *c = make();
	struct clock_reading r;

	(void)state;
	pulses(c, 1, 60, 0);
	frame_clock_add_label(c, 0, tai_s(0.25), 0.05, false, TIME_HOST);
	frame_clock_solve(c);
	for (int k = 0; k < 60000; k++)
		frame_clock_add_pulse(c, 61 * 48000 + 777.7 * k, 0.001);
	r = read_at(c, 100 * 48000);
	assert_int_equal(r.quality, TIME_HOST);
	assert_true(fabs(tai_difference(r.when, tai_s(100.25))) < 0.05);
	assert_int_equal(frame_clock_solve(c), 0);
	frame_clock_destroy(c);
}

/* A day and more with the only label at its begin; the card drifts by 30 ppm, the clock remembers 30000 pulses. */
static void the_second_outlives_the_pulses_it_was_told_by(void **state)
{
	struct frame_clock *c = make();
	struct clock_reading r;
	double frame = 0;

	(void)state;
	frame_clock_add_label(c, 0, tai_s(0), 0.05, false, TIME_HOST);
	for (int k = 1; k <= 100000; k++) {
		frame += 48000 * (1 + 30e-6 * k / 86400);
		frame_clock_add_pulse(c, frame, 0.001);
		if (k % 2500 == 10)
			frame_clock_solve(c);
	}
	frame_clock_solve(c);
	r = read_at(c, frame);
	assert_int_equal(r.quality, TIME_PULSE);
	assert_true(fabs(tai_difference(r.when, tai_s(100000))) < 1e-6);
	frame_clock_destroy(c);
}

static void an_outage_of_hours_does_not_miscount_the_seconds(void **state)
{
	struct frame_clock *c = make();
	struct clock_reading r;

	(void)state;
	pulses(c, 1, 60, 100);
	pulses(c, 3 * 3600, 3 * 3600 + 60, 100);        /* 100 ppm of three hours are 1.08 s */
	frame_clock_add_label(c, 0, tai_s(0.25), 0.05, false, TIME_HOST);
	assert_int_equal(frame_clock_solve(c), 121);
	r = read_at(c, (3 * 3600 + 30 - 0.25) * 48000 * (1 + 100e-6));
	assert_int_equal(r.quality, TIME_PULSE);
	assert_true(fabs(tai_difference(r.when, tai_s(3 * 3600 + 30))) < 1e-6);
	/* In the middle of it nobody knows better than the card: a good crystal wanders by 1e-10 per root second at least. */
	r = read_at(c, 5400 * 48000 * (1 + 100e-6));
	assert_true(r.sigma_s > 1e-5 && r.sigma_s < 1e-2);
	frame_clock_destroy(c);
}

static void labels_tell_how_many_seconds_were_lost_in_silence(void **state)
{
	struct frame_clock *c = make();
	struct clock_reading r;
	const double lost = 7.3 * 48000;

	(void)state;
	pulses(c, 1, 60, 0);
	for (int k = 1000; k <= 1060; k++)
		frame_clock_add_pulse(c, (k - 0.25) * 48000 - lost, 0.001);
	for (int k = 0; k <= 1060; k += 10)
		if (k < 60 || k > 1000)
			frame_clock_add_label(c, k * 48000 - (k < 60 ? 0 : lost), tai_s(k + 0.25 + 0.004 * (k % 7)), 0.02, true, TIME_HOST);
	assert_int_equal(frame_clock_solve(c), 121);
	r = read_at(c, 30 * 48000);
	assert_true(r.second_confirmed && fabs(tai_difference(r.when, tai_s(30.25))) < 1e-6);
	r = read_at(c, 1030 * 48000 - lost);
	assert_true(r.second_confirmed && fabs(tai_difference(r.when, tai_s(1030.25))) < 1e-6);
	frame_clock_destroy(c);
}

static void many_gaps_all_count(void **state)
{
	struct frame_clock *c = make();
	double sigma;

	(void)state;
	pulses(c, 1, 30, 0);
	for (int k = 0; k < 300; k++)
		frame_clock_add_gap(c, (40 + k) * 48000, 4.8);          /* 100 us each */
	frame_clock_add_label(c, 0, tai_s(0.25), 0.01, false, TIME_HOST);
	frame_clock_solve(c);
	sigma = read_at(c, 400 * 48000).sigma_s;
	/* The newest 256 are remembered. */
	assert_true(sigma > 99e-6 * 16 && sigma < 101e-6 * sqrt(300));
	/* The last 4 of them by themselves. */
	sigma = sqrt(pow(sigma, 2) - pow(read_at(c, 335.5 * 48000).sigma_s, 2));
	assert_true(fabs(sigma - 200e-6) < 10e-6);
	frame_clock_destroy(c);
}

/* Of what it says itself: of 400 readings 68% within one sigma, 95% within two; neighbours are alike, so by a wide margin. */
static void the_sigma_is_what_it_says(void **state)
{
	gsl_rng *rng = gsl_rng_alloc(gsl_rng_mt19937);
	int one = 0, two = 0, all = 0;

	(void)state;
	assert_non_null(rng);
	gsl_rng_set(rng, 8);
	print_message("# seed 8\n");
	for (int run = 0; run < 40; run++) {
		struct frame_clock *c = make();
		double at[301] = { 0 }, y = 40e-6;

		frame_clock_add_label(c, 0, tai_s(0), 0.01, false, TIME_HOST);
		for (int k = 1; k <= 300; k++) {
			at[k] = at[k - 1] + 48000 * (1 + y);
			y += gsl_ran_gaussian(rng, 1e-9);
			frame_clock_add_pulse(c, at[k] + 48000 * gsl_ran_gaussian(rng, 50e-9), 0);
		}
		frame_clock_solve(c);
		for (int k = 15; k < 300; k += 30) {
			struct clock_reading r = read_at(c, at[k]);
			double off = fabs(tai_difference(r.when, tai_s(k))) / r.sigma_s;

			one += off < 1;
			two += off < 2;
			all++;
		}
		frame_clock_destroy(c);
	}
	gsl_rng_free(rng);
	print_message("# within one sigma %d%%, two %d%%\n", 100 * one / all, 100 * two / all);
	assert_true(one > 0.58 * all && one < 0.78 * all && two > 0.90 * all);
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
		cmocka_unit_test(a_click_after_a_gap_is_not_taken_for_its_end),
		cmocka_unit_test(a_poor_first_pulse_after_a_loss_does_not_spoil_the_rest),
		cmocka_unit_test(frames_lost_in_silence_show_in_the_phase),
		cmocka_unit_test(a_few_frames_lost_in_silence_bend_nothing),
		cmocka_unit_test(a_loss_that_makes_no_sense_is_refused),
		cmocka_unit_test(losses_without_end_are_borne),
		cmocka_unit_test(clicks_at_random_never_make_a_comb),
		cmocka_unit_test(spikes_of_the_mains_never_make_a_comb),
		cmocka_unit_test(pulses_that_are_forgotten_leave_the_label),
		cmocka_unit_test(the_second_outlives_the_pulses_it_was_told_by),
		cmocka_unit_test(an_outage_of_hours_does_not_miscount_the_seconds),
		cmocka_unit_test(labels_tell_how_many_seconds_were_lost_in_silence),
		cmocka_unit_test(many_gaps_all_count),
		cmocka_unit_test(the_sigma_is_what_it_says),
		cmocka_unit_test(impossible_settings_are_refused),
	};

	return cmocka_run_group_tests(tests, NULL, NULL);
}
