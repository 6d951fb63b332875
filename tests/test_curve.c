/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <cmocka.h>

#include <errno.h>
#include <gsl/gsl_integration.h>
#include <math.h>
#include <stdbool.h>
#include <stdlib.h>
#include <string.h>

#include "limbwatch/curve.h"
#include "limbwatch/fresnel.h"
#include "../daemon/optics/pattern.h"

/* What curve.h promises. */
#define PROMISE 1e-6

/* Every length below is in Fresnel units: distance 2 and wavelength 1 make the scale 1, an angle 1/2 one unit, speed 1 T_F = 1 s. */
static struct curve_parameters unit_edge(enum contact_kind kind)
{
	return (struct curve_parameters){
		.kind = kind, .distance_m = 2.0, .speed_mps = 1.0, .passband = { PASSBAND_LINE, 1.0, 0.0 },
		.components = 1, .component = { { .shape = SHAPE_POINT, .flux = 1.0 } },
	};
}

static struct curve *make(const struct curve_parameters *parameters)
{
	struct curve *curve = NULL;

	assert_int_equal(curve_create(&curve, parameters), 0);
	assert_non_null(curve);
	return curve;
}

/*
 * The definition, written out: the intensity averaged over wavelength, strip of the source, chord of the aperture and
 * integration time, one Gauss-Legendre rule inside the other (gsl_integration_glfixed).
 */
enum { LAYERS = 5 };
struct definition {
	const struct curve_parameters *p;
	size_t points[LAYERS];
};

static double strip(const struct source_component *c, double x)
{
	double radius = 0.5 * c->size_rad * 2.0, mu2 = 1.0 - x * x / (radius * radius);

	if (c->shape == SHAPE_GAUSSIAN)
		return exp(-4.0 * M_LN2 * x * x / (4.0 * radius * radius));
	/* int over the chord of 1 - u + u sqrt(1 - r^2) */
	double u = c->shape == SHAPE_LIMB_DARKENED_DISC ? c->limb_darkening : 0.0;

	return (1.0 - u) * 2.0 * sqrt(fmax(mu2, 0.0)) + u * M_PI_2 * fmax(mu2, 0.0);
}

static double chord(double diameter, double x)
{
	return sqrt(fmax(0.0, 0.25 * diameter * diameter - x * x));
}

static double average(const struct definition *d, int layer, double w, double kappa);

/* The weight of layer at x, x from -reach to reach. */
static double layer_weight(const struct definition *d, int layer, double x, double *reach)
{
	const struct curve_parameters *p = d->p;

	switch (layer) {
	case 0:
		*reach = 0.5 * p->passband.width_m * (p->passband.shape == PASSBAND_GAUSSIAN ? 5.0 : 1.0);
		return p->passband.shape == PASSBAND_GAUSSIAN ? exp(-4.0 * M_LN2 * pow(x / p->passband.width_m, 2)) : 1.0;
	case 1:
		*reach = p->component[0].size_rad * (p->component[0].shape == SHAPE_GAUSSIAN ? 5.0 : 1.0);
		return strip(&p->component[0], x);
	case 2:
		*reach = 0.5 * p->aperture_m;
		return chord(p->aperture_m, x);
	case 3:
		*reach = 0.5 * p->aperture_m * p->obstruction;
		return chord(p->aperture_m * p->obstruction, x);
	default:
		*reach = 0.5 * p->integration_s;
		return 1.0;
	}
}

/* Mean over one layer; x = reach sin(theta) takes the square roots at the ends of chords away. */
static double layer_average(const struct definition *d, int layer, int next, double w, double kappa)
{
	gsl_integration_glfixed_table *table = gsl_integration_glfixed_table_alloc(d->points[layer]);
	double sum = 0.0, total = 0.0, reach;

	assert_non_null(table);
	for (size_t i = 0; i < d->points[layer]; i++) {
		double theta, share;

		gsl_integration_glfixed_point(-M_PI_2, M_PI_2, i, &theta, &share, table);
		layer_weight(d, layer, 0.0, &reach);
		double x = reach * sin(theta), weight = share * cos(theta) * layer_weight(d, layer, x, &reach);

		total += weight;
		sum += weight * (layer == 0 ? average(d, next, w, 1.0 + x) : average(d, next, w - x, kappa));
	}
	gsl_integration_glfixed_table_free(table);
	return sum / total;
}

