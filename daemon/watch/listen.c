/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <math.h>
#include <stdlib.h>
#include <time.h>
#include "limbwatch/host_clock.h"
#include "limbwatch/log.h"
#include "limbwatch/stamp_line.h"
#include "listen_inner.h"

static const double settle_s = 6;       /* pulses come up to two seconds late, and what was lost in silence is known five seconds after */
static const double patience_s = 2;     /* stamps of a live device come with the first blocks */
static const double show_every_s = 0.2;
static const double fill_s = 600;       /* longer gaps end a segment instead of filling it with zeros */

/* Latency is the same number of series samples for every detector: what counts is the slowest series. */
static void measure_hold(struct listener *l, const struct lane_settings *settings, double *latency_samples)
{
	char why[256];
	struct lane_shape shape;
	struct lane *lane;
	double frames;

	if (lane_plan(&shape, settings, why, sizeof(why)) < 0)
		return;
	if (*latency_samples == 0 && lane_create(&lane, settings) == 0) {
		*latency_samples = lane_latency(lane) / shape.decimation;
		lane_destroy(lane);
	}
	frames = *latency_samples * shape.decimation;
	if (frames > (double)l->hold)
		l->hold = (uint64_t)ceil(frames);
}

static int create_outside(struct listener *l, unsigned channel)
{
	struct lane_settings settings = {
		.config = l->config, .channel = channel, .format = l->settings.intake->format, .rate = l->rate,
	};

	for (unsigned k = 0; k < lanes_outside(l->config); k++) {
		int ret;

		lane_outside(&settings, k);
		ret = lane_create(&l->lane[l->lanes], &settings);
		if (ret < 0)
			return ret;
		if (lane_latency(l->lane[l->lanes]) > (double)l->hold)
			l->hold = (uint64_t)ceil(lane_latency(l->lane[l->lanes]));
		if (lane_startup(l->lane[l->lanes]) > (double)l->startup)
			l->startup = (uint64_t)ceil(lane_startup(l->lane[l->lanes]));
		l->lanes++;
	}
	return 0;
}

static int create_lanes(struct listener *l)
{
	double latency = 0;

	if (lanes_outside(l->config) > OUTSIDE_LANES) {
		log_error("watch.shadow_speed_min_mps = %g to shadow_speed_max_mps = %g is too wide to watch outside vigils",
		          l->config->watch.speed_min_mps, l->config->watch.speed_max_mps);
		return -EINVAL;
	}
	for (unsigned c = 0; c < l->config->channels; c++) {
		struct lane_settings settings = {
			.config = l->config, .channel = c, .format = l->settings.intake->format, .rate = l->rate,
		};
		int ret;

		if (l->config->channel[c].measure != MEASURE_VOLTAGE)
			continue;
		ret = create_outside(l, c);
		if (ret < 0)
			return ret;
		for (size_t e = 0; e < l->config->expecteds; e++) {
			settings.expected = (int)e;
			measure_hold(l, &settings, &latency);
		}
	}
	l->hold += CHUNK;
	return 0;
}

static int create_loss_watch(struct listener *l, const struct frame_clock_settings *clock)
{
	struct loss_watch_settings loss = {
		.phase = {
			.rate = l->rate, .rate_tolerance = clock->rate_tolerance, .pulse_sigma_s = clock->pulse_sigma_s,
		},
		.clock = l->clock,
	};

	return loss_watch_create(&l->loss, &loss);
}

static int create_clock(struct listener *l)
{
	struct frame_clock_settings clock = {
		.rate = l->rate, .rate_tolerance = l->config->clock.card_tolerance, .pulse_sigma_s = 50e-9,
	};
	struct pulse_settings pulse = { .rate = l->rate };
	int ret;

	l->pulse_channel = -1;
	for (size_t k = 0; k < l->config->channels; k++) {
		const struct config_channel *c = &l->config->channel[k];

		if (c->measure != MEASURE_PULSE)
			continue;
		l->pulse_channel = (int)k;
		pulse.width_s = c->pulse.width_s;
		pulse.polarity = c->polarity;
		clock.pulse_sigma_s = c->pulse.jitter_s;
		clock.pulse_delay_s = c->pulse.delay_s;
		clock.pulse_delay_sigma_s = c->pulse.delay_sigma_s;
		ret = pulse_detector_create(&l->pulses, &pulse);
		if (ret < 0)
			return ret;
	}
	ret = frame_clock_create(&l->clock, &clock);
	if (ret == 0 && l->pulses)
		ret = create_loss_watch(l, &clock);
	return ret;
}

