/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <jansson.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include "limbwatch/recorder.h"
#include "report.h"

/* JSON knows no NaN: what is not known is null. */
static json_t *number(double x)
{
	return isfinite(x) ? json_real(x) : json_null();
}

/* Rounded to what the uncertainties mean, so that the line stays readable. */
static json_t *rounded(double x, int digits)
{
	char text[32];

	if (!isfinite(x))
		return json_null();
	snprintf(text, sizeof(text), "%.*g", digits, x);
	return json_real(strtod(text, NULL));
}

static json_t *instant(struct tai when, enum time_quality quality)
{
	char text[TAI_TEXT];

	return quality == TIME_FREE ? json_null() : json_string(tai_format_utc(text, when, 6));
}

static void add_expectation(json_t *o, const struct config *config, const struct contact *c)
{
	const struct config_expected *e;
	char text[TAI_TEXT];

	if (c->expected < 0) {
		json_object_set_new(o, "source", json_null());
		return;
	}
	e = &config->expected[c->expected];
	json_object_set_new(o, "source", json_string(e->source));
	json_object_set_new(o, "expected_utc", json_string(tai_format_utc(text, e->when, 6)));
	json_object_set_new(o, "expected_sigma_s", number(e->sigma_s));
	if (c->time_quality != TIME_FREE)
		json_object_set_new(o, "late_s", json_real(tai_difference(c->when, e->when)));
}

char *report_line(const struct config *config, const struct contact *c, const char *segment, const char *what)
{
	json_t *o = json_object();
	char *text;

	if (what)
		json_object_set_new(o, "what", json_string(what));
	json_object_set_new(o, "utc", instant(c->when, c->time_quality));
	json_object_set_new(o, "sigma_s", rounded(c->sigma_s, 4));
	json_object_set_new(o, "sigma_parts_s", json_pack("{s:o,s:o,s:o}", "fit", rounded(c->terms.fit, 4),
		"clock", rounded(c->terms.clock, 4), "response", rounded(c->terms.response, 4)));
	json_object_set_new(o, "kind", json_string(contact_kind_name(c->kind)));
	json_object_set_new(o, "snr", rounded(c->snr, 5));
	json_object_set_new(o, "verdict", json_string(verdict_name(c->verdict)));
	json_object_set_new(o, "time_quality", json_string(time_quality_name(c->time_quality)));
	json_object_set_new(o, "second_confirmed", json_boolean(c->second_confirmed));
	json_object_set_new(o, "segment", segment ? json_string(segment) : json_null());
	json_object_set_new(o, "station", json_string(config->station.name));
	json_object_set_new(o, "channel", json_string(config->channel[c->channel].name));
	add_expectation(o, config, c);
	json_object_set_new(o, "frame", number(c->frame));
	json_object_set_new(o, "fresnel_time_s", rounded(c->fresnel_time_s, 5));
	json_object_set_new(o, "shadow_speed_mps", rounded(c->shadow_speed_mps, 5));
	json_object_set_new(o, "flux", rounded(c->flux, 5));
	json_object_set_new(o, "baseline", rounded(c->baseline, 5));
	json_object_set_new(o, "fringe_gain", rounded(c->fringe_gain, 4));
	json_object_set_new(o, "chi2_excess", rounded(c->chi2_excess, 4));
	json_object_set_new(o, "clean", json_boolean(!c->marked));
	text = json_dumps(o, JSON_COMPACT | JSON_REAL_PRECISION(15));
	json_decref(o);
	return text;
}

void report_json(FILE *out, const struct config *config, const struct contact *c, const char *segment)
{
	char *text = report_line(config, c, segment, NULL);

	if (text)
		fprintf(out, "%s\n", text);
	fflush(out);
	free(text);
}

const char *report_interval(char text[32], double seconds)
{
	double size = fabs(seconds);

	if (size < 1e-4)
		snprintf(text, 32, "%.3g \xc2\xb5s", seconds * 1e6);
	else if (size < 1)
		snprintf(text, 32, "%.3g ms", seconds * 1e3);
	else
		snprintf(text, 32, "%.3g s", seconds);
	return text;
}

void report_text(FILE *out, const struct config *config, const struct contact *c, const char *segment)
{
	char when[TAI_TEXT], sigma[32];

	if (c->time_quality == TIME_FREE)
		fprintf(out, "%.6f s after the first sample (no traceable time; fit \xc2\xb1 %s)", c->frame_sigma >= 0 ?
		        tai_difference(c->when, (struct tai){ 0 }) : 0, report_interval(sigma, c->terms.fit));
	else
		fprintf(out, "%s \xc2\xb1 %s (time: %s%s)", tai_format_utc(when, c->when, 6), report_interval(sigma, c->sigma_s),
		        time_quality_name(c->time_quality), c->second_confirmed ? "" : ", second unconfirmed");
	fprintf(out, "  %s of %s  SNR %.1f  %s%s\n", contact_kind_name(c->kind),
	        c->expected >= 0 ? config->expected[c->expected].source : "an unexpected source", c->snr,
	        verdict_name(c->verdict), c->marked ? ", residuals not clean" : "");
	fprintf(out, "    channel %s  shadow %.0f m/s  T_F %.4g s  in %s\n", config->channel[c->channel].name,
	        c->shadow_speed_mps, c->fresnel_time_s, segment ? segment : "no segment (the disk refused it)");
	fflush(out);
}
