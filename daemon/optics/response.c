/* SPDX-License-Identifier: GPL-3.0-or-later */
/* The detector's one-pole filters, run along a tabulated pattern in the direction of time. */
#include <errno.h>
#include <gsl/gsl_integration.h>
#include <gsl/gsl_sf_expint.h>
#include <math.h>

#include "pattern.h"

/* Two equal poles have no partial fractions; parted by this they have, and the error is its square. */
#define PARTED 1e-4
#define SHORTEST 1e-9

void response_init(struct response *response, int direction, double low_pass, double high_pass)
{
	*response = (struct response){ .direction = direction };
	/* Shorter than this a time constant changes nothing by more than 1e-8. */
	if (low_pass < SHORTEST)
		low_pass = 0.0;
	if (high_pass > 0.0)
		high_pass = fmax(high_pass, SHORTEST);
	if (low_pass > 0.0 && high_pass > 0.0) {
		/* s h / ((1 + s t1)(1 + s t2)) = h / (t2 - t1) [1 / (1 + s t1) - 1 / (1 + s t2)], h = t2 = high_pass */
		double t1 = low_pass, t2 = high_pass, mean = 0.5 * (t1 + t2);

		if (fabs(t2 - t1) < 2.0 * PARTED * mean) {
			t1 = mean * (1.0 - PARTED);
			t2 = mean * (1.0 + PARTED);
		}
		response->poles = 2;
		response->pole[0].tau = t1;
		response->pole[0].gain = high_pass / (t2 - t1);
		response->pole[1].tau = t2;
		response->pole[1].gain = -high_pass / (t2 - t1);
	} else if (low_pass > 0.0) {
		response->poles = 1;
		response->pole[0].tau = low_pass;
		response->pole[0].gain = 1.0;
	} else {
		response->direct = 1.0;
		if (high_pass > 0.0) {
			response->poles = 1;
			response->pole[0].tau = high_pass;
			response->pole[0].gain = -1.0;
		}
	}
}

void response_transfer(const struct response *response, double nu, double *real, double *imaginary)
{
	double re = response->direct, im = 0.0;

	for (size_t i = 0; i < response->poles; i++) {
		double x = 2.0 * M_PI * nu * response->pole[i].tau * response->direction;
		double share = response->pole[i].gain / (1.0 + x * x);

		re += share;
		im -= share * x;
	}
	*real = re;
	*imaginary = im;
}

/* int_0^inf exp(-v) / (x + v)^2 dv = exp(x) E2(x) / x: the tail 1 / w^2 seen through a pole before the contact. */
static double tail_before(double x)
{
	if (x > 60.0)
		return (1.0 - 2.0 / x * (1.0 - 3.0 / x * (1.0 - 4.0 / x * (1.0 - 5.0 / x)))) / (x * x);
	return gsl_sf_expint_E2_scaled(x) / x;
}

/* exp(-x) int exp(y) / y^2 dy = exp(-x) Ei(x) - 1 / x */
static double tail_after(double x)
{
	if (x > 60.0)
		return (1.0 + 2.0 / x * (1.0 + 3.0 / x * (1.0 + 4.0 / x * (1.0 + 5.0 / x * (1.0 + 6.0 / x))))) / (x * x);
	return -gsl_sf_expint_E1_scaled(-x) - 1.0 / x;
}

double response_before(const struct pattern *pattern, size_t pole, double w)
{
	double tau = pattern->response.pole[pole].tau;
	double level = pattern->response.direction > 0 ? 0.0 : 1.0;

	return level + TAIL / (tau * tau) * tail_before(fabs(w) / tau);
}

double response_after(const struct pattern *pattern, size_t pole, double w)
{
	double tau = pattern->response.pole[pole].tau;
	double level = pattern->response.direction > 0 ? 1.0 : 0.0;
	double end = fabs(pattern->memory_w);
	double fade = exp(-(fabs(w) - end) / tau);

	return level + pattern->memory[pole] * fade
	       + TAIL / (tau * tau) * (tail_after(fabs(w) / tau) - fade * tail_after(end / tau));
}

/* weight[i] = int_0^1 exp(-z (1 - s)) l_i(s) ds z, l_i the stencil's Lagrange polynomials. */
static int step_weights(double z, double weight[STENCIL])
{
	/* Gauss-Legendre over the last 40 / z of the step: before that the exponential has forgotten. */
	enum { POINTS = 32 };
	gsl_integration_glfixed_table *table = gsl_integration_glfixed_table_alloc(POINTS);
	double span = fmin(1.0, 40.0 / z);

	if (!table)
		return -ENOMEM;
	for (int i = 0; i < STENCIL; i++)
		weight[i] = 0.0;
	for (size_t k = 0; k < POINTS; k++) {
		double s, share, l[STENCIL];

		gsl_integration_glfixed_point(1.0 - span, 1.0, k, &s, &share, table);
		lagrange_weights(s, l);
		for (int i = 0; i < STENCIL; i++)
			weight[i] += share * z * exp(-z * (1.0 - s)) * l[i];
	}
	gsl_integration_glfixed_table_free(table);
	return 0;
}

int response_run(struct pattern *pattern, size_t pole, const double *in, double *out)
{
	ptrdiff_t n = 2 * pattern->half + 1, d = pattern->response.direction;
	/* index in time: k = 0 .. n-1 is in[at + d k] */
	ptrdiff_t at = d > 0 ? 0 : n - 1;
	double w0 = -d * pattern->half * pattern->h, h = d * pattern->h;
	double tau = pattern->response.pole[pole].tau, z = pattern->h / tau;
	double weight[STENCIL], keep = exp(-z), state = 0.0;
	struct response one = { .direction = (int)d, .poles = 1, .pole = { { 1.0, tau } } };

	if (step_weights(z, weight))
		return -ENOMEM;
	for (ptrdiff_t k = 0; k < STENCIL / 2; k++) {
		double w = w0 + k * h;

		state = response_before(pattern, pole, w) + far_fringe(pattern, &one, w);
		out[at + d * k] = state;
	}
	for (ptrdiff_t k = STENCIL / 2; k < n - STENCIL / 2; k++) {
		double gain = 0.0;

		for (ptrdiff_t i = 0; i < STENCIL; i++)
			gain += weight[i] * in[at + d * (k - STENCIL / 2 + i)];
		state = keep * state + gain;
		out[at + d * k] = state;
	}
	pattern->memory_w = w0 + (n - 1 - STENCIL / 2) * h;
	pattern->memory[pole] = state - (d > 0 ? 1.0 : 0.0) - far_fringe(pattern, &one, pattern->memory_w);
	for (ptrdiff_t k = n - STENCIL / 2; k < n; k++) {
		double w = w0 + k * h;

		out[at + d * k] = response_after(pattern, pole, w) + far_fringe(pattern, &one, w);
	}
	return 0;
}
