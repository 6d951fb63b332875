/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include "levels_inner.h"
#include "limbwatch/command.h"
#include "limbwatch/log.h"

enum { CHUNK = 4096, EDGES = 16, READ_MS = 200 };

struct reader {
	const struct levels_run *run;
	const struct config *config;
	struct intake *intake;
	struct meter *meter;
	struct pulse_detector *pulses;  /* NULL without a pulse channel */
	unsigned pulse_column;
	bool live;                      /* shown every second; else once at the end */
	uint64_t frames;                /* read so far */
	double samples[CHUNK];
	char title[256];
};

static int create_pulses(struct reader *r)
{
	for (size_t k = 0; k < r->config->channels; k++) {
		const struct config_channel *c = &r->config->channel[k];
		struct pulse_settings settings = {
			.rate = r->intake->rate, .width_s = c->pulse.width_s, .polarity = c->polarity,
		};
		int ret;

		if (c->measure != MEASURE_PULSE)
			continue;
		r->pulse_column = c->column;
		ret = pulse_detector_create(&r->pulses, &settings);
		if (ret == -EINVAL)
			log_error("%s: at %g Hz no pulse can be timed (1 kHz to 10 MHz)", r->intake->name, r->intake->rate);
		return ret;
	}
	return 0;
}

static void pass_edges(struct reader *r, const struct pulse_edge *edge, size_t n)
{
	for (size_t k = 0; k < n; k++)
		meter_pulse(r->meter, &edge[k]);
}

static void find_pulses(struct reader *r, const void *frames, size_t count, uint64_t first)
{
	struct pulse_edge edge[EDGES];
	size_t n;

	frames_to_double(r->samples, frames, r->intake->format, r->pulse_column, count);
	do {
		n = pulse_detector_execute(r->pulses, r->samples, count, first, edge, EDGES);
		pass_edges(r, edge, n);
		first += count;
		count = 0;
	} while (n == EDGES);
}

static void finish_pulses(struct reader *r)
{
	struct pulse_edge edge[EDGES];
	size_t n;

	while (r->pulses && (n = pulse_detector_finish(r->pulses, edge, EDGES)) > 0)
		pass_edges(r, edge, n);
}

/* As much of the block as is still wanted. */
static void take_block(struct reader *r, const struct block *block)
{
	double wanted = r->run->seconds * r->intake->rate - (double)r->frames;
	size_t count = block->count, size = frame_bytes(r->intake->format), n;

	if (!r->live && (double)count > wanted)
		count = (size_t)fmax(0, ceil(wanted));
	for (size_t done = 0; done < count; done += n) {
		const char *from = (const char *)block->frames + done * size;

		n = count - done < CHUNK ? count - done : CHUNK;
		meter_execute(r->meter, from, n, block->first + done);
		if (r->pulses)
			find_pulses(r, from, n, block->first + done);
	}
	r->frames += count;
}

static void show(struct reader *r)
{
	struct meter_report report;

	meter_read(r->meter, &report);
	levels_show(r->run, r->title, &report);
}

/* How the data ended, in words. @return exit status */
static int say_end(struct reader *r, int result)
{
	char sentence[512] = "";

	if (r->intake->driver->explain)
		r->intake->driver->explain(r->intake, sentence, sizeof(sentence));
	if (result != -ENODATA) {
		log_error("%s", *sentence ? sentence : strerror(-result));
		return STATUS_FAILURE;
	}
	if (*sentence)
		log_warning("%s", sentence);
	if (!r->frames)
		log_error("%s holds no samples", r->intake->name);
	return *sentence || !r->frames ? STATUS_FAILURE : EXIT_SUCCESS;
}

static bool enough(const struct reader *r, double begun)
{
	return r->live ? levels_now() - begun >= r->run->seconds :
		(double)r->frames >= r->run->seconds * r->intake->rate;
}

static int loop(struct reader *r)
{
	double begun = levels_now(), due = begun + 1;
	struct block block;
	int ret = 0;

	while (!levels_stop) {
		ret = r->intake->driver->read(r->intake, &block, READ_MS);
		if (ret == -EINTR || levels_stop)
			ret = 0;
		if (ret < 0)
			break;
		if (ret > 0)
			take_block(r, &block);
		if (r->live && levels_now() >= due) {
			show(r);
			due += fmax(1, floor(levels_now() - due) + 1);
		}
		if (enough(r, begun)) {
			ret = 0;
			break;
		}
	}
	finish_pulses(r);
	if (r->frames && (!r->live || ret == -ENODATA))
		show(r);
	return ret < 0 ? say_end(r, ret) : EXIT_SUCCESS;
}

static int run_intake(struct reader *r)
{
	struct meter_settings settings;
	int ret = levels_settings(&settings, r->config, r->intake), status;

	if (ret < 0)
		return STATUS_USAGE;
	/* A pipe has no clock of its own, but is fed by a receiver that has. */
	r->live = r->intake->real_time || r->intake->driver == &intake_pipe;
	settings.memory_s = r->live ? LEVELS_MEMORY_S : 0;
	snprintf(r->title, sizeof(r->title), "limbwatch levels: %s", r->intake->name);
	ret = create_pulses(r);
	if (ret < 0)
		return ret == -EINVAL ? STATUS_USAGE : STATUS_FAILURE;
	ret = meter_create(&r->meter, &settings);
	if (ret < 0) {
		log_error("the meter for %s cannot be made: %s", r->intake->name, strerror(-ret));
		return STATUS_FAILURE;
	}
	if (r->intake->driver->start(r->intake) < 0)
		return STATUS_FAILURE;
	status = loop(r);
	r->intake->driver->stop(r->intake);
	return status;
}

int levels_run_intake(const struct levels_run *run, const struct config *config)
{
	struct reader *r = calloc(1, sizeof(*r));
	int status = STATUS_FAILURE, ret;

	if (!r) {
		log_error("no memory");
		return STATUS_FAILURE;
	}
	r->run = run;
	r->config = config;
	ret = config->driver->open(&r->intake, config->driver_values);
	if (ret == 0) {
		status = run_intake(r);
		config->driver->close(r->intake);
	} else if (ret == -EINVAL) {
		status = STATUS_USAGE;
	}
	pulse_detector_destroy(r->pulses);
	meter_destroy(r->meter);
	free(r);
	return status;
}
