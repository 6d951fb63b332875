/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef GLANCE_H
#define GLANCE_H

#include <pthread.h>
#include "limbwatch/config.h"
#include "limbwatch/frame_clock.h"
#include "limbwatch/meter.h"

/* What the signal thread lets others see of it: written now and then, copied by the main thread. */

enum { STRIP_BINS = 64 };               /* newest of the strip chart: more than six seconds */

struct strip_bin { uint64_t first; float mean, low, high; };    /* of one channel, full scale = 1 */

struct glance_view {
	uint64_t frame;                 /* after the newest heard */
	struct clock_reading now;       /* of that frame */
	struct clock_summary clock;
	int open, next;                 /* expected contacts: whose vigil is open, whose comes next; -1: none */
	bool busy;                      /* a vigil or an unfinished contact: no time for changes */
	struct tai next_begin;          /* of the next vigil */
	bool metered;                   /* levels stands for something */
	struct meter_report levels;     /* about once a second */
	uint64_t bins;                  /* of the strip chart since the start; bin k stands in strip[.][k % STRIP_BINS] */
	double bin_s;
	struct strip_bin strip[CONFIG_CHANNELS][STRIP_BINS];
};

struct glance {
	pthread_mutex_t mutex;
	struct glance_view view;
};

/* The strip chart's bins, gathered frame by frame: the signal thread's own. */
struct strip {
	uint64_t first, filled;         /* of the bin being filled: its first frame, frames so far */
	uint64_t frames;                /* in a bin */
	double sum[CONFIG_CHANNELS];
	float low[CONFIG_CHANNELS], high[CONFIG_CHANNELS];
};

void strip_create(struct strip *strip, double rate);
/** Adds one chunk of every channel; a gap begins a new bin.  `scratch`: room for count numbers. */
void strip_execute(struct strip *strip, struct glance *glance, const struct config *config, struct frame_format format,
                   const void *frames, size_t count, uint64_t first, float *scratch);

#endif
