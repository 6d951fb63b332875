/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_COMMAND_H
#define LIMBWATCH_COMMAND_H

/* Subcommands of limbwatch, a file each in daemon/command/. argv[0] is the subcommand. @return exit status */
enum { STATUS_FAILURE = 1, STATUS_USAGE = 2 };

struct command {
	const char *name, *summary;
	int (*run)(int argc, char **argv);
};

int command_levels(int argc, char **argv);
int command_rehearse(int argc, char **argv);
int command_settings(int argc, char **argv);

#endif
