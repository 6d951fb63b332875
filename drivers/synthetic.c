/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * An invented contact with noise, drift and pulse.  The one intake that knows the optics: it is a sky, not a device.
 * Column 1 is the detector, column 2 the pulse.  Frame n is taken at a true time that follows from the card's clock error.
 */
#include <errno.h>
#include <gsl/gsl_randist.h>
#include <gsl/gsl_rng.h>
#include <limits.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>
#include "limbwatch/log.h"
#include "limbwatch/synthetic.h"
#include "synthetic_card.h"
#include "synthetic_fault.h"
#include "synthetic_pulse.h"

#define MAS (M_PI / 180 / 3600e3)

enum {
	SEED, RATE, FORMAT, DURATION, PACE, START, START_SIGMA, START_ERROR, KIND, CONTACT, DISTANCE, SPEED, WAVELENGTH,
	PASSBAND, FREQUENCY, BANDWIDTH, PASSBAND_SHAPE, APERTURE, OBSTRUCTION, DIAMETER, LIMB_DARKENING, SEPARATION,
	COMPANION, INTEGRATION, LOW_PASS, HIGH_PASS, LEVEL, BACKGROUND, SNR, NOISE, RED_NOISE, RED_CORNER, SCINTILLATION,
	GAIN_DRIFT, HUM, HUM_FREQUENCY, PULSE, PULSE_HEIGHT, PULSE_WIDTH, PULSE_POLARITY, PULSE_AC, PULSE_JITTER,
	PULSE_MISSING, PULSE_SPURIOUS, PULSE_NOISE, CLOCK_ERROR, CLOCK_DRIFT, CLOCK_WANDER,
	SILENT_LOSS, SILENT_LOSS_FRAMES, GAP, GAP_FRAMES,
};

enum { BLOCK = 4096 };

#define NUMBER(n, f, lo, hi, m) { .name = n, .type = SETTING_NUMBER, .fallback = f, .min = lo, .max = hi, .meaning = m }

