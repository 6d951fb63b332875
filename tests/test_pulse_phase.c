/* SPDX-License-Identifier: GPL-3.0-or-later */
/* Frames lost in silence are found by the phase of the pulses, over many seeds; and what is none is not called one. */
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <string.h>
#include <cmocka.h>
#include <gsl/gsl_rng.h>
#include "limbwatch/pulse_phase.h"
#include "support/edge_probe.h"

/* What was found in a run, against the truth. */
struct tally { unsigned losses, found, wrong, moved, split; double latest_s; };

static const struct probe_card good = {
	.rate = 48000, .seconds = 300, .error_ppm = 37, .jitter_s = 50e-9, .noise_frames = 1e-3, .missing = 0.1, .spurious = 0.05,
};

static struct phase_loss report[PROBE_LOSSES];

/* A computer that stalls when it loses frames: its stamps are late by so much for five seconds after the first loss. */
static double stall_s;

/* Stamps a second: `stamp_s` > 0: their jitter, always late. */
static unsigned play(const struct probe_run *run, double stamp_s, double *latest_s)
{
	const struct probe_card *c = run->card;
	const struct pulse_phase_settings settings = { c->rate, 200e-6, 50e-9 };
	struct pulse_phase *phase;
	unsigned reports = 0;
	gsl_rng *rng = gsl_rng_alloc(gsl_rng_taus2);
	double stamped = 0;

	assert_int_equal(pulse_phase_create(&phase, &settings), 0);
	assert_non_null(rng);
	gsl_rng_set(rng, c->seed);
	for (size_t k = 0; k < run->edges; k++) {
		const struct probe_edge *e = &run->edge[k];
		struct phase_loss loss;

		for (; stamp_s > 0 && stamped < e->second + 1; stamped++) {
			double late = stamp_s * gsl_rng_uniform(rng);

			if (c->losses && stamped > c->loss[0].at_s && stamped < c->loss[0].at_s + 5)
				late += stall_s;
			pulse_phase_add_stamp(phase, probe_frame(run, stamped), (int64_t)(1e9 * (stamped + 77 + late)), true);
		}
		if (pulse_phase_add_edge(phase, e->frame, c->noise_frames, &loss) == PHASE_JUMPED && reports < PROBE_LOSSES) {
			report[reports++] = loss;
			*latest_s = fmax(*latest_s, (e->frame - (double)loss.after) / c->rate);
		}
	}
	gsl_rng_free(rng);
	pulse_phase_destroy(phase);
	return reports;
}

/* The card's number of the first frame after a loss. */
static double frame_after(const struct probe_run *run, const struct probe_loss *loss)
{
	return probe_frame(run, loss->at_s + fmax(0, loss->frames) / run->card->rate);
}

/* A loss is found when one report holds its place, and its size together with those of others in that place. */
static void judge(const struct probe_run *run, unsigned reports, struct tally *tally)
{
	bool taken[PROBE_LOSSES] = { false };

	tally->losses += run->card->losses;
	for (unsigned r = 0; r < reports; r++) {
		double sum = 0, slack = 6 * report[r].sigma_frames + 1e-9;
		unsigned inside = 0;

		if (report[r].pulse_moved) {
			tally->moved++;
			continue;
		}
		for (unsigned k = 0; k < run->card->losses; k++) {
			double at = frame_after(run, &run->card->loss[k]);

			if (taken[k] || at < (double)report[r].after - 1 || at > (double)report[r].before + 1)
				continue;
			taken[k] = true;
			inside++;
			sum += run->card->loss[k].frames;
		}
		if (inside && fabs(sum - report[r].frames) <= slack)
			tally->found += inside;
		else
			tally->wrong++;
		tally->split += inside > 1;
	}
}

static struct tally run_seeds(const char *what, const struct probe_card *card, unsigned seeds, double stamp_s)
{
	static struct probe_run run;
	struct tally tally = { 0 };

