/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef SHOW_H
#define SHOW_H

#include "device.h"
#include "glance.h"
#include "keeper.h"
#include "limbwatch/latency.h"
#include "state.h"

/* What the recorder shows on its state socket, and in one line to the service manager. Main thread. */
struct shown {
	struct state *state;            /* NULL: no socket */
	const struct config *config;
	uint64_t bins;                  /* of the strip chart already shown */
	int64_t second_ns;              /* of the last full round */
};

void show_hello(struct shown *shown);
/** Everything that changes, once a second; the strip chart as it grows. */
void show_round(struct shown *shown, struct device *device, const struct acquire *acquire, const struct keeper *keeper,
                struct glance *glance, const struct latency *heard, unsigned contacts);
/** While the device has never been there yet. */
void show_waiting(struct shown *shown);
void show_contact(struct shown *shown, const struct contact *contact, const char *segment);
/** What happened, in words: {"what":"event","text":...}. */
void show_event(struct shown *shown, const char *text);

#endif
