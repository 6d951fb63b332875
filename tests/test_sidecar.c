/* SPDX-License-Identifier: GPL-3.0-or-later */
/* Everything written comes back, and whatever is wrong in a file is named in one sentence. */
#include <errno.h>
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <cmocka.h>
#include <jansson.h>
#include "limbwatch/log.h"
#include "limbwatch/sidecar.h"
#include "support/memory_disk.h"

static const char path[] = "/d/20310402T012315Z_brackenfold.json";
static const char file[] = "20310402T012315Z_brackenfold.json";

static struct { unsigned sentences; char last[512]; } said;

static void hear(void *context, enum log_level level, const char *sentence)
{
	(void)context;
	(void)level;
	said.sentences++;
	snprintf(said.last, sizeof(said.last), "%s", sentence);
}

/* ------------------------------------------------------------------ one of everything, no two values the same */

static struct sidecar_control controls[] = {
	{ "Mic Capture Volume", "23/20 of 0 to 39" }, { "Input \xc3\xa9 \"2\"", "Line, \\" },
};
static struct sidecar_channel channels[] = {
	{ .name = "diode", .column = 0, .measure = MEASURE_CHOPPED, .polarity = -1, .wavelength_m = 620e-9,
	  .passband_m = 120e-9, .aperture_m = 0.28, .integration_s = 1e-4 / 3, .low_pass_s = 2e-5 / 7, .high_pass_hz = 0.1,
	  .response_delay_s = -0.0125, .rate = 4800.000000000001 },
	{ .name = "gps \xc3\xa9 \"2\"\n", .column = 7, .measure = MEASURE_AUX, .polarity = 1, .wavelength_m = 0.21 },
};
static struct sidecar_expected expecteds[] = {
	{ .source = "Anwen", .kind = CONTACT_EMERSION, .when = { INT64_C(1932773025123456789) }, .sigma_s = 0.8,
	  .distance_m = 3.715e8, .speed_mps = 612.25, .speed_tolerance = 0.15 },
};
static struct sidecar_part parts[] = { { "a.wav", 70000, 123456 }, { "a_p2.wav", 193456, 9007199254740992 } };
static struct sidecar_gap gaps[] = { { 71000, 5000, 2.5 }, { 80000, 3, 0 } };
static struct sidecar_loss losses[] = { { 72000, 73000, 48, 0 }, { 90001, 90001, -12.5, 0.25 } };
static struct clock_pulse pulses[] = {
	{ .frame = 70123.4375, .second = { INT64_C(1932773025000000000) }, .accepted = true, .residual_s = -1.25e-8 },
	{ .frame = 71123.1, .second = { INT64_MIN }, .accepted = false },
};
static struct contact contacts[] = {
	{ .frame = 70321.0625, .frame_sigma = 0.3, .when = { INT64_C(1932773025987654321) }, .sigma_s = 1.1e-4,
	  .terms = { .fit = 1e-4, .clock = 2e-7, .response = 3e-5 }, .time_quality = TIME_PULSE, .second_confirmed = true,
	  .kind = CONTACT_EMERSION, .verdict = VERDICT_FRINGES, .snr = 29.7, .chi2_excess = 1.03, .marked = true,
	  .fringe_gain = -41.5, .fresnel_time_s = 0.0171, .shadow_speed_mps = 640.5, .size_fresnel = 0.22,
	  .flux = 0.02, .baseline = -0.003, .channel = 1, .expected = -1 },
};

