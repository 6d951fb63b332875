/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_SIDECAR_H
#define LIMBWATCH_SIDECAR_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>
#include "limbwatch/conditioner.h"
#include "limbwatch/contact.h"
#include "limbwatch/disk.h"
#include "limbwatch/frame_clock.h"
#include "limbwatch/frames.h"

/* The JSON file beside a segment: everything that was known when it was recorded. */

enum { SIDECAR_FORMAT = 1, SIDECAR_TEXT = 128 };

/* Why it was kept. */
enum segment_reason { REASON_VIGIL, REASON_TRIGGER, REASON_ALL };
/* Where it stands: RECORDING is only seen after a power cut; REPAIRED: the next start closed it. */
enum segment_state { SEGMENT_RECORDING, SEGMENT_CLOSED, SEGMENT_REPAIRED };

struct sidecar_channel {
	char name[SIDECAR_TEXT];
	unsigned column;                /* from 0 */
	enum measure measure;
	int polarity;
	double wavelength_m, passband_m, aperture_m, integration_s, low_pass_s, high_pass_hz;
	double response_delay_s;        /* further constant delay, taken off the contact times */
	double rate;                    /* of the series, Hz */
};

struct sidecar_expected {
	char source[SIDECAR_TEXT];
	enum contact_kind kind;
	struct tai when;
	double sigma_s, distance_m, speed_mps, speed_tolerance;
};

struct sidecar_part { char file[SIDECAR_TEXT]; uint64_t first, frames; };
struct sidecar_gap { uint64_t first, frames; double sigma_frames; };    /* filled with zeros in the file */
/* Frames that neither the file nor its numbers count, somewhere between two frames; negative: given twice. */
struct sidecar_loss { uint64_t after, before; double frames, sigma_frames; };

/* A control of the device as it was found when it was opened: "Mic Capture Volume", "23 of 0 to 39, 11.50 dB". */
struct sidecar_control { char name[64], value[64]; };

/* How computer and recorder were doing when the sidecar was written; NAN: this computer does not tell. */
struct sidecar_health {
	double temperature_c;           /* of its hottest part */
	double load;                    /* processes that want to run, mean of a minute */
	bool   under_voltage, throttled;/* since it was switched on, as a board's firmware tells */
	double free_bytes;              /* of the disk */
	double ring_p999_s, trigger_p999_s;     /* latency from a sample to the ring, to a trigger: 99.9% are below */
};

struct sidecar {
	int format;
	char version[32];               /* of limbwatch */
	char station[SIDECAR_TEXT];
	double latitude_deg, longitude_deg, height_m;           /* NAN: not given */
	char driver[32], device[SIDECAR_TEXT];
	struct frame_format frames;
	double rate;                    /* nominal */
	enum segment_reason reason;
	enum segment_state state;
	uint64_t first;                 /* number of the segment's first frame since the intake's start */
	struct clock_reading start, end;/* of its first frame and past its last */
	double true_rate;               /* frames per second by the clock solution */
	/* What can date it later: of this computer, see host_clock_boot(). */
	char boot_id[33];               /* "": not recorded live */
	int64_t monotonic_ns;           /* CLOCK_MONOTONIC of frame `first`; INT64_MIN: unknown */
	/* Arrays are the sidecar's own (malloc), freed by sidecar_clear. */
	size_t controls;  struct sidecar_control *control;      /* in the file "mixer", which older ones lack */
	size_t channels;  struct sidecar_channel *channel;
	size_t expecteds; struct sidecar_expected *expected;
	size_t parts;     struct sidecar_part *part;
	size_t gaps;      struct sidecar_gap *gap;
	size_t losses;    struct sidecar_loss *loss;
	size_t pulses;    struct clock_pulse *pulse;
	size_t contacts;  struct contact *contact;
	uint64_t clipped;               /* series samples with a frame at full scale */
	bool healthy;                   /* `health` has been filled */
	struct sidecar_health health;
};

void sidecar_clear(struct sidecar *sidecar);

/**
 * Writes it: temporary name, sync, rename, sync of the folder.
 *
 * @param path  "....json"
 * @return 0 or -errno; on failure an earlier file of that name stands unharmed
 */
int sidecar_write(const struct sidecar *sidecar, const struct disk *disk, const char *path);

/**
 * Reads one back.  Unknown members are passed over; a newer format number is refused.
 *
 * @param out  filled on success only; sidecar_clear it
 * @return 0; -EINVAL, with a sentence naming the file and the line or member; other -errno
 */
int sidecar_read(struct sidecar *out, const struct disk *disk, const char *path);
/** The same from memory: the parser, for tests and the fuzz target. */
int sidecar_parse(struct sidecar *out, const char *text, size_t size, const char *name);

#endif
