/* SPDX-License-Identifier: GPL-3.0-or-later */
#include "syntax.h"

#include <ctype.h>
#include <errno.h>
#include <limits.h>
#include <stdbool.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "limbwatch/log.h"

enum {
	DEPTH_MAX = 16,                 /* a configuration needs four */
	GIVEN_MAX = 256,                /* settings of a group: libconfig's look for doubles is quadratic, 32 s for 20000 */
};

struct scan {
	const char *at;                 /* what is looked at; the text ends with zero */
	char *to;                       /* end of the copy so far */
	const char *name;
	int line;
	int depth;
	int given[DEPTH_MAX + 1];       /* settings so far in the open groups; [0]: outside all */
	char before;                    /* first byte of the token before, 0 at the start */
	struct { char bracket; int line; } open[DEPTH_MAX];
};

static void copy(struct scan *scan, size_t n)
{
	for (; n > 0 && *scan->at; n--) {
		scan->line += *scan->at == '\n';
		*scan->to++ = *scan->at++;
	}
}

/* Bytes of the file worth showing in a sentence. */
static int shown(size_t n)
{
	return n < 60 ? (int)n : 60;
}

static int scan_comment(struct scan *scan)
{
	const char *end;
	int line = scan->line;

	if (scan->at[0] == '#' || scan->at[1] == '/') {
		copy(scan, strcspn(scan->at, "\n"));
		return 0;
	}
	end = strstr(scan->at + 2, "*/");
	if (!end) {
		log_error("%s line %d: the comment that begins here with /* has no */", scan->name, line);
		return -EINVAL;
	}
	copy(scan, (size_t)(end + 2 - scan->at));
	return 0;
}

/* A value, or one more piece of it.  libconfig would refuse others too, but loses the memory of such a text. */
static bool text_may_stand(const struct scan *scan)
{
	bool in_list = scan->depth > 0 && scan->open[scan->depth - 1].bracket != '}';

	return (scan->before && strchr("=:([\"", scan->before)) || (scan->before == ',' && in_list);
}

static int scan_text(struct scan *scan)
{
	if (!text_may_stand(scan)) {
		log_error("%s line %d: syntax error: a text stands where no value can, %.*s", scan->name, scan->line,
			  shown(1 + strcspn(scan->at + 1, "\"\r\n") + 1), scan->at);
		return -EINVAL;
	}
	for (copy(scan, 1); *scan->at != '"'; copy(scan, *scan->at == '\\' ? 2 : 1)) {
		if (*scan->at == '\0' || *scan->at == '\n' || (scan->at[0] == '\\' && scan->at[1] == '\n')) {
			log_error("%s line %d: a text has no closing quote on its line", scan->name, scan->line);
			return -EINVAL;
		}
		if (strncmp(scan->at, "\\x00", 4) == 0) {
			log_error("%s line %d: a text holds \\x00, which would end it", scan->name, scan->line);
			return -EINVAL;
		}
	}
	copy(scan, 1);
	return 0;
}

/* A number is copied as it is, unless whole: then as a 64-bit decimal one. */
static int scan_number(struct scan *scan)
{
	size_t sign = *scan->at == '+' || *scan->at == '-';
	bool hex = scan->at[0] == '0' && (scan->at[1] == 'x' || scan->at[1] == 'X');
	size_t digits = strspn(scan->at + sign, hex ? "0123456789abcdefABCDEFxX" : "0123456789");
	const char *end = scan->at + sign + digits;
	char *parsed;
	long long value;

	end += strspn(end, "L");
	if (digits == 0 || isalnum((unsigned char)*end) || *end == '.' || *end == '_') {
		copy(scan, sign + strspn(scan->at + sign, "0123456789.eE"));
		/* The sign of an exponent belongs to it. */
		if ((*scan->at == '-' || *scan->at == '+') && tolower((unsigned char)scan->at[-1]) == 'e')
			copy(scan, 1 + strspn(scan->at + 1, "0123456789"));
		return 0;
	}
	errno = 0;
	value = strtoll(scan->at, &parsed, hex ? 16 : 10);
	if (parsed != scan->at + sign + digits) {       /* "0x", "0xx1": libconfig's to refuse */
		copy(scan, sign + digits);
		return 0;
	}
	if (errno == ERANGE) {
		log_error("%s line %d: the whole number %.*s is outside %lld to %lld", scan->name, scan->line,
			  shown(sign + digits), scan->at, LLONG_MIN, LLONG_MAX);
		return -EINVAL;
	}
	scan->to += sprintf(scan->to, "%lldL", value);
	scan->at = end;
	return 0;
}