static struct sidecar everything(void)
{
	channels[1].passband_m = channels[1].high_pass_hz = channels[1].rate = NAN;
	pulses[1].residual_s = NAN;
	return (struct sidecar){
		.format = SIDECAR_FORMAT, .version = "0.1.0", .station = "Brackenfold", .latitude_deg = -41.0625,
		.longitude_deg = 172.1, .height_m = NAN, .driver = "synthetic", .device = "hw:1,0",
		.frames = { SAMPLE_S24, 8 }, .rate = 192000, .reason = REASON_TRIGGER, .state = SEGMENT_CLOSED, .first = 70000,
		.start = { .when = { INT64_C(1932773020000000001) }, .sigma_s = 1e-6, .quality = TIME_PULSE,
			.second_confirmed = true, .terms = { 1.5e-8, 2.5e-8, 3.5e-8, 4.5e-8 } },
		.end = { .when = { INT64_C(1932773040000000003) }, .sigma_s = NAN, .quality = TIME_HOST,
			.terms = { 5.5e-8, 6.5e-8, NAN, 8.5e-8 } },
		.true_rate = 191992.3200000001, .boot_id = "0123456789abcdef0123456789abcdef", .monotonic_ns = 5123456789012345,
		.clipped = 17, .healthy = true,
		.health = { 61.25, 0.75, true, false, 12345678901.0, 0.00123, NAN }, .controls = 2, .control = controls,
		.channels = 2, .channel = channels, .expecteds = 1, .expected = expecteds, .parts = 2, .part = parts,
		.gaps = 2, .gap = gaps, .losses = 2, .loss = losses, .pulses = 2, .pulse = pulses, .contacts = 1, .contact = contacts,
	};
}

static bool same(double a, double b)
{
	return a == b || (isnan(a) && isnan(b));
}

static void assert_same_reading(const struct clock_reading *a, const struct clock_reading *b)
{
	assert_true(a->when.ns == b->when.ns && a->quality == b->quality && a->second_confirmed == b->second_confirmed);
	assert_true(same(a->sigma_s, b->sigma_s) && same(a->terms.pulse, b->terms.pulse) &&
	            same(a->terms.interpolation, b->terms.interpolation) && same(a->terms.delay, b->terms.delay) &&
	            same(a->terms.label, b->terms.label));
}

static void assert_same_channels(const struct sidecar *a, const struct sidecar *b)
{
	assert_int_equal(a->channels, b->channels);
	for (size_t k = 0; k < a->channels; k++) {
		const struct sidecar_channel *x = &a->channel[k], *y = &b->channel[k];

		assert_string_equal(x->name, y->name);
		assert_true(x->column == y->column && x->measure == y->measure && x->polarity == y->polarity);
		assert_true(same(x->wavelength_m, y->wavelength_m) && same(x->passband_m, y->passband_m) &&
		            same(x->aperture_m, y->aperture_m) && same(x->integration_s, y->integration_s) &&
		            same(x->low_pass_s, y->low_pass_s) && same(x->high_pass_hz, y->high_pass_hz) &&
		            x->response_delay_s == y->response_delay_s && same(x->rate, y->rate));
	}
}

static void assert_same_contacts(const struct sidecar *a, const struct sidecar *b)
{
	assert_int_equal(a->contacts, b->contacts);
	for (size_t k = 0; k < a->contacts; k++) {
		const struct contact *x = &a->contact[k], *y = &b->contact[k];

		assert_true(x->frame == y->frame && same(x->frame_sigma, y->frame_sigma) && x->when.ns == y->when.ns &&
		            same(x->sigma_s, y->sigma_s));
		assert_true(same(x->terms.fit, y->terms.fit) && same(x->terms.clock, y->terms.clock) &&
		            same(x->terms.response, y->terms.response));
		assert_true(x->time_quality == y->time_quality && x->second_confirmed == y->second_confirmed &&
		            x->kind == y->kind && x->verdict == y->verdict && x->marked == y->marked);
		assert_true(same(x->snr, y->snr) && same(x->chi2_excess, y->chi2_excess) &&
		            same(x->fringe_gain, y->fringe_gain) && same(x->fresnel_time_s, y->fresnel_time_s));
		assert_true(same(x->shadow_speed_mps, y->shadow_speed_mps) && same(x->size_fresnel, y->size_fresnel) &&
		            same(x->flux, y->flux) && same(x->baseline, y->baseline));
		assert_true(x->channel == y->channel && x->expected == y->expected);
	}
}

