/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * Mains lines by Goertzel's recursion over windows of one second.  The flat-top window makes the amplitude right to a
 * thousandth while the mains are within half a hertz of nominal, and keeps other lines 70 dB down four hertz away.
 *
 * Sources: Goertzel (1958), Am. Math. Mon. 65, 34; window HFT70 and its noise bandwidth: Heinzel, Ruediger & Schilling
 * (2002), Spectrum and spectral density estimation by the DFT, appendix D.
 */
#include <errno.h>
#include <gsl/gsl_sort.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include "meter_inner.h"

static const double fundamentals[MAINS_FAMILIES] = { 50, 60 };
/* Four hertz and more away from every line and every other line's image. */
static const double between[MAINS_BETWEEN] = { 43, 55, 70, 78, 91, 109, 132, 139, 167, 189, 217 };
static const double flat_top[] = { 1, -1.90796, 1.07349, -0.18199 };    /* HFT70 */

static const double series_rate_least = 1000;   /* Hz: lines to 240 Hz are then hardly averaged out */
static const double carried = 0.45;             /* of the series' rate: what is above would be an image */
static const double memory_windows = 8;
/* A line's power over the noise's, less 1, in one window: by chance once in e^14.  In averages less, by their error. */
static const double standing_out = 13;

static double probe_frequency(size_t probe)
{
	if (probe >= MAINS_LINES)
		return between[probe - MAINS_LINES];
	return fundamentals[probe / METER_HARMONICS] * (double)(probe % METER_HARMONICS + 1);
}

/* Mean of `frames` samples of a sine over its amplitude. */
static double average_response(double frequency, double rate, double frames)
{
	double half = M_PI * frequency / rate;

	return fabs(sin(half * frames) / (frames * sin(half)));
}

int mains_plan_create(struct mains_plan *out, double rate)
{
	struct mains_plan p = { .series_rate = rate };

	while (p.series_rate >= 2 * series_rate_least) {
		p.series_rate /= 2;
		p.octave++;
	}
	if (carried * p.series_rate >= fundamentals[0])
		p.length = (size_t)lround(p.series_rate);
	p.window = calloc(p.length + 1, sizeof(*p.window));
	if (!p.window)
		return -ENOMEM;
	for (size_t k = 0; k < p.length; k++) {
		for (int j = 0; j < 4; j++)
			p.window[k] += flat_top[j] * cos(2 * M_PI * j * (double)k / (double)p.length);
		p.window_sum += p.window[k];
		p.window_squares += p.window[k] * p.window[k];
	}
	for (size_t k = 0; k < MAINS_PROBES; k++) {
		double f = probe_frequency(k);

		p.turn[k] = f < carried * p.series_rate ? 2 * cos(2 * M_PI * f / p.series_rate) : NAN;
		p.response[k] = average_response(f, rate, pow(2, p.octave));
	}
	*out = p;
	return 0;
}

void mains_plan_clear(struct mains_plan *plan)
{
	free(plan->window);
	plan->window = NULL;
}

void mains_break(struct mains *m)
{
	m->filled = 0;
	memset(m->s1, 0, sizeof(m->s1));
	memset(m->s2, 0, sizeof(m->s2));
}

/* The window is full: |X|^2 of every probe into the average. */
static void finish_window(struct mains *m, const struct mains_plan *plan)
{
	double weight = 1 / fmin(++m->windows, memory_windows);

	for (size_t k = 0; k < MAINS_PROBES; k++) {
		double a = m->s1[k], b = m->s2[k], power = a * a + b * b - plan->turn[k] * a * b;

		m->power[k] += weight * (power - m->power[k]);
	}
	m->spread = (1 - weight) * (1 - weight) * m->spread + weight * weight;
	mains_break(m);
}

void mains_feed(struct mains *m, const struct mains_plan *plan, const double *x, size_t n)
{
	for (size_t k = 0; k < n && plan->length; k++) {
		double y;

		if (m->filled == 0)
			m->offset = x[k];
		y = (x[k] - m->offset) * plan->window[m->filled];
		for (size_t j = 0; j < MAINS_PROBES; j++) {
			double s = y + plan->turn[j] * m->s1[j] - m->s2[j];

			m->s2[j] = m->s1[j];
			m->s1[j] = s;
		}
		if (++m->filled == plan->length)
			finish_window(m, plan);
	}
}

/* Power of the noise: median of the probes between the lines, over its bias (Wilson & Hilferty 1931, PNAS 17, 684). */
static double noise_power(const struct mains *m, const struct mains_plan *plan)
{
	double power[MAINS_BETWEEN], bias = pow(1 - m->spread / 9, 3);
	size_t n = 0;

	for (size_t k = MAINS_LINES; k < MAINS_PROBES; k++)
		if (isfinite(plan->turn[k]))
			power[n++] = m->power[k];
	if (!n)
		return NAN;
	gsl_sort(power, 1, n);
	return 0.5 * (power[(n - 1) / 2] + power[n / 2]) / bias;
}

/* Amplitudes of one family. @return its power */
static double read_family(const struct mains *m, const struct mains_plan *plan, size_t family, double noise,
                          double amplitude[METER_HARMONICS])
{
	double sum = 0;

	for (size_t k = 0; k < METER_HARMONICS; k++) {
		size_t probe = family * METER_HARMONICS + k;
		double power = m->power[probe];

		if (isnan(plan->turn[probe])) {
			amplitude[k] = NAN;
			continue;
		}
		amplitude[k] = 0;
		if (power <= (1 + standing_out * sqrt(m->spread)) * noise)
			continue;
		amplitude[k] = 2 * sqrt(power - noise) / (plan->window_sum * plan->response[probe]);
		sum += amplitude[k] * amplitude[k];
	}
	return sum;
}

void mains_report(const struct mains *m, const struct mains_plan *plan, struct meter_channel *out)
{
	double noise = noise_power(m, plan), power[MAINS_FAMILIES], amplitude[MAINS_FAMILIES][METER_HARMONICS];
	size_t family;

	out->mains.frequency_hz = out->mains.over_noise_db = out->noise_1ms = NAN;
	for (size_t k = 0; k < METER_HARMONICS; k++)
		out->mains.amplitude[k] = NAN;
	if (!m->windows || isnan(noise))
		return;
	/* Density, one-sided: 2 |X|^2 / (rate sum w^2); averages over tau have the variance density / (2 tau). */
	out->noise_1ms = sqrt(2 * noise / (plan->series_rate * plan->window_squares) / (2 * 1e-3));
	for (family = 0; family < MAINS_FAMILIES; family++)
		power[family] = read_family(m, plan, family, noise, amplitude[family]);
	family = power[1] > power[0];
	memcpy(out->mains.amplitude, amplitude[family], sizeof(out->mains.amplitude));
	out->mains.frequency_hz = 0;
	if (power[family] == 0)
		return;
	out->mains.frequency_hz = fundamentals[family];
	out->mains.strongest = 1;
	for (unsigned k = 1; k < METER_HARMONICS; k++)
		if (amplitude[family][k] > amplitude[family][out->mains.strongest - 1])
			out->mains.strongest = k + 1;
	out->mains.over_noise_db = 20 * log10(amplitude[family][out->mains.strongest - 1] * M_SQRT1_2 / out->noise_1ms);
}
