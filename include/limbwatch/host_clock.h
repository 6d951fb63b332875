/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_HOST_CLOCK_H
#define LIMBWATCH_HOST_CLOCK_H

#include <stdbool.h>
#include <stdint.h>
#include "limbwatch/tai.h"

/**
 * What the host's clock says of an instant on CLOCK_MONOTONIC: carried over by a bracketed pair of clock readings.
 *
 * @param host_ns   CLOCK_MONOTONIC, nanoseconds
 * @param sigma_s   > 0: trust the clock with this standard uncertainty; 0: ask the kernel (adjtimex)
 * @param out_sigma the uncertainty that holds, seconds
 * @return false: the clock says it is not synchronised (`when` is filled all the same)
 */
bool host_clock_at(int64_t host_ns, double sigma_s, struct tai *when, double *out_sigma);

/* Whether the clock was set between calls. Zero it before the first. */
struct host_clock_watch { bool known; int64_t offset_ns; };

/**
 * By how much the host's clock was set since the last call (settimeofday, date -s, NTP's first step, a leap second).  Slewing is no
 * step, however fast: it moves CLOCK_MONOTONIC as well; nor is a suspend.
 *
 * @return seconds, positive: set forward; 0: not set, or by less than half a millisecond, or the first call
 */
double host_clock_step(struct host_clock_watch *watch);
/** The same with CLOCK_REALTIME - CLOCK_BOOTTIME given, nanoseconds. */
double host_clock_step_by(struct host_clock_watch *watch, int64_t offset_ns);

/** Longest text of host_clock_boot, with its final zero. */
enum { HOST_CLOCK_BOOT = 33 };

/**
 * Which boot of this computer it is, by the kernel: 32 hexadecimal digits, for names that cannot have a date yet.
 *
 * @return 0, or -errno and 32 zeros
 */
int host_clock_boot(char id[HOST_CLOCK_BOOT]);
/** The same from another file.  -EINVAL: not such an id. */
int host_clock_boot_from(const char *path, char id[HOST_CLOCK_BOOT]);

#endif