static double average(const struct definition *d, int layer, double w, double kappa)
{
	const struct curve_parameters *p = d->p;
	double e = p->obstruction;

	switch (layer) {
	case 0:
		return p->passband.shape == PASSBAND_LINE ? average(d, 1, w, 1.0) : layer_average(d, 0, 1, w, 1.0);
	case 1:
		return p->component[0].shape == SHAPE_POINT ? average(d, 2, w, kappa) : layer_average(d, 1, 2, w, kappa);
	case 2:
		if (p->aperture_m <= 0.0)
			return average(d, 4, w, kappa);
		if (e <= 0.0)
			return layer_average(d, 2, 4, w, kappa);
		return (layer_average(d, 2, 4, w, kappa) - e * e * layer_average(d, 3, 4, w, kappa)) / (1.0 - e * e);
	case 4:
		return p->integration_s > 0.0 ? layer_average(d, 4, 5, w, kappa) : average(d, 5, w, kappa);
	default:
		return edge_intensity(w / sqrt(kappa));
	}
}

static const double places[] = {
	-80.0, -31.0, -23.99, -7.3, -2.0, -0.4, 0.0, 0.31, 1.2172, 1.8725, 3.7, 5.9, 9.1, 14.2, 19.7, 23.97, 24.6, 29.3, 33.1,
	41.7,
};
enum { PLACES = sizeof(places) / sizeof(places[0]) };

/* Largest difference from the definition with n points in every layer. */
static double departure(const struct curve_parameters *parameters, size_t n)
{
	struct definition definition = { .p = parameters, .points = { n, n, n, n, n } };
	struct curve *curve = make(parameters);
	double worst = 0.0, sign = parameters->kind == CONTACT_EMERSION ? 1.0 : -1.0;

	for (size_t i = 0; i < PLACES; i++)
		worst = fmax(worst, fabs(curve_value(curve, sign * places[i]) - average(&definition, 0, places[i], 1.0)));
	curve_destroy(curve);
	return worst;
}

static void bare_edge_is_the_edge(void **state)
{
	(void)state;
	for (int kind = 0; kind < CONTACT_KINDS; kind++) {
		struct curve_parameters p = unit_edge((enum contact_kind)kind);

		assert_true(departure(&p, 1) < 1e-14);
		p.integration_s = 0.8;
		/* 256: a rule that GSL tabulates; those it computes are good to 1e-10 only */
		assert_true(departure(&p, 256) < 1e-12);
	}
}

static void every_source_shape_follows_its_definition(void **state)
{
	static const struct { enum source_shape shape; double size, u; } source[] = {
		{ SHAPE_UNIFORM_DISC, 0.02, 0 }, { SHAPE_UNIFORM_DISC, 0.6, 0 }, { SHAPE_UNIFORM_DISC, 3.0, 0 },
		{ SHAPE_UNIFORM_DISC, 8.0, 0 }, { SHAPE_UNIFORM_DISC, 14.0, 0 }, { SHAPE_LIMB_DARKENED_DISC, 1.0, 1.0 },
		{ SHAPE_LIMB_DARKENED_DISC, 2.5, 0.6 }, { SHAPE_GAUSSIAN, 0.05, 0 }, { SHAPE_GAUSSIAN, 1.0, 0 },
		{ SHAPE_GAUSSIAN, 4.0, 0 }, { SHAPE_UNIFORM_DISC, 0.0, 0 },
	};

	(void)state;
	for (size_t i = 0; i < sizeof(source) / sizeof(source[0]); i++) {
		struct curve_parameters p = unit_edge(i & 1 ? CONTACT_IMMERSION : CONTACT_EMERSION);

		p.component[0].shape = source[i].shape;
		p.component[0].size_rad = 0.5 * source[i].size;
		p.component[0].limb_darkening = source[i].u;
		if (source[i].size > 0.0)
			assert_true(departure(&p, 2000) < PROMISE);
		else
			assert_true(fabs(curve_surviving_energy(&p, 16.0) - 1.0) < 1e-15);
	}
}

