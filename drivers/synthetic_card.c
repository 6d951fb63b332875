/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <gsl/gsl_randist.h>
#include <gsl/gsl_rng.h>
#include <math.h>
#include <stdlib.h>
#include "synthetic_card.h"

/* True seconds that hold all frames, however slow the card. */
static size_t seconds_needed(const struct synthetic_card_settings *v)
{
	double hours = v->duration_s / 3600;
	double ppm = fabs(v->error_ppm) + fabs(v->drift_ppm_per_hour) * hours + 6 * v->wander_ppm * sqrt(hours);

	return (size_t)(v->duration_s * (1 + 1.1e-6 * ppm)) + 3;
}

int synthetic_card_init(struct synthetic_card *out, const struct synthetic_card_settings *v)
{
	size_t seconds = seconds_needed(v);
	double *frame = malloc((seconds + 1) * sizeof(*frame)), wander = 0;
	gsl_rng *rng = gsl_rng_alloc(gsl_rng_mt19937);

	if (!frame || !rng) {
		free(frame);
		gsl_rng_free(rng);
		return -ENOMEM;
	}
	gsl_rng_set(rng, v->seed);
	frame[0] = 0;
	for (size_t s = 0; s < seconds; s++) {
		double ppm = v->error_ppm + v->drift_ppm_per_hour * ((double)s + 0.5) / 3600 + wander;

		wander += gsl_ran_gaussian(rng, v->wander_ppm / 60);
		frame[s + 1] = frame[s] + v->rate * (1 + ppm * 1e-6);
	}
	gsl_rng_free(rng);
	*out = (struct synthetic_card){ .rate = v->rate, .seconds = seconds, .second_frame = frame };
	return 0;
}

void synthetic_card_release(struct synthetic_card *card)
{
	free(card->second_frame);
	card->second_frame = NULL;
}

double synthetic_card_frame(const struct synthetic_card *card, double t)
{
	size_t s = t <= 0 ? 0 : (size_t)t;

	if (s >= card->seconds)
		s = card->seconds - 1;
	return card->second_frame[s] + (t - (double)s) * (card->second_frame[s + 1] - card->second_frame[s]);
}

size_t synthetic_card_second(const struct synthetic_card *card, double n)
{
	size_t k = (size_t)(n / card->rate);

	if (k >= card->seconds)
		k = card->seconds - 1;
	while (k > 0 && card->second_frame[k] > n)
		k--;
	while (k + 1 < card->seconds && card->second_frame[k + 1] <= n)
		k++;
	return k;
}

double synthetic_card_time(const struct synthetic_card *card, double n)
{
	size_t k = synthetic_card_second(card, n);

	return (double)k + (n - card->second_frame[k]) / (card->second_frame[k + 1] - card->second_frame[k]);
}