static void assert_same_lists(const struct sidecar *a, const struct sidecar *b)
{
	assert_int_equal(a->losses, b->losses);
	for (size_t k = 0; k < a->losses; k++)
		assert_true(a->loss[k].after == b->loss[k].after && a->loss[k].before == b->loss[k].before &&
		            a->loss[k].frames == b->loss[k].frames && a->loss[k].sigma_frames == b->loss[k].sigma_frames);
	assert_int_equal(a->controls, b->controls);
	for (size_t k = 0; k < a->controls; k++) {
		assert_string_equal(a->control[k].name, b->control[k].name);
		assert_string_equal(a->control[k].value, b->control[k].value);
	}
	assert_true(a->expecteds == b->expecteds && a->parts == b->parts && a->gaps == b->gaps && a->pulses == b->pulses);
	for (size_t k = 0; k < a->expecteds; k++) {
		const struct sidecar_expected *x = &a->expected[k], *y = &b->expected[k];

		assert_string_equal(x->source, y->source);
		assert_true(x->kind == y->kind && x->when.ns == y->when.ns && same(x->sigma_s, y->sigma_s) &&
		            same(x->distance_m, y->distance_m) && same(x->speed_mps, y->speed_mps) &&
		            same(x->speed_tolerance, y->speed_tolerance));
	}
	for (size_t k = 0; k < a->parts; k++) {
		assert_string_equal(a->part[k].file, b->part[k].file);
		assert_true(a->part[k].first == b->part[k].first && a->part[k].frames == b->part[k].frames);
	}
	for (size_t k = 0; k < a->gaps; k++)
		assert_true(a->gap[k].first == b->gap[k].first && a->gap[k].frames == b->gap[k].frames &&
		            a->gap[k].sigma_frames == b->gap[k].sigma_frames);
	for (size_t k = 0; k < a->pulses; k++)
		assert_true(a->pulse[k].frame == b->pulse[k].frame && a->pulse[k].second.ns == b->pulse[k].second.ns &&
		            a->pulse[k].accepted == b->pulse[k].accepted &&
		            same(a->pulse[k].residual_s, b->pulse[k].residual_s));
}

static void every_member_comes_back_exactly(void **state)
{
	struct sidecar in = everything(), out;

	(void)state;
	assert_int_equal(sidecar_write(&in, &disk_memory, path), 0);
	assert_int_equal(sidecar_read(&out, &disk_memory, path), 0);
	assert_int_equal(said.sentences, 0);
	assert_int_equal(out.format, in.format);
	assert_string_equal(out.version, in.version);
	assert_string_equal(out.station, in.station);
	assert_string_equal(out.driver, in.driver);
	assert_string_equal(out.device, in.device);
	assert_true(out.latitude_deg == in.latitude_deg && out.longitude_deg == in.longitude_deg && isnan(out.height_m));
	assert_true(out.frames.type == in.frames.type && out.frames.channels == in.frames.channels && out.rate == in.rate);
	assert_true(out.reason == in.reason && out.state == in.state && out.first == in.first && out.clipped == in.clipped &&
	            out.true_rate == in.true_rate && out.monotonic_ns == in.monotonic_ns);
	assert_string_equal(out.boot_id, in.boot_id);
	assert_true(out.healthy && out.health.temperature_c == 61.25 && out.health.load == 0.75 && out.health.under_voltage &&
	            !out.health.throttled && out.health.free_bytes == 12345678901.0 && out.health.ring_p999_s == 0.00123 &&
	            isnan(out.health.trigger_p999_s));
	assert_same_reading(&out.start, &in.start);
	assert_same_reading(&out.end, &in.end);
	assert_same_channels(&out, &in);
	assert_same_contacts(&out, &in);
	assert_same_lists(&out, &in);
	sidecar_clear(&out);
	assert_null(out.contact);
}

/* ------------------------------------------------------------------ what is wrong is named */

static char *written(size_t *size)
{
	struct sidecar in = everything();
	const char *text;
	char *copy;

	memory_disk_reset();
	assert_int_equal(sidecar_write(&in, &disk_memory, path), 0);
	text = memory_disk_file(file, size);
	copy = malloc(*size + 1);
	memcpy(copy, text, *size);
	copy[*size] = 0;
	return copy;
}

