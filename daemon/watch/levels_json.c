/* SPDX-License-Identifier: GPL-3.0-or-later */
/* A meter's report as one JSON line, and back. */
#include <errno.h>
#include <jansson.h>
#include <math.h>
#include <stdarg.h>
#include <stdlib.h>
#include <string.h>
#include "../base/utf8.h"
#include "limbwatch/levels.h"

/* ------------------------------------------------------------------ out */

/* Rounded to what a meter can mean, so that the line stays short; JSON knows no NaN: what is not known is null. */
static json_t *number(double x)
{
	char text[32];

	if (!isfinite(x))
		return json_null();
	snprintf(text, sizeof(text), "%.6g", x);
	return json_real(strtod(text, NULL));
}

static json_t *count(uint64_t n)
{
	return json_integer((json_int_t)n);
}

static json_t *span_json(const struct meter_span *span)
{
	return json_pack("{s:o,s:o,s:o,s:o}", "mean_fs", number(span->mean), "rms_fs", number(span->rms),
	                 "peak_fs", number(span->peak), "clipped_samples", count(span->clipped));
}

static json_t *mains_json(const struct meter_channel *c)
{
	json_t *lines = json_array();

	for (size_t k = 0; k < METER_HARMONICS; k++)
		json_array_append_new(lines, number(c->mains.amplitude[k]));
	return json_pack("{s:o,s:o,s:i,s:o}", "fundamental_hz", number(c->mains.frequency_hz), "amplitudes_fs", lines,
	                 "strongest", (int)c->mains.strongest, "over_noise_db", number(c->mains.over_noise_db));
}

static json_t *noise_json(const struct meter_report *report, size_t channel)
{
	const struct meter_channel *c = &report->channel[channel];
	json_t *list = json_array();

	for (size_t k = 0; k < METER_OCTAVES; k++) {
		json_t *o;

		if (!(c->octave[k].differences > 0))
			continue;
		o = json_pack("{s:o,s:o,s:o,s:o,s:o}", "samples", count((uint64_t)1 << k),
		              "tau_s", number(meter_tau(report, k)), "allan_fs", number(c->octave[k].deviation),
		              "differences", number(c->octave[k].differences), "white_fs", number(meter_white(c, k)));
		if (c->bandwidth_hz > 0)
			json_object_set_new(o, "radiometer_fs", number(meter_radiometer(report, channel, k)));
		json_array_append_new(list, o);
	}
	return list;
}

static json_t *channel_json(const struct meter_report *report, size_t channel)
{
	const struct meter_channel *c = &report->channel[channel];
	json_t *o = json_object();

	json_object_set_new(o, "name", json_string(c->name));
	json_object_set_new(o, "column", count(c->column + 1));
	json_object_set_new(o, "measure", json_string(measure_name(c->measure)));
	json_object_set_new(o, "polarity", json_integer(c->polarity));
	json_object_set_new(o, "ac_coupled", json_boolean(c->coupled));
	json_object_set_new(o, "bandwidth_hz", number(c->bandwidth_hz));
	json_object_set_new(o, "second", span_json(&c->second));
	json_object_set_new(o, "whole", span_json(&c->whole));
	json_object_set_new(o, "headroom_db", number(c->headroom_db));
	json_object_set_new(o, "invalid_samples", count(c->invalid));
	json_object_set_new(o, "mains", mains_json(c));
	json_object_set_new(o, "noise_1ms_fs", number(c->noise_1ms));
	json_object_set_new(o, "noise", noise_json(report, channel));
	json_object_set_new(o, "leak", json_pack("{s:o,s:o,s:o}", "step_fs", number(c->leak.step),
		"sigma_fs", number(c->leak.sigma), "pulses", count(c->leak.pulses)));
	return o;
}

static json_t *pulse_json(const struct meter_report *report)
{
	return json_pack("{s:i,s:o,s:o,s:o,s:o,s:o,s:o}", "channel", report->pulse.channel,
	                 "seen", count(report->pulse.seen), "missing", count(report->pulse.missing),
	                 "spurious", count(report->pulse.spurious), "age_s", number(report->pulse.age_s),
	                 "interval_rms_us", number(report->pulse.interval_rms_s * 1e6),
	                 "card_error_ppm", number(report->pulse.card_error * 1e6));
}

char *levels_json(const struct meter_report *report)
{
	char advice[LEVELS_ADVICES][LEVELS_ADVICE];
	size_t advices = levels_advise(report, advice, LEVELS_ADVICES);
	json_t *o = json_object(), *channels = json_array(), *words = json_array();
	char *text;

	for (size_t k = 0; k < report->channels; k++)
		json_array_append_new(channels, channel_json(report, k));
	for (size_t k = 0; k < advices; k++)
		json_array_append_new(words, json_string(advice[k]));
	json_object_set_new(o, "what", json_string("levels"));
	json_object_set_new(o, "rate_hz", number(report->rate));
	json_object_set_new(o, "resolution_fs", number(report->resolution));
	json_object_set_new(o, "memory_s", number(report->memory_s));
	json_object_set_new(o, "frames", count(report->frames));
	json_object_set_new(o, "lost_frames", count(report->lost));
	json_object_set_new(o, "channels", channels);
	json_object_set_new(o, "pulse", pulse_json(report));
	json_object_set_new(o, "advice", words);
	text = json_dumps(o, JSON_COMPACT | JSON_REAL_PRECISION(15));
	json_decref(o);
	return text;
}

