/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_SPACE_H
#define LIMBWATCH_SPACE_H

#include <stdbool.h>
#include <stdint.h>
#include "limbwatch/disk.h"

/**
 * Makes room: removes the oldest unmarked segments (all parts and the sidecar; the ones whose sidecar lists contacts
 * are marked) until `need` bytes are free.  Each removal is said.
 *
 * @param may_remove_contacts  marked segments too, after all unmarked ones
 * @return 0; -ENOSPC when it is not enough; other -errno
 */
int space_make(const struct disk *disk, const char *folder, int64_t need, bool may_remove_contacts);

#endif
