/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdlib.h>
#include <cmocka.h>
#include <gsl/gsl_randist.h>
#include <gsl/gsl_sort.h>
#include <gsl/gsl_statistics.h>
#include "limbwatch/latency.h"

static void nothing_added_has_no_quantile(void **state)
{
	struct latency latency = { 0 };
	struct latency_summary s;

	(void)state;
	latency_read(&latency, &s);
	assert_int_equal(s.count, 0);
	assert_true(isnan(s.p50_s) && isnan(s.p999_s) && isnan(s.worst_s));
}

/* Quantiles beside GSL's of the same values. */
static void quantiles_agree_with_sorted_values(void **state)
{
	enum { N = 20000 };
	static double value[N];
	static struct latency latency;
	struct latency_summary s;
	gsl_rng *rng = gsl_rng_alloc(gsl_rng_taus2);

	(void)state;
	gsl_rng_set(rng, 7);
	for (int k = 0; k < N; k++) {
		value[k] = gsl_ran_lognormal(rng, log(2e-3), 1.5);
		latency_add(&latency, llround(value[k] * 1e9));
	}
	gsl_rng_free(rng);
	gsl_sort(value, 1, N);
	latency_read(&latency, &s);
	assert_int_equal(s.count, N);
	double p50 = gsl_stats_quantile_from_sorted_data(value, 1, N, 0.5);
	double p999 = gsl_stats_quantile_from_sorted_data(value, 1, N, 0.999);
	assert_true(s.p50_s >= p50 * 0.999 && s.p50_s <= p50 * 1.13);
	assert_true(s.p999_s >= p999 * 0.98 && s.p999_s <= p999 * 1.15);
	assert_true(fabs(s.worst_s - value[N - 1]) < 1e-8);
}

static void extremes_are_counted(void **state)
{
	static struct latency latency;
	struct latency_summary s;

	(void)state;
	latency_add(&latency, INT64_MIN);
	latency_add(&latency, 0);
	latency_add(&latency, INT64_MAX);
	latency_read(&latency, &s);
	assert_int_equal(s.count, 3);
	assert_true(s.p50_s <= 2e-6);
	assert_true(s.worst_s > 9e9);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(nothing_added_has_no_quantile),
		cmocka_unit_test(quantiles_agree_with_sorted_values),
		cmocka_unit_test(extremes_are_counted),
	};

	return cmocka_run_group_tests_name("latency", tests, NULL, NULL);
}
