/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * Fresnel integrals and the diffraction pattern of a straight edge.
 *
 * Everything goes back to the auxiliary functions of DLMF 7.2(iv),
 *
 *	int_w^infinity exp(i pi u^2 / 2) du = exp(i pi w^2 / 2) [g(w) + i f(w)],    w >= 0,
 *
 * because f and g fall smoothly where C and S oscillate: in the shadow the intensity is (f^2 + g^2) / 2 with no cancellation.
 */
#include <math.h>

#include "limbwatch/fresnel.h"

/* Beyond this 1 / (pi w) is below 1e-17 and C, S are 1/2 to the last bit. */
#define FAR_W 3.2e16
/* Below this the power series is shorter, and keeps relative accuracy down to the denormals. */
#define SERIES_W 1.0

/* Deep in the shadow the intensity is TAIL / w^2. */
#define TAIL (0.5 * M_1_PI * M_1_PI)

enum { NODES = 12 };

/* One w taken apart: phase pi w^2 / 2 reduced exactly, and the auxiliary functions. */
struct auxiliary {
	double sine, cosine;
	double f, g;
};

/*
 * Sine and cosine of pi w^2 / 2.  w^2 is formed as an unevaluated sum, so that nothing is lost when whole turns (w^2 = 4) are
 * taken off, however large w is.
 */
static void reduced_phase(double w, double *sine, double *cosine)
{
	double square = w * w;
	double rest = fma(w, w, -square);
	double turn = fmod(square, 4.0);
	double quarter = nearbyint(turn);
	double angle = M_PI_2 * ((turn - quarter) + rest);
	double s = sin(angle), c = cos(angle);

	switch ((int)quarter & 3) {
	case 0:
		*sine = s;
		*cosine = c;
		break;
	case 1:
		*sine = c;
		*cosine = -s;
		break;
	case 2:
		*sine = -s;
		*cosine = -c;
		break;
	default:
		*sine = -c;
		*cosine = s;
		break;
	}
}

/*
 * The midpoint rule for the Faddeeva integral, with the residue of the pole that the rule straddles put back:
 *
 *	g + i f = h w / sqrt(pi) sum_k exp(-t_k^2) (t_k^2 + i phi) / (t_k^4 + phi^2)
 *	          + (1 + i) exp(-i phi) / [1 + exp(q - i q)],
 *	phi = pi w^2 / 2, t_k = (k - 1/2) h, h = sqrt(pi / (N + 1/2)), q = pi^(3/2) w / h.
 *
 * The error is of order exp(-pi (N + 1/2)): 1e-17 with twelve nodes.
 * Source: Alazah, Chandler-Wilde & La Porte (2014), Numerische Mathematik 128, 635.
 */
static void midpoint_sum(double w, double *real, double *imaginary)
{
	/* (k - 1/2)^2 pi / 12.5, and the exponential of its negative */
	static const struct { double square, weight; } node[NODES] = {
		{ 6.28318530717958679e-02, 9.39101367424292621e-01 },
		{ 5.65486677646162783e-01, 5.68083605877734321e-01 },
		{ 1.57079632679489656e+00, 2.07879576350761902e-01 },
		{ 3.07876080051799716e+00, 4.60162446385278187e-02 },
		{ 5.08938009881546538e+00, 6.16183843443004510e-03 },
		{ 7.60265422168729987e+00, 4.99124885647275773e-04 },
		{ 1.06185831691335011e+01, 2.44572669573648102e-05 },
		{ 1.41371669411540690e+01, 7.24947251598793766e-07 },
		{ 1.81584055377490046e+01, 1.29988422941187066e-08 },
		{ 2.26822989589183059e+01, 1.40994679695499394e-10 },
		{ 2.77088472046619749e+01, 9.25125302267138309e-13 },
		{ 3.32380502749800115e+01, 3.67196198461394198e-15 },
	};
	double phi = M_PI_2 * w * w;
	double sum_real = 0.0, sum_imaginary = 0.0;

	for (int k = NODES - 1; k >= 0; k--) {
		double square = node[k].square;
		double factor = node[k].weight / (square * square + phi * phi);

		sum_real += factor * square;
		sum_imaginary += factor;
	}
	double scale = w / sqrt(NODES + 0.5);   /* h w / sqrt(pi) */

	*real = scale * sum_real;
	*imaginary = scale * phi * sum_imaginary;
}

