/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_SOUND_MIXER_H
#define LIMBWATCH_SOUND_MIXER_H

#include "limbwatch/intake.h"
#include "sound_wishes.h"

/* What the mixer of a sound card has to be before its samples are worth keeping. */

/*
 * A gain that follows the signal would make a star's light fade in and out by itself.  In the order of the choices of
 * the setting automatic_gain.
 */
enum automatic_gain { AUTOMATIC_GAIN_SWITCH_OFF, AUTOMATIC_GAIN_REFUSE, AUTOMATIC_GAIN_ALLOW };

/**
 * Sets the wishes in their order, deals with automatic gain, and puts what it found then of all that concerns recording
 * into intake->control: the wishes first, then by name, at most INTAKE_CONTROLS.  Main thread.
 *
 * @param intake  its name is that of the card in sentences
 * @param card    its number; negative: a PCM without a card, which cannot have wishes
 * @return 0; -EINVAL when a wish does not fit the card or the automatic gain stays on, another -errno when the card
 *         does not answer, after a sentence
 */
int sound_mixer_apply(struct intake *intake, int card, const struct sound_wish *wishes, int count, enum automatic_gain gain);

/** Whether a control of that name is an automatic gain when it is a switch. */
bool sound_mixer_is_automatic_gain(const char *name);

#endif
