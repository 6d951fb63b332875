/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_RECORDER_H
#define LIMBWATCH_RECORDER_H

#include <stdbool.h>
#include <stdio.h>
#include "limbwatch/config.h"
#include "limbwatch/contact.h"

struct recorder_hooks {
	void *context;
	/* Main thread, once per contact, when its time has settled (pulses from both sides) and its sidecar is on disk.
	 * `segment`: path of the file that holds it once closed; NULL when the disk refused it. */
	void (*contact)(void *context, const struct config *config, const struct contact *contact, const char *segment);
	bool progress;                  /* say how far a long replay has come */
	bool service;                   /* the daemon itself: state socket, service manager, real-time priority */
	/* Main thread, once: everything this configuration needs is there, and it is at work.  May be NULL. */
	void (*running)(void *context);
	/* Main thread, after recorder_reload(): reads and checks the new configuration.  @return whether it is to be taken up,
	 * which ends recorder_run() with RECORDER_RENEW when no vigil is open.  NULL: there is none. */
	bool (*reload)(void *context);
};

enum { RECORDER_RENEW = 1 };

/**
 * Records, detects and times until the data end or recorder_stop() is called; repairs first what an earlier run left
 * open in the folder.
 *
 * A sound card that is missing, or lost and found again, is waited for.
 *
 * @return 0; RECORDER_RENEW: to be called again with the new configuration; -errno on failure (said); what was recorded
 *         is closed properly all the same
 */
int recorder_run(const struct config *config, const struct recorder_hooks *hooks);

/** Ends recorder_run() soon.  Async-signal-safe. */
void recorder_stop(void);
/** Has the configuration read anew.  Async-signal-safe. */
void recorder_reload(void);

/**
 * Says in plain words, with units, everything the configuration means, after opening the intake to see what it delivers.
 *
 * @return 0; -EINVAL when it cannot work (said); other -errno
 */
int recorder_describe(const struct config *config, FILE *out);

/* One contact as one JSON object on one line, and as one line of text. `text` NUL-terminated by the caller's stdio. */
void report_json(FILE *out, const struct config *config, const struct contact *contact, const char *segment);
void report_text(FILE *out, const struct config *config, const struct contact *contact, const char *segment);
/** An interval in the unit that suits it: "-18.8 us", "0.45 ms", "2.10 s". @return text */
const char *report_interval(char text[32], double seconds);

#endif