static void aperture_and_passband_follow_their_definition(void **state)
{
	static const struct { enum passband_shape shape; double width; size_t points; } band[] = {
		{ PASSBAND_TOP_HAT, 1e-4, 100 }, { PASSBAND_TOP_HAT, 0.02, 400 }, { PASSBAND_TOP_HAT, 0.3, 2500 },
		{ PASSBAND_TOP_HAT, 1.0, 6000 }, { PASSBAND_GAUSSIAN, 1e-3, 200 }, { PASSBAND_GAUSSIAN, 0.1, 2000 },
	};
	struct curve_parameters p = unit_edge(CONTACT_EMERSION);

	(void)state;
	p.aperture_m = 0.4;
	assert_true(departure(&p, 200) < PROMISE);
	p.obstruction = 0.45;
	assert_true(departure(&p, 200) < PROMISE);
	p.aperture_m = p.obstruction = 0.0;
	for (size_t i = 0; i < sizeof(band) / sizeof(band[0]); i++) {
		p.passband.shape = band[i].shape;
		p.passband.width_m = band[i].width;
		assert_true(departure(&p, band[i].points) < PROMISE);
	}
}

static void everything_together_follows_its_definition(void **state)
{
	struct curve_parameters p = unit_edge(CONTACT_IMMERSION);
	struct definition definition = { .p = &p, .points = { 24, 16, 12, 12, 12 } };

	(void)state;
	p.passband.shape = PASSBAND_TOP_HAT;
	p.passband.width_m = 0.08;
	p.component[0] = (struct source_component){ SHAPE_LIMB_DARKENED_DISC, 0.5 * 0.7, 0.5, 2.0, 0.0 };
	p.aperture_m = 0.3;
	p.obstruction = 0.3;
	p.integration_s = 0.25;
	struct curve *curve = make(&p);

	for (size_t i = 0; i < PLACES; i++)
		/* twelve points follow the fringes to here */
		if (fabs(places[i]) < 10.0)
			assert_true(fabs(curve_value(curve, -places[i]) - average(&definition, 0, places[i], 1.0)) < PROMISE);
	curve_destroy(curve);
}

/* A disc of many Fresnel units is covered as geometry says: the share of its area beyond a chord, less sqrt-small ripples. */
static void wide_disc_is_covered_geometrically(void **state)
{
	struct curve_parameters p = unit_edge(CONTACT_EMERSION);

	(void)state;
	p.component[0].shape = SHAPE_UNIFORM_DISC;
	p.component[0].size_rad = 0.5 * 400.0;
	struct curve *curve = make(&p);

	for (double x = -0.95; x < 1.0; x += 0.05) {
		double area = 0.5 + (asin(x) + x * sqrt(1.0 - x * x)) / M_PI;

		/* the pattern's tails reach 1 / (2 pi^2) over a strip of 2 / (pi radius) */
		assert_true(fabs(curve_value(curve, 200.0 * x) - area) < 1e-3);
	}
	curve_destroy(curve);
}

static void later_companion_is_later_for_both_kinds(void **state)
{
	(void)state;
	for (int kind = 0; kind < CONTACT_KINDS; kind++) {
		struct curve_parameters p = unit_edge((enum contact_kind)kind);
		double sign = kind == CONTACT_EMERSION ? 1.0 : -1.0;

		p.components = 2;
		p.component[0].flux = 3.0;
		p.component[1] = (struct source_component){ .shape = SHAPE_POINT, .flux = 1.0, .offset_rad = 0.5 * 2.5 };
		struct curve *curve = make(&p);

		for (double t = -6.0; t < 8.0; t += 0.31) {
			double expected = 0.75 * edge_intensity(sign * t) + 0.25 * edge_intensity(sign * (t - 2.5));

			assert_true(fabs(curve_value(curve, t) - expected) < 1e-13);
		}
		curve_destroy(curve);
	}
}

/*
 * The detector by brute force: y' = (x - y) / tau from 200 Fresnel times before, exact for straight pieces of 1/2000.
 * Their error is h^2 / 12 of the curvature, pi w at most: below 1e-6 up to 12 units.
 */
static void brute_filter(double tau, double sign, double *out, size_t n, double from, double h)
{
	double state = sign > 0.0 ? 0.0 : 1.0, keep = exp(-h / tau), slope = 1.0 - (1.0 - keep) * tau / h;
	double t = from - 200.0, last = edge_intensity(sign * t);

	/* coarse approach where nothing moves on the scale of the answer */
	for (size_t k = 1; k <= (size_t)lround(200.0 / h) + n; k++) {
		double now = edge_intensity(sign * (from - 200.0 + k * h));

		state = keep * state + (1.0 - keep) * last + slope * (now - last);
		last = now;
		if (k > (size_t)lround(200.0 / h))
			out[k - (size_t)lround(200.0 / h) - 1] = state;
	}
}

