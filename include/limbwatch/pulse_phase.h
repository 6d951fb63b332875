/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_PULSE_PHASE_H
#define LIMBWATCH_PULSE_PHASE_H

#include <stdbool.h>
#include <stdint.h>

/*
 * Frames that a card or a USB host lost, or gave twice, without saying so: the pulses come early, or late, by one same amount from
 * one instant on.
 *
 * A card can only lose whole frames.  A jump that is no whole number of frames, where the pulses are sharp enough to tell, or that
 * the stamps of the blocks contradict, is the pulse's own: a receiver that changes its lock, or a converter of rates in between.
 *
 * Not seen: a loss of exactly a number of seconds, one below half a frame or below six sigma of a pulse, and what happens before the
 * pulses are found (five of them in a row) or between a declared gap of uncertain length and the fifth pulse after it.
 */
struct pulse_phase;

struct pulse_phase_settings {
	double rate;                    /* frames per second, nominal */
	double rate_tolerance;          /* how far the true rate may be off, relative */
	double pulse_sigma_s;           /* jitter of one pulse, one sigma; more than that is learnt */
};

struct phase_loss {
	uint64_t after, before;         /* somewhere between the last good edge and the first shifted one */
	double frames, sigma_frames;    /* positive: missing; negative: too many.  sigma 0: a whole number, known for certain */
	bool pulse_moved;               /* no frame was lost: the pulse itself jumped, it comes `frames` earlier */
};

enum phase_verdict {
	PHASE_UNKNOWN,                  /* the pulses are not found yet: nothing can be said of this edge */
	PHASE_KEPT,                     /* a pulse in its place */
	PHASE_OFF,                      /* out of its place: a spurious edge, or the first ones after a loss */
	PHASE_JUMPED,                   /* this edge proves that those before it, back to `before`, were pulses after a jump */
};

/** -EINVAL when a setting is out of range. Caller destroys. */
int  pulse_phase_create(struct pulse_phase **out, const struct pulse_phase_settings *settings);
void pulse_phase_destroy(struct pulse_phase *phase);

/** Signal thread.  No allocation.  An edge; in ascending order of frames. @param loss  filled with PHASE_JUMPED only */
enum phase_verdict pulse_phase_add_edge(struct pulse_phase *phase, double frame, double sigma_frames, struct phase_loss *loss);
/** At the end of the data: two edges that agree on a whole number of frames will do. @return PHASE_JUMPED with *loss, or PHASE_OFF */
enum phase_verdict pulse_phase_finish(struct pulse_phase *phase, struct phase_loss *loss);
/** Signal thread.  Frames were lost just before `frame` and that was said; their number is known to +- sigma_frames. */
void pulse_phase_add_gap(struct pulse_phase *phase, double frame, double sigma_frames);
/**
 * Signal thread.  When a frame was taken (CLOCK_MONOTONIC); `late`: an upper limit.  With stamps a loss is known beyond a second,
 * and told from a jump of the pulse.
 */
void pulse_phase_add_stamp(struct pulse_phase *phase, double frame, int64_t host_ns, bool late);

#endif
