/* SPDX-License-Identifier: GPL-3.0-or-later */
/* The pattern far from the contact, where the fringes are too fine for a table. */
#include <complex.h>
#include <errno.h>
#include <gsl/gsl_linalg.h>
#include <math.h>

#include "pattern.h"

/* What the sum of cosines may cost, in intensity. */
#define NODE_ERROR 1e-9
enum { MIN_NODES = 8 };

static double chebyshev(double reach, size_t n, size_t i)
{
	return reach * cos(M_PI * (2 * i + 1) / (4.0 * n));
}

/* Collocation at Chebyshev points of the extent: node_j of the sum, one part at a time. */
static int solve_nodes(struct pattern *pattern, double reach)
{
	size_t n = pattern->nodes;
	gsl_matrix *matrix = gsl_matrix_alloc(n, n);
	gsl_vector *side = gsl_vector_alloc(n), *answer = gsl_vector_alloc(n);
	gsl_permutation *order = gsl_permutation_alloc(n);
	int sign, ret = -ENOMEM;

	if (!matrix || !side || !answer || !order)
		goto free_all;
	for (size_t i = 0; i < n; i++)
		for (size_t j = 0; j < n; j++)
			gsl_matrix_set(matrix, i, j, cos(2.0 * M_PI * j * pattern->spacing * chebyshev(reach, n, i)));
	gsl_linalg_LU_decomp(matrix, order, &sign);
	for (int part = 0; part < 2; part++) {
		double *node = part ? pattern->node_imaginary : pattern->node_real;

		for (size_t i = 0; i < n; i++) {
			double u = chebyshev(reach, n, i), phase = M_PI_2 * u * u;

			gsl_vector_set(side, i, part ? sin(phase) : cos(phase));
		}
		gsl_linalg_LU_solve(matrix, order, side, answer);
		for (size_t j = 0; j < n; j++)
			node[j] = gsl_vector_get(answer, j);
	}
	ret = 0;
free_all:
	gsl_permutation_free(order);
	gsl_vector_free(answer);
	gsl_vector_free(side);
	gsl_matrix_free(matrix);
	return ret;
}

/* Largest error of the sum of cosines over the extent. */
static double node_error(const struct pattern *pattern, double reach)
{
	enum { PROBES = 64 };
	double worst = 0.0;

	for (int i = 0; i <= PROBES; i++) {
		double u = reach * i / PROBES;
		double real = -cos(M_PI_2 * u * u), imaginary = -sin(M_PI_2 * u * u);

		for (size_t j = 0; j < pattern->nodes; j++) {
			double cosine = cos(2.0 * M_PI * j * pattern->spacing * u);

			real += pattern->node_real[j] * cosine;
			imaginary += pattern->node_imaginary[j] * cosine;
		}
		worst = fmax(worst, hypot(real, imaginary));
	}
	return worst;
}

/*
 * Around nu0 = w / 2 the transform is int exp(-2 pi i s^2) G(nu0 + s) ds; a kernel at distance u turns up in G as
 * exp(2 pi i u s) and in the integral as exp(i pi u^2 / 2).  That function is written as a sum of cosines over the extent of the
 * kernels, so that G is needed at a few real nu only.
 */
int far_init(struct pattern *pattern, double extent)
{
	/* half a unit for the detector, the passband and 1 / nu, which are smooth */
	double reach = extent / sqrt(1.0 - 0.5 * pattern->spectrum.top_hat) + 0.5;
	double allowed = NODE_ERROR / fringe_bound(&pattern->spectrum, pattern->limit);

	pattern->spacing = 1.0 / ((reach < 1.2 ? 4.0 : 3.0) * reach);
	for (pattern->nodes = MIN_NODES;; pattern->nodes += 4) {
		int ret = solve_nodes(pattern, reach);

		if (ret || pattern->nodes == MAX_NODES || node_error(pattern, reach) <= allowed)
			return ret;
	}
}

/* What the fringe that comes from one edge of passband and integration is multiplied by at nu. */
struct term {
	int band;                       /* 0: passband as a smooth factor; -1, +1: its short, its long edge */
	int box;                        /* 0: integration as a smooth factor; -1, +1: its end, its beginning */
};

static double complex term_spectrum(const struct pattern *pattern, const struct response *response,
                                    struct term term, double nu)
{
	const struct spectrum *s = &pattern->spectrum;
	double x = 2.0 * M_PI * nu * nu * s->band_sigma, real, imaginary;
	double complex value = spectrum_smooth(s, nu) * exp(-0.5 * x * x) / nu;

	if (term.band)
		value *= term.band * I / (2.0 * M_PI * nu * nu * s->top_hat);
	else if (s->top_hat > 0.0)
		value *= sin(M_PI * nu * nu * s->top_hat) / (M_PI * nu * nu * s->top_hat);
	if (term.box)
		value *= term.box / (2.0 * M_PI * I * nu * s->box);
	else if (s->box > 0.0)
		value *= sin(M_PI * nu * s->box) / (M_PI * nu * s->box);
	response_transfer(response, nu, &real, &imaginary);
	return value * (real + I * imaginary);
}

static double term_fringe(const struct pattern *pattern, const struct response *response, struct term term, double w)
{
	double kappa = 1.0 + 0.5 * term.band * pattern->spectrum.top_hat;
	double v = w + 0.5 * term.box * pattern->spectrum.box;
	double centre = v / (2.0 * kappa), phase = M_PI_2 * v * v / kappa - M_PI_4;
	double complex sum = 0.0;

	for (size_t j = 0; j < pattern->nodes; j++) {
		double complex node = pattern->node_real[j] + I * pattern->node_imaginary[j];
		double step = j * pattern->spacing / sqrt(kappa);
		double complex both = term_spectrum(pattern, response, term, centre + step);

		if (j)
			both = 0.5 * (both + term_spectrum(pattern, response, term, centre - step));
		sum += node * both;
	}
	return cimag((cos(phase) + I * sin(phase)) * sum) / (M_PI * sqrt(2.0 * kappa));
}

/*
 * Fringes at w.  A top hat in wavelength and the integration end sharply, and each end makes a fringe of its own once their ends
 * are more than a radian of fringe apart; nearer than that they are one smooth factor.
 */
double far_fringe(const struct pattern *pattern, const struct response *response, double w)
{
	bool band = M_PI * w * w * pattern->spectrum.top_hat > 4.0;
	bool box = M_PI * w * pattern->spectrum.box > 2.0;
	double sum = 0.0;

	if (w <= 0.0 || w > pattern->fringes)
		return 0.0;
	for (int i = band ? -1 : 0; i <= (band ? 1 : 0); i += 2)
		for (int j = box ? -1 : 0; j <= (box ? 1 : 0); j += 2)
			sum += term_fringe(pattern, response, (struct term){ .band = i, .box = j }, w);
	return sum;
}

double far_tail(const struct pattern *pattern, double w)
{
	return TAIL / (w * w - 3.0 * pattern->variance);
}

double far_value(const struct pattern *pattern, double w)
{
	const struct response *response = &pattern->response;
	double sum = response->direct * ((w > 0.0 ? 1.0 : 0.0) + far_tail(pattern, w));

	for (size_t i = 0; i < response->poles; i++) {
		bool before = w * response->direction < 0.0;

		sum += response->pole[i].gain * (before ? response_before(pattern, i, w) : response_after(pattern, i, w));
	}
	return sum + far_fringe(pattern, response, w);
}
