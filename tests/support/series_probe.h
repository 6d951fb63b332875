/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef SERIES_PROBE_H
#define SERIES_PROBE_H

#include <gsl/gsl_rng.h>
#include <stddef.h>
#include "limbwatch/detector.h"

/*
 * An invented series for the detector: a source that comes out and goes behind an edge, in noise.  Optical: 371 500 km, 612 m/s,
 * 620 nm, 0.28 m aperture; T_F about 17.5 ms; the series' rate is 16 samples per T_F.
 */

/** Settings of the invented receiver, both kinds, scales 0.6 to 1.6, 0.5 false alarms per night. */
void series_settings(struct detector_settings *out);

struct series_event {
	enum contact_kind kind;
	double contact;                 /* series samples */
	double scale;                   /* T_F over the expected */
	double size;                    /* diameter of a uniform disc, Fresnel units */
	double flux;
};

/** x[k] += event at sample first + k.  Not through the bank: one curve, its boxcar being the series' own. */
void series_add_event(const struct detector_settings *settings, const struct series_event *event, double first,
                      float *x, size_t n);

/**
 * For white noise of rms 1 and flux 1, in the detector's window, mean and slope marginalised.
 *
 * @param bound  Cramér-Rao bound of the contact for flux 1, samples, scale and flux marginalised; divides by the flux
 * @return SNR of the ideal matched filter
 */
double series_unit_snr(const struct detector_settings *settings, const struct series_event *event, double *bound);

/* Gaussian noise: white of rms `white` and first-order autoregressive of rms `red`, `memory` samples long. */
struct series_noise { gsl_rng *rng; double white, red, memory, state; };
void series_noise(struct series_noise *noise, float *x, size_t n);

#endif
