/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <ctype.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include "limbwatch/log.h"
#include "listen_inner.h"

static const double refresh_s = 60;             /* of a long plan's sidecar */
static const double everything_s = 6 * 3600;    /* length of a segment when everything is kept */

/* Ties a contact to UTC with the clock as it is known now. */
static void date_contact(const struct listener *l, struct contact *c)
{
	const struct config_channel *channel = &l->config->channel[c->channel];
	struct clock_reading reading;

	frame_clock_at(l->clock, c->frame, &reading);
	c->when = tai_add(reading.when, -channel->response_delay_s);
	c->time_quality = reading.quality;
	c->second_confirmed = reading.second_confirmed;
	c->terms.fit = c->frame_sigma / l->rate;
	c->terms.clock = reading.sigma_s;
	c->terms.response = channel->response_delay_sigma_s;
	c->sigma_s = reading.quality == TIME_FREE ? NAN :
		sqrt(c->terms.fit * c->terms.fit + c->terms.clock * c->terms.clock + c->terms.response * c->terms.response);
}

/* ------------------------------------------------------------------ sightings */

/* The same contact seen by two lanes of one channel (a vigil's and one outside). */
static bool same_contact(const struct listener *l, const struct contact *a, const struct contact *b)
{
	double near = 8 * fmax(a->fresnel_time_s, b->fresnel_time_s) * l->rate;

	return a->channel == b->channel && fabs(a->frame - b->frame) < near;
}

/* How far from its prediction, in standard uncertainties. */
static double surprise(const struct listener *l, const struct contact *c)
{
	const struct config_expected *e = &l->config->expected[c->expected];

	return fabs(c->frame - frame_clock_frame(l->clock, e->when)) / (e->sigma_s * l->rate);
}

/*
 * The lane that was built for an expected contact of this kind knows best; of two such lanes the one whose prediction is
 * nearer, for the edge itself does not say whose it is; otherwise the higher peak.
 */
static bool better(const struct listener *l, const struct contact *a, const struct contact *b)
{
	if ((a->expected >= 0) != (b->expected >= 0) && a->kind == b->kind)
		return a->expected >= 0;
	if (a->expected >= 0 && b->expected >= 0 && a->kind == b->kind)
		return surprise(l, a) < surprise(l, b);
	return a->snr > b->snr;
}

static void add(struct listener *l, const struct contact *contact)
{
	for (size_t k = 0; k < l->sightings; k++) {
		struct contact *known = &l->sighting[k].contact;

		/* One lane's own contacts are never merged. */
		if (known->expected == contact->expected && known->fresnel_time_s == contact->fresnel_time_s)
			continue;
		if (!same_contact(l, known, contact))
			continue;
		if (!l->sighting[k].announced && better(l, contact, known))
			*known = *contact;
		return;
	}
	if (l->sightings == SIGHTINGS) {
		log_error("more than %d contacts at once: one %s with SNR %.1f is not reported (it is recorded)", SIGHTINGS,
		          contact_kind_name(contact->kind), contact->snr);
		return;
	}
	l->sighting[l->sightings++] = (struct sighting){ .contact = *contact };
}

void sightings_add(struct listener *l, const struct contact *contact, size_t n)
{
	for (size_t k = 0; k < n; k++)
		add(l, &contact[k]);
}

static void announce(struct listener *l, struct contact *c)
{
	const struct config *config = l->config;
	char text[TAI_TEXT];

	date_contact(l, c);
	if (c->expected >= 0)
		l->vigil[c->expected].seen++;
	atomic_fetch_add(&l->contacts, 1);
	if (c->time_quality == TIME_FREE)
		snprintf(text, sizeof(text), "%.6f s", c->frame / l->rate);
	else
		tai_format_utc(text, c->when, 6);
	log_notice("contact: %s on \"%s\" at %s, SNR %.1f, %s%s%s", contact_kind_name(c->kind),
	           config->channel[c->channel].name, text, c->snr, verdict_name(c->verdict),
	           c->marked ? ", but the residuals are not clean" : "",
	           c->expected >= 0 ? "" : ", not expected");
	if (!config->keep.everything) {
		/* However short pre_trigger_s and post_trigger_s are: a light curve needs its fringes. */
		double fringes = 16 * c->fresnel_time_s;
		double pre = c->frame - fmax(config->keep.pre_s, fringes) * l->rate;
		double post = c->frame + fmax(config->keep.post_s, fringes) * l->rate;

		plans_keep(l, pre > 0 ? (uint64_t)pre : 0, (uint64_t)ceil(post), REASON_TRIGGER, "");
	}
}

