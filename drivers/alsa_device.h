/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_ALSA_DEVICE_H
#define LIMBWATCH_ALSA_DEVICE_H

#include <alsa/asoundlib.h>
#include <stdbool.h>
#include "limbwatch/frames.h"
#include "limbwatch/settings.h"

/* The half of the alsa intake that opens a PCM and agrees with it on format, rate and buffer. */

/* Rows of its settings. */
enum {
	ALSA_DEVICE, ALSA_CARD, ALSA_PCM, ALSA_RATE, ALSA_CHANNELS, ALSA_FORMAT, ALSA_PERIOD, ALSA_BUFFER, ALSA_PACED,
	ALSA_CONTROLS, ALSA_AUTOMATIC_GAIN,
};

struct alsa_device {
	snd_pcm_t *pcm;
	char name[128];                 /* for sentences: as configured, or card and socket with the number of the day */
	int card;                       /* its number; -1: a plug-in without a card */
	long long card_pcm;             /* which of the card's PCMs, when it was looked up */
	struct frame_format format;
	double rate;                    /* frames per second, as the device states it */
	bool own_stamps;                /* the driver's, not a plug-in's */
	unsigned period_us, buffer_us;  /* as granted */
	snd_pcm_uframes_t block_frames; /* what to wait for and read at once */
};

/** While true, what alsa-lib has to say in this thread is dropped: the acquisition thread logs nothing. */
extern _Thread_local bool alsa_quiet;

/**
 * Opens and configures values[ALSA_DEVICE], or the PCM of values[ALSA_CARD], which is looked up now.  Main thread.
 *
 * @return 0; -errno after log_error, with nothing left open: -ENODEV, it is not there; -EBUSY, in use by another;
 *         -EINVAL, it cannot do what is asked, or there is no such name
 */
int alsa_device_open(struct alsa_device *device, const struct setting_value *values);

#endif
