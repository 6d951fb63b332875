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

#endif
