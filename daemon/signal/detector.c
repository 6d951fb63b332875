/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * Samples stand twice in a buffer of two windows, so that every window is contiguous.  The first stretch is held back until
 * the noise has been measured from it; after that each sample is one window, one rho per template.  Windows above the
 * threshold form an island; its highest peak is fitted once no window that still holds the edge can top it.
 */
#include <errno.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include "limbwatch/bank.h"
#include "limbwatch/detector.h"
#include "limbwatch/log.h"
#include "limbwatch/noise.h"

enum {
	W = DETECTOR_WINDOW,
	HOP = NOISE_SEGMENT / 2,
	STARTUP = 9 * HOP,              /* samples held back: eight segments of noise */
	MEASURED = 20,                  /* segments from which the noise counts as measured */
	PENDING = 4,                    /* segments waiting for their verdict */
	STUCK = 24,                     /* segments refused in a row: then the noise has changed */
	AFRESH = 8,                     /* segments from which it is measured then */
	QUEUE = 16,
};

static const double night_s = 36000;
static const double quiet_rho = 5;              /* a segment with more holds an event */
static const double always_kept = 15;           /* rho above which an event is marked rather than rejected */
static const double fringes_gain = 9;
static const double chi2_sigmas = 4;
static const float too_large = 1e15f;

/* A window that stands out. */
struct peak {
	bool open;
	float rho;
	size_t template;
	uint64_t end;                   /* number after its last sample */
	double threshold;
	float window[W];
};

struct detector {
	struct detector_settings settings;
	struct bank *bank;
	struct noise *noise;
	double noise_rms, threshold, vigil_base;        /* rms over one T_F; thresholds outside, and at the predicted instant */
	size_t noise_segments;          /* the model in force was told from so many */
	bool dead;                      /* the series does not move: nothing to detect until it does */
	float still;                    /* where it stands then */
	/* The newest samples: number next - 1 stands at ring[(next - 1) % W] and again W later. */
	uint64_t next;
	uint64_t usable;                /* windows that begin before this number hold a missing sample */
	float ring[2 * W];
	/* Held back, then kept for the noise. */
	float history[STARTUP];
	size_t held;
	bool started;
	float offset;                   /* taken off every sample, so that rounding does not grow with the baseline */
	/* Noise segments. */
	float segment[NOISE_SEGMENT + HOP * PENDING];
	size_t segment_filled;
	float largest[PENDING + 4];     /* largest rho per hop, newest last */
	size_t segments_refused, segments_since;
	size_t next_refresh;
	/* What is expected. */
	struct { double centre, sigma; } expected[CONTACT_KINDS];
	struct peak best;               /* of the island */
	struct peak earlier;            /* was the best until the flank of a stronger one topped it, half a window later or more */
	/* Given out by the next call. */
	size_t queued;
	struct candidate queue[QUEUE];
};

/* ------------------------------------------------------------------ thresholds */

/* The u at which `kind`s together alarm at that rate per sample. */
static double solve_threshold(const struct detector *d, const bool kinds[CONTACT_KINDS], double rate)
{
	double low = 2.5, high = 60;

	for (int k = 0; k < 60; k++) {
		double middle = 0.5 * (low + high), sum = 0;

		for (int kind = 0; kind < CONTACT_KINDS; kind++)
			if (kinds[kind] && d->settings.kind[kind])
				sum += bank_alarm_rate(d->bank, (enum contact_kind)kind, middle);
		if (sum > rate)
			low = middle;
		else
			high = middle;
	}
	return high;
}

/*
 * Noise told from few segments is sometimes told too small, and rho is then too large by the same factor: the threshold
 * allows for it until NOISE_KEPT segments count, from when on the alarm rate was measured.  Half of 1 / sqrt(segments) is
 * the spread of rho's scale where it is worst, at the lowest frequencies, of which a template holds most.
 */
static double ignorance(const struct detector *d)
{
	double segments = (double)d->noise_segments;

	/* A clip of a few segments is over before it can alarm, and its event is in its noise. */
	if (d->noise_segments < STARTUP / HOP - 1)
		return 1;
	return 1 + 0.5 * (1 / sqrt(segments) - 1 / sqrt(NOISE_KEPT));
}

