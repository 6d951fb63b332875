/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <fcntl.h>
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
#include "limbwatch/space.h"
#include "support/memory_disk.h"

static struct disk disk;
static int64_t missing;                         /* bytes short; each file removed gives 100 */

static int freeing_unlink(const char *path)
{
	if (strstr(path, ".wav"))
		missing -= 100;
	return disk_memory.unlink(path);
}

static int64_t free_bytes(const char *path)
{
	(void)path;
	return 1000 - missing;
}

static void swallow(void *context, enum log_level level, const char *sentence)
{
	(void)context;
	(void)level;
	(void)sentence;
}

/* A segment of two parts. */
static void put(const char *name, enum segment_state state, bool contact)
{
	struct sidecar s = { .format = SIDECAR_FORMAT, .frames = { SAMPLE_S16, 1 }, .rate = 8000, .state = state, .parts = 2 };
	char path[64];

	s.part = calloc(2, sizeof(*s.part));
	for (int k = 0; k < 2; k++) {
		snprintf(s.part[k].file, sizeof(s.part[k].file), "%s%s.wav", name, k ? "_p2" : "");
		snprintf(path, sizeof(path), "/d/%s", s.part[k].file);
		disk_memory.close(disk_memory.open(path, O_CREAT | O_WRONLY, 0644));
	}
	if (contact) {
		s.contact = calloc(1, sizeof(*s.contact));
		s.contacts = 1;
	}
	snprintf(path, sizeof(path), "/d/%s.json", name);
	assert_int_equal(sidecar_write(&s, &disk_memory, path), 0);
	sidecar_clear(&s);
}

static bool there(const char *name)
{
	size_t size;
	char file[64];

	snprintf(file, sizeof(file), "%s.json", name);
	return memory_disk_file(file, &size) != NULL;
}

static int set_up(void **state)
{
	(void)state;
	memory_disk_reset();
	log_set_sink(swallow, NULL);
	disk = disk_memory;
	disk.unlink = freeing_unlink;
	disk.free_bytes = free_bytes;
	put("20310401T000000Z_a", SEGMENT_CLOSED, true);
	put("20310402T000000Z_a", SEGMENT_CLOSED, false);
	put("20310403T000000Z_a", SEGMENT_REPAIRED, false);
	put("20310404T000000Z_a", SEGMENT_RECORDING, false);
	return 0;
}

static void nothing_is_removed_while_there_is_room(void **state)
{
	(void)state;
	missing = 0;
	assert_int_equal(space_make(&disk, "/d", 1000, true), 0);
	assert_true(there("20310402T000000Z_a"));
}

static void the_oldest_without_a_contact_goes_first(void **state)
{
	(void)state;
	missing = 150;
	assert_int_equal(space_make(&disk, "/d", 1000, true), 0);
	assert_true(there("20310401T000000Z_a") && !there("20310402T000000Z_a") && there("20310403T000000Z_a"));
}

static void contacts_stay_unless_the_configuration_says_otherwise(void **state)
{
	(void)state;
	missing = 500;
	assert_int_equal(space_make(&disk, "/d", 1000, false), -ENOSPC);
	assert_true(there("20310401T000000Z_a") && !there("20310402T000000Z_a") && !there("20310403T000000Z_a"));
	assert_int_equal(space_make(&disk, "/d", 900, true), 0);
	assert_false(there("20310401T000000Z_a"));
}

static void what_is_being_recorded_is_never_removed(void **state)
{
	(void)state;
	missing = 5000;
	assert_int_equal(space_make(&disk, "/d", 1000, true), -ENOSPC);
	assert_true(there("20310404T000000Z_a"));
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test_setup(nothing_is_removed_while_there_is_room, set_up),
		cmocka_unit_test_setup(the_oldest_without_a_contact_goes_first, set_up),
		cmocka_unit_test_setup(contacts_stay_unless_the_configuration_says_otherwise, set_up),
		cmocka_unit_test_setup(what_is_being_recorded_is_never_removed, set_up),
	};
	int failed = cmocka_run_group_tests(tests, NULL, NULL);

	memory_disk_reset();
	return failed;
}
