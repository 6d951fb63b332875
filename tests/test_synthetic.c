/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>
#include <cmocka.h>
#include "limbwatch/fresnel.h"
#include "limbwatch/log.h"
#include "limbwatch/synthetic.h"

static struct setting_value values[128];

static struct setting_value *value(const char *name)
{
	for (size_t k = 0; intake_synthetic.settings[k].name; k++)
		if (!strcmp(intake_synthetic.settings[k].name, name))
			return &values[k];
	fail_msg("no setting %s", name);
	return NULL;
}

static void set(const char *name, double x)
{
	value(name)->number = x;
	value(name)->integer = llround(x);
}

static char said[256];

static void catch_sentence(void *context, enum log_level level, const char *sentence)
{
	(void)context;
	(void)level;
	snprintf(said, sizeof(said), "%s", sentence);
}

static int reset(void **state)
{
	(void)state;
	settings_fallbacks(intake_synthetic.settings, values);
	set("format", 4);       /* FLOAT: nothing is lost to rounding */
	return 0;
}

/* Everything it plays, by column. */
static size_t play(double *column[2])
{
	struct intake *in;
	struct block block;
	size_t n = 0;
	int ret;

	assert_int_equal(intake_synthetic.open(&in, values), 0);
	assert_int_equal(intake_synthetic.start(in), 0);
	for (unsigned c = 0; c < in->format.channels; c++) {
		column[c] = malloc(in->total_frames * sizeof(double));
		assert_non_null(column[c]);
	}
	while ((ret = intake_synthetic.read(in, &block, 100)) == 1) {
		assert_int_equal(block.first, n);
		for (unsigned c = 0; c < in->format.channels; c++)
			frames_to_double(column[c] + n, block.frames, in->format, c, block.count);
		n += block.count;
	}
	assert_int_equal(ret, -ENODATA);
	assert_int_equal(n, in->total_frames);
	intake_synthetic.stop(in);
	intake_synthetic.close(in);
	return n;
}

/* A point in one wavelength is the straight-edge pattern itself: Born & Wolf, Principles of Optics, 8.7. */
static void the_event_is_the_edge_pattern_at_the_true_time(void **state)
{
	double *column[2], scale, speed = 637;
	size_t n;

	(void)state;
	set("duration_s", 4);
	set("contact_s", 2.0123);
	set("noise_rms", 0);
	set("shadow_speed_mps", speed);
	set("clock_error_ppm", 100);
	n = play(column);
	scale = fresnel_scale(620e-9, 378e6);
	for (size_t k = 0; k < n; k++) {
		double t = (double)k / (48000 * (1 + 100e-6)), w = -speed * (t - 2.0123) / scale;

		assert_true(fabs(column[0][k] - (0.1 + 0.2 * edge_intensity(w))) < 1e-6);
	}
	free(column[0]);
}

/* The card's recursive filter against the analytical response of the optics. */
static void ac_coupling_gives_the_curve_the_optics_expect(void **state)
{
	struct curve_parameters parameters;
	struct curve *curve;
	double *column[2];
	size_t n;

	(void)state;
	set("duration_s", 6);
	set("contact_s", 3.0001);
	set("noise_rms", 0);
	set("high_pass_hz", 2);
	n = play(column);
	synthetic_curve(values, &parameters);
	assert_int_equal(curve_create(&curve, &parameters), 0);
	/*
	 * After a second: the filter begins settled on the first frame, the fringes of 3 s before are not.  A sample holds its
	 * value for half a sample before and after: measured 2.0e-5 of full scale, where the curve is steepest.
	 */
	for (size_t k = 48000; k < n; k++)
		assert_true(fabs(column[0][k] - 0.2 * curve_value(curve, (double)k / 48000 - 3.0001)) < 4e-5);
	curve_destroy(curve);
	free(column[0]);
}

