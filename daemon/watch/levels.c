/* SPDX-License-Identifier: GPL-3.0-or-later */
/* The table of levels, within 100 columns. */
#include <errno.h>
#include <math.h>
#include <string.h>
#include "../base/utf8.h"
#include "limbwatch/levels.h"
#include "limbwatch/log.h"

enum { COLUMNS = 100, NAME_WIDTH = 14, CELL = 24, BAR = 60, TAUS = 7 };

static const double speed_of_light = 299792458.0;       /* m/s, exact (SI) */
static const double longest_optical_m = 2e-5;    /* of channels.wavelength_nm */
static const double taus_s[TAUS] = { 0, 1e-3, 1e-2, 0.1, 1, 10, 100 };
static const double known_differences = 4;      /* a deviation from fewer may be wrong by half */

int levels_settings(struct meter_settings *out, const struct config *config, const struct intake *intake)
{
	struct meter_settings s = {
		.format = intake->format, .rate = intake->rate, .card_tolerance = config->clock.card_tolerance,
		.memory_s = intake->real_time ? LEVELS_MEMORY_S : 0, .channels = config->channels,
	};

	for (size_t k = 0; k < config->channels; k++) {
		const struct config_channel *c = &config->channel[k];
		double lambda = c->curve.passband.wavelength_m;

		if (c->column >= intake->format.channels) {
			log_error("channel \"%s\" stands in column %u, but %s has %u", c->name, c->column + 1, intake->name,
			          intake->format.channels);
			return -EINVAL;
		}
		s.channel[k].name = c->name;
		s.channel[k].column = c->column;
		s.channel[k].measure = c->measure;
		s.channel[k].polarity = c->polarity;
		s.channel[k].coupled = c->curve.high_pass_hz > 0;
		/* Only a radio passband has many photons per mode, and so the radiometer's noise. */
		if (c->measure == MEASURE_VOLTAGE && lambda > longest_optical_m && !s.channel[k].coupled)
			s.channel[k].bandwidth_hz = speed_of_light * c->curve.passband.width_m / (lambda * lambda);
		s.channel[k].pulse_width_s = c->pulse.width_s;
		s.channel[k].pulse_jitter_s = c->pulse.jitter_s;
	}
	*out = s;
	return 0;
}

/* ------------------------------------------------------------------ cells */

static const char *cell(char text[CELL], const char *format, double x) __attribute__((format(printf, 2, 0)));

static const char *cell(char text[CELL], const char *format, double x)
{
	if (fabs(x) >= 1000 && isfinite(x))
		snprintf(text, CELL, "%.2e", x);        /* FLOAT samples may be anything: the columns hold */
	else if (isfinite(x))
		snprintf(text, CELL, format, x);
	else
		strcpy(text, "--");
	return text;
}

/* An interval in the unit that suits it, short. */
static const char *tau_cell(char text[CELL], double tau)
{
	if (tau < 0.9995e-3)
		snprintf(text, CELL, "%.3g us", tau * 1e6);
	else if (tau < 0.9995)
		snprintf(text, CELL, "%.3g ms", tau * 1e3);
	else
		snprintf(text, CELL, "%.3g s", tau);
	return text;
}

static const char *seconds_cell(char text[CELL], double seconds)
{
	snprintf(text, CELL, seconds < 1e9 ? "%.1f" : "%.3g", seconds);
	return text;
}

static const char *count_cell(char text[CELL], uint64_t n)
{
	if (n < 100000)
		snprintf(text, CELL, "%llu", (unsigned long long)n);
	else
		snprintf(text, CELL, "%.2g", (double)n);
	return text;
}

/* A text of at most that many characters, cut with a dot. @return characters */
static size_t print_cut(FILE *out, const char *text, size_t width)
{
	size_t characters = utf8_count(text, strlen(text)), bytes = 0;
	size_t shown = characters > width ? width - 1 : characters;

	while (text[bytes] && utf8_count(text, bytes + 1) <= shown)
		bytes++;
	fprintf(out, "%.*s%s", (int)bytes, text, characters > width ? "." : "");
	return characters > width ? width : characters;
}

/* A name in its field. */
static void print_name(FILE *out, const char *name)
{
	for (size_t k = print_cut(out, name, NAME_WIDTH); k < NAME_WIDTH; k++)
		putc(' ', out);
}

/* ------------------------------------------------------------------ parts */

