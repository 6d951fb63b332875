/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * One candidate against the fit grid of contact, scale and size, in the metric P of the noise.  Where scale is well determined,
 * Gauss-Newton goes on from the grid's best.  Where it is not, the likelihood is no longer a parabola in contact and scale, and
 * its highest point is biased towards slow shadows: then contact and its uncertainty are the mean and the standard deviation of
 * the likelihood times the prior over the whole grid.
 */
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include "bank_inner.h"

enum {
	SAMPLES_REACH = 12, LAG_REACH = SAMPLES_REACH * OVERSAMPLING, LAGS = 2 * LAG_REACH + 1, 
	ITERATIONS = 4, RAMPS = 6, RAMP_REACH = 48, RAMP_NORMS = 12,     /* half samples */
};

static const double significant = 9;            /* of rho^2: three sigma for one parameter */
static const double coarse = 0.6;               /* scale steps of sigma below which the grid is too coarse */
/* Most sources are small beside a Fresnel unit (5.8 mas at 0.6 um; common practice). */
static const double size_prior[FIT_SIZES] = { 0.7, 0.2, 0.07, 0.03 };

struct start { size_t scale, size; int lag; double gain; };

/* rho^2 over the grid; 0 where the flux would be negative. */
struct grid { double gain[FIT_SIZES][FIT_SCALES][LAGS]; };

/* s'Ps of one template over the lags: five of them, straight between. */
static void template_norms(const struct bank *bank, enum contact_kind kind, size_t scale, size_t size, double norm[NORMS])
{
	double s[N], y[N];

	for (int k = 0; k < NORMS; k++) {
		bank_fine(bank, kind, scale, size, (k - NORMS / 2) * LAG_REACH / (NORMS / 2), s);
		bank_project(bank, s, y);
		norm[k] = bank_product(s, y);
	}
}

static double norm_at(const double norm[NORMS], int lag)
{
	double at = (double)(lag + LAG_REACH) / LAG_REACH * (NORMS / 2);
	int k = (int)fmin(NORMS - 2, at);

	return norm[k] + (at - k) * (norm[k + 1] - norm[k]);
}

static void fill_grid(const struct bank *bank, enum contact_kind kind, const double p[N], struct grid *grid)
{
	struct norms *norms = &bank->norms[kind];
	double s[N];

	for (size_t size = 0; size < FIT_SIZES; size++)
		for (size_t scale = 0; scale < FIT_SCALES; scale++) {
			double *norm = norms->norm[size][scale];

			if (!norms->known)
				template_norms(bank, kind, scale, size, norm);
			for (int lag = -LAG_REACH; lag <= LAG_REACH; lag++) {
				double product;

				bank_fine(bank, kind, scale, size, lag, s);
				product = bank_product(s, p);
				grid->gain[size][scale][lag + LAG_REACH] =
					product > 0 ? product * product / fmax(norm_at(norm, lag), 1e-300) : 0;
			}
		}
	norms->known = true;
}

static double scale_penalty(const struct bank *bank, double scale)
{
	double sigma = bank->settings.scale_sigma, off = log(scale);

	return sigma > 0 ? off * off / (sigma * sigma) : 0;
}

/*
 * Highest point.  A larger disc than expected must explain significantly more: size, scale and time are nearly degenerate in
 * noise, and a size that is only noise would cost the contact time half its precision again.
 */
static bool highest(const struct bank *bank, const struct grid *grid, struct start *best)
{
	double top[FIT_SIZES] = { 0 };

	*best = (struct start){ 0 };
	for (size_t size = 0; size < FIT_SIZES; size++)
		for (size_t scale = 0; scale < FIT_SCALES; scale++)
			for (int lag = 0; lag < LAGS; lag++) {
				double gain = grid->gain[size][scale][lag] - scale_penalty(bank, bank_fit_scale(bank, scale));
				double needed = size ? fmax(top[0] + significant, best->gain) : best->gain;

				if (gain > top[size])
					top[size] = gain;
				if (gain > needed)
					*best = (struct start){ scale, size, lag - LAG_REACH, gain };
			}
	return best->gain > 0;
}

