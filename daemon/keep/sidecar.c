/* SPDX-License-Identifier: GPL-3.0-or-later */
/* Writing a sidecar: members in a fixed order, the unit in the name, NaN as null. */
#include <errno.h>
#include <fcntl.h>
#include <jansson.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include "limbwatch/sidecar.h"
#include "sidecar_words.h"

const char *const reason_words[] = { "vigil", "trigger", "everything", NULL };
const char *const state_words[] = { "recording", "closed", "repaired", NULL };
const char *const quality_words[] = { "free", "host", "pulse", NULL };
const char *const kind_words[] = { "immersion", "emersion", NULL };
const char *const verdict_words[] = { "step-like", "fringes confirmed", NULL };
const char *const measure_words[] = { "voltage", "power", "chopped", "count", "pulse", "aux", NULL };
const char *const sample_words[] = { "S16", "S24_3", "S24", "S32", "FLOAT", NULL };

void sidecar_clear(struct sidecar *s)
{
	free(s->control);
	free(s->channel);
	free(s->expected);
	free(s->part);
	free(s->gap);
	free(s->loss);
	free(s->pulse);
	free(s->contact);
	memset(s, 0, sizeof(*s));
}

static json_t *number(double x)
{
	return isfinite(x) ? json_real(x) : json_null();
}

static json_t *count(uint64_t n)
{
	return json_integer((json_int_t)n);
}

/* Text that may hold anything: what is not UTF-8 is left out rather than spoiling the file. */
static json_t *words(const char *text)
{
	json_t *s = json_string(text);

	return s ? s : json_string("?");
}

/* An instant both for people and exactly; free ones have no UTC. */
static void put_instant(json_t *o, struct tai when, enum time_quality quality)
{
	char text[TAI_TEXT];

	json_object_set_new(o, "utc", quality == TIME_FREE ? json_null() : json_string(tai_format_utc(text, when, 9)));
	json_object_set_new(o, "tai_ns", json_integer(when.ns));
}

static json_t *reading(const struct clock_reading *r)
{
	json_t *o = json_object();

	put_instant(o, r->when, r->quality);
	json_object_set_new(o, "sigma_s", number(r->sigma_s));
	json_object_set_new(o, "time_quality", words(quality_words[r->quality]));
	json_object_set_new(o, "second_confirmed", json_boolean(r->second_confirmed));
	json_object_set_new(o, "pulse_s", number(r->terms.pulse));
	json_object_set_new(o, "interpolation_s", number(r->terms.interpolation));
	json_object_set_new(o, "delay_s", number(r->terms.delay));
	json_object_set_new(o, "label_s", number(r->terms.label));
	return o;
}

static json_t *mixer(const struct sidecar *s)
{
	json_t *array = json_array();

	for (size_t k = 0; k < s->controls; k++)
		json_array_append_new(array, json_pack("{s:o,s:o}", "name", words(s->control[k].name), "value",
			words(s->control[k].value)));
	return array;
}

static json_t *channels(const struct sidecar *s)
{
	json_t *array = json_array();

	for (size_t k = 0; k < s->channels; k++) {
		const struct sidecar_channel *c = &s->channel[k];
		json_t *o = json_object();

		json_object_set_new(o, "name", words(c->name));
		json_object_set_new(o, "column", count(c->column + 1));
		json_object_set_new(o, "measure", words(measure_words[c->measure]));
		json_object_set_new(o, "polarity", json_integer(c->polarity));
		json_object_set_new(o, "wavelength_m", number(c->wavelength_m));
		json_object_set_new(o, "passband_m", number(c->passband_m));
		json_object_set_new(o, "aperture_m", number(c->aperture_m));
		json_object_set_new(o, "integration_s", number(c->integration_s));
		json_object_set_new(o, "low_pass_s", number(c->low_pass_s));
		json_object_set_new(o, "high_pass_hz", number(c->high_pass_hz));
		json_object_set_new(o, "response_delay_s", number(c->response_delay_s));
		json_object_set_new(o, "series_rate_hz", number(c->rate));
		json_array_append_new(array, o);
	}
	return array;
}

static json_t *expected(const struct sidecar *s)
{
	json_t *array = json_array();

	for (size_t k = 0; k < s->expecteds; k++) {
		const struct sidecar_expected *e = &s->expected[k];
		json_t *o = json_object();

		json_object_set_new(o, "source", words(e->source));
		json_object_set_new(o, "kind", words(kind_words[e->kind]));
		put_instant(o, e->when, TIME_HOST);
		json_object_set_new(o, "sigma_s", number(e->sigma_s));
		json_object_set_new(o, "moon_distance_m", number(e->distance_m));
		json_object_set_new(o, "shadow_speed_mps", number(e->speed_mps));
		json_object_set_new(o, "shadow_speed_tolerance", number(e->speed_tolerance));
		json_array_append_new(array, o);
	}
	return array;
}

