/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <jansson.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>
#include "limbwatch/levels.h"
#include "limbwatch/stamp_line.h"
#include "report.h"
#include "service.h"
#include "show.h"

static json_t *number(double x)
{
	return isfinite(x) ? json_real(x) : json_null();        /* JSON knows no NaN */
}

static json_t *instant(struct tai when, enum time_quality quality)
{
	char text[TAI_TEXT];

	return quality == TIME_FREE ? json_null() : json_string(tai_format_utc(text, when, 6));
}

/* Takes the object over. */
static void publish(struct shown *shown, const char *kind, json_t *o)
{
	char *line = json_dumps(o, JSON_COMPACT | JSON_REAL_PRECISION(9));

	if (line)
		state_publish(shown->state, kind, line);
	free(line);
	json_decref(o);
}

static json_t *object(const char *what)
{
	json_t *o = json_object();

	json_object_set_new(o, "what", json_string(what));
	return o;
}

void show_hello(struct shown *shown)
{
	json_t *o = object("hello"), *channels = json_array();

	for (size_t k = 0; k < shown->config->channels; k++)
		json_array_append_new(channels, json_string(shown->config->channel[k].name));
	json_object_set_new(o, "program", json_string("limbwatchd " LIMBWATCH_VERSION));
	json_object_set_new(o, "station", json_string(shown->config->station.name));
	json_object_set_new(o, "pid", json_integer(getpid()));
	json_object_set_new(o, "folder", json_string(shown->config->keep.folder));
	json_object_set_new(o, "channels", channels);
	publish(shown, "hello", o);
}

void show_waiting(struct shown *shown)
{
	int64_t now = host_now();
	json_t *o;

	if (now / 1000000000 == shown->second_ns / 1000000000)
		return;
	shown->second_ns = now;
	o = object("device");
	json_object_set_new(o, "state", json_string("missing"));
	json_object_set_new(o, "driver", json_string(shown->config->driver->name));
	publish(shown, "device", o);
	service_status("waiting for the %s intake", shown->config->driver->name);
}

void show_event(struct shown *shown, const char *text)
{
	json_t *o = object("event");

	json_object_set_new(o, "text", json_string(text));
	publish(shown, NULL, o);
}

void show_contact(struct shown *shown, const struct contact *contact, const char *segment)
{
	char *line = shown->state ? report_line(shown->config, contact, segment, "contact") : NULL;

	if (line)
		state_publish(shown->state, "contact", line);
	free(line);
}

static void show_device(struct shown *shown, struct device *device, const struct acquire *acquire)
{
	static const char *const states[] = { "missing", "running", "ended" };
	json_t *o = object("device");
	struct intake face;

	device_face(device, &face);
	json_object_set_new(o, "state", json_string(states[device->state]));
	json_object_set_new(o, "driver", json_string(shown->config->driver->name));
	json_object_set_new(o, "name", json_string(face.name));
	json_object_set_new(o, "rate_hz", number(face.rate));
	json_object_set_new(o, "columns", json_integer(face.format.channels));
	json_object_set_new(o, "format", json_string(sample_type_name(face.format.type)));
	json_object_set_new(o, "live", json_boolean(face.real_time));
	json_object_set_new(o, "real_time_priority", json_boolean(device->realtime == 0));
	json_object_set_new(o, "times_lost", json_integer(device->losses));
	json_object_set_new(o, "frames_lost", json_integer((json_int_t)atomic_load(&acquire->lost)));
	json_object_set_new(o, "why", device->state == DEVICE_RUNNING ? json_null() : json_string(device->why));
	publish(shown, "device", o);
}

static void show_clock(struct shown *shown, const struct glance_view *v)
{
	json_t *o = object("clock");

	json_object_set_new(o, "utc", instant(v->now.when, v->now.quality));
	json_object_set_new(o, "sigma_s", number(v->now.sigma_s));
	json_object_set_new(o, "time_quality", json_string(time_quality_name(v->now.quality)));
	json_object_set_new(o, "second_confirmed", json_boolean(v->now.second_confirmed));
	json_object_set_new(o, "frame", json_integer((json_int_t)v->frame));
	json_object_set_new(o, "pulses_accepted", json_integer((json_int_t)v->clock.accepted));
	json_object_set_new(o, "pulses_rejected", json_integer((json_int_t)v->clock.rejected));
	json_object_set_new(o, "pulse_rms_s", number(v->clock.rms_residual_s));
	json_object_set_new(o, "card_rate_error_ppm", number(v->clock.rate_error * 1e6));
	publish(shown, "clock", o);
}

static json_t *expectation(const struct config_expected *e)
{
	char text[TAI_TEXT];

	return json_pack("{s:s,s:s,s:s,s:f}", "source", e->source, "kind", contact_kind_name(e->kind),
	                 "expected_utc", tai_format_utc(text, e->when, 3), "sigma_s", e->sigma_s);
}

