/* SPDX-License-Identifier: GPL-3.0-or-later */
/* The table of settings: it drives parsing, range checks, etc/limbwatch.conf and the manual. */
#include <math.h>
#include <stdio.h>
#include <string.h>
#include "config_table.h"

const struct setting station_settings[] = {
	[STATION_NAME] = { "name", SETTING_TEXT, .text = "unnamed",
		.meaning = "name of the station, stands in file names and in every recording", .example = "\"Brackenfold\"" },
	[STATION_LATITUDE] = { "latitude_deg", SETTING_NUMBER, NAN, -90, 90,
		.meaning = "geodetic latitude (WGS84), north positive" },
	[STATION_LONGITUDE] = { "longitude_deg", SETTING_NUMBER, NAN, -180, 180,
		.meaning = "longitude (WGS84), east positive" },
	[STATION_HEIGHT] = { "height_m", SETTING_NUMBER, NAN, -500, 9000,
		.meaning = "height above the WGS84 ellipsoid" },
	{ .name = NULL },
};

const struct setting intake_settings[] = {
	[INTAKE_DRIVER] = { "driver", SETTING_CHOICE, .choices = "alsa|file|pipe|synthetic", .required = true,
		.meaning = "where samples come from", .example = "\"alsa\"" },
	{ .name = NULL },
};

const struct setting channel_settings[] = {
	[CHANNEL_NAME] = { "name", SETTING_TEXT, .required = true,
		.meaning = "name of the channel", .example = "\"photodiode\"" },
	[CHANNEL_COLUMN] = { "column", SETTING_INTEGER, 1, 1, MAX_CHANNELS, .required = true,
		.meaning = "which channel of the intake, the first is 1 (left of a sound card)", .example = "1" },
	[CHANNEL_MEASURE] = { "measure", SETTING_CHOICE, .text = "voltage",
		.choices = "voltage|power|chopped|count|pulse|aux",
		.meaning = "what it carries: the detector's voltage, or the one-second pulse; this version measures "
			"voltage and pulse, aux is recorded without being measured" },
	[CHANNEL_POLARITY] = { "polarity", SETTING_CHOICE, .text = "auto", .choices = "auto|normal|inverted",
		.meaning = "normal: more light, higher voltage; a pulse's leading edge rises; auto: normal for a "
			"detector, found out for a pulse" },
	[CHANNEL_WAVELENGTH] = { "wavelength_nm", SETTING_NUMBER, NAN, 100, 20000,
		.meaning = "effective wavelength of an optical detector (follows the star's colour); each detector "
			"needs this or frequency_mhz", .example = "620", .shown = true },
	[CHANNEL_PASSBAND] = { "passband_nm", SETTING_NUMBER, 0, 0, 5000,
		.meaning = "width of the optical passband (full width of a top hat, FWHM of a Gaussian)" },
	[CHANNEL_FREQUENCY] = { "frequency_mhz", SETTING_NUMBER, NAN, 1, 1e6,
		.meaning = "centre frequency of a radio receiver, instead of wavelength_nm", .example = "1420" },
	[CHANNEL_BANDWIDTH] = { "passband_mhz", SETTING_NUMBER, 0, 0, 1e5,
		.meaning = "width of the radio passband" },
	[CHANNEL_PASSBAND_SHAPE] = { "passband_shape", SETTING_CHOICE, .text = "top_hat", .choices = "top_hat|gaussian",
		.meaning = "shape of the passband" },
	[CHANNEL_APERTURE] = { "aperture_m", SETTING_NUMBER, 0, 0, 1000,
		.meaning = "diameter of telescope or dish" },
	[CHANNEL_OBSTRUCTION] = { "obstruction", SETTING_NUMBER, 0, 0, 0.95,
		.meaning = "diameter of the central obstruction over aperture_m" },
	[CHANNEL_INTEGRATION] = { "integration_s", SETTING_NUMBER, 0, 0, 100,
		.meaning = "integration of the detector before the samples (boxcar)" },
	[CHANNEL_LOW_PASS] = { "low_pass_s", SETTING_NUMBER, 0, 0, 100,
		.meaning = "time constant of the detector (one pole)" },
	[CHANNEL_HIGH_PASS] = { "high_pass_hz", SETTING_NUMBER, 0, 0, 1000,
		.meaning = "corner of an AC-coupled input (one pole); 0: DC-coupled" },
	[CHANNEL_DELAY] = { "response_delay_s", SETTING_NUMBER, 0, -10, 10,
		.meaning = "further constant delay of the detector, taken off the contact time" },
	[CHANNEL_DELAY_SIGMA] = { "response_delay_sigma_s", SETTING_NUMBER, 0, 0, 10,
		.meaning = "standard uncertainty of the detector's delay and time constant; goes into every contact time" },
	[CHANNEL_PULSE_WIDTH] = { "pulse_width_s", SETTING_NUMBER, 0.1, 0, 0.5,
		.meaning = "length of the pulse (GPS modules: 0.1 s, common practice); 0: unknown" },
	[CHANNEL_PULSE_JITTER] = { "pulse_jitter_s", SETTING_NUMBER, 50e-9, 1e-9, 0.01,
		.meaning = "jitter of one pulse, one standard deviation (GPS modules: 20-50 ns, common practice)" },
	[CHANNEL_PULSE_DELAY] = { "pulse_delay_s", SETTING_NUMBER, 0, -0.1, 0.1,
		.meaning = "the pulse arrives in the samples later than the second by this (cable, 5 ns per metre; card)" },
	[CHANNEL_PULSE_DELAY_SIGMA] = { "pulse_delay_sigma_s", SETTING_NUMBER, 100e-9, 0, 0.1,
		.meaning = "standard uncertainty of pulse_delay_s" },
	{ .name = NULL },
};

