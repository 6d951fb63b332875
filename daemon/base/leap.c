/* SPDX-License-Identifier: GPL-3.0-or-later */
#include "limbwatch/tai.h"

#include <errno.h>
#include <inttypes.h>
#include <pthread.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>
#include <erfa.h>
#include <erfaextra.h>

#include "leap.h"
#include "limbwatch/log.h"

enum {
	ROWS_MAX = 200,                 /* 28 in the first 45 years */
	ERA_ROWS_MAX = 32,              /* 14 in ERFA 2.0 before 1972 */
};
static const int64_t ntp_unix = 2208988800;             /* 1900-01-01 to 1970-01-01: RFC 5905, figure 4 */
static const int64_t utc_1972 = 63072000;               /* 1972-01-01: whole seconds from here on */

static struct leap_row rows[ROWS_MAX];
static size_t row_count;
static struct tai expiry = { INT64_MAX };
static eraLEAPSECOND erfa_rows[ERA_ROWS_MAX + ROWS_MAX];        /* ERFA keeps the address */
static pthread_once_t built_in_once = PTHREAD_ONCE_INIT;

/* Days since 1970-01-01 of the first of a month. */
static int64_t month_days(int year, int month)
{
	double mjd_zero, mjd;

	eraCal2jd(year, month, 1, &mjd_zero, &mjd);
	return (int64_t)mjd - 40587;            /* MJD of 1970-01-01 */
}

static void use_built_in(void)
{
	eraLEAPSECOND *table;
	int count;

	eraSetLeapSeconds(NULL, 0);
	count = eraGetLeapSeconds(&table);
	row_count = 0;
	expiry.ns = INT64_MAX;
	for (int i = 0; i < count && row_count < ROWS_MAX; i++)
		if (table[i].iyear >= 1972)
			rows[row_count++] = (struct leap_row){
				.utc = month_days(table[i].iyear, table[i].month) * 86400,
				.offset = (int)table[i].delat,
			};
}

struct leap_table leap_table(void)
{
	pthread_once(&built_in_once, use_built_in);
	return (struct leap_table){ rows, row_count };
}

/* ERFA's own rows of 1960 to 1971 stay in front: its routine for those years counts on them. */
static void give_to_erfa(void)
{
	eraLEAPSECOND *table;
	int count, n = 0;

	eraSetLeapSeconds(NULL, 0);
	count = eraGetLeapSeconds(&table);
	for (int i = 0; i < count && n < ERA_ROWS_MAX && table[i].iyear < 1972; i++)
		erfa_rows[n++] = table[i];
	for (size_t i = 0; i < row_count; i++) {
		double fraction;
		int day;

		eraJd2cal(2440587.5, (double)(rows[i].utc / 86400), &erfa_rows[n].iyear, &erfa_rows[n].month,
			  &day, &fraction);
		erfa_rows[n++].delat = rows[i].offset;
	}
	eraSetLeapSeconds(erfa_rows, n);
}

/* One line of the list: 0 nothing of ours, 1 a row, 2 the expiry, -EINVAL.  `seconds` is NTP time. */
static int read_line(const char *line, int64_t *seconds, int *offset)
{
	const char *data = line + strspn(line, " \t");
	int end = 0;

	if (strncmp(line, "#@", 2) == 0)
		return sscanf(line + 2, "%" SCNd64, seconds) == 1 ? 2 : -EINVAL;
	if (*data == '#' || data[strspn(data, " \t\r\n")] == '\0')
		return 0;
	if (sscanf(data, "%" SCNd64 " %d%n", seconds, offset, &end) != 2)
		return -EINVAL;
	data += end + strspn(data + end, " \t\r\n");
	return *data == '\0' || *data == '#' ? 1 : -EINVAL;
}

/* A row follows the one before by one second, at the end of a UTC day (ITU-R TF.460-6). */
static bool row_is_sound(const struct leap_row *table, size_t k)
{
	if (k == 0)
		return table[0].utc == utc_1972 && table[0].offset == 10;
	return table[k].utc > table[k - 1].utc && table[k].utc % 86400 == 0
		&& abs(table[k].offset - table[k - 1].offset) == 1;
}

/* Reads the whole list before anything is changed.  The list's hash guards against nothing a disk does not. */
static int read_list(FILE *file, const char *path, struct leap_row *table, size_t *count, int64_t *expires)
{
	char *line = NULL;
	size_t room = 0;
	int number = 0, ret = 0;

	*count = 0;
	*expires = 0;
	for (errno = 0; ret == 0 && getline(&line, &room, file) >= 0; errno = 0) {
		int64_t seconds = 0;
		int offset = 0;
		int kind = read_line(line, &seconds, &offset);

		number++;
		if (kind == 2)
			*expires = seconds - ntp_unix;
		if (kind == 1 && *count < ROWS_MAX)
			table[(*count)++] = (struct leap_row){ seconds - ntp_unix, offset };
		if (kind < 0 || (kind == 1 && !row_is_sound(table, *count - 1))) {
			log_warning("%s line %d is no entry of a leap second list; using the built-in one", path, number);
			ret = -EINVAL;
		}
	}
	if (ret == 0 && ferror(file)) {
		ret = errno ? -errno : -EIO;
		log_warning("%s: cannot read the list of leap seconds: %s; using the built-in one", path, strerror(-ret));
	} else if (ret == 0 && *count == 0) {
		ret = -EINVAL;
		log_warning("%s holds no leap seconds; using the built-in list", path);
	}
	free(line);
	return ret;
}

int leap_seconds_open(const char *path)
{
	struct leap_row table[ROWS_MAX];
	char text[TAI_TEXT];
	int64_t expires;
	size_t count;
	FILE *file;
	int ret;

	leap_table();                           /* from here on, `built_in_once` must not fire again */
	use_built_in();
	if (!path)
		path = "/usr/share/zoneinfo/leap-seconds.list";
	file = fopen(path, "re");
	if (!file) {
		ret = -errno;
		log_warning("%s: cannot open the list of leap seconds: %s; using the built-in one", path, strerror(-ret));
		return ret;
	}
	ret = read_list(file, path, table, &count, &expires);
	fclose(file);
	if (ret < 0)
		return ret;
	memcpy(rows, table, count * sizeof(rows[0]));
	row_count = count;
	give_to_erfa();
	if (expires > 0) {
		expiry = tai_from_unix(expires, 0);
		if (time(NULL) > expires)
			log_warning("%s expired on %.10s: a leap second announced since is unknown", path,
				    tai_format_utc(text, expiry, 0));
	}
	return 0;
}

struct tai leap_seconds_expiry(void)
{
	return expiry;
}
