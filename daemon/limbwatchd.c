/* SPDX-License-Identifier: GPL-3.0-or-later */
/* limbwatchd: records, detects and times lunar contacts. */
#include <errno.h>
#include <getopt.h>
#include <signal.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>
#include "limbwatch/log.h"
#include "limbwatch/recorder.h"

enum { EXIT_USAGE = 2 };

struct options {
	const char *config;
	bool check, json, quiet, verbose;
	struct config next;             /* read by the last reload and not taken up yet */
	bool renewed;
	struct config before;           /* what ran until the last renewal, until the new one is at work */
	bool unproven;                  /* `before` stands for something */
	char *text;                     /* of the configuration file, as it was read */
};

static void help(FILE *out)
{
	fputs("limbwatchd - watch a detector for lunar contacts, record and time them\n"
	      "\n"
	      "  limbwatchd --config FILE [--json] [--quiet | --verbose]\n"
	      "  limbwatchd --config FILE --check\n"
	      "\n"
	      "  -c, --config FILE  the configuration (default /etc/limbwatch/limbwatch.conf)\n"
	      "      --check        say in plain words what the configuration means, record nothing\n"
	      "      --json         one JSON object per contact on standard output, a line each\n"
	      "  -q, --quiet        warnings and errors only\n"
	      "  -v, --verbose      more of what happens inside\n"
	      "  -h, --help         this text\n"
	      "  -V, --version      the version\n"
	      "\n"
	      "A recording of a file or a synthetic event is replayed as fast as it goes, then the program ends.\n"
	      "Exit status: 0 done, 1 failed (said on standard error), 2 wrong usage or configuration.\n", out);
}

/* @return -1: go on; else the exit status */
static int parse_options(struct options *o, int argc, char **argv)
{
	enum { CHECK = 256, JSON };
	static const struct option table[] = {
		{ "config", required_argument, NULL, 'c' }, { "check", no_argument, NULL, CHECK },
		{ "json", no_argument, NULL, JSON }, { "quiet", no_argument, NULL, 'q' },
		{ "verbose", no_argument, NULL, 'v' }, { "help", no_argument, NULL, 'h' },
		{ "version", no_argument, NULL, 'V' }, { NULL, 0, NULL, 0 },
	};
	int option;

	while ((option = getopt_long(argc, argv, "c:qvhV", table, NULL)) != -1) {
		switch (option) {
		case 'c': o->config = optarg; break;
		case CHECK: o->check = true; break;
		case JSON: o->json = true; break;
		case 'q': o->quiet = true; break;
		case 'v': o->verbose = true; break;
		case 'h': help(stdout); return EXIT_SUCCESS;
		case 'V': puts("limbwatchd " LIMBWATCH_VERSION); return EXIT_SUCCESS;
		default: help(stderr); return EXIT_USAGE;
		}
	}
	if (optind < argc) {
		log_error("\"%s\" is not understood; the configuration is given as --config FILE (see --help)", argv[optind]);
		return EXIT_USAGE;
	}
	return -1;
}

static void on_signal(int number)
{
	if (number == SIGHUP)
		recorder_reload();
	else
		recorder_stop();
}

static void catch_signals(void)
{
	struct sigaction stop = { .sa_handler = on_signal };

	sigaction(SIGINT, &stop, NULL);
	sigaction(SIGTERM, &stop, NULL);
	sigaction(SIGHUP, &stop, NULL);
	signal(SIGPIPE, SIG_IGN);       /* a reader of --json that goes away must not end the recording */
}

static void print_contact(void *context, const struct config *config, const struct contact *contact,
                          const char *segment)
{
	const struct options *o = context;

	(o->json ? report_json : report_text)(stdout, config, contact, segment);
	if (ferror(stdout))
		log_error("standard output does not take the contact: %s; it is in the sidecar", strerror(errno));
	clearerr(stdout);
}

/* Where the service manager lets the recorder keep things, "" without one: systemd.exec(5), StateDirectory=. */
static void last_good_path(char path[4096])
{
	const char *folder = getenv("STATE_DIRECTORY");

	*path = 0;
	if (folder && *folder == '/')
		snprintf(path, 4096, "%.*s/limbwatch.conf.last-good", (int)strcspn(folder, ":"), folder);
}

/* The file as it is now; NULL: it cannot be read. */
static char *read_text(const char *path)
{
	char *text = NULL;
	size_t size = 0;
	FILE *in = fopen(path, "re"), *out = in ? open_memstream(&text, &size) : NULL;
	int c;

	while (out && (c = getc(in)) != EOF)
		putc(c, out);
	if (in)
		fclose(in);
	if (out)
		fclose(out);
	return text;
}