static int scan_bracket(struct scan *scan)
{
	static const char opening[] = "({[", closing[] = ")}]";
	const char *opens = strchr(opening, *scan->at);
	const char *closes = strchr(closing, *scan->at);

	if (opens && scan->depth == DEPTH_MAX) {
		log_error("%s line %d: brackets are nested more than %d deep", scan->name, scan->line, DEPTH_MAX);
		return -EINVAL;
	}
	if (opens) {
		scan->open[scan->depth].bracket = closing[opens - opening];
		scan->open[scan->depth++].line = scan->line;
		scan->given[scan->depth] = 0;
	} else if (scan->depth == 0) {
		log_error("%s line %d: %c closes nothing", scan->name, scan->line, *closes);
		return -EINVAL;
	} else if (scan->open[--scan->depth].bracket != *closes) {
		log_error("%s line %d: %c stands where the %c of line %d should be closed with %c", scan->name, scan->line,
			  *closes, opening[strchr(closing, scan->open[scan->depth].bracket) - closing],
			  scan->open[scan->depth].line, scan->open[scan->depth].bracket);
		return -EINVAL;
	}
	copy(scan, 1);
	return 0;
}

static int scan_token(struct scan *scan)
{
	static const char name_part[] = "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789_-*";
	const char *at = scan->at;

	if (*at == '"')
		return scan_text(scan);
	if (strchr("(){}[]", *at))
		return scan_bracket(scan);
	if (strchr("0123456789+-.", *at))
		return scan_number(scan);
	if ((*at == '=' || *at == ':') && ++scan->given[scan->depth] > GIVEN_MAX) {
		log_error("%s line %d: more than %d settings in one group: no group has as many", scan->name, scan->line,
			  GIVEN_MAX);
		return -EINVAL;
	}
	if (strncmp(at, "@include", 8) == 0) {
		log_error("%s line %d: @include is refused: write every setting into this one file", scan->name, scan->line);
		return -EINVAL;
	}
	copy(scan, isalpha((unsigned char)*at) ? strspn(at, name_part) : 1);
	return 0;
}

static int scan_next(struct scan *scan)
{
	char first = *scan->at;
	size_t blank = strspn(scan->at, " \t\r\n\f");
	int ret;

	if (blank > 0) {
		copy(scan, blank);
		return 0;
	}
	if (first == '#' || (first == '/' && (scan->at[1] == '/' || scan->at[1] == '*')))
		return scan_comment(scan);
	ret = scan_token(scan);
	scan->before = first;
	return ret;
}

/* The first byte that no text file holds; -EINVAL after saying so. */
static int find_junk(const char *text, size_t n, const char *name)
{
	int line = 1;

	for (size_t i = 0; i < n; i++) {
		unsigned char byte = (unsigned char)text[i];

		if ((byte < 0x20 && !strchr("\t\n\r\f", byte)) || byte == 0 || byte == 0x7f) {
			log_error("%s line %d: the byte 0x%02x stands there: this is no text file", name, line, byte);
			return -EINVAL;
		}
		line += byte == '\n';
	}
	return 0;
}

int syntax_prepare(char **out, const char *text, size_t n, const char *name)
{
	struct scan scan = { .name = name, .line = 1 };
	char *whole, *result;
	int ret = find_junk(text, n, name);

	if (ret < 0)
		return ret;
	whole = strndup(text, n);
	result = malloc(2 * n + 32);            /* a number grows from "1" to "1L" at worst */
	if (!whole || !result) {
		ret = -ENOMEM;
		goto free_both;
	}
	scan.at = strncmp(whole, "\xef\xbb\xbf", 3) == 0 ? whole + 3 : whole;     /* an editor's byte-order mark */
	scan.to = result;
	while (*scan.at && ret == 0)
		ret = scan_next(&scan);
	if (ret == 0 && scan.depth > 0) {
		scan.depth--;
		log_error("%s line %d: the bracket opened here is never closed with %c", name, scan.open[scan.depth].line,
			  scan.open[scan.depth].bracket);
		ret = -EINVAL;
	}
	*scan.to = '\0';
	if (ret == 0) {
		*out = result;
		result = NULL;
	}
free_both:
	free(result);
	free(whole);
	return ret;
}
