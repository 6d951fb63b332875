/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * A short vigil, and a power cut at every one of its disk calls: what was not synced is forgotten, the next start repairs,
 * and then at most one second of what had been recorded is missing and everything is readable.  And every call fails once.
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
#include <sndfile.h>
#include "limbwatch/log.h"
#include "limbwatch/segment.h"
#include "support/memory_disk.h"

enum { RATE = 1000, CHANNELS = 2, BLOCK = 97, TOTAL = 5200, GAP_AT = 2400, GAP = 130, PART_BYTES = 12000 };
enum { GAP_FIRST = (GAP_AT + BLOCK - 1) / BLOCK * BLOCK };        /* blocks are whole */

/* Frame n holds its number. */
static void number_frames(int16_t *to, uint64_t first, size_t count)
{
	for (size_t k = 0; k < count; k++)
		for (int c = 0; c < CHANNELS; c++)
			to[CHANNELS * k + c] = (int16_t)((first + k) * 7 % 32749 + c + 1);
}

static struct segment_header header(void)
{
	return (struct segment_header){
		.folder = "/d", .name = "20310402T012315Z_brackenfold", .format = { SAMPLE_S16, CHANNELS }, .rate = RATE,
		.station = "Brackenfold", .description = "power cut", .start = tai_from_unix(1932772995, 0),
		.quality = TIME_HOST, .part_bytes = PART_BYTES,
	};
}

static int write_sidecar(const struct segment *segment, enum segment_state state)
{
	struct sidecar s = { .format = SIDECAR_FORMAT, .version = "0", .station = "Brackenfold", .driver = "synthetic",
		.frames = { SAMPLE_S16, CHANNELS }, .rate = RATE, .state = state };
	int ret = 0;

	if (segment)
		ret = segment_describe(segment, &s);
	if (ret == 0)
		ret = sidecar_write(&s, &disk_memory, "/d/20310402T012315Z_brackenfold.json");
	sidecar_clear(&s);
	return ret;
}

/* The vigil. @return frames that segment_write took (a gap counts as taken); *ended: every call succeeded */
static uint64_t record(bool *ended)
{
	struct segment_header h = header();
	struct segment *segment;
	int16_t frames[BLOCK * CHANNELS];
	uint64_t next = 0, taken = 0;
	int ret = segment_create(&segment, &disk_memory, &h);

	*ended = false;
	if (ret < 0)
		return 0;
	ret = write_sidecar(segment, SEGMENT_RECORDING);
	while (ret == 0 && next < TOTAL) {
		size_t n = TOTAL - next < BLOCK ? TOTAL - next : BLOCK;

		if (next >= GAP_AT && next < GAP_AT + BLOCK)
			next += GAP;
		number_frames(frames, next, n);
		ret = segment_write(segment, frames, n, next, 0.5);
		next += n;
		if (ret == 0)
			taken = next;
	}
	if (ret == 0)
		ret = write_sidecar(segment, SEGMENT_RECORDING);
	if (segment_close(segment) == 0 && ret == 0)
		*ended = write_sidecar(NULL, SEGMENT_CLOSED) == 0;
	return taken;
}

/* ------------------------------------------------------------------ what is left */

struct view { const unsigned char *data; sf_count_t size, at; };

static sf_count_t view_length(void *v)
{
	return ((struct view *)v)->size;
}

static sf_count_t view_seek(sf_count_t offset, int whence, void *context)
{
	struct view *v = context;

	return v->at = offset + (whence == SEEK_END ? v->size : whence == SEEK_CUR ? v->at : 0);
}

static sf_count_t view_read(void *to, sf_count_t n, void *context)
{
	struct view *v = context;

	n = v->size - v->at < n ? v->size - v->at : n;
	memcpy(to, v->data + v->at, (size_t)n);
	v->at += n;
	return n;
}

static sf_count_t view_tell(void *v)
{
	return ((struct view *)v)->at;
}

/* Frames of one file, checked against their numbers from `first` on; -1: unreadable or wrong. */
static long read_back(const char *name, uint64_t first)
{
	SF_VIRTUAL_IO io = { view_length, view_seek, view_read, NULL, view_tell };
	SF_INFO info = { 0 };
	struct view view = { 0 };
	size_t size;
	int16_t got[CHANNELS], want[CHANNELS];
	SNDFILE *file;
	long n = 0;

	view.data = memory_disk_file(name, &size);
	view.size = (sf_count_t)size;
	file = sf_open_virtual(&io, SFM_READ, &info, &view);
	if (!file)
		return -1;
	while (sf_readf_short(file, got, 1) == 1) {
		number_frames(want, first + (uint64_t)n, 1);
		if (first + (uint64_t)n >= GAP_FIRST && first + (uint64_t)n < GAP_FIRST + GAP)
			memset(want, 0, sizeof(want));
		if (memcmp(got, want, sizeof(got)))
			n = -1000000;
		n++;
	}
	if (n != info.frames)
		n = -1;
	sf_close(file);
	return n < 0 ? -1 : n;
}

