/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef FRAME_CLOCK_INNER_H
#define FRAME_CLOCK_INNER_H

#include "limbwatch/frame_clock.h"
#include "limbwatch/pulse_phase.h"

/* What frame_comb.c (which edges are pulses), frame_clock.c (the smooth), frame_loss.c (frames that no number counts),
 * frame_belief.c (which labels are right), frame_line.c (labels alone) and frame_labels.c (seconds, readings) share.
 *
 * `told`: the number the card gives to a frame.  `frame`: with the frames lost in silence before it added, made anew by each
 * solution. */

enum { FRAME_CLOCK_LABELS = 512, FRAME_CLOCK_GAPS = 256, FRAME_CLOCK_LOCK = 5 };

/* The card's accumulated error x, seconds, and relative frequency error y, with their covariance. */
struct state { double x, y, xx, xy, yy; };

struct node {
	double told, frame, sigma_s;
	double gap_s, gap_told;         /* uncertainty of frames lost since the pulse before, and where */
	double jump_s, jump_frame;      /* the same since the accepted pulse before */
	double k;                       /* whole seconds from the first accepted pulse */
	double variance, residual;
	bool comb, accepted;            /* on a comb of seconds; and near the smooth */
	bool relock;                    /* first of a comb found anew */
	struct state state;             /* filtered forward, then smoothed */
};

struct label {
	double told, frame;
	double told_sigma_s, sigma_s;   /* as claimed; with the place among lost frames unknown */
	struct tai when;
	bool late;
	enum time_quality quality;
	double offset;                  /* TAI less seconds by the frames, against the newest label */
	unsigned setting;               /* of the clock it was read from */
	bool vague, believed;
};

/* Where the comb was followed to: the node, its frame and second, and the rate there. */
struct lock { size_t last; double frame, k, rate; };

struct gap_at { double told, frame, sigma_s; };

/* Frames lost in silence somewhere between two frames as told; `sum` without its own. */
struct lost { double after, before, frames, sum; bool found; };         /* found: by the clock itself */

struct frame_clock {
	struct frame_clock_settings settings;
	size_t nodes, room;
	struct node *node;
	struct lock lock;
	size_t gaps;
	struct gap_at gap_at[FRAME_CLOCK_GAPS];
	struct pulse_phase *phase;      /* NULL below a frame a second */
	double found;                   /* frames lost by what `phase` found: it counts those itself */
	size_t losses, loss_room;
	struct lost *loss;
	size_t labels;
	struct label label[FRAME_CLOCK_LABELS];
	unsigned setting;               /* how often the labels' clock was set */
	/* The last solution. */
	size_t accepted;
	double walk, rms_residual_s, first_rate;
	bool rate_found;
	bool labelled, second_confirmed, contradiction_said;
	double second_zero;             /* TAI second of k = 0 */
	double label_sigma_s;           /* of the label that decided */
	double label_doubt_s;           /* by how much labels disagree, as long as it is not decided which are right */
	double doubt_said_s;
	/* Without pulses: TAI seconds = base + frame / rate * (1 + slope), about frame `pivot`. */
	double line_pivot, line_slope, line_sigma_s, line_slope_sigma;
	struct tai line_base;
	bool line_fitted;
};

/** Marks the pulses of the comb, with k; where it is lost for long, a new one begins. */
void frame_comb_find(struct frame_clock *clock);
/** Seconds from k = 0 at a frame, by the pulses; `sigma` (may be NULL) of the smooth alone. Needs accepted pulses. */
double clock_seconds(const struct frame_clock *clock, double frame, double *sigma);
/**
 * The frame with those lost in silence before it.  Where the place of the loss is not known it may be anywhere:
 * the mean over all places, and their standard deviation (frames; may be NULL).
 */
double clock_counted(const struct frame_clock *clock, double told, double *sigma_frames);
/** The inverse. */
double clock_told(const struct frame_clock *clock, double frame);
/** A new pulse may show a jump of the phase that nobody told. */
void clock_watch_phase(struct frame_clock *clock, double frame, double sigma_frames);
/** Counts the frames of all that is known, and says behind which gaps each pulse stands. */
void clock_count_all(struct frame_clock *clock);
/** Labels older than a node that will be the oldest are moved onto it by the last solution. */
void carry_labels(struct frame_clock *clock, const struct node *oldest);
/** Marks the labels that are believed, by the pulses when there are some. */
void clock_believe_labels(struct frame_clock *clock);
/** What is not known about the length of the gaps between two frames, variance in seconds squared. */
double clock_gap_variance(const struct frame_clock *clock, double from, double to);
/** Fits the line through the believed labels; there are labels. */
void clock_fit_line(struct frame_clock *clock);
/** Decides which second k = 0 is, and fits the line through the labels. */
void label_seconds(struct frame_clock *clock);

#endif
