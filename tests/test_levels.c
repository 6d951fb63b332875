/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <jansson.h>
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>
#include <cmocka.h>
#include "limbwatch/levels.h"

static void fill_channel(struct meter_channel *c, size_t k)
{
	snprintf(c->name, sizeof(c->name), k == 1 ? "gps" : "photodiode %zu", k);
	c->column = (unsigned)k;
	c->measure = k == 1 ? MEASURE_PULSE : MEASURE_VOLTAGE;
	c->polarity = k == 2 ? -1 : 1;
	c->coupled = k == 3;
	c->bandwidth_hz = k == 4 ? 4e6 : 0;
	c->second = (struct meter_span){ 0.301, 0.0102, 0.3497, 0 };
	c->whole = (struct meter_span){ 0.3, 0.0103, 0.35, 12 + k };
	c->headroom_db = 9.23;
	c->mains.frequency_hz = 0;
	c->mains.over_noise_db = NAN;
	c->noise_1ms = 1.5e-3;
	for (size_t o = 0; o < METER_OCTAVES; o++) {
		bool known = o < 20 && k != 1;

		c->octave[o].deviation = known ? 0.01 * pow(2, -0.5 * (double)o) : NAN;
		c->octave[o].differences = known ? 3e6 / pow(2, (double)o) : 0;
	}
	c->leak.step = k == 1 ? NAN : 1.2e-5;
	c->leak.sigma = k == 1 ? NAN : 8e-6;
	c->leak.pulses = k == 1 ? 0 : 57;
}

/* A quiet evening: nothing to advise. */
static struct meter_report *make(size_t channels)
{
	static struct meter_report r;

	memset(&r, 0, sizeof(r));
	r.rate = 48000;
	r.memory_s = 60;
	r.resolution = 0x1p-23;
	r.frames = 2880000;
	r.channels = channels;
	for (size_t k = 0; k < channels; k++)
		fill_channel(&r.channel[k], k);
	r.pulse.channel = channels > 1 ? 1 : -1;
	r.pulse.seen = channels > 1 ? 60 : 0;
	r.pulse.age_s = 1.2;
	r.pulse.interval_rms_s = channels > 1 ? 0.07e-6 : NAN;
	r.pulse.card_error = channels > 1 ? 23.4e-6 : NAN;
	return &r;
}

/* ------------------------------------------------------------------ JSON */

static void same(double a, double b)
{
	if (!(isnan(a) && isnan(b)) && !(fabs(a - b) <= 1e-5 * fabs(b)))
		fail_msg("%.9g is not %.9g", a, b);
}

static void same_span(const struct meter_span *a, const struct meter_span *b)
{
	same(a->mean, b->mean);
	same(a->rms, b->rms);
	same(a->peak, b->peak);
	assert_int_equal(a->clipped, b->clipped);
}

static void same_channel(const struct meter_channel *a, const struct meter_channel *b)
{
	assert_string_equal(a->name, b->name);
	assert_int_equal(a->column, b->column);
	assert_int_equal(a->measure, b->measure);
	assert_int_equal(a->polarity, b->polarity);
	assert_int_equal(a->coupled, b->coupled);
	same(a->bandwidth_hz, b->bandwidth_hz);
	same_span(&a->second, &b->second);
	same_span(&a->whole, &b->whole);
	same(a->headroom_db, b->headroom_db);
	assert_int_equal(a->invalid, b->invalid);
	same(a->mains.frequency_hz, b->mains.frequency_hz);
	for (int k = 0; k < METER_HARMONICS; k++)
		same(a->mains.amplitude[k], b->mains.amplitude[k]);
	assert_int_equal(a->mains.strongest, b->mains.strongest);
	same(a->mains.over_noise_db, b->mains.over_noise_db);
	same(a->noise_1ms, b->noise_1ms);
	for (int k = 0; k < METER_OCTAVES; k++) {
		same(a->octave[k].deviation, b->octave[k].deviation);
		same(a->octave[k].differences, b->octave[k].differences);
	}
	same(a->leak.step, b->leak.step);
	same(a->leak.sigma, b->leak.sigma);
	assert_int_equal(a->leak.pulses, b->leak.pulses);
}