static const struct setting settings[] = {
	[SEED] = { .name = "seed", .type = SETTING_INTEGER, .fallback = 1, .min = 0, .max = 4294967295.0,
		.meaning = "another seed, another night" },
	[RATE] = NUMBER("rate_hz", 48000, 1, 192000, "frames per second, nominal"),
	[FORMAT] = { .name = "format", .type = SETTING_CHOICE, .text = "S24_3", .choices = "S16|S24_3|S24|S32|FLOAT",
		.meaning = "sample type" },
	[DURATION] = NUMBER("duration_s", 60, 0.1, 864000, "how long it plays"),
	[PACE] = { .name = "real_time_pace", .type = SETTING_BOOLEAN, .fallback = 0, .min = 0, .max = 1,
		.meaning = "deliver at the rate of a live device instead of as fast as it goes" },
	[START] = { .name = "start_utc", .type = SETTING_INSTANT, .text = "2031-04-02T01:23:15.25Z",
		.meaning = "true instant of the first frame" },
	[START_SIGMA] = NUMBER("start_sigma_s", 0.05, 0, 86400, "standard uncertainty it claims for that; 0: it claims to know "
	                       "nothing"),
	[START_ERROR] = NUMBER("start_error_s", 0, -86400, 86400, "how wrong the claimed start is"),
	[KIND] = { .name = "kind", .type = SETTING_CHOICE, .text = "immersion", .choices = "immersion|emersion|none",
		.meaning = "the contact played" },
	[CONTACT] = NUMBER("contact_s", 30, 0, 864000, "true instant of the contact after the start"),
	[DISTANCE] = NUMBER("distance_km", 378000, 340000, 420000, "distance to the limb"),
	[SPEED] = NUMBER("shadow_speed_mps", 600, 5, 5000, "speed of the shadow along the limb normal"),
	[WAVELENGTH] = NUMBER("wavelength_nm", 620, 100, 20000, "centre of an optical passband"),
	[PASSBAND] = NUMBER("passband_nm", 0, 0, 5000, "its width"),
	[FREQUENCY] = NUMBER("frequency_mhz", 0, 1, 1e6, "centre of a radio passband, instead of wavelength_nm"),
	[BANDWIDTH] = NUMBER("passband_mhz", 0, 0, 1e5, "its width"),
	[PASSBAND_SHAPE] = { .name = "passband_shape", .type = SETTING_CHOICE, .text = "top_hat",
		.choices = "top_hat|gaussian", .meaning = "its shape" },
	[APERTURE] = NUMBER("aperture_m", 0, 0, 1000, "diameter of telescope or dish"),
	[OBSTRUCTION] = NUMBER("obstruction", 0, 0, 0.95, "central obstruction over aperture_m"),
	[DIAMETER] = NUMBER("diameter_mas", 0, 0, 3.6e6, "angular diameter of the source; 0: a point"),
	[LIMB_DARKENING] = NUMBER("limb_darkening", 0, 0, 1, "linear coefficient u of its disc"),
	[SEPARATION] = NUMBER("companion_separation_mas", 0, -3.6e6, 3.6e6, "companion along the limb normal; positive: its "
	                      "contact is later"),
	[COMPANION] = NUMBER("companion_flux", 0, 0, 1, "companion's flux over the source's"),
	[INTEGRATION] = NUMBER("integration_s", 0, 0, 100, "boxcar integration of the detector"),
	[LOW_PASS] = NUMBER("low_pass_s", 0, 0, 100, "time constant of the detector; its noise comes after"),
	[HIGH_PASS] = NUMBER("high_pass_hz", 0, 0, 1000, "corner of the AC coupling of the card, acts on everything"),
	[LEVEL] = NUMBER("level", 0.2, 1e-6, 1, "height of the source over full scale"),
	[BACKGROUND] = NUMBER("background", 0.1, -1, 1, "level with the source covered over full scale"),
	[SNR] = NUMBER("snr", 0, 0.1, 1e6, "sets noise_rms so that the ideal matched filter sees this; 0: as noise_rms says"),
	[NOISE] = NUMBER("noise_rms", 0.01, 0, 10, "white noise of one sample over full scale"),
	[RED_NOISE] = NUMBER("red_noise_rms", 0, 0, 10, "red noise (one pole) over full scale"),
	[RED_CORNER] = NUMBER("red_corner_hz", 1, 1e-5, 1000, "corner of red noise and scintillation"),
	[SCINTILLATION] = NUMBER("scintillation", 0, 0, 1, "rms of the source's own twinkling, relative"),
	[GAIN_DRIFT] = NUMBER("gain_drift_per_hour", 0, -10, 10, "relative change of the detector's gain in an hour"),
	[HUM] = NUMBER("hum_rms", 0, 0, 1, "mains hum over full scale"),
	[HUM_FREQUENCY] = NUMBER("hum_hz", 50, 1, 1000, "its frequency"),
	[PULSE] = { .name = "pulse", .type = SETTING_BOOLEAN, .fallback = 0, .min = 0, .max = 1,
		.meaning = "a second column with the one-second pulse" },
	[PULSE_HEIGHT] = NUMBER("pulse_height", 0.5, 0.001, 1, "height of the pulse over full scale"),
	[PULSE_WIDTH] = NUMBER("pulse_width_s", 0.1, 0.001, 0.5, "length of the pulse"),
	[PULSE_POLARITY] = { .name = "pulse_polarity", .type = SETTING_CHOICE, .text = "normal", .choices = "normal|inverted",
		.meaning = "inverted: the falling edge leads" },
	[PULSE_AC] = NUMBER("pulse_ac_hz", 0, 0, 1000, "corner of the AC coupling of the pulse channel; 0: DC"),
	[PULSE_JITTER] = NUMBER("pulse_jitter_s", 50e-9, 0, 0.01, "jitter of one pulse, rms"),
	[PULSE_MISSING] = NUMBER("pulse_missing", 0, 0, 1, "share of pulses missing"),
	[PULSE_SPURIOUS] = NUMBER("pulse_spurious", 0, 0, 1, "spurious pulses a second"),
	[PULSE_NOISE] = NUMBER("pulse_noise_rms", 1e-4, 0, 1, "white noise of the pulse channel over full scale"),
	[CLOCK_ERROR] = NUMBER("clock_error_ppm", 0, -1000, 1000, "how fast the card's clock is"),
	[CLOCK_DRIFT] = NUMBER("clock_drift_ppm_per_hour", 0, -100, 100, "and how that changes"),
	[CLOCK_WANDER] = NUMBER("clock_wander", 0, 0, 100, "random walk of the card's clock, ppm after an hour, rms"),
	[SILENT_LOSS] = NUMBER("silent_loss_s", 0, 0, 864000, "when frames are lost and nobody says so, true seconds after the start"),
	[SILENT_LOSS_FRAMES] = { .name = "silent_loss_frames", .type = SETTING_INTEGER, .fallback = 0, .min = -BLOCK, .max = 1e7,
		.meaning = "how many; negative: given twice" },
	[GAP] = NUMBER("gap_s", 0, 0, 864000, "when frames are lost and that is said, true seconds after the start"),
	[GAP_FRAMES] = { .name = "gap_frames", .type = SETTING_INTEGER, .fallback = 0, .min = 0, .max = 1e7,
		.meaning = "how many" },
	{ .name = NULL },
};

