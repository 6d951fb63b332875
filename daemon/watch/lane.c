/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <math.h>
#include <stdlib.h>
#include "lane.h"
#include "limbwatch/conditioner.h"
#include "limbwatch/log.h"

/* A window of 16 T_F is 256 series samples: see detector.h. */
static const double samples_per_fresnel_time = DETECTOR_WINDOW / 16.0;
static const double bank_min = 0.6, bank_max = 1.6;     /* scales of one bank, relative to the expected T_F */
static const double least_tolerance = 0.01;     /* nobody knows the slope of the limb better */
static const double least_samples = 4;                  /* per T_F: fewer do not show fringes */
static const double least_energy = 0.05;                /* of the edge behind an AC-coupled input */

struct lane {
	struct lane_settings settings;
	struct lane_shape shape;
	struct conditioner *conditioner;
	struct detector *detector;
	size_t room;
	float *series;
};

unsigned lanes_outside(const struct config *config)
{
	double span = log(config->watch.speed_max_mps / config->watch.speed_min_mps);

	if (!config->watch.outside)
		return 0;
	return 1 + (unsigned)floor(span / log(bank_max / bank_min) * (1 - 1e-9));
}

void lane_outside(struct lane_settings *settings, unsigned k)
{
	const struct config *config = settings->config;
	double low = config->watch.speed_min_mps, high = config->watch.speed_max_mps;
	double step = pow(high / low, 1.0 / lanes_outside(config));
	double half = sqrt(step) * 1.02;        /* neighbours overlap a little; one speed still has a span */

	settings->expected = -1;
	settings->speed_mps = low * pow(step, k + 0.5);
	settings->scale_min = fmin(1 / half, 0.95);
	settings->scale_max = fmax(half, 1.05);
}

static void plan_curve(struct lane_shape *shape, const struct lane_settings *settings)
{
	const struct config *config = settings->config;
	const struct config_channel *channel = &config->channel[settings->channel];
	struct config_expected unexpected = {
		.kind = CONTACT_IMMERSION, .distance_m = config->watch.distance_m, .speed_mps = settings->speed_mps,
		.component = { .shape = SHAPE_POINT, .flux = 1 },
	};
	double tolerance;

	if (settings->expected < 0) {
		config_curve(&shape->curve, channel, &unexpected);
		shape->scale_min = settings->scale_min;
		shape->scale_max = settings->scale_max;
		/* Any speed between the least and the greatest is as likely: standard deviation of a uniform distribution. */
		shape->scale_sigma = fmax(log(settings->scale_max / settings->scale_min) / sqrt(12), least_tolerance);
		return;
	}
	config_curve(&shape->curve, channel, &config->expected[settings->expected]);
	shape->scale_sigma = fmax(config->expected[settings->expected].speed_tolerance, least_tolerance);
	tolerance = 3 * config->expected[settings->expected].speed_tolerance;
	shape->scale_min = fmin(bank_min, 1 / (1 + tolerance));
	shape->scale_max = fmax(bank_max, 1 / fmax(1 - tolerance, 0.25));
}

int lane_plan(struct lane_shape *out, const struct lane_settings *settings, char *why, size_t size)
{
	const struct config_channel *channel = &settings->config->channel[settings->channel];
	struct lane_shape shape = { .decimation = 1 };
	double frames;

	if (channel->column >= settings->format.channels) {
		snprintf(why, size, "channel \"%s\" stands in column %u, but the intake has %u", channel->name,
		         channel->column + 1, settings->format.channels);
		return -EINVAL;
	}
	plan_curve(&shape, settings);
	shape.fresnel_time_s = curve_fresnel_time(&shape.curve);
	frames = settings->rate * shape.fresnel_time_s;
	if (!(frames >= least_samples)) {
		snprintf(why, size, "channel \"%s\": a Fresnel time of %.4g s is only %.3g samples at %g Hz; at least %g "
		         "are needed", channel->name, shape.fresnel_time_s, frames, settings->rate, least_samples);
		return -EINVAL;
	}
	shape.decimation = (unsigned)fmax(1, round(frames / samples_per_fresnel_time));
	shape.series_rate = settings->rate / shape.decimation;
	shape.surviving = curve_surviving_energy(&shape.curve, 16 * shape.fresnel_time_s);
	if (!(shape.surviving >= least_energy)) {
		snprintf(why, size, "channel \"%s\": an input AC-coupled at %g Hz leaves %.2g%% of the energy of an edge with "
		         "a Fresnel time of %.4g s; use a DC-coupled input", channel->name, shape.curve.high_pass_hz,
		         shape.surviving * 100, shape.fresnel_time_s);
		return -EINVAL;
	}
	*out = shape;
	return 0;
}

