/* SPDX-License-Identifier: GPL-3.0-or-later */
#include "utf8.h"

/* The Unicode Standard, Table 3-7: no overlong forms, no surrogates, nothing beyond U+10FFFF. */
static const struct { unsigned char first, last, low, high, length; } shapes[] = {
	{ 0x00, 0x7f, 0x00, 0x00, 1 }, { 0xc2, 0xdf, 0x80, 0xbf, 2 }, { 0xe0, 0xe0, 0xa0, 0xbf, 3 },
	{ 0xe1, 0xec, 0x80, 0xbf, 3 }, { 0xed, 0xed, 0x80, 0x9f, 3 }, { 0xee, 0xef, 0x80, 0xbf, 3 },
	{ 0xf0, 0xf0, 0x90, 0xbf, 4 }, { 0xf1, 0xf3, 0x80, 0xbf, 4 }, { 0xf4, 0xf4, 0x80, 0x8f, 4 },
};

size_t utf8_length(const char *text)
{
	const unsigned char *s = (const unsigned char *)text;

	for (size_t k = 0; k < sizeof(shapes) / sizeof(shapes[0]); k++) {
		if (s[0] < shapes[k].first || s[0] > shapes[k].last)
			continue;
		if (shapes[k].length > 1 && (s[1] < shapes[k].low || s[1] > shapes[k].high))
			return 0;
		for (size_t i = 2; i < shapes[k].length; i++)
			if ((s[i] & 0xc0) != 0x80)
				return 0;
		return shapes[k].length;
	}
	return 0;
}

bool utf8_is_plain(const char *text)
{
	const unsigned char *s = (const unsigned char *)text;

	if (s[0] < 0x20 || s[0] == 0x7f || (s[0] == 0xc2 && s[1] < 0xa0))
		return false;
	return utf8_length(text) > 0;
}

bool utf8_text_is_plain(const char *text)
{
	for (; *text; text += utf8_length(text))
		if (!utf8_is_plain(text))
			return false;
	return true;
}

size_t utf8_count(const char *text, size_t bytes)
{
	size_t count = 0;

	for (size_t i = 0; i < bytes; i++)
		count += ((unsigned char)text[i] & 0xc0) != 0x80;
	return count;
}