/* The text is refused with one sentence that names the file and `member`. */
static void assert_refused(const json_t *root, const char *member)
{
	struct sidecar out = { .format = 4711 };
	char *text = json_dumps(root, 0), where[128];
	int ret;

	said.sentences = 0;
	said.last[0] = 0;
	ret = sidecar_parse(&out, text, strlen(text), "x.json");
	snprintf(where, sizeof(where), "x.json: member %s ", member);
	if (ret != -EINVAL || said.sentences != 1 || strncmp(said.last, where, strlen(where)))
		fail_msg("%s: answer %d, %u sentences, \"%s\"", where, ret, said.sentences, said.last);
	assert_int_equal(out.format, 4711);
	free(text);
}

static unsigned tried;

/* Not in the first sidecars. */
static bool optional(const char *name)
{
	return !strcmp(name, "silent_losses") || !strcmp(name, "response_delay_s") || !strcmp(name, "boot") ||
		!strcmp(name, "mixer") || !strcmp(name, "health");
}

/* Every member below `at` in turn missing and of a type that nothing has there. */
static void spoil(const json_t *root, json_t *at, const char *where)
{
	json_t *names = json_object(), *whole, *element;
	const char *name;
	char here[96];
	size_t k;

	/* Goes through a copy: a key dies with its member. */
	json_object_update(names, at);
	json_object_foreach(names, name, whole) {

		if (!strcmp(name, "utc") || !strcmp(name, "program"))
			continue;       /* for people: not read */
		snprintf(here, sizeof(here), "%s%s", where, name);
		json_object_set_new(at, name, json_is_object(whole) ? json_string("x") : json_pack("{s:s}", "x", "y"));
		assert_refused(root, here);
		json_object_del(at, name);
		if (!optional(name))
			assert_refused(root, here);
		json_object_set(at, name, whole);
		tried++;
		if (json_is_object(whole)) {
			snprintf(here, sizeof(here), "%s%s.", where, name);
			spoil(root, whole, here);
		}
		json_array_foreach(whole, k, element) {
			snprintf(here, sizeof(here), "%s[%zu].", name, k);
			if (json_is_object(element))
				spoil(root, element, here);
		}
	}
	json_decref(names);
}

static json_t *sound(void)
{
	size_t size;
	char *text = written(&size);
	json_t *root = json_loadb(text, size, 0, NULL);

	free(text);
	assert_non_null(root);
	return root;
}

static void a_member_missing_or_of_the_wrong_type_is_named(void **state)
{
	json_t *root = sound();

	(void)state;
	tried = 0;
	spoil(root, root, "");
	print_message("# %u members, each missing and of the wrong type\n", tried);
	assert_true(tried > 90);
	json_decref(root);
}

/* First element of a list, or the object, that holds a member. */
static json_t *inside(json_t *root, const char *name)
{
	json_t *o = *name ? json_object_get(root, name) : root;

	return json_is_array(o) ? json_array_get(o, 0) : o;
}