/* f = t + d t^2 / 2 for a clock whose rate drifts by d a second: a logger's frames follow it all night. */
static void a_slow_logger_follows_the_drift_of_its_clock(void **state)
{
	double *column[2], scale = fresnel_scale(0.3, 378e6), drift = 100e-6 / 3600;
	size_t n;

	(void)state;
	set("rate_hz", 1);
	set("duration_s", 6000);
	set("contact_s", 5000);
	set("frequency_mhz", 999.30819333333333);       /* 0.3 m */
	set("noise_rms", 0);
	set("clock_drift_ppm_per_hour", 100);
	n = play(column);
	assert_int_equal(n, 6000);
	for (size_t k = 0; k < n; k++) {
		double f = (double)k, t = 2 * f / (1 + sqrt(1 + 2 * drift * f)), w = -600 * (t - 5000) / scale;

		assert_true(fabs(column[0][k] - (0.1 + 0.2 * edge_intensity(w))) < 1e-6);
	}
	free(column[0]);
}

static void the_truth_names_the_frame_of_the_contact(void **state)
{
	struct synthetic_truth truth;
	char text[TAI_TEXT];

	(void)state;
	set("contact_s", 30.5);
	set("clock_error_ppm", -40);
	assert_int_equal(synthetic_truth(values, &truth), 0);
	assert_true(fabs(truth.frame - 30.5 * 48000 * (1 - 40e-6)) < 1e-5);
	assert_string_equal(tai_format_utc(text, truth.contact, 3), "2031-04-02T01:23:45.750Z");
	set("kind", 2);
	log_set_sink(catch_sentence, NULL);
	assert_int_equal(synthetic_truth(values, &truth), -EINVAL);
	log_set_sink(NULL, NULL);
	assert_non_null(strstr(said, "kind is none"));
}

static double mean_of(const double *x, size_t n)
{
	double sum = 0;

	for (size_t k = 0; k < n; k++)
		sum += x[k];
	return sum / (double)n;
}

static double rms_about(const double *x, size_t n, double mean)
{
	double sum = 0;

	for (size_t k = 0; k < n; k++)
		sum += (x[k] - mean) * (x[k] - mean);
	return sqrt(sum / (double)n);
}

static void the_noise_has_the_rms_asked_for(void **state)
{
	double *column[2], mean;
	size_t n;

	(void)state;
	set("kind", 2);
	set("duration_s", 10);
	set("noise_rms", 0.013);
	set("rate_hz", 8000);
	n = play(column);
	mean = mean_of(column[0], n);
	/* Standard errors: rms / sqrt(n) = 4.6e-5 and rms / sqrt(2 n) = 3.3e-5; five of them. */
	assert_true(fabs(mean - 0.3) < 2.3e-4);
	assert_true(fabs(rms_about(column[0], n, mean) - 0.013) < 1.6e-4);
	free(column[0]);
}

/* Ornstein and Uhlenbeck: stationary from the first frame on, correlation exp(-2 pi f_c t). */
static void red_noise_has_its_rms_from_the_first_frame_on(void **state)
{
	enum { SEEDS = 200, LAG = 25 };         /* 25 frames at 8 kHz: 1 / (2 pi 50.93 Hz) */
	double *column[2], squares = 0, sum = 0, rms;
	size_t n;

	(void)state;
	set("kind", 2);
	set("rate_hz", 8000);
	set("noise_rms", 0);
	set("red_noise_rms", 0.02);
	set("red_corner_hz", 0.001);
	set("duration_s", 0.1);
	for (int seed = 1; seed <= SEEDS; seed++) {
		set("seed", seed);
		play(column);
		squares += (column[0][0] - 0.3) * (column[0][0] - 0.3);
		free(column[0]);
	}
	/* Standard error of an rms 1 / sqrt(2 SEEDS) = 5%; four of them. */
	assert_true(fabs(sqrt(squares / SEEDS) / 0.02 - 1) < 0.2);

	set("red_corner_hz", 8000 / (2 * M_PI * LAG));
	set("duration_s", 30);
	n = play(column);
	rms = rms_about(column[0], n, 0.3);
	for (size_t k = LAG; k < n; k++)
		sum += (column[0][k] - 0.3) * (column[0][k - LAG] - 0.3);
	/* 30 s hold 9600 correlation times: 1% of the rms, 1.5% of the correlation; four of them. */
	assert_true(fabs(rms / 0.02 - 1) < 0.04);
	assert_true(fabs(sum / (double)n / (rms * rms) - exp(-1)) < 0.06);
	free(column[0]);
}

