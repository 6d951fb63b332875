/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <jansson.h>
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <cmocka.h>
#include "limbwatch/log.h"
#include "limbwatch/sidecar.h"
#include "support/memory_disk.h"

static char said[1024];
static unsigned sentences;

static void catch_sentence(void *context, enum log_level level, const char *sentence)
{
	(void)context;
	(void)level;
	snprintf(said, sizeof(said), "%s", sentence);
	sentences++;
}

/* Everything filled, with numbers that have no short decimal form. */
static void fill(struct sidecar *s)
{
	struct clock_reading reading = {
		.when = { 1932859462745292506 }, .sigma_s = 1 / 3e7, .quality = TIME_PULSE, .second_confirmed = true,
		.terms = { 1 / 7e9, 1 / 9e8, 1e-7, 0 },
	};

	*s = (struct sidecar){
		.format = SIDECAR_FORMAT, .version = "0.1", .station = "Brackenfold \"\xc3\xa9\" / \\", .latitude_deg = 51.3,
		.longitude_deg = -2.9, .height_m = NAN, .driver = "file", .device = "a\tb", .frames = { SAMPLE_S24_3, 2 },
		.rate = 48000 / 1.001, .reason = REASON_TRIGGER, .state = SEGMENT_CLOSED, .first = UINT64_C(123456789012),
		.start = reading, .end = reading, .true_rate = 47999.1 / 3, .clipped = 7,
	};
	s->channels = s->expecteds = s->parts = s->gaps = s->contacts = 1;
	s->pulses = 2;
	s->channel = calloc(1, sizeof(*s->channel));
	s->expected = calloc(1, sizeof(*s->expected));
	s->part = calloc(1, sizeof(*s->part));
	s->gap = calloc(1, sizeof(*s->gap));
	s->contact = calloc(1, sizeof(*s->contact));
	s->pulse = calloc(2, sizeof(*s->pulse));
	s->channel[0] = (struct sidecar_channel){ "diode", 1, MEASURE_VOLTAGE, -1, 620e-9, 1e-7 / 3, 0.28, 0.1, 0.2, 0.3, 800 / 7.0 };
	s->expected[0] = (struct sidecar_expected){ "Anwen", CONTACT_EMERSION, { 12345 }, 0.8, 3.7e8, 612.3, 0.1 };
	s->part[0] = (struct sidecar_part){ "a.wav", 5, 99 };
	s->gap[0] = (struct sidecar_gap){ 17, 3, 1 / 3.0 };
	s->pulse[0] = (struct clock_pulse){ 28415.35764961753, { INT64_C(1932859449) * 1000000000 }, true, -8.16e-9 / 3 };
	s->pulse[1] = (struct clock_pulse){ 76414.1, { INT64_MIN }, false, NAN };
	s->contact[0] = (struct contact){
		.frame = 688176.00150517409, .frame_sigma = 44.5 / 3, .when = { 1932859462745321437 }, .sigma_s = NAN,
		.terms = { 1 / 3e3, 1 / 3e7, 0 }, .time_quality = TIME_FREE, .second_confirmed = false,
		.kind = CONTACT_EMERSION, .verdict = VERDICT_FRINGES, .snr = 23.1 / 3, .chi2_excess = 0.8, .marked = true,
		.fringe_gain = -3.3, .fresnel_time_s = 0.018 / 7, .shadow_speed_mps = 591.6, .size_fresnel = 1.2,
		.flux = 0.19, .baseline = -0.2, .channel = 1, .expected = -1,
	};
}

static bool same(double a, double b)
{
	return a == b || (isnan(a) && isnan(b));
}

