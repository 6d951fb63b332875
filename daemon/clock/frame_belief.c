/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * Which labels are believed.  A computer without a clock battery says a wrong date until the network tells it better; someone sets
 * the clock: labels from before and after disagree by the step.  The newest that agree among themselves count, however many
 * older ones there are; and until there are enough of them, the disagreement stands in sigma and the second is not confirmed.
 */
#include <math.h>
#include <stdlib.h>
#include "frame_clock_inner.h"
#include "limbwatch/log.h"

enum { NEWEST = 5, NEWEST_LATE = 8, ENOUGH = 3 };

static const double agreement_sigmas = 2.5;
static const double agreement_s = 0.05;
static const double lateness_s = 0.05;          /* the earliest of eight late stamps is late by less */
static const double stall_s = 2;                /* two stamps in a row later than this: the clock was set */

/* What the newest labels say, and the neighbour that is compared at the moment. */
struct reference { double offset, sigma_s, frame; bool late; };

/* TAI less seconds of frames, from the newest label; without pulses the card's error is in it. */
static void measure_offsets(struct frame_clock *c)
{
	const struct label *newest = &c->label[c->labels - 1];
	double there = c->accepted ? clock_seconds(c, newest->frame, NULL) : 0;

	for (size_t k = 0; k < c->labels; k++) {
		struct label *l = &c->label[k];
		double seconds = (l->frame - newest->frame) / c->settings.rate;

		if (c->accepted)
			seconds = clock_seconds(c, l->frame, NULL) - there;
		l->offset = tai_difference(l->when, newest->when) - seconds;
		l->believed = false;
		/* Taken among frames lost in silence: as good as none. */
		l->vague = l->sigma_s > 1.5 * l->told_sigma_s + 0.01;
	}
}

static int by_size(const void *a, const void *b)
{
	double x = *(const double *)a, y = *(const double *)b;

	return (x > y) - (x < y);
}

/* Late labels are a clock's stamps and never early: the least of the newest.  Of others the median. */
static struct reference newest_say(const struct frame_clock *c)
{
	double offset[NEWEST_LATE];
	struct reference r = { .late = c->label[c->labels - 1].late, .frame = c->label[c->labels - 1].frame };
	size_t n = 0, most = r.late ? NEWEST_LATE : NEWEST;

	for (size_t k = c->labels; k-- > 0 && n < most; ) {
		if (c->label[k].late != r.late || c->label[k].vague || c->label[k].setting != c->label[c->labels - 1].setting)
			continue;
		offset[n++] = c->label[k].offset;
		r.sigma_s = fmax(r.sigma_s, c->label[k].sigma_s);
	}
	if (n == 0)
		return r;
	if (n <= 2 && !r.late) {
		r.offset = offset[0];
		return r;
	}
	qsort(offset, n, sizeof(*offset), by_size);
	r.offset = offset[r.late ? 0 : n / 2];
	return r;
}

/* How far labels may disagree that far apart: without pulses by what the card and gaps may do. */
static double card_slack(const struct frame_clock *c, double a, double b)
{
	if (c->accepted)
		return 0;
	return fabs(a - b) / c->settings.rate * c->settings.rate_tolerance + 5 * sqrt(clock_gap_variance(c, a, b));
}

/* 0: agrees; 1: a late label that is only late; -1: contradicts. */
static int compare(const struct frame_clock *c, const struct label *l, const struct reference *r)
{
	/* Late ones are one clock's: they share its error, and scatter by their lateness only. */
	double sigmas = l->late && r->late ? 0.7 : agreement_sigmas;
	double off = l->offset - r->offset, slack = agreement_s + card_slack(c, l->frame, r->frame) +
		sigmas * hypot(l->sigma_s, r->sigma_s);

	if (off < -slack - (r->late ? lateness_s : 0))
		return -1;
	if (off > slack)
		return l->late ? 1 : -1;
	return 0;
}

/*
 * Backward from the newest, each against what the newest say and against its believed neighbours; three in a row that
 * contradict end it, whatever stands before.
 */
static size_t believe(struct frame_clock *c, const struct reference *newest)
{
	struct reference near = *newest;
	unsigned against = 0;
	size_t believed = 0;

	for (size_t k = c->labels; k-- > 0 && against < ENOUGH; ) {
		struct label *l = &c->label[k];
		int whole = compare(c, l, newest), here = compare(c, l, &near);

		if (l->vague)
			continue;
		if (whole < 0 || here < 0) {
			against++;
			continue;
		}
		if (whole > 0 || here > 0)
			continue;
		l->believed = true;
		believed++;
		against = 0;
		near = (struct reference){ l->late ? fmin(l->offset, near.offset + card_slack(c, l->frame, near.frame)) : l->offset,
			l->sigma_s, l->frame, l->late };
	}
	return believed;
}

/* The widest disagreement; `open`: of labels newer than those believed. */
static double disagreement(const struct frame_clock *c, const struct reference *newest, bool *open)
{
	double widest = 0;
	unsigned stalled = 0;
	bool newer = true;

	*open = false;
	for (size_t k = c->labels; k-- > 0; ) {
		const struct label *l = &c->label[k];
		double off = fabs(l->offset - newest->offset);
		int is;

		newer &= !l->believed;
		if (l->believed || l->vague)
			continue;
		is = compare(c, l, newest);
		/* Only late, or set forward? */
		stalled = newer && is > 0 && off > stall_s ? stalled + 1 : 0;
		if (is > 0 && stalled < 2)
			continue;
		*open |= newer;
		widest = fmax(widest, fmax(0, off - card_slack(c, l->frame, newest->frame)));
	}
	return widest;
}

void clock_believe_labels(struct frame_clock *c)
{
	struct reference newest;
	double widest;
	size_t believed;
	bool open;

	c->label_doubt_s = 0;
	if (!c->labels)
		return;
	measure_offsets(c);
	newest = newest_say(c);
	believed = believe(c, &newest);
	widest = disagreement(c, &newest, &open);
	if (believed == 0)              /* nothing but vague ones */
		c->label[c->labels - 1].believed = true;
	if (widest > 0 && (open || believed < ENOUGH))
		c->label_doubt_s = widest;
	if (fabs(widest - c->doubt_said_s) > 0.1 + 0.1 * c->doubt_said_s && widest > 0) {
		log_warning("what is said of the time disagrees by %.3f s with what was said before: the clock was set, or frames were "
		            "lost in silence; the newest counts", widest);
		c->doubt_said_s = widest;
	}
}
