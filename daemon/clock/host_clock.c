/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <ctype.h>
#include <errno.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/timex.h>
#include <time.h>
#include "limbwatch/host_clock.h"

static int64_t read_ns(clockid_t id)
{
	struct timespec t;

	clock_gettime(id, &t);
	return t.tv_sec * INT64_C(1000000000) + t.tv_nsec;
}

static const int64_t least_step_ns = 500000;

/* CLOCK_REALTIME less another clock, from the tightest of a few bracketed readings, and half its bracket. */
static int64_t clock_offset(clockid_t other, double *half_bracket_s)
{
	int64_t best = INT64_MAX, offset = 0;

	for (int k = 0; k < 5; k++) {
		int64_t before = read_ns(other), real = read_ns(CLOCK_REALTIME);
		int64_t bracket = read_ns(other) - before;

		if (bracket < best) {
			best = bracket;
			offset = real - before - bracket / 2;
		}
	}
	*half_bracket_s = (double)best * 0.5e-9;
	return offset;
}

bool host_clock_at(int64_t host_ns, double sigma_s, struct tai *when, double *out_sigma)
{
	double bracket;
	int64_t real = host_ns + clock_offset(CLOCK_MONOTONIC, &bracket);
	int64_t seconds = real / 1000000000;
	struct timex timex = { 0 };
	int state;

	*when = tai_from_unix(seconds, (long)(real - seconds * 1000000000));
	if (sigma_s > 0) {
		*out_sigma = hypot(sigma_s, bracket);
		return true;
	}
	state = adjtimex(&timex);
	/* The kernel's estimated error is about one standard deviation; its maximum error bounds it (RFC 5905, 11.3). */
	*out_sigma = fmax((double)timex.esterror * 1e-6, (double)timex.maxerror * 1e-6 / 3);
	return state >= 0 && state != TIME_ERROR && !(timex.status & STA_UNSYNC);
}

double host_clock_step_by(struct host_clock_watch *watch, int64_t offset_ns)
{
	int64_t step = watch->known ? offset_ns - watch->offset_ns : 0;

	/* A reading that was interrupted is no reference: the offset is kept until the clock is truly set. */
	if (watch->known && llabs(step) < least_step_ns)
		return 0;
	watch->known = true;
	watch->offset_ns = offset_ns;
	return (double)step * 1e-9;
}

double host_clock_step(struct host_clock_watch *watch)
{
	double bracket;
	int64_t offset = clock_offset(CLOCK_BOOTTIME, &bracket);

	if (bracket * 1e9 > (double)least_step_ns / 2)
		return 0;               /* too busy to tell: the next call sees it */
	return host_clock_step_by(watch, offset);
}

int host_clock_boot_from(const char *path, char id[HOST_CLOCK_BOOT])
{
	FILE *in = fopen(path, "re");
	size_t n = 0;
	int c;

	memset(id, '0', HOST_CLOCK_BOOT - 1);
	id[HOST_CLOCK_BOOT - 1] = 0;
	if (!in)
		return -errno;
	while ((c = fgetc(in)) != EOF && c != '\n' && n < HOST_CLOCK_BOOT) {
		if (c == '-')
			continue;
		if (n == HOST_CLOCK_BOOT - 1 || !isxdigit(c))
			break;
		id[n++] = (char)tolower(c);
	}
	fclose(in);
	if (n == HOST_CLOCK_BOOT - 1 && (c == EOF || c == '\n'))
		return 0;
	memset(id, '0', HOST_CLOCK_BOOT - 1);
	return -EINVAL;
}

int host_clock_boot(char id[HOST_CLOCK_BOOT])
{
	return host_clock_boot_from("/proc/sys/kernel/random/boot_id", id);
}
