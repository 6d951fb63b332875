/* SPDX-License-Identifier: GPL-3.0-or-later */
/* The host's clock: carried over, watched for steps, and which boot it is. */
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
#include <time.h>
#include <unistd.h>
#include "limbwatch/host_clock.h"

static int64_t read_ns(clockid_t id)
{
	struct timespec t;

	clock_gettime(id, &t);
	return t.tv_sec * INT64_C(1000000000) + t.tv_nsec;
}

/* Against clock_gettime itself: now, and an instant an hour ago. */
static void an_instant_is_carried_over(void **state)
{
	struct tai now, then;
	double sigma, off;
	int64_t mono = read_ns(CLOCK_MONOTONIC), real = read_ns(CLOCK_REALTIME);

	(void)state;
	assert_true(host_clock_at(mono, 0.25, &now, &sigma));
	assert_true(sigma >= 0.25 && sigma < 0.3);
	off = tai_difference(now, tai_from_unix(real / 1000000000, real % 1000000000));
	assert_true(fabs(off) < 0.1);           /* a busy machine may stop between the two readings */
	assert_true(host_clock_at(mono - INT64_C(3600000000000), 0.25, &then, &sigma));
	assert_true(fabs(tai_difference(now, then) - 3600) < 0.01);
}

static void a_running_clock_takes_no_step(void **state)
{
	struct host_clock_watch watch = { 0 };

	(void)state;
	for (int k = 0; k < 1000; k++)
		assert_true(host_clock_step(&watch) == 0);
	assert_true(watch.known);
}

static void a_step_is_told_once(void **state)
{
	struct host_clock_watch watch = { 0 };
	const int64_t offset = INT64_C(1900000000) * 1000000000;

	(void)state;
	assert_true(host_clock_step_by(&watch, offset) == 0);                           /* the first call has nothing before it */
	assert_true(host_clock_step_by(&watch, offset + 400000) == 0);                  /* readings scatter */
	assert_true(fabs(host_clock_step_by(&watch, offset - 86400 * INT64_C(1000000000)) + 86400) < 1e-3);
	assert_true(host_clock_step_by(&watch, offset - 86400 * INT64_C(1000000000)) == 0);
	assert_true(fabs(host_clock_step_by(&watch, offset) - 86400) < 1e-3);
	assert_true(fabs(host_clock_step_by(&watch, offset - 1000000000) + 1) < 1e-3);  /* a leap second */
	/* From 1970 to now: no overflow. */
	watch = (struct host_clock_watch){ true, 0 };
	assert_true(fabs(host_clock_step_by(&watch, offset) - 1.9e9) < 1);
}

/* The kernel's own id, digit by digit, and the same again: a boot has one. */
static void the_boot_has_one_id(void **state)
{
	char id[HOST_CLOCK_BOOT], again[HOST_CLOCK_BOOT], text[64] = "", plain[64] = "";
	FILE *in = fopen("/proc/sys/kernel/random/boot_id", "r");

	(void)state;
	assert_non_null(in);
	assert_non_null(fgets(text, sizeof(text), in));
	fclose(in);
	for (size_t k = 0, n = 0; text[k] && text[k] != '\n'; k++)
		if (text[k] != '-')
			plain[n++] = text[k];
	assert_int_equal(host_clock_boot(id), 0);
	assert_int_equal(host_clock_boot(again), 0);
	assert_string_equal(id, plain);
	assert_string_equal(again, id);
}

static void what_is_no_boot_id_is_refused(void **state)
{
	static const char *const wrong[] = {
		"", "\n", "1234", "0123456789abcdef0123456789abcde", "0123456789abcdef0123456789abcdef0", "0123456789abcdef0123456789abcdeg",
		"../../../../etc/passwd-0123456789abcdef", "01234567-89ab-cdef-0123-456789abcdef x",
	};
	char path[] = "/tmp/test_host_clock_XXXXXX", id[HOST_CLOCK_BOOT];
	int fd = mkstemp(path);

	(void)state;
	assert_true(fd >= 0);
	for (size_t k = 0; k < sizeof(wrong) / sizeof(*wrong); k++) {
		assert_int_equal(ftruncate(fd, 0), 0);
		assert_int_equal(pwrite(fd, wrong[k], strlen(wrong[k]), 0), (ssize_t)strlen(wrong[k]));
		assert_int_equal(host_clock_boot_from(path, id), -EINVAL);
		assert_string_equal(id, "00000000000000000000000000000000");
	}
	assert_int_equal(pwrite(fd, "01234567-89AB-cdef-0123-456789abcdef\n", 37, 0), 37);
	assert_int_equal(ftruncate(fd, 37), 0);
	assert_int_equal(host_clock_boot_from(path, id), 0);
	assert_string_equal(id, "0123456789abcdef0123456789abcdef");
	close(fd);
	unlink(path);
	assert_int_equal(host_clock_boot_from(path, id), -ENOENT);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(an_instant_is_carried_over),
		cmocka_unit_test(a_running_clock_takes_no_step),
		cmocka_unit_test(a_step_is_told_once),
		cmocka_unit_test(the_boot_has_one_id),
		cmocka_unit_test(what_is_no_boot_id_is_refused),
	};

	return cmocka_run_group_tests(tests, NULL, NULL);
}
