/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_CURVE_H
#define LIMBWATCH_CURVE_H

#include <stddef.h>
#include "limbwatch/contact.h"

/* The light curve one channel sees of one contact: edge pattern averaged over source, passband and aperture, then the detector. */

enum source_shape { SHAPE_POINT, SHAPE_UNIFORM_DISC, SHAPE_LIMB_DARKENED_DISC, SHAPE_GAUSSIAN };

struct source_component {
	enum source_shape shape;
	double size_rad;                /* diameter; FWHM of a Gaussian; >= 0 */
	double limb_darkening;          /* u of I(mu) = 1 - u (1 - mu), 0 to 1 */
	double flux;                    /* relative; the sum is normalised to 1 */
	double offset_rad;              /* along the limb normal; positive: this component's contact is later */
};
enum { MAX_COMPONENTS = 3 };

enum passband_shape { PASSBAND_LINE, PASSBAND_TOP_HAT, PASSBAND_GAUSSIAN };

struct curve_parameters {
	enum contact_kind kind;
	double distance_m;              /* observer to limb, > 0 */
	double speed_mps;               /* of the shadow along the limb normal, > 0 */
	struct {
		enum passband_shape shape;
		double wavelength_m;    /* centre, in wavelength */
		double width_m;         /* full width of a top hat; FWHM of a Gaussian */
	} passband;
	double aperture_m;              /* diameter of a circular telescope or dish aperture; 0: point. */
	double obstruction;             /* central obstruction / aperture, 0 to < 1 */
	double integration_s;           /* boxcar, centred on the time asked for; 0: none */
	double low_pass_s;              /* time constant of a one-pole low-pass; 0: none */
	double high_pass_hz;            /* corner of a one-pole high-pass (AC coupling); 0: none */
	size_t components;              /* 1 to MAX_COMPONENTS */
	struct source_component component[MAX_COMPONENTS];
};

struct curve;

/**
 * Tabulates the curve.  Absolute error of values below 1e-6 of the source's total flux.
 *
 * Besides the ranges above: sizes and aperture up to 500 Fresnel units, integration up to 100 T_F, low-pass up to 1e9 T_F, a top hat
 * up to 1 and a Gaussian up to 0.5 of the centre wavelength.  A millisecond and some 60 KiB a component; where source or integration
 * spans hundreds of units, up to 50 ms and 2 MiB.
 *
 * @param out  the caller's to destroy; untouched on failure
 * @return 0; -EINVAL when a parameter is out of range or not finite; -ENOMEM
 */
int curve_create(struct curve **out, const struct curve_parameters *parameters);
void curve_destroy(struct curve *curve);

/**
 * Level at t seconds after the contact (w = 0 of the first component at its centre, and of the passband's centre
 * wavelength; delays of the detector make the curve late, not the contact early).
 *
 * @return 0 covered .. 1 uncovered, with fringes above; with high_pass_hz about 0 on both sides
 */
double curve_value(const struct curve *curve, double t);

/** out[k] = curve_value(t0 + k dt), n values. */
void curve_sample(const struct curve *curve, double t0, double dt, size_t n, double *out);

/** T_F = fresnel_scale / speed, seconds, at the centre wavelength. */
double curve_fresnel_time(const struct curve_parameters *parameters);

/**
 * Share of the edge's energy about its mean over `window_s` centred on the contact that survives high_pass_hz; 1 without it.
 * NAN when a parameter or the window is out of range.
 */
double curve_surviving_energy(const struct curve_parameters *parameters, double window_s);

#endif
