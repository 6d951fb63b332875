/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include "limbwatch/log.h"
#include "loss.h"

enum { WAITING = 64, REMEMBERED = 8192, SAID_AT_ONCE = 3 };

static const double longest_wait_s = 6;
static const double quiet_s = 600;              /* after a few sentences only one in so long, with the sum */

struct waiting { double frame, sigma_frames; };

struct loss_watch {
	struct loss_watch_settings settings;
	struct pulse_phase *phase;
	size_t waitings;
	struct waiting waiting[WAITING];
	size_t losses, room;
	struct sidecar_loss *loss;
	/* What has been said. */
	unsigned said, unsaid;
	double unsaid_frames, said_s;
};

int loss_watch_create(struct loss_watch **out, const struct loss_watch_settings *settings)
{
	struct loss_watch *w = calloc(1, sizeof(*w));
	int ret;

	if (!w)
		return -ENOMEM;
	w->settings = *settings;
	ret = pulse_phase_create(&w->phase, &settings->phase);
	if (ret < 0) {
		free(w);
		return ret;
	}
	*out = w;
	return 0;
}

void loss_watch_destroy(struct loss_watch *w)
{
	if (!w)
		return;
	pulse_phase_destroy(w->phase);
	free(w->loss);
	free(w);
}

/* ------------------------------------------------------------------ saying it */

/* Losses come in swarms: a few are said one by one, then they are summed up. @return false: not now */
static bool may_say(struct loss_watch *w, const struct phase_loss *loss)
{
	double now = (double)loss->before / w->settings.phase.rate;

	if (w->said >= SAID_AT_ONCE && now - w->said_s < quiet_s) {
		w->unsaid++;
		w->unsaid_frames += loss->pulse_moved ? 0 : loss->frames;
		return false;
	}
	w->said++;
	w->said_s = now;
	return true;
}

static void say(struct loss_watch *w, const struct phase_loss *loss)
{
	double rate = w->settings.phase.rate, from = (double)loss->after / rate, to = (double)loss->before / rate;
	double frames = fabs(loss->frames);
	char number[64];

	if (!may_say(w, loss))
		return;
	if (w->unsaid)
		log_warning("%u more jumps of the pulse's phase since the last warning, %.10g frames lost in all", w->unsaid,
		            w->unsaid_frames);
	w->unsaid = 0;
	w->unsaid_frames = 0;
	if (loss->pulse_moved) {
		log_warning("the pulse came %.4g ms %s from one second to the next between %.1f and %.1f s, and no frame was lost: "
		            "the receiver changed its lock, or something on the way converts the rate; times before or after are "
		            "off by that", 1e3 * frames / rate, loss->frames > 0 ? "earlier" : "later", from, to);
		return;
	}
	if (loss->sigma_frames > 0)
		snprintf(number, sizeof(number), "about %.10g +- %.2g frames", round(frames * 10) / 10, loss->sigma_frames);
	else
		snprintf(number, sizeof(number), "%.10g frame%s", frames, frames == 1 ? "" : "s");
	log_warning("the card %s %s %swithout saying so between %.1f and %.1f s (seen by the pulse's phase); times before and "
	            "after are right, between them only to %.3g ms", loss->frames > 0 ? "lost" : "gave", number,
	            loss->frames > 0 ? "" : "twice ", from, to, 500 * frames / rate);
}

/* ------------------------------------------------------------------ keeping it */

static bool room_for_loss(struct loss_watch *w)
{
	size_t room = w->room ? 2 * w->room : 16;
	struct sidecar_loss *grown;

	if (w->losses < w->room)
		return true;
	if (w->losses == REMEMBERED) {
		memmove(w->loss, w->loss + REMEMBERED / 4, (REMEMBERED - REMEMBERED / 4) * sizeof(*w->loss));
		w->losses -= REMEMBERED / 4;
		return true;
	}
	grown = realloc(w->loss, room * sizeof(*grown));
	if (!grown)
		return false;
	w->loss = grown;
	w->room = room;
	return true;
}

size_t loss_watch_losses(const struct loss_watch *w, uint64_t from, uint64_t to, struct sidecar_loss *out, size_t max)
{
	size_t given = 0;

	for (size_t k = 0; k < w->losses && given < max; k++)
		if (w->loss[k].before >= from && w->loss[k].after < to)
			out[given++] = w->loss[k];
	return given;
}

static void take(struct loss_watch *w, const struct phase_loss *loss)
{
	struct frame_clock *clock = w->settings.clock;

	say(w, loss);
	/* No number of frames is missing: each side is told by its own pulses. */
	if (loss->pulse_moved) {
		frame_clock_add_gap(clock, (double)loss->before, fabs(loss->frames));
		return;
	}
	if (!room_for_loss(w) || frame_clock_add_loss(clock, (double)loss->after, (double)loss->before, loss->frames,
	                                              loss->sigma_frames) < 0) {
		log_error("no memory to note that frames were lost in silence: times after it are off by %.3g ms",
		          1e3 * fabs(loss->frames) / w->settings.phase.rate);
		return;
	}
	w->loss[w->losses++] = (struct sidecar_loss){ loss->after, loss->before, loss->frames, loss->sigma_frames };
}

/* ------------------------------------------------------------------ edges */

static void release(struct loss_watch *w)
{
	for (size_t k = 0; k < w->waitings; k++)
		frame_clock_add_pulse(w->settings.clock, w->waiting[k].frame, w->waiting[k].sigma_frames);
	w->waitings = 0;
}

bool loss_watch_add_edge(struct loss_watch *w, double frame, double sigma_frames)
{
	struct phase_loss loss;
	enum phase_verdict verdict = pulse_phase_add_edge(w->phase, frame, sigma_frames, &loss);

	if (verdict == PHASE_JUMPED)
		take(w, &loss);
	/* No pulse in its place for long: clicks, or a new beginning, which the clock finds by itself. */
	if (w->waitings == WAITING || (w->waitings && frame - w->waiting[0].frame > longest_wait_s * w->settings.phase.rate))
		release(w);
	w->waiting[w->waitings++] = (struct waiting){ frame, sigma_frames };
	if (verdict != PHASE_OFF)
		release(w);
	return verdict == PHASE_JUMPED;
}

void loss_watch_add_gap(struct loss_watch *w, double frame, double sigma_frames)
{
	pulse_phase_add_gap(w->phase, frame, sigma_frames);
}

void loss_watch_add_stamp(struct loss_watch *w, double frame, int64_t host_ns, bool late)
{
	pulse_phase_add_stamp(w->phase, frame, host_ns, late);
}

/* Edges off their place that nothing confirms are left out: they would bend the end of the smooth. */
void loss_watch_finish(struct loss_watch *w)
{
	struct phase_loss loss;

	if (pulse_phase_finish(w->phase, &loss) != PHASE_JUMPED)
		return;
	take(w, &loss);
	release(w);
}
