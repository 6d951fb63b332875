/* SPDX-License-Identifier: GPL-3.0-or-later */
#include "check.h"

#include <errno.h>
#include <math.h>
#include <stdarg.h>
#include <stdlib.h>
#include <string.h>

#include "limbwatch/log.h"
#include "limbwatch/tai.h"
#include "suggest.h"
#include "utf8.h"

enum { SHOWN_MAX = 60 };        /* of a value, in a sentence */

char *check_number_text(char text[CHECK_TEXT], double number)
{
	if (number == rint(number) && fabs(number) < 1e15) {
		snprintf(text, CHECK_TEXT, "%.0f", number + 0.0);       /* + 0.0: no minus before zero */
		return text;
	}
	for (int digits = 1; digits <= 17; digits++) {
		snprintf(text, CHECK_TEXT, "%.*g", digits, number);
		if (strtod(text, NULL) == number)
			break;
	}
	return text;
}

const char *check_choice_word(const struct setting *row, size_t k, size_t *length)
{
	const char *word = row->choices;

	for (; k > 0; k--) {
		word = strchr(word, '|');
		if (!word)
			return NULL;
		word++;
	}
	*length = strcspn(word, "|");
	return word;
}

int check_choice_index(const struct setting *row, const char *word)
{
	size_t length;
	const char *known;

	for (size_t k = 0; (known = check_choice_word(row, k, &length)); k++)
		if (strlen(word) == length && strncmp(word, known, length) == 0)
			return (int)k;
	return -1;
}

struct setting_value check_fallback(const struct setting *row)
{
	struct setting_value value = { .number = row->fallback };

	switch (row->type) {
	case SETTING_NUMBER:
	case SETTING_INTEGER:
	case SETTING_BOOLEAN:
		value.integer = fabs(row->fallback) < 9e18 ? llrint(row->fallback) : 0;
		break;
	case SETTING_CHOICE:
		value.integer = row->text ? check_choice_index(row, row->text) : -1;
		/* fall through */
	case SETTING_TEXT:
	case SETTING_INSTANT:
		value.number = NAN;
		value.text = row->text;
	}
	return value;
}

static void append(char text[CHECK_TEXT], const char *format, ...) __attribute__((format(printf, 2, 3)));

static void append(char text[CHECK_TEXT], const char *format, ...)
{
	size_t n = strlen(text);
	va_list arguments;

	va_start(arguments, format);
	vsnprintf(text + n, CHECK_TEXT - n, format, arguments);
	va_end(arguments);
}

/* "0 to 600", "at least 0", "at most 5", or nothing; min == max: no limits. */
static void append_range(char text[CHECK_TEXT], const struct setting *row, const char *before)
{
	char low[CHECK_TEXT], high[CHECK_TEXT];

	check_number_text(low, row->min);
	check_number_text(high, row->max);
	if (row->min == row->max || (isinf(row->min) && isinf(row->max)))
		return;
	if (isinf(row->max))
		append(text, "%sat least %s", before, low);
	else if (isinf(row->min))
		append(text, "%sat most %s", before, high);
	else
		append(text, "%s%s to %s", before, low, high);
}

char *check_allowed(char text[CHECK_TEXT], const struct setting *row)
{
	size_t length;
	const char *word;

	text[0] = '\0';
	switch (row->type) {
	case SETTING_NUMBER:
		append(text, "a number");
		append_range(text, row, ", ");
		break;
	case SETTING_INTEGER:
		append(text, "a whole number");
		append_range(text, row, ", ");
		break;
	case SETTING_BOOLEAN:
		append(text, "true or false");
		break;
	case SETTING_TEXT:
		append(text, "a text in quotes");
		if (row->max > 0)
			append(text, ", at most %.0f bytes", row->max);
		if (row->required || row->min > 0)
			append(text, ", not empty");
		break;
	case SETTING_CHOICE:
		for (size_t k = 0; (word = check_choice_word(row, k, &length)); k++)
			append(text, "%s\"%.*s\"", k ? ", " : "one of ", (int)length, word);
		break;
	case SETTING_INSTANT:
		append(text, "an instant of UTC, \"2031-04-02T01:23:45.5Z\"");
		break;
	}
	return text;
}

