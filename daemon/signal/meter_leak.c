/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <math.h>
#include <string.h>
#include "meter_inner.h"

static const double reach_s = 1e-3, control_s = 0.3;
static const double age_s = 5;          /* without pulses, where they would be is soon unknown */

void leak_plan_create(struct leak_plan *plan, double rate, double width_s, double memory_s)
{
	double reach = fmax(4, reach_s * rate);

	if (width_s > 0)
		reach = fmin(reach, width_s * rate);
	*plan = (struct leak_plan){
		.rate = rate, .memory = memory_s == 0 ? INFINITY : fmax(FORGET_LEAST, memory_s), .reach = (uint64_t)reach,
	};
}

void leak_plan_next(struct leak_plan *plan, const struct comb *comb, uint64_t base)
{
	double interval = comb_interval(comb), last, ahead, at;

	if (plan->set || plan->reach == 0 || isnan(interval))
		return;
	last = comb->edge[comb->kept - 1].frame;
	ahead = (double)base + control_s * plan->rate + (double)plan->reach + 1 - last;
	if (ahead > age_s * plan->rate)
		return;
	at = last + interval * fmax(1, ceil(ahead / interval));
	plan->centre[LEAK_PULSE] = (uint64_t)ceil(at);
	plan->centre[LEAK_CONTROL] = (uint64_t)ceil(at - control_s * interval);
	plan->set = true;
}

bool leak_plan_over(struct leak_plan *plan, uint64_t end)
{
	if (!plan->set || plan->centre[LEAK_PULSE] + plan->reach > end)
		return false;
	plan->set = false;
	return true;
}

void leak_take(struct leak *leak, const struct leak_plan *plan, const double *x, size_t n, uint64_t base)
{
	for (int p = 0; plan->set && p < LEAK_PLACES; p++) {
		uint64_t centre = plan->centre[p], from = centre - plan->reach, to = centre + plan->reach;

		if (from >= base + n || to <= base)
			continue;
		from = from > base ? from : base;
		to = to < base + n ? to : base + n;
		for (uint64_t k = from; k < to; k++)
			leak->sum[p] += k < centre ? -x[k - base] : x[k - base];
		leak->taken[p] += to - from;
	}
}

void leak_finish(struct leak *leak, const struct leak_plan *plan)
{
	struct moments one = { 1, (leak->sum[LEAK_PULSE] - leak->sum[LEAK_CONTROL]) / (double)plan->reach, 0 };

	if (leak->taken[LEAK_PULSE] == 2 * plan->reach && leak->taken[LEAK_CONTROL] == 2 * plan->reach)
		moments_merge(&leak->steps, &one);
	if (leak->steps.n > plan->memory) {
		leak->steps.n *= 0.5;
		leak->steps.square *= 0.5;
	}
	leak_break(leak);
}

void leak_break(struct leak *leak)
{
	memset(leak->sum, 0, sizeof(leak->sum));
	memset(leak->taken, 0, sizeof(leak->taken));
}
