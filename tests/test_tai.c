/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>
#include <unistd.h>
#include <cmocka.h>
#include <erfa.h>

#include "limbwatch/log.h"
#include "limbwatch/tai.h"

enum { SEED = 20260401, INSTANTS = 20000 };
static const int64_t giga = 1000000000;

static struct { unsigned count; enum log_level level; char last[512]; } said;

static void hear(void *context, enum log_level level, const char *sentence)
{
	(void)context;
	said.count++;
	said.level = level;
	snprintf(said.last, sizeof(said.last), "%s", sentence);
}

static struct tai utc(const char *text)
{
	struct tai when = { 0 };

	if (tai_parse_utc(&when, text) != 0)
		fail_msg("%s was refused", text);
	return when;
}

static void assert_format(struct tai when, int decimals, const char *expected)
{
	char text[TAI_TEXT];

	assert_string_equal(tai_format_utc(text, when, decimals), expected);
}

/* Uniform in [0, 1); rand48 is the C library's own documented generator. */
static double uniform(void)
{
	return drand48();
}

/* IERS Bulletin C and the U.S. Naval Observatory's table tai-utc.dat; from memory. */
static const struct { const char *utc; int offset; } published[] = {
	{ "1972-01-01T00:00:00Z", 10 }, { "1972-06-30T23:59:59Z", 10 }, { "1972-07-01T00:00:00Z", 11 },
	{ "1980-01-06T00:00:00Z", 19 },         /* GPS epoch: TAI - GPS = 19 s, IS-GPS-200 */
	{ "1985-07-01T00:00:00Z", 23 }, { "1998-12-31T23:59:60Z", 31 }, { "1999-01-01T00:00:00Z", 32 },
	{ "2005-12-31T23:59:59Z", 32 }, { "2006-01-01T00:00:00Z", 33 }, { "2012-07-01T00:00:00Z", 35 },
	{ "2015-07-01T00:00:00Z", 36 }, { "2016-12-31T23:59:60.999999999Z", 36 }, { "2017-01-01T00:00:00Z", 37 },
	{ "2026-06-01T12:00:00Z", 37 },
};

static void check_published(void)
{
	for (size_t i = 0; i < sizeof(published) / sizeof(published[0]); i++)
		assert_int_equal(tai_minus_utc(utc(published[i].utc)), published[i].offset);
	assert_int_equal(tai_minus_utc((struct tai){ 0 }), 10);
	assert_int_equal(tai_minus_utc((struct tai){ INT64_MIN }), 10);
}

/* Runs first: nothing was opened yet, ERFA's own table holds. */
static void offsets_are_right_before_any_list_is_opened(void **state)
{
	(void)state;
	check_published();
	assert_true(leap_seconds_expiry().ns == INT64_MAX);
	assert_format(utc("2016-12-31T23:59:60.5Z"), 1, "2016-12-31T23:59:60.5Z");
}

static void offsets_are_right_with_the_list_of_tzdata(void **state)
{
	double era;

	(void)state;
	said.count = 0;
	assert_int_equal(leap_seconds_open(NULL), 0);
	if (said.count > 0)                     /* an old tzdata is said to be old, nothing else */
		assert_non_null(strstr(said.last, "expired"));
	check_published();
	assert_true(leap_seconds_expiry().ns > utc("2020-01-01T00:00:00Z").ns);
	/* ERFA with our table goes on giving the values of its own check program (t_erfa_c.c, t_dat) ... */
	assert_true(eraDat(2003, 6, 1, 0.0, &era) >= 0 && era == 32);
	assert_true(eraDat(2008, 1, 17, 0.0, &era) >= 0 && era == 33);
	assert_true(eraDat(2017, 9, 1, 0.0, &era) >= 0 && era == 37);
	/* ... and those of drifting UTC: 1.8458580 s on 1962-01-01 (tai-utc.dat; from memory). */
	assert_true(eraDat(1962, 1, 1, 0.0, &era) == 0 && fabs(era - 1.845858) < 1e-9);
}

