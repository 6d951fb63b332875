/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_LATENCY_H
#define LIMBWATCH_LATENCY_H

#include <stdatomic.h>
#include <stdint.h>

/*
 * How long something took, many times: a histogram with eight bins an octave from 1 us to 18 min, so that a quantile is
 * known to 9%.  One thread adds, any thread reads; all zero is empty.
 */
enum { LATENCY_BINS = 8 * 30 };

struct latency {
	atomic_ullong bin[LATENCY_BINS];
	atomic_llong worst_ns;
};

/** The adding thread.  No lock, allocation or system call.  Below zero counts as zero. */
void latency_add(struct latency *latency, int64_t ns);

struct latency_summary {
	unsigned long long count;
	double p50_s, p999_s, worst_s;  /* upper edge of the bin, at most the worst; NAN when there is none */
};
/** Any thread. */
void latency_read(const struct latency *latency, struct latency_summary *out);

#endif