static void set_thresholds(struct detector *d)
{
	static const bool both[CONTACT_KINDS] = { true, true };
	double samples = night_s * d->settings.rate, width = 0;
	bool kinds[CONTACT_KINDS] = { false };

	d->threshold = d->settings.threshold;
	d->vigil_base = d->settings.threshold;
	if (d->settings.threshold > 0)
		return;
	d->threshold = ignorance(d) * solve_threshold(d, both, d->settings.false_alarms_per_night / samples);
	for (int kind = 0; kind < CONTACT_KINDS; kind++)
		if (d->expected[kind].sigma > 0) {
			kinds[kind] = true;
			width += d->expected[kind].sigma * sqrt(2 * M_PI);
		}
	/* Alarms all over the vigil: rate(u0) * width, when u^2 = u0^2 + z^2 follows the Gaussian prior. */
	if (width > 0)
		d->vigil_base = fmin(d->threshold, ignorance(d) *
		                     solve_threshold(d, kinds, d->settings.false_alarms_per_vigil / width));
}

/* Threshold for a contact of that kind at that place. */
static double threshold_at(const struct detector *d, enum contact_kind kind, double contact)
{
	double z, u;

	if (d->settings.threshold > 0 || !(d->expected[kind].sigma > 0))
		return d->threshold;
	z = (contact - d->expected[kind].centre) / d->expected[kind].sigma;
	u = sqrt(d->vigil_base * d->vigil_base + z * z);
	return fmin(u, d->threshold);
}

void detector_expect(struct detector *d, enum contact_kind kind, double centre, double sigma)
{
	d->expected[kind].centre = centre;
	d->expected[kind].sigma = sigma > 0 ? sigma : 0;
	set_thresholds(d);
}

double detector_threshold(const struct detector *d)
{
	return d->threshold;
}

double detector_noise(const struct detector *d)
{
	return d->noise_rms;
}

double detector_latency(const struct detector *d)
{
	(void)d;
	/* From an emersion's contact, 21% into its window, to the end of that window and of one more. */
	return (1 - 0.21) * W + W + 2;
}

double detector_startup(const struct detector *d)
{
	(void)d;
	return STARTUP;
}

/* ------------------------------------------------------------------ noise */

static void take_model(struct detector *d, const struct noise_model *model)
{
	double sum = 0, samples = W / 16.0;
	int n = (int)rint(samples);

	if (bank_whiten(d->bank, model) < 0)
		return;                 /* the former one stays */
	for (int i = 0; i < n; i++)
		for (int j = 0; j < n; j++)
			sum += model->covariance[abs(i - j)];
	d->noise_rms = sqrt(fmax(sum, 0)) / n;
	d->noise_segments = noise_count(d->noise);
	set_thresholds(d);
}

static int by_value(const void *a, const void *b)
{
	float x = *(const float *)a, y = *(const float *)b;

	return (x > y) - (x < y);
}

/* Before enough has been seen: white, from the median of the first differences, which an event hardly touches. */
static bool assume_noise(const float *x, size_t n, struct noise_model *out)
{
	float difference[STARTUP];
	size_t count = 0;
	double sigma;

	for (size_t k = 1; k < n; k++)
		if (isfinite(x[k]) && isfinite(x[k - 1]))
			difference[count++] = fabsf(x[k] - x[k - 1]);
	if (count < 16)
		return false;
	qsort(difference, count, sizeof(*difference), by_value);
	sigma = (double)difference[count / 2] / 0.6745 / M_SQRT2;
	if (!(sigma > 0))
		return false;
	noise_assume(sigma * sigma, out);
	return true;
}

