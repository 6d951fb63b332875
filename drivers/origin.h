/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_ORIGIN_H
#define LIMBWATCH_ORIGIN_H

#include "limbwatch/intake.h"

/**
 * What the configuration says of the time of frame 0.  Main thread.
 *
 * @param start  value of an instant setting; without text the origin becomes TIME_FREE
 * @param sigma  value of its standard deviation, seconds
 * @return 0, or -errno after log_error
 */
int origin_configure(struct intake *intake, const struct setting_value *start, const struct setting_value *sigma);

/** Name of a device or file for messages; of a long one the end is kept, which tells more than the beginning. */
void intake_rename(struct intake *intake, const char *name);

#endif
