/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_BASE_SYNTAX_H
#define LIMBWATCH_BASE_SYNTAX_H

#include <stddef.h>

/**
 * Looks a configuration over before libconfig does, for what that reports poorly or reads wrongly: bytes that are
 * no text, quotes and brackets left open, included files (refused), and whole numbers, which libconfig 1.5 cuts to
 * 32 bits without a word.  They are written anew as 64-bit ones in the copy; lines stay where they are.
 *
 * @param out   the copy to be parsed, the caller's to free
 * @param n     bytes of `text`, which need not end with zero
 * @param name  stands for the file in sentences
 * @return 0; -EINVAL after one sentence in the log; -ENOMEM
 */
int syntax_prepare(char **out, const char *text, size_t n, const char *name);

#endif
