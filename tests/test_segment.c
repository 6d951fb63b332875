/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * What stands in a recorded file, byte by byte: RIFF/WAVE after Microsoft and IBM, Multimedia Programming Interface, 1991; bext after
 * EBU Tech 3285 (offsets within the chunk from memory: date 320, time 330, reference 338).
 */
#include <errno.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <cmocka.h>
#include "limbwatch/log.h"
#include "limbwatch/segment.h"
#include "support/memory_disk.h"

enum { RATE = 1000, FRAMES = 1001 };

static const struct tai start = { INT64_C(1932772995) * 1000000000 + 37 * INT64_C(1000000000) };

static struct segment_header header(enum sample_type type, unsigned channels)
{
	return (struct segment_header){
		.folder = "/d", .name = "a", .format = { type, channels }, .rate = RATE, .station = "Brackenfold",
		.description = "Anwen", .start = start, .quality = TIME_HOST, .first = 70000,
	};
}

/* Any bytes: xorshift32 with a fixed seed. */
static void fill(unsigned char *to, size_t n)
{
	uint32_t x = 20260402;

	for (size_t k = 0; k < n; k++) {
		x ^= x << 13;
		x ^= x >> 17;
		x ^= x << 5;
		to[k] = (unsigned char)(x >> 24);
	}
}

static uint32_t u32(const unsigned char *p)
{
	return p[0] | (uint32_t)p[1] << 8 | (uint32_t)p[2] << 16 | (uint32_t)p[3] << 24;
}

/* A chunk of a file that must be sound from end to end. */
static const unsigned char *chunk(const char *name, const char *id, size_t *n)
{
	const unsigned char *found = NULL, *data;
	size_t size, at = 12;

	data = memory_disk_file(name, &size);
	assert_non_null(data);
	assert_memory_equal(data, "RIFF", 4);
	assert_memory_equal(data + 8, "WAVE", 4);
	assert_int_equal(u32(data + 4), size - 8);
	while (at < size) {
		assert_true(at + 8 <= size);
		if (!memcmp(data + at, id, 4)) {
			found = data + at + 8;
			*n = u32(data + at + 4);
		}
		at += 8 + (size_t)u32(data + at + 4);
		at += at & 1;
	}
	assert_int_equal(at, size);
	return found;
}

static void close_well(struct segment *segment)
{
	assert_int_equal(segment_close(segment), 0);
	for (size_t k = 0; memory_disk_name(k); k++)
		assert_null(strstr(memory_disk_name(k), ".part"));
}

static void every_sample_type_is_kept_to_the_bit(void **state)
{
	static const unsigned bits[SAMPLE_TYPES] = { 16, 24, 24, 32, 32 }, tag[SAMPLE_TYPES] = { 1, 1, 1, 1, 3 };
	static unsigned char frames[FRAMES * MAX_CHANNELS * 4];

	(void)state;
	fill(frames, sizeof(frames));   /* the top byte of S24 in four bytes too: junk */
	for (int type = 0; type < SAMPLE_TYPES; type++)
		for (unsigned channels = 1; channels <= MAX_CHANNELS; channels++) {
			struct segment_header h = header((enum sample_type)type, channels);
			size_t wide = sample_bytes(h.format.type), narrow = bits[type] / 8, n, m;
			const unsigned char *data, *format;
			struct segment *segment;

			memory_disk_reset();
			assert_int_equal(segment_create(&segment, &disk_memory, &h), 0);
			assert_int_equal(segment_write(segment, frames, 600, 70000, 0), 0);
			assert_int_equal(segment_write(segment, frames + 600 * frame_bytes(h.format), FRAMES - 600, 70600, 0), 0);
			close_well(segment);
			data = chunk("a.wav", "data", &n);
			format = chunk("a.wav", "fmt ", &m);
			assert_int_equal(n, FRAMES * channels * narrow);
			for (size_t k = 0; k < FRAMES * channels; k++)
				assert_memory_equal(data + k * narrow, frames + k * wide, narrow);
			assert_int_equal(u32(format), tag[type] | channels << 16);
			assert_int_equal(u32(format + 4), RATE);
			assert_int_equal(u32(format + 12), (channels * narrow) | bits[type] << 16);
		}
}

