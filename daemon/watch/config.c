/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <math.h>
#include <string.h>
#include "config_table.h"
#include "limbwatch/log.h"
#include "limbwatch/tai.h"

#define MAS (M_PI / 180 / 3600e3)
static const double speed_of_light = 299792458.0;       /* m/s, exact (SI) */

static const double polarity_sign[] = { 0, 1, -1 };     /* auto, normal, inverted */

/* Says what is wrong with an element and counts it. */
static void refuse(int *wrong, const char *path, int line, const char *format, ...)
	__attribute__((format(printf, 4, 5)));

static void refuse(int *wrong, const char *path, int line, const char *format, ...)
{
	char sentence[512];
	va_list arguments;

	va_start(arguments, format);
	vsnprintf(sentence, sizeof(sentence), format, arguments);
	va_end(arguments);
	log_error("%s line %d: %s", path, line, sentence);
	(*wrong)++;
}

static void read_station(struct config *c, const struct setting_value *v)
{
	c->station.name = v[STATION_NAME].text;
	c->station.placed = v[STATION_LATITUDE].given && v[STATION_LONGITUDE].given;
	c->station.latitude_deg = c->station.placed ? v[STATION_LATITUDE].number : NAN;
	c->station.longitude_deg = c->station.placed ? v[STATION_LONGITUDE].number : NAN;
	c->station.height_m = v[STATION_HEIGHT].given ? v[STATION_HEIGHT].number : NAN;
}

static void read_passband(struct config_channel *channel, const struct setting_value *v)
{
	double lambda = v[CHANNEL_WAVELENGTH].number * 1e-9, width = v[CHANNEL_PASSBAND].number * 1e-9;

	if (v[CHANNEL_FREQUENCY].given) {
		lambda = speed_of_light / (v[CHANNEL_FREQUENCY].number * 1e6);
		width = lambda * v[CHANNEL_BANDWIDTH].number / v[CHANNEL_FREQUENCY].number;
	}
	channel->curve.passband.wavelength_m = lambda;
	channel->curve.passband.width_m = width;
	channel->curve.passband.shape = width == 0 ? PASSBAND_LINE :
		v[CHANNEL_PASSBAND_SHAPE].integer ? PASSBAND_GAUSSIAN : PASSBAND_TOP_HAT;
}

static void check_detector_channel(const struct setting_value *v, const struct config_channel *channel,
                                   const char *path, int *wrong)
{
	bool optical = v[CHANNEL_WAVELENGTH].given, radio = v[CHANNEL_FREQUENCY].given;

	if (optical == radio)
		refuse(wrong, path, channel->line, "channel \"%s\" needs %s: wavelength_nm (optical) or frequency_mhz (radio)",
		       channel->name, optical ? "only one of the two" : "one of the two");
	else if (channel->curve.passband.width_m > channel->curve.passband.wavelength_m)
		refuse(wrong, path, channel->line, "channel \"%s\": its passband is wider than its centre", channel->name);
	if (v[CHANNEL_BANDWIDTH].given && !radio)
		refuse(wrong, path, v[CHANNEL_BANDWIDTH].line,
		       "channels.passband_mhz goes with frequency_mhz; with wavelength_nm use passband_nm");
	if (v[CHANNEL_PASSBAND].given && !optical)
		refuse(wrong, path, v[CHANNEL_PASSBAND].line,
		       "channels.passband_nm goes with wavelength_nm; with frequency_mhz use passband_mhz");
}

static void read_channel(struct config_channel *channel, const struct setting_value *v, const char *path, int *wrong)
{
	struct curve_parameters *curve = &channel->curve;

	channel->name = v[CHANNEL_NAME].text;
	channel->column = (unsigned)v[CHANNEL_COLUMN].integer - 1;
	channel->measure = (enum measure)v[CHANNEL_MEASURE].integer;
	channel->polarity = (int)polarity_sign[v[CHANNEL_POLARITY].integer];
	read_passband(channel, v);
	curve->aperture_m = v[CHANNEL_APERTURE].number;
	curve->obstruction = v[CHANNEL_OBSTRUCTION].number;
	curve->integration_s = v[CHANNEL_INTEGRATION].number;
	curve->low_pass_s = v[CHANNEL_LOW_PASS].number;
	curve->high_pass_hz = v[CHANNEL_HIGH_PASS].number;
	channel->response_delay_s = v[CHANNEL_DELAY].number;
	channel->response_delay_sigma_s = v[CHANNEL_DELAY_SIGMA].number;
	channel->pulse.width_s = v[CHANNEL_PULSE_WIDTH].number;
	channel->pulse.jitter_s = v[CHANNEL_PULSE_JITTER].number;
	channel->pulse.delay_s = v[CHANNEL_PULSE_DELAY].number;
	channel->pulse.delay_sigma_s = v[CHANNEL_PULSE_DELAY_SIGMA].number;
	switch (channel->measure) {
	case MEASURE_VOLTAGE:
		if (!channel->polarity)
			channel->polarity = 1;
		check_detector_channel(v, channel, path, wrong);
		break;
	case MEASURE_PULSE: case MEASURE_AUX:
		break;
	default:
		refuse(wrong, path, v[CHANNEL_MEASURE].line, "channels.measure is \"%s\", which this version does not "
		       "measure yet; it measures voltage and pulse, and records aux", measure_name(channel->measure));
	}
}

