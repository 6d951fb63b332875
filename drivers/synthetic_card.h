/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_SYNTHETIC_CARD_H
#define LIMBWATCH_SYNTHETIC_CARD_H

#include <stddef.h>
#include <stdint.h>

/* The wrong clock of the synthetic intake's card: true seconds after the start to frame numbers and back. */
struct synthetic_card {
	double rate;                    /* nominal, frames per second */
	size_t seconds;
	double *second_frame;           /* frame number at whole true seconds, seconds + 1 of them; straight between */
};

struct synthetic_card_settings {
	double rate, duration_s;
	double error_ppm, drift_ppm_per_hour, wander_ppm;       /* wander: rms of the random walk after an hour */
	unsigned long seed;
};

/** Main thread. @return 0; -ENOMEM. The caller releases. */
int  synthetic_card_init(struct synthetic_card *out, const struct synthetic_card_settings *settings);
void synthetic_card_release(struct synthetic_card *card);

/** Fractional frame number at true time t; beyond the ends the clock goes on at its last rate. */
double synthetic_card_frame(const struct synthetic_card *card, double t);
/** The true second in which frame n >= 0 is taken. */
size_t synthetic_card_second(const struct synthetic_card *card, double n);
/** True time of frame n >= 0, seconds after the start. */
double synthetic_card_time(const struct synthetic_card *card, double n);

#endif