static int create_meter(struct listener *l)
{
	struct meter_settings meter;
	int ret;

	if (!l->settings.glance)
		return 0;
	ret = levels_settings(&meter, l->config, l->settings.intake);
	return ret < 0 ? ret : meter_create(&l->meter, &meter);
}

int listener_create(struct listener **out, const struct listener_settings *settings)
{
	struct listener *l = calloc(1, sizeof(*l));
	int ret = -ENOMEM;

	if (!l)
		return -ENOMEM;
	l->settings = *settings;
	l->config = settings->config;
	l->rate = settings->intake->rate;
	l->frames = malloc(CHUNK * frame_bytes(settings->intake->format));
	l->samples = malloc(CHUNK * sizeof(*l->samples));       /* of doubles; of floats for the strip chart */
	if (!l->frames || !l->samples)
		goto destroy;
	ret = create_clock(l);
	if (ret < 0)
		goto destroy;
	ret = create_lanes(l);
	if (ret < 0)
		goto destroy;
	l->settle = (uint64_t)(settle_s * l->rate) + 1;
	strip_create(&l->strip, l->rate);
	ret = create_meter(l);
	if (ret < 0)
		goto destroy;
	vigils_create(l);
	*out = l;
	return 0;
destroy:
	listener_destroy(l);
	return ret;
}

void listener_destroy(struct listener *l)
{
	if (!l)
		return;
	for (size_t k = 0; k < l->lanes; k++)
		lane_destroy(l->lane[k]);
	pulse_detector_destroy(l->pulses);
	loss_watch_destroy(l->loss);
	meter_destroy(l->meter);
	frame_clock_destroy(l->clock);
	free(l->samples);
	free(l->frames);
	free(l);
}

/* A contact is planned for at the latest `hold` after it, and `pre_s` before it is wanted. */
uint64_t listener_lookback(const struct listener *l)
{
	if (!l->config->watch.outside)
		return CHUNK;
	/* The hold is more than 16 T_F of the slowest lane, which is wanted at the least: see announce(). */
	return l->hold + (uint64_t)fmax(l->config->keep.pre_s * l->rate, (double)l->hold) + 2 * CHUNK;
}

/* A plan is final only when contacts at its very end have settled. */
uint64_t listener_backlog(const struct listener *l)
{
	return listener_lookback(l) + l->hold + l->settle + l->startup + 4 * CHUNK;
}

void listener_attach(struct listener *l, struct ring_reader *reader)
{
	l->settings.reader = reader;
}

uint64_t listener_heard(const struct listener *l)
{
	return atomic_load(&l->heard);
}

unsigned listener_contacts(const struct listener *l)
{
	return atomic_load(&l->contacts);
}

unsigned long long listener_beats(const struct listener *l)
{
	return atomic_load(&l->beats);
}

const struct latency *listener_latency(const struct listener *l)
{
	return &l->latency;
}

uint64_t listener_lost(const struct listener *l)
{
	return atomic_load(&l->lost);
}

/* ------------------------------------------------------------------ the thread */

/* What the data say of their own time, before the first frame. */
static void label_origin(struct listener *l)
{
	const struct intake *intake = l->settings.intake;

	if (intake->origin.quality == TIME_FREE)
		return;
	frame_clock_add_label(l->clock, 0, intake->origin.when, intake->origin.sigma_s, false, intake->origin.quality);
	l->dated = true;
}

/* Labels from before the host's clock was set are no witnesses any more. */
static void heed_host_clock(struct listener *l)
{
	double step = host_clock_step(&l->host);

	if (step == 0)
		return;
	log_notice("this computer's clock was set %s by %.3f s%s", step > 0 ? "forward" : "back", fabs(step),
	           l->dated ? "; times are taken from it as it stands now" : "");
	frame_clock_clock_was_set(l->clock);
}

/* From now on it is known what time it is, and for what was recorded before as well. */
static void first_label(struct listener *l)
{
	frame_clock_solve(l->clock);    /* the first segment is named by it */
	plans_host_known(l->settings.plans);
}

