/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_NOISE_H
#define LIMBWATCH_NOISE_H

#include <stddef.h>

/* The noise of a series, measured from the series itself. */

enum {
	NOISE_SEGMENT = 512,            /* samples of a segment; segments overlap by half */
	NOISE_BINS = NOISE_SEGMENT / 2 + 1,
	NOISE_KEPT = 80,                /* newest segments that count */
	NOISE_LINES = 3,                /* mains lines at most */
	NOISE_LAGS = NOISE_SEGMENT / 2,
};

struct noise;

/** -ENOMEM. Caller destroys. */
int  noise_create(struct noise **out);
void noise_destroy(struct noise *noise);

/** Takes one event-free segment of NOISE_SEGMENT samples.  No allocation. */
void noise_add(struct noise *noise, const float *segment);
/** Forgets all segments. */
void noise_clear(struct noise *noise);
/** Segments that count, up to NOISE_KEPT. */
size_t noise_count(const struct noise *noise);

struct noise_model {
	double covariance[NOISE_LAGS];  /* autocovariance at lags 0 .. NOISE_LAGS - 1; positive definite as a Toeplitz matrix */
	size_t lines;
	double line[NOISE_LINES];       /* mains and other narrow lines, cycles per sample */
};

/**
 * The spectrum is the median over the segments' periodograms (Hann window, mean and slope removed), bin by bin, smoothed
 * over frequency by 15%; a contact or a burst in a few segments does not count.  Narrow lines ten times above their
 * surroundings are taken out and named.
 *
 * @return 0; -ENODATA with less than 4 segments; -EDOM when the series does not move at all
 *
 * Sources: Welch (1967), IEEE Trans. Audio Electroacoust. 15, 70; median and its bias: Allen et al. (2012), Phys. Rev. D 85,
 * 122006, appendix B.
 */
int noise_measure(const struct noise *noise, struct noise_model *out);

/** White noise of that variance: what is assumed before anything was measured. */
void noise_assume(double variance, struct noise_model *out);

#endif
