/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * Pulses on a comb of whole seconds (frame_comb.c) are smoothed: the state is the card's accumulated error x (seconds) and
 * its relative frequency error y, y a random walk; Kalman filter forward, Rauch-Tung-Striebel (1965, AIAA J. 3,
 * 1445) backward.  The strength of the walk comes from the pulses, by their likelihood under it.
 *
 * Whole second k (counted from the first accepted pulse) begins at frame F with F / rate = k + x(k).
 */
#include <errno.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include "frame_clock_inner.h"
#include "limbwatch/log.h"

enum { REMEMBERED = 30000, LIKELIHOOD_PULSES = 600, PASSES = 4 };

static const double reject_sigmas = 5;
static const double found_sigma = 1e-6;
static const double relock_s = 0.3;              /* any phase of a second */
/* Random walk of y, variance per second: 1e-11 to 3e-8 per root second.  Common practice for crystals: 1e-10 to 1e-9. */
static const double walks[] = { 1e-22, 1e-21, 1e-20, 1e-19, 1e-18, 1e-17, 1e-16, 1e-15 };
enum { WALKS = sizeof(walks) / sizeof(*walks) };

int frame_clock_create(struct frame_clock **out, const struct frame_clock_settings *s)
{
	const struct pulse_phase_settings phase = { s->rate, s->rate_tolerance, s->pulse_sigma_s };
	struct frame_clock *c;

	if (!(s->rate >= 1e-3 && s->rate <= 1e9) || !(s->rate_tolerance > 0 && s->rate_tolerance < 0.1) ||
	    !(s->pulse_sigma_s > 0 && s->pulse_sigma_s < 0.1) || !(fabs(s->pulse_delay_s) < 0.5) ||
	    !(s->pulse_delay_sigma_s >= 0))
		return -EINVAL;
	c = calloc(1, sizeof(*c));
	if (!c)
		return -ENOMEM;
	c->settings = *s;
	if (s->rate >= 1 && pulse_phase_create(&c->phase, &phase) < 0) {
		free(c);
		return -ENOMEM;
	}
	*out = c;
	return 0;
}

void frame_clock_destroy(struct frame_clock *clock)
{
	if (!clock)
		return;
	free(clock->node);
	free(clock->loss);
	pulse_phase_destroy(clock->phase);
	free(clock);
}

static bool any_accepted(const struct frame_clock *c)
{
	for (size_t i = 0; i < c->nodes; i++)
		if (c->node[i].accepted)
			return true;
	return false;
}

/* Room for one more pulse; the oldest quarter goes when the memory is full. */
static bool make_room(struct frame_clock *c)
{
	struct node *grown;
	size_t room;

	if (c->nodes == REMEMBERED) {
		carry_labels(c, &c->node[REMEMBERED / 4]);
		c->nodes -= REMEMBERED / 4;
		memmove(c->node, c->node + REMEMBERED / 4, c->nodes * sizeof(*c->node));
		if (!any_accepted(c))
			c->accepted = 0;
	}
	if (c->nodes < c->room)
		return true;
	room = c->room ? 2 * c->room : 64;
	if (room > REMEMBERED)
		room = REMEMBERED;
	grown = realloc(c->node, room * sizeof(*grown));
	if (!grown)
		return false;
	c->node = grown;
	c->room = room;
	return true;
}

void frame_clock_add_pulse(struct frame_clock *c, double frame, double sigma_frames)
{
	struct node *n;

	if (!isfinite(frame) || !(sigma_frames >= 0) || (c->nodes && frame <= c->node[c->nodes - 1].told) || !make_room(c))
		return;
	n = &c->node[c->nodes++];
	*n = (struct node){
		.told = frame, .frame = clock_counted(c, frame, NULL),
		.sigma_s = hypot(c->settings.pulse_sigma_s, sigma_frames / c->settings.rate),
	};
	clock_watch_phase(c, n->frame, sigma_frames);
}

/* ------------------------------------------------------------------ filter and smoother */

static double measured(const struct frame_clock *c, const struct node *n)
{
	return n->frame / c->settings.rate - n->k;
}

static void predict(struct state *s, double dt, double walk, double jump)
{
	s->x += s->y * dt;
	s->xx += 2 * dt * s->xy + dt * dt * s->yy + walk * dt * dt * dt / 3 + jump * jump;
	s->xy += dt * s->yy + walk * dt * dt / 2;
	s->yy += walk * dt;
}

/*
 * How far the phase may have jumped since the accepted pulse before, and where.  A comb found anew says nothing about the phase
 * of the old one.  What stood before a pulse that was rejected counts for the next.
 */
static void gather_jumps(struct frame_clock *c)
{
	double jump_s = 0, jump_frame = 0;

	for (size_t i = 0; i < c->nodes; i++) {
		struct node *n = &c->node[i];

		if (n->gap_s > 0)
			jump_frame = clock_counted(c, n->gap_told, NULL);
		jump_s = hypot(jump_s, n->gap_s);
		if (n->relock) {
			jump_s = relock_s;
			jump_frame = fmax(jump_frame, n->frame);
		}
		if (!n->accepted)
			continue;
		n->jump_s = jump_s;
		n->jump_frame = jump_frame;
		jump_s = jump_frame = 0;
	}
}

