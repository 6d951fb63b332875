/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_BANK_H
#define LIMBWATCH_BANK_H

#include <stdbool.h>
#include <stddef.h>
#include "limbwatch/contact.h"
#include "limbwatch/detector.h"
#include "limbwatch/noise.h"

/*
 * Templates of one expected contact, and generalised least squares in a window of DETECTOR_WINDOW samples: noise covariance C
 * (Toeplitz), baseline B = [1, t, sin and cos of the lines] marginalised,
 *   P = C^-1 - C^-1 B (B' C^-1 B)^-1 B' C^-1,   rho = s'Px / sqrt(s'Ps),   which is N(0, 1) under noise.
 */
struct bank;

enum {
	BANK_SCALES = 8, BANK_SIZES = 2,                /* to detect with */
	FIT_SCALES = 24, FIT_SIZES = 4,                 /* to fit with; the former are among them */
};

struct bank_template {
	enum contact_kind kind;
	double scale;                   /* T_F over the expected */
	double size;                    /* diameter, Fresnel units */
	double contact;                 /* where the contact stands, samples from the window's beginning */
};

/** Builds all templates for noise that is white.  Takes some tenths of a second. Caller destroys. */
int  bank_create(struct bank **out, const struct detector_settings *settings);
void bank_destroy(struct bank *bank);

/**
 * Whitens the templates for a noise model.  Some 20 ms.
 *
 * @return 0; -EDOM when the covariance is not positive definite (the former one stays)
 */
int bank_whiten(struct bank *bank, const struct noise_model *noise);

/** Templates to detect with. */
size_t bank_templates(const struct bank *bank);
const struct bank_template *bank_template(const struct bank *bank, size_t k);

/** Signal thread, hot.  rho[k] of every template for one window. No allocation. */
void bank_execute(const struct bank *bank, const float *window, float *rho);
/** One template's weights h of rho = h'x: what bank_execute() multiplies with. */
const float *bank_weights(const struct bank *bank, size_t k);
/** P, DETECTOR_WINDOW x DETECTOR_WINDOW, row by row. */
const double *bank_projector(const struct bank *bank);

/**
 * Rate at which the largest rho of noise passes u upwards, per sample, for all templates of one kind: Rice's rate of
 * each template, exp(-u^2 / 2) / (2 pi) times the rms change of rho per sample, times the share erf(kappa / sqrt(2)), kappa = u
 * sqrt((1 - r) / (1 + r)), of its passages that its neighbour, correlated by r at the best lag, does not have too.  For
 * neighbours close together this is the expected Euler characteristic of a field; for far ones, each counts whole.
 *
 * Sources: Rice (1945), Bell System Tech. J. 24, 46; Adler & Taylor, Random Fields and Geometry (2007), chapter 12.
 */
double bank_alarm_rate(const struct bank *bank, enum contact_kind kind, double u);

struct bank_fit {
	double contact, contact_sigma;  /* samples from the window's beginning */
	double rho, scale, scale_sigma, size, flux, baseline;
	double chi2;                    /* x'Px - rho^2 */
	double freedom;                 /* its degrees of freedom */
	double fringe_gain;
	bool   flank;                   /* best at the end of the lags looked at, 12 samples: the contact is elsewhere */
};

/** The fit grid, then Gauss-Newton over contact and scale.  Some 50 ms. @return false: no positive flux fits */
bool bank_fit(const struct bank *bank, const float *window, enum contact_kind kind, struct bank_fit *out);

#endif
