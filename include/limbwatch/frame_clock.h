/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_FRAME_CLOCK_H
#define LIMBWATCH_FRAME_CLOCK_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>
#include "limbwatch/tai.h"

/*
 * Frame number -> TAI.  Fed with pulse edges (which say when a second begins, not which) and labels (which say
 * roughly what time it is); maps any frame by a robust smooth through the accepted pulses, sigma growing away from
 * them.  Without pulses the labels alone give the time.  One thread at a time.
 *
 * Pulses count once five of them, among 40 edges at most and none more than 10 s after the one before, keep whole seconds at one
 * rate.  False lock: random clicks, 0.03 to 8 a second, never did it in 1000 simulated days; spikes more than ten times a
 * second cannot.
 */
struct frame_clock;

struct frame_clock_settings {
	double rate;                    /* frames per second, nominal */
	double rate_tolerance;          /* how far the true rate may be off, relative; 200e-6 is generous for a card */
	double pulse_sigma_s;           /* jitter of one pulse, one sigma; 50e-9 */
	double pulse_delay_s;           /* the pulse in the samples is later than the second by this (cable, filter) */
	double pulse_delay_sigma_s;
};

/** -EINVAL when a setting is out of range. Caller destroys. */
int  frame_clock_create(struct frame_clock **out, const struct frame_clock_settings *settings);
void frame_clock_destroy(struct frame_clock *clock);

/** An edge at that frame; frames in ascending order.  The newest 30000 are remembered. */
void frame_clock_add_pulse(struct frame_clock *clock, double frame, double sigma_frames);
/**
 * A label: frame `frame` was taken at `when`, +- sigma_s (one sigma; block stamps that only err late: late = true).  Frames in
 * ascending order.  Labels of quality TIME_FREE say nothing and are not kept; of many the list is thinned.  Where labels
 * disagree the newest that agree among themselves are right; until there are three of them, the disagreement stands in sigma_s and the second is
 * not confirmed.
 */
void frame_clock_add_label(struct frame_clock *clock, double frame, struct tai when, double sigma_s, bool late,
                           enum time_quality quality);
/**
 * The clock that labels are read from was set (date -s, NTP's first step): those from now on count.  Without this word it is found from the
 * labels themselves, after three of them; after eight where they err late.
 */
void frame_clock_clock_was_set(struct frame_clock *clock);
/** The newest 256 are remembered.  Frames were lost before `frame` and their number is only known to +- sigma_frames: the phase may have jumped. */
void frame_clock_add_gap(struct frame_clock *clock, double frame, double sigma_frames);
/**
 * Frames that no frame number counts were lost (negative: given twice) somewhere between `after` and `before`; their number is
 * known to +- sigma_frames.  Told when it is recognised: pulses and labels of later frames may be in already.  Losses in ascending
 * order.  Between the two, a time may be off by all of the loss, and sigma says so.
 *
 * @return 0; -EINVAL: not numbers, or before < after; -ENOMEM
 */
int  frame_clock_add_loss(struct frame_clock *clock, double after, double before, double frames, double sigma_frames);

/** Fits again with all that is known.  Cheap enough for once a second. @return pulses accepted */
size_t frame_clock_solve(struct frame_clock *clock);

struct clock_reading {
	struct tai when;
	double sigma_s;                 /* one standard deviation, clock terms only; NAN when quality is TIME_FREE */
	enum time_quality quality;
	/*
	 * Which second a pulse is was known: two independent labels agree, or one label's sigma is far below half a second.
	 * Otherwise quality is at most TIME_HOST and sigma_s that of the label.
	 */
	bool second_confirmed;
	struct { double pulse, interpolation, delay, label; } terms;   /* parts of sigma_s */
};

/** By the last solution.  With no label at all: TIME_FREE, `when` = seconds since frame 0 from the epoch. */
void frame_clock_at(const struct frame_clock *clock, double frame, struct clock_reading *reading);
/** The inverse by the last solution, to a thousandth of a frame. */
double frame_clock_frame(const struct frame_clock *clock, struct tai when);
/** True frames per second about `frame` by the last solution (nominal before any). */
double frame_clock_rate(const struct frame_clock *clock, double frame);

/* What the clock is, for words. */
struct clock_summary {
	size_t accepted, rejected;      /* pulses */
	double rms_residual_s;          /* of the accepted from the smooth */
	double rate_error;              /* of the card at the newest pulse, relative; positive: fast */
	bool second_confirmed;
};
void frame_clock_summarise(const struct frame_clock *clock, struct clock_summary *out);

struct clock_pulse {
	double frame;
	struct tai second;              /* the second it begins, when known; else ns = INT64_MIN */
	bool   accepted;
	double residual_s;              /* from the smooth */
};
/** Pulses with frames in [from, to), oldest first. @return number given, at most `max` */
size_t frame_clock_pulses(const struct frame_clock *clock, double from, double to, struct clock_pulse *out, size_t max);

#endif