static json_t *contacts(const struct sidecar *s)
{
	json_t *array = json_array();

	for (size_t k = 0; k < s->contacts; k++) {
		const struct contact *c = &s->contact[k];
		json_t *o = json_object();

		json_object_set_new(o, "frame", number(c->frame));
		json_object_set_new(o, "frame_sigma", number(c->frame_sigma));
		put_instant(o, c->when, c->time_quality);
		json_object_set_new(o, "sigma_s", number(c->sigma_s));
		json_object_set_new(o, "fit_s", number(c->terms.fit));
		json_object_set_new(o, "clock_s", number(c->terms.clock));
		json_object_set_new(o, "response_s", number(c->terms.response));
		json_object_set_new(o, "time_quality", words(quality_words[c->time_quality]));
		json_object_set_new(o, "second_confirmed", json_boolean(c->second_confirmed));
		json_object_set_new(o, "kind", words(kind_words[c->kind]));
		json_object_set_new(o, "verdict", words(verdict_words[c->verdict]));
		json_object_set_new(o, "snr", number(c->snr));
		json_object_set_new(o, "chi2_excess", number(c->chi2_excess));
		json_object_set_new(o, "clean", json_boolean(!c->marked));
		json_object_set_new(o, "fringe_gain", number(c->fringe_gain));
		json_object_set_new(o, "fresnel_time_s", number(c->fresnel_time_s));
		json_object_set_new(o, "shadow_speed_mps", number(c->shadow_speed_mps));
		json_object_set_new(o, "size_fresnel", number(c->size_fresnel));
		json_object_set_new(o, "flux", number(c->flux));
		json_object_set_new(o, "baseline", number(c->baseline));
		json_object_set_new(o, "channel", count(c->channel));
		json_object_set_new(o, "expected", json_integer(c->expected));
		json_array_append_new(array, o);
	}
	return array;
}

static json_t *parts(const struct sidecar *s)
{
	json_t *array = json_array();

	for (size_t k = 0; k < s->parts; k++)
		json_array_append_new(array, json_pack("{s:o,s:o,s:o}", "file", words(s->part[k].file),
			"first_frame", count(s->part[k].first), "frames", count(s->part[k].frames)));
	return array;
}

static json_t *gaps(const struct sidecar *s)
{
	json_t *array = json_array();

	for (size_t k = 0; k < s->gaps; k++)
		json_array_append_new(array, json_pack("{s:o,s:o,s:o}", "first_frame", count(s->gap[k].first),
			"frames", count(s->gap[k].frames), "sigma_frames", number(s->gap[k].sigma_frames)));
	return array;
}

static json_t *losses(const struct sidecar *s)
{
	json_t *array = json_array();

	for (size_t k = 0; k < s->losses; k++)
		json_array_append_new(array, json_pack("{s:o,s:o,s:o,s:o}", "after_frame", count(s->loss[k].after),
			"before_frame", count(s->loss[k].before), "frames", number(s->loss[k].frames),
			"sigma_frames", number(s->loss[k].sigma_frames)));
	return array;
}

/* Short, for there are many: [frame, whole TAI second or null, accepted, residual in seconds]. */
static json_t *pulses(const struct sidecar *s)
{
	json_t *array = json_array();

	for (size_t k = 0; k < s->pulses; k++) {
		const struct clock_pulse *p = &s->pulse[k];

		json_array_append_new(array, json_pack("[o,o,o,o]", number(p->frame),
			p->second.ns == INT64_MIN ? json_null() : json_integer(p->second.ns / 1000000000),
			json_boolean(p->accepted), number(p->residual_s)));
	}
	return array;
}

/* Null for what was not recorded live. */
static json_t *boot(const struct sidecar *s)
{
	if (!*s->boot_id || s->monotonic_ns == INT64_MIN)
		return json_null();
	return json_pack("{s:o,s:I}", "id", words(s->boot_id), "monotonic_ns", (json_int_t)s->monotonic_ns);
}

static json_t *health(const struct sidecar *s)
{
	const struct sidecar_health *h = &s->health;

	if (!s->healthy)
		return json_null();
	return json_pack("{s:o,s:o,s:b,s:b,s:o,s:o,s:o}", "temperature_c", number(h->temperature_c), "load", number(h->load),
		"under_voltage", h->under_voltage, "throttled", h->throttled, "free_bytes", number(h->free_bytes),
		"ring_p999_s", number(h->ring_p999_s), "trigger_p999_s", number(h->trigger_p999_s));
}

