/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef METER_INNER_H
#define METER_INNER_H

#include "limbwatch/meter.h"

/* What meter.c (levels and noise), meter_mains.c and meter_pulse.c share; all of it is one thread's. */

enum {
	PIECE = 256,                    /* frames measured together, at most: a power of two */
	MAINS_FAMILIES = 2,
	MAINS_LINES = MAINS_FAMILIES * METER_HARMONICS,
	MAINS_BETWEEN = 11,             /* frequencies between the lines, for the noise */
	MAINS_PROBES = MAINS_LINES + MAINS_BETWEEN,
	COMB_KEPT = 64,                 /* intervals between pulses that count */
	FORGET_LEAST = 16,              /* differences or pulses are always remembered */
};

/* Number, mean and sum of squares about it, merged from pieces: Chan, Golub & LeVeque (1983), Am. Stat. 37, 242. */
struct moments { double n, mean, square; };
void moments_merge(struct moments *m, const struct moments *other);

/* Window and frequencies, the same for every channel. */
struct mains_plan {
	unsigned octave;                /* averages of 2^octave frames are looked at */
	size_t length;                  /* averages in a window of a second; 0: the rate is too low for any line */
	double *window;
	double window_sum, window_squares, series_rate;
	double turn[MAINS_PROBES];      /* 2 cos of the angle from average to average; NAN: above what the rate carries */
	double response[MAINS_PROBES];  /* of the averaging, amplitude */
};

struct mains {
	size_t filled;
	double offset;                  /* taken off, so that the level does not leak into the lines */
	double s1[MAINS_PROBES], s2[MAINS_PROBES];      /* Goertzel's recursion */
	double power[MAINS_PROBES];     /* |X|^2, averaged over windows */
	unsigned windows;
	double spread;                  /* sum of the squares of the windows' weights: 1 / effective number */
};

int  mains_plan_create(struct mains_plan *out, double rate);
void mains_plan_clear(struct mains_plan *plan);
/** Averages of 2^octave frames, contiguous. */
void mains_feed(struct mains *mains, const struct mains_plan *plan, const double *x, size_t n);
/** After lost frames: the window in the making is given up. */
void mains_break(struct mains *mains);
void mains_report(const struct mains *mains, const struct mains_plan *plan, struct meter_channel *out);

/* Regular pulses out of all edges: those a whole number of seconds after the last regular one. */
struct comb {
	double rate, tolerance, slack;  /* frames per second; relative; frames */
	size_t kept;                    /* newest regular edges and their seconds, oldest first */
	struct { double frame, second; int sign; } edge[COMB_KEPT + 1];
	double challenger;              /* edge of another comb, which takes over when it is the regular one */
	unsigned challenges;
	unsigned seen, missing, spurious;
	bool broken;                    /* frames were lost since the last regular edge */
};

void comb_add(struct comb *comb, const struct pulse_edge *edge);
/** Frames a second by the pulses themselves; NAN before there are three. */
double comb_interval(const struct comb *comb);
/** Rms of the intervals about their mean, frames; NAN before there are three. */
double comb_scatter(const struct comb *comb);

/*
 * The step at the pulse, by where the comb expects the next one.  The same is measured 0.3 s earlier, where
 * mains hum of 50 or 60 Hz and all its harmonics stand at the same phase, and taken off.
 */
enum { LEAK_CONTROL, LEAK_PULSE, LEAK_PLACES };

struct leak_plan {                      /* the same for every channel */
	double rate, memory;            /* frames per second; pulses remembered */
	uint64_t reach;                 /* frames either side of a place; 0: no pulse */
	uint64_t centre[LEAK_PLACES];   /* first frame after the edge */
	bool set;
};

struct leak {
	double sum[LEAK_PLACES];        /* after less before, so far */
	uint64_t taken[LEAK_PLACES];    /* frames of it */
	struct moments steps;
};

/** A pulse of width_s, 0: unknown. */
void leak_plan_create(struct leak_plan *plan, double rate, double width_s, double memory_s);
/** Finds the next pulse whose control is not before frame `base`, unless one is under way. */
void leak_plan_next(struct leak_plan *plan, const struct comb *comb, uint64_t base);
/** Whether the pulse has passed when the frames before `end` have: leak_finish() every channel then. */
bool leak_plan_over(struct leak_plan *plan, uint64_t end);
/** Frames base, base + 1 ... of one channel. */
void leak_take(struct leak *leak, const struct leak_plan *plan, const double *x, size_t n, uint64_t base);
void leak_finish(struct leak *leak, const struct leak_plan *plan);
/** After lost frames: the pulse under way is given up. */
void leak_break(struct leak *leak);

#endif
