/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_DETECTOR_H
#define LIMBWATCH_DETECTOR_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>
#include "limbwatch/contact.h"
#include "limbwatch/curve.h"

/*
 * One channel's series -> contacts.  Template bank with generalised least squares, the noise measured from the
 * series itself, baseline marginalised, checks, refined contact time from the fit grid (noise.h and bank.h are
 * the inner parts).
 */
struct detector;

enum { DETECTOR_WINDOW = 256 };         /* samples of a window, 16 T_F of the expected event when rate = 16 / T_F */

struct detector_settings {
	double rate;                    /* series samples per second */
	/*
	 * What is expected: distance, speed, passband, aperture, source size, integration and responses of the receiver;
	 * `kind` is ignored.  The series' own integrate-and-dump (1 / rate) is added by the detector.
	 */
	struct curve_parameters curve;
	bool   kind[CONTACT_KINDS];     /* which kinds to watch for */
	double scale_min, scale_max;    /* span of T_F watched, relative to the expected; 0.6, 1.6 */
	double scale_sigma;             /* standard uncertainty of ln(T_F) about the expected: a prior of the fit; 0: none */
	double false_alarms_per_night;  /* outside vigils; a night is ten hours */
	double false_alarms_per_vigil;
	double threshold;               /* fixed rho threshold; 0: from the false alarms */
	double scintillation;           /* epsilon: fractional mismatch allowed in chi2_excess, 0.1 */
};

struct candidate {
	enum contact_kind kind;
	/* Contact in series samples: sample k is the mean over [k, k + 1), its middle k + 1/2. */
	double position;
	double position_sigma;          /* samples; noise, with scale, height and baseline marginalised */
	double snr;                     /* rho of the best template of the fit grid */
	double scale;                   /* best T_F over the expected */
	double scale_sigma;
	double size;                    /* diameter of the best disc, Fresnel units */
	double flux;                    /* height of the edge, units of the series */
	double baseline;                /* level with the source covered, units of the series */
	double chi2_excess;
	bool   marked;                  /* chi2_excess above its limit: kept and said */
	double fringe_gain;
	enum verdict verdict;
	bool   noise_prior;             /* the noise was not measured yet from 20 event-free windows */
	double threshold;               /* in force there */
};

/** Builds bank and tables. -EINVAL with a sentence when a setting is out of range. Caller destroys. */
int  detector_create(struct detector **out, const struct detector_settings *settings);
void detector_destroy(struct detector *detector);

/**
 * Inside a vigil: contacts of that kind are expected about `centre` (series samples) +- sigma (samples, one standard
 * deviation); the threshold there follows from false_alarms_per_vigil with this prior.  sigma <= 0 ends it.
 */
void detector_expect(struct detector *detector, enum contact_kind kind, double centre, double sigma);

/**
 * Signal thread.  Takes n samples numbered index, index + 1 ...; NAN is a missing sample; a jump in `index` starts
 * anew (measured noise is kept).  A contact is given once its whole neighbourhood has passed: `detector_latency`.
 *
 * @return candidates given, in order of position, at most `max` (the rest come with the next call)
 */
size_t detector_execute(struct detector *detector, const float *series, size_t n, uint64_t index,
                        struct candidate *out, size_t max);
/**
 * End of the data: decides about what is left.  A contact whose window (16 T_F, 79% of it after an emersion, 21% after an
 * immersion) is not whole by then is not given.
 */
size_t detector_finish(struct detector *detector, struct candidate *out, size_t max);

/** Samples from a contact to the call that gives it, at most, once the detector has started. */
double detector_latency(const struct detector *detector);
/** Samples held back at the beginning until the noise has been measured from them; their contacts come then. */
double detector_startup(const struct detector *detector);
/** Rms of the series' noise over one T_F at the last measurement, units of the series; NAN before. */
double detector_noise(const struct detector *detector);
/** Threshold in force outside vigils. */
double detector_threshold(const struct detector *detector);

#endif