/* ERFA's TAI of the same text less ours, ns; it warns of far years, with a positive status. */
static double erfa_excess_ns(const char *text, struct tai ours)
{
	int year, month, day, hour, minute;
	double second, utc1, utc2, tai1, tai2;
	int64_t days = ours.ns / (86400 * giga);

	assert_int_equal(sscanf(text, "%d-%d-%dT%d:%d:%lfZ", &year, &month, &day, &hour, &minute, &second), 6);
	assert_true(eraDtf2d("UTC", year, month, day, hour, minute, second, &utc1, &utc2) >= 0);
	assert_true(eraUtctai(utc1, utc2, &tai1, &tai2) >= 0);
	return ((tai1 - 2440587.5 - (double)days) + tai2) * 86400e9 - (double)(ours.ns - days * 86400 * giga);
}

/* Every text of ours, read by ERFA, is the same instant; and ERFA writes the same text. */
static void assert_agrees_with_erfa(struct tai when)
{
	char text[TAI_TEXT], other[64];
	int64_t days = when.ns / (86400 * giga);
	int year, month, day, time[4];
	double utc1, utc2;

	tai_format_utc(text, when, 9);
	/* One day is 8.64e13 ns, a double near 1 resolves 1.1e-16 of it: 0.01 ns, a few times over. */
	assert_true(fabs(erfa_excess_ns(text, when)) < 0.2);
	assert_int_equal(utc(text).ns, when.ns);
	assert_true(eraTaiutc(2440587.5 + (double)days, (double)(when.ns - days * 86400 * giga) / 86400e9, &utc1, &utc2) >= 0);
	assert_true(eraD2dtf("UTC", 9, utc1, utc2, &year, &month, &day, time) >= 0);
	snprintf(other, sizeof(other), "%04d-%02d-%02dT%02d:%02d:%02d.%09dZ", year, month, day, time[0], time[1], time[2],
		 time[3]);
	assert_string_equal(text, other);
}

static void random_instants_agree_with_erfa(void **state)
{
	int64_t first = utc("1972-01-01T00:00:00Z").ns, last = utc("2261-12-31T23:59:59.999999999Z").ns;

	(void)state;
	print_message("# seed %d\n", SEED);
	srand48(SEED);
	assert_agrees_with_erfa((struct tai){ first });
	assert_agrees_with_erfa((struct tai){ last });
	for (int i = 0; i < INSTANTS; i++) {
		/* The drawn double resolves 1 us at most; the last digits come from a second one. */
		int64_t ns = first + (int64_t)(uniform() * (double)(last - first - giga)) + (int64_t)(uniform() * 1e6);

		assert_agrees_with_erfa((struct tai){ ns });
	}
}

static void instants_around_every_leap_second_agree_with_erfa(void **state)
{
	char text[TAI_TEXT];
	int leaps = 0;

	(void)state;
	for (int year = 1972; year < 2027; year++) {
		for (int half = 0; half < 2; half++) {
			snprintf(text, sizeof(text), "%d-%sT23:59:60Z", year, half ? "12-31" : "06-30");
			struct tai leap;

			if (tai_parse_utc(&leap, text) != 0)
				continue;
			leaps++;
			assert_format(leap, 0, text);
			for (int64_t step = -12; step <= 12; step++) {
				assert_agrees_with_erfa((struct tai){ leap.ns + step * giga / 4 });
				assert_agrees_with_erfa((struct tai){ leap.ns + step * giga / 4 - 1 });
			}
		}
	}
	assert_true(leaps >= 27);               /* 27 from 1972-06-30 to 2016-12-31: Bulletin C; from memory */
}

static void calendar_agrees_with_the_c_library(void **state)
{
	(void)state;
	for (int64_t day = 0; day < 106000; day++) {            /* to 2260 */
		time_t seconds = (time_t)(day * 86400 + day % 86400);
		char text[TAI_TEXT], other[64];
		struct tm date;

		gmtime_r(&seconds, &date);
		strftime(other, sizeof(other), "%Y-%m-%dT%H:%M:%SZ", &date);
		assert_string_equal(tai_format_utc(text, tai_from_unix(seconds, 0), 0), other);
		if (day >= 730)
			assert_int_equal(utc(other).ns, tai_from_unix(seconds, 0).ns);
	}
}