/* The argument of the residue, pi^(3/2) w / h. */
static double residue_argument(double w)
{
	return M_PI * sqrt(NODES + 0.5) * w;
}

/* 0 <= w <= FAR_W */
static struct auxiliary auxiliary_functions(double w)
{
	struct auxiliary a;
	double q = residue_argument(w);

	reduced_phase(w, &a.sine, &a.cosine);
	midpoint_sum(w, &a.g, &a.f);
	if (q < 80.0) {
		/* 1 / (1 + exp(q - i q)), times (1 + i) exp(-i phi) */
		double decay = exp(-q);
		double re = decay + cos(q), im = sin(q);
		double norm = decay / (re * re + im * im);
		double u = a.cosine + a.sine, v = a.cosine - a.sine;

		a.g += norm * (re * u - im * v);
		a.f += norm * (re * v + im * u);
	}
	return a;
}

/* DLMF 7.6.4 and 7.6.6. */
static void power_series(double w, double *c, double *s)
{
	double phi = M_PI_2 * w * w;
	double term = w, sum_c = w, sum_s = 0.0;

	for (int n = 1; n < 30; n++) {
		double add;

		term *= phi / n;
		add = term / (2 * n + 1);
		if (n & 1)
			sum_s += n & 2 ? -add : add;
		else
			sum_c += n & 2 ? -add : add;
		if (fabs(add) < 1e-19 * fabs(w))
			break;
	}
	*c = sum_c;
	*s = sum_s;
}

void fresnel_integrals(double w, double *c, double *s)
{
	double a = fabs(w);

	if (isnan(w)) {
		*c = *s = w;
	} else if (a < SERIES_W) {
		power_series(w, c, s);
	} else if (a > FAR_W) {
		*c = *s = copysign(0.5, w);
	} else {
		struct auxiliary x = auxiliary_functions(a);

		*c = copysign(0.5 + (x.f * x.sine - x.g * x.cosine), w);
		*s = copysign(0.5 - (x.f * x.cosine + x.g * x.sine), w);
	}
}

double edge_intensity(double w)
{
	double a = fabs(w);

	if (isnan(w))
		return w;
	if (w < 0.0 && a <= FAR_W) {
		struct auxiliary x = auxiliary_functions(a);

		return 0.5 * (x.f * x.f + x.g * x.g);
	}
	if (a > FAR_W)
		return w > 0.0 ? 1.0 : TAIL / a / a;

	double c, s;

	fresnel_integrals(w, &c, &s);
	return 0.5 * ((0.5 + c) * (0.5 + c) + (0.5 + s) * (0.5 + s));
}

/*
 * By parts, with d(sin phi) = pi w cos(phi) dw: the terms S(sqrt(2) w) of the integrals of C^2 and S^2 cancel in the sum, and
 *
 *	int I = w I(w) + [(1/2 + S) cos(phi) - (1/2 + C) sin(phi)] / pi,
 *
 * which in the shadow is f(|w|) / pi - |w| (f^2 + g^2) / 2.
 */
double edge_intensity_excess(double w)
{
	double a = fabs(w);

	if (isnan(w))
		return w;
	if (a > FAR_W)
		return w > 0.0 ? 0.0 : TAIL / a;

	struct auxiliary x = auxiliary_functions(a);
	double square = x.f * x.f + x.g * x.g;

	if (w < 0.0)
		return x.f / M_PI - 0.5 * a * square;
	/* w f is 1 / pi at large w, so that bracket is taken first and loses nothing. */
	return (x.sine - x.cosine) * (w * x.f - M_1_PI) - w * x.g * (x.cosine + x.sine) + (0.5 * w * square - x.f / M_PI);
}

double edge_intensity_integral(double w)
{
	return fmax(w, 0.0) + edge_intensity_excess(w);
}

double fresnel_scale(double wavelength, double distance)
{
	double scale = sqrt(0.5 * wavelength * distance);

	if (!(wavelength > 0.0 && distance > 0.0 && isfinite(scale)))
		return NAN;
	return scale;
}
