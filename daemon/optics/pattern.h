/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_OPTICS_PATTERN_H
#define LIMBWATCH_OPTICS_PATTERN_H

#include <math.h>
#include <stdbool.h>
#include <stddef.h>

/*
 * Inside the room optics: the pattern of one source component in Fresnel units w of the centre wavelength.
 *
 * Every average (source, aperture, passband, integration, detector) is a convolution, so the curve's slope has as its Fourier
 * transform a product, and the edge itself contributes a pure phase: with I'(w) = int i(nu) exp(2 pi i nu w) dnu,
 *
 *	i(nu) = exp(-2 pi i nu^2) for nu > 0, its conjugate for nu < 0      (Scheuer 1962, Aust. J. Phys. 15, 333).
 *
 * Near the contact the product is transformed back once, onto a table.  Far in the light each fringe comes from nu = w / 2 alone
 * (stationary phase), and what does not oscillate falls as 1 / (2 pi^2 w^2) on both sides.
 */

/* Transform of everything but the edge and the detector, as a function of nu in cycles per Fresnel unit. */
struct spectrum {
	double disc, darkening;         /* diameter */
	double gauss;                   /* standard deviation */
	double aperture, obstruction;   /* diameter, ratio */
	double box;                     /* integration */
	double top_hat;                 /* full width / centre wavelength */
	double band_sigma;              /* Gaussian passband: standard deviation / centre wavelength */
};

/* Source and aperture: real and even. */
double spectrum_smooth(const struct spectrum *spectrum, double nu);
/* All of it. */
double spectrum_value(const struct spectrum *spectrum, double nu);
/* A falling bound of its magnitude: the zeros between its lobes are bridged. */
double spectrum_bound(const struct spectrum *spectrum, double nu);
/* Half the extent of source and aperture; Gaussians count as far as they matter. */
double spectrum_extent(const struct spectrum *spectrum);
/* Variance of all kernels together, for the tails. */
double spectrum_variance(const struct spectrum *spectrum);

/*
 * Detector as direct + sum of gain_i / (1 + s tau_i): low-pass, high-pass or both.  Time runs along direction * w.
 */
enum { MAX_POLES = 2 };
struct response {
	int direction;                  /* +1 emersion, -1 immersion */
	double direct;
	size_t poles;
	struct {
		double gain, tau;       /* tau in Fresnel times */
	} pole[MAX_POLES];
};

/* tau 0: none. */
void response_init(struct response *response, int direction, double low_pass, double high_pass);
/* Transfer at nu, for a fringe travelling in w. */
void response_transfer(const struct response *response, double nu, double *real, double *imaginary);

enum { MAX_NODES = 32 };

struct pattern {
	struct spectrum spectrum;
	struct response response;
	bool bare;                      /* closed form holds everywhere; no table */
	double variance;

	/* Table of 2 half + 1 values, w = -half h .. half h; good between -limit and limit. */
	double h, limit;
	ptrdiff_t half;
	double *table;

	/* Up to here fringes matter.  Outside the table they come by stationary phase: exp(i pi u^2 / 2) as a sum of
	 * node_j cos(2 pi j spacing u) over the extent of the kernels. */
	double fringes;
	size_t nodes;
	double spacing;
	double node_real[MAX_NODES], node_imaginary[MAX_NODES];

	/* What each pole still remembers where the table ends in time, and where that is. */
	double memory[MAX_POLES], memory_w;
};

/* Non-oscillating part of the edge far from the contact: TAIL / w^2. */
#define TAIL (0.5 * M_1_PI * M_1_PI)

/* Bound of the fringe's amplitude at w. */
double fringe_bound(const struct spectrum *spectrum, double w);

int pattern_init(struct pattern *pattern, const struct spectrum *spectrum, const struct response *response);
void pattern_release(struct pattern *pattern);
double pattern_value(const struct pattern *pattern, double w);

/* far.c: beyond the table, before the detector or behind it. */
int far_init(struct pattern *pattern, double extent);
double far_fringe(const struct pattern *pattern, const struct response *response, double w);
double far_value(const struct pattern *pattern, double w);
double far_tail(const struct pattern *pattern, double w);

/* response.c: one pole run along the table; out has the table's length. */
/* 0, -ENOMEM */
int response_run(struct pattern *pattern, size_t pole, const double *in, double *out);
/* One pole's answer to the level and the tail before and after the table. */
double response_before(const struct pattern *pattern, size_t pole, double w);
double response_after(const struct pattern *pattern, size_t pole, double w);

/* Eight-point Lagrange interpolation: weights for a point s (0 to 1) beyond the fourth. */
enum { STENCIL = 8 };
void lagrange_weights(double s, double weight[STENCIL]);

#endif
