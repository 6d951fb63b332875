/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * Blocks of about a millisecond are screened by their largest difference over a few frames; where it stands far above
 * what is usual, the edge is located: levels before and after are followed to the edge (an AC-coupled pulse sags), and the
 * instant is where the band-limited signal, rebuilt between frames by a windowed sinc (Shannon 1949, Proc. IRE
 * 37, 10), passes half way.  For an edge of the full band the slope there is nearly all the information the samples hold:
 * a fit of the whole edge would gain 5%.
 *
 * A level is followed to the edge by a straight line, and bent as an exponential of that slope is (one-pole high-pass).  A free
 * parabola would do as well without that assumption, but its value at the edge is so noisy that it costs more than the crossing.
 *
 * A leading edge is followed by the opposite one within half a second; what is not a pulse after all is the frame
 * clock's to judge.
 */
#include <errno.h>
#include <math.h>
#include <stdbool.h>
#include <stdlib.h>
#include <string.h>
#include "limbwatch/pulse.h"

enum {
	LAG = 2,                        /* the screening difference is x[k + LAG] - x[k - LAG] */
	SINC = 24,                      /* half width of the interpolation */
	INNER = 8, OUTER = 64,          /* frames from the edge where levels are taken, at most */
	OUTER_LEAST = 20,
	REACH = OUTER + SINC + 8,       /* frames needed on both sides of a block */
	EDGES = 64,                     /* held until their opposite comes */
	CHUNK = 4096,
	LEVEL_POINTS = OUTER - INNER,
};

static const double screening = 4;              /* times the usual largest difference of a block */
static const double least_difference = 2e-5;    /* full scale = 1: below this nothing is a pulse */
static const double widest_s = 0.5;
static const double half_second_s = 0.45;       /* a pulse this long cannot be told from its pause */
static const double level_s = 0.002;            /* levels are taken within this: an AC-coupled pulse sags in 8 ms at 20 Hz */

struct edge { double frame, sigma, height; bool opposed; };

/* One side of an edge: level and slope (per `outer` frames, away from the edge) at the edge. */
struct side { double value, slope, variance; };

struct pulse_detector {
	struct pulse_settings settings;
	size_t block;                   /* frames screened at once */
	int outer, points;              /* levels: frames from the edge, and their number */
	double extreme;                 /* median of the largest of `block` differences over the rms of one sample */
	double usual;                   /* median of the blocks' largest difference, tracked */
	unsigned blocks;
	/* Samples [base, base + filled); everything before `screened` has been looked at. */
	uint64_t base, screened, expected;
	size_t filled;
	double x[2 * CHUNK + 4 * REACH];
	size_t edges;
	struct edge edge[EDGES];
	double newest;                  /* frame of the newest edge, so that none is found twice */
	double weight[LEVEL_POINTS];    /* of the level points; sum 1 */
	double tilt[LEVEL_POINTS];      /* slope of the line = sum of tilt * y */
	double centre;                  /* weighted mean distance of the points, in `outer` */
	double bow_value, bow_slope;    /* value and slope at the edge of the line fitted to the square of the distance */
	double level_noise;             /* variance of a level at the edge in unit noise */
};

static double distance(const struct pulse_detector *d, int point)
{
	return (INNER + point + 0.5) / d->outer;
}

/*
 * Weighted least-squares line through points at INNER + 1/2 ... outer - 1/2.  The weights rise and fall smoothly, so that the
 * fast ripple which an anti-alias filter leaves beside an edge averages out.
 */
static void make_line(struct pulse_detector *d)
{
	double sum = 0, spread = 0, square = 0;

	for (int k = 0; k < d->points; k++) {
		d->weight[k] = pow(sin(M_PI * (k + 0.5) / d->points), 2);
		sum += d->weight[k];
	}
	for (int k = 0; k < d->points; k++) {
		d->weight[k] /= sum;
		d->centre += d->weight[k] * distance(d, k);
		square += d->weight[k] * pow(distance(d, k), 2);
	}
	for (int k = 0; k < d->points; k++)
		spread += d->weight[k] * pow(distance(d, k) - d->centre, 2);
	for (int k = 0; k < d->points; k++) {
		d->tilt[k] = d->weight[k] * (distance(d, k) - d->centre) / spread;
		d->bow_slope += d->tilt[k] * pow(distance(d, k), 2);
		d->level_noise += pow(d->weight[k] - d->centre * d->tilt[k], 2);
	}
	d->bow_value = square - d->centre * d->bow_slope;
}

