/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_BASE_SETTINGS_PARTS_H
#define LIMBWATCH_BASE_SETTINGS_PARTS_H

#include <stddef.h>
#include <libconfig.h>
#include "limbwatch/settings.h"

/* Private to the settings: what was read of each group. */

/* One { ... } of a group. */
struct element {
	const struct setting *more;     /* further table, or NULL */
	struct setting_value *values;   /* of the group's table, then of `more` */
	int line;
};

struct part {
	const struct setting_group *group;
	struct element *elements;
	size_t count;
};

/** Rows of a table; 0 of NULL. */
size_t settings_rows(const struct setting *table);

/**
 * Reads every group from the file's tree and says everything wrong in it.
 *
 * @param parts  one for each group, their `group` set and all else zero; whatever is filled stays the caller's to free
 * @param path   stands for the file in sentences
 * @return 0, -EINVAL when something was wrong, -ENOMEM
 */
int settings_read(struct part *parts, size_t count, config_setting_t *root, const char *path,
		  const struct setting_group *groups);

#endif
