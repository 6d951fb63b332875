/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_LOG_H
#define LIMBWATCH_LOG_H

#include <stdarg.h>
#include <stdbool.h>

/*
 * One clear sentence per event, to stderr: "limbwatchd: error: ...".  The function that knows what went
 * wrong says it, with the value and its range, and returns -errno; its callers do not repeat it.
 * Any thread but the acquisition thread.  A sentence has no final newline.
 */
enum log_level { LEVEL_ERROR, LEVEL_WARNING, LEVEL_NOTICE, LEVEL_DETAIL };

/**
 * Name before each sentence (kept by reference) and the least important level shown; initially LEVEL_NOTICE.  To be called first of
 * all: where standard input, output or error are closed, /dev/null takes their place.
 */
void log_open(const char *program, enum log_level least);

/** Sends every sentence to `sink` instead of stderr, all levels; NULL restores.  For tests. */
void log_set_sink(void (*sink)(void *context, enum log_level level, const char *sentence), void *context);

/**
 * From now on a thread of its own writes to stderr: nobody who says something waits for a terminal or a journal that does not read.
 * What is too much is counted and said: more than thirty sentences of a kind in a minute, or 512 waiting.  @return 0 or -errno
 */
int  log_detach(void);
/** Ends that; what waits is written, for two seconds at most. */
void log_attach(void);

/** While on, this thread's sentences become details: for what is tried again and again and has been said. */
void log_hush(bool on);
/** The last sentence of this thread since log_hush(true), without what stands before it; "" when there was none. */
const char *log_hushed(void);

void log_error(const char *format, ...) __attribute__((format(printf, 1, 2)));
void log_warning(const char *format, ...) __attribute__((format(printf, 1, 2)));
void log_notice(const char *format, ...) __attribute__((format(printf, 1, 2)));
void log_detail(const char *format, ...) __attribute__((format(printf, 1, 2)));

#endif
