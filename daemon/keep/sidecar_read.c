/* SPDX-License-Identifier: GPL-3.0-or-later */
/* Reading a sidecar back: whatever stands in the file, the answer is a sound struct or one sentence. */
#include <errno.h>
#include <fcntl.h>
#include <jansson.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include "limbwatch/log.h"
#include "limbwatch/sidecar.h"
#include "sidecar_words.h"

static const int64_t largest_file = 64 << 20;
static const double largest_count = 9007199254740992.0; /* 2^53: exact in JSON's numbers */

/* Where the reader stands, for sentences; the first thing wrong ends the reading. */
struct reader {
	const char *name;
	char at[96];                    /* "contacts[2]." */
	bool failed;
};

static void refuse(struct reader *r, const char *member, const char *what)
{
	if (!r->failed)
		log_error("%s: member %s%s %s", r->name, r->at, member, what);
	r->failed = true;
}

static json_t *member(struct reader *r, json_t *o, const char *name)
{
	json_t *m = json_object_get(o, name);

	if (!m)
		refuse(r, name, "is missing");
	return m;
}

/* A finite number in range; null is NaN where `unknown` allows it. */
static double number(struct reader *r, json_t *o, const char *name, double min, double max, bool unknown)
{
	json_t *m = member(r, o, name);
	double x;
	char what[96];

	if (!m || (json_is_null(m) && unknown))
		return NAN;
	x = json_number_value(m);
	if (!json_is_number(m) || !(x >= min && x <= max)) {
		snprintf(what, sizeof(what), "is not a number from %g to %g", min, max);
		refuse(r, name, what);
		return NAN;
	}
	return x;
}

static int64_t integer(struct reader *r, json_t *o, const char *name, double min, double max)
{
	json_t *m = member(r, o, name);
	char what[96];

	if (!m)
		return 0;
	if (!json_is_integer(m) || (double)json_integer_value(m) < min || (double)json_integer_value(m) > max) {
		snprintf(what, sizeof(what), "is not a whole number from %.16g to %.16g", min, max);
		refuse(r, name, what);
		return 0;
	}
	return json_integer_value(m);
}

static bool truth(struct reader *r, json_t *o, const char *name)
{
	json_t *m = member(r, o, name);

	if (m && !json_is_boolean(m))
		refuse(r, name, "is neither true nor false");
	return json_is_true(m);
}

static void text(struct reader *r, json_t *o, const char *name, char *out, size_t size)
{
	json_t *m = member(r, o, name);

	if (!m)
		return;
	if (!json_is_string(m) || json_string_length(m) >= size) {
		refuse(r, name, "is not a text that fits");
		return;
	}
	snprintf(out, size, "%s", json_string_value(m));
}

static unsigned word(struct reader *r, json_t *o, const char *name, const char *const *words)
{
	json_t *m = member(r, o, name);

	for (unsigned k = 0; json_is_string(m) && words[k]; k++)
		if (!strcmp(json_string_value(m), words[k]))
			return k;
	if (m)
		refuse(r, name, "is not one of the known words");
	return 0;
}

static json_t *object(struct reader *r, json_t *o, const char *name)
{
	json_t *m = member(r, o, name);

	if (m && !json_is_object(m))
		refuse(r, name, "is not an object");
	return m;
}

/* For sentences: the members that follow are inside this object. */
static void within(struct reader *r, const char *where)
{
	snprintf(r->at, sizeof(r->at), "%s", where);
}

static struct tai instant(struct reader *r, json_t *o)
{
	return (struct tai){ integer(r, o, "tai_ns", -9.2e18, 9.2e18) };
}

/* An array of at most `most` elements into malloc'd memory of `size` each, one by one through `read`. */
static void *array(struct reader *r, json_t *o, const char *name, size_t most, size_t size, size_t *n,
                   void (*read)(struct reader *r, json_t *element, void *out))
{
	json_t *m = member(r, o, name);
	char outside[sizeof(r->at)];
	char *out;

	*n = 0;
	if (!m)
		return NULL;
	if (!json_is_array(m) || json_array_size(m) > most) {
		refuse(r, name, "is not an array of a sensible length");
		return NULL;
	}
	out = calloc(json_array_size(m) + 1, size);
	if (!out) {
		refuse(r, name, "does not fit into memory");
		return NULL;
	}
	memcpy(outside, r->at, sizeof(outside));
	for (size_t k = 0; k < json_array_size(m) && !r->failed; k++) {
		snprintf(r->at, sizeof(r->at), "%.40s%.20s[%zu].", outside, name, k);
		read(r, json_array_get(m, k), out + k * size);
		*n = k + 1;
	}
	memcpy(r->at, outside, sizeof(outside));
	return out;
}