/* Half of all blocks of white noise have no difference above m sqrt(2) times its rms: erf(m / sqrt(2))^block = 1/2. */
static double extreme_of(size_t block)
{
	double low = 0, high = 10;

	for (int k = 0; k < 60; k++) {
		double m = 0.5 * (low + high);

		if (pow(erf(m * M_SQRT1_2), (double)block) < 0.5)
			low = m;
		else
			high = m;
	}
	return M_SQRT2 * low;
}

/* Levels are taken near the edge, and within the pulse. */
static int outer_of(const struct pulse_settings *settings)
{
	double outer = fmin(OUTER, fmax(OUTER / 2, settings->rate * level_s));

	if (settings->width_s > 0)
		outer = fmin(outer, settings->rate * settings->width_s - INNER);
	return (int)fmax(outer, OUTER_LEAST);
}

int pulse_detector_create(struct pulse_detector **out, const struct pulse_settings *settings)
{
	struct pulse_detector *d;

	if (!(settings->rate >= 1000 && settings->rate <= 1e7) || !(settings->width_s >= 0 && settings->width_s <= 0.5) ||
	    settings->polarity < -1 || settings->polarity > 1)
		return -EINVAL;
	d = calloc(1, sizeof(*d));
	if (!d)
		return -ENOMEM;
	d->settings = *settings;
	d->block = (size_t)fmax(16, settings->rate / 1000);
	if (d->block > CHUNK / 4)
		d->block = CHUNK / 4;
	d->newest = -INFINITY;
	d->outer = outer_of(settings);
	d->points = d->outer - INNER;
	d->extreme = extreme_of(d->block);
	make_line(d);
	*out = d;
	return 0;
}

void pulse_detector_destroy(struct pulse_detector *detector)
{
	free(detector);
}

/* ------------------------------------------------------------------ one edge */

/* The frames INNER to `outer` after (direction +1) or before (-1) the middle of frames `at` and `at` + 1. */
static struct side side_of(const struct pulse_detector *d, const double *x, long at, int direction)
{
	const double *near = x + at + direction * INNER + (direction > 0 ? 1 : 0);
	double mean = 0, slope = 0, squares = 0;

	for (int k = 0; k < d->points; k++) {
		mean += d->weight[k] * near[direction * k];
		slope += d->tilt[k] * near[direction * k];
	}
	for (int k = 0; k < d->points; k++) {
		double r = near[direction * k] - mean - slope * (distance(d, k) - d->centre);

		squares += d->weight[k] * r * r;
	}
	return (struct side){ mean - d->centre * slope, slope, squares };
}

/* height * exp(-u s) has the slope -height s and the bow height s^2 u^2 / 2, which has tilted the line. */
static void bend(const struct pulse_detector *d, struct side *side, double height)
{
	double bow = side->slope * side->slope / (2 * height);

	side->value -= bow * d->bow_value;
	side->slope -= bow * d->bow_slope;
}

static double interpolate(const double *x, double at)
{
	long middle = lrint(at);
	double sum = 0, phase = M_PI * (at - (double)middle), s = sin(phase);

	if (fabs(phase) < 1e-12)
		return x[middle];
	for (long k = -SINC; k <= SINC; k++) {
		double u = at - (double)(middle + k), window = cos(M_PI_2 * u / (SINC + 1));

		/* sin(pi u) alternates with k. */
		sum += x[middle + k] * window * window * (k & 1 ? -s : s) / (M_PI * u);
	}
	return sum;
}

/*
 * Where the signal passes `half` between frames low and low + 1: false position with the Illinois rule (Dowell & Jarratt 1971, BIT
 * 11, 168), half a dozen evaluations.
 */
