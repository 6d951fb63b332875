/* SPDX-License-Identifier: GPL-3.0-or-later */
/* Which recordings make room: the disk's free bytes grow here as files go. */
#include <errno.h>
#include <fcntl.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <string.h>
#include <cmocka.h>
#include "limbwatch/log.h"
#include "limbwatch/sidecar.h"
#include "limbwatch/space.h"
#include "support/memory_disk.h"

enum { PART = 1000 };                   /* bytes of every part */

static struct disk disk;                /* the one in memory, with free bytes that follow the parts */
static char said[4096];

static void hear(void *context, enum log_level level, const char *sentence)
{
	(void)context;
	(void)level;
	snprintf(said + strlen(said), sizeof(said) - strlen(said), "%s\n", sentence);
}

static bool there(const char *name)
{
	size_t size;

	return memory_disk_file(name, &size) != NULL;
}

static int64_t free_bytes(const char *path)
{
	int64_t held = 0;

	(void)path;
	for (size_t k = 0; memory_disk_name(k); k++)
		held += strstr(memory_disk_name(k), ".wav") ? PART : 0;
	return 10 * PART - held;
}

static void put(const char *name, const void *data, size_t size)
{
	char path[256];
	int fd;

	snprintf(path, sizeof(path), "/d/%s", name);
	fd = disk_memory.open(path, O_WRONLY | O_CREAT, 0664);
	assert_true(fd >= 0);
	assert_int_equal(disk_memory.write(fd, data, size), size);
	disk_memory.close(fd);
}

static void segment(const char *name, size_t parts, size_t contacts, enum segment_state state)
{
	static const unsigned char samples[PART];
	struct sidecar_part part[3] = { 0 };
	struct contact contact = { .kind = CONTACT_EMERSION, .expected = -1 };
	struct sidecar s = { .format = SIDECAR_FORMAT, .frames = { SAMPLE_S16, 1 }, .rate = 1000, .state = state,
		.parts = parts, .part = part, .contacts = contacts, .contact = &contact };
	char path[256];

	for (size_t k = 0; k < parts; k++) {
		snprintf(part[k].file, sizeof(part[k].file), k ? "%s_p%zu.wav" : "%s.wav", name, k + 1);
		put(part[k].file, samples, sizeof(samples));
	}
	snprintf(path, sizeof(path), "/d/%s.json", name);
	assert_int_equal(sidecar_write(&s, &disk_memory, path), 0);
}

/* Eight parts of ten: two are free. */
static int set_up(void **state)
{
	(void)state;
	memory_disk_reset();
	disk = disk_memory;
	disk.free_bytes = free_bytes;
	said[0] = 0;
	log_set_sink(hear, NULL);
	segment("20310405T020000Z_b", 1, 0, SEGMENT_CLOSED);
	segment("20310402T012315Z_b", 1, 1, SEGMENT_CLOSED);
	segment("20310401T230000Z_b", 1, 0, SEGMENT_RECORDING);
	segment("20310403T010000Z_b", 2, 0, SEGMENT_REPAIRED);
	segment("20310404T010000Z_b", 1, 0, SEGMENT_CLOSED);
	segment("20310406T010000Z_b", 1, 1, SEGMENT_CLOSED);
	put("notes.wav", "mine", 4);
	return 0;
}

static int tear_down(void **state)
{
	(void)state;
	log_set_sink(NULL, NULL);
	memory_disk_reset();
	return 0;
}

static void enough_room_removes_nothing(void **state)
{
	(void)state;
	assert_int_equal(space_make(&disk, "/d", 2 * PART, true), 0);
	assert_int_equal(free_bytes("/d"), 2 * PART);
	assert_string_equal(said, "");
}