/* ------------------------------------------------------------------ elements */

static void read_control(struct reader *r, json_t *o, void *out)
{
	struct sidecar_control *c = out;

	text(r, o, "name", c->name, sizeof(c->name));
	text(r, o, "value", c->value, sizeof(c->value));
}

static void read_channel(struct reader *r, json_t *o, void *out)
{
	struct sidecar_channel *c = out;

	text(r, o, "name", c->name, sizeof(c->name));
	c->column = (unsigned)integer(r, o, "column", 1, MAX_CHANNELS) - 1;
	c->measure = (enum measure)word(r, o, "measure", measure_words);
	c->polarity = (int)integer(r, o, "polarity", -1, 1);
	c->wavelength_m = number(r, o, "wavelength_m", 0, 1e6, true);
	c->passband_m = number(r, o, "passband_m", 0, 1e6, true);
	c->aperture_m = number(r, o, "aperture_m", 0, 1e6, true);
	c->integration_s = number(r, o, "integration_s", 0, 1e6, true);
	c->low_pass_s = number(r, o, "low_pass_s", 0, 1e6, true);
	c->high_pass_hz = number(r, o, "high_pass_hz", 0, 1e9, true);
	if (json_object_get(o, "response_delay_s"))     /* not in the first sidecars */
		c->response_delay_s = number(r, o, "response_delay_s", -1e6, 1e6, false);
	c->rate = number(r, o, "series_rate_hz", 0, 1e9, true);
}

static void read_expected(struct reader *r, json_t *o, void *out)
{
	struct sidecar_expected *e = out;

	text(r, o, "source", e->source, sizeof(e->source));
	e->kind = (enum contact_kind)word(r, o, "kind", kind_words);
	e->when = instant(r, o);
	e->sigma_s = number(r, o, "sigma_s", 0, 1e9, true);
	e->distance_m = number(r, o, "moon_distance_m", 0, 1e12, true);
	e->speed_mps = number(r, o, "shadow_speed_mps", 0, 1e9, true);
	e->speed_tolerance = number(r, o, "shadow_speed_tolerance", 0, 1e3, true);
}

static void read_part(struct reader *r, json_t *o, void *out)
{
	struct sidecar_part *p = out;

	text(r, o, "file", p->file, sizeof(p->file));
	/* A name in the sidecar's own folder, nothing else: it is opened and may be removed. */
	if (!r->failed && (strchr(p->file, '/') || p->file[0] == '.' || !p->file[0]))
		refuse(r, "file", "is not a plain file name");
	p->first = (uint64_t)integer(r, o, "first_frame", 0, largest_count);
	p->frames = (uint64_t)integer(r, o, "frames", 0, largest_count);
}

static void read_gap(struct reader *r, json_t *o, void *out)
{
	struct sidecar_gap *g = out;

	g->first = (uint64_t)integer(r, o, "first_frame", 0, largest_count);
	g->frames = (uint64_t)integer(r, o, "frames", 0, largest_count);
	g->sigma_frames = number(r, o, "sigma_frames", 0, 1e12, true);
}

static void read_loss(struct reader *r, json_t *o, void *out)
{
	struct sidecar_loss *l = out;

	l->after = (uint64_t)integer(r, o, "after_frame", 0, largest_count);
	l->before = (uint64_t)integer(r, o, "before_frame", (double)l->after, largest_count);
	l->frames = number(r, o, "frames", -largest_count, largest_count, false);
	l->sigma_frames = number(r, o, "sigma_frames", 0, largest_count, false);
}

static void read_pulse(struct reader *r, json_t *o, void *out)
{
	struct clock_pulse *p = out;
	double frame, residual = NAN;
	json_t *second, *rest;
	int accepted;

	if (json_unpack(o, "[F,o,b,o!]", &frame, &second, &accepted, &rest) < 0 || !(fabs(frame) <= largest_count) ||
	    !(json_is_null(second) || json_is_integer(second)) || !(json_is_null(rest) || json_is_number(rest)) ||
	    (json_is_integer(second) && !(fabs((double)json_integer_value(second)) <= 9.2e9))) {
		refuse(r, "", "is not a pulse: [frame, second, accepted, residual]");
		return;
	}
	if (json_is_number(rest))
		residual = json_number_value(rest);
	p->frame = frame;
	p->second.ns = json_is_null(second) ? INT64_MIN : json_integer_value(second) * 1000000000;
	p->accepted = accepted;
	p->residual_s = residual;
}