static struct plan *plan_with(const struct listener *l, double frame)
{
	for (size_t k = 0; k < l->plans; k++)
		if (frame >= (double)l->plan[k]->from && frame < (double)l->plan[k]->to)
			return l->plan[k];
	return l->plans ? l->plan[l->plans - 1] : NULL;
}

static void describe(struct listener *l, struct plan *plan, bool final);

static void settle(struct listener *l, const struct contact *contact)
{
	struct plan *plan = plan_with(l, contact->frame);

	if (!plan)
		return;
	if (plan->contacts == plan->room) {
		size_t room = plan->room ? 2 * plan->room : 4;
		struct contact *grown = realloc(plan->contact, room * sizeof(*grown));

		if (!grown)
			return;
		plan->contact = grown;
		plan->room = room;
	}
	plan->contact[plan->contacts++] = *contact;
	describe(l, plan, false);
}

static int by_frame(const void *a, const void *b)
{
	double x = ((const struct sighting *)a)->contact.frame, y = ((const struct sighting *)b)->contact.frame;

	return (x > y) - (x < y);
}

void sightings_update(struct listener *l, bool ending)
{
	size_t kept = 0;

	qsort(l->sighting, l->sightings, sizeof(*l->sighting), by_frame);
	for (size_t k = 0; k < l->sightings; k++) {
		struct sighting *s = &l->sighting[k];
		double age = (double)l->next_frame - s->contact.frame;

		if (!s->announced && (ending || age > (double)l->hold)) {
			announce(l, &s->contact);
			s->announced = true;
		}
		if (s->announced && (ending || age > (double)(l->hold + l->settle)))
			settle(l, &s->contact);
		else
			l->sighting[kept++] = *s;
	}
	l->sightings = kept;
}

/* ------------------------------------------------------------------ plans and sidecars */

/* Lower-case letters, digits and hyphens: safe in every file system. */
static void append_slug(char *name, size_t size, const char *text)
{
	size_t n = strlen(name), begin = n + 1;

	if (!*text || n + 2 >= size)
		return;
	name[n++] = '_';
	for (; *text && n + 1 < size && n < begin + 32; text++) {
		if (isalnum((unsigned char)*text))
			name[n++] = (char)tolower((unsigned char)*text);
		else if (n > begin && name[n - 1] != '-')
			name[n++] = '-';
	}
	while (n > begin && name[n - 1] == '-')
		n--;
	name[n] = 0;
	if (n == begin)
		name[n - 1] = 0;
}

static void name_plan(const struct listener *l, struct plan *plan, const char *what)
{
	char text[TAI_TEXT], *to = plan->name, boot[HOST_CLOCK_BOOT];

	if (plan->quality == TIME_FREE) {
		host_clock_boot(boot);          /* the first eight digits tell boots apart */
		snprintf(plan->name, sizeof(plan->name), "undated-%.8s-%012llu", boot, (unsigned long long)plan->from);
	} else {
		tai_format_utc(text, plan->start, 0);
		for (const char *p = text; *p; p++)
			if (*p != '-' && *p != ':')
				*to++ = *p;
		*to = 0;
	}
	append_slug(plan->name, sizeof(plan->name), l->config->station.name);
	append_slug(plan->name, sizeof(plan->name), what);
}

static struct plan *append_plan(struct listener *l, uint64_t from, uint64_t to, enum segment_reason reason,
                                const char *what)
{
	struct plan *plan;
	struct clock_reading reading;

	if (l->plans == sizeof(l->plan) / sizeof(*l->plan) || !(plan = calloc(1, sizeof(*plan)))) {
		log_error("cannot keep frames %llu to %llu: too many segments are open", (unsigned long long)from,
		          (unsigned long long)to);
		return NULL;
	}
	frame_clock_at(l->clock, (double)from, &reading);
	plan->from = plan->start_frame = from;
	plan->to = to;
	plan->reason = reason;
	plan->start = reading.when;
	plan->quality = reading.quality;
	plan->refreshed = from;
	if (!l->settings.intake->real_time || !acquire_frame_time(l->settings.acquire, from, &plan->host_ns))
		plan->host_ns = INT64_MIN;
	name_plan(l, plan, what);
	snprintf(plan->description, sizeof(plan->description), "limbwatch %s: %s", LIMBWATCH_VERSION,
	         reason == REASON_VIGIL ? "vigil" : reason == REASON_TRIGGER ? "trigger" : "everything");
	l->plan[l->plans++] = plan;
	describe(l, plan, false);
	plans_append(l->settings.plans, plan);
	return plan;
}

