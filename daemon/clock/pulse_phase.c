/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * A line through the newest dozen pulses says where the next one belongs.  Edges off their place are gathered by how far they are
 * off; three in a row that agree, with no pulse in its place between them, are a jump.  The line then goes on with the jump
 * taken out, so that losses may follow each other.
 *
 * Frames inside are counted with the jumps so far added: `at` = frame + lost.
 */
#include <errno.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include "pulse_phase_inner.h"

enum { LOCK = 5, PENDING = 5, ENOUGH = 3, ENOUGH_AGAIN = 2, ACQUAINTED = 12 };

static const double least_frames = 0.5;
static const double sigmas = 6;
static const double drift = 1e-8;               /* per second: a crystal warming up by 0.6 ppm a minute; one sigma */
static const double steady = 5e-7;              /* the rate may change this much over a few seconds and is not a jump */
static const double span_s = 12;                /* the first pulses found lie within this */
static const double give_up_s = 10;             /* no pulse in its place for so long: look for pulses anew */
static const double outage_s = 900;             /* the line is no guide after that */
static const double again_s = 60;               /* after one jump the next needs two edges only */
static const double wild = 3;                   /* pulses so much worse than stated are no Gaussian that is known */
static const double rough_s = 1e-4;             /* no pulse scatters by more */
static const double least_gate = 0.02;          /* frames: by so much an edge depends on where in a frame it falls */

int pulse_phase_create(struct pulse_phase **out, const struct pulse_phase_settings *s)
{
	struct pulse_phase *p;

	if (!(s->rate >= 1 && s->rate <= 1e9) || !(s->rate_tolerance > 0 && s->rate_tolerance < 0.1) ||
	    !(s->pulse_sigma_s > 0 && s->pulse_sigma_s < 0.1))
		return -EINVAL;
	p = calloc(1, sizeof(*p));
	if (!p)
		return -ENOMEM;
	p->settings = *s;
	p->scatter = 1;
	p->jumped = -INFINITY;
	*out = p;
	return 0;
}

void pulse_phase_destroy(struct pulse_phase *phase)
{
	free(phase);
}

/* ------------------------------------------------------------------ the line */

static double sigma_of(const struct pulse_phase *p, double sigma_frames)
{
	return hypot(p->settings.pulse_sigma_s * p->settings.rate, sigma_frames);
}

static void fit(struct pulse_phase *p)
{
	double sum = 0, k = 0, at = 0, spread = 0, cross = 0;

	for (int i = 0; i < p->line; i++) {
		double weight = pow(p->pulse[i].sigma, -2);

		sum += weight;
		k += weight * p->pulse[i].k;
		at += weight * (p->pulse[i].at - p->pulse[0].at);
	}
	k /= sum;
	at /= sum;
	for (int i = 0; i < p->line; i++) {
		double weight = pow(p->pulse[i].sigma, -2), dk = p->pulse[i].k - k;

		spread += weight * dk * dk;
		cross += weight * dk * (p->pulse[i].at - p->pulse[0].at - at);
	}
	p->middle = k;
	p->origin = p->pulse[0].at + at;
	p->slope = cross / spread;
	p->variance = 1 / sum;
	p->slope_variance = 1 / spread;
}

static double place(const struct pulse_phase *p, double k)
{
	return p->origin + p->slope * (k - p->middle);
}

double phase_place_variance(const struct pulse_phase *p, double k)
{
	double dk = k - p->middle, bend = 0.5 * drift * dk * dk * p->slope;

	return p->scatter * p->scatter * (p->variance + p->slope_variance * dk * dk) + bend * bend;
}

static int by_size(const void *a, const void *b)
{
	double x = *(const double *)a, y = *(const double *)b;

	return (x > y) - (x < y);
}

/* From the median, which a spurious edge does not move; a Gaussian's is 0.6745 sigma. */
static void measure_scatter(struct pulse_phase *p)
{
	double sorted[RATIOS];

	memcpy(sorted, p->ratio.of, sizeof(sorted));
	qsort(sorted, (size_t)p->ratio.count, sizeof(*sorted), by_size);
	p->scatter = fmax(1, sorted[p->ratio.count / 2] / 0.6745);
}

static void note_ratio(struct pulse_phase *p, double ratio)
{
	struct phase_ratios *r = &p->ratio;

	if (r->count == RATIOS)
		memmove(r->of, r->of + 1, --r->count * sizeof(*r->of));
	r->of[r->count++] = ratio;
	measure_scatter(p);
}

/* Pulses worse than stated are off their place too, until that is learnt. */
static void note_pending(struct pulse_phase *p)
{
	for (int i = 0; i < p->pending.count; i++)
		note_ratio(p, p->pending.of[i]);
	p->pending.count = 0;
}

/* How far off its place; the place's second in `k`. */
static double off_place(const struct pulse_phase *p, double at, double *k)
{
	*k = rint((at - p->origin) / p->slope + p->middle);
	return at - place(p, *k);
}