/* ------------------------------------------------------------------ back */

struct reading {                        /* the first thing wrong ends it */
	char *why;
	size_t why_size;
	bool wrong;
};

static void refuse(struct reading *r, const char *format, ...) __attribute__((format(printf, 2, 3)));

static void refuse(struct reading *r, const char *format, ...)
{
	va_list arguments;

	if (r->wrong)
		return;
	r->wrong = true;
	if (!r->why_size)
		return;
	va_start(arguments, format);
	vsnprintf(r->why, r->why_size, format, arguments);
	va_end(arguments);
}

static double get_number(struct reading *r, const json_t *o, const char *name)
{
	const json_t *x = json_object_get(o, name);

	if (!x || json_is_null(x))
		return NAN;
	if (!json_is_number(x)) {
		refuse(r, "\"%s\" is not a number", name);
		return NAN;
	}
	return json_number_value(x);
}

/* What a meter would never say would break the table. */
static double get_within(struct reading *r, const json_t *o, const char *name, double most)
{
	double x = get_number(r, o, name);

	if (fabs(x) > most)
		refuse(r, "\"%s\" is beyond %g", name, most);
	return x;
}

static uint64_t get_count(struct reading *r, const json_t *o, const char *name, uint64_t max)
{
	const json_t *x = json_object_get(o, name);

	if (!x || json_is_null(x))
		return 0;
	if (!json_is_integer(x) || json_integer_value(x) < 0 || (uint64_t)json_integer_value(x) > max) {
		refuse(r, "\"%s\" is not a whole number from 0 to %llu", name, (unsigned long long)max);
		return 0;
	}
	return (uint64_t)json_integer_value(x);
}

/* A member that is an object or a list; NULL when it is not there. */
static const json_t *get_part(struct reading *r, const json_t *o, const char *name, json_type type)
{
	const json_t *x = json_object_get(o, name);

	if (!x || json_is_null(x))
		return NULL;
	if (json_typeof(x) != type) {
		refuse(r, "\"%s\" is not %s", name, type == JSON_ARRAY ? "a list" : "an object");
		return NULL;
	}
	return x;
}

static struct meter_span get_span(struct reading *r, const json_t *parent, const char *name)
{
	const json_t *o = get_part(r, parent, name, JSON_OBJECT);

	return (struct meter_span){
		get_number(r, o, "mean_fs"), get_number(r, o, "rms_fs"), get_number(r, o, "peak_fs"),
		get_count(r, o, "clipped_samples", INT64_MAX),
	};
}

static void get_mains(struct reading *r, const json_t *parent, struct meter_channel *c)
{
	const json_t *o = get_part(r, parent, "mains", JSON_OBJECT);
	const json_t *lines = get_part(r, o, "amplitudes_fs", JSON_ARRAY);

	c->mains.frequency_hz = get_number(r, o, "fundamental_hz");
	c->mains.over_noise_db = get_within(r, o, "over_noise_db", 1e4);
	c->mains.strongest = (unsigned)get_count(r, o, "strongest", METER_HARMONICS);
	if (c->mains.frequency_hz != 0 && !isnan(c->mains.frequency_hz) &&
	    (!(c->mains.frequency_hz > 0 && c->mains.frequency_hz < 1000) || c->mains.strongest == 0))
		refuse(r, "\"mains\" have no \"fundamental_hz\" below 1000 or no \"strongest\"");
	for (size_t k = 0; k < METER_HARMONICS; k++) {
		const json_t *x = json_array_get(lines, k);

		if (x && !json_is_number(x) && !json_is_null(x))
			refuse(r, "\"amplitudes_fs\" holds something that is not a number");
		c->mains.amplitude[k] = json_is_number(x) ? json_number_value(x) : NAN;
	}
}

static void get_noise(struct reading *r, const json_t *parent, struct meter_channel *c)
{
	const json_t *list = get_part(r, parent, "noise", JSON_ARRAY);

	for (size_t k = 0; k < METER_OCTAVES; k++)
		c->octave[k].deviation = NAN;
	for (size_t k = 0; k < json_array_size(list); k++) {
		const json_t *o = json_array_get(list, k);
		uint64_t samples = get_count(r, o, "samples", INT64_MAX);
		size_t octave = 0;

		while (octave < METER_OCTAVES && (uint64_t)1 << octave != samples)
			octave++;
		if (octave == METER_OCTAVES) {
			refuse(r, "\"noise\" holds something without \"samples\" of 1, 2, 4 ... %lu",
			       1ul << (METER_OCTAVES - 1));
			return;
		}
		c->octave[octave].deviation = get_number(r, o, "allan_fs");
		c->octave[octave].differences = fmax(0, get_number(r, o, "differences"));
	}
}