static void read_contact(struct reader *r, json_t *o, void *out)
{
	struct contact *c = out;

	c->frame = number(r, o, "frame", -largest_count, largest_count, false);
	c->frame_sigma = number(r, o, "frame_sigma", 0, largest_count, true);
	c->when = instant(r, o);
	c->sigma_s = number(r, o, "sigma_s", 0, 1e12, true);
	c->terms.fit = number(r, o, "fit_s", 0, 1e12, true);
	c->terms.clock = number(r, o, "clock_s", 0, 1e12, true);
	c->terms.response = number(r, o, "response_s", 0, 1e12, true);
	c->time_quality = (enum time_quality)word(r, o, "time_quality", quality_words);
	c->second_confirmed = truth(r, o, "second_confirmed");
	c->kind = (enum contact_kind)word(r, o, "kind", kind_words);
	c->verdict = (enum verdict)word(r, o, "verdict", verdict_words);
	c->snr = number(r, o, "snr", -1e12, 1e12, true);
	c->chi2_excess = number(r, o, "chi2_excess", -1e30, 1e30, true);
	c->marked = !truth(r, o, "clean");
	c->fringe_gain = number(r, o, "fringe_gain", -1e30, 1e30, true);
	c->fresnel_time_s = number(r, o, "fresnel_time_s", 0, 1e9, true);
	c->shadow_speed_mps = number(r, o, "shadow_speed_mps", 0, 1e9, true);
	c->size_fresnel = number(r, o, "size_fresnel", 0, 1e9, true);
	c->flux = number(r, o, "flux", -1e30, 1e30, true);
	c->baseline = number(r, o, "baseline", -1e30, 1e30, true);
	c->channel = (unsigned)integer(r, o, "channel", 0, 1e6);
	c->expected = (int)integer(r, o, "expected", -1, 1e6);
}

static void read_reading(struct reader *r, json_t *clock, const char *name, struct clock_reading *out)
{
	json_t *o = object(r, clock, name);
	char where[32];

	snprintf(where, sizeof(where), "clock.%s.", name);
	within(r, where);
	out->when = instant(r, o);
	out->sigma_s = number(r, o, "sigma_s", 0, 1e12, true);
	out->quality = (enum time_quality)word(r, o, "time_quality", quality_words);
	out->second_confirmed = truth(r, o, "second_confirmed");
	out->terms.pulse = number(r, o, "pulse_s", 0, 1e12, true);
	out->terms.interpolation = number(r, o, "interpolation_s", 0, 1e12, true);
	out->terms.delay = number(r, o, "delay_s", 0, 1e12, true);
	out->terms.label = number(r, o, "label_s", 0, 1e12, true);
	within(r, "clock.");
}

/* ------------------------------------------------------------------ the whole */

static void read_head(struct reader *r, json_t *root, struct sidecar *s)
{
	json_t *station = object(r, root, "station"), *intake = object(r, root, "intake");

	s->state = (enum segment_state)word(r, root, "state", state_words);
	text(r, root, "version", s->version, sizeof(s->version));
	within(r, "station.");
	text(r, station, "name", s->station, sizeof(s->station));
	s->latitude_deg = number(r, station, "latitude_deg", -90, 90, true);
	s->longitude_deg = number(r, station, "longitude_deg", -360, 360, true);
	s->height_m = number(r, station, "height_m", -1e4, 1e5, true);
	within(r, "intake.");
	text(r, intake, "driver", s->driver, sizeof(s->driver));
	text(r, intake, "device", s->device, sizeof(s->device));
	s->frames.type = (enum sample_type)word(r, intake, "sample", sample_words);
	s->frames.channels = (unsigned)integer(r, intake, "channels", 1, MAX_CHANNELS);
	s->rate = number(r, intake, "rate_hz", 1e-3, 1e9, false);
	within(r, "");
	s->reason = (enum segment_reason)word(r, root, "reason", reason_words);
	s->first = (uint64_t)integer(r, root, "first_frame", 0, largest_count);
	s->clipped = (uint64_t)integer(r, root, "clipped_samples", 0, largest_count);
}

/* Not in the first sidecars, null in a replay's. */
static void read_boot(struct reader *r, json_t *root, struct sidecar *s)
{
	json_t *boot = json_object_get(root, "boot");

	s->monotonic_ns = INT64_MIN;
	if (!boot || json_is_null(boot))
		return;
	boot = object(r, root, "boot");
	within(r, "boot.");
	text(r, boot, "id", s->boot_id, sizeof(s->boot_id));
	s->monotonic_ns = (int64_t)integer(r, boot, "monotonic_ns", 0, largest_count);
	within(r, "");
}

