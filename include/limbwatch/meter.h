/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_METER_H
#define LIMBWATCH_METER_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>
#include "limbwatch/conditioner.h"
#include "limbwatch/frames.h"
#include "limbwatch/pulse.h"

/*
 * What an observer sets gains by: level, headroom, clipping, mains hum, noise against integration time, the pulse and its
 * leakage.  Amplitudes are over full scale = 1, times are seconds; what is not known (yet) is NAN.
 */
struct meter;

enum {
	METER_NAME = 64,
	METER_OCTAVES = 26,             /* integration times of 1, 2, 4 ... 2^25 samples: 700 s at 48 kHz */
	METER_HARMONICS = 4,            /* of the mains, the fundamental among them */
};

struct meter_settings {
	struct frame_format format;
	double rate;                    /* frames per second, nominal, > 0 */
	double card_tolerance;          /* relative: how far the card may be from it; 0: 200e-6 */
	/* How long noise and leakage remember, seconds; 16 differences or pulses at the least.  0: for ever (a file). */
	double memory_s;
	size_t channels;                /* 1 to MAX_CHANNELS */
	struct {
		const char *name;       /* copied, cut to METER_NAME - 1 bytes between characters */
		unsigned column;        /* from 0 */
		enum measure measure;
		int    polarity;        /* as in the configuration: +1, -1; of a pulse also 0 */
		/* Radio passband before detection, for the radiometer's noise; 0: none, or an AC-coupled input. */
		double bandwidth_hz;
		bool   coupled;         /* AC-coupled: its mean says nothing */
		double pulse_width_s, pulse_jitter_s;   /* of the pulse; 0: unknown */
	} channel[MAX_CHANNELS];
};

/** -EINVAL when a setting is out of range, -ENOMEM.  Some 10 KiB a channel.  Caller destroys. */
int  meter_create(struct meter **out, const struct meter_settings *settings);
void meter_destroy(struct meter *meter);        /* NULL is fine */

/*
 * The three below belong to one thread (the recorder's signal thread).  No allocation, lock, log or file.
 */

/** Takes frames numbered first, first + 1 ...; a jump means lost frames: nothing is measured across it. */
void meter_execute(struct meter *meter, const void *frames, size_t count, uint64_t first);
/** An edge that the owner's pulse detector has found, spurious ones among them; it may come up to three seconds late. */
void meter_pulse(struct meter *meter, const struct pulse_edge *edge);

struct meter_span {                     /* raw samples of a channel over some time */
	double mean;                    /* with the polarity applied: more light is higher */
	double rms;                     /* about the mean */
	double peak;                    /* largest magnitude */
	uint64_t clipped;               /* samples at full scale */
};

struct meter_octave {                   /* averages of 2^k samples */
	double deviation;               /* Allan deviation of neighbouring averages */
	double differences;             /* pairs of averages that it rests on (less after forgetting); 0: not known */
};

struct meter_channel {
	char name[METER_NAME];
	unsigned column;                /* from 0 */
	enum measure measure;
	int polarity;                   /* of a pulse: +1 its rising edge leads, -1 the falling one, 0 not known yet */
	bool coupled;
	double bandwidth_hz;
	struct meter_span second;       /* the last whole second */
	struct meter_span whole;        /* since the start */
	double headroom_db;             /* full scale over the largest magnitude of 10 to 20 s; memory_s = 0: of all */
	uint64_t invalid;               /* samples that were not a number, since the start */
	struct {
		double frequency_hz;    /* 50 or 60; 0: looked for, none found; NAN: not known */
		double amplitude[METER_HARMONICS];      /* of the fundamental and its harmonics; 0: lost in the noise */
		/* Rms of the strongest of them over noise_1ms. */
		unsigned strongest;     /* 1: the fundamental */
		double over_noise_db;
	} mains;
	double noise_1ms;               /* rms of averages over 1 ms as the noise between the mains lines would have it */
	struct meter_octave octave[METER_OCTAVES];
	struct {                        /* of the pulse into this channel: mean of 1 ms after the edge less 1 ms before */
		double step, sigma;     /* sigma: standard uncertainty of the average step */
		unsigned pulses;        /* averaged */
	} leak;
};

struct meter_report {
	double rate;                    /* nominal */
	double memory_s;                /* as in the settings */
	double resolution;              /* one step of the samples; 0: FLOAT, no step */
	uint64_t frames;                /* measured since the start */
	uint64_t lost;                  /* frames missing between them */
	size_t channels;
	struct meter_channel channel[MAX_CHANNELS];
	struct {
		int channel;            /* index, or -1: no channel carries the pulse */
		unsigned seen, missing, spurious;
		double age_s;           /* since the last regular one, or since the start when there was none */
		double interval_rms_s;  /* of the last 64 intervals about their mean */
		double card_error;      /* relative; positive: the card is fast, more frames in a second than nominal */
	} pulse;
};

/** About once a second.  A plain copy without pointers: may be handed to another thread. */
void meter_read(const struct meter *meter, struct meter_report *out);

/** Integration time of octave k, seconds. */
double meter_tau(const struct meter_report *report, size_t octave);
/**
 * What white noise would have of the deviation of octave 0: sigma_1 / sqrt(n).
 *
 * Source: Riley, Handbook of Frequency Stability Analysis, NIST SP 1065 (2008): Allan deviation, and its slope of -1/2
 * for white noise of the averaged quantity.
 */
double meter_white(const struct meter_channel *channel, size_t octave);
/** The span to look at: the last second, or everything when the meter forgets nothing. */
const struct meter_span *meter_span(const struct meter_report *report, size_t channel);
/**
 * Noise of an ideal total-power receiver of this level: |mean| / sqrt(B tau), mean of meter_span().  NAN without B.
 *
 * Source: Dicke (1946), Rev. Sci. Instrum. 17, 268.
 */
double meter_radiometer(const struct meter_report *report, size_t channel, size_t octave);

#endif