struct synthetic {
	struct intake intake;
	double rate;
	struct tai start;
	struct synthetic_card card;
	struct synthetic_fault fault;
	struct synthetic_pulse *pulse;  /* NULL: no second column */
	/* The detector. */
	struct curve *curve;            /* NULL: no contact, the source stays */
	double contact, level, background, noise, red, red_pole, red_kick, twinkle, drift, hum, hum_rate;
	double high_pass, high_pass_pole;
	double red_state, twinkle_state, slow;  /* slow: low-passed signal of the AC coupling */
	/* Output. */
	gsl_rng *rng;
	uint64_t next, total;           /* frames taken, lost ones too */
	uint64_t told;                  /* number of the next frame as given */
	size_t again;                   /* frames of the last block to be given once more */
	unsigned flags;                 /* of the next block */
	bool pace;
	int64_t started_ns;
	double when[BLOCK], detector[BLOCK], ticks[BLOCK];      /* when: true time, seconds after the start */
	unsigned char frames[BLOCK * 2 * 4];
};

/* ------------------------------------------------------------------ the event */

void synthetic_curve(const struct setting_value *v, struct curve_parameters *out)
{
	double lambda = v[WAVELENGTH].number * 1e-9, width = v[PASSBAND].number * 1e-9;

	if (v[FREQUENCY].number > 0) {
		lambda = 299.792458 / v[FREQUENCY].number;
		width = lambda * v[BANDWIDTH].number / v[FREQUENCY].number;
	}
	*out = (struct curve_parameters){
		.kind = v[KIND].integer == 1 ? CONTACT_EMERSION : CONTACT_IMMERSION,
		.distance_m = v[DISTANCE].number * 1e3, .speed_mps = v[SPEED].number,
		.passband = {
			.shape = width == 0 ? PASSBAND_LINE : v[PASSBAND_SHAPE].integer ? PASSBAND_GAUSSIAN : PASSBAND_TOP_HAT,
			.wavelength_m = lambda, .width_m = width,
		},
		.aperture_m = v[APERTURE].number, .obstruction = v[OBSTRUCTION].number,
		.integration_s = v[INTEGRATION].number, .low_pass_s = v[LOW_PASS].number,
		.high_pass_hz = v[HIGH_PASS].number,
		.components = v[COMPANION].number > 0 ? 2 : 1,
		.component = {
			{ .shape = v[DIAMETER].number == 0 ? SHAPE_POINT : v[LIMB_DARKENING].number > 0 ?
				SHAPE_LIMB_DARKENED_DISC : SHAPE_UNIFORM_DISC,
			  .size_rad = v[DIAMETER].number * MAS, .limb_darkening = v[LIMB_DARKENING].number, .flux = 1 },
			{ .shape = SHAPE_POINT, .flux = v[COMPANION].number, .offset_rad = v[SEPARATION].number * MAS },
		},
	};
}