static void unix_time_repeats_the_second_before_a_leap_second(void **state)
{
	(void)state;
	/* 1483228800 is 2017-01-01T00:00:00Z (date -ud @1483228800). */
	assert_int_equal(tai_from_unix(1483228800, 0).ns, utc("2017-01-01T00:00:00Z").ns);
	assert_int_equal(tai_from_unix(1483228800, 0).ns, (1483228800 + 37) * giga);
	assert_int_equal(tai_from_unix(1483228799, 999999999).ns, utc("2016-12-31T23:59:59.999999999Z").ns);
	assert_true(tai_to_unix(utc("2016-12-31T23:59:59.25Z")) == 1483228799.25);
	assert_true(tai_to_unix(utc("2016-12-31T23:59:60.25Z")) == 1483228799.25);
	assert_true(tai_to_unix(utc("2017-01-01T00:00:00.25Z")) == 1483228800.25);
	assert_true(tai_to_unix(tai_from_unix(-1, 500000000)) == -0.5);
}

static void nanoseconds_outside_a_second_carry(void **state)
{
	(void)state;
	assert_int_equal(tai_from_unix(1483228800, -1).ns, utc("2016-12-31T23:59:59.999999999Z").ns);
	assert_int_equal(tai_from_unix(100, 2500000000L).ns, tai_from_unix(102, 500000000).ns);
	assert_int_equal(tai_from_unix(100, -2500000000L).ns, tai_from_unix(97, 500000000).ns);
	assert_int_equal(tai_from_unix(0, 0).ns, 10 * giga);
	assert_int_equal(tai_from_unix(-1, 1).ns, 9 * giga + 1);
	assert_format((struct tai){ -1 }, 9, "1969-12-31T23:59:49.999999999Z");
	assert_format((struct tai){ 10 * giga - 1 }, 3, "1970-01-01T00:00:00.000Z");
}

static void ends_of_the_range_hold(void **state)
{
	char text[TAI_TEXT];

	(void)state;
	assert_true(tai_from_unix(INT64_MAX, 999999999).ns == INT64_MAX);
	assert_true(tai_from_unix(INT64_MIN, 0).ns == INT64_MIN);
	assert_true(tai_from_unix(INT64_MAX - 5, 0).ns == INT64_MAX);
	assert_true(tai_add((struct tai){ INT64_MAX - 1 }, 1.0).ns == INT64_MAX);
	assert_true(tai_add((struct tai){ INT64_MIN + 1 }, -1.0).ns == INT64_MIN);
	assert_true(tai_add((struct tai){ 0 }, INFINITY).ns == INT64_MAX);
	assert_true(tai_add((struct tai){ 0 }, -1e300).ns == INT64_MIN);
	assert_true(tai_add((struct tai){ 7 }, NAN).ns == 7);
	assert_true(fabs(tai_difference((struct tai){ INT64_MAX }, (struct tai){ INT64_MIN }) - 18446744073.709552) < 1e-5);
	/* 2^63 ns is 106751 d 23:47:16.854775807 (2262-04-11T23:47:16.854775807 from 1970), less 37 s. */
	assert_format((struct tai){ INT64_MAX }, 9, "2262-04-11T23:46:39.854775807Z");
	assert_true(strlen(tai_format_utc(text, (struct tai){ INT64_MIN }, 9)) < TAI_TEXT);
	assert_true(strlen(tai_format_utc(text, (struct tai){ INT64_MAX }, 0)) < TAI_TEXT);
}