/* Samples are written raw past libsndfile, which cannot know their peak: no peak is better than a wrong one. */
static void a_float_file_claims_no_peak_and_counts_its_frames(void **state)
{
	static float frames[FRAMES];
	struct segment_header h = header(SAMPLE_F32, 1);
	struct segment *segment;
	const unsigned char *fact;
	size_t n;

	(void)state;
	memory_disk_reset();
	frames[3] = 0.5f;
	assert_int_equal(segment_create(&segment, &disk_memory, &h), 0);
	assert_int_equal(segment_write(segment, frames, FRAMES, 70000, 0), 0);
	close_well(segment);
	assert_null(chunk("a.wav", "PEAK", &n));
	fact = chunk("a.wav", "fact", &n);
	assert_non_null(fact);
	assert_int_equal(u32(fact), FRAMES);
}

static void quiet(void *context, enum log_level level, const char *sentence)
{
	(void)context;
	(void)level;
	(void)sentence;
}

/* The same frames, once closed and once left behind by a kill: the repair leaves the same bytes. */
static void a_repaired_file_is_the_one_that_would_have_been_closed(void **state)
{
	static unsigned char frames[FRAMES * 3 * 4];

	(void)state;
	fill(frames, sizeof(frames));
	log_set_sink(quiet, NULL);
	for (int type = 0; type < SAMPLE_TYPES; type++)
		for (unsigned channels = 1; channels <= 3; channels++) {
			struct segment_header h = header((enum sample_type)type, channels);
			struct segment *segment;
			unsigned char *closed;
			const unsigned char *left;
			size_t size, again;

			memory_disk_reset();
			assert_int_equal(segment_create(&segment, &disk_memory, &h), 0);
			assert_int_equal(segment_write(segment, frames, FRAMES, 70000, 0), 0);
			close_well(segment);
			left = memory_disk_file("a.wav", &size);
			closed = malloc(size);
			memcpy(closed, left, size);

			memory_disk_reset();
			assert_int_equal(segment_create(&segment, &disk_memory, &h), 0);
			assert_int_equal(segment_write(segment, frames, 1, 70000, 0), 0);
			assert_int_equal(segment_write(segment, frames + frame_bytes(h.format), FRAMES - 1, 70001, 0), 0);
			memory_disk_fail(memory_disk_calls(), EIO, true);
			segment_close(segment);
			memory_disk_reboot(SURVIVE_SYNCED);
			assert_true(segment_repair(&disk_memory, "/d") >= 0);
			left = memory_disk_file("a.wav", &again);
			assert_non_null(left);
			assert_int_equal(again, size);
			assert_memory_equal(left, closed, size);
			free(closed);
		}
	log_set_sink(NULL, NULL);
}

static uint64_t reference(const char *name)
{
	size_t n;
	const unsigned char *bext = chunk(name, "bext", &n);

	return u32(bext + 338) | (uint64_t)u32(bext + 342) << 32;
}

/* Samples since midnight by hand: 01:23:45.25 is 3600 + 23 x 60 + 45.25 = 5025.25 s, at 1000 a second. */
static void bext_holds_utc_and_each_part_its_own_reference(void **state)
{
	static int16_t frames[9000];
	struct segment_header h = header(SAMPLE_S16, 1);
	struct sidecar described = { 0 };
	struct segment *segment;
	const unsigned char *bext;
	uint64_t next = 70000;
	char name[32];
	size_t n;

	(void)state;
	memory_disk_reset();
	assert_int_equal(tai_parse_utc(&h.start, "2031-04-02T01:23:45.25Z"), 0);
	h.part_bytes = 5000;
	for (int k = 0; k < 9000; k++)
		frames[k] = (int16_t)k;
	assert_int_equal(segment_create(&segment, &disk_memory, &h), 0);
	assert_int_equal(segment_write(segment, frames, 9000, 70000, 0), 0);
	assert_int_equal(segment_position(segment), 79000);
	assert_int_equal(segment_describe(segment, &described), 0);
	close_well(segment);
	bext = chunk("a.wav", "bext", &n);
	assert_string_equal((const char *)bext, "Anwen");
	assert_string_equal((const char *)bext + 256, "Brackenfold");
	assert_memory_equal(bext + 320, "2031-04-0201:23:45", 18);
	assert_true(described.parts >= 4);
	for (size_t k = 0; k < described.parts; k++) {
		const unsigned char *data;
		size_t size;

		snprintf(name, sizeof(name), k ? "a_p%zu.wav" : "a.wav", k + 1);
		assert_string_equal(described.part[k].file, name);
		assert_int_equal(described.part[k].first, next);
		assert_non_null(memory_disk_file(name, &size));
		assert_true(size <= 5000);
		assert_int_equal(reference(name), 5025250 + next - 70000);
		data = chunk(name, "data", &n);
		assert_int_equal(n, described.part[k].frames * 2);
		assert_memory_equal(data, (unsigned char *)frames + (next - 70000) * 2, n);
		next += described.part[k].frames;
	}
	assert_int_equal(next, 79000);
	sidecar_clear(&described);
}

