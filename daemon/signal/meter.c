/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * Frames are measured in pieces of 256: sums for the levels, then the piece is averaged in pairs again and again, and each
 * octave adds up the squared differences of its neighbours.  So all octaves together cost twice the first one.
 */
#include <errno.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include "meter_inner.h"

static const double full_scale = 0.99996;       /* the highest code of 16 bits is 1 - 2^-15 */
static const double resolutions[SAMPLE_TYPES] = {
	[SAMPLE_S16] = 0x1p-15, [SAMPLE_S24_3] = 0x1p-23, [SAMPLE_S24] = 0x1p-23, [SAMPLE_S32] = 0x1p-31,
	[SAMPLE_F32] = 0,
};
static const double default_tolerance = 200e-6;
static const double hold_s = 10;

struct octave {
	double previous, half;          /* the average before; one that waits for its partner */
	bool has_previous, has_half;
	double squares, differences, forget;
};

struct level {                          /* a span in the making */
	struct moments moments;
	double peak;
	uint64_t clipped;
};

struct channel {
	struct meter_channel fixed;     /* what the settings say of it */
	bool learn_polarity;
	struct level second, whole;
	struct meter_span last;         /* the last whole second */
	double held[2];                 /* largest magnitude of these ten seconds and of those before */
	uint64_t invalid;
	struct octave octave[METER_OCTAVES];
	struct mains mains;
	struct leak leak;
	double x[PIECE];
};

struct meter {
	struct frame_format format;
	double rate, memory_s;
	size_t piece, filled;
	uint64_t begin, next, frames, lost;
	size_t second_pieces, pieces;   /* of a second, and of the one in the making */
	size_t seconds;                 /* of the stretch held */
	struct mains_plan mains;
	struct comb comb;
	int pulse_channel;
	struct leak_plan leak;
	size_t channels;
	struct channel channel[MAX_CHANNELS];
};

/* ------------------------------------------------------------------ create */

static void copy_name(char to[METER_NAME], const char *from)
{
	size_t n = strnlen(from, METER_NAME - 1);

	while (from[n] && n && ((unsigned char)from[n] & 0xc0) == 0x80)
		n--;                    /* not in the middle of a character of UTF-8 */
	memcpy(to, from, n);
	to[n] = 0;
}

static int check_settings(const struct meter_settings *s)
{
	if (!(s->rate > 0 && s->rate <= 1e9) || s->channels < 1 || s->channels > MAX_CHANNELS || !(s->memory_s >= 0) ||
	    !(s->card_tolerance >= 0 && s->card_tolerance <= 0.1))
		return -EINVAL;
	for (size_t k = 0; k < s->channels; k++)
		if (s->channel[k].column >= s->format.channels || s->channel[k].polarity < -1 ||
		    s->channel[k].polarity > 1 || !(s->channel[k].bandwidth_hz >= 0) || !s->channel[k].name)
			return -EINVAL;
	return 0;
}

static void create_channel(struct meter *m, size_t k, const struct meter_settings *s)
{
	struct channel *c = &m->channel[k];

	copy_name(c->fixed.name, s->channel[k].name);
	c->fixed.column = s->channel[k].column;
	c->fixed.measure = s->channel[k].measure;
	c->fixed.polarity = s->channel[k].polarity;
	c->fixed.coupled = s->channel[k].coupled;
	c->fixed.bandwidth_hz = s->channel[k].bandwidth_hz;
	c->last = (struct meter_span){ NAN, NAN, NAN, 0 };
	for (size_t o = 0; o < METER_OCTAVES; o++)
		c->octave[o].forget = s->memory_s == 0 ? INFINITY :
			fmax(FORGET_LEAST, s->memory_s * s->rate / pow(2, (double)o));
	if (c->fixed.measure != MEASURE_PULSE)
		return;
	m->pulse_channel = (int)k;
	c->learn_polarity = c->fixed.polarity == 0;
	m->comb.slack = s->rate * (1e-4 + 5 * fmax(0, s->channel[k].pulse_jitter_s));
	leak_plan_create(&m->leak, s->rate, s->channel[k].pulse_width_s, s->memory_s);
}

int meter_create(struct meter **out, const struct meter_settings *settings)
{
	struct meter *m;
	int ret = check_settings(settings);

	if (ret < 0)
		return ret;
	m = calloc(1, sizeof(*m));
	if (!m)
		return -ENOMEM;
	m->format = settings->format;
	m->rate = settings->rate;
	m->memory_s = settings->memory_s;
	m->piece = PIECE;
	while (m->piece > 1 && (double)m->piece > m->rate / 8)
		m->piece /= 2;
	m->second_pieces = (size_t)fmax(1, floor(m->rate / (double)m->piece));
	m->comb.rate = m->rate;
	m->comb.tolerance = settings->card_tolerance > 0 ? settings->card_tolerance : default_tolerance;
	m->pulse_channel = -1;
	m->channels = settings->channels;
	for (size_t k = 0; k < m->channels; k++)
		create_channel(m, k, settings);
	ret = mains_plan_create(&m->mains, m->rate);
	if (ret < 0) {
		free(m);
		return ret;
	}
	*out = m;
	return 0;
}