static void everything_comes_back_exactly(void **state)
{
	struct sidecar a, b;

	(void)state;
	memory_disk_reset();
	fill(&a);
	assert_int_equal(sidecar_write(&a, &disk_memory, "/d/x.json"), 0);
	assert_int_equal(sidecar_read(&b, &disk_memory, "/d/x.json"), 0);
	assert_string_equal(a.station, b.station);
	assert_string_equal(a.device, b.device);
	assert_true(same(a.latitude_deg, b.latitude_deg) && same(a.height_m, b.height_m) && same(a.rate, b.rate));
	assert_true(a.first == b.first && a.state == b.state && a.reason == b.reason && a.clipped == b.clipped);
	assert_true(a.frames.type == b.frames.type && a.frames.channels == b.frames.channels);
	assert_true(a.start.when.ns == b.start.when.ns && same(a.start.sigma_s, b.start.sigma_s) &&
	            same(a.end.terms.interpolation, b.end.terms.interpolation) && same(a.true_rate, b.true_rate));
	assert_true(b.channels == 1 && b.expecteds == 1 && b.parts == 1 && b.gaps == 1 && b.contacts == 1 && b.pulses == 2);
	assert_true(same(a.channel[0].passband_m, b.channel[0].passband_m) && b.channel[0].column == 1 &&
	            b.channel[0].polarity == -1 && same(a.channel[0].rate, b.channel[0].rate));
	assert_true(a.expected[0].when.ns == b.expected[0].when.ns && b.expected[0].kind == CONTACT_EMERSION);
	assert_true(!strcmp(b.part[0].file, "a.wav") && b.part[0].first == 5 && b.part[0].frames == 99);
	assert_true(b.gap[0].first == 17 && same(a.gap[0].sigma_frames, b.gap[0].sigma_frames));
	for (int k = 0; k < 2; k++)
		assert_true(same(a.pulse[k].frame, b.pulse[k].frame) && a.pulse[k].second.ns == b.pulse[k].second.ns &&
		            a.pulse[k].accepted == b.pulse[k].accepted && same(a.pulse[k].residual_s, b.pulse[k].residual_s));
	assert_true(same(a.contact[0].frame, b.contact[0].frame) && same(a.contact[0].sigma_s, b.contact[0].sigma_s) &&
	            same(a.contact[0].snr, b.contact[0].snr) && b.contact[0].marked && b.contact[0].expected == -1 &&
	            a.contact[0].when.ns == b.contact[0].when.ns && b.contact[0].verdict == VERDICT_FRINGES &&
	            same(a.contact[0].fresnel_time_s, b.contact[0].fresnel_time_s));
	sidecar_clear(&a);
	sidecar_clear(&b);
}

static void a_failed_writing_leaves_the_former_one(void **state)
{
	struct sidecar a, b;

	(void)state;
	for (unsigned k = 0; k < 12; k++) {
		unsigned before;

		memory_disk_reset();
		fill(&a);
		assert_int_equal(sidecar_write(&a, &disk_memory, "/d/x.json"), 0);
		a.clipped = 99;
		before = memory_disk_calls();
		memory_disk_fail(before + k, ENOSPC, false);
		sidecar_write(&a, &disk_memory, "/d/x.json");
		memory_disk_fail(0, 0, false);
		assert_int_equal(sidecar_read(&b, &disk_memory, "/d/x.json"), 0);
		assert_true(b.clipped == 7 || b.clipped == 99);
		sidecar_clear(&a);
		sidecar_clear(&b);
	}
}

/* ------------------------------------------------------------------ malformed */

static json_t *whole(void)
{
	struct sidecar s;
	size_t size;
	const char *text;
	json_t *root;

	memory_disk_reset();
	fill(&s);
	assert_int_equal(sidecar_write(&s, &disk_memory, "/d/x.json"), 0);
	sidecar_clear(&s);
	text = memory_disk_file("x.json", &size);
	root = json_loadb(text, size, 0, NULL);
	assert_non_null(root);
	return root;
}

