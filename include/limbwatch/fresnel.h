/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_FRESNEL_H
#define LIMBWATCH_FRESNEL_H

/**
 * Fresnel integrals C(w) = int_0^w cos(pi u^2/2) du, S(w) likewise with sin.
 *
 * @param w  any double; NaN gives NaN, +-infinity gives +-1/2
 * Absolute error below 1e-14 for every finite w.
 */
void fresnel_integrals(double w, double *c, double *s);

/**
 * Intensity behind a straight edge, uncovered level 1.
 *
 * I(w) = {[1/2 + C(w)]^2 + [1/2 + S(w)]^2} / 2; I(0) = 1/4.
 * @param w  Fresnel units, positive outside the shadow
 * Source: Born & Wolf, Principles of Optics, section 8.7.
 */
double edge_intensity(double w);

/**
 * Integral of edge_intensity from -infinity to w (converges: I falls as 1/(2 pi^2 w^2) in the shadow), closed form.
 */
double edge_intensity_integral(double w);

/** edge_intensity_integral(w) - max(w, 0), kept apart so that short differences far in the light lose nothing. */
double edge_intensity_excess(double w);

/**
 * Fresnel scale at the observer, sqrt(wavelength * distance / 2): the length of one unit of w.
 *
 * @param wavelength  metres, > 0
 * @param distance    observer to limb, metres, > 0
 * @return metres; NAN when an argument is out of range
 */
double fresnel_scale(double wavelength, double distance);

#endif
