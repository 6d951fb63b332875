/* SPDX-License-Identifier: GPL-3.0-or-later */
/* Labels say which second a pulse is, or, without pulses, what time it is at all; and the readings of the clock. */
#include <math.h>
#include <string.h>
#include "frame_clock_inner.h"
#include "limbwatch/log.h"

static const double sure_sigma_s = 0.1;         /* far below half a second */
static const double half_second_s = 0.5;
static const double least_walk = 1e-20;         /* 1e-10 per root second: a good crystal (common practice) */

void frame_clock_add_label(struct frame_clock *c, double frame, struct tai when, double sigma_s, bool late,
                           enum time_quality quality)
{
	if (!isfinite(frame) || !(sigma_s >= 0) || quality == TIME_FREE)
		return;
	/* A full list is thinned: every second label goes, the first stays. */
	if (c->labels == FRAME_CLOCK_LABELS) {
		for (size_t k = 1; 2 * k < c->labels; k++)
			c->label[k] = c->label[2 * k];
		c->labels /= 2;
	}
	c->label[c->labels++] = (struct label){
		.told = frame, .frame = clock_counted(c, frame, NULL), .told_sigma_s = sigma_s, .sigma_s = sigma_s, .when = when,
		.late = late, .quality = quality, .setting = c->setting,
	};
}

void frame_clock_clock_was_set(struct frame_clock *c)
{
	c->setting++;
}

/* ------------------------------------------------------------------ between pulses */

/*
 * Without this the seconds of a long run would hang on a label that is ever farther away: 2 ppm of drift are half a second in
 * three days.  A label at a gap or beyond the pulses moves as well as the clock knows.
 */
void carry_labels(struct frame_clock *c, const struct node *oldest)
{
	double there;

	if (!c->accepted)
		return;
	there = clock_seconds(c, oldest->frame, NULL);
	for (size_t k = 0; k < c->labels; k++) {
		struct label *l = &c->label[k];

		if (l->frame < oldest->frame) {
			l->when = tai_add(l->when, there - clock_seconds(c, l->frame, NULL));
			l->frame = oldest->frame;
			l->told = oldest->told;
		}
	}
}

/* Accepted pulses around a frame; either may be NULL. */
static void neighbours(const struct frame_clock *c, double frame, const struct node **before, const struct node **after)
{
	size_t low = 0, high = c->nodes;

	while (low < high) {
		size_t middle = low + (high - low) / 2;

		if (c->node[middle].frame <= frame)
			low = middle + 1;
		else
			high = middle;
	}
	*before = *after = NULL;
	for (size_t i = low; !*before && i-- > 0; )
		if (c->node[i].accepted)
			*before = &c->node[i];
	for (size_t i = low; !*after && i < c->nodes; i++)
		if (c->node[i].accepted)
			*after = &c->node[i];
}

/* Where no pulses are the card may walk more than it did under them: calm for a minute is not calm for an hour. */
static double walk_unseen(const struct frame_clock *c)
{
	return fmax(c->walk, least_walk);
}

/* Error of the card `dt` seconds from a pulse, by its smoothed state alone. */
static double extrapolate(const struct frame_clock *c, const struct node *n, double dt, double *variance)
{
	const struct state *s = &n->state;

	*variance = s->xx + 2 * dt * s->xy + dt * dt * s->yy + walk_unseen(c) * fabs(dt * dt * dt) / 3;
	return s->x + s->y * dt;
}

/* Cubic through both pulses and their rates; between them the walk adds walk * (t (T - t) / T)^3 / 3 (bridge). */
static double between(const struct frame_clock *c, const struct node *a, const struct node *b, double k, double *variance)
{
	double span = b->k - a->k, u = (k - a->k) / span, v = 1 - u;
	double hermite = (1 + 2 * u) * v * v * a->state.x + u * v * v * span * a->state.y +
		u * u * (3 - 2 * u) * b->state.x - u * u * v * span * b->state.y;
	double bridge = span * u * v;

	*variance = v * a->state.xx + u * b->state.xx + walk_unseen(c) * bridge * bridge * bridge / 3;
	return hermite;
}

