/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef PULSE_PHASE_INNER_H
#define PULSE_PHASE_INNER_H

#include "limbwatch/pulse_phase.h"

/* What pulse_phase.c (where pulses belong) and phase_weigh.c (what a jump is) share. */

enum { LINE = 12, SEEN = 16, SHIFTS = 8, STAMPS = 64, RATIOS = 24 };

struct phase_edge { double at, sigma, k; };

/* Edges off their place by the same amount. */
struct phase_shift {
	int count;
	double sum, first_off;
	double first, first_k, last_k, sigma;   /* first: frame as counted by the card */
	double frame[LINE], edge_sigma[LINE];   /* of the edges themselves, LINE at most */
};

/* |Distance from the line| over sigma of the newest pulses. */
struct phase_ratios { int count; double of[RATIOS]; };

struct phase_stamp { double frame, seconds; bool late; };

struct pulse_phase {
	struct pulse_phase_settings settings;
	double lost;                    /* jumps so far */
	int line;                       /* 0: no pulses found */
	struct phase_edge pulse[LINE];
	double newest;                  /* frame of the newest pulse in its place, as counted by the card */
	double origin, slope, middle;   /* frame `origin` + slope (k - middle) */
	double variance, slope_variance;
	double scatter;                 /* how much larger the pulses' scatter is than stated */
	struct phase_ratios ratio, pending;   /* pending: of edges off their place that may be pulses worse than stated */
	int seen;                       /* edges since there was a line, for finding one */
	struct phase_edge edge[SEEN];
	int shifts;
	struct phase_shift shift[SHIFTS];
	double jumped;                  /* frame of the newest jump */
	bool gap;                       /* declared, and not passed by an edge yet */
	double first_gap, newest_gap;   /* frames, of those */
	int stamps;
	struct phase_stamp stamp[STAMPS];
};

/** Variance of the place of second k, frames squared: what the line's pulses leave, and how a drift bends it. */
double phase_place_variance(const struct pulse_phase *phase, double k);
/** Variance of a shift, were it `seconds` whole seconds later. */
double phase_shift_variance(const struct pulse_phase *phase, const struct phase_shift *shift, double seconds);
/** What a shift that is taken for a jump means. */
void phase_weigh(const struct pulse_phase *phase, const struct phase_shift *shift, struct phase_loss *out);

#endif