	for (unsigned seed = 1; seed <= seeds; seed++) {
		struct probe_card c = *card;

		c.seed = seed;
		probe_run_make(&run, &c);
		judge(&run, play(&run, stamp_s, &tally.latest_s), &tally);
		probe_run_release(&run);
	}
	if (tally.losses + tally.wrong + tally.moved)
		print_message("# %s, seeds 1 to %u: %u losses, %u found, %u wrong, %u pulse moved, %u told together, latest %.1f s\n",
		              what, seeds, tally.losses, tally.found, tally.wrong, tally.moved, tally.split, tally.latest_s);
	return tally;
}

static struct probe_card with_loss(const struct probe_card *card, double frames)
{
	struct probe_card c = *card;

	c.losses = 1;
	c.loss[0] = (struct probe_loss){ 150.37, frames };
	return c;
}

/* ------------------------------------------------------------------ what must not be called a loss */

/* None seen in N days: below 3 / N a day at 95% (Poisson). */
static void nothing_lost_nothing_said(void **state)
{
	static const struct { const char *what; struct probe_card card; } cases[] = {
		{ "10% missing, 5% spurious", { .error_ppm = 37, .missing = 0.1, .spurious = 0.05 } },
		{ "card 200 ppm fast", { .error_ppm = 200, .missing = 0.1, .spurious = 0.05 } },
		{ "card 200 ppm slow", { .error_ppm = -200, .missing = 0.1, .spurious = 0.05 } },
		{ "drift 1 ppm in 10 minutes", { .drift_ppm_per_hour = 6, .missing = 0.1, .spurious = 0.05 } },
		{ "drift 1 ppm in a minute", { .drift_ppm_per_hour = 60, .missing = 0.1, .spurious = 0.05 } },
		{ "wander 1 ppm an hour", { .wander_ppm = 1, .missing = 0.1, .spurious = 0.05 } },
		{ "wander 5 ppm an hour", { .wander_ppm = 5, .missing = 0.1, .spurious = 0.05 } },
		{ "jitter 1 us", { .jitter_s = 1e-6, .missing = 0.1, .spurious = 0.05 } },
		{ "jitter 10 us", { .jitter_s = 1e-5, .missing = 0.1, .spurious = 0.05 } },
		{ "noise 0.3 frame", { .noise_frames = 0.3, .missing = 0.1, .spurious = 0.05 } },
		{ "outage of a minute", { .outage_from_s = 100, .outage_to_s = 160, .error_ppm = 50, .missing = 0.1, .spurious = 0.05 } },
		{ "half of the pulses missing", { .missing = 0.5, .spurious = 0.2 } },
		{ "a spurious one each second", { .missing = 0.1, .spurious = 1 } },
	};
	static const double rates[] = { 8000, 48000, 192000 };
	unsigned reports = 0;
	double days = 0;

	(void)state;
	for (size_t k = 0; k < sizeof(cases) / sizeof(*cases); k++)
		for (size_t r = 0; r < 3; r++) {
			struct probe_card c = cases[k].card;
			char what[128];
			struct tally t;

			c.rate = rates[r];
			c.seconds = 300;
			c.jitter_s = c.jitter_s > 0 ? c.jitter_s : 50e-9;
			c.noise_frames = c.noise_frames > 0 ? c.noise_frames : 1e-3;
			snprintf(what, sizeof(what), "%s, %g kHz", cases[k].what, rates[r] / 1000);
			t = run_seeds(what, &c, 100, 0);
			reports += t.wrong + t.moved;
			days += 100 * c.seconds / 86400;
		}
	print_message("# %u false reports in %.1f days of pulses\n", reports, days);
	assert_int_equal(reports, 0);
}

/* ------------------------------------------------------------------ what must be found */

