/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <cmocka.h>

#include <float.h>
#include <gsl/gsl_integration.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>

#include "limbwatch/fresnel.h"

#define REFERENCE "tests/data/fresnel_reference.csv"

/* Decimal arithmetic by DLMF 7.6 and 7.12, 200 digits, over every binary order: see tests/data/make_fresnel_reference.py. */
static void agrees_with_decimal_arithmetic_at_every_size(void **state)
{
	char line[256];
	size_t rows = 0;
	double worst = 0.0, worst_intensity = 0.0;
	FILE *file = fopen(REFERENCE, "r");

	(void)state;
	assert_non_null(file);
	while (fgets(line, sizeof(line), file)) {
		double w, c, s, intensity, mine_c, mine_s;

		if (line[0] == '#')
			continue;
		assert_int_equal(sscanf(line, "%la,%le,%le,%le", &w, &c, &s, &intensity), 4);
		fresnel_integrals(w, &mine_c, &mine_s);
		worst = fmax(worst, fmax(fabs(mine_c - c), fabs(mine_s - s)));
		if (!(fabs(mine_c - c) < 1e-14 && fabs(mine_s - s) < 1e-14))
			fail_msg("w = %.17g: C %.17g for %.17g, S %.17g for %.17g", w, mine_c, c, mine_s, s);
		/* in the shadow relatively, where only a form without cancellation can do it */
		double error = fabs(edge_intensity(w) - intensity) / (w < 0.0 ? intensity : 1.0);

		worst_intensity = fmax(worst_intensity, isfinite(error) ? error : 0.0);
		if (!(error < 2e-14 || intensity < DBL_MIN))
			fail_msg("w = %.17g: intensity %.17g for %.17g", w, edge_intensity(w), intensity);
		rows++;
	}
	fclose(file);
	print_message("# %zu arguments: C, S within %.1e, intensity within %.1e (shadow: relative)\n", rows, worst,
	              worst_intensity);
	assert_true(rows > 500);
}

/* Abramowitz & Stegun (1964), Table 7.7, seven decimals (from memory). */
static void agrees_with_abramowitz_and_stegun(void **state)
{
	static const struct { double u, c, s; } table_7_7[] = {
		{ 0.1, 0.0999975, 0.0005236 }, { 0.5, 0.4923442, 0.0647324 }, { 1.0, 0.7798934, 0.4382591 },
		{ 1.5, 0.4452612, 0.6975050 }, { 2.0, 0.4882534, 0.3434157 }, { 2.5, 0.4574130, 0.6191818 },
		{ 3.0, 0.6057208, 0.4963130 }, { 3.5, 0.5325724, 0.4152480 }, { 4.0, 0.4984260, 0.4205158 },
		{ 4.5, 0.5260259, 0.4342730 }, { 5.0, 0.5636312, 0.4991914 },
	};

	(void)state;
	for (size_t i = 0; i < sizeof(table_7_7) / sizeof(table_7_7[0]); i++) {
		double c, s;

		fresnel_integrals(table_7_7[i].u, &c, &s);
		/* half the last printed digit */
		assert_true(fabs(c - table_7_7[i].c) <= 5.01e-8);
		assert_true(fabs(s - table_7_7[i].s) <= 5.01e-8);
	}
}

static void ends_and_zero_are_exact(void **state)
{
	double c, s;

	(void)state;
	fresnel_integrals(INFINITY, &c, &s);
	assert_true(c == 0.5 && s == 0.5);
	fresnel_integrals(-INFINITY, &c, &s);
	assert_true(c == -0.5 && s == -0.5);
	fresnel_integrals(-0.0, &c, &s);
	assert_true(c == 0.0 && s == 0.0);
	fresnel_integrals(DBL_TRUE_MIN, &c, &s);
	assert_true(c == DBL_TRUE_MIN && s == 0.0);
	fresnel_integrals(NAN, &c, &s);
	assert_true(isnan(c) && isnan(s));
	assert_true(isnan(edge_intensity(NAN)) && isnan(edge_intensity_integral(NAN)) && isnan(edge_intensity_excess(NAN)));
	assert_true(edge_intensity(0.0) == 0.25);
	assert_true(edge_intensity(INFINITY) == 1.0 && edge_intensity(-INFINITY) == 0.0);
	assert_true(edge_intensity_integral(-INFINITY) == 0.0 && isinf(edge_intensity_integral(INFINITY)));
}