static void detector_agrees_with_brute_force(void **state)
{
	static const struct { double low, high; } detector[] = {
		{ 0.15, 0.0 }, { 2.0, 0.0 }, { 0.0, 0.4 }, { 0.0, 6.0 }, { 0.3, 2.0 }, { 2.0, 0.3 },
	};
	enum { N = 40000 };
	const double h = 1.0 / 2000, from = -8.0;
	double *low = malloc(N * sizeof(*low)), *high = malloc(N * sizeof(*high));

	(void)state;
	assert_true(low && high);
	for (size_t i = 0; i < 2 * sizeof(detector) / sizeof(detector[0]); i++) {
		double tau = detector[i / 2].low, tau2 = detector[i / 2].high, sign = i & 1 ? 1.0 : -1.0;
		struct curve_parameters p = unit_edge(i & 1 ? CONTACT_EMERSION : CONTACT_IMMERSION);

		p.low_pass_s = tau;
		p.high_pass_hz = tau2 > 0.0 ? 1.0 / (2.0 * M_PI * tau2) : 0.0;
		struct curve *curve = make(&p);

		if (tau > 0.0)
			brute_filter(tau, sign, low, N, from, h);
		if (tau2 > 0.0)
			brute_filter(tau2, sign, high, N, from, h);
		for (size_t k = 0; k < N; k += 137) {
			double t = from + (k + 1) * h, expected;

			if (tau2 <= 0.0)
				expected = low[k];
			else if (tau <= 0.0)
				expected = edge_intensity(sign * t) - high[k];
			else
				expected = tau2 / (tau2 - tau) * (low[k] - high[k]);
			assert_true(fabs(curve_value(curve, t) - expected) < PROMISE);
		}
		curve_destroy(curve);
	}
	free(high);
	free(low);
}

/* Equal corners have no partial fractions; the answer must lie between unequal neighbours. */
static void equal_corners_are_no_special_case(void **state)
{
	struct curve_parameters p = unit_edge(CONTACT_EMERSION), above = p, below = p;

	(void)state;
	p.low_pass_s = above.low_pass_s = below.low_pass_s = 1.5;
	p.high_pass_hz = 1.0 / (2.0 * M_PI * 1.5);
	above.high_pass_hz = p.high_pass_hz * 1.001;
	below.high_pass_hz = p.high_pass_hz * 0.999;
	struct curve *a = make(&p), *b = make(&above), *c = make(&below);

	for (double t = -10.0; t < 40.0; t += 0.37)
		assert_true(fabs(curve_value(a, t) - 0.5 * (curve_value(b, t) + curve_value(c, t))) < 2e-6);
	curve_destroy(a);
	curve_destroy(b);
	curve_destroy(c);
}

static void detector_delays_both_kinds(void **state)
{
	struct curve_parameters in = unit_edge(CONTACT_IMMERSION), out = unit_edge(CONTACT_EMERSION);

	(void)state;
	in.low_pass_s = out.low_pass_s = 3.0;
	struct curve *immersion = make(&in), *emersion = make(&out);

	/* a time constant late, each is still on its old side of the middle at the contact and mirrored by neither */
	assert_true(curve_value(immersion, 0.0) > 0.75 && curve_value(emersion, 0.0) < 0.2);
	/* ten time constants on what is left is exp(-10), of the step and of the little the pattern adds to it */
	assert_true(fabs(curve_value(emersion, 30.0) - 1.0) < 1e-3 && curve_value(immersion, 30.0) < 1e-3);
	curve_destroy(immersion);
	curve_destroy(emersion);
}

/* tau^2 times the energy of dI/dw over the energy of I, each about its mean, -reach to reach. */
static double differentiated_share(double reach, double tau)
{
	enum { SAMPLES = 20000 };
	double slope_sum = 0.0, slope_square = 0.0, sum = 0.0, square = 0.0;

	for (int k = 0; k < SAMPLES; k++) {
		double w = ((k + 0.5) / SAMPLES * 2.0 - 1.0) * reach, phase = M_PI_2 * w * w, c, s, value = edge_intensity(w);

		fresnel_integrals(w, &c, &s);
		double slope = (0.5 + c) * cos(phase) + (0.5 + s) * sin(phase);

		slope_sum += slope;
		slope_square += slope * slope;
		sum += value;
		square += value * value;
	}
	return tau * tau * (slope_square - slope_sum * slope_sum / SAMPLES) / (square - sum * sum / SAMPLES);
}

