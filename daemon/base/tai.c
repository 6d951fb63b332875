/* SPDX-License-Identifier: GPL-3.0-or-later */
#include "limbwatch/tai.h"

#include <errno.h>
#include <math.h>
#include <stdio.h>
#include <string.h>

#include "leap.h"

enum { DAY = 86400, GIGA = 1000000000, YEAR_MIN = 1972, YEAR_MAX = 2261 };

/* Division toward minus infinity; the remainder is never negative. */
static int64_t floor_divide(int64_t a, int64_t b, int64_t *remainder)
{
	int64_t quotient = a / b;

	*remainder = a % b;
	if (*remainder < 0) {
		*remainder += b;
		quotient--;
	}
	return quotient;
}

/* Days from 1970-01-01 in the proleptic Gregorian calendar: years counted from March put the leap day last. */
static int64_t days_from_date(int64_t year, int month, int day)
{
	int64_t shifted = year - (month <= 2), year_of_era;
	int64_t era = floor_divide(shifted, 400, &year_of_era);
	int64_t day_of_year = (153 * (month + (month > 2 ? -3 : 9)) + 2) / 5 + day - 1;

	return era * 146097 + year_of_era * 365 + year_of_era / 4 - year_of_era / 100 + day_of_year - 719468;
}

static void date_from_days(int64_t days, int *year, int *month, int *day)
{
	int64_t day_of_era;
	int64_t era = floor_divide(days + 719468, 146097, &day_of_era);
	int64_t year_of_era = (day_of_era - day_of_era / 1460 + day_of_era / 36524 - day_of_era / 146096) / 365;
	int64_t day_of_year = day_of_era - (365 * year_of_era + year_of_era / 4 - year_of_era / 100);
	int64_t shifted_month = (5 * day_of_year + 2) / 153;

	*day = (int)(day_of_year - (153 * shifted_month + 2) / 5 + 1);
	*month = (int)(shifted_month < 10 ? shifted_month + 3 : shifted_month - 9);
	*year = (int)(year_of_era + era * 400 + (*month <= 2));
}

/* TAI - UTC from the Unix second on. */
static int offset_at_unix(int64_t seconds)
{
	struct leap_table leaps = leap_table();

	for (size_t i = leaps.count; i-- > 0;)
		if (seconds >= leaps.row[i].utc)
			return leaps.row[i].offset;
	return 10;
}

/* TAI - UTC during a second of TAI, and whether that is a leap second, which belongs to the day before. */
static int offset_at_tai(int64_t tai_seconds, bool *leap)
{
	struct leap_table leaps = leap_table();

	*leap = false;
	for (size_t i = leaps.count; i-- > 0;) {
		if (tai_seconds >= leaps.row[i].utc + leaps.row[i].offset)
			return leaps.row[i].offset;
		if (i > 0 && tai_seconds >= leaps.row[i].utc + leaps.row[i - 1].offset) {
			*leap = true;
			return leaps.row[i - 1].offset;
		}
	}
	return 10;
}

/* Seconds in the last minute of a UTC day: 61 with a leap second, 59 with a negative one. */
static int last_minute(int64_t days)
{
	return 60 + offset_at_unix((days + 1) * DAY) - offset_at_unix(days * DAY);
}

/* seconds * 1e9 + nanoseconds, held at the ends of the range. */
static struct tai tai_make(int64_t seconds, int64_t nanoseconds)
{
	int64_t ns;

	/* Adding with the sign of the seconds first keeps the last second of the range reachable. */
	if (seconds < 0 && nanoseconds > 0) {
		seconds++;
		nanoseconds -= GIGA;
	}
	if (__builtin_mul_overflow(seconds, (int64_t)GIGA, &ns) || __builtin_add_overflow(ns, nanoseconds, &ns))
		ns = seconds < 0 ? INT64_MIN : INT64_MAX;
	return (struct tai){ ns };
}

int tai_minus_utc(struct tai when)
{
	int64_t fraction;
	bool leap;

	return offset_at_tai(floor_divide(when.ns, GIGA, &fraction), &leap);
}

struct tai tai_from_unix(int64_t seconds, long nanoseconds)
{
	int64_t fraction;
	int64_t carry = floor_divide(nanoseconds, GIGA, &fraction);

	if (__builtin_add_overflow(seconds, carry, &seconds)
	    || __builtin_add_overflow(seconds, (int64_t)offset_at_unix(seconds), &seconds))
		return (struct tai){ seconds < 0 ? INT64_MAX : INT64_MIN };     /* it wrapped */
	return tai_make(seconds, fraction);
}

double tai_to_unix(struct tai when)
{
	int64_t fraction;
	int64_t seconds = floor_divide(when.ns, GIGA, &fraction);
	bool leap;
	int offset = offset_at_tai(seconds, &leap);

	return (double)(seconds - offset - leap) + (double)fraction / GIGA;
}

/* Exactly `n` digits; the text moves on behind them.  -1 when there are fewer. */
static int take_digits(const char **text, int n)
{
	int value = 0;

	for (int i = 0; i < n; i++, (*text)++) {
		if (**text < '0' || **text > '9')
			return -1;
		value = 10 * value + (**text - '0');
	}
	return value;
}

