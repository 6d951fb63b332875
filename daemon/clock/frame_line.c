/* SPDX-License-Identifier: GPL-3.0-or-later */
/* Time by the labels alone: the straight line through those that are believed. */
#include <math.h>
#include "frame_clock_inner.h"

static const double slope_baseline_s = 300;     /* labels over less time say nothing about the rate */
static const double steady = 1e-6;              /* a card's rate changes by so much with a night's temperature */
static const double one_stamp_s = 0.03;         /* a stamp on arrival may be late by this: common practice for sound devices */

/*
 * Of labels that err late: the line that touches them from below at two places far apart.  The sigma of the slope allows for the
 * lateness of those two and for a card that warms up.
 */
static double touching_slope(const struct frame_clock *c, double from, double span, double *sigma)
{
	double first = INFINITY, last = INFINITY, first_at = 0, last_at = 0;

	for (size_t k = 0; k < c->labels; k++) {
		double at = (c->label[k].frame - from) / c->settings.rate, offset = c->label[k].offset;

		if (!c->label[k].believed)
			continue;
		if (at < span / 3 && offset < first) {
			first = offset;
			first_at = at;
		}
		if (at >= span * 2 / 3 && offset < last) {
			last = offset;
			last_at = at;
		}
	}
	*sigma = 0.001 / span + steady;
	return (last - first) / (last_at - first_at);
}

/* Weighted moments of the labels that do not err late, and the line through them: the offset at the mean frame, and their scatter. */
struct straight { double n, sum, frame, offset, slope, slope_sigma, scatter; };

static bool counts(const struct label *l)
{
	return l->believed && !l->late;
}

static double weight_of(const struct label *l)
{
	return 1 / (l->sigma_s * l->sigma_s + 1e-12);
}

/* Least squares.  The labels share their clock's error, so only what they scatter goes down with their number. */
static struct straight straight_line(const struct frame_clock *c, double span)
{
	struct straight s = { 0 };
	double spread = 0, cross = 0, rest = 0;

	for (size_t k = 0; k < c->labels; k++)
		if (counts(&c->label[k])) {
			double w = weight_of(&c->label[k]);

			s.n++;
			s.sum += w;
			s.frame += w * (c->label[k].frame - c->label[0].frame);
			s.offset += w * c->label[k].offset;
		}
	s.frame = c->label[0].frame + s.frame / s.sum;
	s.offset /= s.sum;
	for (size_t k = 0; k < c->labels; k++)
		if (counts(&c->label[k])) {
			double w = weight_of(&c->label[k]), dt = (c->label[k].frame - s.frame) / c->settings.rate;
			double off = c->label[k].offset - s.offset;

			spread += w * dt * dt;
			cross += w * dt * off;
			rest += w * off * off;
		}
	s.slope = cross / spread;
	rest = fmax(0, rest - s.slope * cross) / (s.n - 2);
	s.scatter = sqrt(rest / s.sum);
	s.slope_sigma = sqrt(rest / spread) + 0.001 / span + steady;
	return s;
}

/* Seconds over which believed labels of one sort say something about the rate; 0: they do not. */
static double slope_span(const struct frame_clock *c, bool late, double *from)
{
	double to = NAN;
	size_t n = 0;

	*from = NAN;
	for (size_t k = 0; k < c->labels; k++)
		if (c->label[k].believed && c->label[k].late == late) {
			*from = n++ ? *from : c->label[k].frame;
			to = c->label[k].frame;
		}
	return n >= 12 && to - *from >= slope_baseline_s * c->settings.rate ? (to - *from) / c->settings.rate : 0;
}

/* The least of n delays is about their mean over n above none; one alone says nothing about its own. */
static double lateness(const struct frame_clock *c, double least)
{
	double n = 0, sum = one_stamp_s;

	for (size_t k = 0; k < c->labels; k++)
		if (c->label[k].believed) {
			n++;
			sum += c->label[k].offset - c->line_slope * c->label[k].frame / c->settings.rate - least;
		}
	return fmax(0, sum / n) / n;
}

static const struct label *best_on_line(const struct frame_clock *c, bool late, double *offset)
{
	const struct label *best = NULL;

	for (size_t k = 0; k < c->labels; k++) {
		const struct label *l = &c->label[k];
		double here = l->offset - c->line_slope * l->frame / c->settings.rate;

		if (!l->believed || l->late != late)
			continue;
		if (!best || (late ? here < *offset : l->sigma_s < best->sigma_s)) {
			best = l;
			*offset = here;
		}
	}
	return best;
}

static void set_line(struct frame_clock *c, double pivot, double offset, double sigma_s)
{
	const struct label *newest = &c->label[c->labels - 1];

	c->line_pivot = pivot;
	c->line_base = tai_add(newest->when, (pivot - newest->frame) / c->settings.rate + offset);
	c->line_sigma_s = hypot(sigma_s, c->label_doubt_s);
	c->line_fitted = true;
}

void clock_fit_line(struct frame_clock *c)
{
	const struct label *best;
	double offset = 0, from, span, sigma;
	bool late = true;

	/* One label that does not err late is worth more than any that do. */
	for (size_t k = 0; k < c->labels; k++)
		late &= !counts(&c->label[k]);
	c->line_slope = 0;
	c->line_slope_sigma = c->settings.rate_tolerance;
	span = slope_span(c, late, &from);
	if (span > 0 && late) {
		double slope = touching_slope(c, from, span, &sigma);

		if (fabs(slope) <= c->settings.rate_tolerance) {
			c->line_slope = slope;
			c->line_slope_sigma = fmin(sigma, c->settings.rate_tolerance);
		}
	}
	best = best_on_line(c, late, &offset);
	if (!best)
		return;
	set_line(c, best->frame, best->offset, hypot(best->sigma_s, late ? lateness(c, offset) : 0));
	if (span > 0 && !late) {
		struct straight s = straight_line(c, span);

		if (fabs(s.slope) > c->settings.rate_tolerance)
			return;
		c->line_slope = s.slope;
		c->line_slope_sigma = fmin(s.slope_sigma, c->settings.rate_tolerance);
		set_line(c, s.frame, s.offset, hypot(best->sigma_s, s.scatter));
	}
}