/*
 * The first pass knows the rate to the tolerance.  That is so much more than the pulses leave of it that the covariances lose
 * their digits; so later passes start from the rate found, with a sigma that is still wide beside what five pulses say.
 */
static void start(const struct frame_clock *c, const struct node *n, struct state *s)
{
	double sigma = c->rate_found ? found_sigma : c->settings.rate_tolerance;

	*s = (struct state){
		.x = measured(c, n), .y = c->rate_found ? c->first_rate : 0, .xx = n->variance, .yy = sigma * sigma,
	};
}

static void find_rate(struct frame_clock *c)
{
	c->rate_found = false;
	for (size_t i = 0; !c->rate_found && i < c->nodes; i++)
		if (c->node[i].accepted) {
			c->first_rate = c->node[i].state.y;
			c->rate_found = true;
		}
}

static void update(struct state *s, double z, double variance)
{
	double v = z - s->x, total = s->xx + variance, gain_x = s->xx / total, gain_y = s->xy / total;

	s->x += gain_x * v;
	s->y += gain_y * v;
	s->yy -= gain_y * s->xy;
	s->xy -= gain_x * s->xy;
	s->xx -= gain_x * s->xx;
}

/* Twice the negative log likelihood of the newest pulses under a walk. */
static double unlikelihood(const struct frame_clock *c, double walk)
{
	const struct node *before = NULL;
	struct state s = { 0 };
	double sum = 0;
	size_t seen = 0;

	for (size_t i = c->nodes > LIKELIHOOD_PULSES ? c->nodes - LIKELIHOOD_PULSES : 0; i < c->nodes; i++) {
		const struct node *n = &c->node[i];

		if (!n->accepted)
			continue;
		if (!before) {
			start(c, n, &s);
		} else {
			double v, total;

			predict(&s, n->k - before->k, walk, n->jump_s);
			v = measured(c, n) - s.x;
			total = s.xx + n->variance;
			if (seen > 3 && n->jump_s == 0)
				sum += v * v / total + log(total);
			update(&s, measured(c, n), n->variance);
		}
		before = n;
		seen++;
	}
	return sum;
}

/*
 * Mean of the logarithm under the likelihoods.  The likeliest one alone jumps with the noise of a few pulses: 15% more error of a
 * steady card.
 */
static double likely_walk(const struct frame_clock *c)
{
	double u[WALKS], least = INFINITY, sum = 0, mean = 0;

	for (size_t k = 0; k < WALKS; k++) {
		u[k] = unlikelihood(c, walks[k]);
		least = fmin(least, u[k]);
	}
	for (size_t k = 0; k < WALKS; k++) {
		double weight = exp(0.5 * (least - u[k]));

		sum += weight;
		mean += weight * log(walks[k]);
	}
	return exp(mean / sum);
}

static void filter(struct frame_clock *c)
{
	const struct node *before = NULL;
	struct state s = { 0 };

	for (size_t i = 0; i < c->nodes; i++) {
		struct node *n = &c->node[i];

		if (!n->accepted)
			continue;
		if (!before) {
			start(c, n, &s);
		} else {
			predict(&s, n->k - before->k, c->walk, n->jump_s);
			update(&s, measured(c, n), n->variance);
		}
		n->state = s;
		before = n;
	}
}

static void smooth(struct frame_clock *c)
{
	struct node *after = NULL;

	for (size_t i = c->nodes; i-- > 0; ) {
		struct node *n = &c->node[i];
		struct state p, f;
		double dt, det, g[2][2], dxx, dxy, dyy, ex, ey;

		if (!n->accepted)
			continue;
		f = n->state;
		if (after) {
			dt = after->k - n->k;
			p = f;
			predict(&p, dt, c->walk, after->jump_s);
			det = p.xx * p.yy - p.xy * p.xy;
			/* G = P F' Pp^-1 */
			g[0][0] = ((f.xx + dt * f.xy) * p.yy - f.xy * p.xy) / det;
			g[0][1] = (-(f.xx + dt * f.xy) * p.xy + f.xy * p.xx) / det;
			g[1][0] = ((f.xy + dt * f.yy) * p.yy - f.yy * p.xy) / det;
			g[1][1] = (-(f.xy + dt * f.yy) * p.xy + f.yy * p.xx) / det;
			ex = after->state.x - p.x;
			ey = after->state.y - p.y;
			dxx = after->state.xx - p.xx;
			dxy = after->state.xy - p.xy;
			dyy = after->state.yy - p.yy;
			n->state.x += g[0][0] * ex + g[0][1] * ey;
			n->state.y += g[1][0] * ex + g[1][1] * ey;
			n->state.xx += g[0][0] * g[0][0] * dxx + 2 * g[0][0] * g[0][1] * dxy + g[0][1] * g[0][1] * dyy;
			n->state.xy += g[0][0] * g[1][0] * dxx + (g[0][0] * g[1][1] + g[0][1] * g[1][0]) * dxy +
				g[0][1] * g[1][1] * dyy;
			n->state.yy += g[1][0] * g[1][0] * dxx + 2 * g[1][0] * g[1][1] * dxy + g[1][1] * g[1][1] * dyy;
			n->state.xx = fmax(n->state.xx, 0);
		}
		after = n;
	}
}

