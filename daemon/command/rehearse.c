/* SPDX-License-Identifier: GPL-3.0-or-later */
/* limbwatch rehearse: a synthetic contact of the expected shape through the real recorder, compared with its truth. */
#include <errno.h>
#include <getopt.h>
#include <gsl/gsl_randist.h>
#include <gsl/gsl_rng.h>
#include <math.h>
#include <signal.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include "limbwatch/command.h"
#include "limbwatch/log.h"
#include "limbwatch/recorder.h"
#include "limbwatch/synthetic.h"

#define MAS (M_PI / 180 / 3600e3)

static const double noise_room = 0.1;           /* rms of one sample, over full scale */

/* An invented evening: used when no configuration is given. */
static const char scenario[] =
	"station = { name = \"Brackenfold\"; latitude_deg = 51.3; longitude_deg = -2.9; height_m = 210; };\n"
	"intake = { driver = \"synthetic\"; };\n"
	"channels = (\n"
	"  { name = \"photodiode\"; column = 1; wavelength_nm = 620; passband_nm = 120; aperture_m = 0.28; },\n"
	"  { name = \"gps\"; column = 2; measure = \"pulse\"; } );\n"
	"expected = ( { source = \"Anwen\"; kind = \"immersion\"; utc = \"2031-04-02T01:23:45.5Z\"; sigma_s = 0.8;\n"
	"  moon_distance_km = 371500; shadow_speed_mps = 612; shadow_speed_tolerance = 0.08; } );\n"
	"keep = { folder = \"/tmp\"; };\n";

struct rehearsal {
	const char *config_path, *folder;
	long contact;                   /* from 1 */
	double snr;
	unsigned long seed;
	bool json, quiet;
	/* Made. */
	struct config config;
	struct setting_value values[128];
	struct synthetic_truth truth;
	size_t seen;
	struct contact best;            /* nearest to the truth among those of its kind */
	char segment[4096];
};

static void help(FILE *out)
{
	fputs("limbwatch rehearse - play a synthetic contact through the real recorder and compare with the truth\n"
	      "\n"
	      "  limbwatch rehearse [--config FILE] [--contact N] [--snr X] [--seed N] [--folder DIR] [--json]\n"
	      "\n"
	      "  -c, --config FILE  channels and expected contacts as the recorder would have them; without it an\n"
	      "                     invented evening is played\n"
	      "  -n, --contact N    which of the expected contacts (default 1)\n"
	      "      --snr X        signal to noise of the matched filter (default 25)\n"
	      "      --seed N       another seed, another night (default 1)\n"
	      "      --folder DIR   where the segment goes (default: a new folder under /tmp)\n"
	      "      --json         the contact as one line of JSON, nothing else on standard output\n"
	      "  -h, --help         this text\n"
	      "\n"
	      "Exit status: 0 the contact was caught and timed within its uncertainty, 1 not, 2 wrong usage.\n", out);
}

static bool number_option(const char *name, const char *text, double min, double max, double *out)
{
	char *end;
	double x = strtod(text, &end);

	if (*end || end == text || !(x >= min && x <= max)) {
		log_error("%s: %s is not a number from %g to %g", name, text, min, max);
		return false;
	}
	*out = x;
	return true;
}

