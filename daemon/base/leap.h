/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_BASE_LEAP_H
#define LIMBWATCH_BASE_LEAP_H

#include <stddef.h>
#include <stdint.h>

/* Private to tai.c and leap.c: TAI - UTC is `offset` from the Unix second `utc` on. */
struct leap_row { int64_t utc; int offset; };

struct leap_table {
	const struct leap_row *row;     /* ascending; row 0 is 1972-01-01, 10 s */
	size_t count;
};

/** The table in force, ERFA's built-in one until leap_seconds_open(); lives until that is called again. */
struct leap_table leap_table(void);

#endif