static void a_value_out_of_range_is_named(void **state)
{
	static const struct { const char *in, *member, *value, *named; } cases[] = {
		{ "", "format", "0", "format" },
		{ "", "state", "\"asleep\"", "state" },
		{ "", "reason", "\"Vigil\"", "reason" },
		{ "", "first_frame", "-1", "first_frame" },
		{ "", "first_frame", "1.5", "first_frame" },
		{ "", "first_frame", "9223372036854775807", "first_frame" },
		{ "", "clipped_samples", "-1", "clipped_samples" },
		{ "", "version", "\"01234567890123456789012345678901\"", "version" },
		{ "station", "latitude_deg", "90.1", "station.latitude_deg" },
		{ "station", "longitude_deg", "-361", "station.longitude_deg" },
		{ "station", "height_m", "1e6", "station.height_m" },
		{ "intake", "sample", "\"S8\"", "intake.sample" },
		{ "intake", "channels", "0", "intake.channels" },
		{ "intake", "channels", "9", "intake.channels" },
		{ "intake", "rate_hz", "0", "intake.rate_hz" },
		{ "intake", "rate_hz", "null", "intake.rate_hz" },
		{ "channels", "column", "0", "channels[0].column" },
		{ "channels", "column", "9", "channels[0].column" },
		{ "channels", "measure", "\"\"", "channels[0].measure" },
		{ "channels", "polarity", "2", "channels[0].polarity" },
		{ "channels", "wavelength_m", "-1e-9", "channels[0].wavelength_m" },
		{ "mixer", "name", "1", "mixer[0].name" },
		{ "mixer", "value", "\"1234567890123456789012345678901234567890123456789012345678901234\"", "mixer[0].value" },
		{ "expected", "kind", "\"Immersion\"", "expected[0].kind" },
		{ "expected", "tai_ns", "9223372036854775807", "expected[0].tai_ns" },
		{ "expected", "sigma_s", "-1", "expected[0].sigma_s" },
		{ "parts", "file", "\"../a.wav\"", "parts[0].file" },
		{ "parts", "file", "\"/a.wav\"", "parts[0].file" },
		{ "parts", "file", "\"..\"", "parts[0].file" },
		{ "parts", "file", "\"\"", "parts[0].file" },
		{ "parts", "frames", "-1", "parts[0].frames" },
		{ "gaps", "sigma_frames", "-0.1", "gaps[0].sigma_frames" },
		{ "silent_losses", "before_frame", "71999", "silent_losses[0].before_frame" },
		{ "silent_losses", "frames", "null", "silent_losses[0].frames" },
		{ "silent_losses", "sigma_frames", "-1", "silent_losses[0].sigma_frames" },
		{ "contacts", "frame", "null", "contacts[0].frame" },
		{ "contacts", "frame", "1e300", "contacts[0].frame" },
		{ "contacts", "sigma_s", "-1", "contacts[0].sigma_s" },
		{ "contacts", "time_quality", "\"good\"", "contacts[0].time_quality" },
		{ "contacts", "verdict", "\"fringes\"", "contacts[0].verdict" },
		{ "contacts", "clean", "1", "contacts[0].clean" },
		{ "contacts", "channel", "-1", "contacts[0].channel" },
		{ "contacts", "expected", "-2", "contacts[0].expected" },
		{ "clock", "true_rate_hz", "-1", "clock.true_rate_hz" },
	};

	(void)state;
	for (size_t k = 0; k < sizeof(cases) / sizeof(*cases); k++) {
		json_t *root = sound(), *value = json_loads(cases[k].value, JSON_DECODE_ANY, NULL);

		assert_non_null(value);
		json_object_set_new(inside(root, cases[k].in), cases[k].member, value);
		assert_refused(root, cases[k].named);
		json_decref(root);
	}
}

static void a_pulse_that_is_none_is_named(void **state)
{
	static const char *const wrong[] = {
		"[]", "[1]", "[1, null, true]", "[1, null, 1, 0]", "[\"1\", null, true, 0]", "[null, null, true, 0]",
		"[1, 0.5, true, 0]", "[1, 9300000000, true, 0]", "[1, -9223372036854775808, true, 0]",
		"[1, 9223372036854775807, true, 0]", "[1, null, true, \"0\"]", "[1, null, true, 0, 0]", "[1e300, null, true, 0]",
		"{}", "1",
	};

	(void)state;
	for (size_t k = 0; k < sizeof(wrong) / sizeof(*wrong); k++) {
		json_t *root = sound(), *pulse = json_loads(wrong[k], JSON_DECODE_ANY, NULL);

		assert_non_null(pulse);
		json_array_set_new(json_object_get(root, "pulses"), 1, pulse);
		assert_refused(root, "pulses[1].");
		json_decref(root);
	}
}

static void a_newer_format_is_refused_an_unknown_member_passed_over(void **state)
{
	json_t *root = sound();
	struct sidecar out;
	char *text;

	(void)state;
	json_object_set_new(root, "weather", json_string("clear"));
	json_object_del(root, "mixer");         /* as before it was invented */
	text = json_dumps(root, 0);
	assert_int_equal(sidecar_parse(&out, text, strlen(text), "x.json"), 0);
	assert_true(out.controls == 0 && !out.control);
	sidecar_clear(&out);
	free(text);
	json_object_set_new(root, "format", json_integer(SIDECAR_FORMAT + 1));
	json_object_del(root, "state");         /* whatever it may be called there */
	text = json_dumps(root, 0);
	assert_int_equal(sidecar_parse(&out, text, strlen(text), "x.json"), -EINVAL);
	assert_int_equal(said.sentences, 1);
	assert_string_equal(said.last, "x.json: format 2 is newer than this limbwatch knows (1)");
	free(text);
	json_decref(root);
}