static void refresh_noise(struct detector *d)
{
	struct noise_model model;
	int ret = noise_measure(d->noise, &model);

	d->dead = ret == -EDOM;
	if (ret == 0)
		take_model(d, &model);
	if (d->dead)
		d->still = d->segment[NOISE_SEGMENT - 1] + d->offset;
	d->segments_refused = 0;
	d->next_refresh = noise_count(d->noise) < MEASURED ? MEASURED : noise_count(d->noise) < 40 ? 40 : NOISE_KEPT;
	d->segments_since = 0;
}

static bool all_finite(const float *x, size_t n)
{
	for (size_t k = 0; k < n; k++)
		if (!isfinite(x[k]))
			return false;
	return true;
}

/* The oldest waiting segment: taken into the noise unless an event or a gap is in it. */
static void judge_segment(struct detector *d)
{
	bool quiet = true;

	/* Windows that touch the segment end up to a window after it: three hops of largest values. */
	for (int k = 0; k < 4; k++)
		quiet &= d->largest[k] < (float)quiet_rho;
	if (!all_finite(d->segment, NOISE_SEGMENT))
		return;
	if (!quiet && ++d->segments_refused < STUCK)
		return;
	if (!quiet && d->segments_refused == STUCK) {
		/* Not an event: the noise is larger than was thought.  Measured anew, from whatever comes. */
		noise_clear(d->noise);
		d->next_refresh = AFRESH;
	}
	if (quiet && d->segments_refused < STUCK)
		d->segments_refused = 0;
	noise_add(d->noise, d->segment);
	d->segments_since++;
	if (noise_count(d->noise) < NOISE_KEPT ? noise_count(d->noise) >= d->next_refresh : d->segments_since >= NOISE_KEPT)
		refresh_noise(d);
}

/* A hop of samples is complete. */
static void end_hop(struct detector *d)
{
	if (d->segment_filled < sizeof(d->segment) / sizeof(*d->segment))
		return;
	judge_segment(d);
	d->segment_filled -= HOP;
	memmove(d->segment, d->segment + HOP, d->segment_filled * sizeof(*d->segment));
	memmove(d->largest, d->largest + 1, sizeof(d->largest) - sizeof(*d->largest));
	d->largest[PENDING + 3] = 0;
}

/* Samples and the largest rho go into the noise together, a hop at a time. */
static void note_sample(struct detector *d, float x, float largest)
{
	size_t hop = d->segment_filled / HOP;

	if (hop >= PENDING + 4)
		hop = PENDING + 3;
	d->segment[d->segment_filled++] = x;
	if (largest > d->largest[hop])
		d->largest[hop] = largest;
	if (d->segment_filled % HOP == 0)
		end_hop(d);
}

static void restart_noise_segments(struct detector *d)
{
	d->segment_filled = 0;
	memset(d->largest, 0, sizeof(d->largest));
}

/* ------------------------------------------------------------------ candidates */

static double chi2_limit(const struct detector *d, const struct bank_fit *fit)
{
	double mismatch = d->settings.scintillation * fit->rho;

	return 1 + chi2_sigmas * sqrt(2 / fit->freedom) + mismatch * mismatch / fit->freedom;
}

/*
 * Kept: clean residuals; or a strong event (rho > 15) that explains at least half of what stands out, marked.  Rejected: weaker
 * ones with residuals that are not noise, and windows that hold something else altogether.
 */
static bool worth_keeping(const struct detector *d, const struct bank_fit *fit, bool *marked)
{
	double excess = fit->chi2 / fit->freedom;

	*marked = excess > chi2_limit(d, fit);
	if (!*marked)
		return true;
	return fit->rho > always_kept && fit->chi2 - fit->freedom < fit->rho * fit->rho;
}

/*
 * Whole windows later nothing tops this one any more.  A peak that was topped within the window after it is a contact of its own
 * if its window holds nothing else: else it was a sidelobe of the stronger one.  A fit at the end of its reach is a
 * flank of something whose own window is not whole (a gap).
 */