static const char *polarity_word(const struct meter_channel *c)
{
	if (c->measure == MEASURE_PULSE)
		return c->polarity > 0 ? "rising" : c->polarity < 0 ? "falling" : "--";
	return c->measure == MEASURE_AUX ? "" : c->polarity < 0 ? "inverted" : "normal";
}

static const char *hum_word(char text[CELL], const struct meter_channel *c)
{
	if (c->measure == MEASURE_PULSE)
		return "";
	if (isnan(c->mains.frequency_hz))
		return "--";
	if (c->mains.frequency_hz == 0)
		return "none";
	snprintf(text, CELL, isfinite(c->mains.over_noise_db) ? "%.0f Hz %+.0f dB" : "%.0f Hz",
	         c->mains.frequency_hz * c->mains.strongest, c->mains.over_noise_db);
	return text;
}

static void print_levels(FILE *out, const struct meter_report *report)
{
	bool live = report->memory_s > 0;

	fprintf(out, "%-*s %8s %10s %9s %9s %9s %8s", NAME_WIDTH, "channel", "polarity", "mean", "rms", "peak", "headroom",
	        "clipped");
	fprintf(out, live ? " %8s  %s\n" : "%s  %s\n", live ? "in all" : "", "hum over noise");
	for (size_t k = 0; k < report->channels; k++) {
		const struct meter_channel *c = &report->channel[k];
		const struct meter_span *s = meter_span(report, k);
		char a[CELL], b[CELL], d[CELL], e[CELL], f[CELL], g[CELL], h[CELL];

		print_name(out, c->name);
		fprintf(out, " %8s %10s %9s %9s %9s %8s", polarity_word(c), cell(a, "%+.5f", s->mean), cell(b, "%.3g", s->rms),
		        cell(d, "%.4f", s->peak), cell(e, "%.1f dB", c->headroom_db),
		        isfinite(s->peak) ? count_cell(f, s->clipped) : "--");
		fprintf(out, live ? " %8s  %s\n" : "%s  %s\n", live ? count_cell(g, c->whole.clipped) : "", hum_word(h, c));
	}
}

static int decibels_of(double x)
{
	return x > 0 ? (int)fmax(0, BAR + 20 * log10(x)) : 0;
}

/* A decibel a character: = rms about zero, - up to the peak, > largest peak of the last ten seconds, | full scale. */
static void print_bars(FILE *out, const struct meter_report *report)
{
	fprintf(out, "\n%-*s %-20s%-20s%-20s%s\n", NAME_WIDTH, "", "-60 dB", "-40 dB", "-20 dB", "0 dB: full scale");
	for (size_t k = 0; k < report->channels; k++) {
		const struct meter_span *s = meter_span(report, k);
		int rms = decibels_of(hypot(s->mean, s->rms)), peak = decibels_of(s->peak);
		int held = decibels_of(pow(10, -report->channel[k].headroom_db / 20));

		print_name(out, report->channel[k].name);
		putc(' ', out);
		for (int at = 0; at <= BAR; at++)
			putc(at == BAR ? '|' : at == held && held > 0 ? '>' : at < rms ? '=' : at < peak ? '-' :
			     at % 20 == 0 ? '.' : ' ', out);
		fputs(s->clipped ? " CLIPPED\n" : "\n", out);
	}
}

static void print_mains(FILE *out, const struct meter_report *report)
{
	bool any = false;

	for (size_t k = 0; k < report->channels; k++) {
		const struct meter_channel *c = &report->channel[k];
		char text[CELL];

		if (!(c->mains.frequency_hz > 0) || c->measure == MEASURE_PULSE)
			continue;
		fprintf(out, "%s", any ? "" : "\nmains: amplitudes, and the rms noise of 1 ms between them\n");
		any = true;
		print_name(out, c->name);
		for (int h = 0; h < METER_HARMONICS; h++)
			fprintf(out, "  %3.0f Hz %-8s", c->mains.frequency_hz * (h + 1), c->mains.amplitude[h] == 0 ? "none" :
			        cell(text, "%.2e", c->mains.amplitude[h]));
		fprintf(out, "  noise %s\n", cell(text, "%.2e", c->noise_1ms));
	}
}

/* The octaves nearest to the integration times of the table, each once. @return their number */
static size_t choose_octaves(const struct meter_report *report, size_t octave[TAUS])
{
	size_t n = 0;

	for (size_t k = 0; k < TAUS; k++) {
		double o = rint(log2(fmax(1, taus_s[k] * report->rate)));

		if (o < METER_OCTAVES && (n == 0 || (size_t)o > octave[n - 1]))
			octave[n++] = (size_t)o;
	}
	return n;
}

