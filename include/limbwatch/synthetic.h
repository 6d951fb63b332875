/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_SYNTHETIC_H
#define LIMBWATCH_SYNTHETIC_H

#include "limbwatch/curve.h"
#include "limbwatch/intake.h"

/* What the synthetic intake plays, for those who compare: `rehearse` and the tests. */

struct synthetic_truth {
	struct tai contact;             /* geometric limb on the line of sight */
	double frame;                   /* the same as a fractional frame number of the (wrong) card clock */
	double fresnel_time_s;
	double snr;                     /* of the ideal matched filter over 16 T_F in the white noise, mean and slope free */
	double noise_rms;               /* per sample, full scale = 1 */
	double rate;                    /* nominal, frames per second */
};

/**
 * @param values  in the order of intake_synthetic.settings
 * @return 0; -EINVAL with a sentence when the settings do not go together or kind is none
 */
int synthetic_truth(const struct setting_value *values, struct synthetic_truth *out);

/** True frame number of a true instant `t` seconds after the start, by the card clock of these settings. NAN: no memory. */
double synthetic_frame(const struct setting_value *values, double t);

/** The event as the optics see it. */
void synthetic_curve(const struct setting_value *values, struct curve_parameters *out);

#endif
