/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <math.h>
#include <stdbool.h>
#include <stdlib.h>
#include "limbwatch/conditioner.h"
#include "limbwatch/log.h"

enum { PIECE = 1024 };                  /* frames converted at once */

static const char *const measure_names[] = {
	[MEASURE_VOLTAGE] = "voltage", [MEASURE_POWER] = "power", [MEASURE_CHOPPED] = "chopped",
	[MEASURE_COUNT] = "count", [MEASURE_PULSE] = "pulse", [MEASURE_AUX] = "aux",
};

const char *measure_name(enum measure measure)
{
	return measure_names[measure];
}

/* How a measure turns the frames of one series sample into a number. */
struct measure_method {
	void (*feed)(struct conditioner *c, const float *x, size_t n);  /* frames of the sample in the making */
	float (*emit)(struct conditioner *c);                           /* the sample, when all have been fed */
	void (*reset)(struct conditioner *c);                           /* starts a sample */
};

struct conditioner {
	struct conditioner_settings settings;
	const struct measure_method *method;
	uint64_t expected;              /* number of the next frame if nothing is missing */
	bool whole;                     /* the sample in the making has had all its frames */
	unsigned filled;                /* frames of it so far */
	double sum;
	bool at_limit;                  /* a frame of it was at full scale */
	uint64_t clipped;
	float piece[PIECE];
};

/* ------------------------------------------------------------------ voltage */

static inline float higher(float a, float b)
{
	return a > b ? a : b;
}

static void voltage_feed(struct conditioner *c, const float *x, size_t n)
{
	double even = 0, odd = 0;       /* two sums, so that an addition need not wait for the last */
	float limit = 0;
	size_t k = 0;

	for (; k + 1 < n; k += 2) {
		even += (double)x[k];
		odd += (double)x[k + 1];
		limit = higher(higher(fabsf(x[k]), fabsf(x[k + 1])), limit);    /* not a number: the limit stays */
	}
	if (k < n) {
		even += (double)x[k];
		limit = higher(fabsf(x[k]), limit);
	}
	c->sum += even + odd;
	c->at_limit |= limit >= 0.99996f;       /* the highest code of 16 bits is 1 - 2^-15 */
}

static float voltage_emit(struct conditioner *c)
{
	double mean = c->sum / c->settings.decimation;

	c->clipped += c->at_limit;
	return isfinite(mean) ? (float)(c->settings.polarity * mean) : NAN;
}

static void voltage_reset(struct conditioner *c)
{
	c->at_limit = false;
	c->sum = 0;
}

static const struct measure_method methods[] = {
	[MEASURE_VOLTAGE] = { voltage_feed, voltage_emit, voltage_reset },
	[MEASURE_AUX] = { NULL, NULL, NULL },   /* power, chopped and count: no method yet */
};

/* ------------------------------------------------------------------ the frame around them */

int conditioner_create(struct conditioner **out, const struct conditioner_settings *settings)
{
	struct conditioner *c;

	if (settings->decimation < 1 || settings->column >= settings->format.channels ||
	    (settings->polarity != 1 && settings->polarity != -1))
		return -EINVAL;
	if (!methods[settings->measure].feed) {
		log_error("channel measure \"%s\" is not available in this version; available: voltage",
		          measure_name(settings->measure));
		return -ENOTSUP;
	}
	c = calloc(1, sizeof(*c));
	if (!c)
		return -ENOMEM;
	c->settings = *settings;
	c->method = &methods[settings->measure];
	c->whole = true;
	c->method->reset(c);
	*out = c;
	return 0;
}

void conditioner_destroy(struct conditioner *conditioner)
{
	free(conditioner);
}

uint64_t conditioner_clipped(const struct conditioner *conditioner)
{
	return conditioner->clipped;
}

/* After lost frames: the sample in the making can never be whole; the next begins at a multiple of the decimation. */
static void restart(struct conditioner *c, uint64_t first)
{
	c->method->reset(c);
	c->filled = (unsigned)(first % c->settings.decimation);
	c->whole = c->filled == 0;
}

/* Frames that have been converted, sample by sample. @return samples given */
static size_t feed_piece(struct conditioner *c, size_t count, float *out)
{
	const float *x = c->piece;
	size_t given = 0, n;

	for (; count; count -= n, x += n) {
		n = c->settings.decimation - c->filled < count ? c->settings.decimation - c->filled : count;
		if (c->whole)
			c->method->feed(c, x, n);
		c->filled += (unsigned)n;
		if (c->filled < c->settings.decimation)
			continue;
		if (c->whole)
			out[given++] = c->method->emit(c);
		c->method->reset(c);
		c->filled = 0;
		c->whole = true;
	}
	return given;
}

size_t conditioner_execute(struct conditioner *c, const void *frames, size_t count, uint64_t first, float *out,
                           uint64_t *index)
{
	const unsigned char *from = frames;
	size_t bytes = frame_bytes(c->settings.format), given = 0, n;

	if (first != c->expected)
		restart(c, first);
	c->expected = first + count;
	*index = (first - c->filled) / c->settings.decimation + !c->whole;
	for (; count; count -= n, from += n * bytes) {
		n = count < PIECE ? count : PIECE;
		frames_to_float(c->piece, from, c->settings.format, c->settings.column, n);
		given += feed_piece(c, n, out + given);
	}
	return given;
}