static void the_oldest_without_contact_goes_first_and_whole(void **state)
{
	(void)state;
	assert_int_equal(space_make(&disk, "/d", 2 * PART + 1, false), 0);
	assert_false(there("20310403T010000Z_b.wav") || there("20310403T010000Z_b_p2.wav") || there("20310403T010000Z_b.json"));
	assert_int_equal(free_bytes("/d"), 4 * PART);
	assert_true(there("20310404T010000Z_b.wav") && there("20310402T012315Z_b.wav"));
	assert_non_null(strstr(said, "20310403T010000Z_b.json removed to make room"));
	assert_int_equal(space_make(&disk, "/d", 5 * PART, false), 0);
	assert_false(there("20310404T010000Z_b.wav"));
	assert_true(there("20310405T020000Z_b.wav"));
}

static void contacts_stay_when_they_must(void **state)
{
	(void)state;
	assert_int_equal(space_make(&disk, "/d", 7 * PART, false), -ENOSPC);
	assert_true(there("20310402T012315Z_b.wav") && there("20310406T010000Z_b.wav"));
	assert_true(there("20310402T012315Z_b.json") && there("20310406T010000Z_b.json"));
	assert_false(there("20310405T020000Z_b.wav"));
}

static void contacts_go_last_where_they_may(void **state)
{
	(void)state;
	assert_int_equal(space_make(&disk, "/d", 7 * PART, true), 0);
	assert_false(there("20310405T020000Z_b.wav") || there("20310402T012315Z_b.wav"));
	assert_true(there("20310406T010000Z_b.wav"));
	assert_non_null(strstr(said, "20310402T012315Z_b.json removed to make room: the oldest recording (with a contact"));
}

static void what_is_being_recorded_or_not_ours_never_goes(void **state)
{
	(void)state;
	put("20310101T000000Z_b.json", "{}", 2);        /* unreadable: said, left alone */
	assert_int_equal(space_make(&disk, "/d", 10 * PART, true), -ENOSPC);
	assert_true(there("20310401T230000Z_b.wav") && there("20310401T230000Z_b.json"));
	assert_true(there("notes.wav") && there("20310101T000000Z_b.json"));
	assert_int_equal(free_bytes("/d"), 8 * PART);
	assert_non_null(strstr(said, "20310101T000000Z_b.json: member"));
}

/* Every call fails once: the answer is an error or enough room, and no sidecar is without its samples for good. */
static void a_disk_that_fails_is_said_by_the_answer(void **state)
{
	unsigned calls, k;

	assert_int_equal(space_make(&disk, "/d", 5 * PART, false), 0);
	for (k = 0; k < 1000; k++) {
		int ret;

		set_up(state);
		calls = memory_disk_calls();
		memory_disk_fail(calls + k, EIO, false);
		ret = space_make(&disk, "/d", 5 * PART, false);
		assert_true(ret == -EIO || ret == 0 || ret == -ENOSPC);
		assert_true(ret != 0 || free_bytes("/d") >= 5 * PART);
		assert_true(there("20310402T012315Z_b.wav") && there("20310401T230000Z_b.wav"));
		if (memory_disk_calls() <= calls + k)
			break;
		memory_disk_fail(0, 0, false);
		assert_int_equal(space_make(&disk, "/d", 5 * PART, false), 0);
	}
	print_message("# %u disk calls failed in turn\n", k);
	assert_true(k > 10 && k < 1000);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test_setup_teardown(enough_room_removes_nothing, set_up, tear_down),
		cmocka_unit_test_setup_teardown(the_oldest_without_contact_goes_first_and_whole, set_up, tear_down),
		cmocka_unit_test_setup_teardown(contacts_stay_when_they_must, set_up, tear_down),
		cmocka_unit_test_setup_teardown(contacts_go_last_where_they_may, set_up, tear_down),
		cmocka_unit_test_setup_teardown(what_is_being_recorded_or_not_ours_never_goes, set_up, tear_down),
		cmocka_unit_test_setup_teardown(a_disk_that_fails_is_said_by_the_answer, set_up, tear_down),
	};

	return cmocka_run_group_tests(tests, NULL, NULL);
}
