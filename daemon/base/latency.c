/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <math.h>
#include "limbwatch/latency.h"

/* Octave from the highest bit of the microseconds, eighth from the three bits below it: 8 + k eighths of 2^n. */
static unsigned bin_of(int64_t ns)
{
	uint64_t eighths = ns > 0 ? (uint64_t)ns / 125 : 0;     /* of a microsecond */
	unsigned octave, bin;

	if (eighths < 8)
		return 0;
	octave = 63 - (unsigned)__builtin_clzll(eighths) - 3;
	bin = 8 * octave + (unsigned)((eighths >> octave) & 7);
	return bin < LATENCY_BINS ? bin : LATENCY_BINS - 1;
}

/* Upper edge, seconds. */
static double edge_of(unsigned bin)
{
	return ldexp(8 + bin % 8 + 1, (int)(bin / 8)) * 125e-9;
}

/* One writer: a plain load and store serve, and cost less than an atomic addition. */
void latency_add(struct latency *latency, int64_t ns)
{
	atomic_ullong *bin = &latency->bin[bin_of(ns)];

	atomic_store_explicit(bin, atomic_load_explicit(bin, memory_order_relaxed) + 1, memory_order_relaxed);
	if (ns > atomic_load_explicit(&latency->worst_ns, memory_order_relaxed))
		atomic_store_explicit(&latency->worst_ns, ns, memory_order_relaxed);
}

static double quantile(const unsigned long long bin[LATENCY_BINS], unsigned long long count, double share)
{
	double left = share * (double)count;
	unsigned k = 0;

	while (k < LATENCY_BINS - 1 && (left -= (double)bin[k]) > 0)
		k++;
	return edge_of(k);
}

void latency_read(const struct latency *latency, struct latency_summary *out)
{
	unsigned long long bin[LATENCY_BINS], count = 0;

	for (unsigned k = 0; k < LATENCY_BINS; k++) {
		bin[k] = atomic_load_explicit(&latency->bin[k], memory_order_relaxed);
		count += bin[k];
	}
	*out = (struct latency_summary){ .count = count, .p50_s = NAN, .p999_s = NAN, .worst_s = NAN };
	if (!count)
		return;
	out->worst_s = (double)atomic_load_explicit(&latency->worst_ns, memory_order_relaxed) * 1e-9;
	out->p50_s = fmin(quantile(bin, count, 0.5), out->worst_s);
	out->p999_s = fmin(quantile(bin, count, 0.999), out->worst_s);
}
