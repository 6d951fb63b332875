/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_BASE_CHECK_H
#define LIMBWATCH_BASE_CHECK_H

#include <stdio.h>
#include <libconfig.h>
#include "limbwatch/settings.h"

/* Private to the settings: one row of a table against what stands in the file or in the table itself. */

/** Longest text of the check_ functions, with its final zero; longer ones are cut. */
enum { CHECK_TEXT = 512 };

/**
 * Fills `value` from `node`.
 *
 * @param where  file, line and full name, "limbwatch.conf line 12: keep.pre_trigger_s"
 * @return 0, -EINVAL after one sentence in the log
 */
int check_value(struct setting_value *value, const struct setting *row, config_setting_t *node, const char *where);

/** The value of a row that is not given. */
struct setting_value check_fallback(const struct setting *row);

/** What is allowed, as a clause: "a number, 0 to 600". */
char *check_allowed(char text[CHECK_TEXT], const struct setting *row);

/** The fallback as it would stand in the file; NULL when there is none. */
const char *check_fallback_text(char text[CHECK_TEXT], const struct setting *row);

/** The example as it would stand in the file: a quoted one where a text is wanted. */
const char *check_example_text(char text[CHECK_TEXT], const struct setting *row);

/** Shortest decimal text that reads back as the same number. */
char *check_number_text(char text[CHECK_TEXT], double number);

/** The k-th word of a choice and its length; NULL beyond the last. */
const char *check_choice_word(const struct setting *row, size_t k, size_t *length);

/** Index of a word of a choice, -1 when it is none. */
int check_choice_index(const struct setting *row, const char *word);

#endif
