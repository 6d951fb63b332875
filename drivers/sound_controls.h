/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_SOUND_CONTROLS_H
#define LIMBWATCH_SOUND_CONTROLS_H

#include <alsa/asoundlib.h>
#include <stdbool.h>

/* The controls of one sound card's mixer, read and written by the name the card's driver gives them. */

enum { SOUND_VALUES = 128 };            /* the kernel has no more in one control */

struct sound_control {
	unsigned number;                /* for the kernel */
	char name[64];                  /* with its index in brackets when there are several: "ADC Volume [1]" */
	char plain_name[44];
	int index;
	bool several;
	snd_ctl_elem_type_t type;       /* BOOLEAN, INTEGER, INTEGER64 or ENUMERATED */
	unsigned count;                 /* values, one a channel as a rule */
	bool readable, writable;
	long long min, max;             /* of an enumerated one: its items */
};

struct sound_controls {
	snd_ctl_t *ctl;
	size_t count;
	struct sound_control *control;
};

/** Opens the mixer of a card and lists what is in use there.  @return 0 or -errno, silently; sound_controls_close it */
int  sound_controls_open(struct sound_controls *controls, int card);
void sound_controls_close(struct sound_controls *controls);

/** @return 0 or -errno */
int sound_control_read(const struct sound_controls *controls, const struct sound_control *c, long long values[SOUND_VALUES]);
int sound_control_write(const struct sound_controls *controls, const struct sound_control *c, const long long *values);

/** Name of an item of an enumerated control; empty when the card does not tell. */
void sound_control_item(const struct sound_controls *controls, const struct sound_control *c, long long item, char *out,
                        size_t size);

/** "23 of 0 to 39, 11.50 dB", "23/20 of 0 to 39", "on", "Line": as it stands in the sidecar. */
void sound_control_say(const struct sound_controls *controls, const struct sound_control *c, const long long *values,
                       char *out, size_t size);

#endif
