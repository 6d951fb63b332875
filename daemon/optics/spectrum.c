/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <math.h>

#include "pattern.h"

/* Uniform disc, x = pi * diameter * nu: 2 J1(x) / x. */
static double airy(double x)
{
	return fabs(x) < 1e-8 ? 1.0 : 2.0 * j1(x) / x;
}

static double sinc(double x)
{
	return fabs(x) < 1e-8 ? 1.0 : sin(x) / x;
}

/* 3 (sin x - x cos x) / x^3: a disc whose brightness falls as mu. */
static double darkest(double x)
{
	if (fabs(x) < 0.1)
		return 1.0 - x * x / 10.0 * (1.0 - x * x / 28.0 * (1.0 - x * x / 54.0));
	return 3.0 * (sin(x) - x * cos(x)) / (x * x * x);
}

/* Linear limb darkening: Hanbury Brown et al. (1974), MNRAS 167, 475. */
static double disc(double x, double u)
{
	if (u <= 0.0)
		return airy(x);
	return ((1.0 - u) / 2.0 * airy(x) + u / 3.0 * darkest(x)) / ((1.0 - u) / 2.0 + u / 3.0);
}

double spectrum_smooth(const struct spectrum *spectrum, double nu)
{
	double value = 1.0;

	if (spectrum->disc > 0.0)
		value *= disc(M_PI * spectrum->disc * nu, spectrum->darkening);
	if (spectrum->gauss > 0.0) {
		double x = 2.0 * M_PI * spectrum->gauss * nu;

		value *= exp(-0.5 * x * x);
	}
	if (spectrum->aperture > 0.0) {
		double x = M_PI * spectrum->aperture * nu;
		double e = spectrum->obstruction;

		value *= (airy(x) - e * e * airy(e * x)) / (1.0 - e * e);
	}
	return value;
}

double spectrum_value(const struct spectrum *spectrum, double nu)
{
	double value = spectrum_smooth(spectrum, nu) * sinc(M_PI * spectrum->box * nu);
	double x = 2.0 * M_PI * nu * nu * spectrum->band_sigma;

	return value * sinc(M_PI * nu * nu * spectrum->top_hat) * exp(-0.5 * x * x);
}

/* |2 J1(x) / x| stays below 1.6 x^(-3/2), |sinc x| below 1 / x. */
static double airy_bound(double x)
{
	return x < 1.4 ? 1.0 : 1.6 / (x * sqrt(x));
}

double spectrum_bound(const struct spectrum *spectrum, double nu)
{
	double e = spectrum->obstruction;
	double x = 2.0 * M_PI * spectrum->gauss * nu;
	double y = 2.0 * M_PI * spectrum->band_sigma * nu * nu;
	double bound = exp(-0.5 * (x * x + y * y)) * airy_bound(M_PI * spectrum->disc * nu);
	double aperture = (airy_bound(M_PI * spectrum->aperture * nu)
	                   + e * e * airy_bound(M_PI * e * spectrum->aperture * nu)) / (1.0 - e * e);

	bound *= fmin(1.0, aperture);
	bound *= fmin(1.0, 1.0 / (M_PI * spectrum->box * nu));
	return bound * fmin(1.0, 1.0 / (M_PI * spectrum->top_hat * nu * nu));
}

double spectrum_extent(const struct spectrum *spectrum)
{
	/* Gaussian: three standard deviations; further out it is the smooth flank that far tails need. */
	return 0.5 * (spectrum->disc + spectrum->aperture) + 3.0 * spectrum->gauss;
}

double spectrum_variance(const struct spectrum *spectrum)
{
	double u = spectrum->darkening, e = spectrum->obstruction;
	/* disc: strip variance of (1 - u) uniform (R^2/4) and u mu-law (R^2/5), weighted by their flux */
	double radius = 0.5 * spectrum->disc;
	double strip = radius * radius * ((1.0 - u) / 2.0 / 4.0 + u / 3.0 / 5.0) / ((1.0 - u) / 2.0 + u / 3.0);
	double aperture = spectrum->aperture * spectrum->aperture / 16.0 * (1.0 + e * e);

	return strip + aperture + spectrum->gauss * spectrum->gauss + spectrum->box * spectrum->box / 12.0;
}