/* All that is on the disk after a repair. @return frames kept; *unreadable: files that should not be so */
static uint64_t take_stock(unsigned *unreadable)
{
	/* A part takes another name when it cannot be known whether its own is free. */
	static const char *const number[] = { "", "_p2", "_p3" }, *const other[] = { "", "-2", "-3", "-r2" };
	uint64_t kept = 0;
	size_t size;
	const char *name;

	for (size_t k = 0; k < 12; k++) {
		char part[64];
		long n;

		snprintf(part, sizeof(part), "20310402T012315Z_brackenfold%s%s.wav", number[k / 4], other[k % 4]);
		if (!memory_disk_file(part, &size))
			continue;
		n = read_back(part, kept);
		*unreadable += n < 0;
		kept += n > 0 ? (uint64_t)n : 0;
	}
	for (size_t k = 0; (name = memory_disk_name(k)); k++) {
		const char *dot = strrchr(name, '.');
		struct sidecar s;

		if (dot && !strcmp(dot, ".json")) {
			const char *text = memory_disk_file(name, &size);

			if (sidecar_parse(&s, text, size, name) == 0) {
				*unreadable += s.state == SEGMENT_RECORDING;
				sidecar_clear(&s);
			} else {
				++*unreadable;
			}
		} else if (!dot || strcmp(dot, ".wav")) {
			++*unreadable;  /* .part or .tmp left over */
		}
	}
	return kept;
}

static void swallow(void *context, enum log_level level, const char *sentence)
{
	(void)context;
	(void)level;
	(void)sentence;
}

static unsigned calls_of_a_vigil(void)
{
	bool ended;

	memory_disk_reset();
	assert_int_equal(record(&ended), TOTAL);
	assert_true(ended);
	return memory_disk_calls();
}

static void a_power_cut_anywhere_loses_a_second_at_most(void **state)
{
	unsigned calls, cuts = 0, unreadable = 0;
	uint64_t most = 0;

	(void)state;
	log_set_sink(swallow, NULL);
	calls = calls_of_a_vigil();
	for (int survival = 0; survival < SURVIVALS; survival++)
		for (unsigned k = 0; k < calls; k++, cuts++) {
			bool ended;
			uint64_t taken, kept;

			memory_disk_reset();
			memory_disk_fail(k, EIO, true);
			taken = record(&ended);
			memory_disk_reboot((enum survival)survival);
			assert_true(segment_repair(&disk_memory, "/d") >= 0);
			kept = take_stock(&unreadable);
			if (taken > kept && taken - kept > most)
				most = taken - kept;
		}
	log_set_sink(NULL, NULL);
	print_message("# power cut at each of %u disk calls, the unsynced forgotten, or half of the data or the names kept: %u cuts, most lost %.3f s, "
	              "unreadable %u\n", calls, cuts, (double)most / RATE, unreadable);
	assert_int_equal(unreadable, 0);
	assert_true(most <= RATE + BLOCK);
}

/* One vigil cut short, and its repair cut short at each of its calls and done again. */
static void cut_repairs(unsigned cut, enum survival survival, unsigned *unreadable)
{
	uint64_t whole = 0;
	bool ended, repaired = false;

	for (unsigned k = 0; !repaired && k < 200; k++) {
		uint64_t kept;

		memory_disk_reset();
		memory_disk_fail(cut, EIO, true);
		record(&ended);
		memory_disk_reboot(survival);
		memory_disk_fail(memory_disk_calls() + k, EIO, true);
		repaired = segment_repair(&disk_memory, "/d") >= 0;
		memory_disk_reboot(survival);
		assert_true(segment_repair(&disk_memory, "/d") >= 0);
		kept = take_stock(unreadable);
		if (k == 0)
			whole = kept;
		assert_int_equal(kept, whole);
	}
	assert_true(repaired);
}

static void a_power_cut_during_repair_is_repaired_by_the_next(void **state)
{
	unsigned calls, unreadable = 0;

	(void)state;
	log_set_sink(swallow, NULL);
	calls = calls_of_a_vigil();
	for (unsigned cut = calls / 9; cut < calls; cut += calls / 9)
		for (int survival = 0; survival < SURVIVALS; survival++)
			cut_repairs(cut, (enum survival)survival, &unreadable);
	log_set_sink(NULL, NULL);
	assert_int_equal(unreadable, 0);
}

static void a_call_that_fails_leaves_all_that_was_written_readable(void **state)
{
	static const int errors[] = { EIO, ENOSPC };
	unsigned calls, unreadable = 0;

	(void)state;
	log_set_sink(swallow, NULL);
	calls = calls_of_a_vigil();
	for (int e = 0; e < 2; e++)
		for (unsigned k = 0; k < calls; k++) {
			bool ended;
			uint64_t taken, kept;

			memory_disk_reset();
			memory_disk_fail(k, errors[e], false);
			taken = record(&ended);
			assert_true(segment_repair(&disk_memory, "/d") >= 0);
			kept = take_stock(&unreadable);
			if (kept < taken)
				fail_msg("call %u failing with %s lost %u frames", k, strerror(errors[e]), (unsigned)(taken - kept));
		}
	log_set_sink(NULL, NULL);
	assert_int_equal(unreadable, 0);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(a_power_cut_anywhere_loses_a_second_at_most),
		cmocka_unit_test(a_power_cut_during_repair_is_repaired_by_the_next),
		cmocka_unit_test(a_call_that_fails_leaves_all_that_was_written_readable),
	};
	int failed = cmocka_run_group_tests(tests, NULL, NULL);

	memory_disk_reset();
	return failed;
}