static void close_peak(struct detector *d, struct peak *peak, bool topped)
{
	const struct bank_template *template = bank_template(d->bank, peak->template);
	double window_begin = (double)(peak->end - W);
	struct candidate *c = &d->queue[d->queued];
	struct bank_fit fit;
	bool marked;

	peak->open = false;
	if (d->queued == QUEUE || !bank_fit(d->bank, peak->window, template->kind, &fit))
		return;
	if (fit.flank || fit.rho < peak->threshold || !worth_keeping(d, &fit, &marked) || (topped && marked))
		return;
	*c = (struct candidate){
		.kind = template->kind, .position = window_begin + fit.contact, .position_sigma = fit.contact_sigma,
		.snr = fit.rho, .scale = fit.scale, .scale_sigma = fit.scale_sigma, .size = fit.size, .flux = fit.flux,
		.baseline = fit.baseline + (double)d->offset, .chi2_excess = fit.chi2 / fit.freedom, .marked = marked,
		.fringe_gain = fit.fringe_gain,
		.verdict = fit.fringe_gain > fringes_gain ? VERDICT_FRINGES : VERDICT_STEP,
		.noise_prior = noise_count(d->noise) < MEASURED, .threshold = peak->threshold,
	};
	d->queued++;
}

static void close_all(struct detector *d)
{
	if (d->earlier.open)
		close_peak(d, &d->earlier, true);
	if (d->best.open)
		close_peak(d, &d->best, false);
}

static void consider(struct detector *d, const float *window, float rho, size_t k, double threshold)
{
	if (d->best.open && rho <= d->best.rho)
		return;
	if (d->best.open && !d->earlier.open && d->next >= d->best.end + W / 2)
		d->earlier = d->best;
	d->best.open = true;
	d->best.rho = rho;
	d->best.template = k;
	d->best.end = d->next;
	d->best.threshold = threshold;
	memcpy(d->best.window, window, sizeof(d->best.window));
}

/* One window, the newest W samples. @return the largest rho */
static float look(struct detector *d)
{
	const float *window = d->ring + d->next % W;
	float rho[2 * BANK_SCALES * BANK_SIZES], largest[CONTACT_KINDS] = { 0 }, all = 0;
	size_t at[CONTACT_KINDS] = { 0 };

	bank_execute(d->bank, window, rho);
	for (size_t k = 0; k < bank_templates(d->bank); k++) {
		enum contact_kind kind = bank_template(d->bank, k)->kind;

		if (rho[k] > largest[kind]) {
			largest[kind] = rho[k];
			at[kind] = k;
		}
	}
	for (int kind = 0; kind < CONTACT_KINDS; kind++) {
		double contact = (double)(d->next - W) + bank_template(d->bank, at[kind])->contact, threshold;

		all = largest[kind] > all ? largest[kind] : all;
		if (!(largest[kind] > 2.5f))
			continue;
		threshold = threshold_at(d, (enum contact_kind)kind, contact);
		if ((double)largest[kind] > threshold)
			consider(d, window, largest[kind], at[kind], threshold);
	}
	return all;
}

/* ------------------------------------------------------------------ samples */

static void take_sample(struct detector *d, float x)
{
	float largest = 0;
	bool missing = !(fabsf(x) < too_large);

	x = missing ? 0 : x - d->offset;
	d->ring[d->next % W] = d->ring[d->next % W + W] = x;
	d->next++;
	if (missing)
		d->usable = d->next;
	if (!d->dead && d->next >= W && d->next - W >= d->usable)
		largest = look(d);
	if (d->earlier.open && d->next >= d->earlier.end + W)
		close_peak(d, &d->earlier, true);
	if (d->best.open && d->next >= d->best.end + W)
		close_peak(d, &d->best, false);
	note_sample(d, missing ? NAN : x, largest);
}

static float middle_of(const float *x, size_t n)
{
	double sum = 0;
	size_t count = 0;

	for (size_t k = 0; k < n; k++)
		if (isfinite(x[k])) {
			sum += (double)x[k];
			count++;
		}
	return count ? (float)(sum / (double)count) : 0;
}

