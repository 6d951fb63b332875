/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_SETTINGS_H
#define LIMBWATCH_SETTINGS_H

#include <stdbool.h>
#include <stddef.h>
#include <stdio.h>

/*
 * Settings are facts in tables: one row each, which drives parsing, range checks, the commented sample
 * configuration and the manual.  A table ends with a row whose name is NULL.  The unit is in the name.
 */
enum setting_type {
	SETTING_NUMBER,         /* finite double; integers are accepted */
	SETTING_INTEGER,        /* 64 bits; a float that is whole (48e3) is accepted */
	SETTING_BOOLEAN,        /* true or false */
	SETTING_TEXT,           /* UTF-8 without control characters */
	SETTING_CHOICE,         /* one word of `choices`, "immersion|emersion"; the value's integer is its index */
	SETTING_INSTANT,        /* text, UTC in ISO 8601 with Z; checked by tai_parse_utc() */
};

struct setting {
	const char *name;
	enum setting_type type;
	/* Number, integer, boolean.  fallback NAN: none.  min == max: no limits; an infinite one: open to that side.
	 * Text: max > 0 is the largest length in bytes; min > 0, or `required`: not empty. */
	double fallback, min, max;
	const char *text;               /* fallback of text, choice and instant; NULL: none */
	const char *choices;            /* SETTING_CHOICE: words parted by | */
	bool required;
	const char *meaning;            /* one clause, with what an unusual value means */
	const char *example;            /* as it would stand in the file; NULL: the fallback */
	bool shown;                     /* not required, but stands active in the sample with its example */
	const char *was;                /* an earlier name that is still understood, with a warning; or NULL */
};

struct setting_value {
	double number;                  /* of a number or integer; NAN when absent without fallback */
	long long integer;              /* also: 0 or 1 of a boolean, index of a choice (-1: absent without fallback) */
	const char *text;               /* lives as long as the struct settings; NULL when absent without fallback */
	bool given;                     /* false: the fallback stands */
	int line;                       /* where it was given; 0 when not */
};

/* A named part of the file: name = { ... } or, when `list`, name = ( { ... }, { ... } ). */
struct setting_group {
	const char *name;
	const char *meaning;
	bool list;
	/* The group must be there; a list: with at least one element.  A plain group that is not required and left out
	 * stands with its fallbacks, and its required rows are not asked for: settings_line() is 0 then. */
	bool required;
	const struct setting *settings;
	/* The rows that follow `settings` depend on a choice among them (an intake's driver): given the values of
	 * `settings` so far, returns a further table or NULL.  May be NULL.  The values stand behind those of `settings`.
	 * It is asked only when every choice in `settings` is sound; other values that were wrong are fallbacks. */
	const struct setting *(*more)(const struct setting_value *values);
	/* For the sample, the manual and suggestions: further table number k with its heading (driver = "file": ...), NULL
	 * at the end.  May be NULL. */
	const struct setting *(*variant)(size_t k, const char **heading);
};

/** Table of groups ends with a group whose name is NULL. */
struct settings;

/**
 * Reads a configuration (libconfig syntax).  Everything wrong in the file is said through log_error, one
 * sentence each with file, line, setting, value and allowed range; an unknown name comes with the nearest
 * known one as a suggestion, or with the group it belongs to.  A syntax error ends the reading.  Refused as well:
 * @include, more than 1 MiB, 256 settings in a group or 16 brackets inside each other, anything but a regular file.
 *
 * @param out     the caller's to free with settings_free
 * @param groups  must outlive *out
 * @return 0; -EINVAL when the file is wrong; another -errno when it could not be read
 */
int settings_load(struct settings **out, const char *path, const struct setting_group *groups);
/** The same from memory; `name` stands for the file in sentences. */
int settings_parse(struct settings **out, const char *text, const char *name, const struct setting_group *groups);
void settings_free(struct settings *settings);

const char *settings_path(const struct settings *settings);
/** Number of elements of a list group; 1 for a plain group (fallbacks stand where it was left out). */
size_t settings_count(const struct settings *settings, const char *group);
/** Values in the order of the group's table (then of `more`'s); lives as long as `settings`. NULL beyond the count. */
const struct setting_value *settings_values(const struct settings *settings, const char *group, size_t k);
/** Line at which element k of the group begins; 0 when it was left out. */
int settings_line(const struct settings *settings, const char *group, size_t k);

/** Fills `values` with the fallbacks of `table` (NULL: none); for tests and programs without a file.  @return rows */
size_t settings_fallbacks(const struct setting *table, struct setting_value *values);

/**
 * The commented sample configuration, every setting in its group, within 100 columns.  It parses: required ones are
 * filled by examples, all others stand behind # with their fallbacks (or examples).  A group that is not required but
 * has required rows stands behind "# " as a whole.
 */
void settings_write_sample(FILE *out, const struct setting_group *groups);
/** The manual: every setting with unit, fallback, range and meaning, as plain text within 100 columns. */
void settings_write_manual(FILE *out, const struct setting_group *groups);

#endif
