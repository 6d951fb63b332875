/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <math.h>
#include <stdlib.h>
#include <gsl/gsl_randist.h>
#include <gsl/gsl_rng.h>
#include "edge_probe.h"

static double taken(const struct probe_run *r, double t)
{
	size_t s = t <= 0 ? 0 : (size_t)t;

	if (s >= r->seconds)
		s = r->seconds - 1;
	return r->counted[s] + (t - (double)s) * (r->counted[s + 1] - r->counted[s]);
}

double probe_frame(const struct probe_run *r, double t)
{
	double frame = taken(r, t);

	for (unsigned k = 0; k < r->card->losses; k++)
		if (t >= r->card->loss[k].at_s)
			frame -= r->card->loss[k].frames;
	return frame;
}

static void make_card(struct probe_run *r, gsl_rng *rng)
{
	const struct probe_card *c = r->card;
	double wander = 0;

	r->seconds = (size_t)c->seconds + 3;
	r->counted = malloc((r->seconds + 1) * sizeof(*r->counted));
	if (!r->counted)
		abort();
	r->counted[0] = 0;
	for (size_t s = 0; s < r->seconds; s++) {
		double ppm = c->error_ppm + c->drift_ppm_per_hour * ((double)s + 0.5) / 3600 + wander;

		wander += gsl_ran_gaussian(rng, c->wander_ppm / 60);
		r->counted[s + 1] = r->counted[s] + c->rate * (1 + ppm * 1e-6);
	}
}

/* A pulse that falls among frames that were lost is not seen. */
static bool lost(const struct probe_card *c, double t)
{
	for (unsigned k = 0; k < c->losses; k++)
		if (c->loss[k].frames > 0 && t >= c->loss[k].at_s && t < c->loss[k].at_s + c->loss[k].frames / c->rate)
			return true;
	return false;
}

/* Frames of a loss are gone for the time it lasts; a repeated stretch shows what it holds once more, which is not modelled. */
static void put(struct probe_run *r, double t, bool pulse, double second, double noise)
{
	double frame = taken(r, t);

	if (r->edges == PROBE_EDGES || lost(r->card, t))
		return;
	for (unsigned k = 0; k < r->card->losses; k++)
		if (t >= r->card->loss[k].at_s)
			frame -= r->card->loss[k].frames;
	frame += noise;
	if (frame < 0 || (r->edges && frame <= r->edge[r->edges - 1].frame))
		return;
	r->edge[r->edges++] = (struct probe_edge){ frame, pulse, second };
}

/* How late the receiver gives the pulse of second k. */
static double late(const struct probe_card *c, double k)
{
	if (c->moved_at_s > 0 && k >= c->moved_at_s)
		return c->moved_s;
	if (c->free_ppm != 0 && k > c->moved_at_s - 60)
		return c->free_ppm * 1e-6 * (k - c->moved_at_s + 60);
	return 0;
}

void probe_run_make(struct probe_run *r, const struct probe_card *c)
{
	gsl_rng *rng = gsl_rng_alloc(gsl_rng_mt19937);

	if (!rng)
		abort();
	gsl_rng_set(rng, c->seed);
	r->card = c;
	r->edges = 0;
	make_card(r, rng);
	for (double k = 1; k <= c->seconds; k++) {
		double jitter = gsl_ran_gaussian(rng, c->jitter_s), noise = gsl_ran_gaussian(rng, c->noise_frames);
		double gone = gsl_rng_uniform(rng), click = gsl_rng_uniform(rng), at = k + 0.05 + 0.9 * gsl_rng_uniform(rng);

		if (gone >= c->missing && !(k >= c->outage_from_s && k < c->outage_to_s))
			put(r, k + jitter + late(c, k), true, k, noise);
		if (click < c->spurious)
			put(r, at, false, k, 0);
	}
	gsl_rng_free(rng);
}

void probe_run_release(struct probe_run *run)
{
	free(run->counted);
	run->counted = NULL;
}