/* @return -1: go on; else the exit status */
static int parse_options(struct rehearsal *r, int argc, char **argv)
{
	enum { SNR = 256, SEED, FOLDER, JSON };
	static const struct option table[] = {
		{ "config", required_argument, NULL, 'c' }, { "contact", required_argument, NULL, 'n' },
		{ "snr", required_argument, NULL, SNR }, { "seed", required_argument, NULL, SEED },
		{ "folder", required_argument, NULL, FOLDER }, { "json", no_argument, NULL, JSON },
		{ "help", no_argument, NULL, 'h' }, { NULL, 0, NULL, 0 },
	};
	double x;
	int option;

	while ((option = getopt_long(argc, argv, "c:n:h", table, NULL)) != -1) {
		switch (option) {
		case 'c': r->config_path = optarg; break;
		case 'n':
			if (!number_option("--contact", optarg, 1, CONFIG_EXPECTED, &x))
				return STATUS_USAGE;
			r->contact = (long)x;
			break;
		case SNR:
			if (!number_option("--snr", optarg, 1, 1e4, &r->snr))
				return STATUS_USAGE;
			break;
		case SEED:
			if (!number_option("--seed", optarg, 0, 4294967295.0, &x))
				return STATUS_USAGE;
			r->seed = (unsigned long)x;
			break;
		case FOLDER: r->folder = optarg; break;
		case JSON: r->json = true; break;
		case 'h': help(stdout); return EXIT_SUCCESS;
		default: help(stderr); return STATUS_USAGE;
		}
	}
	if (optind < argc) {
		log_error("\"%s\" is not understood; see limbwatch rehearse --help", argv[optind]);
		return STATUS_USAGE;
	}
	return -1;
}

/* ------------------------------------------------------------------ the synthetic night */

static struct setting_value *value(struct rehearsal *r, const char *name)
{
	const struct setting *table = intake_synthetic.settings;

	for (size_t k = 0; table[k].name; k++)
		if (!strcmp(table[k].name, name))
			return &r->values[k];
	log_error("the synthetic intake has no setting %s", name);
	abort();
}

static void set(struct rehearsal *r, const char *name, double x)
{
	struct setting_value *v = value(r, name);

	v->number = x;
	v->integer = llround(x);
	v->given = true;
}

static void set_text(struct rehearsal *r, const char *name, const char *text)
{
	struct setting_value *v = value(r, name);

	v->text = text;
	v->given = true;
}

/* The rate the observer's own intake would run at. */
static double intake_rate(const struct config *config)
{
	const struct setting *table = config->driver->settings;

	for (size_t k = 0; table[k].name; k++)
		if (!strcmp(table[k].name, "rate_hz") && config->driver_values[k].number > 0)
			return config->driver_values[k].number;
	return 48000;
}

static void set_receiver(struct rehearsal *r, const struct config_channel *channel)
{
	const struct curve_parameters *curve = &channel->curve;
	double lambda = curve->passband.wavelength_m;

	if (lambda < 2e-5) {
		set(r, "wavelength_nm", lambda * 1e9);
		set(r, "passband_nm", curve->passband.width_m * 1e9);
	} else {
		set(r, "frequency_mhz", 299.792458 / lambda);
		set(r, "passband_mhz", 299.792458 / lambda * curve->passband.width_m / lambda);
	}
	set(r, "aperture_m", curve->aperture_m);
	set(r, "obstruction", curve->obstruction);
	set(r, "integration_s", curve->integration_s);
	set(r, "low_pass_s", curve->low_pass_s);
	set(r, "high_pass_hz", curve->high_pass_hz);
}

static void set_pulse(struct rehearsal *r, const struct config_channel *pulse)
{
	set(r, "pulse", pulse != NULL);
	if (!pulse)
		return;
	if (pulse->pulse.width_s > 0)
		set(r, "pulse_width_s", pulse->pulse.width_s);
	set(r, "pulse_jitter_s", pulse->pulse.jitter_s);
	if (pulse->polarity < 0)
		value(r, "pulse_polarity")->integer = 1;
}