/* Signal to noise of the ideal filter, s.x / |s| for the known shape less mean and slope: by definition, done again here. */
static void snr_sets_the_noise_of_the_ideal_filter(void **state)
{
	struct synthetic_truth truth;
	double *column[2], sum = 0, slope = 0, squares = 0, window;
	size_t n, begin;

	(void)state;
	set("duration_s", 4);
	set("contact_s", 2);
	set("snr", 12);
	assert_int_equal(synthetic_truth(values, &truth), 0);
	assert_true(fabs(truth.snr - 12) < 1e-9);
	set("snr", 0);
	set("noise_rms", 0);
	play(column);
	window = 16 * truth.fresnel_time_s * 48000;
	n = (size_t)window;
	begin = (size_t)(truth.frame - 0.79 * window);
	for (size_t k = 0; k < n; k++) {
		double s = column[0][begin + k], x = ((double)k + 0.5) / (double)n - 0.5;

		sum += s;
		slope += s * x;
		squares += s * s;
	}
	squares -= sum * sum / (double)n + slope * slope / ((double)n / 12);
	assert_true(fabs(sqrt(squares) / truth.noise_rms - 12) < 0.01);
	free(column[0]);
}

/* Half height of the band-limited leading edge, found by the symmetry of a linear-phase step: between frames, by sinc. */
static double half_height(const double *x, size_t from, double half)
{
	double low = (double)from, high = (double)from + 1;

	for (int bisection = 0; bisection < 60; bisection++) {
		double middle = 0.5 * (low + high), sum = 0;

		for (int k = -40; k <= 40; k++) {
			double u = middle - (double)((long)from + k);
			double window = fabs(u) < 40 ? 0.5 + 0.5 * cos(M_PI * u / 40) : 0;

			sum += x[(long)from + k] * window * (fabs(u) < 1e-12 ? 1 : sin(M_PI * u) / (M_PI * u));
		}
		if (sum < half)
			low = middle;
		else
			high = middle;
	}
	return 0.5 * (low + high);
}

static void pulses_stand_on_the_true_seconds_of_a_wrong_card(void **state)
{
	double *column[2];
	size_t n, found = 0;

	(void)state;
	set("kind", 2);
	set("duration_s", 12);
	set("pulse", 1);
	set("pulse_noise_rms", 0);
	set("pulse_jitter_s", 0);
	set("clock_error_ppm", -73);
	n = play(column);
	for (size_t k = 100; k + 100 < n; k++) {
		double truth, frame;

		if (!(column[1][k] < 0.25 && column[1][k + 1] >= 0.25))
			continue;
		frame = half_height(column[1], k, 0.25);
		truth = synthetic_frame(values, 0.75 + (double)found);  /* it starts a quarter second after a second */
		assert_true(fabs(frame - truth) < 48e-6 * 1);   /* a nanosecond */
		found++;
	}
	assert_int_equal(found, 12);
	free(column[0]);
	free(column[1]);
}

