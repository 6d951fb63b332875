/* SPDX-License-Identifier: GPL-3.0-or-later */
#include "limbwatch/log.h"

#include <errno.h>
#include <fcntl.h>
#include <stdio.h>
#include <string.h>
#include <unistd.h>

#include "log_writer.h"
#include "utf8.h"

/* A pipe keeps writes of up to PIPE_BUF (4096 on Linux) whole, so sentences of several threads do not mix. */
enum { LINE_MAX_BYTES = 4096 };       /* its newline included */

static const char *log_program = "limbwatch";
static enum log_level log_least = LEVEL_NOTICE;
static void (*log_sink)(void *context, enum log_level level, const char *sentence);
static void *log_sink_context;

static _Thread_local bool hushed;
static _Thread_local char hushed_sentence[512];

static const char *const level_word[] = {
	[LEVEL_ERROR] = "error: ", [LEVEL_WARNING] = "warning: ", [LEVEL_NOTICE] = "", [LEVEL_DETAIL] = "",
};

/* A program started without them would open a recording under the number that sentences are written to. */
static void hold_descriptors(void)
{
	int fd;

	do {
		fd = open("/dev/null", O_RDWR);
	} while (fd >= 0 && fd <= STDERR_FILENO);
	if (fd > STDERR_FILENO)
		close(fd);
}

void log_open(const char *program, enum log_level least)
{
	hold_descriptors();
	log_program = program;
	log_least = least;
}

void log_set_sink(void (*sink)(void *context, enum log_level level, const char *sentence), void *context)
{
	log_sink = sink;
	log_sink_context = context;
}

void log_hush(bool on)
{
	hushed = on;
	if (on)
		*hushed_sentence = 0;
}

const char *log_hushed(void)
{
	return hushed_sentence;
}

/* A name from outside may hold line ends, terminal commands or no text at all: none of it reaches the log. */
static void clean(char *sentence)
{
	while (*sentence) {
		size_t length = utf8_length(sentence);

		if (!utf8_is_plain(sentence))
			memset(sentence, '?', length ? length : 1);
		sentence += length ? length : 1;
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

static void write_text(const char *text)
{
	write_whole(text, strlen(text));
}

int log_detach(void)
{
	return log_writer_start(write_text);
}

void log_attach(void)
{
	log_writer_end();
}

static void __attribute__((format(printf, 2, 0))) say(enum log_level level, const char *format, va_list arguments)
{
	char line[LINE_MAX_BYTES + 1];
	int saved_errno = errno;
	int head, n;

	if (hushed)
		level = LEVEL_DETAIL;
	if (!log_sink && !hushed && level > log_least)
		return;
	head = snprintf(line, LINE_MAX_BYTES / 2, "%s: %s", log_program, level_word[level]);
	if (head < 0 || head >= (int)LINE_MAX_BYTES / 2)
		head = 0;
	n = vsnprintf(line + head, LINE_MAX_BYTES - (size_t)head - 1, format, arguments);
	if (n < 0)
		n = snprintf(line + head, LINE_MAX_BYTES - (size_t)head - 1, "%s", format);
	if ((size_t)n >= LINE_MAX_BYTES - (size_t)head - 1) {     /* cut, and seen to be cut */
		n = (int)LINE_MAX_BYTES - head - 2;
		memcpy(line + head + n - 3, "...", 3);
	}
	clean(line);
	if (hushed)
		snprintf(hushed_sentence, sizeof(hushed_sentence), "%.511s", line + head);
	if (log_sink) {
		log_sink(log_sink_context, level, line + head);
	} else if (level <= log_least) {
		line[head + n] = '\n';
		line[head + n + 1] = 0;
		if (!log_writer_take(format, line))
			write_text(line);
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
