/* SPDX-License-Identifier: GPL-3.0-or-later */
/* limbwatch levels: what an observer sets gains by. */
#include <errno.h>
#include <getopt.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>
#include "levels_inner.h"
#include "limbwatch/command.h"
#include "limbwatch/log.h"
#include "screen.h"

volatile sig_atomic_t levels_stop;

struct options {
	struct levels_run run;
	const char *config_path, *socket, *file;
	bool attach;
};

static void help(FILE *out)
{
	fputs("limbwatch levels - level, headroom, hum, noise and pulse of every channel, for setting gains\n"
	      "\n"
	      "  limbwatch levels [--config FILE] [--seconds N] [--json]\n"
	      "  limbwatch levels [--config FILE] --attach | --file SOUNDFILE\n"
	      "\n"
	      "  -c, --config FILE     channels and intake (default /etc/limbwatch/limbwatch.conf)\n"
	      "  -a, --attach          show what the running recorder measures, never open the device\n"
	      "  -f, --file SOUNDFILE  measure a sound file with these channels\n"
	      "      --socket PATH     the recorder's state socket (default: state.socket of the configuration)\n"
	      "  -s, --seconds N       end after that long\n"
	      "      --json            one line of JSON instead of each table\n"
	      "  -h, --help            this text\n"
	      "\n"
	      "A running recorder holds the device: then its own levels are shown, and it is not disturbed.  A device is\n"
	      "shown every second until Ctrl-C; a file or synthetic event once, at its end.\n"
	      "Exit status: 0 done, 1 failed (said on standard error), 2 wrong usage or configuration.\n", out);
}

static bool seconds_option(const char *text, double *out)
{
	char *end;
	double x = strtod(text, &end);

	if (*end || end == text || !(x > 0 && x <= 1e7)) {
		log_error("--seconds: %s is not a number above 0, to 1e7", text);
		return false;
	}
	*out = x;
	return true;
}

/* @return -1: go on; else the exit status */
static int parse_options(struct options *o, int argc, char **argv)
{
	enum { SOCKET = 256, JSON };
	static const struct option table[] = {
		{ "config", required_argument, NULL, 'c' }, { "attach", no_argument, NULL, 'a' },
		{ "file", required_argument, NULL, 'f' }, { "socket", required_argument, NULL, SOCKET },
		{ "seconds", required_argument, NULL, 's' }, { "json", no_argument, NULL, JSON },
		{ "help", no_argument, NULL, 'h' }, { NULL, 0, NULL, 0 },
	};
	int option;

	while ((option = getopt_long(argc, argv, "c:af:s:h", table, NULL)) != -1) {
		switch (option) {
		case 'c': o->config_path = optarg; break;
		case 'a': o->attach = true; break;
		case 'f': o->file = optarg; break;
		case SOCKET: o->socket = optarg; break;
		case 's':
			if (!seconds_option(optarg, &o->run.seconds))
				return STATUS_USAGE;
			break;
		case JSON: o->run.json = true; break;
		case 'h': help(stdout); return EXIT_SUCCESS;
		default: help(stderr); return STATUS_USAGE;
		}
	}
	if (optind < argc) {
		log_error("\"%s\" is not understood; a sound file is given as --file SOUNDFILE (see limbwatch levels --help)",
		          argv[optind]);
		return STATUS_USAGE;
	}
	if (o->attach && o->file) {
		log_error("--attach shows the running recorder, --file a sound file: only one of them");
		return STATUS_USAGE;
	}
	return -1;
}

/* ------------------------------------------------------------------ shared with levels_intake.c and levels_attach.c */

double levels_now(void)
{
	struct timespec now;

	clock_gettime(CLOCK_MONOTONIC, &now);
	return (double)now.tv_sec + (double)now.tv_nsec * 1e-9;
}

void levels_show(const struct levels_run *run, const char *title, const struct meter_report *report)
{
	char *text = NULL;
	size_t size;
	FILE *memory;

	if (run->json) {
		text = levels_json(report);
		if (text)
			printf("%s\n", text);
		fflush(stdout);
		free(text);
		return;
	}
	memory = open_memstream(&text, &size);
	if (!memory)
		return;
	levels_print(memory, title, report);
	if (fclose(memory) == 0)
		screen_paint(text);
	free(text);
}

/* ------------------------------------------------------------------ where from */

/* The sound file in the place of the configured intake, with that one's channels. */
static void use_file(struct config *config, struct setting_value *values, const char *path)
{
	const struct setting *table = intake_file.settings;

	settings_fallbacks(table, values);
	for (size_t k = 0; table[k].name; k++) {
		if (strcmp(table[k].name, "path"))
			continue;
		values[k].text = path;
		values[k].given = true;
	}
	config->driver = &intake_file;
	config->driver_values = values;
}

static int attach(const struct options *o, const char *path)
{
	int fd = levels_connect(path);

	if (fd >= 0)
		return levels_run_attached(&o->run, fd, path);
	if (fd == -EACCES)
		log_error("the recorder's socket %s does not let you in: join its group", path);
	else if (!*path)
		log_error("state.socket is empty: the recorder of this configuration shows its state nowhere");
	else
		log_error("no recorder answers at %s: %s", path, strerror(-fd));
	return STATUS_FAILURE;
}

/* The recorder holds the device, if it runs; files and synthetic events nobody holds. */
static int run_configured(const struct options *o, const struct config *config, const char *path)
{
	int fd = -ENOENT;

	if (config->driver != &intake_file && config->driver != &intake_synthetic)
		fd = levels_connect(path);
	if (fd == -EACCES)
		log_warning("the recorder's socket %s does not let you in: join its group to see a running recorder", path);
	if (fd < 0)
		return levels_run_intake(&o->run, config);
	log_notice("the recorder is running and holds the %s intake: attached to it at %s", config->driver->name, path);
	return levels_run_attached(&o->run, fd, path);
}

static int run(const struct options *o)
{
	struct setting_value values[16];
	struct config config = { .settings = NULL };
	const char *path;
	int status;

	if (o->attach && !o->config_path)
		return attach(o, o->socket ? o->socket : LEVELS_SOCKET);
	if (config_load(&config, o->config_path ? o->config_path : "/etc/limbwatch/limbwatch.conf") < 0)
		return STATUS_USAGE;
	path = o->socket ? o->socket : config.state.socket;
	if (o->file)
		use_file(&config, values, o->file);
	status = o->attach ? attach(o, path) : run_configured(o, &config, path);
	config_free(&config);
	return status;
}

static void on_signal(int number)
{
	(void)number;
	levels_stop = 1;
}

int command_levels(int argc, char **argv)
{
	const struct sigaction stop = { .sa_handler = on_signal };
	struct options o = { .run = { .seconds = INFINITY } };
	int status = parse_options(&o, argc, argv);

	if (status >= 0)
		return status;
	sigaction(SIGINT, &stop, NULL);
	sigaction(SIGTERM, &stop, NULL);
	sigaction(SIGHUP, &stop, NULL);
	if (!o.run.json)
		screen_open();
	status = run(&o);
	screen_close();
	return status;
}
