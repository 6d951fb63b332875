/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LOG_WRITER_H
#define LOG_WRITER_H

#include <stdbool.h>

/* The thread that writes sentences, so that none of those who say them waits for whoever reads. */

int  log_writer_start(void (*write_text)(const char *text));
/** Writes what is waiting, for two seconds at most. */
void log_writer_end(void);
/** @param format  tells kinds of sentences apart: too many of one are held back, and counted. @return false: no writer runs */
bool log_writer_take(const char *format, const char *text);

#endif