/* Mean and standard deviation of contact (samples) and ln(scale) under likelihood times prior. */
static void moments(const struct bank *bank, const struct grid *grid, double top, double mean[2], double sigma[2])
{
	double sum = 0, first[2] = { 0 }, second[2] = { 0 };

	for (size_t size = 0; size < FIT_SIZES; size++)
		for (size_t scale = 0; scale < FIT_SCALES; scale++) {
			double at[2] = { 0, log(bank_fit_scale(bank, scale)) };
			double penalty = scale_penalty(bank, bank_fit_scale(bank, scale));

			for (int lag = 0; lag < LAGS; lag++) {
				double weight = size_prior[size] * exp(0.5 * (grid->gain[size][scale][lag] - penalty - top));

				at[0] = (double)(lag - LAG_REACH) / OVERSAMPLING;
				sum += weight;
				for (int i = 0; i < 2; i++) {
					first[i] += weight * at[i];
					second[i] += weight * at[i] * at[i];
				}
			}
		}
	for (int i = 0; i < 2; i++) {
		mean[i] = first[i] / sum;
		sigma[i] = sqrt(fmax(second[i] / sum - mean[i] * mean[i], 0));
	}
}

/* ------------------------------------------------------------------ Gauss-Newton */

struct point { double contact, scale, size; };

struct model { double s[N], by_contact[N], by_scale[N]; };      /* derivatives by samples and by ln(scale) */

static bool sample(const struct bank *bank, enum contact_kind kind, double contact, double scale, double size,
                   double s[N], double derivative[N])
{
	static const double h = 0.05;           /* samples */
	double rate = bank->settings.rate;
	struct curve *curve;

	if (bank_curve(bank, kind, scale, size, &curve) < 0)
		return false;
	for (int j = 0; j < N; j++) {
		double t = j + 0.5 - contact;

		s[j] = bank_curve_value(bank, curve, t / rate);
		if (derivative)
			derivative[j] = -(bank_curve_value(bank, curve, (t + h) / rate) -
			                  bank_curve_value(bank, curve, (t - h) / rate)) / (2 * h);
	}
	curve_destroy(curve);
	return true;
}

static bool evaluate(const struct bank *bank, enum contact_kind kind, const struct point *at, struct model *out)
{
	static const double h = 0.002;          /* of ln(scale) */
	double low[N];

	if (!sample(bank, kind, at->contact, at->scale, at->size, out->s, out->by_contact) ||
	    !sample(bank, kind, at->contact, at->scale * exp(h), at->size, out->by_scale, NULL) ||
	    !sample(bank, kind, at->contact, at->scale * exp(-h), at->size, low, NULL))
		return false;
	for (int j = 0; j < N; j++)
		out->by_scale[j] = (out->by_scale[j] - low[j]) / (2 * h);
	return true;
}

/* Solves the symmetric 3 x 3 system; `inverse` too. @return false: singular */
static bool solve3(double m[3][3], const double v[3], double x[3], double inverse[3][3])
{
	double det = 0;

	for (int i = 0; i < 3; i++)
		for (int j = 0; j < 3; j++) {
			int a = (j + 1) % 3, b = (j + 2) % 3, c = (i + 1) % 3, d = (i + 2) % 3;

			inverse[i][j] = m[a][c] * m[b][d] - m[a][d] * m[b][c];
		}
	for (int j = 0; j < 3; j++)
		det += m[0][j] * inverse[j][0];
	if (!(fabs(det) > 1e-300))
		return false;
	for (int i = 0; i < 3; i++) {
		x[i] = 0;
		for (int j = 0; j < 3; j++) {
			inverse[i][j] /= det;
			x[i] += inverse[i][j] * v[j];
		}
	}
	return true;
}

