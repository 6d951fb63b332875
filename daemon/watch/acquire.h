/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef ACQUIRE_H
#define ACQUIRE_H

#include <stdatomic.h>
#include <stdbool.h>
#include <stdint.h>
#include "limbwatch/intake.h"
#include "limbwatch/ring.h"

/* A block's stamp on its way from the acquisition thread to the signal thread. */
struct stamp {
	uint64_t frame;
	int64_t host_ns;                /* CLOCK_MONOTONIC */
	bool late;
};

enum { STAMPS = 256 };                  /* at most one a second is kept: minutes of stall */

/* The acquisition thread: intake to ring, nothing else. */
struct acquire {
	/* Set by the main thread before the start. */
	struct intake *intake;
	struct ring *ring;
	atomic_bool *stop;
	/* One producer, one consumer. */
	struct stamp stamp[STAMPS];
	atomic_uint stamps_written, stamps_read;
	/* Towards the main thread. */
	atomic_int result;              /* 0 while running; -ENODATA: the data ended; -ECANCELED: stopped; other -errno */
	atomic_ullong lost;             /* frames in the intake's own gaps */
};

/** Thread function; argument: struct acquire. */
void *acquire_run(void *acquire);
/** Signal thread: the next stamp. @return false: none */
bool acquire_stamp(struct acquire *acquire, struct stamp *out);

#endif