static double crossing(const double *x, long low, double half)
{
	double a = (double)low, b = a + 1, fa = x[low] - half, fb = x[low + 1] - half, at = a;

	for (int k = 0; k < 30; k++) {
		double f, before = at;

		at = fb == fa ? 0.5 * (a + b) : (a * fb - b * fa) / (fb - fa);
		f = interpolate(x, at) - half;
		if (fabs(at - before) < 1e-9 || f == 0)
			break;
		if (f * fb < 0) {
			a = b;
			fa = fb;
		} else {
			fa *= 0.5;
		}
		b = at;
		fb = f;
	}
	return at;
}

/* Low frame of the two between which x passes `half`, within the reach of the screening difference; -1: none. */
static long bracket(const double *x, long at, double half, double sign)
{
	for (long low = at - LAG - 1; low < at + LAG + 1; low++)
		if (sign * (x[low] - half) < 0 && sign * (x[low + 1] - half) >= 0)
			return low;
	return -1;
}

/* The level half way of both sides, at the instant itself: the sides slope. @return false: there is no crossing */
static bool half_way(const struct pulse_detector *d, long at, const struct side side[2], double *frame)
{
	double beyond = 0;

	for (int pass = 0; pass < 2; pass++) {
		double half = 0.5 * (side[0].value + side[1].value + (side[1].slope - side[0].slope) * beyond / d->outer);
		double sign = side[1].value > side[0].value ? 1 : -1;
		long low = bracket(d->x, at, half, sign);

		if (low < 0)
			return false;
		*frame = crossing(d->x, low, half);
		beyond = *frame - ((double)at + 0.5);
	}
	return true;
}

/* `at`: index of the largest difference, `difference` signed. @return false: no edge there after all */
static bool locate(const struct pulse_detector *d, long at, double difference, struct edge *out)
{
	struct side side[2] = { side_of(d, d->x, at, -1), side_of(d, d->x, at, 1) };
	double height = side[1].value - side[0].value, frame;
	double noise = sqrt(0.5 * (side[0].variance + side[1].variance));

	/* An edge stands out of its surroundings and is over in a few frames; a click, a burst or a ripple does not. */
	if (!(noise < 0.25 * 0.9 * fabs(height)) || !(difference / height > 0.4 && difference / height < 2.5))
		return false;
	bend(d, &side[0], -height);     /* what sags before a rising edge comes from a falling one */
	bend(d, &side[1], height);
	height = side[1].value - side[0].value;
	if (!half_way(d, at, side, &frame))
		return false;
	/* The ripple of the anti-alias filter beside the edge is no noise: it is the same in every pulse. */
	noise = fmin(noise, d->usual / d->extreme);
	out->frame = (double)d->base + frame;
	out->height = height;
	out->sigma = noise * sqrt(1 + 0.5 * d->level_noise) / (0.9 * fabs(height));
	return true;
}

/* ------------------------------------------------------------------ edges into pulses */

static void drop_oldest(struct pulse_detector *d)
{
	d->edges--;
	memmove(d->edge, d->edge + 1, d->edges * sizeof(*d->edge));
}

static void keep_edge(struct pulse_detector *d, const struct edge *edge)
{
	struct edge e = *edge;

	if (e.frame - d->newest < INNER)
		return;
	d->newest = e.frame;
	for (size_t k = 0; k < d->edges; k++)
		if (d->edge[k].height * e.height < 0 && e.frame - d->edge[k].frame < widest_s * d->settings.rate)
			d->edge[k].opposed = true;
	if (d->edges == EDGES)
		drop_oldest(d);
	e.opposed = false;
	d->edge[d->edges++] = e;
}

static bool leads(const struct pulse_detector *d, const struct edge *e)
{
	int polarity = d->settings.polarity;

	/* Pulses of half a second could lead with either edge: only the setting can tell, or else the rising one is taken. */
	if (d->settings.width_s > half_second_s)
		return (e->height > 0) == (polarity >= 0);
	return e->opposed && (!polarity || (e->height > 0) == (polarity > 0));
}

