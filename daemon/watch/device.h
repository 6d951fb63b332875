/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef DEVICE_H
#define DEVICE_H

#include <pthread.h>
#include <stdbool.h>
#include <stdint.h>
#include "acquire.h"
#include "limbwatch/config.h"

/*
 * The intake as a device that may be missing, fail, hang, fall silent and come back: a state, not a failure.  The main
 * thread looks after it; all functions but device_face() are the main thread's.
 */
enum device_state {
	DEVICE_MISSING,         /* not opened yet, or lost: tried again and again */
	DEVICE_RUNNING,
	DEVICE_ENDED,           /* nothing more will come; see `result` */
};

struct device {
	const struct config *config;
	atomic_bool *stop;
	enum device_state state;
	struct intake *intake;          /* NULL while missing */
	struct session *session;        /* NULL unless running */
	pthread_t thread;
	struct acquire *acquire;        /* NULL until device_start */
	int result;                     /* once ended: as session.result */
	char why[512];                  /* one sentence on how it was lost or ended, or "" */
	unsigned losses;                /* times it was lost since the start */
	int realtime;                   /* 0: the thread runs at real-time priority; -errno: refused; 1: not asked for */
	/* Private. */
	bool known;                     /* opened once: format and rate are fixed */
	struct frame_format format;
	double rate;
	int64_t lost_ns, retry_ns, said_ns, gaps_said_ns;
	unsigned gaps_why;              /* reasons said in the last minute */
	int said_error;                 /* of the last try that was said */
	unsigned long long beats, frames, frames_at_start, gaps;
	int64_t beat_ns, frame_ns, watched_ns;
	pthread_mutex_t mutex;
	struct intake face;             /* a copy for other threads: no calls through it */
};

int  device_create(struct device *device, const struct config *config, atomic_bool *stop);
/** Stops, closes, and waits for the thread, unless it hangs. */
void device_destroy(struct device *device);

/**
 * Tries to open the intake once, when it is time for another try.
 *
 * @return 1: open; 0: not there (said, now and then); -errno: it never will be (said)
 */
int  device_find(struct device *device);
/** Starts the intake, found before, and the thread that reads it. `acquire` lives as long as the device. @return 0 or -errno (said) */
int  device_start(struct device *device, struct acquire *acquire);
/** Looks after it: several times a second. */
void device_watch(struct device *device);

/** Any thread: name, controls and the like as they are now. */
void device_face(struct device *device, struct intake *out);

#endif
