/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <math.h>
#include "limbwatch/log.h"
#include "listen_inner.h"

static double vigil_half(const struct config *config, const struct config_expected *e, double least)
{
	return fmax(least, config->watch.vigil_sigmas * e->sigma_s);
}

static void place(struct vigil *vigil, const struct config *config, const struct config_expected *e)
{
	vigil->begin = tai_add(e->when, -vigil_half(config, e, config->watch.vigil_before_s));
	vigil->end = tai_add(e->when, vigil_half(config, e, config->watch.vigil_after_s));
}

void vigils_create(struct listener *l)
{
	for (size_t k = 0; k < l->config->expecteds; k++)
		place(&l->vigil[k], l->config, &l->config->expected[k]);
}

static void create_lanes(struct listener *l, struct vigil *vigil, int expected)
{
	for (size_t k = 0; k < l->config->channels; k++) {
		struct lane_settings settings = {
			.config = l->config, .channel = (unsigned)k, .expected = expected,
			.format = l->settings.intake->format, .rate = l->rate,
		};

		if (l->config->channel[k].measure != MEASURE_VOLTAGE)
			continue;
		if (lane_create(&vigil->lane[k], &settings) < 0)
			log_error("channel \"%s\" cannot be watched for %s; it is recorded all the same",
			          l->config->channel[k].name, l->config->expected[expected].source);
	}
}

static void refresh(struct listener *l, struct vigil *vigil, const struct config_expected *e)
{
	double frame = frame_clock_frame(l->clock, e->when);

	for (size_t k = 0; k < l->config->channels; k++)
		if (vigil->lane[k])
			lane_expect(vigil->lane[k], frame, e->sigma_s * l->rate);
}

static uint64_t clamp_frame(double frame)
{
	return frame > 0 ? (uint64_t)frame : 0;
}

static void open_vigil(struct listener *l, struct vigil *vigil, int expected)
{
	const struct config_expected *e = &l->config->expected[expected];
	double first = frame_clock_frame(l->clock, vigil->begin), last = frame_clock_frame(l->clock, vigil->end);
	char text[TAI_TEXT];

	listener_show_busy(l, true);
	vigil->state = VIGIL_OPEN;
	vigil->first = clamp_frame(first);
	vigil->last = clamp_frame(ceil(last));
	log_notice("vigil for the %s of %s, expected %s \xc2\xb1 %g s", contact_kind_name(e->kind), e->source,
	           tai_format_utc(text, e->when, 1), e->sigma_s);
	if (!l->config->keep.everything)
		plans_keep(l, clamp_frame(first - (double)listener_lookback(l)), vigil->last, REASON_VIGIL, e->source);
	create_lanes(l, vigil, expected);
	refresh(l, vigil, e);
}

static void close_vigil(struct listener *l, struct vigil *vigil, const struct config_expected *e)
{
	for (size_t k = 0; k < l->config->channels; k++) {
		if (vigil->lane[k])
			l->clipped += lane_clipped(vigil->lane[k]);
		lane_destroy(vigil->lane[k]);
		vigil->lane[k] = NULL;
	}
	if (vigil->state == VIGIL_OPEN && !vigil->seen)
		log_notice("vigil for the %s of %s ended: no contact seen", contact_kind_name(e->kind), e->source);
	vigil->state = VIGIL_DONE;
}

static void finish_lanes(struct listener *l, struct vigil *vigil)
{
	struct contact contact[SIGHTINGS];

	for (size_t k = 0; k < l->config->channels; k++)
		if (vigil->lane[k])
			sightings_add(l, contact, lane_finish(vigil->lane[k], contact, SIGHTINGS));
}

static void update_vigil(struct listener *l, int k, const struct clock_reading *now, bool ending)
{
	const struct config_expected *e = &l->config->expected[k];
	struct vigil *vigil = &l->vigil[k];
	double margin = (double)listener_lookback(l) / l->rate;
	char text[TAI_TEXT];

	if (vigil->state == VIGIL_WAITING && l->dated) {
		if (tai_difference(now->when, vigil->begin) < -margin)
			return;
		if (tai_difference(now->when, vigil->end) > 0) {
			log_warning("the %s of %s, expected %s, lies before the samples: no vigil", contact_kind_name(e->kind),
			            e->source, tai_format_utc(text, e->when, 1));
			vigil->state = VIGIL_DONE;
			return;
		}
		open_vigil(l, vigil, k);
	}
	if (vigil->state != VIGIL_OPEN)
		return;
	if (ending)
		finish_lanes(l, vigil);
	else if (l->next_frame < vigil->last + l->hold + l->settle)
		return;
	if (!ending)
		close_vigil(l, vigil, e);
}

void vigils_update(struct listener *l, bool ending)
{
	struct clock_reading now;

	frame_clock_at(l->clock, (double)l->next_frame, &now);
	for (size_t k = 0; k < l->config->expecteds; k++)
		update_vigil(l, (int)k, &now, ending);
}

void vigils_execute(struct listener *l, const void *frames, size_t count, uint64_t first)
{
	struct contact contact[SIGHTINGS];

	for (size_t v = 0; v < l->config->expecteds; v++)
		for (size_t k = 0; l->vigil[v].state == VIGIL_OPEN && k < l->config->channels; k++)
			if (l->vigil[v].lane[k])
				sightings_add(l, contact, lane_execute(l->vigil[v].lane[k], frames, count, first,
				                                       contact, SIGHTINGS));
}

void vigils_refresh(struct listener *l)
{
	for (size_t k = 0; k < l->config->expecteds; k++)
		if (l->vigil[k].state == VIGIL_OPEN)
			refresh(l, &l->vigil[k], &l->config->expected[k]);
}

void vigils_destroy(struct listener *l)
{
	char text[TAI_TEXT];

	for (size_t k = 0; k < l->config->expecteds; k++) {
		const struct config_expected *e = &l->config->expected[k];

		if (l->vigil[k].state == VIGIL_WAITING && l->dated)
			log_warning("the %s of %s, expected %s, lies after the samples: no vigil", contact_kind_name(e->kind),
			            e->source, tai_format_utc(text, e->when, 1));
		close_vigil(l, &l->vigil[k], e);
	}
}