/* 2000 pulses at 1000 Hz, a fifth of them missing: numbers against the binomial and normal distributions they are drawn from. */
static void pulses_jitter_and_go_missing_as_often_as_asked(void **state)
{
	double *column[2], squares = 0;
	size_t n, found = 0;

	(void)state;
	set("kind", 2);
	set("rate_hz", 1000);
	set("duration_s", 2000);
	set("pulse", 1);
	set("pulse_noise_rms", 0);
	set("pulse_jitter_s", 0.002);
	set("pulse_missing", 0.2);
	n = play(column);
	for (size_t k = 50; k + 50 < n; k++) {
		double late;

		if (!(column[1][k] < 0.25 && column[1][k + 1] >= 0.25))
			continue;
		late = (half_height(column[1], k, 0.25) - 750) / 1000;
		late -= round(late);
		squares += late * late;
		found++;
	}
	/* Standard errors: sqrt(2000 0.2 0.8) = 18 pulses; 1 / sqrt(2 found) = 1.8% of the rms; four of each. */
	assert_true(fabs((double)found - 1600) < 72);
	assert_true(fabs(sqrt(squares / (double)found) / 0.002 - 1) < 0.072);
	free(column[0]);
	free(column[1]);
}

/* A step through an RC high-pass falls as exp(-2 pi f t), and comes back from below after the pulse (any circuit handbook). */
static void an_ac_coupled_pulse_sags(void **state)
{
	double *column[2], sag = exp(-2 * M_PI * 5 * 0.05), end = exp(-2 * M_PI * 5 * 0.1);
	const double *x;

	(void)state;
	set("kind", 2);
	set("duration_s", 3);
	set("pulse", 1);
	set("pulse_noise_rms", 0);
	set("pulse_jitter_s", 0);
	set("pulse_ac_hz", 5);
	play(column);
	x = column[1] + 48000 * 7 / 4;          /* a whole second */
	/* A sample is the least that "just then" can mean: 2 pi 5 Hz / 48 kHz = 0.07%. */
	assert_true(fabs(x[2400] - 0.5 * sag) < 4e-4);
	assert_true(fabs(x[4800 + 2400] - 0.5 * (end - 1) * sag) < 4e-4);
	assert_true(fabs(x[40000]) < 4e-4);
	free(column[0]);
	free(column[1]);
}

/* Pulses last 0.1 s from a whole second on, spurious ones lie 0.3 to 0.801 s after it: then the line must be idle. */
static void many_pulses_in_one_block_all_end(void **state)
{
	double *column[2];
	size_t n;

	(void)state;
	set("kind", 2);
	set("rate_hz", 1000);
	set("duration_s", 60);
	set("pulse", 1);
	set("pulse_noise_rms", 0);
	set("pulse_spurious", 1);
	n = play(column);
	for (size_t second = 0; second + 1 < n / 1000; second++) {
		const double *x = column[1] + 1000 * second + 750;      /* a whole second */

		assert_true(fabs(x[50] - 0.5) < 1e-3);
		assert_true(fabs(x[200]) < 1e-3 && fabs(x[900]) < 1e-3);
	}
	free(column[0]);
	free(column[1]);
}

static void a_seed_gives_the_same_night_again_and_another_another(void **state)
{
	double *a[2], *b[2], *c[2];
	size_t n;

	(void)state;
	set("duration_s", 2);
	set("contact_s", 1);
	set("pulse", 1);
	n = play(a);
	play(b);
	assert_memory_equal(a[0], b[0], n * sizeof(double));
	assert_memory_equal(a[1], b[1], n * sizeof(double));
	set("seed", 2);
	play(c);
	assert_memory_not_equal(a[0], c[0], n * sizeof(double));
	for (int k = 0; k < 2; k++) {
		free(a[k]);
		free(b[k]);
		free(c[k]);
	}
}

static int64_t monotonic_ns(void)
{
	struct timespec t;

	clock_gettime(CLOCK_MONOTONIC, &t);
	return t.tv_sec * INT64_C(1000000000) + t.tv_nsec;
}

/* Reads until a block comes. */
static struct block next_block(struct intake *in)
{
	struct block block = { 0 };
	int ret;

	do
		ret = intake_synthetic.read(in, &block, 1);     /* shorter than a block lasts: it must say 0 in between */
	while (ret == 0);
	assert_int_equal(ret, 1);
	return block;
}