static bool take_character(const char **text, const char *allowed)
{
	if (**text == '\0' || !strchr(allowed, **text))
		return false;
	(*text)++;
	return true;
}

/* .frac, rounded to a nanosecond from the digits beyond the ninth; at least one digit.  -1 when malformed. */
static int64_t take_fraction(const char **text)
{
	int64_t value = 0;
	int digits = 0;

	for (; **text >= '0' && **text <= '9'; (*text)++, digits++) {
		if (digits < 9)
			value = 10 * value + (**text - '0');
		else if (digits == 9)
			value += **text >= '5';
	}
	if (digits == 0)
		return -1;
	for (; digits < 9; digits++)
		value *= 10;
	return value;
}

static int days_in_month(int year, int month)
{
	return (int)(days_from_date(year + (month == 12), month == 12 ? 1 : month + 1, 1)
		     - days_from_date(year, month, 1));
}

int tai_parse_utc(struct tai *out, const char *text)
{
	int year, month, day, hour, minute, second;
	int64_t fraction = 0, days;

	if ((year = take_digits(&text, 4)) < 0 || !take_character(&text, "-")
	    || (month = take_digits(&text, 2)) < 0 || !take_character(&text, "-")
	    || (day = take_digits(&text, 2)) < 0 || !take_character(&text, "T ")
	    || (hour = take_digits(&text, 2)) < 0 || !take_character(&text, ":")
	    || (minute = take_digits(&text, 2)) < 0 || !take_character(&text, ":")
	    || (second = take_digits(&text, 2)) < 0)
		return -EINVAL;
	if (take_character(&text, ".") && (fraction = take_fraction(&text)) < 0)
		return -EINVAL;
	if (!take_character(&text, "Z") || *text != '\0')
		return -EINVAL;
	if (month < 1 || month > 12 || day < 1 || day > days_in_month(year, month) || hour > 23 || minute > 59)
		return -EINVAL;
	if (year < YEAR_MIN || year > YEAR_MAX)
		return -ERANGE;
	days = days_from_date(year, month, day);
	if (second >= (hour == 23 && minute == 59 ? last_minute(days) : 60))
		return -EINVAL;
	*out = tai_make(days * DAY + hour * 3600 + minute * 60 + second + offset_at_unix(days * DAY), fraction);
	return 0;
}

char *tai_format_utc(char text[TAI_TEXT], struct tai when, int decimals)
{
	int64_t unit = 1, fraction, second_of_day, rounded, days;
	int year, month, day, n;
	bool leap;

	decimals = decimals < 0 ? 0 : decimals > 9 ? 9 : decimals;
	for (int i = decimals; i < 9; i++)
		unit *= 10;
	/* TAI and UTC seconds begin together, so rounding in TAI carries through minutes, days and leap seconds. */
	if (__builtin_add_overflow(when.ns, unit / 2, &rounded))
		rounded = when.ns;
	rounded = floor_divide(rounded, GIGA, &fraction);
	rounded -= offset_at_tai(rounded, &leap) + leap;
	days = floor_divide(rounded, DAY, &second_of_day);
	date_from_days(days, &year, &month, &day);
	n = snprintf(text, TAI_TEXT, "%04d-%02d-%02dT%02d:%02d:%02d", year, month, day, (int)(second_of_day / 3600),
		     (int)(second_of_day / 60 % 60), (int)(second_of_day % 60) + leap);
	if (decimals > 0)
		n += snprintf(text + n, TAI_TEXT - (size_t)n, ".%0*d", decimals, (int)(fraction / unit));
	snprintf(text + n, TAI_TEXT - (size_t)n, "Z");
	return text;
}

double tai_difference(struct tai a, struct tai b)
{
	int64_t ns;

	if (__builtin_sub_overflow(a.ns, b.ns, &ns))
		return (double)a.ns / GIGA - (double)b.ns / GIGA;
	return (double)ns / GIGA;
}

struct tai tai_add(struct tai when, double seconds)
{
	int64_t ns;
	double whole;

	if (isnan(seconds))
		return when;
	if (fabs(seconds) > 1.8e10)             /* the whole range of 585 years is 1.845e10 s */
		return (struct tai){ seconds < 0 ? INT64_MIN : INT64_MAX };
	whole = nearbyint(seconds);
	struct tai step = tai_make((int64_t)whole, 0);

	if (__builtin_add_overflow(step.ns, llround((seconds - whole) * GIGA), &ns)
	    || __builtin_add_overflow(when.ns, ns, &ns))
		ns = seconds < 0 ? INT64_MIN : INT64_MAX;
	return (struct tai){ ns };
}

const char *time_quality_name(enum time_quality quality)
{
	static const char *const name[] = { [TIME_FREE] = "free", [TIME_HOST] = "host", [TIME_PULSE] = "pulse" };

	return (size_t)quality < sizeof(name) / sizeof(name[0]) ? name[quality] : "unknown";
}