static int parse(json_t *root)
{
	char *text = json_dumps(root, JSON_REAL_PRECISION(17));
	struct sidecar s;
	int ret;

	said[0] = 0;
	sentences = 0;
	log_set_sink(catch_sentence, NULL);
	ret = sidecar_parse(&s, text, strlen(text), "x.json");
	log_set_sink(NULL, NULL);
	if (ret == 0)
		sidecar_clear(&s);
	free(text);
	return ret;
}

static unsigned refused;

/* Members that only people read. */
static bool read_by_people_only(const char *name)
{
	return !strcmp(name, "program") || !strcmp(name, "utc");
}

static void spoil_member(json_t *root, json_t *o, const char *name)
{
	json_t *kept = json_incref(json_object_get(o, name));

	for (int way = 0; way < 2; way++) {
		if (way == 0)
			json_object_del(o, name);
		else
			json_object_set_new(o, name, json_pack("[[i]]", 1));
		if (parse(root) != -EINVAL || sentences != 1 || !strstr(said, name) || !strstr(said, "x.json"))
			fail_msg("%s spoilt was not refused by name in one sentence: %s", name, said);
		refused++;
	}
	json_object_set_new(o, name, kept);
}

/* Every member of o removed, and replaced by an array: both are refused in one sentence that names it. */
static void spoil(json_t *root, json_t *o)
{
	char names[64][64];
	const char *name;
	json_t *value;
	size_t n = 0;

	json_object_foreach(o, name, value)
		snprintf(names[n++], sizeof(names[0]), "%s", name);
	for (size_t k = 0; k < n; k++) {
		value = json_object_get(o, names[k]);
		if (json_is_object(value))
			spoil(root, value);
		if (json_is_object(json_array_get(value, 0)))
			spoil(root, json_array_get(value, 0));
		if (!read_by_people_only(names[k]))
			spoil_member(root, o, names[k]);
	}
}

static void every_malformed_member_is_refused_by_name(void **state)
{
	json_t *root = whole();

	(void)state;
	assert_int_equal(parse(root), 0);
	spoil(root, root);
	assert_true(refused > 100);
	json_decref(root);
}

static void what_must_not_be_believed_is_refused(void **state)
{
	static const struct { const char *list, *member, *json; } cases[] = {
		{ "parts", "file", "\"../../etc/passwd\"" }, { "parts", "file", "\".hidden\"" }, { "parts", "frames", "-1" },
		{ "contacts", "kind", "\"graze\"" }, { "contacts", "snr", "1e300" }, { "channels", "column", "9" },
		{ "gaps", "frames", "1.5" },
	};

	(void)state;
	for (size_t k = 0; k < sizeof(cases) / sizeof(*cases); k++) {
		json_t *root = whole(), *o = json_array_get(json_object_get(root, cases[k].list), 0);

		json_object_set_new(o, cases[k].member, json_loads(cases[k].json, JSON_DECODE_ANY, NULL));
		assert_int_equal(parse(root), -EINVAL);
		assert_non_null(strstr(said, cases[k].member));
		json_decref(root);
	}
}

static void a_newer_format_is_refused_and_unknown_members_are_passed_over(void **state)
{
	json_t *root = whole();

	(void)state;
	json_object_set_new(root, "something_new", json_pack("{s:[i]}", "x", 1));
	assert_int_equal(parse(root), 0);
	json_object_set_new(root, "format", json_integer(SIDECAR_FORMAT + 1));
	assert_int_equal(parse(root), -EINVAL);
	assert_non_null(strstr(said, "newer"));
	json_decref(root);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(everything_comes_back_exactly),
		cmocka_unit_test(a_failed_writing_leaves_the_former_one),
		cmocka_unit_test(every_malformed_member_is_refused_by_name),
		cmocka_unit_test(what_must_not_be_believed_is_refused),
		cmocka_unit_test(a_newer_format_is_refused_and_unknown_members_are_passed_over),
	};
	int failed = cmocka_run_group_tests(tests, NULL, NULL);

	memory_disk_reset();
	return failed;
}