static void read_channels(struct config *c, const char *path, int *wrong)
{
	size_t n = settings_count(c->settings, "channels"), pulses = 0, watched = 0;

	if (n > CONFIG_CHANNELS) {
		refuse(wrong, path, settings_line(c->settings, "channels", CONFIG_CHANNELS),
		       "there are %zu channels, at most %d are possible", n, CONFIG_CHANNELS);
		n = CONFIG_CHANNELS;
	}
	for (size_t k = 0; k < n; k++) {
		struct config_channel *channel = &c->channel[k];

		channel->line = settings_line(c->settings, "channels", k);
		read_channel(channel, settings_values(c->settings, "channels", k), path, wrong);
		pulses += channel->measure == MEASURE_PULSE;
		watched += channel->measure == MEASURE_VOLTAGE;
		for (size_t j = 0; j < k; j++) {
			if (c->channel[j].column == channel->column)
				refuse(wrong, path, channel->line, "channels \"%s\" and \"%s\" both stand in column %u",
				       c->channel[j].name, channel->name, channel->column + 1);
			if (!strcmp(c->channel[j].name, channel->name))
				refuse(wrong, path, channel->line, "two channels are called \"%s\"", channel->name);
		}
	}
	c->channels = n;
	if (pulses > 1)
		refuse(wrong, path, settings_line(c->settings, "channels", 0),
		       "%zu channels carry the pulse, at most one can", pulses);
	if (!watched && !c->keep.everything)
		refuse(wrong, path, settings_line(c->settings, "channels", 0), "no channel measures voltage: there is "
		       "nothing to watch (keep.everything = true records without watching)");
}

static void read_expected(struct config *c, const char *path, int *wrong)
{
	size_t n = settings_count(c->settings, "expected");

	if (n > CONFIG_EXPECTED) {
		refuse(wrong, path, settings_line(c->settings, "expected", CONFIG_EXPECTED),
		       "there are %zu expected contacts, at most %d are possible", n, CONFIG_EXPECTED);
		n = CONFIG_EXPECTED;
	}
	for (size_t k = 0; k < n; k++) {
		const struct setting_value *v = settings_values(c->settings, "expected", k);
		struct config_expected *e = &c->expected[k];

		e->line = settings_line(c->settings, "expected", k);
		e->source = v[EXPECTED_SOURCE].text;
		e->kind = (enum contact_kind)v[EXPECTED_KIND].integer;
		tai_parse_utc(&e->when, v[EXPECTED_UTC].text);
		e->sigma_s = v[EXPECTED_SIGMA].number;
		e->distance_m = v[EXPECTED_DISTANCE].number * 1e3;
		e->speed_mps = v[EXPECTED_SPEED].number;
		e->speed_tolerance = v[EXPECTED_SPEED_TOLERANCE].number;
		e->component = (struct source_component){
			.shape = v[EXPECTED_DIAMETER].number == 0 ? SHAPE_POINT :
				v[EXPECTED_LIMB_DARKENING].number == 0 ? SHAPE_UNIFORM_DISC : SHAPE_LIMB_DARKENED_DISC,
			.size_rad = v[EXPECTED_DIAMETER].number * MAS,
			.limb_darkening = v[EXPECTED_LIMB_DARKENING].number, .flux = 1,
		};
	}
	c->expecteds = n;
}