/* One step; fills the covariance of (flux, contact, ln scale) at `at`. */
static bool step(const struct bank *bank, enum contact_kind kind, const double p[N], const struct point *at,
                 double move[2], double covariance[3][3], double *flux, double *rho)
{
	struct model model;
	double y[3][N], m[3][3], v[3], x[3], norm;
	const double *column[3] = { model.s, model.by_contact, model.by_scale };

	if (!evaluate(bank, kind, at, &model))
		return false;
	bank_project(bank, model.s, y[0]);
	norm = bank_product(model.s, y[0]);
	*flux = bank_product(model.s, p) / norm;
	*rho = bank_product(model.s, p) / sqrt(norm);
	if (!(*flux > 0))
		return false;
	for (int j = 0; j < N; j++) {
		model.by_contact[j] *= *flux;
		model.by_scale[j] *= *flux;
	}
	bank_project(bank, model.by_contact, y[1]);
	bank_project(bank, model.by_scale, y[2]);
	for (int i = 0; i < 3; i++) {
		for (int j = 0; j < 3; j++)
			m[i][j] = bank_product(column[i], y[j]);
		v[i] = bank_product(column[i], p) - *flux * m[i][0];
	}
	/* The prior of the scale is one more observation. */
	if (bank->settings.scale_sigma > 0) {
		m[2][2] += pow(bank->settings.scale_sigma, -2);
		v[2] -= log(at->scale) * pow(bank->settings.scale_sigma, -2);
	}
	if (!solve3(m, v, x, covariance))
		return false;
	move[0] = fmax(-1, fmin(1, x[1]));
	move[1] = fmax(-0.08, fmin(0.08, x[2]));
	return true;
}

static void baseline(const struct bank *bank, const float *window, enum contact_kind kind, const struct point *at,
                     struct bank_fit *out)
{
	double s[N], sum = 0;

	if (!sample(bank, kind, at->contact, at->scale, at->size, s, NULL))
		return;
	for (int j = 0; j < N; j++)
		sum += (double)window[j] - out->flux * s[j];
	out->baseline = sum / N;
}

static bool refine(const struct bank *bank, const float *window, enum contact_kind kind, const double p[N],
                   const struct start *start, struct bank_fit *out)
{
	double low = bank->scale_min * 0.9, high = bank_fit_scale(bank, FIT_SCALES - 1) * 1.1;
	double middle = bank_contact(kind) + (double)start->lag / OVERSAMPLING, best = -INFINITY;
	struct point at = { middle, bank_fit_scale(bank, start->scale), bank_fit_size(start->size) }, found = at;

	for (int k = 0; k < ITERATIONS; k++) {
		double move[2], covariance[3][3], flux, rho;

		if (!step(bank, kind, p, &at, move, covariance, &flux, &rho))
			break;
		if (rho * rho - scale_penalty(bank, at.scale) > best) {
			best = rho * rho - scale_penalty(bank, at.scale);
			found = at;
			out->rho = rho;
			out->flux = flux;
			out->contact_sigma = sqrt(fmax(covariance[1][1], 0));
			out->scale_sigma = at.scale * sqrt(fmax(covariance[2][2], 0));
		}
		if (fabs(move[0]) < 0.002 && fabs(move[1]) < 0.0005)
			break;
		at.contact = fmax(middle - 4, fmin(middle + 4, at.contact + move[0]));
		at.scale = fmax(low, fmin(high, at.scale * exp(move[1])));
	}
	if (!isfinite(best))
		return false;
	out->contact = found.contact;
	out->scale = found.scale;
	out->size = found.size;
	baseline(bank, window, kind, &found, out);
	return true;
}

/* ------------------------------------------------------------------ what else it might be */

/* A relay's or cloud's edge: straight from covered to uncovered within `length` samples about `middle`, dumped. */
static double ramp(double t, double length)
{
	double u = t / length + 0.5;

	return u <= 0 ? 0 : u >= 1 ? 1 : u;
}

static void sample_ramp(const struct bank *bank, enum contact_kind kind, double contact, double length, double s[N])
{
	double low_pass = bank->settings.curve.low_pass_s * bank->settings.rate, decay = 0, state, level;
	double leak = 1 - exp(-2 * M_PI * bank->settings.curve.high_pass_hz / bank->settings.rate);

	if (low_pass > 0)
		decay = exp(-1 / low_pass);
	/* The series' integrate-and-dump, or the detector's longer one. */
	length = fmax(length, fmax(1, bank->settings.curve.integration_s * bank->settings.rate));
	state = level = kind == CONTACT_EMERSION ? 0 : 1;
	for (int j = 0; j < N; j++) {
		double t = j + 0.5 - contact, x = ramp(kind == CONTACT_EMERSION ? t : -t, length);

		state = decay * state + (1 - decay) * x;
		s[j] = state - level;           /* level: what an AC-coupled input has forgotten; 0 or constant without */
		level += leak * (state - level);
	}
}