static int create_detector(struct lane *lane)
{
	const struct config *config = lane->settings.config;
	bool expected = lane->settings.expected >= 0;
	struct detector_settings d = {
		.rate = lane->shape.series_rate, .curve = lane->shape.curve,
		.scale_min = lane->shape.scale_min, .scale_max = lane->shape.scale_max,
		.scale_sigma = lane->shape.scale_sigma,
		.false_alarms_per_night = config->watch.false_alarms_per_night,
		.false_alarms_per_vigil = config->watch.false_alarms_per_vigil,
		.threshold = config->watch.threshold, .scintillation = config->watch.scintillation,
	};

	for (int k = 0; k < CONTACT_KINDS; k++)
		d.kind[k] = expected ? (int)config->expected[lane->settings.expected].kind == k : config->watch.kind[k];
	return detector_create(&lane->detector, &d);
}

int lane_create(struct lane **out, const struct lane_settings *settings)
{
	const struct config_channel *channel = &settings->config->channel[settings->channel];
	struct lane *lane = calloc(1, sizeof(*lane));
	struct conditioner_settings c;
	char why[256];
	int ret;

	if (!lane)
		return -ENOMEM;
	lane->settings = *settings;
	ret = lane_plan(&lane->shape, settings, why, sizeof(why));
	if (ret < 0) {
		log_error("%s", why);
		goto free_lane;
	}
	c = (struct conditioner_settings){
		.format = settings->format, .column = channel->column, .measure = channel->measure,
		.polarity = channel->polarity, .decimation = lane->shape.decimation,
	};
	ret = conditioner_create(&lane->conditioner, &c);
	if (ret < 0)
		goto free_lane;
	ret = create_detector(lane);
	if (ret < 0)
		goto destroy_conditioner;
	*out = lane;
	return 0;
destroy_conditioner:
	conditioner_destroy(lane->conditioner);
free_lane:
	free(lane);
	return ret;
}

void lane_destroy(struct lane *lane)
{
	if (!lane)
		return;
	detector_destroy(lane->detector);
	conditioner_destroy(lane->conditioner);
	free(lane->series);
	free(lane);
}

static void contact_from_candidate(struct contact *out, const struct lane *lane, const struct candidate *c)
{
	double decimation = lane->shape.decimation;

	*out = (struct contact){
		.frame = c->position * decimation - 0.5,        /* sample k spans frames k*M - 1/2 to (k+1)*M - 1/2 */
		.frame_sigma = c->position_sigma * decimation,
		.kind = c->kind, .verdict = c->verdict, .snr = c->snr,
		.chi2_excess = c->chi2_excess, .marked = c->marked, .fringe_gain = c->fringe_gain,
		.fresnel_time_s = lane->shape.fresnel_time_s * c->scale,
		.shadow_speed_mps = lane->shape.curve.speed_mps / c->scale,
		.size_fresnel = c->size, .flux = c->flux, .baseline = c->baseline,
		.channel = lane->settings.channel, .expected = lane->settings.expected,
	};
	out->terms.fit = out->frame_sigma / lane->settings.rate;
}

static size_t convert(struct contact *out, const struct lane *lane, const struct candidate *candidate, size_t n)
{
	for (size_t k = 0; k < n; k++)
		contact_from_candidate(&out[k], lane, &candidate[k]);
	return n;
}

enum { CANDIDATES = 16 };

size_t lane_execute(struct lane *lane, const void *frames, size_t count, uint64_t first, struct contact *out,
                    size_t max)
{
	size_t need = count / lane->shape.decimation + 2, n;
	struct candidate candidate[CANDIDATES];
	uint64_t index = 0;

	if (need > lane->room) {
		float *grown = realloc(lane->series, need * sizeof(*grown));

		if (!grown)
			return 0;
		lane->series = grown;
		lane->room = need;
	}
	n = conditioner_execute(lane->conditioner, frames, count, first, lane->series, &index);
	n = detector_execute(lane->detector, lane->series, n, index, candidate, max < CANDIDATES ? max : CANDIDATES);
	return convert(out, lane, candidate, n);
}

size_t lane_finish(struct lane *lane, struct contact *out, size_t max)
{
	struct candidate candidate[CANDIDATES];

	return convert(out, lane, candidate,
	               detector_finish(lane->detector, candidate, max < CANDIDATES ? max : CANDIDATES));
}

void lane_expect(struct lane *lane, double frame, double sigma_frames)
{
	detector_expect(lane->detector, lane->settings.config->expected[lane->settings.expected].kind,
	                (frame + 0.5) / lane->shape.decimation, sigma_frames / lane->shape.decimation);
}

double lane_latency(const struct lane *lane)
{
	return (detector_latency(lane->detector) + 1) * lane->shape.decimation;
}

double lane_startup(const struct lane *lane)
{
	return (detector_startup(lane->detector) + 1) * lane->shape.decimation;
}

uint64_t lane_clipped(const struct lane *lane)
{
	return conditioner_clipped(lane->conditioner);
}

unsigned lane_channel(const struct lane *lane)
{
	return lane->settings.channel;
}

double lane_series_rate(const struct lane *lane)
{
	return lane->shape.series_rate;
}

double lane_threshold(const struct lane *lane)
{
	return detector_threshold(lane->detector);
}