static void keep(struct pulse_phase *p, const struct phase_edge *edge)
{
	if (p->line == LINE)
		memmove(p->pulse, p->pulse + 1, --p->line * sizeof(*p->pulse));
	p->pulse[p->line++] = *edge;
	p->newest = edge->at - p->lost;
	p->shifts = 0;
	p->seen = 0;
	fit(p);
}

/* ------------------------------------------------------------------ finding pulses */

/* Whole seconds from a to b at that rate, or 0 when they do not fit. */
static double seconds_between(const struct phase_edge *a, const struct phase_edge *b, double rate, double slack)
{
	double n = rint((b->at - a->at) / rate);

	return n >= 1 && fabs(b->at - a->at - n * rate) <= slack * n + fmax(least_frames, sigmas * hypot(a->sigma, b->sigma)) ? n : 0;
}

/* Takes the edges that keep whole seconds with the newest one at the rate of one before it. @return how many */
static int comb(const struct pulse_phase *p, int partner, struct phase_edge out[LINE])
{
	const struct phase_edge *newest = &p->edge[p->seen - 1];
	double n = seconds_between(&p->edge[partner], newest, p->settings.rate, p->settings.rate_tolerance * p->settings.rate);
	double rate = n > 0 ? (newest->at - p->edge[partner].at) / n : 0;
	int count = 0;

	if (n == 0)
		return 0;
	for (int i = partner; i < p->seen && count < LINE; i++) {
		double back = i == p->seen - 1 ? 0 : seconds_between(&p->edge[i], newest, rate, 0);

		if (i < p->seen - 1 && (back == 0 || (count && -back <= out[count - 1].k)))
			continue;
		out[count] = p->edge[i];
		out[count++].k = -back;
	}
	return count;
}

static void find(struct pulse_phase *p)
{
	struct phase_edge found[LINE];

	for (int partner = 0; partner < p->seen - 1; partner++) {
		int count;

		if (p->edge[p->seen - 1].at - p->edge[partner].at > span_s * p->settings.rate)
			continue;
		count = comb(p, partner, found);
		if (count < LOCK)
			continue;
		p->line = count;
		memcpy(p->pulse, found, (size_t)count * sizeof(*found));
		p->newest = found[count - 1].at - p->lost;
		p->shifts = p->seen = p->ratio.count = 0;
		fit(p);
		for (int i = 0; i < count; i++)
			note_ratio(p, fabs(found[i].at - place(p, found[i].k)) / found[i].sigma * sqrt(count / (count - 2.0)));
		p->pending.count = 0;
		return;
	}
}

static void note_edge(struct pulse_phase *p, const struct phase_edge *edge)
{
	if (p->seen == SEEN)
		memmove(p->edge, p->edge + 1, --p->seen * sizeof(*p->edge));
	p->edge[p->seen++] = *edge;
}

/* ------------------------------------------------------------------ jumps */

static double wrap(const struct pulse_phase *p, double off)
{
	return off - rint(off / p->slope) * p->slope;
}

static bool agrees(const struct pulse_phase *p, const struct phase_shift *s, double off, double sigma, double k)
{
	double span = k - s->first_k, gate = sigmas * p->scatter * hypot(sigma, s->sigma);

	gate = fmax(gate, least_gate) + steady * p->slope * span + sigmas * p->scatter * sqrt(p->slope_variance) * span;
	return span > 0 && fabs(wrap(p, off - s->first_off)) <= gate;
}

static void add_to_shift(struct phase_shift *s, double off, double frame, const struct phase_edge *e)
{
	int i = s->count < LINE ? s->count : LINE - 1;

	s->sum += off;
	s->last_k = e->k;
	s->sigma = fmax(s->sigma, e->sigma);
	s->frame[i] = frame;
	s->edge_sigma[i] = e->sigma;
	s->count++;
}

static struct phase_shift *gather(struct pulse_phase *p, double off, double frame, const struct phase_edge *e)
{
	struct phase_shift *s = NULL;

	for (int i = 0; i < p->shifts && !s; i++)
		if (agrees(p, &p->shift[i], off, e->sigma, e->k))
			s = &p->shift[i];
	if (!s) {
		if (p->shifts == SHIFTS)
			memmove(p->shift, p->shift + 1, --p->shifts * sizeof(*p->shift));
		s = &p->shift[p->shifts++];
		*s = (struct phase_shift){ .first_off = off, .first = frame, .first_k = e->k };
	} else {
		off = s->first_off + wrap(p, off - s->first_off);
	}
	add_to_shift(s, off, frame, e);
	return s;
}

/* Losses that follow each other within seconds leave two edges each: two such are taken for what they are. */
static int needed(const struct pulse_phase *p, const struct phase_shift *s)
{
	if (s->first - p->jumped < again_s * p->settings.rate)
		return ENOUGH_AGAIN;
	for (int i = 0; i < p->shifts; i++)
		if (&p->shift[i] != s && p->shift[i].count >= ENOUGH_AGAIN && p->shift[i].last_k < s->first_k)
			return ENOUGH_AGAIN;
	return ENOUGH;
}