/*
 * Root sum of squares over the frames of 16 T_F of the curve less its mean and slope: matched-filter SNR of unit level in unit
 * white noise.  The edge stands 21% into the window, 79% for an immersion.
 */
static double edge_strength(const struct curve *curve, const struct curve_parameters *p, double rate)
{
	enum { POINTS = 8192 };
	double window = 16 * curve_fresnel_time(p), dt = window / POINTS, sum = 0, slope = 0, squares = 0;
	double begin = -window * (p->kind == CONTACT_IMMERSION ? 0.79 : 0.21);
	double *s = malloc(POINTS * sizeof(*s));

	if (!s)
		return NAN;
	curve_sample(curve, begin + dt / 2, dt, POINTS, s);
	for (int k = 0; k < POINTS; k++) {
		double x = (k + 0.5) / POINTS - 0.5;

		sum += s[k];
		slope += s[k] * x;
		squares += s[k] * s[k];
	}
	free(s);
	squares -= sum * sum / POINTS + slope * slope / (POINTS / 12.0);
	return sqrt(fmax(squares, 0) * rate * dt);
}

static int make_curve(struct curve **out, const struct setting_value *v, double *strength)
{
	struct curve_parameters p;
	int ret;

	synthetic_curve(v, &p);
	ret = curve_create(out, &p);
	if (ret < 0) {
		log_error("synthetic intake: the event's settings do not go together (sizes, passband and responses against a "
		          "Fresnel time of %.4g s): %s", curve_fresnel_time(&p), strerror(-ret));
		return ret;
	}
	*strength = edge_strength(*out, &p, v[RATE].number);
	return 0;
}

static double noise_for(const struct setting_value *v, double strength)
{
	return v[SNR].number > 0 ? v[LEVEL].number * strength / v[SNR].number : v[NOISE].number;
}

/* ------------------------------------------------------------------ the card's clock */

static int make_card(struct synthetic_card *out, const struct setting_value *v)
{
	const struct synthetic_card_settings card = {
		.rate = v[RATE].number, .duration_s = v[DURATION].number,
		.error_ppm = v[CLOCK_ERROR].number, .drift_ppm_per_hour = v[CLOCK_DRIFT].number,
		.wander_ppm = v[CLOCK_WANDER].number, .seed = (unsigned long)v[SEED].integer ^ 0x5ca1ab1eu,
	};

	return synthetic_card_init(out, &card);
}

static void make_fault(struct synthetic_fault *out, const struct synthetic_card *card, const struct setting_value *v)
{
	const struct synthetic_fault_settings fault = {
		.loss_s = v[SILENT_LOSS].number, .loss_frames = v[SILENT_LOSS_FRAMES].integer,
		.gap_s = v[GAP].number, .gap_frames = v[GAP_FRAMES].integer,
	};

	synthetic_fault_init(out, card, &fault);
}

double synthetic_frame(const struct setting_value *v, double t)
{
	struct synthetic_card card;
	struct synthetic_fault fault;
	double frame;

	if (make_card(&card, v) < 0)
		return NAN;
	make_fault(&fault, &card, v);
	frame = synthetic_fault_told(&fault, synthetic_card_frame(&card, t));
	synthetic_card_release(&card);
	return frame;
}

int synthetic_truth(const struct setting_value *v, struct synthetic_truth *out)
{
	struct curve_parameters p;
	struct curve *curve;
	struct tai start;
	double strength;
	int ret;

	if (v[KIND].integer == 2) {
		log_error("synthetic intake: kind is none: there is no contact");
		return -EINVAL;
	}
	ret = make_curve(&curve, v, &strength);
	if (ret < 0)
		return ret;
	curve_destroy(curve);
	synthetic_curve(v, &p);
	tai_parse_utc(&start, v[START].text);
	*out = (struct synthetic_truth){
		.contact = tai_add(start, v[CONTACT].number), .frame = synthetic_frame(v, v[CONTACT].number),
		.fresnel_time_s = curve_fresnel_time(&p), .noise_rms = noise_for(v, strength), .rate = v[RATE].number,
	};
	out->snr = v[LEVEL].number * strength / out->noise_rms;
	return 0;
}

