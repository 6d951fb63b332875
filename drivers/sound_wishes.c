/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <stdlib.h>
#include <string.h>
#include "limbwatch/log.h"
#include "sound_wishes.h"

/* The longest part that a sentence repeats. */
enum { SHOWN = 80 };

/* A stretch of the text without the blanks around it. */
struct stretch { const char *at; int length; };

static struct stretch trim(const char *from, const char *to)
{
	while (from < to && *from == ' ')
		from++;
	while (to > from && to[-1] == ' ')
		to--;
	return (struct stretch){ from, (int)(to - from) };
}

static int refuse(struct stretch part, const char *what)
{
	log_error("controls: \"%.*s\" %s", part.length < SHOWN ? part.length : SHOWN, part.at, what);
	return -EINVAL;
}

/* "ADC Volume [1]": takes the number off the name's end.  -1: there is none; -EINVAL: it is no number. */
static int take_index(struct stretch *name)
{
	const char *end = name->at + name->length, *open = end;
	char *after;

	if (name->length == 0 || end[-1] != ']')
		return -1;
	while (open > name->at && *open != '[')
		open--;
	const long index = strtol(open + 1, &after, 10);
	if (*open != '[' || after != end - 1 || after == open + 1 || index < 0 || index > 999)
		return -EINVAL;
	*name = trim(name->at, open);
	return (int)index;
}

static int copy(char *out, size_t size, struct stretch from)
{
	if (from.length == 0 || (size_t)from.length >= size)
		return -EINVAL;
	memcpy(out, from.at, (size_t)from.length);
	out[from.length] = 0;
	return 0;
}

static int parse_one(struct sound_wish *wish, struct stretch part)
{
	const char *end = part.at + part.length, *equals = memchr(part.at, '=', (size_t)part.length);

	if (part.length == 0)
		return refuse(part, "stands where a control is expected: one comma too many");
	if (!equals)
		return refuse(part, "is not of the form NAME = VALUE, such as Mic Capture Volume = 60%");
	struct stretch name = trim(part.at, equals);
	wish->index = take_index(&name);
	if (wish->index < -1)
		return refuse(part, "has no whole number from 0 to 999 in its brackets");
	if (copy(wish->name, sizeof(wish->name), name) < 0)
		return refuse(part, "does not begin with the name of a control, 1 to 43 bytes long");
	if (copy(wish->value, sizeof(wish->value), trim(equals + 1, end)) < 0)
		return refuse(part, "does not end with a value, 1 to 63 bytes long");
	return 0;
}

int sound_wishes_parse(struct sound_wish wishes[SOUND_WISHES], const char *text)
{
	int count = 0;

	if (!text || trim(text, text + strlen(text)).length == 0)
		return 0;
	for (const char *at = text;; at++) {
		const char *end = at + strcspn(at, ",");
		const struct stretch part = trim(at, end);

		if (count == SOUND_WISHES)
			return refuse(part, "is one more than the 32 controls that can be set");
		const int ret = parse_one(&wishes[count], part);
		if (ret < 0)
			return ret;
		for (int k = 0; k < count; k++)
			if (!strcmp(wishes[k].name, wishes[count].name) && wishes[k].index == wishes[count].index)
				return refuse(part, "is given a second time");
		count++;
		at = end;
		if (!*at)
			return count;
	}
}