/* Few pulses so far tell their scatter only when it is about as stated; then a jump may come early. */
static bool acquainted(const struct pulse_phase *p)
{
	return p->ratio.count >= ACQUAINTED || p->scatter < wild;
}

/* In a row, but for pulses that are missing. */
static bool in_a_row(const struct phase_shift *s)
{
	return s->count >= LOCK || s->last_k - s->first_k <= 2 * s->count + 1;
}

static bool proven(const struct pulse_phase *p, const struct phase_shift *s, int edges, struct phase_loss *loss)
{
	double sigma = sqrt(phase_shift_variance(p, s, 0)) * (p->scatter > wild ? 2 : 1);

	if (!acquainted(p) || !in_a_row(s) || s->count < edges || fabs(s->sum / s->count) < fmax(least_frames, sigmas * sigma))
		return false;
	phase_weigh(p, s, loss);
	/* Two edges will do for whole frames only. */
	return s->count >= ENOUGH || (!loss->pulse_moved && loss->sigma_frames == 0);
}

/* The line goes on: the pulses before are put where they would have come, those of the shift join them. */
static void jump(struct pulse_phase *p, const struct phase_shift *s, const struct phase_loss *loss)
{
	struct phase_shift joined = *s;
	int count = s->count < LINE ? s->count : LINE;
	double frames = loss->sigma_frames == 0 && !loss->pulse_moved ? loss->frames : -s->sum / s->count, k;

	p->lost += frames;
	p->jumped = s->first;
	p->pending.count = 0;           /* those edges were no scatter */
	for (int i = 0; i < count; i++) {
		struct phase_edge e = { joined.frame[i] + p->lost, joined.edge_sigma[i], 0 };

		off_place(p, e.at, &k);
		if (k <= p->pulse[p->line - 1].k)
			continue;
		e.k = k;
		keep(p, &e);
	}
}

static enum phase_verdict off(struct pulse_phase *p, double distance, double frame, const struct phase_edge *e,
                              struct phase_loss *loss)
{
	const struct phase_shift *s = gather(p, distance, frame, e);

	if (proven(p, s, needed(p, s), loss)) {
		jump(p, s, loss);
		return PHASE_JUMPED;
	}
	if (fabs(distance) < rough_s * p->settings.rate)
		p->pending.of[p->pending.count++] = fabs(distance) / e->sigma;
	if (p->pending.count == PENDING || p->ratio.count < ACQUAINTED)
		note_pending(p);
	note_edge(p, e);
	if (frame - p->newest > give_up_s * p->settings.rate)
		find(p);
	return PHASE_OFF;
}

/* Edges come up to two seconds after news of a gap: it counts from the first edge behind it. */
static void pass_gap(struct pulse_phase *p, double frame)
{
	int old = 0;

	if (!p->gap || frame < p->first_gap)
		return;
	p->line = p->seen = p->shifts = p->pending.count = 0;
	while (old < p->stamps && p->stamp[old].frame < p->first_gap)
		old++;
	p->stamps -= old;
	memmove(p->stamp, p->stamp + old, (size_t)p->stamps * sizeof(*p->stamp));
	p->gap = frame < p->newest_gap;
	p->first_gap = p->newest_gap;
}

void pulse_phase_add_gap(struct pulse_phase *p, double frame, double sigma_frames)
{
	if (!(sigma_frames > least_gate))
		return;
	if (!p->gap)
		p->first_gap = frame;
	p->newest_gap = frame;
	p->gap = true;
}

enum phase_verdict pulse_phase_add_edge(struct pulse_phase *p, double frame, double sigma_frames, struct phase_loss *loss)
{
	struct phase_edge e = { frame + p->lost, sigma_of(p, sigma_frames), 0 };
	double distance, sigma;

	if (!isfinite(frame) || !(sigma_frames >= 0))
		return PHASE_OFF;
	pass_gap(p, frame);
	if (p->line && frame - p->newest > outage_s * p->settings.rate)
		p->line = p->seen = p->shifts = p->pending.count = 0;
	if (!p->line) {
		note_edge(p, &e);
		find(p);
		return PHASE_UNKNOWN;
	}
	distance = off_place(p, e.at, &e.k);
	sigma = sqrt(phase_place_variance(p, e.k) + pow(p->scatter * e.sigma, 2));
	if (e.k <= p->pulse[p->line - 1].k || fabs(distance) > fmax(least_frames, sigmas * sigma))
		return off(p, distance, frame, &e, loss);
	note_ratio(p, fabs(distance) / e.sigma);
	note_pending(p);
	keep(p, &e);
	return PHASE_KEPT;
}

enum phase_verdict pulse_phase_finish(struct pulse_phase *p, struct phase_loss *loss)
{
	for (int i = p->shifts; p->line && i-- > 0; )
		if (proven(p, &p->shift[i], ENOUGH_AGAIN, loss)) {
			p->shifts = 0;
			return PHASE_JUMPED;
		}
	return PHASE_OFF;
}