static void a_report_comes_back_from_its_line(void **state)
{
	static struct meter_report back;

	(void)state;
	for (size_t n = 1; n <= MAX_CHANNELS; n++) {
		struct meter_report *r = make(n);
		char why[160] = "", *line;

		r->channel[0].mains.frequency_hz = 50;
		r->channel[0].mains.strongest = 2;
		r->channel[0].mains.amplitude[1] = 0.003;
		r->channel[0].mains.amplitude[3] = NAN;
		r->channel[0].mains.over_noise_db = 12.5;
		r->channel[0].invalid = 7;
		r->lost = 480;
		line = levels_json(r);
		assert_non_null(line);
		assert_null(strchr(line, '\n'));
		assert_int_equal(levels_parse(&back, line, strlen(line), why, sizeof(why)), 0);
		free(line);
		same(back.rate, r->rate);
		same(back.memory_s, r->memory_s);
		same(back.resolution, r->resolution);
		assert_int_equal(back.frames, r->frames);
		assert_int_equal(back.lost, 480);
		assert_int_equal(back.channels, n);
		for (size_t k = 0; k < n; k++)
			same_channel(&back.channel[k], &r->channel[k]);
		assert_int_equal(back.pulse.channel, r->pulse.channel);
		assert_int_equal(back.pulse.seen, r->pulse.seen);
		same(back.pulse.age_s, r->pulse.age_s);
		same(back.pulse.interval_rms_s, r->pulse.interval_rms_s);
		same(back.pulse.card_error, r->pulse.card_error);
	}
}

static void a_line_says_what_it_is_with_its_units(void **state)
{
	char *line = levels_json(make(5));
	json_t *o = json_loads(line, 0, NULL), *noise;

	(void)state;
	assert_string_equal(json_string_value(json_object_get(o, "what")), "levels");
	noise = json_object_get(json_array_get(json_object_get(o, "channels"), 4), "noise");
	assert_int_equal(json_array_size(noise), 20);
	noise = json_array_get(noise, 10);
	/* 1024 samples at 48 kHz: 21.333 ms; 0.01 / 32; 0.301 / sqrt(4 MHz * 21.333 ms) by hand 1.0304e-3. */
	assert_true(fabs(json_number_value(json_object_get(noise, "tau_s")) - 0.0213333) < 1e-7);
	assert_true(fabs(json_number_value(json_object_get(noise, "white_fs")) - 3.125e-4) < 1e-9);
	assert_true(fabs(json_number_value(json_object_get(noise, "radiometer_fs")) - 1.0304e-3) < 1e-7);
	assert_true(json_is_null(json_object_get(json_object_get(json_array_get(json_object_get(o, "channels"), 1), "leak"),
	                                         "step_fs")));
	json_decref(o);
	free(line);
}

