/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_BASE_UTF8_H
#define LIMBWATCH_BASE_UTF8_H

#include <stdbool.h>
#include <stddef.h>

/** Bytes of the well-formed UTF-8 character at `s`, 1 for the final zero; 0 when there is none. */
size_t utf8_length(const char *s);

/** A well-formed character at `s` that is no control character (C0, DEL, C1). */
bool utf8_is_plain(const char *s);

/** A whole text of such characters. */
bool utf8_text_is_plain(const char *text);

/** Characters in the first `bytes` bytes of a well-formed text. */
size_t utf8_count(const char *text, size_t bytes);

#endif
