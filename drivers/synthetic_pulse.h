/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_SYNTHETIC_PULSE_H
#define LIMBWATCH_SYNTHETIC_PULSE_H

#include "synthetic_card.h"

/* The second column of the synthetic intake: one-second pulses with band-limited edges, as an anti-alias filter leaves them. */
struct synthetic_pulse;

enum { SYNTHETIC_PULSE_RATE = 1000 };   /* frames per second, the least */

struct synthetic_pulse_settings {
	double fraction_s;              /* of the second at which the first frame was taken */
	double height, width_s;         /* height negative: inverted */
	double ac_hz;                   /* corner of the AC coupling; 0: DC */
	double jitter_s, noise_rms;
	double missing, spurious;       /* probabilities, each second */
	unsigned long seed;
};

/** Main thread.  `card` must live as long.  @return 0; -ENOMEM. Caller destroys. */
int  synthetic_pulse_create(struct synthetic_pulse **out, const struct synthetic_card *card,
                            const struct synthetic_pulse_settings *settings);
void synthetic_pulse_destroy(struct synthetic_pulse *pulse);    /* NULL is fine */

/** Acquisition thread.  The frames from `first` on, which follow those of the last call; at most 4096 of them. */
void synthetic_pulse_execute(struct synthetic_pulse *pulse, uint64_t first, double *out, size_t count);

#endif
