/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include "bext.h"
#include "limbwatch/host_clock.h"
#include "limbwatch/log.h"
#include "limbwatch/undated.h"

static const double card_error = 100e-6;        /* of a card without pulses: common practice */

static uint64_t end_of(const struct sidecar *s)
{
	const struct sidecar_part *last = s->parts ? &s->part[s->parts - 1] : NULL;

	return last ? last->first + last->frames : s->first;
}

static struct clock_reading reading_at(const struct sidecar *s, double frame, struct tai start, double sigma_s)
{
	double seconds = (frame - (double)s->first) / (s->true_rate > 0 ? s->true_rate : s->rate);
	struct clock_reading r = { .when = tai_add(start, seconds), .quality = TIME_HOST };

	r.terms.label = sigma_s;
	r.terms.interpolation = fabs(seconds) * card_error;
	r.sigma_s = hypot(r.terms.label, r.terms.interpolation);
	return r;
}

static void date_contact(const struct sidecar *s, struct contact *c, struct tai start, double sigma_s)
{
	struct clock_reading r = reading_at(s, c->frame, start, sigma_s);
	double delay = c->channel < s->channels ? s->channel[c->channel].response_delay_s : 0;

	c->when = tai_add(r.when, -delay);
	c->time_quality = TIME_HOST;
	c->second_confirmed = false;
	c->terms.clock = r.sigma_s;
	c->sigma_s = sqrt(c->terms.fit * c->terms.fit + r.sigma_s * r.sigma_s + c->terms.response * c->terms.response);
}

void undated_fill(struct sidecar *s, struct tai start, double sigma_s)
{
	s->start = reading_at(s, (double)s->first, start, sigma_s);
	s->end = reading_at(s, (double)end_of(s), start, sigma_s);
	for (size_t k = 0; k < s->contacts; k++)
		date_contact(s, &s->contact[k], start, sigma_s);
}

void undated_mark_files(const struct sidecar *s, const struct disk *disk, const char *folder)
{
	for (size_t k = 0; k < s->parts; k++) {
		double frames = (double)s->part[k].first - (double)s->first;
		struct tai start = tai_add(s->start.when, frames / (s->true_rate > 0 ? s->true_rate : s->rate));
		char path[4096];
		int ret;

		snprintf(path, sizeof(path), "%s/%s", folder, s->part[k].file);
		ret = bext_date(disk, path, start, s->rate);
		if (ret < 0)
			log_warning("%s: its bext chunk stays without a date (%s); the sidecar has it", path, strerror(-ret));
	}
}

/* ------------------------------------------------------------------ what earlier runs left */

struct names { size_t n, room; char (*name)[SIDECAR_TEXT]; };

static void add_name(void *context, const char *name, int64_t size)
{
	struct names *names = context;
	size_t length = strlen(name);

	(void)size;
	if (strncmp(name, "undated-", 8) || length < 6 || strcmp(name + length - 5, ".json") || length >= SIDECAR_TEXT)
		return;
	if (names->n == names->room) {
		size_t room = names->room ? 2 * names->room : 16;
		void *grown = realloc(names->name, room * SIDECAR_TEXT);

		if (!grown)
			return;
		names->name = grown;
		names->room = room;
	}
	snprintf(names->name[names->n++], SIDECAR_TEXT, "%s", name);
}

static bool date_one(const struct disk *disk, const char *folder, const char *name, const char *boot_id,
                     int64_t before_ns, double host_sigma_s)
{
	char path[4096], text[TAI_TEXT];
	struct sidecar s;
	struct tai start;
	double sigma;
	bool dated = false;

	snprintf(path, sizeof(path), "%s/%s", folder, name);
	if (sidecar_read(&s, disk, path) < 0)
		return false;
	if (s.start.quality == TIME_FREE && s.state != SEGMENT_RECORDING && !strcmp(s.boot_id, boot_id) &&
	    s.monotonic_ns != INT64_MIN && s.monotonic_ns < before_ns &&
	    host_clock_at(s.monotonic_ns, host_sigma_s, &start, &sigma)) {
		undated_fill(&s, start, sigma);
		dated = sidecar_write(&s, disk, path) == 0;
	}
	if (dated) {
		undated_mark_files(&s, disk, folder);
		log_notice("%s, recorded before the time was known, began at %s \xc2\xb1 %.3g s", path,
		           tai_format_utc(text, start, 3), sigma);
	}
	sidecar_clear(&s);
	return dated;
}

int undated_date(const struct disk *disk, const char *folder, const char *boot_id, int64_t before_ns, double host_sigma_s)
{
	struct names names = { 0 };
	int ret = disk->list(folder, add_name, &names), dated = 0;

	for (size_t k = 0; ret >= 0 && k < names.n; k++)
		dated += date_one(disk, folder, names.name[k], boot_id, before_ns, host_sigma_s);
	free(names.name);
	return ret < 0 ? ret : dated;
}