/* Not in the first sidecars, null where nobody asked. */
static void read_health(struct reader *r, json_t *root, struct sidecar *s)
{
	json_t *o = json_object_get(root, "health");

	if (!o || json_is_null(o))
		return;
	o = object(r, root, "health");
	within(r, "health.");
	s->healthy = true;
	s->health.temperature_c = number(r, o, "temperature_c", -273.15, 1e6, true);
	s->health.load = number(r, o, "load", 0, 1e9, true);
	s->health.under_voltage = truth(r, o, "under_voltage");
	s->health.throttled = truth(r, o, "throttled");
	s->health.free_bytes = number(r, o, "free_bytes", 0, 1e24, true);
	s->health.ring_p999_s = number(r, o, "ring_p999_s", 0, 1e12, true);
	s->health.trigger_p999_s = number(r, o, "trigger_p999_s", 0, 1e12, true);
	within(r, "");
}

static void read_root(struct reader *r, json_t *root, struct sidecar *s)
{
	json_t *clock;

	s->format = (int)integer(r, root, "format", 1, 1e6);
	if (!r->failed && s->format > SIDECAR_FORMAT) {
		log_error("%s: format %d is newer than this limbwatch knows (%d)", r->name, s->format, SIDECAR_FORMAT);
		r->failed = true;
		return;
	}
	read_head(r, root, s);
	if (json_object_get(root, "mixer"))     /* what was recorded before it was invented is read all the same */
		s->control = array(r, root, "mixer", 1000, sizeof(*s->control), &s->controls, read_control);
	s->part = array(r, root, "parts", 100000, sizeof(*s->part), &s->parts, read_part);
	s->gap = array(r, root, "gaps", 1000000, sizeof(*s->gap), &s->gaps, read_gap);
	if (json_object_get(root, "silent_losses"))     /* not in the first sidecars */
		s->loss = array(r, root, "silent_losses", 1000000, sizeof(*s->loss), &s->losses, read_loss);
	s->channel = array(r, root, "channels", 1000, sizeof(*s->channel), &s->channels, read_channel);
	s->expected = array(r, root, "expected", 1000, sizeof(*s->expected), &s->expecteds, read_expected);
	s->contact = array(r, root, "contacts", 100000, sizeof(*s->contact), &s->contacts, read_contact);
	read_boot(r, root, s);
	read_health(r, root, s);
	clock = object(r, root, "clock");
	within(r, "clock.");
	s->true_rate = number(r, clock, "true_rate_hz", 0, 1e9, true);
	read_reading(r, clock, "start", &s->start);
	read_reading(r, clock, "end", &s->end);
	within(r, "");
	s->pulse = array(r, root, "pulses", 2000000, sizeof(*s->pulse), &s->pulses, read_pulse);
}

int sidecar_parse(struct sidecar *out, const char *text_, size_t size, const char *name)
{
	struct reader r = { .name = name };
	struct sidecar s = { 0 };
	json_error_t error;
	json_t *root = json_loadb(text_, size, JSON_REJECT_DUPLICATES, &error);

	if (!root) {
		log_error("%s line %d: %s", name, error.line, error.text);
		return -EINVAL;
	}
	read_root(&r, root, &s);
	json_decref(root);
	if (r.failed) {
		sidecar_clear(&s);
		return -EINVAL;
	}
	*out = s;
	return 0;
}

static int read_file(const struct disk *disk, int fd, char **out, size_t *size)
{
	int64_t length = disk->seek(fd, 0, SEEK_END), done = 0;
	char *text_;

	if (length >= 0)
		done = disk->seek(fd, 0, SEEK_SET);
	if (length < 0 || done < 0)
		return (int)(length < 0 ? length : done);
	if (length > largest_file)
		return -EFBIG;
	text_ = malloc((size_t)length + 1);
	if (!text_)
		return -ENOMEM;
	for (done = 0; done < length; ) {
		ssize_t n = disk->read(fd, text_ + done, (size_t)(length - done));

		if (n <= 0) {
			free(text_);
			return n < 0 ? (int)n : -EIO;
		}
		done += n;
	}
	*out = text_;
	*size = (size_t)length;
	return 0;
}

int sidecar_read(struct sidecar *out, const struct disk *disk, const char *path)
{
	int fd = disk->open(path, O_RDONLY, 0), ret;
	char *text_ = NULL;
	size_t size = 0;

	if (fd < 0) {
		log_error("%s: cannot be opened: %s", path, strerror(-fd));
		return fd;
	}
	ret = read_file(disk, fd, &text_, &size);
	disk->close(fd);
	if (ret < 0) {
		log_error("%s: cannot be read: %s", path, strerror(-ret));
		return ret;
	}
	ret = sidecar_parse(out, text_, size, path);
	free(text_);
	return ret;
}