static void rounding_carries_through_minutes_days_and_leap_seconds(void **state)
{
	static const struct { const char *utc; int decimals; const char *text; } cases[] = {
		{ "2031-04-02T01:23:45.678901234Z", 9, "2031-04-02T01:23:45.678901234Z" },
		{ "2031-04-02T01:23:45.678901234Z", 6, "2031-04-02T01:23:45.678901Z" },
		{ "2031-04-02T01:23:45.678901234Z", 3, "2031-04-02T01:23:45.679Z" },
		{ "2031-04-02T01:23:45.678901234Z", 0, "2031-04-02T01:23:46Z" },
		{ "2031-04-02T01:23:45.678901234Z", -1, "2031-04-02T01:23:46Z" },
		{ "2031-04-02T01:23:45.678901234Z", 12, "2031-04-02T01:23:45.678901234Z" },
		{ "2031-04-02T01:59:59.9999996Z", 6, "2031-04-02T02:00:00.000000Z" },
		{ "2023-12-31T23:59:59.96Z", 1, "2024-01-01T00:00:00.0Z" },
		{ "2024-02-28T23:59:59.5Z", 0, "2024-02-29T00:00:00Z" },
		{ "2100-02-28T23:59:59.5Z", 0, "2100-03-01T00:00:00Z" },
		{ "2016-12-31T23:59:59.9999995Z", 6, "2016-12-31T23:59:60.000000Z" },
		{ "2016-12-31T23:59:60.4999999Z", 0, "2016-12-31T23:59:60Z" },
		{ "2016-12-31T23:59:60.9999995Z", 6, "2017-01-01T00:00:00.000000Z" },
		{ "2016-12-31T23:59:60.9999994Z", 6, "2016-12-31T23:59:60.999999Z" },
		{ "1972-06-30T23:59:60Z", 2, "1972-06-30T23:59:60.00Z" },
	};

	(void)state;
	for (size_t i = 0; i < sizeof(cases) / sizeof(cases[0]); i++)
		assert_format(utc(cases[i].utc), cases[i].decimals, cases[i].text);
}

static void texts_that_are_no_instant_are_refused(void **state)
{
	static const struct { const char *text; int ret; } cases[] = {
		{ "", -EINVAL }, { "2031", -EINVAL }, { "2031-04-02", -EINVAL }, { "2031-04-02T01:23Z", -EINVAL },
		{ "2031-04-02T01:23:45", -EINVAL }, { "2031-04-02T01:23:45+00:00", -EINVAL },
		{ "2031-04-02T01:23:45z", -EINVAL }, { "2031-04-02t01:23:45Z", -EINVAL },
		{ "2031-04-02T01:23:45.Z", -EINVAL }, { "2031-04-02T01:23:45,5Z", -EINVAL },
		{ "2031-04-02T01:23:45Z ", -EINVAL }, { " 2031-04-02T01:23:45Z", -EINVAL },
		{ "2031-04-02T01:23:45ZZ", -EINVAL }, { "2031-4-2T1:23:45Z", -EINVAL },
		{ "2031-13-02T01:23:45Z", -EINVAL }, { "2031-00-02T01:23:45Z", -EINVAL },
		{ "2031-04-31T01:23:45Z", -EINVAL }, { "2031-04-00T01:23:45Z", -EINVAL },
		{ "2031-02-29T01:23:45Z", -EINVAL }, { "2100-02-29T01:23:45Z", -EINVAL },
		{ "2031-04-02T24:00:00Z", -EINVAL }, { "2031-04-02T01:60:00Z", -EINVAL },
		{ "2031-04-02T01:23:60Z", -EINVAL }, { "2031-12-31T23:59:60Z", -EINVAL },
		{ "2016-12-31T23:58:60Z", -EINVAL }, { "2016-12-31T23:59:61Z", -EINVAL },
		{ "2016-12-31T22:59:60Z", -EINVAL }, { "2031-04-02T01:23:-5Z", -EINVAL }, { "+031-04-02T01:23:45Z", -EINVAL },
		{ "1971-12-31T23:59:59Z", -ERANGE }, { "2262-01-01T00:00:00Z", -ERANGE }, { "0000-01-01T00:00:00Z", -ERANGE },
		{ "9999-12-31T23:59:59Z", -ERANGE },
		{ "2024-02-29 01:23:45Z", 0 }, { "2000-02-29T01:23:45.1234567890123456789Z", 0 },
		{ "1972-01-01T00:00:00Z", 0 }, { "2261-12-31T23:59:59.999999999Z", 0 },
	};

	(void)state;
	for (size_t i = 0; i < sizeof(cases) / sizeof(cases[0]); i++) {
		struct tai when = { 4242 };

		if (tai_parse_utc(&when, cases[i].text) != cases[i].ret)
			fail_msg("\"%s\" is not answered with %d", cases[i].text, cases[i].ret);
		assert_true(cases[i].ret == 0 || when.ns == 4242);
	}
	assert_int_equal(utc("2031-04-02T01:23:45.0000000005Z").ns - utc("2031-04-02T01:23:45Z").ns, 1);
	assert_int_equal(utc("2031-04-02T01:23:59.9999999999Z").ns, utc("2031-04-02T01:24:00Z").ns);
}

