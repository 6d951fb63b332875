/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <math.h>
#include <sys/timex.h>
#include <time.h>
#include "limbwatch/host_clock.h"

static int64_t read_ns(clockid_t id)
{
	struct timespec t;

	clock_gettime(id, &t);
	return t.tv_sec * INT64_C(1000000000) + t.tv_nsec;
}

/* CLOCK_REALTIME - CLOCK_MONOTONIC, from the tightest of a few bracketed readings, and half its bracket. */
static int64_t clock_offset(double *half_bracket_s)
{
	int64_t best = INT64_MAX, offset = 0;

	for (int k = 0; k < 5; k++) {
		int64_t before = read_ns(CLOCK_MONOTONIC), real = read_ns(CLOCK_REALTIME);
		int64_t bracket = read_ns(CLOCK_MONOTONIC) - before;

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
	int64_t real = host_ns + clock_offset(&bracket);
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