static json_t *build(const struct sidecar *s)
{
	json_t *o = json_object();

	json_object_set_new(o, "format", json_integer(s->format));
	json_object_set_new(o, "state", words(state_words[s->state]));
	json_object_set_new(o, "program", json_string("limbwatch"));
	json_object_set_new(o, "version", words(s->version));
	json_object_set_new(o, "station", json_pack("{s:o,s:o,s:o,s:o}", "name", words(s->station),
		"latitude_deg", number(s->latitude_deg), "longitude_deg", number(s->longitude_deg),
		"height_m", number(s->height_m)));
	json_object_set_new(o, "intake", json_pack("{s:o,s:o,s:o,s:o,s:o}", "driver", words(s->driver),
		"device", words(s->device), "sample", words(sample_words[s->frames.type]),
		"channels", count(s->frames.channels), "rate_hz", number(s->rate)));
	json_object_set_new(o, "mixer", mixer(s));
	json_object_set_new(o, "reason", words(reason_words[s->reason]));
	json_object_set_new(o, "first_frame", count(s->first));
	json_object_set_new(o, "parts", parts(s));
	json_object_set_new(o, "gaps", gaps(s));
	json_object_set_new(o, "silent_losses", losses(s));
	json_object_set_new(o, "clipped_samples", count(s->clipped));
	json_object_set_new(o, "channels", channels(s));
	json_object_set_new(o, "expected", expected(s));
	json_object_set_new(o, "contacts", contacts(s));
	json_object_set_new(o, "clock", json_pack("{s:o,s:o,s:o}", "true_rate_hz", number(s->true_rate),
		"start", reading(&s->start), "end", reading(&s->end)));
	json_object_set_new(o, "boot", boot(s));
	json_object_set_new(o, "health", health(s));
	json_object_set_new(o, "pulses", pulses(s));
	return o;
}

/* ------------------------------------------------------------------ to text */

/* For people: a member a line, and in a list an element a line. */
static void put_value(FILE *out, const json_t *value)
{
	const size_t flags = JSON_ENCODE_ANY | JSON_COMPACT | JSON_REAL_PRECISION(17);
	json_t *element;
	size_t k;

	if (!json_is_array(value) || json_array_size(value) == 0) {
		json_dumpf(value, out, flags);
		return;
	}
	json_array_foreach(value, k, element) {
		fputs(k ? ",\n  " : "[\n  ", out);
		json_dumpf(element, out, flags);
	}
	fputc(']', out);
}

/* The caller's to free. */
static char *to_text(json_t *o)
{
	char *text = NULL;
	size_t size = 0;
	FILE *out = open_memstream(&text, &size);
	const char *name, *between = "{\n";
	json_t *value;
	bool failed;

	if (!out)
		return NULL;
	json_object_foreach(o, name, value) {
		fprintf(out, "%s\"%s\": ", between, name);
		put_value(out, value);
		between = ",\n";
	}
	fputs("\n}\n", out);
	failed = ferror(out);
	if (fclose(out) || failed) {
		free(text);
		return NULL;
	}
	return text;
}

/* ------------------------------------------------------------------ to disk */

static int write_all(const struct disk *disk, int fd, const char *text, size_t size)
{
	while (size) {
		ssize_t n = disk->write(fd, text, size);

		if (n <= 0)
			return n < 0 ? (int)n : -ENOSPC;
		text += n;
		size -= (size_t)n;
	}
	return 0;
}

static int write_file(const struct disk *disk, const char *path, const char *text)
{
	int fd = disk->open(path, O_WRONLY | O_CREAT | O_TRUNC, 0664), ret, more;

	if (fd < 0)
		return fd;
	ret = write_all(disk, fd, text, strlen(text));
	if (ret == 0)
		ret = disk->datasync(fd);
	more = disk->close(fd);
	return ret < 0 ? ret : more;
}

int sidecar_write(const struct sidecar *sidecar, const struct disk *disk, const char *path)
{
	char temporary[4096], folder[4096];
	const char *slash = strrchr(path, '/');
	json_t *o = build(sidecar);
	char *text = to_text(o);
	int ret = -ENOMEM;

	json_decref(o);
	if (!text)
		return -ENOMEM;
	snprintf(folder, sizeof(folder), "%.*s", slash ? (int)(slash - path) : 1, slash ? path : ".");
	snprintf(temporary, sizeof(temporary), "%s.tmp", path);
	ret = write_file(disk, temporary, text);
	free(text);
	if (ret == 0)
		ret = disk->rename(temporary, path);
	if (ret < 0) {
		disk->unlink(temporary);
		return ret;
	}
	return disk->sync_folder(folder);
}
