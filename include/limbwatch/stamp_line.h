/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_STAMP_LINE_H
#define LIMBWATCH_STAMP_LINE_H

#include <stdbool.h>
#include <stdint.h>
#include <time.h>

/** CLOCK_MONOTONIC, ns. */
static inline int64_t host_now(void)
{
	struct timespec now;

	clock_gettime(CLOCK_MONOTONIC, &now);
	return (int64_t)now.tv_sec * 1000000000 + now.tv_nsec;
}

/**
 * How long the computer has slept since it was switched on, ns: CLOCK_BOOTTIME - CLOCK_MONOTONIC, which stands still
 * meanwhile.  Time that goes on is host_now() + host_slept().
 *
 * @param late_ns  NULL, or by how much the answer may be too large, when the thread was interrupted between the readings
 */
static inline int64_t host_slept(int64_t *late_ns)
{
	struct timespec boot;
	const int64_t before = host_now();

	clock_gettime(CLOCK_BOOTTIME, &boot);
	if (late_ns)
		*late_ns = host_now() - before;
	return (int64_t)boot.tv_sec * 1000000000 + boot.tv_nsec - before;
}

/*
 * Frame numbers against the host's clock, as far as a device's stamps tell, which err late only: from it the length
 * of a gap follows.  Any thread; nothing is allocated.
 */
struct stamp_line {
	double rate;                    /* frames per second of host time: nominal, later measured */
	double nominal;
	bool started;
	struct stamp_point { uint64_t frame; int64_t ns; } first;     /* of this run, for the rate */
	uint64_t span_frame;            /* where the present span of a few seconds began */
	struct stamp_point recent, before;    /* least late of this span and of the one before */
};

void stamp_line_create(struct stamp_line *line, double rate);

/** Frame `frame` was taken at `ns` or somewhat before.  Frames come in increasing order. */
void stamp_line_add(struct stamp_line *line, uint64_t frame, int64_t ns);

/**
 * Frames lost when the device was stopped and started: `next` is the number the first frame after it would have had
 * without loss, `ns` when it was taken.  Begins a new run.
 *
 * @return to the nearest frame; at least 1, as a device is not started again without loss
 */
uint64_t stamp_line_gap(struct stamp_line *line, uint64_t next, int64_t ns);

/**
 * Frames per second of the last two to four seconds, good to a thousandth when stamps are late by some milliseconds.
 *
 * @return 0 when there is less than one second to go by
 */
double stamp_line_recent_rate(const struct stamp_line *line, uint64_t frame, int64_t ns);

#endif
