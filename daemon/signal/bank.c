/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <gsl/gsl_errno.h>
#include <gsl/gsl_linalg.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include "bank_inner.h"

/* Diameters of the discs, Fresnel units; the second is one to detect with. */
static const double fit_size[FIT_SIZES] = { 0, 1.2, 2, 3 };

/* Edge this far into the window, so that most fringes are inside: an emersion's come after it, an immersion's before. */
static const double edge_at[CONTACT_KINDS] = { [CONTACT_IMMERSION] = 0.79, [CONTACT_EMERSION] = 0.21 };

double bank_contact(enum contact_kind kind)
{
	return edge_at[kind] * N;
}

double bank_fit_scale(const struct bank *bank, size_t k)
{
	return bank->scale_min * exp((double)k * bank->scale_step);
}

/* Of the fit grid, for scale k to detect with: the middle of three. */
static size_t detecting_scale(size_t k)
{
	return k * (FIT_SCALES / BANK_SCALES) + 1;
}

double bank_fit_size(size_t k)
{
	return fit_size[k];
}

/* ------------------------------------------------------------------ templates */

/* The expected event with another T_F and a disc of `size` Fresnel units on top of the expected source. */
static void shape_curve(const struct bank *bank, enum contact_kind kind, double scale, double size,
                        struct curve_parameters *out)
{
	double unit;

	*out = bank->settings.curve;
	out->kind = kind;
	out->speed_mps /= scale;
	if (size > 0) {
		unit = curve_fresnel_time(out) * out->speed_mps / out->distance_m;
		out->components = 1;
		out->component[0] = (struct source_component){
			.shape = SHAPE_UNIFORM_DISC, .flux = 1,
			.size_rad = hypot(size * unit, bank->settings.curve.component[0].size_rad),
		};
	}
	/* One boxcar is the curve's own business: the detector's, or else the series' integrate-and-dump. */
	if (out->integration_s == 0)
		out->integration_s = 1 / bank->settings.rate;
}

int bank_curve(const struct bank *bank, enum contact_kind kind, double scale, double size, struct curve **out)
{
	struct curve_parameters p;

	shape_curve(bank, kind, scale, size, &p);
	return curve_create(out, &p);
}

/* Value at t with the boxcars that the curve does not have: Gauss-Legendre, four points over one series sample. */
double bank_curve_value(const struct bank *bank, const struct curve *curve, double t)
{
	static const double x[4] = { -0.8611363115940526, -0.3399810435848563, 0.3399810435848563, 0.8611363115940526 };
	static const double w[4] = { 0.1739274225687269, 0.3260725774312731, 0.3260725774312731, 0.1739274225687269 };
	double sum = 0;

	if (bank->settings.curve.integration_s == 0)
		return curve_value(curve, t);
	for (int k = 0; k < 4; k++)
		sum += w[k] * curve_value(curve, t + 0.5 * x[k] / bank->settings.rate);
	return sum;
}

static int make_fine(struct bank *bank, enum contact_kind kind, size_t scale, size_t size)
{
	struct curve *curve;
	float *fine = bank->fine[kind] + (scale * FIT_SIZES + size) * FINE;
	int ret = bank_curve(bank, kind, bank_fit_scale(bank, scale), fit_size[size], &curve);

	if (ret < 0)
		return ret;
	for (int k = 0; k < FINE; k++) {
		double sample = (double)k / OVERSAMPLING - MARGIN + 0.5 - bank_contact(kind);

		fine[k] = (float)bank_curve_value(bank, curve, sample / bank->settings.rate);
	}
	curve_destroy(curve);
	return 0;
}

static int make_kind(struct bank *bank, enum contact_kind kind)
{
	int ret = 0;

	bank->fine[kind] = malloc(FIT_SCALES * FIT_SIZES * FINE * sizeof(float));
	if (!bank->fine[kind])
		return -ENOMEM;
	for (size_t scale = 0; ret == 0 && scale < FIT_SCALES; scale++)
		for (size_t size = 0; ret == 0 && size < FIT_SIZES; size++)
			ret = make_fine(bank, kind, scale, size);
	for (size_t scale = 0; scale < BANK_SCALES; scale++)
		for (size_t size = 0; size < BANK_SIZES; size++) {
			struct detecting *d = &bank->detecting[bank->count++];

			d->scale = detecting_scale(scale);
			d->size = size;
			d->what = (struct bank_template){
				.kind = kind, .scale = bank_fit_scale(bank, d->scale), .size = fit_size[size],
				.contact = bank_contact(kind),
			};
		}
	return ret;
}

/* Template s of the fit grid with its contact `lag` quarter samples late. */
void bank_fine(const struct bank *bank, enum contact_kind kind, size_t scale, size_t size, int lag, double s[N])
{
	const float *fine = bank->fine[kind] + (scale * FIT_SIZES + size) * FINE;

	for (int j = 0; j < N; j++)
		s[j] = (double)fine[OVERSAMPLING * (j + MARGIN) - lag];
}