/* A high-pass far slower than the pattern turns the step into exp(-t / tau). */
static void slow_and_fast_high_pass_do_what_they_must(void **state)
{
	struct curve_parameters p = unit_edge(CONTACT_EMERSION);

	(void)state;
	p.high_pass_hz = 1.0 / (2.0 * M_PI * 4000.0);
	struct curve *curve = make(&p);

	for (double t = 1000.0; t < 60000.0; t *= 1.7)
		/* fringes 0.45 / t; the contact acts (int of the pattern less its step) / tau early or late */
		assert_true(fabs(curve_value(curve, t) - exp(-t / 4000.0)) < 0.46 / t + 0.5 / 4000.0);
	curve_destroy(curve);
	p.speed_mps = 0.1;      /* T_F 10 s */
	p.high_pass_hz = 1.0;
	/* a bare edge 160 s about its contact keeps 0.05% through a 1 Hz corner: refuse it */
	assert_true(curve_surviving_energy(&p, 160.0) < 1e-3);
	/* far above the pattern a high-pass is a differentiator: energy (T_F / tau)^2 of the slope, here in closed form */
	p.high_pass_hz = 20.0;
	assert_true(fabs(curve_surviving_energy(&p, 160.0) / differentiated_share(8.0, 1.0 / (2.0 * M_PI * 200.0)) - 1.0) < 1e-3);
	p.high_pass_hz = 1e-6;
	assert_true(curve_surviving_energy(&p, 160.0) > 0.99);
	assert_true(isnan(curve_surviving_energy(&p, 0.0)));
}

static double first_maximum(const struct curve_parameters *p)
{
	struct curve *curve = make(p);
	double time = curve_fresnel_time(p), best = 0.0, at = 0.0;

	for (double t = 0.2 * time; t < 2.0 * time; t += 1e-4 * time)
		if (curve_value(curve, t) > best) {
			best = curve_value(curve, t);
			at = t;
		}
	curve_destroy(curve);
	/* common practice: the first fringe stands about 40% above the uncovered level, less what the rig smooths away */
	assert_true(best > 1.30 && best < 1.42);
	return at;
}

static void real_rigs_look_as_they_should(void **state)
{
	struct curve_parameters optical = {
		.kind = CONTACT_EMERSION, .distance_m = 3.8e8, .speed_mps = 600.0, .passband = { PASSBAND_TOP_HAT, 0.6e-6, 30e-9 },
		.aperture_m = 0.3, .obstruction = 0.35, .integration_s = 1e-3, .components = 1,
		.component = { { .shape = SHAPE_POINT, .flux = 1.0 } },
	};
	struct curve_parameters radio = {
		.kind = CONTACT_EMERSION, .distance_m = 3.8e8, .speed_mps = 700.0, .passband = { PASSBAND_LINE, 0.7, 0.0 },
		.aperture_m = 5.0, .integration_s = 0.1, .low_pass_s = 0.2, .components = 1,
		.component = { { .shape = SHAPE_POINT, .flux = 1.0 } },
	};

	(void)state;
	assert_true(fabs(curve_fresnel_time(&optical) - 10.6771 / 600.0) < 1e-6);
	double blue = first_maximum(&optical);

	/* fringe spacing goes as the square root of the wavelength */
	optical.passband.wavelength_m *= 2.25;
	optical.passband.width_m *= 2.25;
	assert_true(fabs(first_maximum(&optical) / blue - 1.5) < 2e-3);
	/* the receiver's time constant is the delay of a slow change */
	assert_true(fabs(first_maximum(&radio) - (1.21720 * curve_fresnel_time(&radio) + 0.2)) < 0.02);
}