/* ------------------------------------------------------------------ open and close */

static double pole(double corner_hz, double rate)
{
	return corner_hz > 0 ? exp(-2 * M_PI * corner_hz / rate) : 0;
}

static int set_detector(struct synthetic *s, const struct setting_value *v)
{
	struct setting_value event[sizeof(settings) / sizeof(*settings)];
	struct curve *curve;
	double strength;
	int ret;

	ret = make_curve(&curve, v, &strength); /* as it will be seen, AC coupling included */
	if (ret < 0)
		return ret;
	curve_destroy(curve);
	s->noise = noise_for(v, strength);
	s->contact = v[CONTACT].number;
	s->level = v[LEVEL].number;
	s->background = v[BACKGROUND].number;
	s->red = v[RED_NOISE].number;
	s->twinkle = v[SCINTILLATION].number;
	s->red_pole = pole(v[RED_CORNER].number, s->rate);
	s->red_kick = sqrt(1 - s->red_pole * s->red_pole);
	if (s->red > 0)
		s->red_state = gsl_ran_gaussian_ziggurat(s->rng, 1);
	if (s->twinkle > 0)
		s->twinkle_state = gsl_ran_gaussian_ziggurat(s->rng, 1);
	s->drift = v[GAIN_DRIFT].number / 3600;
	s->hum = v[HUM].number * M_SQRT2;
	s->hum_rate = 2 * M_PI * v[HUM_FREQUENCY].number;
	s->high_pass = v[HIGH_PASS].number;
	s->high_pass_pole = pole(s->high_pass, s->rate);
	if (v[KIND].integer == 2)
		return 0;
	/* The card's AC coupling acts on everything, sample by sample; so the curve itself goes without. */
	memcpy(event, v, sizeof(settings) / sizeof(*settings) * sizeof(*v));
	event[HIGH_PASS].number = 0;
	return make_curve(&s->curve, event, &strength);
}

static int set_pulse(struct synthetic *s, const struct setting_value *v)
{
	const struct synthetic_pulse_settings pulse = {
		.fraction_s = (double)(s->start.ns % 1000000000) * 1e-9,
		.height = v[PULSE_POLARITY].integer ? -v[PULSE_HEIGHT].number : v[PULSE_HEIGHT].number,
		.width_s = v[PULSE_WIDTH].number, .ac_hz = v[PULSE_AC].number,
		.jitter_s = v[PULSE_JITTER].number, .noise_rms = v[PULSE_NOISE].number,
		.missing = v[PULSE_MISSING].number, .spurious = v[PULSE_SPURIOUS].number,
		.seed = (unsigned long)v[SEED].integer,
	};

	if (!v[PULSE].integer)
		return 0;
	if (s->rate < SYNTHETIC_PULSE_RATE) {
		log_error("synthetic intake: rate_hz is %g; a pulse needs at least %d", s->rate, SYNTHETIC_PULSE_RATE);
		return -EINVAL;
	}
	return synthetic_pulse_create(&s->pulse, &s->card, &pulse);
}

static void synthetic_close(struct intake *intake)
{
	struct synthetic *s = (struct synthetic *)intake;

	if (!s)
		return;
	curve_destroy(s->curve);
	synthetic_card_release(&s->card);
	synthetic_pulse_destroy(s->pulse);
	gsl_rng_free(s->rng);
	free(s);
}