/* Edges old enough to be judged. */
static size_t release(struct pulse_detector *d, struct pulse_edge *out, size_t max, bool all)
{
	double judged = (double)d->screened - widest_s * d->settings.rate;
	size_t given = 0;

	while (d->edges && given < max && (all || d->edge[0].frame < judged)) {
		const struct edge *e = &d->edge[0];

		if (leads(d, e))
			out[given++] = (struct pulse_edge){ e->frame, e->sigma, e->height };
		drop_oldest(d);
	}
	return given;
}

/* ------------------------------------------------------------------ screening */

static void track(struct pulse_detector *d, double largest)
{
	double step = d->blocks < 200 ? 0.2 : 0.02;

	if (d->blocks++ == 0)
		d->usual = largest;
	d->usual *= largest > d->usual ? 1 + step : 1 / (1 + step);
	if (d->usual < 1e-8)
		d->usual = 1e-8;
}

static double largest_difference(const double *x, size_t n)
{
	double a = 0, b = 0, c = 0, e = 0;
	size_t k = 0;

	for (; k + 3 < n; k += 4) {
		double p = fabs(x[k + LAG] - x[(long)k - LAG]), q = fabs(x[k + 1 + LAG] - x[(long)k + 1 - LAG]);
		double r = fabs(x[k + 2 + LAG] - x[(long)k + 2 - LAG]), s = fabs(x[k + 3 + LAG] - x[(long)k + 3 - LAG]);

		a = p > a ? p : a;
		b = q > b ? q : b;
		c = r > c ? r : c;
		e = s > e ? s : e;
	}
	for (; k < n; k++)
		a = fmax(a, fabs(x[k + LAG] - x[(long)k - LAG]));
	return fmax(fmax(a, b), fmax(c, e));
}

static void screen(struct pulse_detector *d, size_t from)
{
	const double *x = d->x + from;
	double largest = largest_difference(x, d->block), limit;
	struct edge edge;

	limit = fmax(screening * d->usual, least_difference);
	if (largest > limit && d->blocks > 20) {
		/* Each local maximum of the difference in the block. */
		for (long k = 0; k < (long)d->block; k++) {
			double difference = x[k + LAG] - x[k - LAG], here = fabs(difference);

			if (here > limit && here > 0.5 * largest && here >= fabs(x[k + 1 + LAG] - x[k + 1 - LAG]) &&
			    here > fabs(x[k - 1 + LAG] - x[k - 1 - LAG]) && locate(d, (long)from + k, difference, &edge))
				keep_edge(d, &edge);
		}
	}
	if (isfinite(largest))
		track(d, largest);
}

static void screen_all(struct pulse_detector *d)
{
	while (d->screened + d->block + REACH <= d->base + d->filled) {
		screen(d, (size_t)(d->screened - d->base));
		d->screened += d->block;
	}
}

static void begin(struct pulse_detector *d, uint64_t first)
{
	d->base = first;
	d->filled = 0;
	d->screened = first + REACH;    /* an edge needs its surroundings */
}

/* Forgets what has been screened, but for the surroundings of what comes. */
static void shift(struct pulse_detector *d)
{
	uint64_t keep = d->screened - REACH;
	size_t gone = (size_t)(keep - d->base);

	if (keep <= d->base || gone > d->filled)
		return;
	memmove(d->x, d->x + gone, (d->filled - gone) * sizeof(*d->x));
	d->base = keep;
	d->filled -= gone;
}

size_t pulse_detector_execute(struct pulse_detector *d, const double *samples, size_t count, uint64_t first,
                              struct pulse_edge *out, size_t max)
{
	if (count && first != d->expected)
		begin(d, first);
	else if (count && d->expected == 0)
		begin(d, 0);
	if (count)
		d->expected = first + count;
	while (count) {
		size_t room = sizeof(d->x) / sizeof(*d->x) - d->filled, n = count < room ? count : room;

		memcpy(d->x + d->filled, samples, n * sizeof(*d->x));
		d->filled += n;
		samples += n;
		count -= n;
		screen_all(d);
		shift(d);
	}
	return release(d, out, max, false);
}

size_t pulse_detector_finish(struct pulse_detector *d, struct pulse_edge *out, size_t max)
{
	return release(d, out, max, true);
}