static void read_watch(struct config *c, const struct setting_value *v, const char *path, int *wrong)
{
	long long kinds = v[WATCH_KINDS].integer;

	c->watch.outside = v[WATCH_OUTSIDE].integer;
	c->watch.kind[CONTACT_IMMERSION] = kinds != 1;
	c->watch.kind[CONTACT_EMERSION] = kinds != 0;
	c->watch.distance_m = v[WATCH_DISTANCE].number * 1e3;
	c->watch.speed_min_mps = v[WATCH_SPEED_MIN].number;
	c->watch.speed_max_mps = v[WATCH_SPEED_MAX].number;
	if (c->watch.speed_min_mps > c->watch.speed_max_mps)
		refuse(wrong, path, v[WATCH_SPEED_MIN].line ? v[WATCH_SPEED_MIN].line : v[WATCH_SPEED_MAX].line,
		       "watch.shadow_speed_min_mps is %g, above shadow_speed_max_mps = %g",
		       c->watch.speed_min_mps, c->watch.speed_max_mps);
	c->watch.false_alarms_per_night = v[WATCH_ALARMS_NIGHT].number;
	c->watch.false_alarms_per_vigil = v[WATCH_ALARMS_VIGIL].number;
	c->watch.threshold = v[WATCH_THRESHOLD].number;
	if (c->watch.threshold != 0 && c->watch.threshold < 3)
		refuse(wrong, path, v[WATCH_THRESHOLD].line, "watch.threshold_snr is %g, outside 3 to 1000 (0: from the "
		       "false alarms)", c->watch.threshold);
	c->watch.scintillation = v[WATCH_SCINTILLATION].number;
	c->watch.vigil_sigmas = v[WATCH_SIGMAS].number;
	c->watch.vigil_before_s = v[WATCH_BEFORE].number;
	c->watch.vigil_after_s = v[WATCH_AFTER].number;
}

static void read_keep(struct config *c, const struct setting_value *v)
{
	c->keep.folder = v[KEEP_FOLDER].text;
	c->keep.everything = v[KEEP_EVERYTHING].integer;
	c->keep.pre_s = v[KEEP_PRE].number;
	c->keep.post_s = v[KEEP_POST].number;
	c->keep.ring_s = v[KEEP_RING].number;
	c->keep.part_bytes = v[KEEP_PART].integer * 1048576;
	c->keep.free_bytes = v[KEEP_FREE].integer * 1048576;
	c->keep.remove_contacts = v[KEEP_REMOVE_CONTACTS].integer;
}

static void read_live(struct config *c, const struct setting_value *v, const struct setting_value *state)
{
	c->live.priority = (int)v[LIVE_PRIORITY].integer;
	c->live.lock_memory = v[LIVE_LOCK].integer;
	c->live.silence_s = v[LIVE_SILENCE].number;
	c->state.socket = state[STATE_SOCKET].text;
	c->state.given = state[STATE_SOCKET].given;
}

/* Everything after the settings have been read; takes `settings` over. */
static int interpret(struct config *out, struct settings *settings)
{
	static const char *const drivers[] = { "alsa", "file", "pipe", "synthetic" };   /* of the driver choice */
	const char *path = settings_path(settings);
	struct config c = { .settings = settings };
	const struct setting_value *v;
	int wrong = 0;

	read_station(&c, settings_values(settings, "station", 0));
	v = settings_values(settings, "intake", 0);
	c.driver = intake_driver_find(drivers[v[INTAKE_DRIVER].integer]);
	c.driver_values = v + INTAKE_OWN;
	read_keep(&c, settings_values(settings, "keep", 0));
	read_live(&c, settings_values(settings, "live", 0), settings_values(settings, "state", 0));
	read_watch(&c, settings_values(settings, "watch", 0), path, &wrong);
	v = settings_values(settings, "clock", 0);
	c.clock.leap_seconds = v[CLOCK_LEAP_SECONDS].text;
	c.clock.host_sigma_s = v[CLOCK_HOST_SIGMA].number;
	c.clock.card_tolerance = v[CLOCK_CARD_TOLERANCE].number * 1e-6;
	leap_seconds_open(c.clock.leap_seconds);        /* before any instant is read */
	read_channels(&c, path, &wrong);
	read_expected(&c, path, &wrong);
	if (wrong) {
		config_free(&c);
		return -EINVAL;
	}
	*out = c;
	return 0;
}

int config_load(struct config *out, const char *path)
{
	struct settings *settings;
	int ret = settings_load(&settings, path, config_groups);

	return ret < 0 ? ret : interpret(out, settings);
}

int config_parse(struct config *out, const char *text, const char *name)
{
	struct settings *settings;
	int ret = settings_parse(&settings, text, name, config_groups);

	return ret < 0 ? ret : interpret(out, settings);
}

void config_free(struct config *config)
{
	if (config->settings)
		settings_free(config->settings);
	config->settings = NULL;
}

void config_curve(struct curve_parameters *out, const struct config_channel *channel,
                  const struct config_expected *expected)
{
	*out = channel->curve;
	out->kind = expected->kind;
	out->distance_m = expected->distance_m;
	out->speed_mps = expected->speed_mps;
	out->components = 1;
	out->component[0] = expected->component;
}
