/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <math.h>
#include "limbwatch/stamp_line.h"

/*
 * Stamps are late by up to a millisecond or two (USB packets, DMA bursts), so a minute gives the rate to some 30 ppm,
 * the order of what cards are off: only then is the measured rate better than the nominal one.
 */
static const double min_baseline_s = 60, max_rate_error = 1e-3;

/* Of so many seconds the least late stamp is kept: a card not yet measured runs off 0.2 ms meanwhile at 100 ppm. */
static const double span_s = 2;

void stamp_line_create(struct stamp_line *line, double rate)
{
	*line = (struct stamp_line){ .rate = rate, .nominal = rate };
}

/* Host time from a stamp to a frame, ns. */
static double ahead_ns(const struct stamp_line *line, struct stamp_point stamp, uint64_t frame)
{
	return ((double)frame - (double)stamp.frame) / line->rate * 1e9;
}

/* From a stamp to now; 0 when that is too short. */
static double rate_since(struct stamp_point stamp, uint64_t frame, int64_t ns, double least_s)
{
	const double seconds = (double)(ns - stamp.ns) * 1e-9;

	return seconds >= least_s ? (double)(frame - stamp.frame) / seconds : 0;
}

double stamp_line_recent_rate(const struct stamp_line *line, uint64_t frame, int64_t ns)
{
	return line->started ? rate_since(line->before, frame, ns, 1) : 0;
}

static void measure_rate(struct stamp_line *line, uint64_t frame, int64_t ns)
{
	const double rate = rate_since(line->first, frame, ns, min_baseline_s);

	if (rate > 0 && fabs(rate / line->nominal - 1) <= max_rate_error)
		line->rate = rate;
}

void stamp_line_add(struct stamp_line *line, uint64_t frame, int64_t ns)
{
	const struct stamp_point stamp = { frame, ns };

	if (!line->started) {
		line->started = true;
		line->first = line->recent = line->before = stamp;
		line->span_frame = frame;
		return;
	}
	measure_rate(line, frame, ns);
	if ((double)(frame - line->span_frame) > span_s * line->rate) {
		line->before = line->recent;
		line->recent = stamp;
		line->span_frame = frame;
	} else if ((double)(ns - line->recent.ns) <= ahead_ns(line, line->recent, frame)) {
		line->recent = stamp;
	}
}

uint64_t stamp_line_gap(struct stamp_line *line, uint64_t next, int64_t ns)
{
	double lost = 1;

	if (line->started) {
		/* The one that leads to expect `next` earlier is the less delayed. */
		const double recent_ns = (double)(ns - line->recent.ns) - ahead_ns(line, line->recent, next);
		const double before_ns = (double)(ns - line->before.ns) - ahead_ns(line, line->before, next);
		lost = round(fmax(recent_ns, before_ns) * 1e-9 * line->rate);
	}
	lost = lost >= 1 ? lost : 1;
	line->started = false;
	stamp_line_add(line, next + (uint64_t)lost, ns);
	return (uint64_t)lost;
}
