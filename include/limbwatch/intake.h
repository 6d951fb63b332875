/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_INTAKE_H
#define LIMBWATCH_INTAKE_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>
#include "limbwatch/frames.h"
#include "limbwatch/settings.h"
#include "limbwatch/tai.h"

/* Where samples come from.  A driver is one file in drivers/ and one line in drivers/intakes.c. */

struct intake;

enum block_flag {
	BLOCK_GAP        = 1 << 0,      /* frames were lost just before this block; `first` counts them */
	BLOCK_STAMP_LATE = 1 << 1,      /* host_ns is an upper limit: taken when the block arrived */
	/* With BLOCK_GAP, why, where the driver knows. */
	BLOCK_OVERRUN    = 1 << 2,      /* the device held all it can and was not read in time */
	BLOCK_SLEPT      = 1 << 3,      /* device or computer slept; the gap has the length of true time, not of host_ns */
	BLOCK_STALLED    = 1 << 4,      /* the device stopped by itself, or delivered nothing, and was started again */
};

struct block {                          /* lent by the driver until its next read or stop */
	const void *frames;             /* interleaved, intake's format */
	size_t      count;
	uint64_t    first;              /* number of the block's first frame since start, counting frames lost */
	int64_t     host_ns;            /* CLOCK_MONOTONIC when frame `first` was taken, or INT64_MIN */
	unsigned    flags;
};

/* open (start read* stop)* close.  A failed read may be followed by stop and start. */
struct intake_driver {
	const char *name, *summary;     /* "alsa", and one line for --help */
	const struct setting *settings;
	/* Main thread.  May allocate, block and log.  On failure says why through log_error. */
	int  (*open)(struct intake **out, const struct setting_value *values);
	int  (*start)(struct intake *intake);
	int  (*stop)(struct intake *intake);
	void (*close)(struct intake *intake);
	/*
	 * Acquisition thread.  1: a block; 0: timed out; -ENODATA: the data have ended; other -errno: failed.
	 * No allocation, lock or log; no file either unless the driver is a replay.
	 */
	int  (*read)(struct intake *intake, struct block *block, int timeout_ms);
	/*
	 * Main thread, after read returned negative and the acquisition thread has stopped: one clear sentence on how the
	 * data ended ("NAME ended in the middle of a frame: 3 bytes left over"), empty when there is nothing to say.
	 * NULL: a driver that never has.
	 */
	void (*explain)(struct intake *intake, char *sentence, size_t size);
	/* A device that may be lost and found again: the recorder opens it anew, then perhaps with another name and other
	 * controls.  open gives -ENODEV or -EBUSY for what may pass, -EINVAL for a fault of the configuration. */
	bool comes_back;
};

/* A setting of the device itself as it was found: "Mic Capture Volume", "23 of 0 to 39, 11.50 dB". */
struct intake_control { char name[64], value[64]; };
enum { INTAKE_CONTROLS = 32 };

struct intake {                         /* first member of every driver's own struct */
	const struct intake_driver *driver;
	struct frame_format format;
	double   rate;                  /* frames per second, nominal */
	bool     real_time;             /* false: a replay, read as fast as it goes and never dropped */
	uint64_t total_frames;          /* of a replay, when known; else 0 */
	/* What the data themselves say of the time of frame 0; quality TIME_FREE: nothing. */
	struct {
		enum time_quality quality;
		struct tai when;
		double sigma_s;         /* one standard deviation */
		const char *source;     /* "bext", "configuration": for messages */
	} origin;
	char     name[128];             /* the device or file, for messages and the sidecar */
	/* What the device's own controls stood at when it had been opened (gain, input, automatic gain): for the sidecar. */
	size_t   controls;
	struct intake_control control[INTAKE_CONTROLS];
};

extern const struct intake_driver intake_alsa, intake_file, intake_pipe, intake_synthetic;

/** All drivers, NULL at the end. */
extern const struct intake_driver *const intake_drivers[];
/** @return the driver of that name, or NULL */
const struct intake_driver *intake_driver_find(const char *name);

#endif
