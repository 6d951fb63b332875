/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef BEXT_H
#define BEXT_H

#include <stdint.h>
#include "limbwatch/disk.h"
#include "limbwatch/tai.h"

/* The date in a Broadcast Wave's bext chunk (EBU Tech 3285, version 1). */

struct bext_origin {
	char date[10], time[8];         /* "2031-04-02", "01:23:45", without final zero */
	uint64_t reference;             /* frames since midnight */
};

void bext_origin(struct bext_origin *out, struct tai start, double rate);

/**
 * Writes the date into a closed file that has none, in place, and syncs.
 *
 * @param path  a file written by segment_create()
 * @param start of its first frame
 * @param rate  frames per second, of the reference
 * @return 0; -EILSEQ: no bext chunk where it should be; other -errno
 */
int bext_date(const struct disk *disk, const char *path, struct tai start, double rate);

#endif
