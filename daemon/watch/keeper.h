/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef KEEPER_H
#define KEEPER_H

#include <pthread.h>
#include <stdatomic.h>
#include <stdbool.h>
#include "limbwatch/config.h"
#include "limbwatch/disk.h"
#include "limbwatch/intake.h"
#include "limbwatch/ring.h"
#include "plan.h"

/* Contacts on their way to the main thread, with the file that holds them. */
struct delivery {
	struct contact contact;
	char segment[4096];             /* empty: the disk refused it */
	struct delivery *next;
};

/* The keeper thread: carries out plans, ring to disk. */
struct keeper {
	/* Set by the main thread before the start. */
	const struct config *config;
	const struct disk *disk;
	const struct intake *intake;
	struct ring_reader *reader;
	struct plans *plans;
	long idle_ns;                   /* how long to wait when there is nothing to do */
	const struct latency *to_ring, *to_trigger;
	/* Towards the main thread. */
	pthread_mutex_t mutex;
	struct delivery *delivery, **last;
	atomic_int trouble;             /* first -errno of the disk, 0: none */
	atomic_int refusing;            /* -errno while the disk takes nothing, 0: it does, or has not been asked */
	atomic_bool writing;            /* a segment is open */
	atomic_llong free_bytes;        /* at the last look; -1: not looked yet */
	atomic_uint segments;           /* closed */
	atomic_ullong lost;             /* frames the keeper was too slow for */
};

int  keeper_open(struct keeper *keeper);
void keeper_close(struct keeper *keeper);
/** Thread function; argument: struct keeper.  Ends when the plans have ended and are carried out. */
void *keeper_run(void *keeper);
/** Main thread: the oldest contact not yet delivered, the caller's to free; NULL: none. */
struct delivery *keeper_deliver(struct keeper *keeper);

#endif
