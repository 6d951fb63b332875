/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LISTEN_H
#define LISTEN_H

#include <stdatomic.h>
#include "acquire.h"
#include "limbwatch/config.h"
#include "limbwatch/frame_clock.h"
#include "limbwatch/intake.h"
#include "limbwatch/ring.h"
#include "device.h"
#include "glance.h"
#include "plan.h"

/* The signal thread: series, detection, pulses, clock, and what is to be kept. */
struct listener;

struct listener_settings {
	const struct config *config;
	const struct intake *intake;    /* format, rate and the like: a copy, no calls through it */
	struct device *device;          /* for its name and controls as they are now; NULL: as in `intake` */
	struct acquire *acquire;
	struct glance *glance;          /* NULL: nobody looks */
	struct ring_reader *reader;
	struct plans *plans;
	long idle_ns;
};

/** Main thread. Builds what watches outside vigils. Caller destroys. */
int  listener_create(struct listener **out, const struct listener_settings *settings);
void listener_destroy(struct listener *listener);
/** How long a frame may be wanted after it was heard: until everything that could ask for it has spoken. Frames. */
uint64_t listener_lookback(const struct listener *listener);
/** How many frames must stay in the ring behind the newest for the keeper, besides the stall of the disk. */
uint64_t listener_backlog(const struct listener *listener);
/** The reader, which exists only after the ring whose size depends on the lookback. */
void listener_attach(struct listener *listener, struct ring_reader *reader);

/** Thread function; argument: struct listener.  Ends when the ring has ended. */
void *listener_run(void *listener);

/* Any thread. */
uint64_t listener_heard(const struct listener *listener);       /* frames */
unsigned listener_contacts(const struct listener *listener);
unsigned long long listener_beats(const struct listener *listener);     /* grows while the thread makes progress */
/** From a chunk's last sample until everything has looked at it: when a trigger in it would be out.  Live devices only. */
const struct latency *listener_latency(const struct listener *listener);
uint64_t listener_lost(const struct listener *listener);        /* frames it was too slow for */

#endif
