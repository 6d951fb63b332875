/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_TAI_H
#define LIMBWATCH_TAI_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

/** An instant: nanoseconds of TAI since 1970-01-01T00:00:00 TAI.  No other time scale is kept inside. */
struct tai { int64_t ns; };

/**
 * Reads the leap seconds from a leap-seconds.list (NTP/IERS format, as in Debian's tzdata) and gives them to
 * ERFA too.  Without it, or if the file is missing, ERFA's built-in table is used and the log says so.
 * An expired list is said in the log and used.
 *
 * @param path  NULL: /usr/share/zoneinfo/leap-seconds.list
 * @return 0, or -errno when the built-in table is used instead
 */
int leap_seconds_open(const char *path);

/** Instant after which the list promises nothing; ns = INT64_MAX when unknown. */
struct tai leap_seconds_expiry(void);

/** TAI - UTC in whole seconds at that instant (10 before 1972). */
int tai_minus_utc(struct tai when);

/** UTC as Unix time (POSIX seconds and nanoseconds, no leap seconds) to TAI. */
struct tai tai_from_unix(int64_t seconds, long nanoseconds);
/** TAI to Unix time, seconds; during a leap second the second before it is repeated. */
double tai_to_unix(struct tai when);

/**
 * Parses UTC as ISO 8601: 2031-04-02T01:23:45[.frac]Z (also a blank for T, seconds 60 in a real leap second).
 * A time zone other than Z, or none, is an error: local times are refused.
 *
 * @return 0, -EINVAL (malformed or impossible date), -ERANGE (outside 1972 to 2261)
 */
int tai_parse_utc(struct tai *out, const char *text);

/** Longest text of tai_format_utc, with its final zero. */
enum { TAI_TEXT = 32 };

/**
 * UTC as ISO 8601, rounded to `decimals` (0 to 9), with 23:59:60 in a leap second: 2031-04-02T01:23:45.678901Z.
 *
 * @return text
 */
char *tai_format_utc(char text[TAI_TEXT], struct tai when, int decimals);

/** a - b, seconds. */
double tai_difference(struct tai a, struct tai b);
/** when + seconds. */
struct tai tai_add(struct tai when, double seconds);

/** How a time is tied to UTC: through the sampled or counted pulse, the host's clock or a file's statement, not at all. */
enum time_quality { TIME_FREE, TIME_HOST, TIME_PULSE };
/** "free", "host", "pulse". */
const char *time_quality_name(enum time_quality quality);

#endif
