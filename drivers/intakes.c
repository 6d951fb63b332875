/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <string.h>
#include "limbwatch/intake.h"

/* The list of drivers: a new one is its file and its line here. */
const struct intake_driver *const intake_drivers[] = {
	&intake_alsa,
	&intake_file,
	&intake_pipe,
	&intake_synthetic,
	NULL,
};

const struct intake_driver *intake_driver_find(const char *name)
{
	for (size_t k = 0; intake_drivers[k]; k++)
		if (strcmp(intake_drivers[k]->name, name) == 0)
			return intake_drivers[k];
	return NULL;
}