/* Draws what nobody knows beforehand: when exactly, how fast, how wrong the card is. */
static void set_event(struct rehearsal *r, const struct config_expected *e, double fresnel_time, char start[TAI_TEXT])
{
	gsl_rng *rng = gsl_rng_alloc(gsl_rng_mt19937);
	double before, after, late, speed;

	gsl_rng_set(rng, r->seed);
	late = e->sigma_s * fmax(-2, fmin(2, gsl_ran_gaussian(rng, 1)));
	speed = e->speed_mps * (1 + e->speed_tolerance * fmax(-2, fmin(2, gsl_ran_gaussian(rng, 1))));
	before = ceil(fmax(12, 25 * 16 * fresnel_time) + 2 * e->sigma_s) + gsl_rng_uniform(rng);
	after = ceil(fmax(10, 3 * 16 * fresnel_time) + 2 * e->sigma_s);
	tai_format_utc(start, tai_add(e->when, -before), 3);
	set_text(r, "start_utc", start);
	set(r, "start_sigma_s", 0.05);  /* a host clock set by the network */
	set(r, "start_error_s", 0.05 * fmax(-2, fmin(2, gsl_ran_gaussian(rng, 1))));
	set(r, "duration_s", before + after);
	set(r, "contact_s", before + late);
	set(r, "shadow_speed_mps", fmax(speed, 0.3 * e->speed_mps));
	set(r, "clock_error_ppm", 100 * (2 * gsl_rng_uniform(rng) - 1));
	gsl_rng_free(rng);
}

static const struct config_channel *first_channel(const struct config *config, enum measure measure)
{
	for (size_t k = 0; k < config->channels; k++)
		if (config->channel[k].measure == measure)
			return &config->channel[k];
	return NULL;
}

/* Puts the synthetic intake in the place of the observer's own, and the channels on its columns. */
static int stage(struct rehearsal *r, char start[TAI_TEXT])
{
	struct config *config = &r->config;
	const struct config_channel *detector = first_channel(config, MEASURE_VOLTAGE);
	const struct config_channel *pulse = first_channel(config, MEASURE_PULSE);
	struct config_expected *e;
	struct curve_parameters curve;

	if (!detector || r->contact > (long)config->expecteds) {
		if (!detector)
			log_error("%s: no channel measures voltage: nothing to rehearse", settings_path(config->settings));
		else
			log_error("%s: there is no expected contact %ld (there are %zu): see the group \"expected\"",
			          settings_path(config->settings), r->contact, config->expecteds);
		return -EINVAL;
	}
	e = &config->expected[r->contact - 1];
	config_curve(&curve, detector, e);
	settings_fallbacks(intake_synthetic.settings, r->values);
	set(r, "seed", (double)r->seed);
	set(r, "rate_hz", intake_rate(config));
	value(r, "kind")->integer = e->kind;
	set(r, "distance_km", e->distance_m / 1e3);
	set(r, "diameter_mas", e->component.size_rad / MAS);
	set(r, "limb_darkening", e->component.limb_darkening);
	set(r, "snr", r->snr);
	set_receiver(r, detector);
	set_pulse(r, pulse);
	set_event(r, e, curve_fresnel_time(&curve), start);
	if (synthetic_truth(r->values, &r->truth) < 0)
		return -EINVAL;
	/* A faint source in much noise must not reach full scale. */
	if (r->truth.noise_rms > noise_room)
		set(r, "level", value(r, "level")->number * noise_room / r->truth.noise_rms);
	config->channel[0] = *detector;
	config->channel[0].column = 0;
	config->channel[0].polarity = 1;
	config->channels = 1;
	if (pulse) {
		config->channel[1] = *pulse;
		config->channel[1].column = 1;
		config->channels = 2;
	}
	config->expected[0] = *e;
	config->expecteds = 1;
	config->driver = &intake_synthetic;
	config->driver_values = r->values;
	return synthetic_truth(r->values, &r->truth);
}

/* ------------------------------------------------------------------ what came of it */

static void take_contact(void *context, const struct config *config, const struct contact *contact,
                         const char *segment)
{
	struct rehearsal *r = context;

	if (r->json)
		report_json(stdout, config, contact, segment);
	r->seen++;
	if (contact->kind != config->expected[0].kind)
		return;
	if (*r->segment && fabs(contact->frame - r->truth.frame) >= fabs(r->best.frame - r->truth.frame))
		return;
	r->best = *contact;
	snprintf(r->segment, sizeof(r->segment), "%s", segment ? segment : "(the disk refused it)");
}

