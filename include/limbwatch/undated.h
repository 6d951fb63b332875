/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_UNDATED_H
#define LIMBWATCH_UNDATED_H

#include <stdint.h>
#include "limbwatch/disk.h"
#include "limbwatch/sidecar.h"

/*
 * Recordings made before this computer knew what time it was: a board without a clock battery, a network that comes late.
 * Their sidecars hold the boot and CLOCK_MONOTONIC of the first frame, which date them as long as that boot lasts.
 */

/** Gives a sidecar's every time a date: its first frame was taken at `start`, +- sigma_s, quality TIME_HOST. */
void undated_fill(struct sidecar *sidecar, struct tai start, double sigma_s);

/** Writes the start of a sidecar into the bext chunks of its files. Says what fails. */
void undated_mark_files(const struct sidecar *sidecar, const struct disk *disk, const char *folder);

/**
 * Dates what earlier runs of this boot left without a date in the folder, by the host's clock, which is known by now.
 *
 * @param boot_id      of this boot: see host_clock_boot()
 * @param before_ns    CLOCK_MONOTONIC: recordings begun from then on are left alone (they are this run's own)
 * @param host_sigma_s as for host_clock_at()
 * @return recordings dated (each is said), or -errno
 */
int undated_date(const struct disk *disk, const char *folder, const char *boot_id, int64_t before_ns, double host_sigma_s);

#endif