static void a_single_loss_is_found(void **state)
{
	static const struct { double rate, frames; } cases[] = {
		{ 48000, 1 }, { 48000, -1 }, { 48000, 2 }, { 48000, 48 }, { 48000, -256 }, { 48000, 1024 }, { 48000, 4096 },
		{ 48000, 20000 }, { 48000, 40000 }, { 8000, 1 }, { 8000, -64 }, { 8000, 3000 }, { 192000, 1 }, { 192000, 7 },
		{ 192000, -8192 }, { 192000, 100000 },
	};
	unsigned losses = 0, found = 0, wrong = 0;

	(void)state;
	for (size_t k = 0; k < sizeof(cases) / sizeof(*cases); k++) {
		struct probe_card c = good;
		char what[64];
		struct tally t;

		c.rate = cases[k].rate;
		c = with_loss(&c, cases[k].frames);
		snprintf(what, sizeof(what), "%g frames at %g kHz", cases[k].frames, c.rate / 1000);
		t = run_seeds(what, &c, 50, 0);
		losses += t.losses;
		found += t.found;
		wrong += t.wrong + t.moved;
	}
	print_message("# missed %u of %u, wrong %u\n", losses - found, losses, wrong);
	assert_true(wrong == 0);
	assert_true(losses - found <= losses / 100);
}

/* Beyond a second, and told apart from a pulse that moved, by stamps that are up to 20 ms late. */
static void stamps_tell_whole_seconds(void **state)
{
	static const double frames[] = { 1, 4096, -480, 60000.0, 48000 * 2.5, 48000 * 7.3 + 11 };

	(void)state;
	for (size_t k = 0; k < sizeof(frames) / sizeof(*frames); k++) {
		struct probe_card c = with_loss(&good, rint(frames[k]));
		char what[64];
		struct tally t;

		snprintf(what, sizeof(what), "%g frames, with stamps", frames[k]);
		t = run_seeds(what, &c, 50, 0.02);
		assert_int_equal(t.wrong + t.moved, 0);
		assert_true(t.losses - t.found <= 1);
		stall_s = 0.3;
		snprintf(what, sizeof(what), "%g frames, stamps 0.3 s late after it", frames[k]);
		t = run_seeds(what, &c, 50, 0.02);
		stall_s = 0;
		assert_int_equal(t.wrong + t.moved, 0);
		assert_true(t.losses - t.found <= 1);
	}
}

/* Pulses with the noise of a poor cable: what is well above six sigma is found, and its number stands in sigma. */
static void noisy_pulses_still_show_a_loss(void **state)
{
	static const struct { double noise_frames, frames; } cases[] = { { 0.1, 2 }, { 0.1, -32 }, { 0.3, 6 }, { 0.3, 480 }, { 1, 16 } };

	(void)state;
	for (size_t k = 0; k < sizeof(cases) / sizeof(*cases); k++) {
		struct probe_card c = with_loss(&good, cases[k].frames);
		char what[64];
		struct tally t;

		c.noise_frames = cases[k].noise_frames;
		snprintf(what, sizeof(what), "%g frames, pulses +- %g frames", cases[k].frames, cases[k].noise_frames);
		t = run_seeds(what, &c, 100, 0);
		assert_int_equal(t.moved, 0);
		assert_true(t.wrong <= 1 && t.losses - t.found <= 2);
	}
}

static void losses_in_a_row_are_found_one_by_one(void **state)
{
	static const double every[] = { 2.7, 3.3, 5.1, 20 };
	static const double frames[] = { 1, 192, 4096 };
	unsigned losses = 0, found = 0, wrong = 0;

	(void)state;
	for (size_t e = 0; e < sizeof(every) / sizeof(*every); e++)
		for (size_t f = 0; f < sizeof(frames) / sizeof(*frames); f++) {
			struct probe_card c = good;
			char what[64];
			struct tally t;

			c.missing = every[e] > 5 ? 0.1 : 0;     /* else fewer than two are left between losses */
			while (c.losses < 40 && 30 + every[e] * c.losses < 280) {
				c.loss[c.losses] = (struct probe_loss){ 30.4 + every[e] * c.losses, frames[f] };
				c.losses++;
			}
			snprintf(what, sizeof(what), "%g frames every %g s", frames[f], every[e]);
			t = run_seeds(what, &c, 20, 0);
			losses += t.losses;
			found += t.found;
			wrong += t.wrong + t.moved;
		}
	print_message("# missed %u of %u, wrong %u\n", losses - found, losses, wrong);
	assert_true(losses - found <= losses / 100 && wrong <= losses / 1000);
}

