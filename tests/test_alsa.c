/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <alsa/asoundlib.h>
#include <cmocka.h>
#include <errno.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include "support/intake_probe.h"

/* The alsa intake through alsa-lib itself, at plug-ins that need no sound card: tests/data/alsa/cards.conf. */

static struct probe probe;

static const char *const formats[] = { "S16", "S24_3", "S24", "S32", "FLOAT" };

static void configure(const char *device, unsigned rate, unsigned channels, const char *format)
{
	probe_reset(&probe);
	probe_text(&probe, "device", device);
	probe_number(&probe, "rate_hz", rate);
	probe_number(&probe, "channels", channels);
	probe_text(&probe, "format", format);
	probe_number(&probe, "paced", 0);
}

static void every_format_passes_unchanged(void **state)
{
	enum { BYTES = 24 * 8 * 1000 };
	static const unsigned rates[] = { 8000, 48000, 192000 }, channels[] = { 1, 2, 8 };
	static unsigned char raw[BYTES];
	uint64_t chance = 7401;

	(void)state;
	print_message("seed 7401\n");
	for (size_t k = 0; k < BYTES; k++) {
		chance = chance * 6364136223846793005u + 1442695040888963407u;  /* Knuth, MMIX */
		raw[k] = (unsigned char)(chance >> 56);
	}
	setenv("LIMBWATCH_RAW", probe_file(&probe, "raw", raw, BYTES), 1);
	for (unsigned k = 0; k < 5; k++)
		for (unsigned r = 0; r < 3; r++)
			for (unsigned c = 0; c < 3; c++) {
				configure("recorded", rates[r], channels[c], formats[k]);
				assert_int_equal(probe_open(&probe), 0);
				const size_t frame = frame_bytes(probe.intake->format), frames = BYTES / frame;
				assert_int_equal(probe.intake->format.type, k);
				assert_int_equal(probe.intake->format.channels, channels[c]);
				assert_true(probe.intake->rate == rates[r]);
				assert_false(probe.intake->real_time);
				probe_run(&probe, frames);
				assert_true(probe.frames >= frames && probe.gaps == 0);
				assert_memory_equal(probe.bytes, raw, frames * frame);
				assert_string_equal(probe.explanation, "");
				assert_string_equal(probe.said, "");
			}
}

static void auto_takes_the_widest_there_is(void **state)
{
	(void)state;
	configure("recorded", 48000, 2, "auto");
	assert_int_equal(probe_open(&probe), 0);
	assert_int_equal(probe.intake->format.type, SAMPLE_S32);
	configure("only_float", 48000, 2, "auto");
	assert_int_equal(probe_open(&probe), 0);
	assert_int_equal(probe.intake->format.type, SAMPLE_F32);
}

static void a_paced_device_is_real_time_and_dated_by_arrival(void **state)
{
	struct timespec before, after;
	struct block block;

	(void)state;
	configure("recorded", 48000, 2, "S16");
	probe_number(&probe, "paced", 1);
	assert_int_equal(probe_open(&probe), 0);
	assert_true(probe.intake->real_time);
	assert_int_equal(probe.driver->start(probe.intake), 0);
	clock_gettime(CLOCK_MONOTONIC, &before);
	assert_int_equal(probe.driver->read(probe.intake, &block, 1000), 1);
	clock_gettime(CLOCK_MONOTONIC, &after);
	assert_int_equal(block.flags, BLOCK_STAMP_LATE);
	/* The first frame was taken within what the buffer holds, 0.5 s, before it was read. */
	assert_true(block.host_ns <= after.tv_sec * 1000000000ll + after.tv_nsec);
	assert_true(block.host_ns >= before.tv_sec * 1000000000ll + before.tv_nsec - 501000000);

	configure("recorded", 48000, 2, "S16");
	assert_int_equal(probe_open(&probe), 0);
	assert_int_equal(probe.driver->start(probe.intake), 0);
	assert_int_equal(probe.driver->read(probe.intake, &block, 1000), 1);
	assert_true(block.host_ns == INT64_MIN && block.flags == 0);
}

static void refuse(int error, const char *one, const char *two)
{
	assert_int_equal(probe_open(&probe), error);
	assert_null(probe.intake);
	assert_non_null(strstr(probe.said, one));
	assert_non_null(strstr(probe.said, two));
	assert_ptr_equal(strchr(probe.said, '\n'), probe.said + strlen(probe.said) - 1);        /* one sentence */
}

static void what_a_device_does_not_have_is_said(void **state)
{
	(void)state;
	configure("telescope", 48000, 2, "S16");
	refuse(-EINVAL, "device: ALSA knows nothing called \"telescope\"", "it knows recorded");
	configure("absent", 48000, 2, "S16");
	refuse(-ENODEV, "device: \"absent\" cannot be opened", "No such file");
	configure("fixed_rate", 48000, 2, "S16");
	refuse(-EINVAL, "rate_hz: \"fixed_rate\" grants 44100", "48000 was asked for");
	configure("four_channels", 48000, 2, "S16");
	refuse(-EINVAL, "channels: \"four_channels\" does not record 2", "offers 4 to 4");
	configure("only_float", 48000, 2, "S24_3");
	refuse(-EINVAL, "format: \"only_float\" does not have S24_3", "offers FLOAT");
	configure("recorded", 48000, 2, "S16");
	probe_number(&probe, "period_s", 0.4);
	refuse(-EINVAL, "buffer_s: 0.5 is less than twice period_s", "0.4");
	/* What it has is granted: no rate is converted behind our back, and none refused in vain. */
	configure("fixed_rate", 44100, 2, "S16");
	assert_int_equal(probe_open(&probe), 0);
	configure("four_channels", 48000, 4, "S16");
	assert_int_equal(probe_open(&probe), 0);
}

static void it_can_be_stopped_and_started(void **state)
{
	(void)state;
	configure("recorded", 48000, 2, "S16");
	for (int round = 0; round < 3; round++) {
		probe_run(&probe, 10000);
		assert_true(probe.frames >= 10000);
		probe.frames = 0;
		probe.next = 0;         /* it counts from 0 again */
	}
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(every_format_passes_unchanged),
		cmocka_unit_test(auto_takes_the_widest_there_is),
		cmocka_unit_test(a_paced_device_is_real_time_and_dated_by_arrival),
		cmocka_unit_test(what_a_device_does_not_have_is_said),
		cmocka_unit_test(it_can_be_stopped_and_started),
	};

	setenv("ALSA_CONFIG_PATH", "tests/data/alsa/cards.conf", 1);
	probe_create(&probe, &intake_alsa);
	const int failed = cmocka_run_group_tests_name("alsa", tests, NULL, NULL);
	probe_destroy(&probe);
	snd_config_update_free_global();
	return failed;
}
