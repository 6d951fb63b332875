/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef SCREEN_H
#define SCREEN_H

#include <stdbool.h>

/*
 * Standard output as a block of text that is shown again and again: in place on a terminal, one after another elsewhere.
 * One for the whole program, because the terminal is.
 */

/** The cursor is hidden from now on, also after a stop by Ctrl-Z and back. */
void screen_open(void);
/** Shows a text of whole lines, cut to the terminal's size. */
void screen_paint(const char *text);
/** The terminal as it was, the last text standing, the cursor below it. */
void screen_close(void);
/** Whether blocks are shown in place. */
bool screen_in_place(void);

#endif