static char *quote(char text[CHECK_TEXT], const char *content)
{
	text[0] = '\0';
	append(text, "\"");
	for (; *content; content++)
		append(text, "%s%c", *content == '"' || *content == '\\' ? "\\" : "", *content);
	append(text, "\"");
	return text;
}

const char *check_fallback_text(char text[CHECK_TEXT], const struct setting *row)
{
	switch (row->type) {
	case SETTING_BOOLEAN:
		return row->fallback != 0 ? "true" : "false";
	case SETTING_NUMBER:
	case SETTING_INTEGER:
		return isfinite(row->fallback) ? check_number_text(text, row->fallback) : NULL;
	default:
		return row->text ? quote(text, row->text) : NULL;
	}
}

const char *check_example_text(char text[CHECK_TEXT], const struct setting *row)
{
	bool quoted = row->type == SETTING_TEXT || row->type == SETTING_CHOICE || row->type == SETTING_INSTANT;
	const char *fallback;

	if (row->example)
		return quoted && row->example[0] != '"' ? quote(text, row->example) : row->example;
	fallback = check_fallback_text(text, row);
	return fallback ? fallback : quoted ? "\"\"" : "0";
}

/* The value as the file has it, short enough for a sentence. */
static char *show(char text[CHECK_TEXT], config_setting_t *node)
{
	const char *content;

	switch (config_setting_type(node)) {
	case CONFIG_TYPE_INT:
		snprintf(text, CHECK_TEXT, "%d", config_setting_get_int(node));
		break;
	case CONFIG_TYPE_INT64:
		snprintf(text, CHECK_TEXT, "%lld", config_setting_get_int64(node));
		break;
	case CONFIG_TYPE_FLOAT:
		check_number_text(text, config_setting_get_float(node));
		break;
	case CONFIG_TYPE_BOOL:
		snprintf(text, CHECK_TEXT, "%s", config_setting_get_bool(node) ? "true" : "false");
		break;
	case CONFIG_TYPE_STRING:
		content = config_setting_get_string(node);
		snprintf(text, CHECK_TEXT, "\"%.*s%s\"", SHOWN_MAX, content, strlen(content) > SHOWN_MAX ? "..." : "");
		break;
	case CONFIG_TYPE_GROUP:
		snprintf(text, CHECK_TEXT, "a group { }");
		break;
	case CONFIG_TYPE_ARRAY:
		snprintf(text, CHECK_TEXT, "an array [ ]");
		break;
	default:
		snprintf(text, CHECK_TEXT, "a list ( )");
	}
	return text;
}

static int refuse(const struct setting *row, config_setting_t *node, const char *where, const char *hint)
{
	char value[CHECK_TEXT], allowed[CHECK_TEXT];

	log_error("%s is %s, but must be %s%s (%s)", where, show(value, node), check_allowed(allowed, row), hint,
		  row->meaning);
	return -EINVAL;
}

/* True and the number when the node holds one. */
static bool take_number(config_setting_t *node, double *number)
{
	switch (config_setting_type(node)) {
	case CONFIG_TYPE_INT:
		*number = config_setting_get_int(node);
		return true;
	case CONFIG_TYPE_INT64:
		*number = (double)config_setting_get_int64(node);
		return true;
	case CONFIG_TYPE_FLOAT:
		*number = config_setting_get_float(node);
		return true;
	}
	return false;
}

/* Whole numbers are compared as such: beyond 2^53 a double no longer tells neighbours apart. */
static bool is_outside(const struct setting *row, config_setting_t *node, double number)
{
	long long integer;

	if (row->min == row->max)
		return false;
	if (config_setting_type(node) == CONFIG_TYPE_INT64 && fabs(number) >= 0x1p53) {
		integer = config_setting_get_int64(node);
		return (fabs(row->min) < 0x1p63 && integer < (long long)ceil(row->min))
			|| (fabs(row->max) < 0x1p63 && integer > (long long)floor(row->max))
			|| number < row->min || number > row->max;
	}
	return number < row->min || number > row->max;
}