void plans_keep(struct listener *l, uint64_t from, uint64_t to, enum segment_reason reason, const char *what)
{
	struct plan *newest = l->plans ? l->plan[l->plans - 1] : NULL;

	if (newest && from <= newest->to && to >= newest->from) {
		plans_stretch(l->settings.plans, newest, from, to);
		if (reason == REASON_VIGIL)
			newest->reason = reason;
		describe(l, newest, false);
		return;
	}
	append_plan(l, from, to, reason, what);
}

static void describe_channels(const struct listener *l, struct sidecar *s)
{
	s->channel = calloc(l->config->channels, sizeof(*s->channel));
	if (!s->channel)
		return;
	s->channels = l->config->channels;
	for (size_t k = 0; k < s->channels; k++) {
		const struct config_channel *c = &l->config->channel[k];
		struct sidecar_channel *out = &s->channel[k];

		snprintf(out->name, sizeof(out->name), "%s", c->name);
		out->column = c->column;
		out->measure = c->measure;
		out->polarity = c->polarity;
		out->wavelength_m = c->curve.passband.wavelength_m;
		out->passband_m = c->curve.passband.width_m;
		out->aperture_m = c->curve.aperture_m;
		out->integration_s = c->curve.integration_s;
		out->low_pass_s = c->curve.low_pass_s;
		out->high_pass_hz = c->curve.high_pass_hz;
		out->response_delay_s = c->response_delay_s;
		out->rate = l->rate;
	}
	for (size_t k = 0; k < l->lanes; k++)
		s->channel[lane_channel(l->lane[k])].rate = lane_series_rate(l->lane[k]);
}

static void describe_expected(const struct listener *l, const struct plan *plan, struct sidecar *s)
{
	s->expected = calloc(l->config->expecteds ? l->config->expecteds : 1, sizeof(*s->expected));
	for (size_t k = 0; s->expected && k < l->config->expecteds; k++) {
		const struct config_expected *e = &l->config->expected[k];
		const struct vigil *vigil = &l->vigil[k];
		struct sidecar_expected *out = &s->expected[s->expecteds];

		if (vigil->state == VIGIL_WAITING || vigil->last <= plan->from || vigil->first >= plan->to)
			continue;
		snprintf(out->source, sizeof(out->source), "%s", e->source);
		out->kind = e->kind;
		out->when = e->when;
		out->sigma_s = e->sigma_s;
		out->distance_m = e->distance_m;
		out->speed_mps = e->speed_mps;
		out->speed_tolerance = e->speed_tolerance;
		s->expecteds++;
	}
}

static void describe_losses(const struct listener *l, uint64_t from, uint64_t end, struct sidecar *s)
{
	enum { MOST = 8192 };

	s->loss = malloc(MOST * sizeof(*s->loss));
	if (s->loss)
		s->losses = loss_watch_losses(l->loss, from, end, s->loss, MOST);
}

static void describe_clock(const struct listener *l, const struct plan *plan, uint64_t end, struct sidecar *s)
{
	size_t most = (size_t)((double)(end - plan->from) / l->rate * 1.2) + 16;

	frame_clock_at(l->clock, (double)plan->from, &s->start);
	frame_clock_at(l->clock, (double)end, &s->end);
	s->true_rate = frame_clock_rate(l->clock, 0.5 * ((double)plan->from + (double)end));
	if (l->pulse_channel < 0)
		return;
	describe_losses(l, plan->from, end, s);
	s->pulse = calloc(most, sizeof(*s->pulse));
	if (s->pulse)
		s->pulses = frame_clock_pulses(l->clock, (double)plan->from, (double)end, s->pulse, most);
}

static void describe_contacts(const struct listener *l, struct plan *plan, struct sidecar *s)
{
	if (!plan->contacts)
		return;
	for (size_t k = 0; k < plan->contacts; k++)
		date_contact(l, &plan->contact[k]);
	s->contact = malloc(plan->contacts * sizeof(*s->contact));
	if (!s->contact)
		return;
	memcpy(s->contact, plan->contact, plan->contacts * sizeof(*s->contact));
	s->contacts = plan->contacts;
}