static void set_intake(struct synthetic *s, const struct setting_value *v)
{
	struct intake *in = &s->intake;

	in->driver = &intake_synthetic;
	in->format.type = (enum sample_type)v[FORMAT].integer;
	in->format.channels = s->pulse ? 2 : 1;
	in->rate = s->rate;
	in->real_time = s->pace;
	in->total_frames = (uint64_t)llround(synthetic_fault_told(&s->fault, (double)s->total));
	in->origin.quality = v[START_SIGMA].number > 0 ? TIME_HOST : TIME_FREE;
	in->origin.when = tai_add(s->start, v[START_ERROR].number);
	in->origin.sigma_s = v[START_SIGMA].number;
	in->origin.source = "configuration";
	snprintf(in->name, sizeof(in->name), "synthetic %s, seed %lld", v[KIND].integer == 2 ? "noise" :
	         contact_kind_name(v[KIND].integer == 1 ? CONTACT_EMERSION : CONTACT_IMMERSION), v[SEED].integer);
}

static int synthetic_open(struct intake **out, const struct setting_value *v)
{
	struct synthetic *s = calloc(1, sizeof(*s));
	int ret = -ENOMEM;

	if (!s)
		return -ENOMEM;
	s->rate = v[RATE].number;
	s->total = (uint64_t)llround(v[DURATION].number * s->rate);
	s->pace = v[PACE].integer;
	s->rng = gsl_rng_alloc(gsl_rng_taus2);
	if (!s->rng || make_card(&s->card, v) < 0)
		goto close;
	make_fault(&s->fault, &s->card, v);
	gsl_rng_set(s->rng, (unsigned long)v[SEED].integer + 1);
	tai_parse_utc(&s->start, v[START].text);
	ret = set_detector(s, v);
	if (ret == 0)
		ret = set_pulse(s, v);
	if (ret < 0)
		goto close;
	ret = -EINVAL;
	if (s->total == 0) {
		log_error("synthetic intake: duration_s %g is too short for one frame at rate_hz %g", v[DURATION].number, s->rate);
		goto close;
	}
	set_intake(s, v);
	*out = &s->intake;
	return 0;
close:
	synthetic_close(&s->intake);
	return ret;
}

static int64_t monotonic_ns(void)
{
	struct timespec now;

	clock_gettime(CLOCK_MONOTONIC, &now);
	return now.tv_sec * INT64_C(1000000000) + now.tv_nsec;
}

/* When the card has taken `frame` frames, from the start: by true time, so that host stamps and pulses agree. */
static int64_t due_ns(const struct synthetic *s, uint64_t frame)
{
	return (int64_t)(synthetic_card_time(&s->card, (double)frame) * 1e9);
}

static int synthetic_start(struct intake *intake)
{
	struct synthetic *s = (struct synthetic *)intake;

	s->started_ns = monotonic_ns() - due_ns(s, s->next);    /* started again it goes on where it was */
	return 0;
}

static int synthetic_stop(struct intake *intake)
{
	(void)intake;
	return 0;
}

/* ------------------------------------------------------------------ samples */

/* The first frame's value of red noise is drawn like any other's: the night began before the recording. */
static double red_step(struct synthetic *s, double *state)
{
	*state = s->red_pole * *state + s->red_kick * gsl_ran_gaussian_ziggurat(s->rng, 1);
	return *state;
}

/* Source and true time of the frames from s->next on, second by second: within one the card's rate is constant. */
static void make_source(struct synthetic *s, size_t count)
{
	for (size_t done = 0, n; done < count; done += n) {
		double first = (double)(s->next + done);
		size_t k = synthetic_card_second(&s->card, first);
		double begin = s->card.second_frame[k], end = s->card.second_frame[k + 1], dt = 1 / (end - begin);
		double t = (double)k + (first - begin) * dt;

		n = count - done;
		if (k + 1 < s->card.seconds && ceil(end - first) < (double)n)
			n = (size_t)ceil(end - first);
		if (s->curve)
			curve_sample(s->curve, t - s->contact, dt, n, s->detector + done);
		for (size_t j = done; j < done + n; j++) {
			s->when[j] = t + dt * (double)(j - done);
			if (!s->curve)
				s->detector[j] = 1;
		}
	}
}

