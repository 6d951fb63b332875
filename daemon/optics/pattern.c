/* SPDX-License-Identifier: GPL-3.0-or-later */
/* The pattern of one source component: a table about the contact, made by one inverse Fourier transform. */
#include <errno.h>
#include <gsl/gsl_fft_halfcomplex.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

#include "limbwatch/fresnel.h"
#include "pattern.h"

/* A fringe weaker than this does not count. */
#define NEGLIGIBLE 1e-7
/* Kernels wider than this leave no fringes beyond the table; narrower ones are within reach of stationary phase. */
#define WIDE 4.0
/* Width in nu over which frequencies are faded out that belong to fringes beyond the table. */
#define FADE 1.5
/* Out here not even a bare fringe counts. */
#define BEYOND 1e7
enum { MAX_POINTS = 1 << 19 };

/* The plan of one table, in Fresnel units. */
struct plan {
	double width;                   /* good between -width and width */
	double fringes;                 /* fringes matter up to here */
	double cut;                     /* nu: where the transform fades out */
	double fade;
	double h;
	size_t points;
};

void lagrange_weights(double s, double weight[STENCIL])
{
	/* 1 / prod_{j != i} (i - j) */
	static const double share[STENCIL] = {
		-1.0 / 5040, 1.0 / 720, -1.0 / 240, 1.0 / 144, -1.0 / 144, 1.0 / 240, -1.0 / 720, 1.0 / 5040,
	};
	double below[STENCIL], above = 1.0;

	below[0] = 1.0;
	for (int i = 1; i < STENCIL; i++)
		below[i] = below[i - 1] * (s + 3 - (i - 1));
	for (int i = STENCIL - 1; i >= 0; i--) {
		weight[i] = share[i] * below[i] * above;
		above *= s + 3 - i;
	}
}

double fringe_bound(const struct spectrum *spectrum, double w)
{
	return M_SQRT2 * M_1_PI / fmax(w, 1.0) * spectrum_bound(spectrum, 0.5 * w);
}

/* The step with which the eight-point stencil follows every fringe up to `reach`. */
static double finest_step(const struct spectrum *spectrum, double reach, double kappa)
{
	double h = 0.25;

	for (double w = 1.0; w <= reach * 1.1; w *= 1.05) {
		/* largest error of the stencil: (h omega)^8 (1/2 3/2 5/2 7/2)^2 / 8! */
		double room = NEGLIGIBLE / (1.07e-3 * fringe_bound(spectrum, w));

		h = fmin(h, pow(room, 0.125) / (M_PI * w) * kappa);
	}
	return h;
}

static int make_plan(struct plan *plan, const struct pattern *pattern)
{
	const struct spectrum *spectrum = &pattern->spectrum;
	double extent = spectrum_extent(spectrum), half_box = 0.5 * spectrum->box;
	double spread = 0.5 * spectrum->top_hat + 4.0 * spectrum->band_sigma;
	double shortest = 1.0 - fmin(spread, 0.75), longest = 1.0 + spread;
	double period, top;

	plan->width = 24.0 + 6.0 * extent + 4.0 * half_box;
	plan->fringes = 1.0;
	while (plan->fringes < BEYOND && fringe_bound(spectrum, plan->fringes) > NEGLIGIBLE)
		plan->fringes *= 1.02;
	if (extent > WIDE && plan->width < plan->fringes)
		plan->width = plan->fringes;
	/* what the kernels carry in from beyond the table must be there too */
	double reach = fmin(plan->width + extent + half_box + 1.0, plan->fringes);

	plan->h = finest_step(spectrum, reach, shortest);
	plan->fade = FADE;
	plan->cut = 0.5 * reach / shortest + 5.0 * FADE / sqrt(shortest);
	top = 2.0 * longest * (plan->cut + 5.0 * FADE) + extent + half_box;
	plan->h = fmin(plan->h, 0.5 / (plan->cut + 5.0 * FADE));
	period = plan->width + fmax(top, plan->width) + 24.0;
	plan->points = 1024;
	while (plan->points < MAX_POINTS && plan->points * plan->h < period)
		plan->points *= 2;
	if (plan->points * plan->h < period)
		return -EINVAL;
	plan->h = period / plan->points;
	return 0;
}

/* Transform of the pattern less a Gaussian step, whose sum over k is the pattern repeated with the period. */
static void fill_transform(double *z, const struct plan *plan, const struct spectrum *spectrum)
{
	size_t n = plan->points;
	double period = n * plan->h;

	memset(z, 0, n * sizeof(*z));
	for (size_t k = 1; k < n / 2; k++) {
		double nu = k / period;
		double fade = 0.5 * erfc((nu - plan->cut) / plan->fade);
		double step = exp(-2.0 * M_PI * M_PI * nu * nu);

		if (nu > plan->cut + 5.5 * plan->fade)
			break;
		double size = fade * spectrum_value(spectrum, nu), phase = 2.0 * M_PI * nu * nu;
		double real = size * cos(phase) - step, imaginary = -size * sin(phase);

		/* over 2 pi i nu */
		z[k] = imaginary / (2.0 * M_PI * nu * period);
		z[n - k] = -real / (2.0 * M_PI * nu * period);
	}
}

