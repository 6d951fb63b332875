/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef WAVE_MEND_H
#define WAVE_MEND_H

#include <stdint.h>
#include "limbwatch/disk.h"

/**
 * Makes the header of an open WAV file agree with the data that are there: cuts an incomplete frame off, writes the sizes, syncs.
 *
 * @return frames; -EILSEQ: no header to go by; other -errno
 */
int64_t wave_mend(const struct disk *disk, int fd);

#endif
