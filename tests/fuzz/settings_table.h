/* SPDX-License-Identifier: GPL-3.0-or-later */
/* A table of settings with a row of every kind, for the test and the fuzz target of the settings. */
#ifndef LIMBWATCH_TESTS_SETTINGS_TABLE_H
#define LIMBWATCH_TESTS_SETTINGS_TABLE_H

#include <math.h>
#include "limbwatch/settings.h"

enum { SITE_STATION, SITE_LATITUDE, SITE_HEIGHT, SITE_ROWS };
static const struct setting site_table[] = {
	[SITE_STATION] = { .name = "station", .type = SETTING_TEXT, .max = 20, .required = true,
		.example = "\"Brackenfold\"", .meaning = "name of the station" },
	[SITE_LATITUDE] = { .name = "latitude_deg", .type = SETTING_NUMBER, .fallback = NAN, .min = -90, .max = 90,
		.example = "47.25", .meaning = "geodetic latitude (WGS84), north positive" },
	[SITE_HEIGHT] = { .name = "height_m", .type = SETTING_NUMBER, .min = -500, .max = INFINITY,
		.meaning = "height above the ellipsoid" },
	{ .name = NULL }
};

enum { INTAKE_DRIVER, INTAKE_PERIOD, INTAKE_BASE };
static const struct setting intake_table[] = {
	[INTAKE_DRIVER] = { .name = "driver", .type = SETTING_CHOICE, .choices = "file|synthetic|card", .required = true,
		.example = "\"file\"", .meaning = "where samples come from" },
	[INTAKE_PERIOD] = { .name = "period_s", .type = SETTING_NUMBER, .fallback = 0.02, .min = 0.001, .max = 1,
		.meaning = "length of a block; long ones delay the trigger by as much" },
	{ .name = NULL }
};
enum { FILE_PATH, FILE_START, FILE_ROWS };
static const struct setting file_table[] = {
	[FILE_PATH] = { .name = "path", .type = SETTING_TEXT, .required = true, .example = "\"evening.wav\"",
		.meaning = "sound file" },
	[FILE_START] = { .name = "start", .type = SETTING_INSTANT, .example = "\"2031-04-02T01:23:45Z\"",
		.meaning = "instant of the first frame, where the file does not say it itself" },
	{ .name = NULL }
};
static const struct setting synthetic_table[] = {
	{ .name = "seed", .type = SETTING_INTEGER, .fallback = 1, .min = 0, .max = 4294967295.0,
		.meaning = "of the noise; the same seed gives the same samples" },
	{ .name = "snr", .type = SETTING_NUMBER, .fallback = 15, .min = 0, .max = 1e6, .meaning = "of the event" },
	{ .name = NULL }
};
static const struct setting card_table[] = {
	{ .name = "device", .type = SETTING_TEXT, .text = "hw:0", .min = 1, .meaning = "name of the sound device" },
	{ .name = "rate_hz", .type = SETTING_INTEGER, .fallback = 48000, .min = 8000, .max = 192000,
		.meaning = "frames per second" },
	{ .name = "columns", .type = SETTING_INTEGER, .min = 1, .max = 8, .required = true, .example = "2",
		.meaning = "channels of the card" },
	{ .name = NULL }
};
static const struct setting *const intake_tables[] = { file_table, synthetic_table, card_table };

static const struct setting *intake_more(const struct setting_value *values)
{
	return values[INTAKE_DRIVER].integer >= 0 ? intake_tables[values[INTAKE_DRIVER].integer] : NULL;
}

static const struct setting *intake_variant(size_t k, const char **heading)
{
	static const char *const headings[] = {
		"driver = \"file\": a recording", "driver = \"synthetic\": an invented event", "driver = \"card\": a sound card",
	};

	if (k >= 3)
		return NULL;
	*heading = headings[k];
	return intake_tables[k];
}

enum { CHANNEL_NAME, CHANNEL_COLUMN, CHANNEL_INVERTED, CHANNEL_WAVELENGTH, CHANNEL_MEASURE, CHANNEL_OFFSET, CHANNEL_ROWS };
static const struct setting channel_table[] = {
	[CHANNEL_NAME] = { .name = "name", .type = SETTING_TEXT, .required = true, .example = "\"red\"",
		.meaning = "name of the channel" },
	[CHANNEL_COLUMN] = { .name = "column", .type = SETTING_INTEGER, .fallback = 1, .min = 1, .max = 8,
		.meaning = "column of the intake, from 1" },
	[CHANNEL_INVERTED] = { .name = "inverted", .type = SETTING_BOOLEAN, .fallback = 0,
		.meaning = "the voltage falls when the source brightens" },
	[CHANNEL_WAVELENGTH] = { .name = "wavelength_m", .type = SETTING_NUMBER, .fallback = 6.5e-7, .min = 1e-7, .max = 100,
		.meaning = "centre of the passband" },
	[CHANNEL_MEASURE] = { .name = "measure", .type = SETTING_CHOICE, .choices = "voltage|power|count", .text = "voltage",
		.was = "kind", .meaning = "what a sample stands for" },
	[CHANNEL_OFFSET] = { .name = "offset", .type = SETTING_INTEGER, .fallback = -3, .min = -INFINITY, .max = 0,
		.meaning = "taken from every sample" },
	{ .name = NULL }
};

enum { KEEP_PRE, KEEP_LIMIT, KEEP_FREE, KEEP_ROWS };
static const struct setting keep_table[] = {
	[KEEP_PRE] = { .name = "pre_trigger_s", .type = SETTING_NUMBER, .fallback = 5, .min = 0, .max = 600, .was = "before_s",
		.meaning = "seconds recorded before a trigger" },
	[KEEP_LIMIT] = { .name = "limit_bytes", .type = SETTING_INTEGER, .fallback = 2147483648.0, .min = 0,
		.max = 9007199254740992.0, .meaning = "largest part of a segment" },
	[KEEP_FREE] = { .name = "anything", .type = SETTING_NUMBER, .fallback = 0, .meaning = "a number without limits" },
	{ .name = NULL }
};

enum { EXPECTED_KIND, EXPECTED_UTC, EXPECTED_SIGMA, EXPECTED_ROWS };
static const struct setting expected_table[] = {
	[EXPECTED_KIND] = { .name = "kind", .type = SETTING_CHOICE, .choices = "immersion|emersion", .required = true,
		.example = "immersion", .meaning = "whether the source disappears or comes back" },
	[EXPECTED_UTC] = { .name = "utc", .type = SETTING_INSTANT, .required = true, .example = "2031-04-02T01:23:45Z",
		.meaning = "instant at which the limb crosses the line of sight, from a prediction for this very site" },
	[EXPECTED_SIGMA] = { .name = "sigma_s", .type = SETTING_NUMBER, .fallback = 5, .min = 0, .max = 3600,
		.meaning = "one standard deviation of it; a rough prediction needs a long vigil, which in its turn costs disk "
		"space and lets more false alarms through" },
	{ .name = NULL }
};

static const struct setting_group all_groups[] = {
	{ .name = "site", .meaning = "where the telescope stands", .required = true, .settings = site_table },
	{ .name = "intake", .meaning = "where samples come from", .required = true, .settings = intake_table,
		.more = intake_more, .variant = intake_variant },
	{ .name = "channels", .meaning = "the columns that are watched", .list = true, .required = true,
		.settings = channel_table },
	{ .name = "keep", .meaning = "what is kept of the samples", .settings = keep_table },
	{ .name = "expected", .meaning = "contacts to wait for", .list = true, .settings = expected_table },
	{ .name = NULL }
};

#endif