void meter_destroy(struct meter *meter)
{
	if (!meter)
		return;
	mains_plan_clear(&meter->mains);
	free(meter);
}

/* ------------------------------------------------------------------ levels */

void moments_merge(struct moments *m, const struct moments *other)
{
	double n = m->n + other->n, apart = other->mean - m->mean;

	if (n == 0)
		return;
	m->mean += apart * other->n / n;
	m->square += other->square + apart * apart * m->n * other->n / n;
	m->n = n;
}

/* One piece; about its first sample, so that a small noise on a high level keeps its digits. */
static struct level level_of(const double *x, size_t n)
{
	double offset = x[0], sum = 0, square = 0, low = offset, high = offset;
	struct level level = { .clipped = 0 };

	for (size_t k = 0; k < n; k++) {
		double y = x[k] - offset;

		sum += y;
		square += y * y;
		low = x[k] < low ? x[k] : low;
		high = x[k] > high ? x[k] : high;
	}
	level.peak = fmax(-low, high);
	level.moments = (struct moments){ (double)n, offset + sum / (double)n, square - sum * sum / (double)n };
	for (size_t k = 0; k < n && level.peak >= full_scale; k++)
		level.clipped += fabs(x[k]) >= full_scale;
	return level;
}

static void level_merge(struct level *to, const struct level *piece)
{
	moments_merge(&to->moments, &piece->moments);
	to->peak = fmax(to->peak, piece->peak);
	to->clipped += piece->clipped;
}

static struct meter_span span_of(const struct channel *c, const struct level *level)
{
	if (level->moments.n == 0)
		return (struct meter_span){ NAN, NAN, NAN, 0 };
	return (struct meter_span){
		.mean = (c->fixed.polarity < 0 && c->fixed.measure != MEASURE_PULSE ? -1 : 1) * level->moments.mean,
		.rms = sqrt(fmax(0, level->moments.square) / level->moments.n),
		.peak = level->peak, .clipped = level->clipped,
	};
}

static void finish_second(struct meter *m)
{
	bool shift = ++m->seconds >= (size_t)hold_s;

	m->pieces = 0;
	for (size_t k = 0; k < m->channels; k++) {
		struct channel *c = &m->channel[k];

		c->last = span_of(c, &c->second);
		c->second = (struct level){ .clipped = 0 };
		if (shift) {
			c->held[1] = c->held[0];
			c->held[0] = 0;
		}
	}
	if (shift)
		m->seconds = 0;
}

/* ------------------------------------------------------------------ noise against integration time */

static void octave_feed(struct octave *o, const double *x, size_t n)
{
	double squares = 0, first = o->has_previous ? x[0] - o->previous : 0;

	for (size_t k = 1; k < n; k++)
		squares += (x[k] - x[k - 1]) * (x[k] - x[k - 1]);
	o->squares += squares + first * first;
	o->differences += (double)(n - 1) + o->has_previous;
	o->previous = x[n - 1];
	o->has_previous = true;
	if (o->differences > o->forget) {
		o->squares *= 0.5;
		o->differences *= 0.5;
	}
}

/* Beyond the piece: one average at a time. */
static void climb(struct meter *m, struct channel *c, size_t octave, double x)
{
	while (octave + 1 < METER_OCTAVES) {
		struct octave *below = &c->octave[octave];

		if (!below->has_half) {
			below->half = x;
			below->has_half = true;
			return;
		}
		below->has_half = false;
		x = 0.5 * (below->half + x);
		octave++;
		if (octave == m->mains.octave)
			mains_feed(&c->mains, &m->mains, &x, 1);
		octave_feed(&c->octave[octave], &x, 1);
	}
}

/* Averages the piece in place. */
static void cascade(struct meter *m, struct channel *c)
{
	size_t n = m->piece, octave = 0;

	for (;; octave++) {
		if (octave == m->mains.octave)
			mains_feed(&c->mains, &m->mains, c->x, n);
		octave_feed(&c->octave[octave], c->x, n);
		if (n == 1)
			break;
		n /= 2;
		for (size_t k = 0; k < n; k++)
			c->x[k] = 0.5 * (c->x[2 * k] + c->x[2 * k + 1]);
	}
	climb(m, c, octave, c->x[0]);
}

static void break_channel(struct channel *c)
{
	for (size_t k = 0; k < METER_OCTAVES; k++)
		c->octave[k].has_previous = c->octave[k].has_half = false;
	mains_break(&c->mains);
	leak_break(&c->leak);
}

/* ------------------------------------------------------------------ execute */

static void measure_channel(struct meter *m, struct channel *c, uint64_t base)
{
	struct level level = level_of(c->x, m->piece);

	if (!isfinite(level.moments.square) || !isfinite(level.moments.mean)) {
		for (size_t k = 0; k < m->piece; k++)
			c->invalid += !isfinite(c->x[k]);
		break_channel(c);
		return;
	}
	level_merge(&c->second, &level);
	level_merge(&c->whole, &level);
	c->held[0] = fmax(c->held[0], level.peak);
	if (c->fixed.measure == MEASURE_PULSE)
		return;                 /* between pulses it is noise, at them it is not: no deviation means anything */
	leak_take(&c->leak, &m->leak, c->x, m->piece, base);
	cascade(m, c);
}

