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
	float (*emit)(struct conditioner *c);                           /* the sample; starts the next */
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

static void voltage_feed(struct conditioner *c, const float *x, size_t n)
{
	double even = 0, odd = 0;       /* two sums, so that an addition need not wait for the last */
	float high = 0, low = 0;
	size_t k = 0;

	for (; k + 1 < n; k += 2) {
		even += (double)x[k];
		odd += (double)x[k + 1];
		high = x[k] > high ? x[k] : high;
		low = x[k] < low ? x[k] : low;
		high = x[k + 1] > high ? x[k + 1] : high;
		low = x[k + 1] < low ? x[k + 1] : low;
	}
	if (k < n) {
		even += (double)x[k];
		high = x[k] > high ? x[k] : high;
		low = x[k] < low ? x[k] : low;
	}
	c->sum += even + odd;
	/* The highest code of 16 bits is 1 - 2^-15. */
	c->at_limit |= high >= 0.99996f || low <= -0.99996f;
}

static float voltage_emit(struct conditioner *c)
{
	double mean = c->sum / c->settings.decimation;

	c->clipped += c->at_limit;
	c->at_limit = false;
	c->sum = 0;
	return isfinite(mean) ? (float)(c->settings.polarity * mean) : NAN;
}

static const struct measure_method methods[] = {
	[MEASURE_VOLTAGE] = { voltage_feed, voltage_emit },
	[MEASURE_AUX] = { NULL, NULL },         /* power, chopped and count: no method yet */
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
	c->method->emit(c);
	c->filled = (unsigned)(first % c->settings.decimation);
	c->whole = c->filled == 0;
}

size_t conditioner_execute(struct conditioner *c, const void *frames, size_t count, uint64_t first, float *out,
                           uint64_t *index)
{
	const unsigned char *from = frames;
	size_t bytes = frame_bytes(c->settings.format), given = 0;
	unsigned decimation = c->settings.decimation;

	if (first != c->expected)
		restart(c, first);
	c->expected = first + count;
	*index = (first - c->filled) / decimation + !c->whole;
	while (count) {
		size_t n = decimation - c->filled;

		n = n < count ? n : count;
		n = n < PIECE ? n : PIECE;
		if (c->whole) {
			frames_to_float(c->piece, from, c->settings.format, c->settings.column, n);
			c->method->feed(c, c->piece, n);
		}
		c->filled += (unsigned)n;
		from += n * bytes;
		count -= n;
		if (c->filled < decimation)
			continue;
		if (c->whole)
			out[given++] = c->method->emit(c);
		c->filled = 0;
		c->whole = true;
	}
	return given;
}
