/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_TESTS_INTAKE_PROBE_H
#define LIMBWATCH_TESTS_INTAKE_PROBE_H

#include "limbwatch/intake.h"

/* Shared by the tests of the drivers: settings by name, what was said, all that an intake gives. */

enum { PROBE_SETTINGS = 32 };

struct probe {
	const struct intake_driver *driver;
	struct setting_value values[PROBE_SETTINGS];
	char folder[64];                /* a temporary one */
	char said[4096];                /* sentences of the log since probe_reset, one a line */
	struct intake *intake;
	unsigned char *bytes;           /* frames in their order */
	size_t frames, gaps;            /* how many; how many blocks came after a gap */
	uint64_t next;                  /* after the last frame, counting those lost */
	int last;                       /* what the last read returned */
	char explanation[512];
};

/** Makes the folder and takes the log over; aborts the test program when it cannot. */
void probe_create(struct probe *probe, const struct intake_driver *driver);
void probe_destroy(struct probe *probe);

/** Closes the intake, forgets what was said and read, and sets the fallbacks. */
void probe_reset(struct probe *probe);
void probe_text(struct probe *probe, const char *setting, const char *text);    /* kept by reference */
void probe_number(struct probe *probe, const char *setting, double number);

/** "FOLDER/name", in one of a few buffers that are used in turn. */
const char *probe_path(struct probe *probe, const char *name);
/** Writes the file and returns its path. */
const char *probe_file(struct probe *probe, const char *name, const void *bytes, size_t count);

int  probe_open(struct probe *probe);
/** Opens if need be, starts, reads until `most` frames or the end or an error, stops and asks for the explanation. */
void probe_run(struct probe *probe, size_t most);

#endif
