/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <math.h>
#include "glance.h"

static const double bin_s = 0.1;

static void begin(struct strip *s, uint64_t first)
{
	s->first = first;
	s->filled = 0;
	for (size_t c = 0; c < CONFIG_CHANNELS; c++) {
		s->sum[c] = 0;
		s->low[c] = INFINITY;
		s->high[c] = -INFINITY;
	}
}

void strip_create(struct strip *s, double rate)
{
	s->frames = (uint64_t)fmax(1, round(bin_s * rate));
	begin(s, 0);
}

static void gather(struct strip *s, unsigned c, const float *x, size_t n)
{
	double sum = 0;
	float low = s->low[c], high = s->high[c];

	for (size_t k = 0; k < n; k++) {
		sum += x[k];
		low = x[k] < low ? x[k] : low;
		high = x[k] > high ? x[k] : high;
	}
	s->sum[c] += sum;
	s->low[c] = low;
	s->high[c] = high;
}

static void finish(struct strip *s, struct glance *glance, size_t channels)
{
	pthread_mutex_lock(&glance->mutex);
	for (size_t c = 0; c < channels; c++)
		glance->view.strip[c][glance->view.bins % STRIP_BINS] = (struct strip_bin){
			.first = s->first, .mean = (float)(s->sum[c] / (double)s->filled), .low = s->low[c], .high = s->high[c],
		};
	glance->view.bins++;
	pthread_mutex_unlock(&glance->mutex);
}

void strip_execute(struct strip *s, struct glance *glance, const struct config *config, struct frame_format format,
                   const void *frames, size_t count, uint64_t first, float *scratch)
{
	size_t bytes = frame_bytes(format);

	if (first != s->first + s->filled)
		begin(s, first);
	for (size_t done = 0; done < count; ) {
		size_t n = s->frames - s->filled < count - done ? (size_t)(s->frames - s->filled) : count - done;

		for (unsigned c = 0; c < config->channels; c++) {
			frames_to_float(scratch, (const char *)frames + done * bytes, format, config->channel[c].column, n);
			gather(s, c, scratch, n);
		}
		s->filled += n;
		done += n;
		if (s->filled < s->frames)
			continue;
		finish(s, glance, config->channels);
		begin(s, s->first + s->filled);
	}
}