int bank_create(struct bank **out, const struct detector_settings *settings)
{
	struct bank *bank = calloc(1, sizeof(*bank));
	struct noise_model white;
	int ret = 0;

	if (!bank)
		return -ENOMEM;
	bank->norms = calloc(CONTACT_KINDS, sizeof(*bank->norms));
	if (!bank->norms) {
		free(bank);
		return -ENOMEM;
	}
	gsl_set_error_handler_off();    /* results are looked at */
	bank->settings = *settings;
	bank->scale_min = settings->scale_min;
	bank->scale_step = log(settings->scale_max / settings->scale_min) / (FIT_SCALES - 1);
	for (int kind = 0; ret == 0 && kind < CONTACT_KINDS; kind++)
		if (settings->kind[kind])
			ret = make_kind(bank, (enum contact_kind)kind);
	noise_assume(1, &white);
	if (ret == 0)
		ret = bank_whiten(bank, &white);
	if (ret < 0) {
		bank_destroy(bank);
		return ret;
	}
	*out = bank;
	return 0;
}

void bank_destroy(struct bank *bank)
{
	if (!bank)
		return;
	for (int kind = 0; kind < CONTACT_KINDS; kind++)
		free(bank->fine[kind]);
	free(bank->norms);
	free(bank);
}

size_t bank_templates(const struct bank *bank)
{
	return bank->count;
}

const struct bank_template *bank_template(const struct bank *bank, size_t k)
{
	return &bank->detecting[k].what;
}

const float *bank_weights(const struct bank *bank, size_t k)
{
	return bank->weights[k];
}

const double *bank_projector(const struct bank *bank)
{
	return bank->projector;
}

/* ------------------------------------------------------------------ whitening */

/* y = P s */
void bank_project(const struct bank *bank, const double s[N], double y[N])
{
	for (int i = 0; i < N; i++) {
		const double *row = bank->projector + (size_t)i * N;
		double a = 0, b = 0, c = 0, d = 0;

		for (int j = 0; j < N; j += 4) {
			a += row[j] * s[j];
			b += row[j + 1] * s[j + 1];
			c += row[j + 2] * s[j + 2];
			d += row[j + 3] * s[j + 3];
		}
		y[i] = (a + b) + (c + d);
	}
}

double bank_product(const double a[N], const double b[N])
{
	double p = 0, q = 0;

	for (int j = 0; j < N; j += 2) {
		p += a[j] * b[j];
		q += a[j + 1] * b[j + 1];
	}
	return p + q;
}

static size_t baseline_columns(const struct noise_model *noise, double column[2 + 2 * NOISE_LINES][N])
{
	size_t n = 2;

	for (int j = 0; j < N; j++) {
		double t = (j - (N - 1) / 2.0) / N;

		column[0][j] = 1;
		column[1][j] = t;
		for (size_t k = 0; k < noise->lines; k++) {
			column[2 + 2 * k][j] = sin(2 * M_PI * noise->line[k] * j);
			column[3 + 2 * k][j] = cos(2 * M_PI * noise->line[k] * j);
		}
	}
	n += 2 * noise->lines;
	return n;
}

/* Takes the part of P = C^-1 along each baseline column out, one after the other (P stays symmetric). */
static void project_out(double *p, const double b[N])
{
	double y[N], norm = 0;

	for (int i = 0; i < N; i++) {
		y[i] = 0;
		for (int j = 0; j < N; j++)
			y[i] += p[i * N + j] * b[j];
	}
	for (int i = 0; i < N; i++)
		norm += b[i] * y[i];
	if (!(norm > 0))
		return;
	for (int i = 0; i < N; i++)
		for (int j = 0; j < N; j++)
			p[i * N + j] -= y[i] * y[j] / norm;
}

static void weigh_templates(struct bank *bank)
{
	double s[N], y[N];

	for (size_t k = 0; k < bank->count; k++) {
		const struct detecting *d = &bank->detecting[k];
		double norm;

		bank_fine(bank, d->what.kind, d->scale, d->size, 0, s);
		bank_project(bank, s, y);
		norm = sqrt(bank_product(s, y));
		for (int j = 0; j < N; j++)
			bank->weights[k][j] = norm > 0 ? (float)(y[j] / norm) : 0;
	}
}

static double norm_of(const struct bank *bank, const double s[N])
{
	double y[N];

	bank_project(bank, s, y);
	return sqrt(bank_product(s, y));
}

/* Largest correlation of two templates' rho over the lag between them. */
static double closeness(const struct bank *bank, enum contact_kind kind, size_t scale, size_t size, size_t other_scale,
                        size_t other_size)
{
	double s[N], y[N], best = 0, norm;

	bank_fine(bank, kind, scale, size, 0, s);
	bank_project(bank, s, y);
	norm = sqrt(bank_product(s, y));
	bank_fine(bank, kind, other_scale, other_size, 0, s);
	norm *= norm_of(bank, s);
	for (int lag = -MARGIN * OVERSAMPLING; lag < MARGIN * OVERSAMPLING; lag++) {
		bank_fine(bank, kind, other_scale, other_size, lag, s);
		best = fmax(best, bank_product(s, y) / norm);
	}
	return fmin(best, 1);
}

