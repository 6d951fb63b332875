/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <stdio.h>
#include <string.h>
#include "limbwatch/log.h"
#include "origin.h"

int origin_configure(struct intake *intake, const struct setting_value *start, const struct setting_value *sigma)
{
	intake->origin.quality = TIME_FREE;
	if (!start->text || !*start->text)
		return 0;
	const int ret = tai_parse_utc(&intake->origin.when, start->text);
	if (ret < 0) {
		log_error("start_utc: \"%s\" is not %s", start->text, ret == -ERANGE ? "within 1972 to 2261" :
			"a UTC instant such as 2031-04-02T01:23:45Z");
		return ret;
	}
	intake->origin.quality = TIME_HOST;
	intake->origin.sigma_s = sigma->number;
	intake->origin.source = "configuration";
	return 0;
}

void intake_rename(struct intake *intake, const char *name)
{
	const size_t length = strlen(name), room = sizeof(intake->name) - 1;

	if (length <= room)
		memcpy(intake->name, name, length + 1);
	else
		snprintf(intake->name, sizeof(intake->name), "...%s", name + length - (room - 3));
}
