/* SPDX-License-Identifier: GPL-3.0-or-later */
#include "suggest.h"

#include <ctype.h>
#include <limits.h>
#include <string.h>

enum { LONGEST = 63 };          /* no name of ours is longer */

static int letter(const char *text, size_t i)
{
	return tolower((unsigned char)text[i]);
}

static unsigned least(unsigned a, unsigned b)
{
	return a < b ? a : b;
}

unsigned suggest_distance(const char *a, size_t a_length, const char *b, size_t b_length)
{
	unsigned row[3][LONGEST + 1];

	if (a_length > LONGEST || b_length > LONGEST)
		return UINT_MAX;
	for (size_t j = 0; j <= b_length; j++)
		row[0][j] = (unsigned)j;
	for (size_t i = 1; i <= a_length; i++) {
		const unsigned *above = row[(i - 1) % 3], *two_above = row[(i + 1) % 3];
		unsigned *here = row[i % 3];

		here[0] = (unsigned)i;
		for (size_t j = 1; j <= b_length; j++) {
			unsigned exchanged = above[j - 1] + (letter(a, i - 1) != letter(b, j - 1));

			here[j] = least(exchanged, least(above[j], here[j - 1]) + 1);
			if (i > 1 && j > 1 && letter(a, i - 1) == letter(b, j - 2) && letter(a, i - 2) == letter(b, j - 1))
				here[j] = least(here[j], two_above[j - 2] + 1);
		}
	}
	return row[a_length % 3][b_length];
}

struct suggestion suggest_for(const char *word)
{
	/* One edit in three letters still reads as a slip; a name of one or two letters has one. */
	size_t length = strlen(word);
	unsigned limit = length < 3 ? 1 : (unsigned)length / 3;

	return (struct suggestion){ .word = word, .nearest = NULL, .distance = limit + 1 };
}

void suggest_offer(struct suggestion *suggestion, const char *name, size_t length)
{
	size_t word_length = strlen(suggestion->word);
	unsigned distance = suggest_distance(suggestion->word, word_length, name, length);

	/* The end left out, a unit above all ("cutoff" for "cutoff_hz"), is the likeliest slip. */
	if (word_length > 0 && word_length < length && (word_length >= 3 || name[word_length] == '_')
	    && strncasecmp(suggestion->word, name, word_length) == 0)
		distance = least(distance, 1);
	if (distance < suggestion->distance) {
		suggestion->distance = distance;
		suggestion->nearest = name;
	}
}
