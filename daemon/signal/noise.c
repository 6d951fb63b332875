/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <gsl/gsl_fft_halfcomplex.h>
#include <gsl/gsl_fft_real.h>
#include <gsl/gsl_sort.h>
#include <gsl/gsl_statistics_double.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include "limbwatch/noise.h"

static const double smoothing = 0.15;           /* half width over frequency */
static const double line_excess = 10;           /* a line stands this much above its surroundings */
static const double floor_ratio = 1e-6;         /* of the median spectrum: keeps the covariance positive definite */
enum { WIDEST = 16, LINE_HALF = 3, SURROUNDINGS = 20, LOWEST_LINE = 8, FEWEST = 4 };

struct noise {
	size_t count, next;
	float power[NOISE_KEPT][NOISE_BINS];    /* periodograms, newest written at `next` */
	double window[NOISE_SEGMENT], window_squares;
};

int noise_create(struct noise **out)
{
	struct noise *noise = calloc(1, sizeof(*noise));

	if (!noise)
		return -ENOMEM;
	for (int k = 0; k < NOISE_SEGMENT; k++) {
		noise->window[k] = 0.5 - 0.5 * cos(2 * M_PI * (k + 0.5) / NOISE_SEGMENT);
		noise->window_squares += noise->window[k] * noise->window[k];
	}
	*out = noise;
	return 0;
}

void noise_destroy(struct noise *noise)
{
	free(noise);
}

void noise_clear(struct noise *noise)
{
	noise->count = noise->next = 0;
}

size_t noise_count(const struct noise *noise)
{
	return noise->count;
}

/* Takes mean and least-squares slope off. */
static void straighten(double *x)
{
	double mean = 0, slope = 0, squares = 0;

	for (int k = 0; k < NOISE_SEGMENT; k++) {
		double t = k - (NOISE_SEGMENT - 1) / 2.0;

		mean += x[k];
		slope += t * x[k];
		squares += t * t;
	}
	mean /= NOISE_SEGMENT;
	slope /= squares;
	for (int k = 0; k < NOISE_SEGMENT; k++)
		x[k] -= mean + slope * (k - (NOISE_SEGMENT - 1) / 2.0);
}

void noise_add(struct noise *noise, const float *segment)
{
	double x[NOISE_SEGMENT];
	float *power = noise->power[noise->next];

	for (int k = 0; k < NOISE_SEGMENT; k++)
		x[k] = (double)segment[k];
	straighten(x);
	for (int k = 0; k < NOISE_SEGMENT; k++)
		x[k] *= noise->window[k];
	gsl_fft_real_radix2_transform(x, 1, NOISE_SEGMENT);
	for (int k = 0; k < NOISE_BINS; k++) {
		double im = k > 0 && k < NOISE_SEGMENT / 2 ? x[NOISE_SEGMENT - k] : 0;

		power[k] = (float)((x[k] * x[k] + im * im) / noise->window_squares);
	}
	noise->next = (noise->next + 1) % NOISE_KEPT;
	if (noise->count < NOISE_KEPT)
		noise->count++;
}

/* Expected median over mean of n exponential variates: 1 - 1/2 + 1/3 ... for odd n. */
static double median_bias(size_t n)
{
	double sum = 0;

	for (size_t k = 1; k <= (n | 1); k++)
		sum += (k & 1 ? 1.0 : -1.0) / (double)k;
	return sum;
}

static void median_spectrum(const struct noise *noise, double *out)
{
	double column[NOISE_KEPT], bias = median_bias(noise->count);

	for (int k = 0; k < NOISE_BINS; k++) {
		for (size_t s = 0; s < noise->count; s++)
			column[s] = (double)noise->power[s][k];
		gsl_sort(column, 1, noise->count);
		out[k] = gsl_stats_median_from_sorted_data(column, 1, noise->count) / bias;
	}
	/* Mean and slope were taken off: the lowest bins are told from the next. */
	out[0] = out[1] = out[2];
}

/* Median of the bins around k, its own line left out. */
static double surroundings(const double *power, int k)
{
	double around[2 * SURROUNDINGS + 1];
	size_t n = 0;

	for (int j = k - SURROUNDINGS; j <= k + SURROUNDINGS; j++)
		if (j >= 2 && j < NOISE_BINS && abs(j - k) > LINE_HALF)
			around[n++] = power[j];
	return gsl_stats_median(around, 1, n);
}

/* Frequency between bins, from the three powers about the peak (parabola of their logarithms). */
static double peak_frequency(const double *power, int k)
{
	double a = log(power[k - 1]), b = log(power[k]), c = log(power[k + 1]), curve = a - 2 * b + c;

	return (k + (curve < 0 ? 0.5 * (a - c) / curve : 0)) / NOISE_SEGMENT;
}

static void take_lines_out(double *power, struct noise_model *model)
{
	model->lines = 0;
	while (model->lines < NOISE_LINES) {
		double best = line_excess, level = 0;
		int at = 0;

		for (int k = LOWEST_LINE; k < NOISE_BINS - 2; k++) {
			double around = surroundings(power, k);

			if (around > 0 && power[k] > best * around && power[k] >= power[k - 1] && power[k] >= power[k + 1]) {
				best = power[k] / around;
				level = around;
				at = k;
			}
		}
		if (!at)
			return;
		model->line[model->lines++] = peak_frequency(power, at);
		for (int k = at - LINE_HALF; k <= at + LINE_HALF; k++)
			if (k > 0 && k < NOISE_BINS && power[k] > level)
				power[k] = level;
	}
}

static void smooth(const double *power, double *out)
{
	for (int k = 0; k < NOISE_BINS; k++) {
		int half = (int)fmin(WIDEST, fmax(1, rint(smoothing * k))), n = 0;
		double sum = 0;

		for (int j = k - half; j <= k + half; j++)
			if (j >= 1 && j < NOISE_BINS) {
				sum += power[j];
				n++;
			}
		out[k] = sum / n;
	}
}

static void autocovariance(const double *power, double *out)
{
	double x[NOISE_SEGMENT] = { 0 };

	for (int k = 0; k < NOISE_BINS; k++)
		x[k] = power[k];        /* half-complex, real parts only */
	gsl_fft_halfcomplex_radix2_inverse(x, 1, NOISE_SEGMENT);
	memcpy(out, x, NOISE_LAGS * sizeof(*out));
}

int noise_measure(const struct noise *noise, struct noise_model *out)
{
	double power[NOISE_BINS], smoothed[NOISE_BINS], median;

	if (noise->count < FEWEST)
		return -ENODATA;
	median_spectrum(noise, power);
	take_lines_out(power, out);
	smooth(power, smoothed);
	memcpy(power, smoothed, sizeof(power));
	median = gsl_stats_median(power, 1, NOISE_BINS);        /* reorders */
	if (!(median > 1e-30))
		return -EDOM;
	for (int k = 0; k < NOISE_BINS; k++)
		smoothed[k] = fmax(smoothed[k], floor_ratio * median);
	autocovariance(smoothed, out->covariance);
	return 0;
}

void noise_assume(double variance, struct noise_model *out)
{
	*out = (struct noise_model){ 0 };
	out->covariance[0] = variance;
}
