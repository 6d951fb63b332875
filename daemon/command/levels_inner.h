/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LEVELS_INNER_H
#define LEVELS_INNER_H

#include <signal.h>
#include "limbwatch/levels.h"

/* What levels.c (options, display), levels_intake.c (an intake) and levels_attach.c (the recorder's socket) share. */

extern volatile sig_atomic_t levels_stop;      /* Ctrl-C, SIGTERM, SIGHUP */

struct levels_run {
	double seconds;                 /* how long; INFINITY: until it ends or is stopped */
	bool json;
};

double levels_now(void);                        /* CLOCK_MONOTONIC, seconds */
/** One report for the observer: table or JSON line. */
void levels_show(const struct levels_run *run, const char *title, const struct meter_report *report);

/** Opens the configured intake and measures. @return exit status */
int levels_run_intake(const struct levels_run *run, const struct config *config);

/** @return descriptor of the recorder's state socket, or -errno without a sentence */
int levels_connect(const char *path);
/** Shows what the recorder says; closes the descriptor. @return exit status */
int levels_run_attached(const struct levels_run *run, int fd, const char *path);

#endif