static void show_vigil(struct shown *shown, const struct glance_view *v, unsigned contacts)
{
	const struct config *config = shown->config;
	json_t *o = object("vigil");
	json_t *open = v->open >= 0 ? expectation(&config->expected[v->open]) : NULL;
	json_t *next = v->next >= 0 ? expectation(&config->expected[v->next]) : NULL;
	char text[TAI_TEXT];

	if (next)
		json_object_set_new(next, "begins_utc", json_string(tai_format_utc(text, v->next_begin, 0)));
	json_object_set_new(o, "open", open ? open : json_null());
	json_object_set_new(o, "next", next ? next : json_null());
	json_object_set_new(o, "outside_vigils", json_boolean(config->watch.outside));
	json_object_set_new(o, "contacts", json_integer(contacts));
	publish(shown, "vigil", o);
}

static void show_disk(struct shown *shown, const struct keeper *keeper)
{
	int refusing = atomic_load(&keeper->refusing);
	long long free_bytes = atomic_load(&keeper->free_bytes);
	json_t *o = object("disk");

	json_object_set_new(o, "writing", json_boolean(atomic_load(&keeper->writing)));
	json_object_set_new(o, "trouble", refusing ? json_string(strerror(-refusing)) : json_null());
	json_object_set_new(o, "segments", json_integer(atomic_load(&keeper->segments)));
	json_object_set_new(o, "frames_lost", json_integer((json_int_t)atomic_load(&keeper->lost)));
	json_object_set_new(o, "free_bytes", free_bytes < 0 ? json_null() : json_integer(free_bytes));
	publish(shown, "disk", o);
}

static json_t *latency_json(const struct latency *latency)
{
	struct latency_summary s;

	latency_read(latency, &s);
	return json_pack("{s:I,s:o,s:o,s:o}", "count", (json_int_t)s.count, "p50_s", number(s.p50_s),
	                 "p999_s", number(s.p999_s), "worst_s", number(s.worst_s));
}

static void show_latency(struct shown *shown, const struct acquire *acquire, const struct latency *heard)
{
	json_t *o = object("latency");

	json_object_set_new(o, "to_ring", latency_json(&acquire->latency));
	json_object_set_new(o, "to_trigger", latency_json(heard));
	publish(shown, "latency", o);
}

static void show_levels(struct shown *shown, const struct glance_view *v)
{
	char *line = v->metered ? levels_json(&v->levels) : NULL;

	if (line)
		state_publish(shown->state, "levels", line);
	free(line);
}

/* What has come since: one line with each channel's bins. */
static void show_strip(struct shown *shown, const struct glance_view *v)
{
	uint64_t from = v->bins > STRIP_BINS && shown->bins < v->bins - STRIP_BINS ? v->bins - STRIP_BINS : shown->bins;
	json_t *o, *channels;

	if (!shown->state || from == v->bins)
		return;
	shown->bins = v->bins;
	o = object("series");
	channels = json_object();
	json_object_set_new(o, "first_frame", json_integer((json_int_t)v->strip[0][from % STRIP_BINS].first));
	json_object_set_new(o, "bin_s", json_real(v->bin_s));
	for (size_t c = 0; c < shown->config->channels; c++) {
		json_t *mean = json_array(), *low = json_array(), *high = json_array();

		for (uint64_t k = from; k < v->bins; k++) {
			const struct strip_bin *bin = &v->strip[c][k % STRIP_BINS];

			json_array_append_new(mean, number(bin->mean));
			json_array_append_new(low, number(bin->low));
			json_array_append_new(high, number(bin->high));
		}
		json_object_set_new(channels, shown->config->channel[c].name,
		                    json_pack("{s:o,s:o,s:o}", "mean", mean, "low", low, "high", high));
	}
	json_object_set_new(o, "channels", channels);
	publish(shown, NULL, o);
}

static void say_status(struct shown *shown, const struct device *device, const struct keeper *keeper,
                       const struct glance_view *v, unsigned contacts)
{
	const struct config *config = shown->config;
	char what[128], text[TAI_TEXT];

	if (device->state == DEVICE_MISSING) {
		service_status("the device is missing; %u contacts so far", contacts);
		return;
	}
	if (v->open >= 0)
		snprintf(what, sizeof(what), "vigil for %s", config->expected[v->open].source);
	else if (v->next >= 0)
		snprintf(what, sizeof(what), "next vigil %s for %s", tai_format_utc(text, v->next_begin, 0),
		         config->expected[v->next].source);
	else
		snprintf(what, sizeof(what), config->watch.outside ? "watching" : "listening");
	service_status("%s; time: %s; contacts: %u%s", what, time_quality_name(v->now.quality), contacts,
	               atomic_load(&keeper->refusing) ? "; THE DISK TAKES NOTHING" : "");
}

void show_round(struct shown *shown, struct device *device, const struct acquire *acquire, const struct keeper *keeper,
                struct glance *glance, const struct latency *heard, unsigned contacts)
{
	static struct glance_view v;    /* large; the main thread is one */
	int64_t now = host_now();

	if (now - shown->second_ns < 100000000)
		return;
	pthread_mutex_lock(&glance->mutex);
	v = glance->view;
	pthread_mutex_unlock(&glance->mutex);
	show_strip(shown, &v);
	if (now / 1000000000 == shown->second_ns / 1000000000)
		return;
	shown->second_ns = now;
	say_status(shown, device, keeper, &v, contacts);
	if (!shown->state)
		return;
	show_device(shown, device, acquire);
	show_clock(shown, &v);
	show_vigil(shown, &v, contacts);
	show_levels(shown, &v);
	show_disk(shown, keeper);
	show_latency(shown, acquire, heard);
}
