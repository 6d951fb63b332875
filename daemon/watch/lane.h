/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LANE_H
#define LANE_H

#include "limbwatch/config.h"
#include "limbwatch/detector.h"

/* One channel watched at one working rate: conditioner and detector for one T_F. */
struct lane;

struct lane_settings {
	const struct config *config;
	unsigned channel;               /* index in the configuration */
	int expected;                   /* index in the configuration, or -1: outside vigils */
	double speed_mps, scale_min, scale_max;  /* outside vigils; 0: from the expected contact */
	struct frame_format format;
	double rate;                    /* frames per second */
};

/* What follows from the settings, before anything is built. */
struct lane_shape {
	struct curve_parameters curve;
	double fresnel_time_s;
	unsigned decimation;
	double series_rate;
	double scale_min, scale_max, scale_sigma;
	double surviving;               /* share of the edge's energy that an AC-coupled input leaves */
};
/** -EINVAL when the event cannot be seen through this channel: `why` says it. */
int  lane_plan(struct lane_shape *out, const struct lane_settings *settings, char *why, size_t size);

int  lane_create(struct lane **out, const struct lane_settings *settings);
void lane_destroy(struct lane *lane);

/** Contacts come with frame, kind, snr and what the fit knows; times are the caller's. @return contacts given */
size_t lane_execute(struct lane *lane, const void *frames, size_t count, uint64_t first,
                    struct contact *out, size_t max);
size_t lane_finish(struct lane *lane, struct contact *out, size_t max);
/** The expected contact is at this frame, +- sigma frames; sigma <= 0: no longer. */
void lane_expect(struct lane *lane, double frame, double sigma_frames);
/** Frames from a contact until lane_execute gives it. */
double lane_latency(const struct lane *lane);
/** Frames held back at the beginning. */
double lane_startup(const struct lane *lane);
uint64_t lane_clipped(const struct lane *lane);
unsigned lane_channel(const struct lane *lane);
double lane_series_rate(const struct lane *lane);
double lane_threshold(const struct lane *lane);

/** How many lanes cover the speeds watched outside vigils. */
unsigned lanes_outside(const struct config *config);
/** Settings of lane k of these. */
void lane_outside(struct lane_settings *settings, unsigned k);

#endif
