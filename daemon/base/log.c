/* SPDX-License-Identifier: GPL-3.0-or-later */
#include "limbwatch/log.h"

#include <errno.h>
#include <stdbool.h>
#include <stdio.h>
#include <string.h>
#include <unistd.h>

/* A pipe keeps writes of up to PIPE_BUF (4096 on Linux) whole, so sentences of several threads do not mix. */
enum { LINE_MAX_BYTES = 4096 };

static const char *log_program = "limbwatch";
static enum log_level log_least = LEVEL_NOTICE;
static void (*log_sink)(void *context, enum log_level level, const char *sentence);
static void *log_sink_context;

static const char *const level_word[] = {
	[LEVEL_ERROR] = "error: ", [LEVEL_WARNING] = "warning: ", [LEVEL_NOTICE] = "", [LEVEL_DETAIL] = "",
};

void log_open(const char *program, enum log_level least)
{
	log_program = program;
	log_least = least;
}

void log_set_sink(void (*sink)(void *context, enum log_level level, const char *sentence), void *context)
{
	log_sink = sink;
	log_sink_context = context;
}

/* Bytes of the well-formed UTF-8 character at `s`, 0 when there is none (The Unicode Standard, Table 3-7). */
static size_t utf8_length(const unsigned char *s)
{
	static const struct { unsigned char first, last, low, high, length; } shape[] = {
		{ 0x00, 0x7f, 0x00, 0x00, 1 }, { 0xc2, 0xdf, 0x80, 0xbf, 2 }, { 0xe0, 0xe0, 0xa0, 0xbf, 3 },
		{ 0xe1, 0xec, 0x80, 0xbf, 3 }, { 0xed, 0xed, 0x80, 0x9f, 3 }, { 0xee, 0xef, 0x80, 0xbf, 3 },
		{ 0xf0, 0xf0, 0x90, 0xbf, 4 }, { 0xf1, 0xf3, 0x80, 0xbf, 4 }, { 0xf4, 0xf4, 0x80, 0x8f, 4 },
	};

	for (size_t k = 0; k < sizeof(shape) / sizeof(shape[0]); k++) {
		if (s[0] < shape[k].first || s[0] > shape[k].last)
			continue;
		if (shape[k].length > 1 && (s[1] < shape[k].low || s[1] > shape[k].high))
			return 0;
		for (size_t i = 2; i < shape[k].length; i++)
			if ((s[i] & 0xc0) != 0x80)
				return 0;
		return shape[k].length;
	}
	return 0;
}

/* A name from outside may hold line ends, terminal commands or no text at all: none of it reaches the log. */
static void clean(char *sentence)
{
	unsigned char *s = (unsigned char *)sentence;

	while (*s) {
		size_t length = utf8_length(s);
		bool control = *s < 0x20 || *s == 0x7f || (*s == 0xc2 && length == 2 && s[1] < 0xa0);

		if (length == 0 || control)
			memset(s, '?', length ? length : 1);
		s += length ? length : 1;
	}
}

static void write_whole(const char *line, size_t n)
{
	while (n > 0) {
		ssize_t written = write(STDERR_FILENO, line, n);

		if (written < 0 && errno == EINTR)
			continue;
		if (written <= 0)
			return;
		line += written;
		n -= (size_t)written;
	}
}

static void __attribute__((format(printf, 2, 0))) say(enum log_level level, const char *format, va_list arguments)
{
	char line[LINE_MAX_BYTES];
	int saved_errno = errno;
	int head, n;

	if (!log_sink && level > log_least)
		return;
	head = snprintf(line, sizeof(line) / 2, "%s: %s", log_program, level_word[level]);
	if (head < 0 || head >= (int)sizeof(line) / 2)
		head = 0;
	n = vsnprintf(line + head, sizeof(line) - (size_t)head - 1, format, arguments);
	if (n < 0)
		n = snprintf(line + head, sizeof(line) - (size_t)head - 1, "%s", format);
	if ((size_t)n >= sizeof(line) - (size_t)head - 1) {     /* cut, and seen to be cut */
		n = (int)sizeof(line) - head - 2;
		memcpy(line + head + n - 3, "...", 3);
	}
	clean(line);
	if (log_sink) {
		log_sink(log_sink_context, level, line + head);
	} else {
		line[head + n] = '\n';
		write_whole(line, (size_t)(head + n + 1));
	}
	errno = saved_errno;
}

#define LOG_FUNCTION(name, level) \
	void name(const char *format, ...) \
	{ \
		va_list arguments; \
		va_start(arguments, format); \
		say(level, format, arguments); \
		va_end(arguments); \
	}

LOG_FUNCTION(log_error, LEVEL_ERROR)
LOG_FUNCTION(log_warning, LEVEL_WARNING)
LOG_FUNCTION(log_notice, LEVEL_NOTICE)
LOG_FUNCTION(log_detail, LEVEL_DETAIL)
