/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef FRAME_CLOCK_INNER_H
#define FRAME_CLOCK_INNER_H

#include "limbwatch/frame_clock.h"

/* What frame_comb.c (which edges are pulses), frame_clock.c (the smooth) and frame_labels.c (labels, readings) share. */

enum { FRAME_CLOCK_LABELS = 512, FRAME_CLOCK_GAPS = 256, FRAME_CLOCK_LOCK = 5 };

/* The card's accumulated error x, seconds, and relative frequency error y, with their covariance. */
struct state { double x, y, xx, xy, yy; };

struct node {
	double frame, sigma_s;
	double gap_s, gap_frame;        /* uncertainty of frames lost since the pulse before, and where */
	double jump_s, jump_frame;      /* the same since the accepted pulse before */
	double k;                       /* whole seconds from the first accepted pulse */
	double variance, residual;
	bool comb, accepted;            /* on a comb of seconds; and near the smooth */
	bool relock;                    /* first of a comb found anew */
	struct state state;             /* filtered forward, then smoothed */
};

struct label {
	double frame, sigma_s;
	struct tai when;
	bool late;
	enum time_quality quality;
};

/* Where the comb was followed to: the node, its frame and second, and the rate there. */
struct lock { size_t last; double frame, k, rate; };

struct gap_at { double frame, sigma_s; };

struct frame_clock {
	struct frame_clock_settings settings;
	size_t nodes, room;
	struct node *node;
	double gap_s, gap_frame;        /* since the newest pulse */
	struct lock lock;
	size_t gaps;
	struct gap_at gap_at[FRAME_CLOCK_GAPS];
	size_t labels;
	struct label label[FRAME_CLOCK_LABELS];
	/* The last solution. */
	size_t accepted;
	double walk, rms_residual_s, first_rate;
	bool rate_found;
	bool labelled, second_confirmed, contradiction_said;
	double second_zero;             /* TAI second of k = 0 */
	double label_sigma_s;           /* of the label that decided */
	/* Without pulses: TAI seconds = base + frame / rate * (1 + slope), about frame `pivot`. */
	double line_pivot, line_slope, line_sigma_s, line_slope_sigma;
	struct tai line_base;
	bool line_fitted;
};

/** Marks the pulses of the comb, with k; where it is lost for long, a new one begins. */
void frame_comb_find(struct frame_clock *clock);
/** Seconds from k = 0 at a frame, by the pulses; `sigma` (may be NULL) of the smooth alone. Needs accepted pulses. */
double clock_seconds(const struct frame_clock *clock, double frame, double *sigma);
/** Labels older than a node that will be the oldest are moved onto it by the last solution. */
void carry_labels(struct frame_clock *clock, const struct node *oldest);
/** Decides which second k = 0 is, and fits the line through the labels. */
void label_seconds(struct frame_clock *clock);

#endif