/* How fast rho changes over lag, and how alike neighbouring templates are, for bank_alarm_rate(). */
static void measure_field(struct bank *bank, enum contact_kind kind)
{
	struct field *field = &bank->field[kind];

	for (size_t k = 0; k < BANK_SCALES; k++) {
		double s[N], near[N], y[N], along;
		size_t scale = detecting_scale(k);

		bank_fine(bank, kind, scale, 0, 0, s);
		bank_project(bank, s, y);
		bank_fine(bank, kind, scale, 0, OVERSAMPLING / 2, near);
		along = bank_product(near, y) / (sqrt(bank_product(s, y)) * norm_of(bank, near));
		field->lag_speed[k] = sqrt(2 * fmax(0, 1 - along)) / 0.5;
		field->next_scale[k] = k ? closeness(bank, kind, scale, 0, detecting_scale(k - 1), 0) : 0;
		field->next_size[k] = closeness(bank, kind, scale, 0, scale, 1);
	}
}

int bank_whiten(struct bank *bank, const struct noise_model *noise)
{
	static const double jitter = 1e-9;      /* of the variance: keeps rounding from spoiling a steep spectrum */
	double column[2 + 2 * NOISE_LINES][N], *p = malloc((size_t)N * N * sizeof(*p));
	gsl_matrix_view matrix;
	size_t columns;

	if (!p)
		return -ENOMEM;
	for (int i = 0; i < N; i++)
		for (int j = 0; j < N; j++)
			p[i * N + j] = noise->covariance[abs(i - j)] + (i == j ? jitter * noise->covariance[0] : 0);
	matrix = gsl_matrix_view_array(p, N, N);
	if (gsl_linalg_cholesky_decomp1(&matrix.matrix) || gsl_linalg_cholesky_invert(&matrix.matrix)) {
		free(p);
		return -EDOM;
	}
	columns = baseline_columns(noise, column);
	for (size_t k = 0; k < columns; k++)
		project_out(p, column[k]);
	memcpy(bank->projector, p, sizeof(bank->projector));
	free(p);
	bank->columns = columns;
	for (int kind = 0; kind < CONTACT_KINDS; kind++)
		bank->norms[kind].known = false;
	weigh_templates(bank);
	for (int kind = 0; kind < CONTACT_KINDS; kind++)
		if (bank->fine[kind])
			measure_field(bank, (enum contact_kind)kind);
	return 0;
}

/* ------------------------------------------------------------------ the hot path */

typedef float lanes __attribute__((vector_size(16)));
enum { LANES = 4, TOGETHER = 4 };       /* templates that share each load of the window; two accumulators each */

/* rho of TOGETHER templates, weights one after the other. */
static void dots(const float *weights, const float *window, float *rho)
{
	lanes even[TOGETHER] = { { 0 } }, odd[TOGETHER] = { { 0 } };

	for (int j = 0; j < N; j += 2 * LANES) {
		lanes x0, x1, w0, w1;

		memcpy(&x0, window + j, sizeof(x0));
		memcpy(&x1, window + j + LANES, sizeof(x1));
#pragma GCC unroll 4
		for (int k = 0; k < TOGETHER; k++) {
			memcpy(&w0, weights + k * N + j, sizeof(w0));
			memcpy(&w1, weights + k * N + j + LANES, sizeof(w1));
			even[k] += x0 * w0;
			odd[k] += x1 * w1;
		}
	}
#pragma GCC unroll 4
	for (int k = 0; k < TOGETHER; k++) {
		even[k] += odd[k];
		rho[k] = (even[k][0] + even[k][1]) + (even[k][2] + even[k][3]);
	}
}

void bank_execute(const struct bank *bank, const float *window, float *rho)
{
	/* The templates of a kind, 16, are a multiple of TOGETHER. */
	for (size_t k = 0; k < bank->count; k += TOGETHER)
		dots(bank->weights[k], window, rho + k);
}

/* Share of the second of two templates' passages of u that the first does not pass, r their correlation. */
static double new_share(double r, double u)
{
	return r < 1 ? erf(u * sqrt((1 - r) / (1 + r)) / M_SQRT2) : 0;
}

double bank_alarm_rate(const struct bank *bank, enum contact_kind kind, double u)
{
	const struct field *field = &bank->field[kind];
	double sum = 0;

	for (size_t k = 0; k < BANK_SCALES; k++) {
		double scale = k ? new_share(field->next_scale[k], u) : 1, size = new_share(field->next_size[k], u);

		/* Of two sizes at a scale; the second counts as far as neither the first nor the next scale has it. */
		sum += field->lag_speed[k] / (2 * M_PI) * scale * (1 + size);
	}
	return sum * exp(-0.5 * u * u);
}
