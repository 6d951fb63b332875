/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <stdarg.h>
#include <stdio.h>
#include <string.h>
#include <systemd/sd-daemon.h>
#include <time.h>
#include "limbwatch/stamp_line.h"
#include "service.h"

static bool ready;
static char status[256];
static int64_t alive_ns;

void service_ready(void)
{
	if (!ready)
		sd_notify(0, "READY=1");
	ready = true;
}

/* The manager compares the instant with that of the signal it sent (Type=notify-reload); older ones ignore it. */
void service_reloading(void)
{
	sd_notifyf(0, "RELOADING=1\nMONOTONIC_USEC=%lld", (long long)(host_now() / 1000));
	ready = false;
}

void service_stopping(void)
{
	sd_notify(0, "STOPPING=1");
}

void service_status(const char *format, ...)
{
	char text[sizeof(status)];
	va_list arguments;

	va_start(arguments, format);
	vsnprintf(text, sizeof(text), format, arguments);
	va_end(arguments);
	if (!strcmp(text, status))
		return;
	memcpy(status, text, sizeof(status));
	sd_notifyf(0, "STATUS=%s", text);
}

void service_alive(void)
{
	uint64_t interval_us;
	int64_t now = host_now();

	if (sd_watchdog_enabled(0, &interval_us) <= 0 || now - alive_ns < (int64_t)interval_us * 1000 / 4)
		return;
	alive_ns = now;
	sd_notify(0, "WATCHDOG=1");
}