static void differences_count_leap_seconds(void **state)
{
	struct tai before = utc("2016-12-31T23:59:59Z"), after = utc("2017-01-01T00:00:00Z");

	(void)state;
	assert_true(tai_difference(after, before) == 2.0);
	assert_true(tai_difference(before, after) == -2.0);
	assert_int_equal(tai_add(before, 1.5).ns, utc("2016-12-31T23:59:60.5Z").ns);
	assert_int_equal(tai_add(after, -0.25).ns, utc("2016-12-31T23:59:60.75Z").ns);
	/* A double holds 1e9 + 1/8 exactly, but not as many nanoseconds: the fraction is kept apart. */
	assert_int_equal(tai_add((struct tai){ 3 }, 1000000000.125).ns, 1000000000 * giga + 125000003);
	assert_true(tai_difference((struct tai){ 1 }, (struct tai){ 0 }) == 1e-9);
}

static char *write_list(char *path, const char *content)
{
	FILE *file;
	int fd;

	strcpy(path, "/tmp/limbwatch-leap-XXXXXX");
	fd = mkstemp(path);
	assert_true(fd >= 0);
	file = fdopen(fd, "w");
	assert_non_null(file);
	fputs(content, file);
	assert_int_equal(fclose(file), 0);
	return path;
}

/* NTP seconds: 2272060800 is 1972-01-01, 3692217600 is 2017-01-01 (leap-seconds.list); + 4383 days is 2029-01-01. */
#define LIST_HEAD "#\tcomment\n#@ 4102444800\n2272060800\t10\t# 1 Jan 1972\n"

static void a_leap_second_to_come_is_understood_and_given_to_erfa(void **state)
{
	char path[64];
	double era;
	int ret;

	(void)state;
	ret = leap_seconds_open(write_list(path, LIST_HEAD "4070908800 11 # 1 Jan 2029\n\n"));
	unlink(path);
	assert_int_equal(ret, 0);
	assert_format(utc("2028-12-31T23:59:60.5Z"), 1, "2028-12-31T23:59:60.5Z");
	assert_int_equal(tai_minus_utc(utc("2029-01-01T00:00:00Z")), 11);
	assert_true(eraDat(2029, 1, 1, 0.0, &era) >= 0 && era == 11);
	assert_true(eraDat(2028, 12, 31, 0.0, &era) >= 0 && era == 10);
	assert_agrees_with_erfa(utc("2028-12-31T23:59:60.5Z"));
	assert_format(leap_seconds_expiry(), 0, "2030-01-01T00:00:00Z");
}

/* Never used yet, but ITU-R TF.460-6 foresees it: 23:59:58 is followed by 00:00:00. */
static void a_negative_leap_second_is_understood(void **state)
{
	struct tai when, after;
	char path[64];
	int ret;

	(void)state;
	ret = leap_seconds_open(write_list(path, LIST_HEAD "4070908800 9\n"));
	unlink(path);
	assert_int_equal(ret, 0);
	assert_int_equal(tai_parse_utc(&when, "2028-12-31T23:59:59Z"), -EINVAL);
	after = utc("2029-01-01T00:00:00Z");
	assert_true(tai_difference(after, utc("2028-12-31T23:59:58Z")) == 1.0);
	assert_format((struct tai){ after.ns - 1 }, 9, "2028-12-31T23:59:58.999999999Z");
	assert_format(after, 0, "2029-01-01T00:00:00Z");
	assert_true(tai_to_unix(after) - tai_to_unix(utc("2028-12-31T23:59:58Z")) == 2.0);
}

