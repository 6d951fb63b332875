/* SPDX-License-Identifier: GPL-3.0-or-later */
/* What is wrong with the levels, in words.  The limits are common practice where no reason stands beside them. */
#include <math.h>
#include <stdarg.h>
#include <stdio.h>
#include <string.h>
#include "../base/utf8.h"
#include "limbwatch/levels.h"

static const double headroom_least_db = 6;      /* a star that scintillates doubles its mean */
static const double hum_most_db = 6;
static const double hum_most_radio = 0.1;       /* radio: averages over seconds lose the hum, unless it fills the card */
static const double leak_sigmas = 4;            /* otherwise it may be chance */
static const double leak_most = 0.2;            /* of the noise of 1 ms: half a sigma in the matched filter */
static const double leak_most_radio = 0.01;
static const double below_zero = 0.02;
static const double radiometer_most = 3;
/* The longest that is known between these: a radio contact takes some 10 s. */
static const double tau_longest_s = 10, tau_shortest_s = 0.1;
static const double known_differences = 8;
static const double pulse_age_most_s = 3.5;     /* the detector gives an edge up to two seconds late */
static const double irregular_most = 0.02;      /* share of pulses missing or spurious */
static const double scatter_most_s = 10e-6;     /* a GPS module's are 0.05 us, and noise adds little */

enum { NAME_CHARACTERS = 24 };

struct advice {
	char (*out)[LEVELS_ADVICE];
	size_t n, max;
	char name[METER_NAME];          /* of the channel in question, short enough for a line */
};

static void take_name(struct advice *a, const struct meter_channel *c)
{
	size_t bytes = 0;

	while (c->name[bytes] && utf8_count(c->name, bytes + 1) <= NAME_CHARACTERS)
		bytes++;
	snprintf(a->name, sizeof(a->name), "%.*s", (int)bytes, c->name);
}

static void say(struct advice *a, const char *format, ...) __attribute__((format(printf, 2, 3)));

static void say(struct advice *a, const char *format, ...)
{
	va_list arguments;

	if (a->n == a->max)
		return;
	va_start(arguments, format);
	vsnprintf(a->out[a->n++], LEVELS_ADVICE, format, arguments);
	va_end(arguments);
}

static void advise_level(struct advice *a, const struct meter_report *report, size_t k)
{
	const struct meter_channel *c = &report->channel[k];
	const struct meter_span *s = meter_span(report, k);
	bool detector = c->measure != MEASURE_PULSE && c->measure != MEASURE_AUX;

	if (c->invalid)
		say(a, "%s: %llu samples are not numbers", a->name, (unsigned long long)c->invalid);
	if (s->peak == 0 || s->rms == 0)
		say(a, "%s: does not move at all: is it connected?", a->name);
	else if (detector && report->resolution > 0 && c->octave[0].deviation < 0.5 * report->resolution)
		say(a, "%s: its noise is below one step of the samples: raise the gain", a->name);
	if (s->clipped)
		say(a, "%s: clipped: lower the gain", a->name);
	else if (detector && c->headroom_db < headroom_least_db)
		say(a, "%s: headroom %.0f dB: strong sources will clip", a->name, c->headroom_db);
	if (c->measure == MEASURE_VOLTAGE && !c->coupled && s->mean < -below_zero && -s->mean > 5 * s->rms)
		say(a, "%s: its level is below zero: should polarity be \"%s\"?", a->name,
		    c->polarity < 0 ? "normal" : "inverted");
}

static void advise_hum(struct advice *a, const struct meter_channel *c)
{
	double f = c->mains.frequency_hz * c->mains.strongest;

	if (c->measure == MEASURE_PULSE || !(f > 0))
		return;
	if (c->bandwidth_hz > 0 ? c->mains.amplitude[c->mains.strongest - 1] > hum_most_radio :
	    c->mains.over_noise_db > hum_most_db)
		say(a, "%s: hum %.0f Hz %.0f dB above the noise", a->name, f, c->mains.over_noise_db);
}

static void advise_noise(struct advice *a, const struct meter_report *report, size_t k)
{
	const struct meter_channel *c = &report->channel[k];
	size_t octave = METER_OCTAVES;
	double ratio;

	while (octave-- > 0) {
		if (meter_tau(report, octave) > tau_longest_s || !(c->octave[octave].differences >= known_differences))
			continue;
		ratio = c->octave[octave].deviation / meter_radiometer(report, k, octave);
		if (meter_tau(report, octave) >= tau_shortest_s && isfinite(ratio) && ratio > radiometer_most)
			say(a, "%s: noise of %.2g s is %.3g times the radiometer's: gain drift, interference or an offset",
			    c->name, meter_tau(report, octave), ratio);
		return;
	}
}

static void advise_leak(struct advice *a, const struct meter_channel *c)
{
	double step = fabs(c->leak.step);

	if (!(step > leak_sigmas * c->leak.sigma))
		return;
	if (c->bandwidth_hz > 0 ? step > leak_most_radio : step > leak_most * c->noise_1ms)
		say(a, "pulse leaks into %s: %.2g sigma of its noise of 1 ms", a->name, step / c->noise_1ms);
}

static void advise_pulse(struct advice *a, const struct meter_report *report)
{
	const char *name = a->name;
	double share = irregular_most * (report->pulse.seen + report->pulse.missing);

	if (report->pulse.channel < 0)
		return;
	take_name(a, &report->channel[report->pulse.channel]);
	if (report->pulse.age_s > pulse_age_most_s && report->pulse.seen)
		say(a, "%s: no pulse for %.0f s", name, report->pulse.age_s);
	else if (report->pulse.age_s > pulse_age_most_s)
		say(a, "%s: no pulse seen", name);
	if (isnan(report->pulse.card_error) && report->pulse.seen > 5)
		say(a, "%s: edges are seen, but not whole seconds apart", name);
	else if (report->pulse.spurious > share)
		say(a, "%s: %u edges are no pulses: noise, or something else on the wire", name, report->pulse.spurious);
	if (report->pulse.missing > share)
		say(a, "%s: %u pulses are missing", name, report->pulse.missing);
	if (report->pulse.interval_rms_s > scatter_most_s)
		say(a, "%s: intervals scatter by %.3g us: too noisy, or not from a GPS module", name,
		    report->pulse.interval_rms_s * 1e6);
}

size_t levels_advise(const struct meter_report *report, char (*out)[LEVELS_ADVICE], size_t max)
{
	struct advice a = { .out = out, .max = max };

	if (report->lost)
		say(&a, "%llu frames were lost: the computer or the card is too slow", (unsigned long long)report->lost);
	for (size_t k = 0; k < report->channels; k++) {
		take_name(&a, &report->channel[k]);
		advise_level(&a, report, k);
		advise_hum(&a, &report->channel[k]);
		advise_noise(&a, report, k);
		advise_leak(&a, &report->channel[k]);
	}
	advise_pulse(&a, report);
	return a.n;
}