static void a_paced_block_comes_when_the_card_has_taken_it(void **state)
{
	struct intake *in;
	struct block first, block;
	double rate = 8000 * (1 + 1000e-6);
	int64_t restarted;

	(void)state;
	set("rate_hz", 8000);
	set("duration_s", 5);
	set("real_time_pace", 1);
	set("clock_error_ppm", 1000);
	assert_int_equal(intake_synthetic.open(&in, values), 0);
	assert_true(in->real_time);
	intake_synthetic.start(in);
	first = block = next_block(in);
	for (int k = 0; k < 10; k++) {
		block = next_block(in);
		assert_true(fabs((double)(block.host_ns - first.host_ns) - 1e9 * (double)block.first / rate) < 2);
		assert_true(monotonic_ns() >= block.host_ns + (int64_t)(1e9 * (double)block.count / rate) - 1);
	}
	/* Stopped and started it goes on with the next frame, taken from then on. */
	intake_synthetic.stop(in);
	restarted = monotonic_ns();
	intake_synthetic.start(in);
	first = next_block(in);
	assert_int_equal(first.first, block.first + block.count);
	assert_true(first.host_ns >= restarted && first.host_ns <= monotonic_ns());
	intake_synthetic.close(in);
}

/* All blocks, with the frames that are said to be lost left as NaN. @return frames told */
static size_t play_faulty(double *column[2], size_t room, unsigned *gaps)
{
	struct intake *in;
	struct block block;
	size_t next = 0;

	assert_int_equal(intake_synthetic.open(&in, values), 0);
	assert_int_equal(intake_synthetic.start(in), 0);
	assert_true(in->total_frames <= room);
	for (unsigned c = 0; c < 2; c++) {
		column[c] = malloc(room * sizeof(double));
		assert_non_null(column[c]);
		for (size_t k = 0; k < room; k++)
			column[c][k] = NAN;
	}
	*gaps = 0;
	while (intake_synthetic.read(in, &block, 100) == 1) {
		assert_true(block.flags & BLOCK_GAP ? block.first > next : block.first == next);
		*gaps += block.flags & BLOCK_GAP ? 1 : 0;
		for (unsigned c = 0; c < 2; c++)
			frames_to_double(column[c] + block.first, block.frames, in->format, c, block.count);
		next = block.first + block.count;
	}
	/* A gap at the very end is never told. */
	assert_true(next == in->total_frames || value("gap_s")->number > 5.5);
	intake_synthetic.close(in);
	return next;
}

/* The same night with and without a fault: what is left of it is the same, frame by frame. */
static void frames_are_lost_or_given_twice_as_asked(void **state)
{
	static const struct { double loss_s, loss, gap_s, gap; } cases[] = {
		{ 3.1, 48, 0, 0 }, { 3.1, 1, 0, 0 }, { 3.1, -1, 0, 0 }, { 2.5, -4096, 0, 0 }, { 2.5, 100000, 0, 0 }, { 0, 5, 0, 0 },
		{ 0, -5, 0, 0 }, { 0.01, -4096, 0, 0 }, { 3.1, 48, 1.7, 300 }, { 3.1, -48, 3.1, 300 }, { 3.1, 4800, 3.15, 300 },
		{ 0, 0, 5.9, 90000 }, { 5.9, 90000, 0, 0 },
	};
	double *whole[2], *column[2];
	size_t n;

	(void)state;
	set("duration_s", 6);
	set("contact_s", 4);
	set("pulse", 1);
	set("clock_error_ppm", 80);
	n = play(whole);
	for (size_t k = 0; k < sizeof(cases) / sizeof(*cases); k++) {
		size_t at = (size_t)llround(cases[k].loss_s * 48000 * (1 + 80e-6)), told, given = 0;
		unsigned gaps;

		set("silent_loss_s", cases[k].loss_s);
		set("silent_loss_frames", cases[k].loss);
		set("gap_s", cases[k].gap_s);
		set("gap_frames", cases[k].gap);
		told = play_faulty(column, n + 4096, &gaps);
		assert_true(gaps == (cases[k].gap > 0 && cases[k].gap_s < 5.5));        /* at the very end nothing comes after it */
		for (size_t f = 0; f < told; f++) {
			double shift = f < at ? 0 : fmax(cases[k].loss, -(double)at);

			if (isnan(column[0][f]))
				continue;
			given++;
			assert_true(column[0][f] == whole[0][f + (size_t)(long)shift] && column[1][f] == whole[1][f + (size_t)(long)shift]);
		}
		if (gaps)
			assert_int_equal(given, told - (size_t)cases[k].gap);
		/* The truth knows. */
		if (cases[k].loss > 0 && cases[k].loss < 10000)
			assert_true(fabs(synthetic_frame(values, 5) - (5 * 48000 * (1 + 80e-6) - cases[k].loss)) < 1e-6);
		assert_true(cases[k].loss_s == 0 || fabs(synthetic_frame(values, 0.005) - 0.005 * 48000 * (1 + 80e-6)) < 1e-6);
		free(column[0]);
		free(column[1]);
	}
	free(whole[0]);
	free(whole[1]);
}