const struct setting expected_settings[] = {
	[EXPECTED_SOURCE] = { "source", SETTING_TEXT, .required = true,
		.meaning = "name of the source", .example = "\"Anwen\"" },
	[EXPECTED_KIND] = { "kind", SETTING_CHOICE, .choices = "immersion|emersion", .required = true,
		.meaning = "whether the limb covers or uncovers the source", .example = "\"immersion\"" },
	[EXPECTED_UTC] = { "utc", SETTING_INSTANT, .required = true,
		.meaning = "predicted instant of the contact, UTC", .example = "\"2031-04-02T01:23:45.5Z\"" },
	[EXPECTED_SIGMA] = { "sigma_s", SETTING_NUMBER, 1, 0.001, 86400,
		.meaning = "standard uncertainty of the predicted instant" },
	[EXPECTED_DISTANCE] = { "moon_distance_km", SETTING_NUMBER, 378000, 340000, 420000,
		.meaning = "distance from the station to the limb" },
	[EXPECTED_SPEED] = { "shadow_speed_mps", SETTING_NUMBER, 600, 5, 5000,
		.meaning = "speed of the shadow's edge along the limb normal at the station" },
	[EXPECTED_SPEED_TOLERANCE] = { "shadow_speed_tolerance", SETTING_NUMBER, 0.1, 0, 1,
		.meaning = "standard uncertainty of the speed, relative (limb slope)" },
	[EXPECTED_DIAMETER] = { "diameter_mas", SETTING_NUMBER, 0, 0, 3.6e6,
		.meaning = "angular diameter of the source if known; 0: a point" },
	[EXPECTED_LIMB_DARKENING] = { "limb_darkening", SETTING_NUMBER, 0, 0, 1,
		.meaning = "linear limb-darkening coefficient u of its disc" },
	{ .name = NULL },
};

const struct setting watch_settings[] = {
	[WATCH_OUTSIDE] = { "outside_vigils", SETTING_BOOLEAN, 1, 0, 1,
		.meaning = "watch outside vigils too, for contacts nobody expected" },
	[WATCH_KINDS] = { "kinds", SETTING_CHOICE, .text = "both", .choices = "immersion|emersion|both",
		.meaning = "kinds of contact watched for outside vigils" },
	[WATCH_DISTANCE] = { "moon_distance_km", SETTING_NUMBER, 378000, 340000, 420000,
		.meaning = "distance assumed outside vigils" },
	[WATCH_SPEED_MIN] = { "shadow_speed_min_mps", SETTING_NUMBER, 350, 5, 5000,
		.meaning = "slowest shadow watched for outside vigils" },
	[WATCH_SPEED_MAX] = { "shadow_speed_max_mps", SETTING_NUMBER, 900, 5, 5000,
		.meaning = "fastest shadow watched for outside vigils" },
	[WATCH_ALARMS_NIGHT] = { "false_alarms_per_night", SETTING_NUMBER, 0.5, 1e-6, 1000,
		.meaning = "false alarms tolerated outside vigils in ten hours of noise; sets the threshold" },
	[WATCH_ALARMS_VIGIL] = { "false_alarms_per_vigil", SETTING_NUMBER, 0.01, 1e-6, 1,
		.meaning = "false alarms tolerated in one vigil; sets the threshold there" },
	[WATCH_THRESHOLD] = { "threshold_snr", SETTING_NUMBER, 0, 0, 1000,
		.meaning = "fixed trigger threshold, peak over noise rms, instead of the false alarms; 0: from those" },
	[WATCH_SCINTILLATION] = { "scintillation", SETTING_NUMBER, 0.1, 0, 1,
		.meaning = "relative departure of a real edge from the template tolerated by the residual check" },
	[WATCH_SIGMAS] = { "vigil_sigmas", SETTING_NUMBER, 5, 1, 20,
		.meaning = "a vigil reaches at least this many standard uncertainties either side of the prediction" },
	[WATCH_BEFORE] = { "vigil_before_s", SETTING_NUMBER, 30, 0, 7200,
		.meaning = "and begins at least this long before it (radio: 3600)" },
	[WATCH_AFTER] = { "vigil_after_s", SETTING_NUMBER, 30, 0, 7200,
		.meaning = "and ends at least this long after it" },
	{ .name = NULL },
};

