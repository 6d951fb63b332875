/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <glob.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include "health.h"

enum { UNDER_VOLTAGE_OCCURRED = 1 << 16, THROTTLED_OCCURRED = 1 << 18 };

/* @return whether a whole number, decimal or as told by `base`, stands at the beginning of the file */
static bool read_number(const char *path, int base, long *out)
{
	char text[64], *end;
	FILE *in = fopen(path, "re");
	bool read;

	if (!in)
		return false;
	read = fgets(text, sizeof(text), in) != NULL;
	fclose(in);
	if (!read)
		return false;
	*out = strtol(text, &end, base);
	return end != text;
}

/* The largest number in the files of a pattern; NAN: none. */
static double largest(const char *sys, const char *pattern)
{
	char path[512];
	double most = NAN;
	glob_t found;
	long x;

	snprintf(path, sizeof(path), "%s/%s", sys, pattern);
	if (glob(path, 0, NULL, &found) != 0)
		return NAN;
	for (size_t k = 0; k < found.gl_pathc; k++)
		if (read_number(found.gl_pathv[k], 10, &x))
			most = fmax(most, (double)x);           /* fmax passes NAN over */
	globfree(&found);
	return most;
}

void health_read(struct sidecar_health *out, const char *sys)
{
	char path[512];
	long bits;
	double load;

	*out = (struct sidecar_health){
		.temperature_c = largest(sys, "class/thermal/thermal_zone*/temp") / 1000, .load = NAN, .free_bytes = NAN,
		.ring_p999_s = NAN, .trigger_p999_s = NAN,
	};
	if (getloadavg(&load, 1) == 1)
		out->load = load;
	snprintf(path, sizeof(path), "%s/devices/platform/soc/soc:firmware/get_throttled", sys);
	if (read_number(path, 16, &bits)) {
		out->under_voltage = bits & UNDER_VOLTAGE_OCCURRED;
		out->throttled = bits & THROTTLED_OCCURRED;
	}
	/* Other boards: the kernel's own watch over the supply. */
	out->under_voltage |= largest(sys, "class/hwmon/hwmon*/in*_lcrit_alarm") > 0;
}
