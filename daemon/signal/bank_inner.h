/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef BANK_INNER_H
#define BANK_INNER_H

#include "limbwatch/bank.h"

/* What bank.c (templates, whitening, detection) and fit.c share. */

enum {
	N = DETECTOR_WINDOW,
	OVERSAMPLING = 4,               /* lags of the fit grid are quarters of a sample */
	MARGIN = 13,                    /* samples a template can be shifted either way */
	FINE = (N + 2 * MARGIN) * OVERSAMPLING,
	DETECTING = CONTACT_KINDS * BANK_SCALES * BANK_SIZES,
};

struct detecting { struct bank_template what; size_t scale, size; };

/* The Gaussian field rho is under noise: change per sample of lag, correlation with the scale before, the size after. */
struct field { double lag_speed[BANK_SCALES], next_scale[BANK_SCALES], next_size[BANK_SCALES]; };

/* s'Ps of the fit grid's templates at five lags, worked out by the first fit after whitening. */
enum { NORMS = 5 };
struct norms { bool known; double norm[FIT_SIZES][FIT_SCALES][NORMS]; };

struct bank {
	struct detector_settings settings;
	double scale_min, scale_step;   /* of the fit grid; step in ln(scale) */
	float *fine[CONTACT_KINDS];     /* the fit grid's templates, oversampled; NULL: kind not watched for */
	size_t count, columns;          /* columns: of the baseline */
	struct detecting detecting[DETECTING];
	struct field field[CONTACT_KINDS];
	struct norms *norms;            /* of each kind */
	float weights[DETECTING][N];
	double projector[N * N];
};

double bank_contact(enum contact_kind kind);
double bank_fit_scale(const struct bank *bank, size_t k);
double bank_fit_size(size_t k);
void bank_fine(const struct bank *bank, enum contact_kind kind, size_t scale, size_t size, int lag, double s[N]);
int bank_curve(const struct bank *bank, enum contact_kind kind, double scale, double size, struct curve **out);
double bank_curve_value(const struct bank *bank, const struct curve *curve, double t);
void bank_project(const struct bank *bank, const double s[N], double y[N]);
double bank_product(const double a[N], const double b[N]);

#endif