/* ------------------------------------------------------------------ solving */

static int by_size(const void *a, const void *b)
{
	double x = *(const double *)a, y = *(const double *)b;

	return (x > y) - (x < y);
}

/* How much larger the residuals are than stated, from their median; at least 1. */
static double excess(const struct frame_clock *c)
{
	double *ratio = malloc((c->nodes + 1) * sizeof(*ratio)), median;
	size_t n = 0;

	if (!ratio)
		return 1;
	for (size_t i = 0; i < c->nodes; i++)
		if (c->node[i].accepted)
			ratio[n++] = fabs(c->node[i].residual) / c->node[i].sigma_s;
	if (n < 10) {
		free(ratio);
		return 1;
	}
	qsort(ratio, n, sizeof(*ratio), by_size);
	median = ratio[n / 2] / 0.6745;         /* of a Gaussian: 0.6745 sigma */
	free(ratio);
	return fmax(1, median);
}

static size_t measure_residuals(struct frame_clock *c)
{
	size_t accepted = 0;
	double squares = 0;

	for (size_t i = 0; i < c->nodes; i++) {
		struct node *n = &c->node[i];

		if (!n->accepted)
			continue;
		n->residual = measured(c, n) - n->state.x;
		accepted++;
		squares += n->residual * n->residual;
	}
	c->rms_residual_s = accepted ? sqrt(squares / (double)accepted) : NAN;
	return accepted;
}

/* One bad pulse draws the smooth away from its good neighbours: those it took along come back when it is gone. */
static void choose(struct frame_clock *c, double scale)
{
	for (size_t i = 0; i < c->nodes; i++) {
		struct node *n = &c->node[i];

		if (n->comb && !n->accepted)
			n->residual = clock_seconds(c, n->frame, NULL) - n->k;
	}
	for (size_t i = 0; i < c->nodes; i++) {
		struct node *n = &c->node[i];

		n->accepted = n->comb && fabs(n->residual) <= reject_sigmas * scale * n->sigma_s;
	}
}

/* Pulses that were dropped by the smooth still have a residual to be shown. */
static void residuals_of_the_rejected(struct frame_clock *c)
{
	for (size_t i = 0; i < c->nodes; i++)
		if (!c->node[i].accepted) {
			double k = clock_seconds(c, c->node[i].frame, NULL);

			c->node[i].residual = k - rint(k);
		}
}

size_t frame_clock_solve(struct frame_clock *c)
{
	double scale = 1;
	size_t accepted = 0;

	clock_count_all(c);
	frame_comb_find(c);
	for (size_t i = 0; i < c->nodes; i++) {
		c->node[i].comb = c->node[i].accepted;
		accepted += c->node[i].accepted;
	}
	c->rate_found = false;
	for (int pass = 0; accepted >= FRAME_CLOCK_LOCK && pass < PASSES; pass++) {
		for (size_t i = 0; i < c->nodes; i++)
			c->node[i].variance = pow(scale * c->node[i].sigma_s, 2);
		gather_jumps(c);
		c->walk = likely_walk(c);
		filter(c);
		smooth(c);
		find_rate(c);
		measure_residuals(c);
		scale = excess(c);
		if (pass < PASSES - 1)
			choose(c, scale);
		accepted = measure_residuals(c);
	}
	c->accepted = accepted >= FRAME_CLOCK_LOCK ? accepted : 0;
	if (c->accepted)
		residuals_of_the_rejected(c);
	label_seconds(c);
	return c->accepted;
}

size_t frame_clock_pulses(const struct frame_clock *c, double from, double to, struct clock_pulse *out, size_t max)
{
	size_t given = 0;

	for (size_t i = 0; i < c->nodes && given < max; i++) {
		const struct node *n = &c->node[i];
		bool accepted = n->accepted && c->accepted;

		if (n->told < from || n->told >= to)
			continue;
		out[given++] = (struct clock_pulse){
			.frame = n->told, .accepted = accepted, .residual_s = c->accepted ? n->residual : NAN,
			.second.ns = accepted && c->labelled ? (int64_t)(c->second_zero + n->k) * 1000000000 : INT64_MIN,
		};
	}
	return given;
}

void frame_clock_summarise(const struct frame_clock *c, struct clock_summary *out)
{
	const struct node *newest = NULL;

	for (size_t i = c->nodes; !newest && i-- > 0; )
		if (c->node[i].accepted)
			newest = &c->node[i];
	*out = (struct clock_summary){
		.accepted = c->accepted, .rejected = c->nodes - c->accepted, .rms_residual_s = c->rms_residual_s,
		.rate_error = c->accepted && newest ? newest->state.y : NAN,
		.second_confirmed = c->second_confirmed,
	};
}