static void say_setting(const struct rehearsal *r)
{
	const struct config_expected *e = &r->config.expected[0];
	char text[TAI_TEXT];

	printf("Station %s rehearses the %s of %s.\n", r->config.station.name, contact_kind_name(e->kind), e->source);
	printf("  Expected   %s +- %g s, shadow %.0f m/s\n", tai_format_utc(text, e->when, 3), e->sigma_s, e->speed_mps);
	printf("  Played     %s at SNR %.3g (this is the truth the recorder does not know)\n",
	       tai_format_utc(text, r->truth.contact, 6), r->truth.snr);
}

static int say_outcome(const struct rehearsal *r)
{
	const struct contact *c = &r->best;
	char text[TAI_TEXT], sigma[32], error[32];
	double off;
	bool good;

	if (!*r->segment) {
		printf("  Outcome    NOT CAUGHT: %zu other contact%s\n", r->seen, r->seen == 1 ? "" : "s");
		return STATUS_FAILURE;
	}
	off = tai_difference(c->when, r->truth.contact);
	if (c->time_quality == TIME_FREE)
		off = (c->frame - r->truth.frame) / r->truth.rate;
	good = fabs(off) <= 4 * (c->time_quality == TIME_FREE ? c->terms.fit : c->sigma_s);
	printf("  Triggered  %s of %s, SNR %.1f, %s\n", contact_kind_name(c->kind),
	       c->expected >= 0 ? r->config.expected[0].source : "an unexpected source", c->snr,
	       verdict_name(c->verdict));
	printf("  Contact    %s +- %s, time from %s%s\n", tai_format_utc(text, c->when, 6),
	       report_interval(sigma, c->time_quality == TIME_FREE ? c->terms.fit : c->sigma_s),
	       c->time_quality == TIME_PULSE ? "the pulse" : c->time_quality == TIME_HOST ? "the host clock" : "nowhere",
	       c->second_confirmed ? "" : " (second unconfirmed)");
	printf("  Error      %s against the truth: %s\n", report_interval(error, off),
	       good ? "within its uncertainty" : "MORE THAN FOUR TIMES ITS UNCERTAINTY");
	printf("  Segment    %s (its sidecar beside it ends in .json)\n", r->segment);
	return good ? EXIT_SUCCESS : STATUS_FAILURE;
}

static int play(struct rehearsal *r)
{
	struct recorder_hooks hooks = { .context = r, .contact = take_contact, .progress = true };
	int ret;

	if (!r->json)
		say_setting(r);
	fflush(stdout);
	ret = recorder_run(&r->config, &hooks);
	if (ret < 0)
		return STATUS_FAILURE;
	if (!r->json)
		return say_outcome(r);
	return *r->segment ? EXIT_SUCCESS : STATUS_FAILURE;
}

static void on_signal(int number)
{
	(void)number;
	recorder_stop();
}

int command_rehearse(int argc, char **argv)
{
	struct rehearsal r = { .contact = 1, .snr = 25, .seed = 1 };
	char folder[] = "/tmp/limbwatch-rehearsal-XXXXXX", start[TAI_TEXT];
	int ret = parse_options(&r, argc, argv);

	if (ret >= 0)
		return ret;
	ret = r.config_path ? config_load(&r.config, r.config_path) :
		config_parse(&r.config, scenario, "the invented evening");
	if (ret < 0)
		return STATUS_USAGE;
	signal(SIGINT, on_signal);
	signal(SIGTERM, on_signal);
	ret = stage(&r, start);
	if (ret == 0 && !r.folder && !(r.folder = mkdtemp(folder))) {
		log_error("cannot make a folder under /tmp: %s", strerror(errno));
		ret = -EIO;
	}
	r.config.keep.folder = r.folder;
	ret = ret == 0 ? play(&r) : ret == -EINVAL ? STATUS_USAGE : STATUS_FAILURE;
	config_free(&r.config);
	return ret;
}