static void what_does_not_go_together_is_refused_with_a_sentence(void **state)
{
	static const struct { const char *name; double x; const char *second; double y; const char *sentence; } cases[] = {
		{ "rate_hz", 1, "duration_s", 0.1, "duration_s 0.1 is too short for one frame at rate_hz 1" },
		{ "rate_hz", 500, "pulse", 1, "rate_hz is 500; a pulse needs at least 1000" },
		{ "diameter_mas", 3e6, "aperture_m", 0, "the event's settings do not go together" },
	};
	struct intake *in;

	(void)state;
	log_set_sink(catch_sentence, NULL);
	for (size_t k = 0; k < 3; k++) {
		settings_fallbacks(intake_synthetic.settings, values);
		set(cases[k].name, cases[k].x);
		set(cases[k].second, cases[k].y);
		said[0] = '\0';
		assert_int_equal(intake_synthetic.open(&in, values), -EINVAL);
		assert_non_null(strstr(said, cases[k].sentence));
	}
	log_set_sink(NULL, NULL);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test_setup(the_event_is_the_edge_pattern_at_the_true_time, reset),
		cmocka_unit_test_setup(ac_coupling_gives_the_curve_the_optics_expect, reset),
		cmocka_unit_test_setup(a_slow_logger_follows_the_drift_of_its_clock, reset),
		cmocka_unit_test_setup(the_truth_names_the_frame_of_the_contact, reset),
		cmocka_unit_test_setup(the_noise_has_the_rms_asked_for, reset),
		cmocka_unit_test_setup(red_noise_has_its_rms_from_the_first_frame_on, reset),
		cmocka_unit_test_setup(snr_sets_the_noise_of_the_ideal_filter, reset),
		cmocka_unit_test_setup(pulses_stand_on_the_true_seconds_of_a_wrong_card, reset),
		cmocka_unit_test_setup(pulses_jitter_and_go_missing_as_often_as_asked, reset),
		cmocka_unit_test_setup(an_ac_coupled_pulse_sags, reset),
		cmocka_unit_test_setup(many_pulses_in_one_block_all_end, reset),
		cmocka_unit_test_setup(a_seed_gives_the_same_night_again_and_another_another, reset),
		cmocka_unit_test_setup(a_paced_block_comes_when_the_card_has_taken_it, reset),
		cmocka_unit_test_setup(frames_are_lost_or_given_twice_as_asked, reset),
		cmocka_unit_test_setup(what_does_not_go_together_is_refused_with_a_sentence, reset),
	};

	return cmocka_run_group_tests(tests, NULL, NULL);
}
