/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef ACQUIRE_H
#define ACQUIRE_H

#include <stdatomic.h>
#include <stdbool.h>
#include <stdint.h>
#include "limbwatch/intake.h"
#include "limbwatch/latency.h"
#include "limbwatch/ring.h"
#include "limbwatch/stamp_line.h"

/* A block's stamp on its way from the acquisition thread to the signal thread. */
struct stamp {
	uint64_t frame;
	int64_t host_ns;                /* CLOCK_MONOTONIC */
	bool late;
};

enum { STAMPS = 256 };                  /* at most one a second is kept: minutes of stall */

/* What the sessions of one run share: intake to ring, nothing else.  At most one session has it at a time. */
struct acquire {
	/* Set by the main thread before the start. */
	struct ring *ring;
	atomic_bool *stop;
	double rate;                    /* frames per second, nominal */
	/* The acquiring thread's own, handed on from session to session. */
	uint64_t next;                  /* number of the next frame, counting those lost */
	struct stamp_line line;
	int64_t stamped;                /* of the newest stamp passed on; INT64_MIN: none */
	/* One producer, one consumer. */
	struct stamp stamp[STAMPS];
	atomic_uint stamps_written, stamps_read;
	/* For any thread. */
	atomic_ullong lost;             /* frames in gaps */
	atomic_uint why;                /* enum block_flag of the gaps; whoever says them takes it away */
	atomic_ullong beats;            /* goes round with every read, successful or not */
	atomic_ullong frames;           /* passed to the ring */
	atomic_llong origin_ns;         /* CLOCK_MONOTONIC of frame 0, reckoned back from the newest block; INT64_MIN: unknown */
	struct latency latency;         /* from a block's last sample to the ring, where the device has stamps of its own */
};

void acquire_create(struct acquire *acquire, struct ring *ring, double rate, atomic_bool *stop);
/** How well the length of a gap is known, frames: stamps are late by up to a millisecond, rates are known to 30 ppm. */
double gap_sigma_frames(double rate, uint64_t lost);
/** Signal thread: the next stamp. @return false: none */
bool acquire_stamp(struct acquire *acquire, struct stamp *out);
/** Any thread: when frame `frame` was taken, CLOCK_MONOTONIC by the newest block. @return false: unknown */
bool acquire_frame_time(const struct acquire *acquire, uint64_t frame, int64_t *host_ns);

/*
 * One opening of the intake, read by one thread.  A driver that never returns from a read cannot be stopped: its session is
 * abandoned, memory and all, and what it would still deliver goes nowhere.
 */
struct session {
	struct acquire *acquire;
	struct intake *intake;          /* started */
	atomic_int grip;                /* enum grip */
	atomic_bool left;               /* the thread is out of the driver, its last word: the intake may be closed */
	atomic_int result;              /* 0 while running; -ENODATA: the data ended; -ECANCELED: stopped; other -errno */
};

/** Thread function; argument: struct session.  Ends the ring when nothing more can come from this intake. */
void *acquire_run(void *session);
/** Main thread: from now on the session's thread touches neither ring nor acquire. */
void acquire_abandon(struct session *session);

#endif