enum noise_row { ROW_MEASURED, ROW_WHITE, ROW_RADIOMETER };

static void print_noise_row(FILE *out, const struct meter_report *report, size_t channel, enum noise_row row)
{
	static const char *const words[] = { "measured", "white", "radiometer" };
	const struct meter_channel *c = &report->channel[channel];
	size_t octave[TAUS], n = choose_octaves(report, octave);
	char text[CELL];

	print_name(out, row == ROW_MEASURED ? c->name : "");
	fprintf(out, " %-10s", words[row]);
	for (size_t k = 0; k < n; k++) {
		bool known = c->octave[octave[k]].differences >= known_differences;
		double x = row == ROW_WHITE ? meter_white(c, octave[k]) :
			row == ROW_RADIOMETER ? meter_radiometer(report, channel, octave[k]) :
			known ? c->octave[octave[k]].deviation : NAN;

		fprintf(out, " %9s", cell(text, "%.2e", x));
	}
	putc('\n', out);
}

static void print_noise(FILE *out, const struct meter_report *report)
{
	size_t octave[TAUS], n = choose_octaves(report, octave);
	char text[CELL];

	fprintf(out, "\n%-*s %-10s", NAME_WIDTH, "noise of", "averages");
	for (size_t k = 0; k < n; k++)
		fprintf(out, " %9s", tau_cell(text, meter_tau(report, octave[k])));
	putc('\n', out);
	for (size_t k = 0; k < report->channels; k++) {
		if (report->channel[k].measure == MEASURE_PULSE)
			continue;
		print_noise_row(out, report, k, ROW_MEASURED);
		print_noise_row(out, report, k, ROW_WHITE);
		if (report->channel[k].bandwidth_hz > 0)
			print_noise_row(out, report, k, ROW_RADIOMETER);
	}
}

static void print_leaks(FILE *out, const struct meter_report *report)
{
	char step[CELL], sigma[CELL], over[CELL], pulses[CELL];

	for (size_t k = 0; k < report->channels; k++) {
		const struct meter_channel *c = &report->channel[k];

		if ((int)k == report->pulse.channel || c->leak.pulses < 3)
			continue;
		print_name(out, c->name);
		fprintf(out, " steps at the pulse by %s +- %s, %s of its noise of 1 ms; %s pulses\n",
		        cell(step, "%+.2e", c->leak.step), cell(sigma, "%.1e", c->leak.sigma),
		        cell(over, "%.2f", fabs(c->leak.step) / c->noise_1ms), count_cell(pulses, c->leak.pulses));
	}
}

static void print_pulse(FILE *out, const struct meter_report *report)
{
	char scatter[CELL], card[CELL], seen[CELL], missing[CELL], spurious[CELL];

	if (report->pulse.channel < 0)
		return;
	putc('\n', out);
	print_name(out, report->channel[report->pulse.channel].name);
	fprintf(out, " %s pulses seen, %s missing, %s spurious", count_cell(seen, report->pulse.seen),
	        count_cell(missing, report->pulse.missing), count_cell(spurious, report->pulse.spurious));
	fprintf(out, "; intervals +- %s us, card %s ppm\n", cell(scatter, "%.3g", report->pulse.interval_rms_s * 1e6),
	        cell(card, "%+.3f", report->pulse.card_error * 1e6));
	print_leaks(out, report);
}

/* Above what does not fit on a small terminal. */
static void print_advice(FILE *out, const struct meter_report *report)
{
	char advice[LEVELS_ADVICES][LEVELS_ADVICE];
	size_t n = levels_advise(report, advice, LEVELS_ADVICES);

	fputs(n ? "\n" : "\nNothing is wrong.\n", out);
	for (size_t k = 0; k < n; k++) {
		fputs("! ", out);
		print_cut(out, advice[k], COLUMNS - 2);
		putc('\n', out);
	}
}

void levels_print(FILE *out, const char *title, const struct meter_report *report)
{
	char seconds[CELL], lost[CELL];

	print_cut(out, title, COLUMNS);
	fprintf(out, "\n%s s at %g Hz, %s frames lost; over full scale; = rms, - peak, > largest of the last 10 s\n\n",
	        seconds_cell(seconds, (double)report->frames / report->rate), report->rate,
	        count_cell(lost, report->lost));
	print_levels(out, report);
	print_bars(out, report);
	print_advice(out, report);
	print_mains(out, report);
	print_noise(out, report);
	print_pulse(out, report);
}