/* DLMF 7.2.7 and 7.2.8 differentiated: C' = cos(pi w^2 / 2), S' = sin(pi w^2 / 2). */
static void slopes_are_the_integrands(void **state)
{
	const double h = 1e-3;

	(void)state;
	for (double w = -6.0; w < 6.0; w += 0.0373) {
		double c[4], s[4];

		for (int i = 0; i < 4; i++)
			fresnel_integrals(w + (i < 2 ? i - 2 : i - 1) * h, &c[i], &s[i]);
		/* five-point rule: h^4 / 30 times the fifth derivative, (pi w)^4, 4e-9 here */
		assert_true(fabs((c[0] - 8 * c[1] + 8 * c[2] - c[3]) / (12 * h) - cos(M_PI_2 * w * w)) < 2e-8);
		assert_true(fabs((s[0] - 8 * s[1] + 8 * s[2] - s[3]) / (12 * h) - sin(M_PI_2 * w * w)) < 2e-8);
	}
}

/* DLMF 7.5.3, 7.5.4 with 7.12.2, 7.12.3: f = [1 - 3 / y^2 + 105 / y^4] / (pi w), g = [1 - 15 / y^2] / (pi^2 w^3), y = pi w^2. */
static void tends_to_its_asymptotic_form(void **state)
{
	(void)state;
	for (double w = 20.0; w < 2000.0; w *= 1.37) {
		double phase = M_PI_2 * fmod(w * w, 4.0), y = M_PI * w * w, c, s;
		double f = (1.0 - 3.0 / (y * y) * (1.0 - 35.0 / (y * y))) / (M_PI * w), g = (1.0 - 15.0 / (y * y)) / (M_PI * M_PI * w * w * w);
		double rounding = w * w * DBL_EPSILON * f;      /* of w * w here */

		fresnel_integrals(w, &c, &s);
		assert_true(fabs(c - (0.5 + f * sin(phase) - g * cos(phase))) < 1e-13 + 4.0 * rounding);
		assert_true(fabs(s - (0.5 - f * cos(phase) - g * sin(phase))) < 1e-13 + 4.0 * rounding);
	}
}

/* Steps across the seams between series, sum and constant are no larger than the slope allows. */
static void seams_do_not_show(void **state)
{
	static const double seam[] = { 1.0, 80.0 / (M_PI * 3.5355339059327378), 3.2e16 };

	(void)state;
	for (size_t i = 0; i < sizeof(seam) / sizeof(seam[0]); i++) {
		double below = nextafter(seam[i], 0.0), above = nextafter(seam[i], INFINITY), c[2], s[2];

		fresnel_integrals(below, &c[0], &s[0]);
		fresnel_integrals(above, &c[1], &s[1]);
		/* slope at most 1 over two units of the last place; beyond 1e16 nothing is left of the fringes */
		double move = fmin(above - below, 2e-17);

		assert_true(fabs(c[1] - c[0]) < move + 5e-15 && fabs(s[1] - s[0]) < move + 5e-15);
	}
}

static double intensity(double w, void *unused)
{
	(void)unused;
	return edge_intensity(w);
}

/* GSL's adaptive quadrature of the intensity, and of its tail from minus infinity. */
static void integral_agrees_with_quadrature(void **state)
{
	static const double end[] = { -40.0, -12.5, -5.0, -2.0, -1.0, -0.3, 0.0, 0.4, 1.0, 1.7, 3.0, 6.0, 11.0 };
	gsl_integration_workspace *work = gsl_integration_workspace_alloc(2000);
	gsl_function function = { .function = intensity };
	double below, error;

	(void)state;
	assert_non_null(work);
	gsl_integration_qagil(&function, end[0], 1e-15, 1e-12, 2000, work, &below, &error);
	assert_true(fabs(edge_intensity_integral(end[0]) - below) < 1e-14);
	for (size_t i = 1; i < sizeof(end) / sizeof(end[0]); i++) {
		double part;

		gsl_integration_qag(&function, end[i - 1], end[i], 1e-15, 1e-13, 2000, GSL_INTEG_GAUSS61, work, &part, &error);
		below += part;
		/* the sum carries the quadratures' own error: 1e-13 of 11 */
		assert_true(fabs(edge_intensity_integral(end[i]) - below) < 3e-12);
	}
	gsl_integration_workspace_free(work);
}