/* A receiver that loses and finds its satellites: its pulses run free, then jump by no whole number of frames. */
static void a_pulse_that_moved_is_no_loss(void **state)
{
	static const struct { const char *what; double moved_s, free_ppm, stamp_s; } cases[] = {
		{ "pulse moved by 33.3 us", 33.3e-6, 0, 0 }, { "pulse moved by -1.234 ms", -1.234e-3, 0, 0 },
		{ "pulse moved by 0.3071 s", 0.3071, 0, 0.02 },
		{ "pulse free at 0.5 ppm for a minute, then back", 0, 0.5, 0 },
		{ "pulse free at 0.05 ppm for a minute, then back", 0, 0.05, 0 },
		/* 14640 frames to the hundredth: only the stamps tell. */
		{ "pulse moved by 0.305 s, whole frames", 0.305, 0, 0.02 },
	};

	(void)state;
	for (size_t k = 0; k < sizeof(cases) / sizeof(*cases); k++) {
		struct probe_card c = good;
		struct tally t;

		c.error_ppm = 0;
		c.moved_at_s = 160;
		c.moved_s = cases[k].moved_s;
		c.free_ppm = cases[k].free_ppm;
		t = run_seeds(cases[k].what, &c, 50, cases[k].stamp_s);
		assert_int_equal(t.wrong, 0);
		assert_int_equal(t.moved, fabs(cases[k].moved_s) > 0 || cases[k].free_ppm > 0.3 ? 50 : 0);
	}
}

/* The intake says that frames were lost, and is wrong about their number by less than it claims. */
static void a_declared_gap_is_no_silent_loss(void **state)
{
	const struct pulse_phase_settings settings = { 48000, 200e-6, 50e-9 };
	struct pulse_phase *phase;
	struct phase_loss loss;
	unsigned kept = 0;

	(void)state;
	assert_int_equal(pulse_phase_create(&phase, &settings), 0);
	for (int k = 1; k <= 200; k++) {
		if (k % 20 == 0)
			pulse_phase_add_gap(phase, (k - 0.5) * 48000, 48);
		enum phase_verdict verdict = pulse_phase_add_edge(phase, k * 48000 + 17 * (k / 20), 1e-3, &loss);

		assert_int_not_equal(verdict, PHASE_JUMPED);
		kept += verdict == PHASE_KEPT;
	}
	assert_int_equal(kept, 14 + 9 * 15);            /* five pulses find the line anew; the last gap has one after it */
	/* A gap whose length is known to the frame costs nothing. */
	for (int k = 201; k <= 220; k++) {
		pulse_phase_add_gap(phase, (k - 0.5) * 48000, 0);
		enum phase_verdict verdict = pulse_phase_add_edge(phase, k * 48000 + 170, 1e-3, &loss);

		assert_int_equal(verdict, k < 205 ? PHASE_UNKNOWN : PHASE_KEPT);
	}
	pulse_phase_destroy(phase);
}

static void impossible_settings_are_refused(void **state)
{
	struct pulse_phase_settings s = { NAN, 200e-6, 50e-9 };
	struct pulse_phase *phase;

	(void)state;
	assert_true(pulse_phase_create(&phase, &s) < 0);
	s = (struct pulse_phase_settings){ 48000, 0, 50e-9 };
	assert_true(pulse_phase_create(&phase, &s) < 0);
	s = (struct pulse_phase_settings){ 48000, 200e-6, 0 };
	assert_true(pulse_phase_create(&phase, &s) < 0);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(nothing_lost_nothing_said),
		cmocka_unit_test(a_single_loss_is_found),
		cmocka_unit_test(stamps_tell_whole_seconds),
		cmocka_unit_test(noisy_pulses_still_show_a_loss),
		cmocka_unit_test(losses_in_a_row_are_found_one_by_one),
		cmocka_unit_test(a_pulse_that_moved_is_no_loss),
		cmocka_unit_test(a_declared_gap_is_no_silent_loss),
		cmocka_unit_test(impossible_settings_are_refused),
	};

	return cmocka_run_group_tests(tests, NULL, NULL);
}
