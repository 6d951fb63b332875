/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef MEMORY_DISK_H
#define MEMORY_DISK_H

#include <stdbool.h>
#include <stddef.h>
#include "limbwatch/disk.h"

/*
 * A disk in memory that knows what has been synced: for power cuts at any call, and for calls that fail.  One folder, /d.
 * A file's content survives a power cut as it was at its last datasync; its name as it was at the last sync_folder.
 */
extern const struct disk disk_memory;

void memory_disk_reset(void);
/** Calls so far. */
unsigned memory_disk_calls(void);
/** Call number k (from 0) and, when `dead`, all after it fail with -error. */
void memory_disk_fail(unsigned k, int error, bool dead);
enum survival {
	SURVIVE_SYNCED,                 /* nothing else */
	SURVIVE_HALF,                   /* of unsynced appended data the first half too */
	SURVIVE_NAMES,                  /* names as they were, of content only what was synced */
};
enum { SURVIVALS = 3 };
/** Power comes back: what was not synced is gone, but for what `survival` says. */
void memory_disk_reboot(enum survival survival);
/** Content of a file, NULL: no such file. */
const void *memory_disk_file(const char *name, size_t *size);
/** Name of file k in the folder, NULL at the end. */
const char *memory_disk_name(size_t k);
void memory_disk_set_free(int64_t bytes);

#endif
