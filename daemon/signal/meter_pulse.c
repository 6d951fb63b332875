/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <math.h>
#include <string.h>
#include "meter_inner.h"

static const double unsure = 0.25;      /* seconds: when the card's error may have grown to this, any edge would fit */
static const unsigned takeover = 2;     /* regular intervals in a row of another comb */

/* Seconds from one edge to another, when they are a whole number; 0 when not; -1: too long ago to tell. */
static double seconds_between(const struct comb *c, double from, double to)
{
	double apart = to - from, seconds = rint(apart / c->rate);
	double slack = c->slack + c->tolerance * seconds * c->rate;

	if (slack > unsure * c->rate)
		return -1;
	return seconds >= 1 && fabs(apart - seconds * c->rate) <= slack ? seconds : 0;
}

static void keep(struct comb *c, const struct pulse_edge *edge, double seconds)
{
	double second = c->kept ? c->edge[c->kept - 1].second + seconds : 0;

	if (c->kept == COMB_KEPT + 1)
		memmove(c->edge, c->edge + 1, --c->kept * sizeof(*c->edge));
	c->edge[c->kept].frame = edge->frame;
	c->edge[c->kept].second = second;
	c->edge[c->kept].sign = edge->height > 0 ? 1 : -1;
	c->kept++;
	c->challenges = 0;
	c->broken = false;
}

/* An edge off the comb: three of them in a row that are regular among themselves are the pulse, and the first was not. */
static void challenge(struct comb *c, const struct pulse_edge *edge)
{
	c->spurious++;
	c->challenges = c->challenges && seconds_between(c, c->challenger, edge->frame) > 0 ? c->challenges + 1 : 1;
	c->challenger = edge->frame;
	if (c->challenges <= takeover)
		return;
	c->spurious -= c->challenges;
	c->spurious += c->kept == 1;     /* it was never confirmed */
	c->kept = 0;
	keep(c, edge, 0);
}

void comb_add(struct comb *c, const struct pulse_edge *edge)
{
	double seconds;

	c->seen++;
	if (c->broken)
		c->kept = 0;            /* how many frames were lost is not known to a fraction of one */
	seconds = c->kept ? seconds_between(c, c->edge[c->kept - 1].frame, edge->frame) : 0;
	if (seconds < 0)
		c->kept = 0;
	if (!c->kept || seconds >= 1) {
		if (c->kept)
			c->missing += (unsigned)seconds - 1;
		keep(c, edge, seconds);
	} else {
		challenge(c, edge);
	}
}

double comb_interval(const struct comb *c)
{
	if (c->kept < 3)
		return NAN;
	return (c->edge[c->kept - 1].frame - c->edge[0].frame) / (c->edge[c->kept - 1].second - c->edge[0].second);
}

double comb_scatter(const struct comb *c)
{
	double interval = comb_interval(c), sum = 0;

	if (isnan(interval))
		return NAN;
	for (size_t k = 1; k < c->kept; k++) {
		double apart = c->edge[k].frame - c->edge[k - 1].frame;

		sum += pow(apart - interval * (c->edge[k].second - c->edge[k - 1].second), 2);
	}
	return sqrt(sum / (double)(c->kept - 2));
}
