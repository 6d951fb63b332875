/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_CONFIG_H
#define LIMBWATCH_CONFIG_H

#include <stdbool.h>
#include <stddef.h>
#include "limbwatch/conditioner.h"
#include "limbwatch/contact.h"
#include "limbwatch/curve.h"
#include "limbwatch/intake.h"
#include "limbwatch/settings.h"

/* The recorder's configuration: the table of settings, and what it says once checked, in SI units. */

extern const struct setting_group config_groups[];

enum { CONFIG_CHANNELS = MAX_CHANNELS, CONFIG_EXPECTED = 64 };

struct config_channel {
	const char *name;
	unsigned column;                /* from 0 */
	enum measure measure;
	int polarity;                   /* +1, -1; of a pulse also 0: find out */
	struct curve_parameters curve;  /* receiver part: passband, aperture, responses */
	double response_delay_s, response_delay_sigma_s;
	struct { double width_s, jitter_s, delay_s, delay_sigma_s; } pulse;
	int line;                       /* in the file, for later sentences */
};

struct config_expected {
	const char *source;
	enum contact_kind kind;
	struct tai when;
	double sigma_s, distance_m, speed_mps;
	double speed_tolerance;         /* one standard deviation, relative */
	struct source_component component;
	int line;
};

struct config {
	struct settings *settings;      /* owns the texts; NULL when built without a file */
	struct { const char *name; bool placed; double latitude_deg, longitude_deg, height_m; } station;
	const struct intake_driver *driver;
	const struct setting_value *driver_values;
	size_t channels;
	struct config_channel channel[CONFIG_CHANNELS];
	size_t expecteds;
	struct config_expected expected[CONFIG_EXPECTED];
	struct {
		bool outside;           /* watch outside vigils too */
		bool kind[CONTACT_KINDS];
		double distance_m, speed_min_mps, speed_max_mps;
		double false_alarms_per_night, false_alarms_per_vigil, threshold, scintillation;
		double vigil_sigmas, vigil_before_s, vigil_after_s;
	} watch;
	struct { const char *leap_seconds; double host_sigma_s, card_tolerance; } clock;
	struct {
		const char *folder;
		bool everything;
		double pre_s, post_s, ring_s;
		int64_t part_bytes, free_bytes;
		bool remove_contacts;
	} keep;
	struct { int priority; bool lock_memory; double silence_s; } live;
	struct { const char *socket; bool given; } state;       /* path, or "" */
};

/**
 * Reads and checks a configuration.  Every sentence about what is wrong has been said.
 *
 * @param out  the caller's to free with config_free
 * @return 0; -EINVAL: wrong configuration; other -errno: could not be read
 */
int config_load(struct config *out, const char *path);
/** The same from memory; `name` stands for the file in sentences. */
int config_parse(struct config *out, const char *text, const char *name);
void config_free(struct config *config);

/** What one channel will see of one expected contact: the receiver from the channel, the rest from the contact. */
void config_curve(struct curve_parameters *out, const struct config_channel *channel,
                  const struct config_expected *expected);

#endif
