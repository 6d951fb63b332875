/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <gsl/gsl_linalg.h>
#include <gsl/gsl_randist.h>
#include <math.h>
#include <stdlib.h>
#include "series_probe.h"

enum { W = DETECTOR_WINDOW };

void series_settings(struct detector_settings *out)
{
	*out = (struct detector_settings){
		.curve = {
			.distance_m = 371500e3, .speed_mps = 612, .passband = { PASSBAND_GAUSSIAN, 620e-9, 120e-9 },
			.aperture_m = 0.28, .components = 1, .component = { { .shape = SHAPE_POINT, .flux = 1 } },
		},
		.kind = { true, true }, .scale_min = 0.6, .scale_max = 1.6,
		.false_alarms_per_night = 0.5, .false_alarms_per_vigil = 0.01, .scintillation = 0.1,
	};
	out->rate = 16 / curve_fresnel_time(&out->curve);
}

static void sample_event(const struct detector_settings *settings, const struct series_event *event, double first,
                         double *x, size_t n)
{
	struct curve_parameters p = settings->curve;
	struct curve *curve;

	p.kind = event->kind;
	p.speed_mps /= event->scale;
	p.integration_s = 1 / settings->rate;
	p.component[0].shape = SHAPE_UNIFORM_DISC;
	p.component[0].size_rad = event->size * curve_fresnel_time(&p) * p.speed_mps / p.distance_m;
	if (curve_create(&curve, &p) < 0)
		abort();
	curve_sample(curve, (first + 0.5 - event->contact) / settings->rate, 1 / settings->rate, n, x);
	curve_destroy(curve);
}

void series_add_event(const struct detector_settings *settings, const struct series_event *event, double first,
                      float *x, size_t n)
{
	double *shape = malloc(n * sizeof(*shape));

	if (!shape)
		abort();
	sample_event(settings, event, first, shape, n);
	for (size_t k = 0; k < n; k++)
		x[k] += (float)(event->flux * shape[k]);
	free(shape);
}

/* Columns: the event, its derivatives by contact and ln(scale), 1, t. */
static void design(const struct detector_settings *settings, const struct series_event *event, double column[5][W])
{
	static const double h = 1e-3;
	struct series_event near = *event;
	double high[W];

	near.contact = (event->kind == CONTACT_EMERSION ? 0.21 : 0.79) * W;
	sample_event(settings, &near, 0, column[0], W);
	sample_event(settings, &near, h, high, W);
	sample_event(settings, &near, -h, column[1], W);
	for (int k = 0; k < W; k++)
		column[1][k] = (column[1][k] - high[k]) / (2 * h);
	near.scale = event->scale * exp(h);
	sample_event(settings, &near, 0, high, W);
	near.scale = event->scale * exp(-h);
	sample_event(settings, &near, 0, column[2], W);
	for (int k = 0; k < W; k++) {
		column[2][k] = (high[k] - column[2][k]) / (2 * h);
		column[3][k] = 1;
		column[4][k] = k / (double)W - 0.5;
	}
}

double series_unit_snr(const struct detector_settings *settings, const struct series_event *event, double *bound)
{
	static const int snr_columns[3] = { 0, 3, 4 };
	double column[5][W], all[25], some[9];
	gsl_matrix_view fisher = gsl_matrix_view_array(all, 5, 5), smaller = gsl_matrix_view_array(some, 3, 3);

	design(settings, event, column);
	for (int i = 0; i < 5; i++)
		for (int j = 0; j < 5; j++) {
			all[5 * i + j] = 0;
			for (int k = 0; k < W; k++)
				all[5 * i + j] += column[i][k] * column[j][k];
		}
	for (int i = 0; i < 3; i++)
		for (int j = 0; j < 3; j++)
			some[3 * i + j] = all[5 * snr_columns[i] + snr_columns[j]];
	gsl_linalg_cholesky_decomp1(&fisher.matrix);
	gsl_linalg_cholesky_invert(&fisher.matrix);
	gsl_linalg_cholesky_decomp1(&smaller.matrix);
	gsl_linalg_cholesky_invert(&smaller.matrix);
	if (bound)
		*bound = sqrt(all[6]);
	return 1 / sqrt(some[0]);
}

void series_noise(struct series_noise *noise, float *x, size_t n)
{
	double decay = noise->red > 0 ? exp(-1 / noise->memory) : 0, kick = noise->red * sqrt(1 - decay * decay);

	for (size_t k = 0; k < n; k++) {
		double sum = noise->white * gsl_ran_gaussian_ziggurat(noise->rng, 1);

		if (noise->red > 0) {
			noise->state = decay * noise->state + kick * gsl_ran_gaussian_ziggurat(noise->rng, 1);
			sum += noise->state;
		}
		x[k] += (float)sum;
	}
}
