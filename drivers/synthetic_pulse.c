/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <gsl/gsl_randist.h>
#include <gsl/gsl_rng.h>
#include <math.h>
#include <stdlib.h>
#include "synthetic_pulse.h"

/* 4096 frames at the slowest rate span five seconds, with four edges each at worst. */
enum { EDGES = 64, STEP_HALF = 32, STEP_FINE = 256 };

struct edge { double frame, height; };

struct synthetic_pulse {
	const struct synthetic_card *card;
	struct synthetic_pulse_settings settings;
	gsl_rng *rng, *edge_rng;        /* apart, so that pulses do not depend on how the frames fall into blocks */
	double pole, slow;              /* slow: low-passed signal of the AC coupling */
	double settled;                 /* level that the edges gone by have left */
	size_t next_second, edges;
	struct edge edge[EDGES];
};

/* Band-limited step, 0 to 1 about u = 0: the integral of a Blackman-windowed sinc, symmetric, so that its half height is
 * the edge to the last digit.  Tabulated at 1/STEP_FINE sample, linear between. */
static double step_table[2 * STEP_HALF * STEP_FINE + 1];

static void make_step_table(void)
{
	enum { HALF = STEP_HALF * STEP_FINE };
	double sum = 0, before = 0;

	if (step_table[2 * HALF] != 0)
		return;
	for (int k = -HALF; k <= HALF; k++) {
		double u = (double)k / STEP_FINE, phase = M_PI * u / STEP_HALF;
		double window = 0.42 + 0.5 * cos(phase) + 0.08 * cos(2 * phase);
		double sinc = k ? sin(0.9 * M_PI * u) / (0.9 * M_PI * u) : 1;      /* a card passes 0.45 of its rate */

		sum += 0.5 * (before + window * sinc);
		before = window * sinc;
		step_table[k + HALF] = sum;
	}
	for (int k = 0; k <= 2 * HALF; k++)
		step_table[k] /= sum;
}

static double step(double u)
{
	double x = (u + STEP_HALF) * STEP_FINE;
	int k = (int)x;

	if (u <= -STEP_HALF)
		return 0;
	if (u >= STEP_HALF)
		return 1;
	return step_table[k] + (x - k) * (step_table[k + 1] - step_table[k]);
}

int synthetic_pulse_create(struct synthetic_pulse **out, const struct synthetic_card *card,
                           const struct synthetic_pulse_settings *settings)
{
	struct synthetic_pulse *s = calloc(1, sizeof(*s));

	if (!s)
		return -ENOMEM;
	s->card = card;
	s->settings = *settings;
	s->rng = gsl_rng_alloc(gsl_rng_taus2);
	s->edge_rng = gsl_rng_alloc(gsl_rng_mt19937);
	if (!s->rng || !s->edge_rng) {
		synthetic_pulse_destroy(s);
		return -ENOMEM;
	}
	gsl_rng_set(s->rng, (settings->seed ^ 0x71c5u) + 1);
	gsl_rng_set(s->edge_rng, settings->seed ^ 0xb0a7u);
	s->pole = exp(-2 * M_PI * settings->ac_hz / card->rate);
	s->slow = s->settled = fmax(0, -settings->height);      /* inverted: it idles high */
	make_step_table();
	*out = s;
	return 0;
}

void synthetic_pulse_destroy(struct synthetic_pulse *pulse)
{
	if (!pulse)
		return;
	gsl_rng_free(pulse->rng);
	gsl_rng_free(pulse->edge_rng);
	free(pulse);
}

static void put_edge(struct synthetic_pulse *s, double t, double height)
{
	if (s->edges < EDGES)
		s->edge[s->edges++] = (struct edge){ synthetic_card_frame(s->card, t), height };
}

/* Edges of all pulses that may begin before `frame`, however early their jitter makes them. */
static void make_edges(struct synthetic_pulse *s, double frame)
{
	frame += 8 * s->settings.jitter_s * s->card->rate;
	for (; s->next_second + 1 < s->card->seconds; s->next_second++) {
		double t = (double)s->next_second - s->settings.fraction_s;   /* a whole second; the first may lie before the start */
		double late, missing, spurious, at, width;

		if (synthetic_card_frame(s->card, t) > frame)
			return;
		/* All are drawn each second: a setting changes no other pulse. */
		late = t + gsl_ran_gaussian(s->edge_rng, s->settings.jitter_s);
		missing = gsl_rng_uniform(s->edge_rng);
		spurious = gsl_rng_uniform(s->edge_rng);
		at = t + 0.3 + 0.4 * gsl_rng_uniform(s->edge_rng);
		width = 0.001 + 0.1 * gsl_rng_uniform(s->edge_rng);
		if (missing >= s->settings.missing) {
			put_edge(s, late, s->settings.height);
			put_edge(s, late + s->settings.width_s, -s->settings.height);
		}
		if (spurious < s->settings.spurious) {
			put_edge(s, at, s->settings.height);
			put_edge(s, at + width, -s->settings.height);
		}
	}
}

static void retire_edges(struct synthetic_pulse *s, double frame)
{
	size_t kept = 0;

	for (size_t k = 0; k < s->edges; k++) {
		if (s->edge[k].frame + STEP_HALF < frame)
			s->settled += s->edge[k].height;
		else
			s->edge[kept++] = s->edge[k];
	}
	s->edges = kept;
}

/* Adds an edge to the `count` frames from `first` on. */
static void add_edge(double *out, const struct edge *edge, uint64_t first, size_t count)
{
	double from = edge->frame - STEP_HALF - (double)first;
	size_t k = from < 0 ? 0 : from < (double)count ? (size_t)from : count;

	for (; k < count; k++)
		out[k] += edge->height * step((double)(first + k) - edge->frame);
}

void synthetic_pulse_execute(struct synthetic_pulse *s, uint64_t first, double *out, size_t count)
{
	make_edges(s, (double)(first + count) + STEP_HALF);
	retire_edges(s, (double)first);
	for (size_t k = 0; k < count; k++)
		out[k] = s->settled;
	for (size_t e = 0; e < s->edges; e++)
		add_edge(out, &s->edge[e], first, count);
	for (size_t k = 0; k < count; k++) {
		if (s->settings.ac_hz > 0) {
			s->slow = s->pole * s->slow + (1 - s->pole) * out[k];
			out[k] -= s->slow;
		}
		out[k] += gsl_ran_gaussian_ziggurat(s->rng, s->settings.noise_rms);
	}
}