static void rejects_what_is_out_of_range(void **state)
{
	static const double wrong[] = { -1.0, NAN, INFINITY, -INFINITY };
	static const size_t field[] = {
#define FIELD(name) offsetof(struct curve_parameters, name)
		FIELD(distance_m), FIELD(speed_mps), FIELD(passband.wavelength_m), FIELD(passband.width_m), FIELD(aperture_m),
		FIELD(obstruction), FIELD(integration_s), FIELD(low_pass_s), FIELD(high_pass_hz), FIELD(component[0].size_rad),
		FIELD(component[0].limb_darkening), FIELD(component[0].flux),
	};
	struct curve_parameters good = unit_edge(CONTACT_EMERSION), bad;
	struct curve *curve = NULL;

	(void)state;
	good.passband.shape = PASSBAND_TOP_HAT;
	good.passband.width_m = 0.1;
	good.component[0] = (struct source_component){ SHAPE_LIMB_DARKENED_DISC, 0.2, 0.5, 1.0, 0.0 };
	for (size_t i = 0; i < sizeof(field) / sizeof(field[0]); i++)
		for (size_t j = 0; j < sizeof(wrong) / sizeof(wrong[0]); j++) {
			bad = good;
			memcpy((char *)&bad + field[i], &wrong[j], sizeof(double));
			assert_int_equal(curve_create(&curve, &bad), -EINVAL);
			assert_true(isnan(curve_surviving_energy(&bad, 16.0)));
		}
	bad = good, bad.components = 0;
	assert_int_equal(curve_create(&curve, &bad), -EINVAL);
	bad = good, bad.components = MAX_COMPONENTS + 1;
	assert_int_equal(curve_create(&curve, &bad), -EINVAL);
	bad = good, bad.component[0].flux = 0.0;
	assert_int_equal(curve_create(&curve, &bad), -EINVAL);
	bad = good, bad.component[0].offset_rad = NAN;
	assert_int_equal(curve_create(&curve, &bad), -EINVAL);
	bad = good, bad.obstruction = 1.0;
	assert_int_equal(curve_create(&curve, &bad), -EINVAL);
	bad = good, bad.passband.width_m = 1.5;
	assert_int_equal(curve_create(&curve, &bad), -EINVAL);
	bad = good, bad.component[0].limb_darkening = 1.01;
	assert_int_equal(curve_create(&curve, &bad), -EINVAL);
	assert_null(curve);
	curve_destroy(NULL);
}

static void sample_is_value_on_a_grid(void **state)
{
	struct curve_parameters p = unit_edge(CONTACT_IMMERSION);
	double out[500];

	(void)state;
	p.aperture_m = 0.1;
	struct curve *curve = make(&p);

	curve_sample(curve, -40.0, 0.16, 500, out);
	for (size_t k = 0; k < 500; k++)
		assert_true(out[k] == curve_value(curve, -40.0 + k * 0.16));
	assert_true(isnan(curve_value(curve, NAN)));
	assert_true(fabs(curve_value(curve, INFINITY)) < 1e-12 && fabs(curve_value(curve, -INFINITY) - 1.0) < 1e-12);
	curve_destroy(curve);
}

/* Corners far outside the pattern's own frequencies: a filter that does nothing, or leaves nothing. */
static void extreme_time_constants_stay_finite(void **state)
{
	static const double tiny[] = { 1e-300, 1e-12, 1e-8 }, huge[] = { 1e300, 1e12, 1e9 };

	(void)state;
	for (size_t i = 0; i < 6; i++) {
		struct curve_parameters p = unit_edge(i & 1 ? CONTACT_EMERSION : CONTACT_IMMERSION);
		double sign = i & 1 ? 1.0 : -1.0;

		p.low_pass_s = tiny[i / 2];
		struct curve *low = make(&p);

		p.low_pass_s = 0.0;
		p.high_pass_hz = huge[i / 2];
		struct curve *high = make(&p);

		p.high_pass_hz = 1.0 / huge[i / 2];
		struct curve *slow = make(&p);

		for (double t = -40.0; t < 41.0; t += 1.37) {
			assert_true(fabs(curve_value(low, t) - edge_intensity(sign * t)) < PROMISE);
			assert_true(fabs(curve_value(high, t)) < PROMISE);
			assert_true(fabs(curve_value(slow, t) - (edge_intensity(sign * t) - (i & 1 ? 0.0 : 1.0))) < PROMISE);
		}
		curve_destroy(low);
		curve_destroy(high);
		curve_destroy(slow);
	}
}