/* The held stretch: first its noise, then its windows. */
static void start(struct detector *d)
{
	struct noise_model model;

	d->started = true;
	d->offset = middle_of(d->history, d->held);
	for (size_t k = 0; k + NOISE_SEGMENT <= d->held; k += HOP)
		if (all_finite(d->history + k, NOISE_SEGMENT))
			noise_add(d->noise, d->history + k);
	if (noise_measure(d->noise, &model) == 0 || assume_noise(d->history, d->held, &model))
		take_model(d, &model);
	else
		d->dead = true;
	d->still = d->history[d->held - 1];
	noise_clear(d->noise);          /* these segments come again, with their verdict */
	d->next_refresh = MEASURED;
	for (size_t k = 0; k < d->held; k++)
		take_sample(d, d->history[k]);
}

static void begin_run(struct detector *d, uint64_t index)
{
	if (!d->started && d->held)
		start(d);
	close_all(d);
	d->next = d->usable = index;
	d->held = 0;
	restart_noise_segments(d);
}

static size_t give(struct detector *d, struct candidate *out, size_t max)
{
	size_t n = d->queued < max ? d->queued : max;

	memcpy(out, d->queue, n * sizeof(*out));
	d->queued -= n;
	memmove(d->queue, d->queue + n, d->queued * sizeof(*d->queue));
	return n;
}

static bool moves(const struct detector *d, float x)
{
	return fabsf(x) < too_large && !(fabsf(x - d->still) <= 0);
}

/* A series that stood still (receiver off) moves: held back and measured like the first. */
static void wake(struct detector *d)
{
	d->dead = d->started = false;
	d->held = 0;
	d->usable = d->next;
	noise_clear(d->noise);
	restart_noise_segments(d);
}

static void hold(struct detector *d, float x)
{
	d->history[d->held++] = fabsf(x) < too_large ? x : NAN;
	if (d->held == STARTUP)
		start(d);
}

size_t detector_execute(struct detector *d, const float *series, size_t n, uint64_t index, struct candidate *out,
                        size_t max)
{
	if (n && index != d->next + (d->started ? 0 : d->held))
		begin_run(d, index);
	for (size_t k = 0; k < n; k++) {
		if (d->started && d->dead && moves(d, series[k]))
			wake(d);
		if (d->started)
			take_sample(d, series[k]);
		else
			hold(d, series[k]);
	}
	return give(d, out, max);
}

size_t detector_finish(struct detector *d, struct candidate *out, size_t max)
{
	if (!d->started && d->held)
		start(d);
	close_all(d);
	return give(d, out, max);
}

/* ------------------------------------------------------------------ create and destroy */

static int check(const struct detector_settings *s)
{
	if (!(s->rate > 0 && s->rate < 1e7) || !(s->scale_min > 0.01 && s->scale_min < s->scale_max && s->scale_max < 100)) {
		log_error("detector: rate %g Hz or scales %g to %g are out of range", s->rate, s->scale_min, s->scale_max);
		return -EINVAL;
	}
	if (!(s->false_alarms_per_night > 0) || !(s->false_alarms_per_vigil > 0) || !(s->threshold >= 0) ||
	    !(s->scintillation >= 0) || !(s->kind[0] || s->kind[1])) {
		log_error("detector: false alarms, threshold, scintillation or kinds are out of range");
		return -EINVAL;
	}
	return 0;
}

int detector_create(struct detector **out, const struct detector_settings *settings)
{
	struct detector *d;
	int ret = check(settings);

	if (ret < 0)
		return ret;
	d = calloc(1, sizeof(*d));
	if (!d)
		return -ENOMEM;
	d->settings = *settings;
	d->noise_rms = NAN;
	ret = noise_create(&d->noise);
	if (ret == 0)
		ret = bank_create(&d->bank, settings);
	if (ret < 0) {
		if (ret == -EINVAL)
			log_error("detector: the expected event's parameters are out of range for a T_F of %g s",
			          curve_fresnel_time(&settings->curve));
		detector_destroy(d);
		return ret;
	}
	set_thresholds(d);
	*out = d;
	return 0;
}

void detector_destroy(struct detector *d)
{
	if (!d)
		return;
	bank_destroy(d->bank);
	noise_destroy(d->noise);
	free(d);
}
