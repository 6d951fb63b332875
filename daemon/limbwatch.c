/* SPDX-License-Identifier: GPL-3.0-or-later */
/* limbwatch: what the observer does before and after the night; a file per subcommand in daemon/command/. */
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include "limbwatch/command.h"
#include "limbwatch/log.h"

static const struct command commands[] = {
	{ "levels", "show level, headroom, hum, noise and pulse of every channel, for setting gains", command_levels },
	{ "rehearse", "play a synthetic contact through the real recorder and compare", command_rehearse },
	{ "settings", "print the manual of all settings, or the commented sample configuration", command_settings },
};
enum { COMMANDS = sizeof(commands) / sizeof(*commands) };

static void help(FILE *out)
{
	fputs("limbwatch - before and after the contact\n\n  limbwatch COMMAND [OPTION...]\n\n", out);
	for (size_t k = 0; k < COMMANDS; k++)
		fprintf(out, "  %-10s %s\n", commands[k].name, commands[k].summary);
	fputs("\n  limbwatch COMMAND --help says more; limbwatch --version gives the version.\n"
	      "  The recorder itself is limbwatchd.\n", out);
}

int main(int argc, char **argv)
{
	log_open("limbwatch", LEVEL_NOTICE);
	if (argc < 2) {
		help(stderr);
		return STATUS_USAGE;
	}
	if (!strcmp(argv[1], "--help") || !strcmp(argv[1], "-h")) {
		help(stdout);
		return EXIT_SUCCESS;
	}
	if (!strcmp(argv[1], "--version") || !strcmp(argv[1], "-V")) {
		puts("limbwatch " LIMBWATCH_VERSION);
		return EXIT_SUCCESS;
	}
	for (size_t k = 0; k < COMMANDS; k++)
		if (!strcmp(argv[1], commands[k].name))
			return commands[k].run(argc - 1, argv + 1);
	log_error("\"%s\" is not a command; limbwatch --help lists them", argv[1]);
	return STATUS_USAGE;
}
