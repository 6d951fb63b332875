/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * Which edges are pulses: those that keep whole seconds at a rate near the nominal one.  A comb begins where most of the next
 * edges follow it, and is followed from pulse to pulse by the rate of the last half minute.
 */
#include <math.h>
#include "frame_clock_inner.h"

enum { SEED_WINDOW = 40 };

static const double gate_floor_s = 20e-6;       /* a pulse this near its place is never refused by tracking */
static const double settled_rate = 5e-6;         /* the rate is known this well after a few pulses */
static const double longest_outage_s = 900;     /* pulses missing longer: the comb is found anew */
static const double sparse_s = 10;              /* the first pulses of a comb follow each other within this */

/* Number of whole seconds from pulse a to pulse b, or 0 when they are not on one comb. */
static double steps(const struct node *a, const struct node *b, double gap_s, double rate, double tolerance)
{
	double seconds = (b->frame - a->frame) / rate, n = rint(seconds);
	double gate = tolerance * n + gate_floor_s + 5 * (a->sigma_s + b->sigma_s) + 5 * gap_s;

	return n >= 1 && n <= longest_outage_s && gate < 0.3 && fabs(seconds - n) <= gate ? n : 0;
}

/* Follows the comb that begins at node `seed` through at most `most` nodes; marks them when `mark`. @return length */
static size_t follow(struct frame_clock *c, size_t seed, size_t most, bool mark)
{
	struct node *from = &c->node[seed];
	double rate = c->settings.rate, tolerance = c->settings.rate_tolerance, k = from->k, gap_s = 0;
	const struct node *first = from;
	size_t length = 1;

	if (mark)
		from->accepted = true;
	for (size_t i = seed + 1; i < c->nodes && i - seed <= most; i++) {
		struct node *to = &c->node[i];
		double n;

		gap_s = hypot(gap_s, to->gap_s);        /* the first edge after a gap may be a spurious one */
		n = steps(from, to, gap_s, rate, tolerance);
		if (n == 0 || (length < FRAME_CLOCK_LOCK && n > sparse_s)) {
			if (to->frame - from->frame > longest_outage_s * rate)
				break;
			continue;
		}
		k += n;
		length++;
		if (mark) {
			to->accepted = true;
			to->k = k;
		}
		/* The rate from the last half minute or so: the first pulse of the base moves along. */
		if (gap_s > 0)
			first = to;
		else if (k - first->k > 40)
			first = from;
		if (k - first->k >= 3) {
			rate = (to->frame - first->frame) / rint((to->frame - first->frame) / rate);
			tolerance = settled_rate;
		}
		from = to;
		gap_s = 0;
	}
	if (mark)
		c->lock = (struct lock){ (size_t)(from - c->node), from->frame, from->k, rate };
	return length;
}

/* The label nearest to a frame, among those before (direction -1) or after it (+1), that is good for telling seconds. */
static const struct label *near_label(const struct frame_clock *c, double frame, int direction)
{
	const struct label *best = NULL;

	for (size_t i = 0; i < c->labels; i++) {
		const struct label *l = &c->label[i];
		double away = direction * (l->frame - frame);

		if (away >= 0 && away * c->settings.rate_tolerance < 0.1 * c->settings.rate && l->sigma_s < 0.1 &&
		    (!best || away < direction * (best->frame - frame)))
			best = l;
	}
	return best;
}

/* Seconds from the end of the last comb to a pulse: labels see frames that were lost in silence, else the frames count. */
static double seconds_since_lock(const struct frame_clock *c, double frame)
{
	const struct label *before = near_label(c, c->lock.frame, -1), *after = near_label(c, frame, 1);

	if (before && after)
		return tai_difference(after->when, before->when) - (after->frame - frame) / c->lock.rate -
			(c->lock.frame - before->frame) / c->lock.rate;
	return (frame - c->lock.frame) / c->lock.rate;
}

void frame_comb_find(struct frame_clock *c)
{
	size_t i = 0;
	bool any = false;

	for (size_t j = 0; j < c->nodes; j++)
		c->node[j].accepted = c->node[j].relock = false;
	while (i < c->nodes) {
		size_t best = i, length = 0;

		for (size_t seed = i; seed < c->nodes && seed < i + SEED_WINDOW; seed++) {
			size_t here = follow(c, seed, SEED_WINDOW, false);

			if (here > length) {
				length = here;
				best = seed;
			}
			if (here >= SEED_WINDOW * 3 / 4)
				break;
		}
		if (length < FRAME_CLOCK_LOCK) {
			i += SEED_WINDOW / 2;
			continue;
		}
		c->node[best].k = any ? c->lock.k + rint(seconds_since_lock(c, c->node[best].frame)) : 0;
		c->node[best].relock = any;
		follow(c, best, c->nodes, true);
		any = true;
		i = c->lock.last + 1;
	}
}