static int check_number(struct setting_value *value, const struct setting *row, config_setting_t *node,
			const char *where)
{
	char shown[CHECK_TEXT], range[CHECK_TEXT] = "";
	bool whole = row->type == SETTING_INTEGER;

	if (!take_number(node, &value->number) || !isfinite(value->number))
		return refuse(row, node, where, "");
	/* 48e3 is whole too; beyond 2^53 a double no longer says which whole number. */
	if (whole && (value->number != rint(value->number)
		      || (config_setting_type(node) == CONFIG_TYPE_FLOAT && fabs(value->number) > 0x1p53)))
		return refuse(row, node, where, "");
	if (is_outside(row, node, value->number)) {
		append_range(range, row, "");
		log_error("%s is %s, %s %s (%s)", where, show(shown, node),
			  isinf(row->min) || isinf(row->max) ? "but must be" : "outside", range, row->meaning);
		return -EINVAL;
	}
	if (config_setting_type(node) == CONFIG_TYPE_FLOAT)
		value->integer = fabs(value->number) < 9e18 ? llrint(value->number) : 0;
	else
		value->integer = config_setting_type(node) == CONFIG_TYPE_INT ? config_setting_get_int(node)
									      : config_setting_get_int64(node);
	return 0;
}

static int check_choice(struct setting_value *value, const struct setting *row, config_setting_t *node,
			const char *where)
{
	struct suggestion suggestion = suggest_for(value->text);
	char hint[CHECK_TEXT] = "";
	size_t length;
	const char *word;

	value->integer = check_choice_index(row, value->text);
	if (value->integer >= 0)
		return 0;
	for (size_t k = 0; (word = check_choice_word(row, k, &length)); k++)
		suggest_offer(&suggestion, word, length);
	if (suggestion.nearest)
		snprintf(hint, sizeof(hint), "; did you mean \"%.*s\"?", (int)strcspn(suggestion.nearest, "|"),
			 suggestion.nearest);
	return refuse(row, node, where, hint);
}

static int check_instant(const struct setting *row, config_setting_t *node, const char *text, const char *where)
{
	struct tai when;
	int ret = tai_parse_utc(&when, text);

	if (ret == -ERANGE)
		return refuse(row, node, where, ", in the years 1972 to 2261");
	if (ret < 0)
		return refuse(row, node, where, " (Z: UTC, no local time)");
	return 0;
}

static int check_text(struct setting_value *value, const struct setting *row, config_setting_t *node,
		      const char *where)
{
	size_t length;

	if (config_setting_type(node) != CONFIG_TYPE_STRING)
		return refuse(row, node, where, "");
	value->text = config_setting_get_string(node);
	if (row->type == SETTING_CHOICE)
		return check_choice(value, row, node, where);
	if (row->type == SETTING_INSTANT)
		return check_instant(row, node, value->text, where);
	length = strlen(value->text);
	if ((length == 0 && (row->required || row->min > 0)) || (row->max > 0 && length > row->max))
		return refuse(row, node, where, "");
	if (!utf8_text_is_plain(value->text))
		return refuse(row, node, where, ", in UTF-8 without control characters");
	return 0;
}

int check_value(struct setting_value *value, const struct setting *row, config_setting_t *node, const char *where)
{
	*value = check_fallback(row);
	value->given = true;
	value->line = (int)config_setting_source_line(node);
	switch (row->type) {
	case SETTING_NUMBER:
	case SETTING_INTEGER:
		return check_number(value, row, node, where);
	case SETTING_BOOLEAN:
		if (config_setting_type(node) != CONFIG_TYPE_BOOL)
			return refuse(row, node, where, "");
		value->integer = config_setting_get_bool(node);
		value->number = (double)value->integer;
		return 0;
	default:
		return check_text(value, row, node, where);
	}
}