static void a_list_that_is_none_leaves_the_built_in_one(void **state)
{
	static const char *const lists[] = {
		"", "# only a comment\n", "binary\001junk\n", LIST_HEAD "4070908800\n", LIST_HEAD "4070908800 eleven\n",
		LIST_HEAD "4070908800 12\n", LIST_HEAD "4070908801 11\n", LIST_HEAD "2272060800 11\n", "4070908800 38\n",
		LIST_HEAD "4070908800 11 trailing\n", "#@ never\n" LIST_HEAD, LIST_HEAD "99999999999999999999999 11\n",
	};
	char path[64];

	(void)state;
	for (size_t i = 0; i < sizeof(lists) / sizeof(lists[0]); i++) {
		int ret = leap_seconds_open(write_list(path, lists[i]));

		unlink(path);
		assert_int_equal(ret, -EINVAL);
		assert_int_equal(said.level, LEVEL_WARNING);
		assert_non_null(strstr(said.last, path));
		check_published();
	}
	assert_int_equal(leap_seconds_open("/nowhere/leap-seconds.list"), -ENOENT);
	assert_non_null(strstr(said.last, "/nowhere/leap-seconds.list"));
	assert_int_equal(leap_seconds_open("/tmp"), -EISDIR);
	assert_non_null(strstr(said.last, "directory"));
	check_published();
	assert_true(leap_seconds_expiry().ns == INT64_MAX);
}

static void an_expired_list_is_used_and_said(void **state)
{
	char path[64];
	int ret;

	(void)state;
	said.count = 0;
	ret = leap_seconds_open(write_list(path, "#@ 2303683200\n2272060800 10\n2287785600 11\n"));
	unlink(path);
	assert_int_equal(ret, 0);
	assert_int_equal(said.count, 1);
	assert_int_equal(said.level, LEVEL_WARNING);
	assert_non_null(strstr(said.last, "expired on 1973-01-01"));
	assert_int_equal(tai_minus_utc(utc("2020-01-01T00:00:00Z")), 11);
	assert_int_equal(leap_seconds_open(NULL), 0);
	check_published();
}

static void time_qualities_have_their_names(void **state)
{
	(void)state;
	assert_string_equal(time_quality_name(TIME_FREE), "free");
	assert_string_equal(time_quality_name(TIME_HOST), "host");
	assert_string_equal(time_quality_name(TIME_PULSE), "pulse");
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(offsets_are_right_before_any_list_is_opened),
		cmocka_unit_test(offsets_are_right_with_the_list_of_tzdata),
		cmocka_unit_test(random_instants_agree_with_erfa),
		cmocka_unit_test(instants_around_every_leap_second_agree_with_erfa),
		cmocka_unit_test(calendar_agrees_with_the_c_library),
		cmocka_unit_test(unix_time_repeats_the_second_before_a_leap_second),
		cmocka_unit_test(nanoseconds_outside_a_second_carry),
		cmocka_unit_test(ends_of_the_range_hold),
		cmocka_unit_test(rounding_carries_through_minutes_days_and_leap_seconds),
		cmocka_unit_test(texts_that_are_no_instant_are_refused),
		cmocka_unit_test(differences_count_leap_seconds),
		cmocka_unit_test(a_leap_second_to_come_is_understood_and_given_to_erfa),
		cmocka_unit_test(a_negative_leap_second_is_understood),
		cmocka_unit_test(a_list_that_is_none_leaves_the_built_in_one),
		cmocka_unit_test(an_expired_list_is_used_and_said),
		cmocka_unit_test(time_qualities_have_their_names),
	};

	log_set_sink(hear, NULL);
	return cmocka_run_group_tests(tests, NULL, NULL);
}
