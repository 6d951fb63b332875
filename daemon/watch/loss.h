/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LOSS_H
#define LOSS_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>
#include "limbwatch/frame_clock.h"
#include "limbwatch/pulse_phase.h"
#include "limbwatch/sidecar.h"

/*
 * Pulse edges on their way into the frame clock.  An edge off its place waits, in order, until it is known for a spurious one or for
 * the first after frames lost in silence; so the clock never takes a pulse for late that is not.  The signal thread's.
 */
struct loss_watch;

struct loss_watch_settings {
	struct pulse_phase_settings phase;
	struct frame_clock *clock;      /* lives as long */
};

/** Caller destroys. */
int  loss_watch_create(struct loss_watch **out, const struct loss_watch_settings *settings);
void loss_watch_destroy(struct loss_watch *watch);

/** An edge of the pulse channel, ascending.  Says what it proves and tells the clock. @return true: the clock should solve again now */
bool loss_watch_add_edge(struct loss_watch *watch, double frame, double sigma_frames);
/** Frames were lost before `frame` and that was said; the clock has been told. */
void loss_watch_add_gap(struct loss_watch *watch, double frame, double sigma_frames);
/** When a frame was taken, CLOCK_MONOTONIC, as the intake stamps it. */
void loss_watch_add_stamp(struct loss_watch *watch, double frame, int64_t host_ns, bool late);
/** At the end of the data: the edges that still wait go to the clock if they prove a loss. */
void loss_watch_finish(struct loss_watch *watch);
/** Losses that touch [from, to), oldest first; the newest 8192 are remembered. @return number given, at most `max` */
size_t loss_watch_losses(const struct loss_watch *watch, uint64_t from, uint64_t to, struct sidecar_loss *out, size_t max);

#endif