/* Deep in the shadow the integral is 1 / (2 pi^2 |w|); far in the light w plus fringes that vanish. */
static void integral_keeps_its_digits_far_away(void **state)
{
	(void)state;
	for (double w = 1e3; w < 1e18; w *= 7.3) {
		double expected = 1.0 / (2.0 * M_PI * M_PI * w);

		assert_true(fabs(edge_intensity_integral(-w) / expected - 1.0) < 1e-9);
		/* the fringe part of the excess is below 2 / (pi w)^2 */
		assert_true(fabs(edge_intensity_excess(w) + expected) < 2.0 / (M_PI * M_PI * w * w) + 1e-15);
	}
}

static double extreme(double low, double high, double sign)
{
	const double golden = 0.3819660112501051;

	while (high - low > 1e-9) {
		double a = low + golden * (high - low), b = high - golden * (high - low);

		if (sign * edge_intensity(a) > sign * edge_intensity(b))
			high = b;
		else
			low = a;
	}
	return 0.5 * (low + high);
}

/* Born & Wolf, Principles of Optics, section 8.7; positions and levels to the digits given. */
static void extremes_agree_with_born_and_wolf(void **state)
{
	double maximum = extreme(0.5, 1.6, 1.0), minimum = extreme(1.5, 2.2, -1.0);

	(void)state;
	assert_true(fabs(maximum - 1.21720) < 6e-6);
	assert_true(fabs(edge_intensity(maximum) - 1.37044) < 6e-6);
	assert_true(fabs(minimum - 1.87252) < 6e-6);
	assert_true(fabs(edge_intensity(minimum) - 0.77825) < 6e-6);
	/* common practice: the first fringe stands about 40% above the uncovered level */
	assert_true(fabs(edge_intensity(maximum) - 1.40) < 0.05);
}

/* Inside the shadow the intensity falls without fringes. */
static void shadow_falls_steadily(void **state)
{
	double before = edge_intensity(-1e6);

	(void)state;
	for (double w = -30.0; w < 0.0; w += 0.01) {
		double now = edge_intensity(w);

		assert_true(now > before);
		before = now;
	}
}

static void scale_is_sqrt_of_half_wavelength_times_distance(void **state)
{
	(void)state;
	/* 0.6 um at 3.84e8 m: 10.73 m; four times the wavelength doubles it */
	assert_true(fabs(fresnel_scale(0.6e-6, 3.84e8) - 10.7331) < 1e-4);
	assert_true(fabs(fresnel_scale(2.4e-6, 3.84e8) / fresnel_scale(0.6e-6, 3.84e8) - 2.0) < 1e-15);
	assert_true(isnan(fresnel_scale(0.0, 1.0)) && isnan(fresnel_scale(1.0, -1.0)));
	assert_true(isnan(fresnel_scale(NAN, 1.0)) && isnan(fresnel_scale(1.0, INFINITY)));
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(agrees_with_decimal_arithmetic_at_every_size),
		cmocka_unit_test(agrees_with_abramowitz_and_stegun),
		cmocka_unit_test(ends_and_zero_are_exact),
		cmocka_unit_test(slopes_are_the_integrands),
		cmocka_unit_test(tends_to_its_asymptotic_form),
		cmocka_unit_test(seams_do_not_show),
		cmocka_unit_test(integral_agrees_with_quadrature),
		cmocka_unit_test(integral_keeps_its_digits_far_away),
		cmocka_unit_test(extremes_agree_with_born_and_wolf),
		cmocka_unit_test(shadow_falls_steadily),
		cmocka_unit_test(scale_is_sqrt_of_half_wavelength_times_distance),
	};

	return cmocka_run_group_tests(tests, NULL, NULL);
}
