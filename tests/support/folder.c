/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <stdio.h>
#include <stdlib.h>
#include "folder.h"

char folder[64];

int folder_make(void **state)
{
	(void)state;
	snprintf(folder, sizeof(folder), "/tmp/limbwatch-test-XXXXXX");
	return mkdtemp(folder) ? 0 : -1;
}

int folder_remove(void **state)
{
	char command[128];

	(void)state;
	snprintf(command, sizeof(command), "rm -rf %s", folder);
	return system(command);
}