const struct setting clock_settings[] = {
	[CLOCK_LEAP_SECONDS] = { "leap_seconds_file", SETTING_TEXT, .text = "/usr/share/zoneinfo/leap-seconds.list",
		.meaning = "list of leap seconds, kept up to date by Debian's tzdata" },
	[CLOCK_HOST_SIGMA] = { "host_sigma_s", SETTING_NUMBER, 0, 0, 3600,
		.meaning = "standard uncertainty of this computer's clock; 0: ask the kernel, and trust no clock that "
			"says it is not synchronised" },
	[CLOCK_CARD_TOLERANCE] = { "card_tolerance_ppm", SETTING_NUMBER, 200, 1, 5000,
		.meaning = "how far the card's sample rate may be from the nominal one" },
	{ .name = NULL },
};

const struct setting keep_settings[] = {
	[KEEP_FOLDER] = { "folder", SETTING_TEXT, .required = true,
		.meaning = "where segments and sidecars go", .example = "\"/var/lib/limbwatch\"" },
	[KEEP_EVERYTHING] = { "everything", SETTING_BOOLEAN, 0, 0, 1,
		.meaning = "record everything, not only vigils and triggers" },
	[KEEP_PRE] = { "pre_trigger_s", SETTING_NUMBER, 5, 0, 600,
		.meaning = "recorded before a contact outside vigils; 16 Fresnel times at the least" },
	[KEEP_POST] = { "post_trigger_s", SETTING_NUMBER, 5, 0, 600,
		.meaning = "recorded after it; 16 Fresnel times at the least" },
	[KEEP_RING] = { "ring_s", SETTING_NUMBER, 15, 6, 3600,
		.meaning = "how long the disk may stall before frames are lost; memory, see --check" },
	[KEEP_PART] = { "part_mib", SETTING_INTEGER, 2000, 1, 2000,
		.meaning = "size at which a recording goes on in a new file" },
	[KEEP_FREE] = { "free_mib", SETTING_INTEGER, 500, 0, 1e6,
		.meaning = "room left free on the disk: below it the oldest recordings without a contact are removed" },
	[KEEP_REMOVE_CONTACTS] = { "remove_contacts", SETTING_BOOLEAN, 0, 0, 1,
		.meaning = "when that is not enough, remove recordings with contacts too" },
	{ .name = NULL },
};

const struct setting live_settings[] = {
	[LIVE_PRIORITY] = { "priority", SETTING_INTEGER, 60, 0, 99,
		.meaning = "real-time priority of the thread that reads a live device (SCHED_FIFO); 0: none" },
	[LIVE_LOCK] = { "lock_memory", SETTING_BOOLEAN, 1, 0, 1,
		.meaning = "keep the recorder's memory from being paged out while it listens to a live device" },
	[LIVE_SILENCE] = { "silence_s", SETTING_NUMBER, 5, 0.5, 3600,
		.meaning = "a sound card that delivers nothing, or a read of it that hangs, for so long is given up and the "
			"card opened anew" },
	{ .name = NULL },
};

const struct setting state_settings[] = {
	[STATE_SOCKET] = { "socket", SETTING_TEXT, .text = "/run/limbwatch/state.sock", .max = 4095,
		.meaning = "Unix socket on which the recorder shows what it is doing, as lines of JSON; empty: none" },
	{ .name = NULL },
};

static const struct setting *driver_settings(const struct setting_value *values)
{
	static const char *const order[] = { "alsa", "file", "pipe", "synthetic" };    /* of the driver choice */
	long long k = values[INTAKE_DRIVER].integer;
	const struct intake_driver *driver = k >= 0 && k < 4 ? intake_driver_find(order[k]) : NULL;

	return driver ? driver->settings : NULL;
}

static const struct setting *driver_variant(size_t k, const char **heading)
{
	static char text[128];
	size_t n = 0;

	while (intake_drivers[n])
		n++;
	if (k >= n)
		return NULL;
	snprintf(text, sizeof(text), "driver = \"%s\": %s", intake_drivers[k]->name, intake_drivers[k]->summary);
	*heading = text;
	return intake_drivers[k]->settings;
}

const struct setting_group config_groups[] = {
	{ .name = "station", .settings = station_settings, .meaning = "who and where" },
	{ .name = "intake", .settings = intake_settings, .more = driver_settings, .variant = driver_variant,
	  .required = true, .meaning = "where samples come from; below driver, that driver's own settings" },
	{ .name = "channels", .settings = channel_settings, .list = true, .required = true,
	  .meaning = "what each channel of the intake carries" },
	{ .name = "expected", .settings = expected_settings, .list = true,
	  .meaning = "contacts expected: the recorder keeps a vigil around each" },
	{ .name = "watch", .settings = watch_settings, .meaning = "recognising contacts" },
	{ .name = "clock", .settings = clock_settings, .meaning = "tying samples to UTC" },
	{ .name = "keep", .settings = keep_settings, .required = true, .meaning = "recording" },
	{ .name = "live", .settings = live_settings, .meaning = "staying on time with a live device" },
	{ .name = "state", .settings = state_settings, .meaning = "letting others look in" },
	{ .name = NULL },
};
