/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_SOUND_WISHES_H
#define LIMBWATCH_SOUND_WISHES_H

#include <stddef.h>

/*
 * The setting `controls`, taken apart: "Mic Capture Volume = 60%, Input Source = Line, ADC Volume [1] = 12".  Of several
 * controls with one name the number in brackets tells which, as the card counts them.
 */
enum { SOUND_WISHES = 32 };

struct sound_wish {
	char name[44], value[64];       /* ALSA's own names have at most 43 bytes */
	int index;                      /* -1: not given */
};

/**
 * @param text  NULL or empty: no wish
 * @return how many; -EINVAL after a sentence with the part that is wrong
 */
int sound_wishes_parse(struct sound_wish wishes[SOUND_WISHES], const char *text);

#endif
