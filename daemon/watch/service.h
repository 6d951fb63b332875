/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef SERVICE_H
#define SERVICE_H

#include <stdbool.h>
#include <stdint.h>

/* What the service manager is told (sd_notify(3)); without one all of it does nothing.  Main thread only. */

/** The recorder is at work, or waits for its device; said once. */
void service_ready(void);
/** Takes up a new configuration; end with service_ready. */
void service_reloading(void);
void service_stopping(void);
/** One line for `systemctl status`; said when it differs from the last. */
void service_status(const char *format, ...) __attribute__((format(printf, 1, 2)));
/** The threads whose progress counts are alive: called when they are, forwarded as often as the manager asks for. */
void service_alive(void);

#endif
