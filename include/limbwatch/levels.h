/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_LEVELS_H
#define LIMBWATCH_LEVELS_H

#include <stddef.h>
#include <stdio.h>
#include "limbwatch/config.h"
#include "limbwatch/meter.h"

/* A meter's report as one JSON line and back, as a table for the observer, and what is wrong in words. */

/** Where the recorder shows its state unless state.socket says otherwise: Unix stream socket, JSON lines. */
#define LEVELS_SOCKET "/run/limbwatch/state.sock"

enum {
	LEVELS_ADVICE = 160, LEVELS_ADVICES = 32,
	LEVELS_MEMORY_S = 60,           /* how long live noise is remembered */
};

/**
 * The configuration's channels for a meter on this intake; memory_s is 60, in a replay 0.
 *
 * @param out  names are lent by the configuration
 * @return 0; -EINVAL with a sentence when a channel's column is not there
 */
int levels_settings(struct meter_settings *out, const struct config *config, const struct intake *intake);

/**
 * {"what":"levels", ...} on one line, without a newline: amplitudes over full scale as ..._fs, what is not known is null.
 *
 * @return the caller's to free; NULL: no memory
 */
char *levels_json(const struct meter_report *report);

/**
 * Reads such a line back.  Unknown members are passed over, missing ones are not known.
 *
 * @param why  what is wrong, a clause; may be NULL
 * @return 0; -ENOMSG: a sound line about something else; -EINVAL: not understood, *out is untouched
 */
int levels_parse(struct meter_report *out, const char *line, size_t size, char *why, size_t why_size);

/** What to do about it, a short sentence each, the channel's name first.  @return sentences, at most `max` */
size_t levels_advise(const struct meter_report *report, char (*out)[LEVELS_ADVICE], size_t max);

/** The table, within 100 columns, "--" where nothing is known; `title` is its first line. */
void levels_print(FILE *out, const char *title, const struct meter_report *report);

#endif