static void label_stamps(struct listener *l)
{
	struct stamp stamp;
	struct tai when;
	double sigma;

	while (acquire_stamp(l->settings.acquire, &stamp)) {
		if (l->loss)
			loss_watch_add_stamp(l->loss, (double)stamp.frame, stamp.host_ns, stamp.late);
		if (l->settings.intake->origin.quality != TIME_FREE)
			continue;       /* a replay: the data's own time counts */
		heed_host_clock(l);
		if (!host_clock_at(stamp.host_ns, l->config->clock.host_sigma_s, &when, &sigma))
			continue;
		frame_clock_add_label(l->clock, (double)stamp.frame, when, sigma, stamp.late, TIME_HOST);
		if (!l->dated)
			first_label(l);
		l->dated = true;
	}
}

static void add_edge(struct listener *l, const struct pulse_edge *edge)
{
	if (l->meter)
		meter_pulse(l->meter, edge);
	if (loss_watch_add_edge(l->loss, edge->frame, edge->sigma_frames))
		l->solved = 0;          /* a loss was found: solve now */
}

static void find_pulses(struct listener *l, size_t count, uint64_t first)
{
	struct pulse_edge edge[16];
	size_t n;

	if (l->pulse_channel < 0)
		return;
	frames_to_double(l->samples, l->frames, l->settings.intake->format,
	                 l->config->channel[l->pulse_channel].column, count);
	do {
		n = pulse_detector_execute(l->pulses, l->samples, count, first, edge, 16);
		for (size_t k = 0; k < n; k++)
			add_edge(l, &edge[k]);
		first += count;
		count = 0;
	} while (n == 16);
}

/* Often while the clock is young, then every ten seconds. */
static void solve_clock(struct listener *l, bool now)
{
	double since = (double)(l->next_frame - l->solved) / l->rate, age = (double)l->next_frame / l->rate;

	if (!now && since < (age < 60 ? 1 : 10))
		return;
	l->solved = l->next_frame;
	frame_clock_solve(l->clock);
	vigils_refresh(l);
}

static void handle_gap(struct listener *l, const struct ring_news *news)
{
	if (news->overrun) {
		atomic_fetch_add(&l->lost, news->overrun);
		log_error("the signal thread was too slow: %llu frames not looked at", (unsigned long long)news->overrun);
	}
	if (news->lost > news->overrun) {
		double sigma = gap_sigma_frames(l->rate, news->lost - news->overrun);

		frame_clock_add_gap(l->clock, (double)news->first, sigma);
		if (l->loss)
			loss_watch_add_gap(l->loss, (double)news->first, sigma);
	}
	if ((double)news->lost > fill_s * l->rate)
		plans_break(l, l->next_frame, news->first);
}

/* Without any label no vigil can be kept: said once, when labels had their time to come. */
static void say_undated(struct listener *l, bool now)
{
	if (l->dated || l->undated_said || !l->config->expecteds || (!now && (double)l->next_frame < patience_s * l->rate))
		return;
	l->undated_said = true;
	log_warning("nothing says when these samples were taken (%s): the expected contacts cannot be placed%s",
	            l->settings.intake->real_time ? "this computer's clock says it is not synchronised; clock.host_sigma_s "
	            "would trust it all the same" : "the intake's start_utc would",
	            l->config->watch.outside ? ", any contact is watched for" : "");
}

static void hear(struct listener *l, size_t count, const struct ring_news *news)
{
	struct contact contact[SIGHTINGS];

	if (news->lost)
		handle_gap(l, news);
	label_stamps(l);
	find_pulses(l, count, news->first);
	for (size_t k = 0; k < l->lanes; k++)
		sightings_add(l, contact, lane_execute(l->lane[k], l->frames, count, news->first, contact, SIGHTINGS));
	vigils_execute(l, l->frames, count, news->first);
	if (l->meter)
		meter_execute(l->meter, l->frames, count, news->first);
	if (l->settings.glance)
		strip_execute(&l->strip, l->settings.glance, l->config, l->settings.intake->format, l->frames, count,
		              news->first, (float *)l->samples);
	l->next_frame = news->first + count;
	say_undated(l, false);
	solve_clock(l, false);
}

