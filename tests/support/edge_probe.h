/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef EDGE_PROBE_H
#define EDGE_PROBE_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

/* Bare pulse edges of a card that misbehaves, with the truth: for test_pulse_phase.c, test_loss.c and bench_clock.c. */

enum { PROBE_LOSSES = 256, PROBE_EDGES = 8192 };

struct probe_loss { double at_s, frames; };     /* true second; frames missing (negative: given twice) */

struct probe_card {
	double rate, seconds;
	double error_ppm, drift_ppm_per_hour, wander_ppm;       /* wander: after an hour, rms */
	double jitter_s, noise_frames;  /* of a pulse; of an edge in the samples */
	double missing, spurious;       /* probability each second */
	double moved_at_s, moved_s;     /* the pulse itself comes later by moved_s from then on */
	double outage_from_s, outage_to_s;      /* no pulses */
	double free_ppm;                /* during [moved_at_s - 60 s, moved_at_s] the pulse runs free with this error */
	unsigned losses;
	struct probe_loss loss[PROBE_LOSSES];
	unsigned long seed;
};

struct probe_edge { double frame; bool pulse; double second; };

struct probe_run {
	const struct probe_card *card;
	size_t edges;
	struct probe_edge edge[PROBE_EDGES];
	size_t seconds;
	double *counted;                /* frames the card has taken, lost ones too, at each whole true second */
};

/** Makes the edges. The caller releases. */
void probe_run_make(struct probe_run *run, const struct probe_card *card);
void probe_run_release(struct probe_run *run);
/** Number the card gives to the frame taken at true time t. */
double probe_frame(const struct probe_run *run, double t);

#endif
