/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef REPORT_H
#define REPORT_H

#include "limbwatch/recorder.h"

/** One contact as one line of JSON without its newline, the caller's to free; NULL: no memory. what: a first member, or NULL. */
char *report_line(const struct config *config, const struct contact *contact, const char *segment, const char *what);

#endif