static double draw(uint64_t *seed)
{
	*seed = *seed * 6364136223846793005u + 1442695040888963407u;
	return (double)(*seed >> 11) / 9007199254740992.0;
}

static double decade(uint64_t *seed, double low, double high)
{
	return draw(seed) < 0.3 ? 0.0 : low * pow(high / low, draw(seed));
}

/*
 * Table and stationary phase are two independent ways to the same curve.  Where one takes over from the other, at both ends, they
 * must agree within the promise, whatever the parameters; and the table stays small.
 */
static void table_meets_the_far_field_for_any_parameters(void **state)
{
	uint64_t seed = 1970;
	double worst = 0.0;
	size_t largest = 0, refused = 0;

	(void)state;
	for (int i = 0; i < 300; i++) {
		struct spectrum spectrum = {
			.aperture = decade(&seed, 1e-3, 3.0), .obstruction = 0.9 * draw(&seed), .box = decade(&seed, 1e-3, 50.0),
		};
		struct response response;
		struct pattern pattern;

		if (i % 3)
			spectrum.disc = decade(&seed, 1e-3, 100.0), spectrum.darkening = draw(&seed);
		else
			spectrum.gauss = decade(&seed, 1e-3, 30.0);
		if (i % 2)
			spectrum.top_hat = decade(&seed, 1e-5, 1.0);
		else
			spectrum.band_sigma = decade(&seed, 1e-5, 0.2);
		response_init(&response, i % 5 < 2 ? 1 : -1, decade(&seed, 1e-3, 1e3), decade(&seed, 1e-3, 1e5));
		if (pattern_init(&pattern, &spectrum, &response)) {
			refused++;
			continue;
		}
		if (!pattern.bare) {
			largest = 2 * (size_t)pattern.half + 1 > largest ? 2 * (size_t)pattern.half + 1 : largest;
			bool fleeting = false;

			for (size_t k = 0; k < response.poles; k++)
				fleeting |= response.pole[k].tau < 0.5;
			for (double w = pattern.limit - 0.5; w < pattern.limit; w += 0.0371) {
				double ends[2] = { pattern_value(&pattern, w) - far_value(&pattern, w),
				                   pattern_value(&pattern, -w) - far_value(&pattern, -w) };

				/* the formula after the contact starts where the table ends, and a short memory runs backwards badly */
				if (fleeting)
					ends[response.direction > 0 ? 0 : 1] = 0.0;
				worst = fmax(worst, fmax(fabs(ends[0]), fabs(ends[1])));
				if (!(fabs(ends[0]) < PROMISE && fabs(ends[1]) < PROMISE))
					fail_msg("case %d: w %g, %.2e, %.2e; disc %g gauss %g aperture %g/%g box %g band %g/%g "
					         "poles %zu %g %g", i, w, ends[0], ends[1], spectrum.disc, spectrum.gauss,
					         spectrum.aperture, spectrum.obstruction, spectrum.box, spectrum.top_hat,
					         spectrum.band_sigma, response.poles, response.pole[0].tau, response.pole[1].tau);
			}
		}
		pattern_release(&pattern);
	}
	print_message("# seed 1970: ends meet within %.1e, largest table %zu values, %zu refused\n", worst, largest, refused);
	assert_int_equal(refused, 0);
	assert_true(largest * sizeof(double) < 1024 * 1024);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(bare_edge_is_the_edge),
		cmocka_unit_test(every_source_shape_follows_its_definition),
		cmocka_unit_test(aperture_and_passband_follow_their_definition),
		cmocka_unit_test(everything_together_follows_its_definition),
		cmocka_unit_test(wide_disc_is_covered_geometrically),
		cmocka_unit_test(later_companion_is_later_for_both_kinds),
		cmocka_unit_test(detector_agrees_with_brute_force),
		cmocka_unit_test(equal_corners_are_no_special_case),
		cmocka_unit_test(detector_delays_both_kinds),
		cmocka_unit_test(slow_and_fast_high_pass_do_what_they_must),
		cmocka_unit_test(real_rigs_look_as_they_should),
		cmocka_unit_test(rejects_what_is_out_of_range),
		cmocka_unit_test(sample_is_value_on_a_grid),
		cmocka_unit_test(extreme_time_constants_stay_finite),
		cmocka_unit_test(table_meets_the_far_field_for_any_parameters),
	};

	return cmocka_run_group_tests(tests, NULL, NULL);
}