/* The tails of all repetitions: sum over m != 0 of 1 / (w + m period)^2. */
static double repeated_tail(double w, double period)
{
	double x = M_PI * w / period;

	if (fabs(x) < 1e-2)
		return M_PI * M_PI / (period * period) * (1.0 / 3.0 + x * x / 15.0);
	return M_PI * M_PI / (period * period) * (1.0 / (sin(x) * sin(x)) - 1.0 / (x * x));
}

static int fill_table(struct pattern *pattern, const struct plan *plan)
{
	size_t n = plan->points;
	double *z = malloc(n * sizeof(*z)), period = n * plan->h;

	if (!z)
		return -ENOMEM;
	fill_transform(z, plan, &pattern->spectrum);
	gsl_fft_halfcomplex_radix2_backward(z, 1, n);
	for (ptrdiff_t i = -pattern->half; i <= pattern->half; i++) {
		double w = i * plan->h;

		pattern->table[pattern->half + i] = z[i < 0 ? (ptrdiff_t)n + i : i] + 0.5 * erfc(-M_SQRT1_2 * w)
		                                    - TAIL * repeated_tail(w, period);
	}
	free(z);
	return 0;
}

static int apply_response(struct pattern *pattern)
{
	const struct response *response = &pattern->response;
	size_t n = 2 * (size_t)pattern->half + 1;
	double *in, *out;
	int ret = 0;

	if (!response->poles)
		return 0;
	in = malloc(2 * n * sizeof(*in));
	if (!in)
		return -ENOMEM;
	out = in + n;
	memcpy(in, pattern->table, n * sizeof(*in));
	for (size_t k = 0; k < n; k++)
		pattern->table[k] *= response->direct;
	for (size_t i = 0; i < response->poles; i++) {
		ret = response_run(pattern, i, in, out);
		if (ret)
			break;
		for (size_t k = 0; k < n; k++)
			pattern->table[k] += response->pole[i].gain * out[k];
	}
	free(in);
	return ret;
}

int pattern_init(struct pattern *pattern, const struct spectrum *spectrum, const struct response *response)
{
	struct plan plan;
	int ret;

	*pattern = (struct pattern){ .spectrum = *spectrum, .response = *response };
	pattern->bare = !response->poles && spectrum_extent(spectrum) <= 0.0 && spectrum->top_hat <= 0.0
	                && spectrum->band_sigma <= 0.0;
	if (pattern->bare)
		return 0;
	pattern->variance = spectrum_variance(spectrum);
	ret = make_plan(&plan, pattern);
	if (ret)
		return ret;
	pattern->fringes = plan.fringes;
	pattern->h = plan.h;
	pattern->half = (ptrdiff_t)ceil(plan.width / plan.h) + STENCIL;
	pattern->limit = plan.width;
	ret = plan.fringes > plan.width ? far_init(pattern, spectrum_extent(spectrum)) : 0;
	if (ret)
		return ret;
	pattern->table = malloc((2 * (size_t)pattern->half + 1) * sizeof(*pattern->table));
	if (!pattern->table)
		return -ENOMEM;
	ret = fill_table(pattern, &plan);
	if (!ret)
		ret = apply_response(pattern);
	if (ret)
		pattern_release(pattern);
	return ret;
}

void pattern_release(struct pattern *pattern)
{
	free(pattern->table);
	pattern->table = NULL;
}

/* Below this length the difference of two integrals is worth less than the value at the middle. */
#define SHORT_BOX 1e-5

static double bare_value(const struct spectrum *spectrum, double w)
{
	double end = w + 0.5 * spectrum->box, begin = w - 0.5 * spectrum->box;
	double lit = fmin(fmax(end, 0.0), spectrum->box);

	if (spectrum->box < SHORT_BOX || fabs(w) > BEYOND)
		return edge_intensity(w);
	return (lit + edge_intensity_excess(end) - edge_intensity_excess(begin)) / spectrum->box;
}

double pattern_value(const struct pattern *pattern, double w)
{
	double weight[STENCIL], sum = 0.0, place, floor_place;

	if (pattern->bare)
		return bare_value(&pattern->spectrum, w);
	if (isnan(w))
		return w;
	if (fabs(w) >= pattern->limit)
		return far_value(pattern, w);
	place = w / pattern->h;
	floor_place = floor(place);
	lagrange_weights(place - floor_place, weight);
	const double *from = pattern->table + pattern->half + (ptrdiff_t)floor_place - 3;

	for (int i = 0; i < STENCIL; i++)
		sum += weight[i] * from[i];
	return sum;
}
