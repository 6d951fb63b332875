/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <getopt.h>
#include <stdio.h>
#include <stdlib.h>
#include "limbwatch/command.h"
#include "limbwatch/config.h"
#include "limbwatch/log.h"

static void help(FILE *out)
{
	fputs("limbwatch settings - every setting with its unit, default, range and meaning\n\n"
	      "  limbwatch settings            the manual\n"
	      "  limbwatch settings --sample   a commented configuration to start from\n", out);
}

int command_settings(int argc, char **argv)
{
	static const struct option table[] = {
		{ "sample", no_argument, NULL, 's' }, { "help", no_argument, NULL, 'h' }, { NULL, 0, NULL, 0 },
	};
	int option, sample = 0;

	while ((option = getopt_long(argc, argv, "h", table, NULL)) != -1) {
		switch (option) {
		case 's': sample = 1; break;
		case 'h': help(stdout); return EXIT_SUCCESS;
		default: help(stderr); return STATUS_USAGE;
		}
	}
	if (optind < argc) {
		log_error("\"%s\" is not understood; see limbwatch settings --help", argv[optind]);
		return STATUS_USAGE;
	}
	(sample ? settings_write_sample : settings_write_manual)(stdout, config_groups);
	return EXIT_SUCCESS;
}