static void a_sidecar_from_before_silent_losses_is_read(void **state)
{
	json_t *root = sound();
	struct sidecar out;
	char *text;

	(void)state;
	json_object_del(root, "silent_losses");
	text = json_dumps(root, 0);
	assert_int_equal(sidecar_parse(&out, text, strlen(text), "x.json"), 0);
	assert_true(out.losses == 0 && out.gaps == 2);
	sidecar_clear(&out);
	free(text);
	json_decref(root);
}

/* A file cut off anywhere is refused with one sentence; nothing is read past its end. */
static void a_file_cut_off_anywhere_is_refused(void **state)
{
	size_t size;
	char *text = written(&size);
	struct sidecar out;

	(void)state;
	for (size_t n = 0; n + 2 < size; n++) {
		char *part = malloc(n ? n : 1);

		memcpy(part, text, n);
		said.sentences = 0;
		assert_int_equal(sidecar_parse(&out, part, n, "x.json"), -EINVAL);
		assert_int_equal(said.sentences, 1);
		assert_null(strpbrk(said.last, "\n\r\033"));
		free(part);
	}
	free(text);
}

/* Whatever call fails, the file that was there is whole: the old one or the new one. */
static void a_write_that_fails_leaves_the_old_one(void **state)
{
	struct sidecar in = everything(), out;
	unsigned calls, k;

	(void)state;
	for (k = 0; k < 100; k++)
		for (int dead = 0; dead < 2; dead++) {
			int ret;

			memory_disk_reset();
			in.clipped = 1;
			assert_int_equal(sidecar_write(&in, &disk_memory, path), 0);
			calls = memory_disk_calls();
			in.clipped = 2;
			memory_disk_fail(calls + k, ENOSPC, dead);
			ret = sidecar_write(&in, &disk_memory, path);
			if (memory_disk_calls() <= calls + k) {
				print_message("# %u disk calls failed in turn\n", k);
				assert_true(k >= 5);
				return;
			}
			memory_disk_reboot(dead ? SURVIVE_NAMES : SURVIVE_SYNCED);
			assert_int_equal(sidecar_read(&out, &disk_memory, path), 0);
			assert_true(out.clipped == 1 || out.clipped == 2);
			assert_true(ret < 0 || out.clipped == 2);
			sidecar_clear(&out);
		}
	fail();
}

static void a_file_that_is_not_there_is_said(void **state)
{
	struct sidecar out;

	(void)state;
	assert_int_equal(sidecar_read(&out, &disk_memory, "/d/none.json"), -ENOENT);
	assert_int_equal(said.sentences, 1);
	assert_non_null(strstr(said.last, "/d/none.json"));
}

static int set_up(void **state)
{
	(void)state;
	memory_disk_reset();
	memset(&said, 0, sizeof(said));
	log_set_sink(hear, NULL);
	return 0;
}

static int tear_down(void **state)
{
	(void)state;
	log_set_sink(NULL, NULL);
	memory_disk_reset();
	return 0;
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test_setup_teardown(every_member_comes_back_exactly, set_up, tear_down),
		cmocka_unit_test_setup_teardown(a_member_missing_or_of_the_wrong_type_is_named, set_up, tear_down),
		cmocka_unit_test_setup_teardown(a_value_out_of_range_is_named, set_up, tear_down),
		cmocka_unit_test_setup_teardown(a_pulse_that_is_none_is_named, set_up, tear_down),
		cmocka_unit_test_setup_teardown(a_sidecar_from_before_silent_losses_is_read, set_up, tear_down),
		cmocka_unit_test_setup_teardown(a_newer_format_is_refused_an_unknown_member_passed_over, set_up, tear_down),
		cmocka_unit_test_setup_teardown(a_file_cut_off_anywhere_is_refused, set_up, tear_down),
		cmocka_unit_test_setup_teardown(a_write_that_fails_leaves_the_old_one, set_up, tear_down),
		cmocka_unit_test_setup_teardown(a_file_that_is_not_there_is_said, set_up, tear_down),
	};

	return cmocka_run_group_tests(tests, NULL, NULL);
}
