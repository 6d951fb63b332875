/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_CONTACT_H
#define LIMBWATCH_CONTACT_H

#include <stdbool.h>
#include <stdint.h>
#include "limbwatch/tai.h"

enum contact_kind { CONTACT_IMMERSION, CONTACT_EMERSION };
enum { CONTACT_KINDS = 2 };
/** "immersion", "emersion". */
const char *contact_kind_name(enum contact_kind kind);

enum verdict { VERDICT_STEP, VERDICT_FRINGES };
/** "step-like", "fringes confirmed". */
const char *verdict_name(enum verdict verdict);

/* A contact seen by the recorder.  Standard uncertainties are k = 1. */
struct contact {
	double   frame;                 /* frames since start, fractional: the geometric limb crosses the line of sight */
	double   frame_sigma;           /* of the fit alone, frames */
	struct tai when;
	double   sigma_s;               /* of `when`, all terms; NAN when the time is free */
	struct {                        /* its terms, seconds */
		double fit, clock, response;
	} terms;
	enum time_quality time_quality;
	bool     second_confirmed;      /* which second it is: see frame_clock.h */
	enum contact_kind kind;
	enum verdict verdict;
	double   snr;                   /* rho: matched-filter peak over noise rms, baseline marginalised */
	double   chi2_excess;           /* residual per degree of freedom; 1 expected */
	bool     marked;                /* chi2_excess above its limit: kept, but not a clean edge */
	double   fringe_gain;           /* rho_fringe^2 less the best sharp step's or ramp's rho^2 */
	double   fresnel_time_s;        /* of the best fit */
	double   shadow_speed_mps;      /* from it, with the distance and wavelength expected */
	double   size_fresnel;          /* diameter of the best template's disc, Fresnel units */
	double   flux;                  /* height of the edge, full scale = 1 */
	double   baseline;              /* level with the source covered, full scale = 1 */
	unsigned channel;               /* index in the configuration's list */
	int      expected;              /* index in the configuration's list of expected contacts, or -1 */
};

#endif