static void get_name(struct reading *r, const json_t *o, char name[METER_NAME])
{
	const char *text = json_string_value(json_object_get(o, "name"));

	/* Control characters would act on the terminal. */
	if (!text || !*text || strlen(text) >= METER_NAME || !utf8_text_is_plain(text))
		refuse(r, "a channel has no proper \"name\"");
	else
		strcpy(name, text);
}

static void get_measure(struct reading *r, const json_t *o, struct meter_channel *c)
{
	const char *text = json_string_value(json_object_get(o, "measure"));

	for (int k = MEASURE_VOLTAGE; text && k <= MEASURE_AUX; k++)
		if (!strcmp(text, measure_name((enum measure)k))) {
			c->measure = (enum measure)k;
			return;
		}
	refuse(r, "a channel has no proper \"measure\"");
}

static void get_channel(struct reading *r, const json_t *o, struct meter_channel *c)
{
	const json_t *leak = get_part(r, o, "leak", JSON_OBJECT);
	double polarity = get_number(r, o, "polarity");

	get_name(r, o, c->name);
	get_measure(r, o, c);
	c->column = (unsigned)get_count(r, o, "column", MAX_CHANNELS);
	c->column -= c->column > 0;
	c->polarity = polarity > 0 ? 1 : polarity < 0 ? -1 : 0;
	c->coupled = json_is_true(json_object_get(o, "ac_coupled"));
	c->bandwidth_hz = fmax(0, get_number(r, o, "bandwidth_hz"));
	c->second = get_span(r, o, "second");
	c->whole = get_span(r, o, "whole");
	c->headroom_db = get_within(r, o, "headroom_db", 1e4);
	c->invalid = get_count(r, o, "invalid_samples", INT64_MAX);
	get_mains(r, o, c);
	c->noise_1ms = get_number(r, o, "noise_1ms_fs");
	get_noise(r, o, c);
	c->leak.step = get_number(r, leak, "step_fs");
	c->leak.sigma = get_number(r, leak, "sigma_fs");
	c->leak.pulses = (unsigned)get_count(r, leak, "pulses", UINT32_MAX);
}

static void get_pulse(struct reading *r, const json_t *parent, struct meter_report *out)
{
	const json_t *o = get_part(r, parent, "pulse", JSON_OBJECT);
	double channel = get_number(r, o, "channel");

	if (channel >= (double)out->channels)
		refuse(r, "\"channel\" of the pulse is not one of %zu", out->channels);
	out->pulse.channel = channel >= 0 ? (int)fmin(channel, MAX_CHANNELS - 1) : -1;
	out->pulse.seen = (unsigned)get_count(r, o, "seen", UINT32_MAX);
	out->pulse.missing = (unsigned)get_count(r, o, "missing", UINT32_MAX);
	out->pulse.spurious = (unsigned)get_count(r, o, "spurious", UINT32_MAX);
	out->pulse.age_s = get_within(r, o, "age_s", 1e10);
	out->pulse.interval_rms_s = get_number(r, o, "interval_rms_us") * 1e-6;
	out->pulse.card_error = get_number(r, o, "card_error_ppm") * 1e-6;
}

static void get_report(struct reading *r, const json_t *o, struct meter_report *out)
{
	const json_t *channels = get_part(r, o, "channels", JSON_ARRAY);

	out->rate = get_within(r, o, "rate_hz", 1e9);
	if (!(out->rate > 0))
		refuse(r, "\"rate_hz\" is not above 0");
	out->resolution = fmax(0, get_number(r, o, "resolution_fs"));
	out->memory_s = fmax(0, get_number(r, o, "memory_s"));
	out->frames = get_count(r, o, "frames", INT64_MAX);
	out->lost = get_count(r, o, "lost_frames", INT64_MAX);
	out->channels = json_array_size(channels);
	if (out->channels < 1 || out->channels > MAX_CHANNELS) {
		refuse(r, "\"channels\" are not 1 to %d", MAX_CHANNELS);
		return;
	}
	for (size_t k = 0; k < out->channels; k++)
		get_channel(r, json_array_get(channels, k), &out->channel[k]);
	get_pulse(r, o, out);
}

int levels_parse(struct meter_report *out, const char *line, size_t size, char *why, size_t why_size)
{
	struct reading r = { why, why ? why_size : 0, false };
	struct meter_report *report;
	json_error_t error;
	const char *what;
	json_t *o = json_loadb(line, size, JSON_REJECT_DUPLICATES, &error);

	what = json_string_value(json_object_get(o, "what"));
	if (!what) {
		if (o)
			refuse(&r, "it does not say \"what\" it is about");
		else
			refuse(&r, "it is not JSON: %s", utf8_text_is_plain(error.text) ? error.text : "strange bytes");
		json_decref(o);
		return -EINVAL;
	}
	if (strcmp(what, "levels")) {
		json_decref(o);
		return -ENOMSG;
	}
	report = calloc(1, sizeof(*report));
	if (report)
		get_report(&r, o, report);
	else
		refuse(&r, "no memory");
	if (!r.wrong)
		*out = *report;
	free(report);
	json_decref(o);
	return r.wrong ? -EINVAL : 0;
}