/* rho^2 of one ramp at one place; `norm` > 0: s'Ps as told, else worked out. */
static double ramp_gain(const struct bank *bank, enum contact_kind kind, const double p[N], double contact, double length,
                        double *norm)
{
	double s[N], y[N], product;

	sample_ramp(bank, kind, contact, length, s);
	product = bank_product(s, p);
	if (!(*norm > 0)) {
		bank_project(bank, s, y);
		*norm = bank_product(s, y);
	}
	return product > 0 && *norm > 0 ? product * product / *norm : 0;
}

/* Largest rho^2 of sharp steps and ramps of half to eight T_F near the contact.  s'Ps changes little over lag: straight
 * lines between every twelfth, and the best place once more exactly. */
static double best_alternative(const struct bank *bank, enum contact_kind kind, const double p[N], double contact,
                               double scale)
{
	static const double length[RAMPS] = { 0, 0.5, 1, 2, 4, 8 };     /* T_F */
	double best = 0, fresnel_samples = N / 16.0 * scale;

	for (int r = 0; r < RAMPS; r++) {
		double norm = 0, next = 0, most = 0, exact = 0;
		int at = 0;

		ramp_gain(bank, kind, p, contact - 0.5 * RAMP_REACH, length[r] * fresnel_samples, &next);
		for (int lag = -RAMP_REACH; lag < RAMP_REACH; lag++) {
			int part = (lag + RAMP_REACH) % RAMP_NORMS;
			double here, gain;

			if (part == 0) {
				norm = next;
				next = 0;
				ramp_gain(bank, kind, p, contact + 0.5 * (lag + RAMP_NORMS), length[r] * fresnel_samples, &next);
			}
			here = norm + (next - norm) * part / RAMP_NORMS;
			gain = ramp_gain(bank, kind, p, contact + 0.5 * lag, length[r] * fresnel_samples, &here);
			if (gain > most) {
				most = gain;
				at = lag;
			}
		}
		best = fmax(best, ramp_gain(bank, kind, p, contact + 0.5 * at, length[r] * fresnel_samples, &exact));
	}
	return best;
}

/* Scale badly determined: the whole grid says where the contact is and how surely. */
static void use_moments(const struct bank *bank, enum contact_kind kind, const struct grid *grid,
                        const struct start *start, struct bank_fit *out)
{
	double mean[2], sigma[2];

	if (out->scale_sigma < coarse * bank->scale_step * out->scale)
		return;
	moments(bank, grid, start->gain, mean, sigma);
	out->contact = bank_contact(kind) + mean[0];
	out->contact_sigma = sigma[0];
	out->scale = exp(mean[1]);
	out->scale_sigma = out->scale * sigma[1];
}

bool bank_fit(const struct bank *bank, const float *window, enum contact_kind kind, struct bank_fit *out)
{
	double x[N], p[N];
	struct start start;
	struct grid grid;

	if (!bank->fine[kind])
		return false;
	for (int j = 0; j < N; j++)
		x[j] = (double)window[j];
	bank_project(bank, x, p);
	*out = (struct bank_fit){ 0 };
	fill_grid(bank, kind, p, &grid);
	if (!highest(bank, &grid, &start) || !refine(bank, window, kind, p, &start, out))
		return false;
	out->flank = abs(start.lag) == LAG_REACH;
	use_moments(bank, kind, &grid, &start, out);
	out->chi2 = bank_product(x, p) - out->rho * out->rho;
	out->freedom = N - (double)bank->columns - 3;
	out->fringe_gain = out->rho * out->rho - best_alternative(bank, kind, p, out->contact, out->scale);
	return true;
}