/* A vigil, or a contact or recording not finished: no time for changes. */
static bool is_busy(const struct listener *l)
{
	bool busy = l->sightings > 0;

	for (size_t k = 0; k < l->plans; k++)
		busy |= l->plan[k]->reason != REASON_ALL;
	for (size_t k = 0; k < l->config->expecteds; k++)
		busy |= l->vigil[k].state == VIGIL_OPEN;
	return busy;
}

static void show_vigils(const struct listener *l, struct glance_view *v)
{
	v->open = v->next = -1;
	for (int k = 0; k < (int)l->config->expecteds; k++) {
		const struct vigil *vigil = &l->vigil[k];

		if (vigil->state == VIGIL_OPEN)
			v->open = k;
		if (vigil->state == VIGIL_WAITING && l->dated &&
		    (v->next < 0 || tai_difference(vigil->begin, v->next_begin) < 0)) {
			v->next = k;
			v->next_begin = vigil->begin;
		}
	}
}

void listener_show_busy(struct listener *l, bool busy)
{
	struct glance *glance = l->settings.glance;

	if (!glance || busy == l->busy)
		return;
	l->busy = busy;
	pthread_mutex_lock(&glance->mutex);
	glance->view.busy = busy;
	pthread_mutex_unlock(&glance->mutex);
}

static void show(struct listener *l)
{
	struct glance *glance = l->settings.glance;
	struct glance_view *v = &glance->view;

	listener_show_busy(l, is_busy(l));
	if ((double)(l->next_frame - l->shown) < show_every_s * l->rate)
		return;
	l->shown = l->next_frame;
	pthread_mutex_lock(&glance->mutex);
	v->frame = l->next_frame;
	v->bin_s = (double)l->strip.frames / l->rate;
	frame_clock_at(l->clock, (double)l->next_frame, &v->now);
	frame_clock_summarise(l->clock, &v->clock);
	show_vigils(l, v);
	if ((double)(l->next_frame - l->metered) >= l->rate) {
		meter_read(l->meter, &v->levels);
		v->metered = true;
		l->metered = l->next_frame;
	}
	pthread_mutex_unlock(&glance->mutex);
}

/* How long after the newest frame was taken all of it has been looked at. */
static void time_it(struct listener *l)
{
	int64_t taken;

	if (l->settings.intake->real_time && acquire_frame_time(l->settings.acquire, l->next_frame, &taken))
		latency_add(&l->latency, host_now() - taken);
}

static void decide(struct listener *l, bool ended)
{
	uint64_t lookback = listener_lookback(l), decided = 0;

	if (ended)
		decided = UINT64_MAX;
	else if (l->next_frame > lookback + l->startup)         /* until then the lanes have not spoken at all */
		decided = l->next_frame - lookback;
	plans_decide(l->settings.plans, decided, ended);
	atomic_store(&l->heard, l->next_frame);
}

static void finish(struct listener *l)
{
	struct contact contact[SIGHTINGS];
	struct pulse_edge edge[16];
	size_t n;

	label_stamps(l);
	say_undated(l, true);
	while (l->pulses && (n = pulse_detector_finish(l->pulses, edge, 16)) > 0)
		for (size_t k = 0; k < n; k++)
			add_edge(l, &edge[k]);
	if (l->loss)
		loss_watch_finish(l->loss);
	solve_clock(l, true);
	for (size_t k = 0; k < l->lanes; k++)
		sightings_add(l, contact, lane_finish(l->lane[k], contact, SIGHTINGS));
	vigils_update(l, true);
	sightings_update(l, true);
	plans_update(l, true);
	vigils_destroy(l);
	decide(l, true);
}

void *listener_run(void *argument)
{
	struct listener *l = argument;
	const struct timespec moment = { .tv_nsec = l->settings.idle_ns };
	struct ring_news news;

	label_origin(l);
	frame_clock_solve(l->clock);
	for (;;) {
		size_t count = ring_read(l->settings.reader, l->frames, CHUNK, &news);

		atomic_fetch_add_explicit(&l->beats, 1, memory_order_relaxed);
		if (count == 0 && news.ended)
			break;
		if (count == 0) {
			nanosleep(&moment, NULL);
			continue;
		}
		hear(l, count, &news);
		vigils_update(l, false);
		sightings_update(l, false);
		plans_update(l, false);
		decide(l, false);
		time_it(l);
		if (l->settings.glance)
			show(l);
	}
	finish(l);
	return NULL;
}