static void make_detector(struct synthetic *s, size_t count)
{
	make_source(s, count);
	for (size_t k = 0; k < count; k++) {
		double t = s->when[k], source = s->level * s->detector[k], x;

		if (s->twinkle > 0)
			source *= fmax(0, 1 + s->twinkle * red_step(s, &s->twinkle_state));
		x = (s->background + source) * (1 + s->drift * t);
		if (s->red > 0)
			x += s->red * red_step(s, &s->red_state);
		if (s->hum > 0)
			x += s->hum * sin(s->hum_rate * t);
		if (s->noise > 0)
			x += gsl_ran_gaussian_ziggurat(s->rng, s->noise);
		if (s->high_pass > 0) {
			if (s->next + k == 0)
				s->slow = x;
			s->slow = s->high_pass_pole * s->slow + (1 - s->high_pass_pole) * x;
			x -= s->slow;
		}
		s->detector[k] = x;
	}
}

/* A live device's pace: waits until the frames before `frame` have been "taken". @return false: not within timeout_ms */
static bool wait_for(const struct synthetic *s, uint64_t frame, int timeout_ms)
{
	int64_t due = s->started_ns + due_ns(s, frame), latest = monotonic_ns() + timeout_ms * INT64_C(1000000);
	int64_t until = due < latest ? due : latest;
	struct timespec moment = { until / 1000000000, until % 1000000000 };

	clock_nanosleep(CLOCK_MONOTONIC, TIMER_ABSTIME, &moment, NULL);
	return monotonic_ns() >= due;
}

static void make_frames(struct synthetic *s, size_t count)
{
	make_detector(s, count);
	frames_from_double(s->frames, s->intake.format, 0, s->detector, count);
	if (s->pulse) {
		synthetic_pulse_execute(s->pulse, s->next, s->ticks, count);
		frames_from_double(s->frames, s->intake.format, 1, s->ticks, count);
	}
	s->next += count;
}

/* The sky goes on while nobody listens. */
static void lose(struct synthetic *s, uint64_t frames)
{
	uint64_t end = s->total - s->next < frames ? s->total : s->next + frames;

	while (s->next < end)
		make_frames(s, end - s->next < BLOCK ? (size_t)(end - s->next) : BLOCK);
}

/* What goes wrong at this very frame. */
static void misbehave(struct synthetic *s)
{
	if (s->next == s->fault.loss_at)
		lose(s, s->fault.lost);
	if (s->next == s->fault.gap_at) {
		lose(s, s->fault.gap);
		s->told += s->fault.gap;
		s->flags |= BLOCK_GAP;
	}
}

static int give(struct synthetic *s, struct block *block, size_t count, uint64_t taken)
{
	*block = (struct block){
		.frames = s->frames, .count = count, .first = s->told, .flags = s->flags,
		.host_ns = s->pace ? s->started_ns + due_ns(s, taken) : INT64_MIN,
	};
	s->told += count;
	s->flags = 0;
	return 1;
}

static int synthetic_read(struct intake *intake, struct block *block, int timeout_ms)
{
	struct synthetic *s = (struct synthetic *)intake;
	size_t count = s->pace ? (size_t)fmax(1, fmin(BLOCK, s->rate / 100)) : BLOCK;

	if (s->again) {
		count = s->again;
		s->again = 0;
		return give(s, block, count, s->next);
	}
	misbehave(s);
	if (s->fault.twice && s->next == s->fault.loss_at - s->fault.twice)
		count = (size_t)s->fault.twice;
	if (s->total - s->next < count)
		count = (size_t)(s->total - s->next);
	count = synthetic_fault_quiet(&s->fault, s->next, count);
	if (count == 0)
		return -ENODATA;
	if (s->pace && !wait_for(s, s->next + count, timeout_ms))
		return 0;
	make_frames(s, count);
	if (s->fault.twice && s->next == s->fault.loss_at)
		s->again = count;
	return give(s, block, count, s->next - count);
}

const struct intake_driver intake_synthetic = {
	.name = "synthetic", .summary = "an invented contact with noise, drift and pulse",
	.settings = settings,
	.open = synthetic_open, .start = synthetic_start, .stop = synthetic_stop, .close = synthetic_close,
	.read = synthetic_read,
};