static int write_text(const char *path, const char *text)
{
	char part[4200];
	FILE *out;
	int ret;

	snprintf(part, sizeof(part), "%s.part", path);
	out = fopen(part, "we");
	if (!out)
		return -errno;
	fputs(text, out);
	ret = ferror(out) || fflush(out) || fdatasync(fileno(out)) ? -EIO : 0;
	if (fclose(out) || (ret == 0 && rename(part, path) < 0))
		ret = -errno;
	return ret;
}

/* This configuration is at work: it is the last good one, for a restart that finds a bad one, with nobody there. */
static void on_running(void *context)
{
	struct options *o = context;
	char path[4096];
	int ret;

	if (o->unproven)
		config_free(&o->before);
	o->unproven = false;
	last_good_path(path);
	if (!*path || !o->text)
		return;
	ret = write_text(path, o->text);
	if (ret < 0)
		log_warning("%s cannot be kept as the last good configuration in %s: %s", o->config, path, strerror(-ret));
}

static int load(struct config *config, struct options *o)
{
	int ret = config_load(config, o->config);

	if (ret == 0) {
		free(o->text);
		o->text = read_text(o->config);
	}
	return ret;
}

/* Under a service manager a bad configuration does not end the nights: the last good one is taken, loudly. @return 0: it is */
static int load_last_good(struct config *config, struct options *o)
{
	char path[4096];
	int ret;

	last_good_path(path);
	if (!*path || access(path, R_OK) < 0)
		return -ENOENT;
	log_error("%s is refused; THE LAST GOOD CONFIGURATION IS USED INSTEAD: %s", o->config, path);
	ret = config_load(config, path);
	free(o->text);
	o->text = NULL;                 /* it stands there already */
	return ret;
}

/* A bad configuration changes nothing: the last good one runs on. */
static bool reload(void *context)
{
	struct options *o = context;
	struct config config;

	if (load(&config, o) < 0) {
		log_error("%s is refused; the recorder runs on as it was", o->config);
		return false;
	}
	log_notice("%s is read anew", o->config);
	if (o->renewed)
		config_free(&o->next);
	o->next = config;
	o->renewed = true;
	return true;
}

/* The new configuration is sound in itself, but may still not fit the device: then the one before runs on. */
static void renew(struct config *config, struct options *o)
{
	if (o->unproven)
		config_free(config);    /* never got to work; `before` stays */
	else
		o->before = *config;
	o->unproven = true;
	*config = o->next;
	o->renewed = false;
}

/* @return whether there is something to fall back on; `ret` is what ended a configuration that never got to work */
static bool fall_back(struct config *config, struct options *o, int ret, bool *tried)
{
	struct config good;

	if (o->unproven) {
		log_error("%s does not work; the recorder runs on as it was", o->config);
		config_free(config);
		*config = o->before;
		o->unproven = false;
		free(o->text);          /* of the one that does not work */
		o->text = NULL;
		return true;
	}
	if (ret != -EINVAL || *tried || load_last_good(&good, o) < 0)
		return false;
	*tried = true;
	config_free(config);
	*config = good;
	return true;
}

static int record(struct config *config, struct options *o)
{
	struct recorder_hooks hooks = {
		.context = o, .contact = print_contact, .progress = true, .service = true, .running = on_running, .reload = reload,
	};
	bool tried = false;
	int ret;

	log_detach();
	for (;;) {
		ret = recorder_run(config, &hooks);
		if (ret == RECORDER_RENEW)
			renew(config, o);
		else if (ret >= 0 || !fall_back(config, o, ret, &tried))
			break;
	}
	log_attach();
	if (o->renewed)
		config_free(&o->next);
	if (o->unproven)
		config_free(&o->before);
	return ret;
}

int main(int argc, char **argv)
{
	struct options options = { .config = "/etc/limbwatch/limbwatch.conf" };
	struct config config;
	int ret;

	log_open("limbwatchd", LEVEL_NOTICE);
	ret = parse_options(&options, argc, argv);
	if (ret >= 0)
		return ret;
	log_open("limbwatchd", options.quiet ? LEVEL_WARNING : options.verbose ? LEVEL_DETAIL : LEVEL_NOTICE);
	if (!options.check)
		catch_signals();        /* before the configuration is read, which takes a while: a SIGHUP then must not end it */
	ret = load(&config, &options);
	if (ret < 0 && !options.check)
		ret = load_last_good(&config, &options);
	if (ret < 0)
		return EXIT_USAGE;
	ret = options.check ? recorder_describe(&config, stdout) : record(&config, &options);
	config_free(&config);
	free(options.text);
	if (ret == -EINVAL)
		return EXIT_USAGE;
	return ret < 0 ? EXIT_FAILURE : EXIT_SUCCESS;
}