/* What must not be taken for levels, and a word of why. */
static const struct { const char *line, *why; } hostile[] = {
	{ "", "not JSON" },
	{ "{", "not JSON" },
	{ "nonsense", "not JSON" },
	{ "[1,2,3]", "what" },
	{ "null", "not JSON" },
	{ "{}", "what" },
	{ "{\"what\":7}", "what" },
	{ "{\"what\":\"levels\",\"what\":\"levels\"}", "not JSON" },
	{ "{\"what\":\"levels\"}", "rate_hz" },
	{ "{\"what\":\"levels\",\"rate_hz\":-1}", "rate_hz" },
	{ "{\"what\":\"levels\",\"rate_hz\":\"fast\"}", "rate_hz" },
	{ "{\"what\":\"levels\",\"rate_hz\":1e999}", "not JSON" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000}", "channels" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[]}", "channels" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":{}}", "channels" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[1,2,3,4,5,6,7,8,9]}", "channels" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[null]}", "name" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"frames\":-4,\"channels\":[{\"name\":\"a\",\"measure\":\"aux\"}]}", "frames" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[{\"name\":\"\\u001b[2J\",\"measure\":\"aux\"}]}", "name" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[{\"name\":\"\\u009b2J\",\"measure\":\"aux\"}]}", "name" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[{\"name\":\"\",\"measure\":\"aux\"}]}", "name" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[{\"name\":\"aaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaa"
	  "aaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaaa\",\"measure\":\"aux\"}]}", "name" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[{\"name\":\"a\",\"measure\":\"smell\"}]}", "measure" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[{\"name\":\"a\",\"measure\":\"aux\",\"column\":9}]}", "column" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[{\"name\":\"a\",\"measure\":\"aux\",\"second\":[]}]}", "second" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[{\"name\":\"a\",\"measure\":\"aux\",\"noise\":[3]}]}", "samples" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[{\"name\":\"a\",\"measure\":\"aux\",\"noise\":[{\"samples\":3}]}]}",
	  "samples" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[{\"name\":\"a\",\"measure\":\"aux\",\"noise\":[{\"samples\":"
	  "67108864}]}]}", "samples" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[{\"name\":\"a\",\"measure\":\"aux\",\"mains\":{\"amplitudes_fs\":"
	  "[\"x\"]}}]}", "amplitudes_fs" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[{\"name\":\"a\",\"measure\":\"aux\",\"mains\":{\"strongest\":5}}]}",
	  "strongest" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[{\"name\":\"a\",\"measure\":\"aux\",\"mains\":{"
	  "\"fundamental_hz\":50}}]}", "strongest" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[{\"name\":\"a\",\"measure\":\"aux\",\"mains\":{"
	  "\"fundamental_hz\":1e308,\"strongest\":1}}]}", "fundamental_hz" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[{\"name\":\"a\",\"measure\":\"aux\"}],\"pulse\":{\"channel\":1}}",
	  "channel" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[{\"name\":\"a\",\"measure\":\"aux\"}],\"pulse\":{\"seen\":"
	  "4294967296}}", "seen" },
	{ "{\"what\":\"levels\",\"rate_hz\":48000,\"channels\":[{\"name\":\"\xff\xfe\",\"measure\":\"aux\"}]}", "not JSON" },
};

static void hostile_lines_are_refused_with_a_reason(void **state)
{
	static struct meter_report r;
	char why[160], nul[] = "{\"what\":\"levels\"\0}";

	(void)state;
	for (size_t k = 0; k < sizeof(hostile) / sizeof(*hostile); k++) {
		r.channels = 77;
		*why = 0;
		assert_int_equal(levels_parse(&r, hostile[k].line, strlen(hostile[k].line), why, sizeof(why)), -EINVAL);
		if (!strstr(why, hostile[k].why))
			fail_msg("%s: \"%s\" says nothing of %s", hostile[k].line, why, hostile[k].why);
		assert_int_equal(r.channels, 77);
	}
	assert_int_equal(levels_parse(&r, nul, sizeof(nul) - 1, NULL, 0), -EINVAL);
}

static void every_cut_of_a_line_is_refused_and_other_lines_passed_over(void **state)
{
	static struct meter_report r;
	const char *other = "{\"what\":\"vigil\",\"source\":\"Anwen\"}";
	const char *least = "{\"what\":\"levels\",\"rate_hz\":8,\"new\":{\"x\":[]},\"channels\":[{\"name\":\"a\",\"measure\":\"voltage\"}]}";
	char *line = levels_json(make(2));

	(void)state;
	for (size_t n = 0; n < strlen(line); n++)
		assert_int_equal(levels_parse(&r, line, n, NULL, 0), -EINVAL);
	free(line);
	assert_int_equal(levels_parse(&r, other, strlen(other), NULL, 0), -ENOMSG);
	assert_int_equal(levels_parse(&r, least, strlen(least), NULL, 0), 0);
	assert_true(isnan(r.channel[0].headroom_db) && isnan(r.channel[0].octave[3].deviation) && r.pulse.channel == -1);
}

/* ------------------------------------------------------------------ advice */

static char advice[LEVELS_ADVICES][LEVELS_ADVICE];

/* Exactly one sentence, with these words. */
static void advised(const struct meter_report *r, const char *words)
{
	size_t n = levels_advise(r, advice, LEVELS_ADVICES);

	if (n != 1 || !strstr(advice[0], words))
		fail_msg("%zu sentences, \"%s\" instead of \"%s\"", n, n ? advice[0] : "", words);
}

static void a_quiet_evening_needs_no_advice(void **state)
{
	(void)state;
	for (size_t n = 1; n <= MAX_CHANNELS; n++)
		assert_int_equal(levels_advise(make(n), advice, LEVELS_ADVICES), 0);
}

static void what_is_wrong_with_a_level_is_said(void **state)
{
	struct meter_report *r = make(2);
	struct meter_channel *c = &r->channel[0];

	(void)state;
	c->second.clipped = 4;
	advised(r, "photodiode 0: clipped: lower the gain");
	make(2)->channel[0].headroom_db = 2.2;
	advised(r, "photodiode 0: headroom 2 dB: strong sources will clip");
	make(2)->channel[1].headroom_db = 2.2;          /* a pulse does not grow */
	assert_int_equal(levels_advise(r, advice, LEVELS_ADVICES), 0);
	make(2)->channel[0].second.rms = 0;
	advised(r, "does not move");
	make(2)->channel[0].octave[0].deviation = 0x1p-25;
	advised(r, "raise the gain");
	make(2)->channel[0].second.mean = -0.301;
	advised(r, "polarity be \"inverted\"?");
	r->channel[0].coupled = true;
	assert_int_equal(levels_advise(r, advice, LEVELS_ADVICES), 0);
	make(2)->channel[0].invalid = 3;
	advised(r, "3 samples are not numbers");
	make(2)->lost = 480;
	advised(r, "480 frames were lost");
}

static void hum_leakage_and_excess_noise_are_said(void **state)
{
	struct meter_report *r = make(5);
	struct meter_channel *c = &r->channel[0];

	(void)state;
	c->mains.frequency_hz = 50;
	c->mains.strongest = 2;
	c->mains.over_noise_db = 12;
	advised(r, "photodiode 0: hum 100 Hz 12 dB above the noise");
	r = make(5);
	c = &r->channel[4];                             /* radio: averages over seconds lose it */
	c->mains.frequency_hz = 50;
	c->mains.strongest = 1;
	c->mains.over_noise_db = 12;
	c->mains.amplitude[0] = 0.01;
	assert_int_equal(levels_advise(r, advice, LEVELS_ADVICES), 0);
	c->mains.amplitude[0] = 0.2;
	advised(r, "photodiode 4: hum 50 Hz");
	r = make(5);
	r->channel[0].leak.step = 3.1 * 1.5e-3;
	r->channel[0].leak.sigma = 1e-4;
	advised(r, "pulse leaks into photodiode 0: 3.1 sigma");
	r->channel[0].leak.sigma = 2e-3;                /* may be chance */
	assert_int_equal(levels_advise(r, advice, LEVELS_ADVICES), 0);
	r = make(5);
	/* Octave 18 is 5.461 s: 0.301 / sqrt(4 MHz * 5.461 s) = 6.440e-5. */
	r->channel[4].octave[18].deviation = 5 * 6.44e-5;
	advised(r, "photodiode 4: noise of 5.5 s is 5 times the radiometer's");
}

static void what_is_wrong_with_the_pulse_is_said(void **state)
{
	struct meter_report *r = make(2);

	(void)state;
	r->pulse.seen = 0;
	r->pulse.age_s = 8;
	r->pulse.card_error = r->pulse.interval_rms_s = NAN;
	advised(r, "gps: no pulse seen");
	make(2)->pulse.age_s = 12.4;
	advised(r, "gps: no pulse for 12 s");
	make(2)->pulse.missing = 3;
	advised(r, "gps: 3 pulses are missing");
	make(2)->pulse.spurious = 9;
	advised(r, "gps: 9 edges are no pulses");
	make(2)->pulse.interval_rms_s = 35e-6;
	advised(r, "gps: intervals scatter by 35 us");
	make(2)->pulse.card_error = NAN;
	advised(r, "not whole seconds apart");
	make(1)->pulse.age_s = 100;                     /* no channel for it */
	assert_int_equal(levels_advise(r, advice, LEVELS_ADVICES), 0);
}

static void no_more_advice_is_given_than_there_is_room_for(void **state)
{
	struct meter_report *r = make(8);

	(void)state;
	for (size_t k = 0; k < 8; k++)
		r->channel[k].second.clipped = 1;
	assert_int_equal(levels_advise(r, advice, 3), 3);
}

/* ------------------------------------------------------------------ table */

static char *table_of(const struct meter_report *r)
{
	char *text = NULL;
	size_t size;
	FILE *out = open_memstream(&text, &size);

	levels_print(out, "limbwatch levels: hw:1,0", r);
	fclose(out);
	return text;
}

/* Within 100 columns, no control characters, no "nan" or "inf" for an observer to wonder about. */
static void fits(char *text)
{
	for (char *line = strtok(text, "\n"); line; line = strtok(NULL, "\n")) {
		size_t columns = 0;

		for (const char *p = line; *p; p++) {
			columns += ((unsigned char)*p & 0xc0) != 0x80;
			assert_true((unsigned char)*p >= 0x20 && *p != 0x7f);
		}
		if (columns > 100 || strstr(line, "nan") || strstr(line, "inf "))
			fail_msg("%zu columns: %s", columns, line);
	}
	free(text);
}

static void the_table_fits_whatever_is_in_it(void **state)
{
	struct meter_report *r;

	(void)state;
	for (size_t n = 1; n <= MAX_CHANNELS; n++) {
		fits(table_of(make(n)));
		r = make(n);
		for (size_t k = 0; k < n; k++) {
			struct meter_channel *c = &r->channel[k];

			for (int j = 0; j < METER_NAME - 2; j += 2)
				memcpy(c->name + j, "\xc3\xa9", 3);
			c->second = (struct meter_span){ -1.23456789e5, 1.23456789e-35, 3.4e38, UINT64_MAX };
			c->whole.clipped = UINT64_MAX;
			c->headroom_db = -770.7;
			c->mains.frequency_hz = 60;
			c->mains.strongest = 4;
			c->mains.over_noise_db = -123.4;
			c->noise_1ms = 1e-300;
		}
		fits(table_of(r));
	}
}

static void nothing_known_is_shown_as_dashes(void **state)
{
	struct meter_settings s = { .format = { SAMPLE_S16, 2 }, .rate = 48000, .channels = 2, .memory_s = 60 };
	static struct meter_report r;
	struct meter *m;
	char *text;

	(void)state;
	s.channel[0].name = "photodiode";
	s.channel[0].polarity = 1;
	s.channel[1].name = "gps";
	s.channel[1].column = 1;
	s.channel[1].measure = MEASURE_PULSE;
	assert_int_equal(meter_create(&m, &s), 0);
	meter_read(m, &r);
	meter_destroy(m);
	text = table_of(&r);
	assert_non_null(strstr(text, "--"));
	assert_non_null(strstr(text, "card -- ppm"));
	assert_null(strstr(text, "!"));
	fits(text);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(a_report_comes_back_from_its_line),
		cmocka_unit_test(a_line_says_what_it_is_with_its_units),
		cmocka_unit_test(hostile_lines_are_refused_with_a_reason),
		cmocka_unit_test(every_cut_of_a_line_is_refused_and_other_lines_passed_over),
		cmocka_unit_test(a_quiet_evening_needs_no_advice),
		cmocka_unit_test(what_is_wrong_with_a_level_is_said),
		cmocka_unit_test(hum_leakage_and_excess_noise_are_said),
		cmocka_unit_test(what_is_wrong_with_the_pulse_is_said),
		cmocka_unit_test(no_more_advice_is_given_than_there_is_room_for),
		cmocka_unit_test(the_table_fits_whatever_is_in_it),
		cmocka_unit_test(nothing_known_is_shown_as_dashes),
	};

	return cmocka_run_group_tests(tests, NULL, NULL);
}
