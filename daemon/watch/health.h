/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef HEALTH_H
#define HEALTH_H

#include "limbwatch/latency.h"
#include "limbwatch/sidecar.h"

/**
 * How the computer is doing, as its kernel tells below `sys` ("/sys"): what it does not tell is NAN or false.  Reads files: not the
 * acquisition thread.  Disk and latencies are the caller's to fill.
 *
 * Sources: Linux, Documentation/driver-api/thermal/sysfs-api.rst (millidegrees Celsius); the Raspberry Pi firmware's
 * get_throttled: bits 16 and 18, under-voltage and throttling have occurred (its documentation of vcgencmd, from memory).
 */
void health_read(struct sidecar_health *out, const char *sys);

#endif