static void a_free_time_leaves_no_date(void **state)
{
	struct segment_header h = header(SAMPLE_S16, 1);
	struct segment *segment;
	const unsigned char *bext;
	size_t n;

	(void)state;
	memory_disk_reset();
	h.quality = TIME_FREE;
	assert_int_equal(segment_create(&segment, &disk_memory, &h), 0);
	close_well(segment);
	bext = chunk("a.wav", "bext", &n);
	for (int k = 320; k < 346; k++)
		assert_int_equal(bext[k], 0);
}

static void a_gap_is_zeros_and_noted(void **state)
{
	static int16_t frames[2000];
	struct segment_header h = header(SAMPLE_S16, 2);
	struct sidecar described = { 0 };
	struct segment *segment;
	const int16_t *data;
	size_t n;

	(void)state;
	memory_disk_reset();
	memset(frames, 0x55, sizeof(frames));
	assert_int_equal(segment_create(&segment, &disk_memory, &h), 0);
	assert_int_equal(segment_write(segment, frames, 1000, 70000, 0), 0);
	assert_int_equal(segment_write(segment, frames, 1000, 76000, 2.5), 0);
	assert_int_equal(segment_write(segment, frames, 10, 76999, 0), -EINVAL);      /* backwards */
	assert_int_equal(segment_write(segment, frames, 10, 77000 + 3600 * RATE + 1, 0), -ERANGE);
	assert_int_equal(segment_position(segment), 77000);
	assert_int_equal(segment_describe(segment, &described), 0);
	close_well(segment);
	assert_int_equal(described.gaps, 1);
	assert_int_equal(described.gap[0].first, 71000);
	assert_int_equal(described.gap[0].frames, 5000);
	assert_true(described.gap[0].sigma_frames == 2.5);
	data = (const int16_t *)(const void *)chunk("a.wav", "data", &n);
	assert_int_equal(n, 7000 * 4);
	for (size_t k = 0; k < 14000; k++)
		assert_int_equal(data[k], k >= 2000 && k < 12000 ? 0 : 0x5555);
	sidecar_clear(&described);
}

static void an_hour_is_still_a_gap(void **state)
{
	struct segment_header h = header(SAMPLE_S16, 1);
	struct segment *segment;
	int16_t frame = 7;
	size_t n;

	(void)state;
	memory_disk_reset();
	h.rate = 10;
	assert_int_equal(segment_create(&segment, &disk_memory, &h), 0);
	assert_int_equal(segment_write(segment, &frame, 1, 70000 + 36000, 0), 0);
	close_well(segment);
	chunk("a.wav", "data", &n);
	assert_int_equal(n, 36001 * 2);
}

