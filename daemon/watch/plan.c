/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <stdlib.h>
#include <string.h>
#include "limbwatch/stamp_line.h"
#include "plan.h"

enum { ASIDE_MOST = 1000 };

int plans_open(struct plans *plans)
{
	*plans = (struct plans){ .begun_ns = host_now() };
	return -pthread_mutex_init(&plans->mutex, NULL);
}

static void plan_free(struct plan *plan)
{
	sidecar_clear(&plan->sidecar);
	for (size_t k = 0; k < plan->pieces; k++)
		sidecar_clear(&plan->piece[k].described);
	free(plan->piece);
	free(plan->contact);
	free(plan);
}

void plans_close(struct plans *plans)
{
	struct plan *plan;

	while (plans->head)
		plans_drop(plans);
	while ((plan = plans_take_aside(plans)))
		plan_free(plan);
	pthread_mutex_destroy(&plans->mutex);
}

struct plan *plans_newest(struct plans *plans)
{
	struct plan *plan;

	pthread_mutex_lock(&plans->mutex);
	plan = plans->head;
	while (plan && plan->next)
		plan = plan->next;
	if (plan && plan->final)
		plan = NULL;
	pthread_mutex_unlock(&plans->mutex);
	return plan;
}

void plans_append(struct plans *plans, struct plan *plan)
{
	struct plan **end = &plans->head;

	pthread_mutex_lock(&plans->mutex);
	while (*end)
		end = &(*end)->next;
	*end = plan;
	pthread_mutex_unlock(&plans->mutex);
}

void plans_stretch(struct plans *plans, struct plan *plan, uint64_t from, uint64_t to)
{
	pthread_mutex_lock(&plans->mutex);
	if (from < plan->from)
		plan->from = from;
	if (to > plan->to)
		plan->to = to;
	pthread_mutex_unlock(&plans->mutex);
}

void plans_cut(struct plans *plans, struct plan *plan, uint64_t to)
{
	pthread_mutex_lock(&plans->mutex);
	if (to < plan->to)
		plan->to = to > plan->from ? to : plan->from;
	pthread_mutex_unlock(&plans->mutex);
}

void plans_describe(struct plans *plans, struct plan *plan, struct sidecar *sidecar, bool final)
{
	pthread_mutex_lock(&plans->mutex);
	sidecar_clear(&plan->sidecar);
	plan->sidecar = *sidecar;
	plan->version++;
	plan->final = final;
	pthread_mutex_unlock(&plans->mutex);
	memset(sidecar, 0, sizeof(*sidecar));
}

void plans_decide(struct plans *plans, uint64_t decided, bool ended)
{
	pthread_mutex_lock(&plans->mutex);
	if (decided > plans->decided)
		plans->decided = decided;
	plans->ended = ended;
	pthread_mutex_unlock(&plans->mutex);
}

void plans_view(struct plans *plans, struct plan_view *view)
{
	struct plan *plan;

	pthread_mutex_lock(&plans->mutex);
	plan = plans->head;
	*view = (struct plan_view){ .plan = plan, .decided = plans->decided, .ended = plans->ended };
	if (plan) {
		view->from = plan->from;
		view->to = plan->to;
		view->final = plan->final;
		view->version = plan->version;
		view->amended = plan->amended;
	}
	pthread_mutex_unlock(&plans->mutex);
}

/* A copy of n elements in malloc'd memory; *ok turns false when memory is short. */
static void *copy_array(const void *from, size_t n, size_t size, bool *ok)
{
	void *to;

	if (!n)
		return NULL;
	to = malloc(n * size);
	if (to)
		memcpy(to, from, n * size);
	else
		*ok = false;
	return to;
}

static int sidecar_copy(struct sidecar *out, const struct sidecar *from)
{
	struct sidecar s = *from;
	bool ok = true;

	s.control = copy_array(from->control, from->controls, sizeof(*from->control), &ok);
	s.channel = copy_array(from->channel, from->channels, sizeof(*from->channel), &ok);
	s.expected = copy_array(from->expected, from->expecteds, sizeof(*from->expected), &ok);
	s.part = copy_array(from->part, from->parts, sizeof(*from->part), &ok);
	s.gap = copy_array(from->gap, from->gaps, sizeof(*from->gap), &ok);
	s.loss = copy_array(from->loss, from->losses, sizeof(*from->loss), &ok);
	s.pulse = copy_array(from->pulse, from->pulses, sizeof(*from->pulse), &ok);
	s.contact = copy_array(from->contact, from->contacts, sizeof(*from->contact), &ok);
	if (!ok) {
		sidecar_clear(&s);
		return -ENOMEM;
	}
	*out = s;
	return 0;
}

int plans_copy_sidecar(struct plans *plans, const struct plan *plan, struct sidecar *out)
{
	int ret;

	pthread_mutex_lock(&plans->mutex);
	ret = sidecar_copy(out, &plan->sidecar);
	pthread_mutex_unlock(&plans->mutex);
	return ret;
}

void plans_drop(struct plans *plans)
{
	struct plan *plan;

	pthread_mutex_lock(&plans->mutex);
	plan = plans->head;
	plans->head = plan->next;
	pthread_mutex_unlock(&plans->mutex);
	plan_free(plan);
}

/* Unlinks the oldest of those put aside; plans->mutex is held. */
static struct plan *oldest_aside(struct plans *plans)
{
	struct plan **at = &plans->aside, *oldest;

	while ((*at)->next)
		at = &(*at)->next;
	oldest = *at;
	*at = NULL;
	plans->asides--;
	return oldest;
}

void plans_put_aside(struct plans *plans, const struct piece *piece, size_t pieces)
{
	struct piece *copy = malloc(pieces * sizeof(*copy));
	struct plan *plan, *surplus = NULL;

	if (!copy) {
		plans_drop(plans);
		return;
	}
	memcpy(copy, piece, pieces * sizeof(*copy));
	pthread_mutex_lock(&plans->mutex);
	plan = plans->head;
	plans->head = plan->next;
	plan->piece = copy;
	plan->pieces = pieces;
	plan->next = plans->aside;
	plans->aside = plan;
	if (++plans->asides > ASIDE_MOST)
		surplus = oldest_aside(plans);
	pthread_mutex_unlock(&plans->mutex);
	if (surplus)
		plan_free(surplus);
}

struct plan *plans_take_aside(struct plans *plans)
{
	struct plan *plan = NULL;

	pthread_mutex_lock(&plans->mutex);
	if (plans->aside)
		plan = oldest_aside(plans);
	pthread_mutex_unlock(&plans->mutex);
	return plan;
}

void plans_host_known(struct plans *plans)
{
	pthread_mutex_lock(&plans->mutex);
	plans->host_known = true;
	pthread_mutex_unlock(&plans->mutex);
}

bool plans_ask_host_known(struct plans *plans)
{
	bool known;

	pthread_mutex_lock(&plans->mutex);
	known = plans->host_known;
	plans->host_known = false;
	pthread_mutex_unlock(&plans->mutex);
	return known;
}