/* Sum of what is not known about gaps between frame and the pulse it is told from. */
double clock_gap_variance(const struct frame_clock *c, double from, double to)
{
	double sum = 0;

	for (size_t k = 0; k < c->gaps; k++)
		if (c->gap_at[k].frame > fmin(from, to) && c->gap_at[k].frame <= fmax(from, to))
			sum += c->gap_at[k].sigma_s * c->gap_at[k].sigma_s;
	return sum;
}

static double card_error(const struct frame_clock *c, double frame, double k, double *variance)
{
	const struct node *before, *after;
	double x;

	neighbours(c, frame, &before, &after);
	if (before && after && after->jump_s == 0)
		return between(c, before, after, k, variance);
	/* Frames were lost in between: told from the pulse on the same side of the gap. */
	if (before && after && frame >= after->jump_frame)
		before = NULL;
	if (before) {
		x = extrapolate(c, before, k - before->k, variance);
		*variance += clock_gap_variance(c, before->frame, frame);
	} else {
		x = extrapolate(c, after, k - after->k, variance);
		*variance += clock_gap_variance(c, frame, after->frame);
	}
	return x;
}

double clock_seconds(const struct frame_clock *c, double frame, double *sigma)
{
	double nominal = frame / c->settings.rate, k = nominal, variance = 0;

	/* frame / rate = k + x(k): x is small and slow. */
	for (int pass = 0; pass < 3; pass++)
		k = nominal - card_error(c, frame, k, &variance);
	if (sigma)
		*sigma = sqrt(fmax(variance, 0));
	return k;
}

/* ------------------------------------------------------------------ labels to seconds */

/* TAI second of k = 0 by one label, not rounded. */
static double vote(const struct frame_clock *c, const struct label *l)
{
	double k = clock_seconds(c, l->frame, NULL);

	return (double)(l->when.ns / 1000000000) + ((double)(l->when.ns % 1000000000) * 1e-9 - (k - c->settings.pulse_delay_s));
}

/* The best of the labels that err late only (they are one clock's, not independent), or of the others. */
static const struct label *best_label(const struct frame_clock *c, bool late, double *second)
{
	const struct label *best = NULL;

	for (size_t k = 0; k < c->labels; k++) {
		const struct label *l = &c->label[k];
		double here;

		if (l->late != late || !l->believed)
			continue;
		here = vote(c, l);
		/* Of late ones the earliest is nearest to the truth. */
		if (!best || (late ? here < *second : l->sigma_s < best->sigma_s)) {
			best = l;
			*second = here;
		}
	}
	return best;
}

static void contradict(struct frame_clock *c, double second, const struct label *l)
{
	if (!c->contradiction_said)
		log_warning("the pulses do not begin where the label says a second begins: off by %.3f s, the label claims +- %g s; "
		            "the second is unconfirmed", second - rint(second), l->sigma_s);
	c->contradiction_said = true;
}

static void choose_second(struct frame_clock *c)
{
	double second[2] = { 0, 0 };
	const struct label *label[2] = { best_label(c, false, &second[0]), best_label(c, true, &second[1]) };
	int k = !label[0] || (label[1] && label[1]->sigma_s < label[0]->sigma_s) ? 1 : 0;
	double slack;

	c->labelled = label[0] || label[1];
	c->second_confirmed = false;
	if (!c->labelled)
		return;
	c->second_zero = rint(second[k]);
	c->label_sigma_s = hypot(label[k]->sigma_s, c->label_doubt_s);
	/* Pulses do not begin where the label has whole seconds: then it is not as good as it claims. */
	slack = 4 * label[k]->sigma_s + 0.02 + (label[k]->late ? 0.1 : 0);
	if (fabs(second[k] - c->second_zero) > slack) {
		contradict(c, second[k], label[k]);
		return;
	}
	if (c->label_doubt_s > 0)
		return;
	c->second_confirmed = label[k]->sigma_s < sure_sigma_s ||
		(label[0] && label[1] && label[0]->sigma_s < half_second_s && label[1]->sigma_s < half_second_s &&
		 rint(second[0]) == rint(second[1]));
}