/* What the disk would not take of a gap is not noted as filled. */
static void a_gap_cut_short_is_noted_as_long_as_it_is(void **state)
{
	static int16_t frames[1000];
	struct segment_header h = header(SAMPLE_S16, 1);

	(void)state;
	for (unsigned call = 0; call < 30; call++) {
		struct sidecar described = { 0 };
		struct segment *segment;
		uint64_t end;
		int ret;

		memory_disk_reset();
		assert_int_equal(segment_create(&segment, &disk_memory, &h), 0);
		memory_disk_fail(memory_disk_calls() + call, ENOSPC, false);
		ret = segment_write(segment, frames, 1000, 90000, 0);
		end = segment_position(segment);
		assert_int_equal(segment_describe(segment, &described), 0);
		for (size_t k = 0; k < described.gaps; k++)
			assert_true(described.gap[k].frames > 0 && described.gap[k].first + described.gap[k].frames <= end);
		assert_true(ret == 0 || ret == -ENOSPC);
		segment_close(segment);
		sidecar_clear(&described);
	}
}

static void a_name_that_is_taken_is_left_alone(void **state)
{
	struct segment_header h = header(SAMPLE_S16, 1);
	struct segment *first, *second, *third;
	const int16_t frame[3] = { 1, 2, 3 };
	size_t n;

	(void)state;
	memory_disk_reset();
	assert_int_equal(segment_create(&first, &disk_memory, &h), 0);
	assert_int_equal(segment_create(&second, &disk_memory, &h), 0);       /* while the first one grows */
	assert_int_equal(segment_write(first, frame, 1, 70000, 0), 0);
	assert_int_equal(segment_write(second, frame + 1, 1, 70000, 0), 0);
	assert_int_equal(segment_close(first), 0);
	assert_int_equal(segment_close(second), 0);
	assert_int_equal(segment_create(&third, &disk_memory, &h), 0);
	assert_int_equal(segment_write(third, frame + 2, 1, 70000, 0), 0);
	close_well(third);
	assert_int_equal(chunk("a.wav", "data", &n)[0], 1);
	assert_int_equal(chunk("a-2.wav", "data", &n)[0], 2);
	assert_int_equal(chunk("a-3.wav", "data", &n)[0], 3);
}

static void closed_is_closed_though_the_power_fails_at_once(void **state)
{
	static int16_t frames[FRAMES];
	struct segment_header h = header(SAMPLE_S16, 1);
	struct segment *segment;
	size_t n;

	(void)state;
	memory_disk_reset();
	assert_int_equal(segment_create(&segment, &disk_memory, &h), 0);
	assert_int_equal(segment_write(segment, frames, FRAMES, 70000, 0), 0);
	close_well(segment);
	memory_disk_reboot(SURVIVE_SYNCED);
	assert_non_null(chunk("a.wav", "data", &n));
	assert_int_equal(n, FRAMES * 2);
}

static void what_cannot_be_a_segment_is_refused(void **state)
{
	struct segment_header none = header(SAMPLE_S16, 0), many = header(SAMPLE_S16, MAX_CHANNELS + 1);
	struct segment_header slow = header(SAMPLE_S16, 1);
	struct segment *segment = NULL;

	(void)state;
	memory_disk_reset();
	slow.rate = 0;
	assert_int_equal(segment_create(&segment, &disk_memory, &none), -EINVAL);
	assert_int_equal(segment_create(&segment, &disk_memory, &many), -EINVAL);
	assert_int_equal(segment_create(&segment, &disk_memory, &slow), -EINVAL);
	assert_null(segment);
	assert_null(memory_disk_name(0));
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(every_sample_type_is_kept_to_the_bit),
		cmocka_unit_test(a_float_file_claims_no_peak_and_counts_its_frames),
		cmocka_unit_test(a_repaired_file_is_the_one_that_would_have_been_closed),
		cmocka_unit_test(bext_holds_utc_and_each_part_its_own_reference),
		cmocka_unit_test(a_free_time_leaves_no_date),
		cmocka_unit_test(a_gap_is_zeros_and_noted),
		cmocka_unit_test(an_hour_is_still_a_gap),
		cmocka_unit_test(a_gap_cut_short_is_noted_as_long_as_it_is),
		cmocka_unit_test(a_name_that_is_taken_is_left_alone),
		cmocka_unit_test(closed_is_closed_though_the_power_fails_at_once),
		cmocka_unit_test(what_cannot_be_a_segment_is_refused),
	};
	int failed = cmocka_run_group_tests(tests, NULL, NULL);

	memory_disk_reset();
	return failed;
}