static void measure_piece(struct meter *m)
{
	uint64_t base = m->next - m->piece;

	leak_plan_next(&m->leak, &m->comb, base);
	for (size_t k = 0; k < m->channels; k++)
		measure_channel(m, &m->channel[k], base);
	if (leak_plan_over(&m->leak, m->next))
		for (size_t k = 0; k < m->channels; k++)
			leak_finish(&m->channel[k].leak, &m->leak);
	m->frames += m->piece;
	m->filled = 0;
	if (++m->pieces == m->second_pieces)
		finish_second(m);
}

static void begin(struct meter *m, uint64_t first)
{
	if (m->next == m->begin)
		m->begin = first;
	else if (first > m->next)
		m->lost += first - m->next;
	m->next = first;
	m->filled = 0;
	m->comb.broken = true;
	m->leak.set = false;
	for (size_t k = 0; k < m->channels; k++)
		break_channel(&m->channel[k]);
}

void meter_execute(struct meter *m, const void *frames, size_t count, uint64_t first)
{
	const unsigned char *from = frames;
	size_t bytes = frame_bytes(m->format), n;

	if (first != m->next)
		begin(m, first);
	for (; count; count -= n, from += n * bytes) {
		n = m->piece - m->filled < count ? m->piece - m->filled : count;
		for (size_t k = 0; k < m->channels; k++)
			frames_to_double(m->channel[k].x + m->filled, from, m->format, m->channel[k].fixed.column, n);
		m->filled += n;
		m->next += n;
		if (m->filled == m->piece)
			measure_piece(m);
	}
}

void meter_pulse(struct meter *m, const struct pulse_edge *edge)
{
	comb_add(&m->comb, edge);
}

/* ------------------------------------------------------------------ read */

static void read_channel(const struct meter *m, const struct channel *c, struct meter_channel *out)
{
	*out = c->fixed;
	out->second = c->last;
	out->whole = span_of(c, &c->whole);
	if (c->whole.moments.n > 0)
		out->headroom_db = -20 * log10(m->memory_s > 0 ? fmax(c->held[0], c->held[1]) : c->whole.peak);
	else
		out->headroom_db = NAN;
	out->invalid = c->invalid;
	if (c->learn_polarity && m->comb.kept)
		out->polarity = m->comb.edge[m->comb.kept - 1].sign;
	mains_report(&c->mains, &m->mains, out);
	for (size_t k = 0; k < METER_OCTAVES; k++) {
		const struct octave *o = &c->octave[k];

		out->octave[k].differences = o->differences;
		out->octave[k].deviation = o->differences > 0 ? sqrt(o->squares / (2 * o->differences)) : NAN;
	}
	out->leak.step = out->leak.sigma = NAN;
	out->leak.pulses = (unsigned)c->leak.steps.n;
	if (c->leak.steps.n < 3)
		return;
	out->leak.step = c->leak.steps.mean;
	out->leak.sigma = sqrt(c->leak.steps.square / (c->leak.steps.n - 1) / c->leak.steps.n);
}

void meter_read(const struct meter *m, struct meter_report *out)
{
	const struct comb *comb = &m->comb;
	double regular = comb->kept ? comb->edge[comb->kept - 1].frame : (double)m->begin;

	memset(out, 0, sizeof(*out));
	out->rate = m->rate;
	out->memory_s = m->memory_s;
	out->resolution = resolutions[m->format.type];
	out->frames = m->frames;
	out->lost = m->lost;
	out->channels = m->channels;
	for (size_t k = 0; k < m->channels; k++)
		read_channel(m, &m->channel[k], &out->channel[k]);
	out->pulse.channel = m->pulse_channel;
	out->pulse.seen = comb->seen;
	out->pulse.missing = comb->missing;
	out->pulse.spurious = comb->spurious;
	out->pulse.age_s = ((double)m->next - regular) / m->rate;
	out->pulse.interval_rms_s = comb_scatter(comb) / m->rate;
	out->pulse.card_error = comb_interval(comb) / m->rate - 1;
}

double meter_tau(const struct meter_report *report, size_t octave)
{
	return pow(2, (double)octave) / report->rate;
}

double meter_white(const struct meter_channel *channel, size_t octave)
{
	return channel->octave[0].deviation / sqrt(pow(2, (double)octave));
}

const struct meter_span *meter_span(const struct meter_report *report, size_t channel)
{
	const struct meter_channel *c = &report->channel[channel];

	return report->memory_s > 0 ? &c->second : &c->whole;
}

double meter_radiometer(const struct meter_report *report, size_t channel, size_t octave)
{
	const struct meter_channel *c = &report->channel[channel];

	if (!(c->bandwidth_hz > 0))
		return NAN;
	return fabs(meter_span(report, channel)->mean) / sqrt(c->bandwidth_hz * meter_tau(report, octave));
}