void label_seconds(struct frame_clock *c)
{
	c->labelled = c->second_confirmed = false;
	clock_believe_labels(c);
	if (c->accepted)
		choose_second(c);
	if (c->labels)
		clock_fit_line(c);
}

/* ------------------------------------------------------------------ readings */

static void read_line(const struct frame_clock *c, double frame, struct clock_reading *out)
{
	double seconds = (frame - c->line_pivot) / c->settings.rate;

	out->quality = TIME_HOST;
	out->when = tai_add(c->line_base, seconds * (1 + c->line_slope));
	out->terms.label = c->line_sigma_s;
	out->terms.interpolation = fabs(seconds) * c->line_slope_sigma;
	out->terms.interpolation = hypot(out->terms.interpolation, sqrt(clock_gap_variance(c, c->line_pivot, frame)));
	out->sigma_s = hypot(out->terms.label, out->terms.interpolation);
}

/* Whole seconds and the rest apart, so that no nanosecond is lost. */
static struct tai tai_of(double whole, double rest)
{
	return tai_add((struct tai){ (int64_t)whole * 1000000000 }, rest);
}

static void read_pulses(const struct frame_clock *c, double frame, struct clock_reading *out)
{
	double sigma, k = clock_seconds(c, frame, &sigma);

	out->terms.pulse = c->settings.pulse_sigma_s / sqrt((double)c->accepted);
	out->terms.interpolation = sigma;
	out->terms.delay = c->settings.pulse_delay_sigma_s;
	if (!c->labelled) {
		out->when = tai_of(0, k - clock_seconds(c, 0, NULL));
		out->quality = TIME_FREE;
		out->sigma_s = NAN;
		return;
	}
	out->when = tai_of(c->second_zero + floor(k), k - floor(k) - c->settings.pulse_delay_s);
	out->sigma_s = hypot(sigma, out->terms.delay);
	out->second_confirmed = c->second_confirmed;
	out->quality = TIME_PULSE;
	if (!c->second_confirmed) {
		out->quality = TIME_HOST;
		out->terms.label = c->label_sigma_s;
		out->sigma_s = hypot(out->sigma_s, c->label_sigma_s);
	}
}

static void read_counted(const struct frame_clock *c, double frame, struct clock_reading *out)
{
	*out = (struct clock_reading){ .quality = TIME_FREE, .sigma_s = NAN };
	if (c->accepted)
		read_pulses(c, frame, out);
	else if (c->line_fitted)
		read_line(c, frame, out);
	else
		out->when = tai_of(0, frame / c->settings.rate);
}

void frame_clock_at(const struct frame_clock *c, double frame, struct clock_reading *out)
{
	double sigma;

	read_counted(c, clock_counted(c, frame, &sigma), out);
	out->terms.interpolation = hypot(out->terms.interpolation, sigma / c->settings.rate);
	out->sigma_s = hypot(out->sigma_s, sigma / c->settings.rate);
}

static double counted_rate(const struct frame_clock *c, double frame)
{
	const struct node *before, *after;

	if (!c->accepted)
		return c->settings.rate / (1 + (c->line_fitted ? c->line_slope : 0));
	neighbours(c, frame, &before, &after);
	return c->settings.rate * (1 + (before ? before : after)->state.y);
}

double frame_clock_rate(const struct frame_clock *c, double frame)
{
	return counted_rate(c, clock_counted(c, frame, NULL));
}

double frame_clock_frame(const struct frame_clock *c, struct tai when)
{
	struct clock_reading reading;
	double frame = 0;

	/* Newton's method on a nearly straight line. */
	for (int pass = 0; pass < 6; pass++) {
		double off;

		read_counted(c, frame, &reading);
		off = tai_difference(when, reading.when);
		frame += off * counted_rate(c, frame);
		if (fabs(off) * c->settings.rate < 1e-4)
			break;
	}
	return clock_told(c, frame);
}
