/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_BASE_SUGGEST_H
#define LIMBWATCH_BASE_SUGGEST_H

#include <stddef.h>

/* The known name nearest to a word that is none: begin with the word, offer every name, look at `nearest`. */
struct suggestion {
	const char *word;
	const char *nearest;            /* NULL: nothing is near enough to be meant */
	unsigned distance;
};

struct suggestion suggest_for(const char *word);
void suggest_offer(struct suggestion *suggestion, const char *name, size_t length);

/**
 * Edits from a to b: letters put in, left out, exchanged, and neighbours swapped; capitals count as small ones.
 *
 * Source: Damerau (1964), Commun. ACM 7, 171; the restricted form, in which no letter is edited twice.
 */
unsigned suggest_distance(const char *a, size_t a_length, const char *b, size_t b_length);

#endif