static void describe_mixer(const struct intake *intake, struct sidecar *s)
{
	s->control = calloc(intake->controls + 1, sizeof(*s->control));
	for (size_t k = 0; s->control && k < intake->controls; k++) {
		const struct intake_control *from = &intake->control[k];
		struct sidecar_control *to = &s->control[s->controls++];

		snprintf(to->name, sizeof(to->name), "%s", from->name);
		snprintf(to->value, sizeof(to->value), "%s", from->value);
	}
}

/* A fresh sidecar of the plan as known now. */
static void describe(struct listener *l, struct plan *plan, bool final)
{
	const struct config *config = l->config;
	struct intake face = *l->settings.intake;
	uint64_t end = plan->to < l->next_frame ? plan->to : l->next_frame > plan->from ? l->next_frame : plan->from;
	struct sidecar s = {
		.format = SIDECAR_FORMAT, .latitude_deg = config->station.latitude_deg,
		.longitude_deg = config->station.longitude_deg, .height_m = config->station.height_m,
		.frames = face.format, .rate = l->rate, .reason = plan->reason, .first = plan->from,
		.clipped = l->clipped,
	};

	if (l->settings.device)
		device_face(l->settings.device, &face);
	snprintf(s.version, sizeof(s.version), "%s", LIMBWATCH_VERSION);
	snprintf(s.station, sizeof(s.station), "%s", config->station.name);
	snprintf(s.driver, sizeof(s.driver), "%s", face.driver->name);
	snprintf(s.device, sizeof(s.device), "%s", face.name);
	for (size_t k = 0; k < l->lanes; k++)
		s.clipped += lane_clipped(l->lane[k]);
	describe_mixer(&face, &s);
	describe_channels(l, &s);
	describe_expected(l, plan, &s);
	describe_clock(l, plan, end, &s);
	describe_contacts(l, plan, &s);
	if (plan->host_ns != INT64_MIN)
		host_clock_boot(s.boot_id);
	s.monotonic_ns = plan->host_ns;
	plan->refreshed = l->next_frame;
	plans_describe(l->settings.plans, plan, &s, final);
}

static void finish_oldest(struct listener *l)
{
	describe(l, l->plan[0], true);  /* from here on it is the keeper's */
	l->plans--;
	memmove(l->plan, l->plan + 1, l->plans * sizeof(*l->plan));
}

/* When everything is kept, segment follows on segment. */
static void keep_everything(struct listener *l)
{
	uint64_t length = (uint64_t)(everything_s * l->rate);
	struct plan *newest = l->plans ? l->plan[l->plans - 1] : NULL;
	uint64_t from = newest ? newest->to : l->resumed;

	if (!newest || l->next_frame >= newest->to)
		append_plan(l, from, from + length, REASON_ALL, "");
}

/* The date is known: what was recorded before gets it too. */
static void amend(struct listener *l)
{
	struct clock_reading reading;
	struct plan *plan;

	frame_clock_at(l->clock, (double)l->next_frame, &reading);
	while (reading.quality != TIME_FREE && (plan = plans_take_aside(l->settings.plans))) {
		plan->amended = true;
		plan->final = false;
		plan->next = NULL;
		describe(l, plan, true);
		plans_append(l->settings.plans, plan);
	}
}

void plans_update(struct listener *l, bool ending)
{
	if (l->dated)
		amend(l);
	if (l->config->keep.everything && !ending)
		keep_everything(l);
	for (size_t k = 0; ending && k < l->plans; k++)
		plans_cut(l->settings.plans, l->plan[k], l->next_frame);
	while (l->plans && (ending || l->next_frame > l->plan[0]->to + l->hold + l->settle))
		finish_oldest(l);
	for (size_t k = 0; k < l->plans; k++)
		if ((double)(l->next_frame - l->plan[k]->refreshed) > refresh_s * l->rate)
			describe(l, l->plan[k], false);
}

void plans_break(struct listener *l, uint64_t frame, uint64_t resumed)
{
	for (size_t k = 0; k < l->plans; k++)
		plans_cut(l->settings.plans, l->plan[k], frame);
	while (l->plans)
		finish_oldest(l);
	l->resumed = resumed;
	for (size_t k = 0; !l->config->keep.everything && k < l->config->expecteds; k++)
		if (l->vigil[k].state == VIGIL_OPEN && l->vigil[k].last > resumed)
			plans_keep(l, resumed, l->vigil[k].last, REASON_VIGIL, l->config->expected[k].source);
}
