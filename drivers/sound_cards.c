/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <limits.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>
#include "limbwatch/log.h"
#include "sound_cards.h"

const char *sound_cards_folder = "/sys/class/sound";

static void read_line(const char *path, char *out, size_t size)
{
	FILE *stream = fopen(path, "re");

	if (stream && fgets(out, (int)size, stream))
		out[strcspn(out, "\n")] = 0;
	if (stream)
		fclose(stream);
}

static const char *last_part(const char *path)
{
	const char *slash = strrchr(path, '/');

	return slash ? slash + 1 : path;
}

/* "usb1", the root hub, and not "usbmisc". */
static int is_root_hub(const char *part, size_t length)
{
	return length > 3 && !strncmp(part, "usb", 3) && strspn(part + 3, "0123456789") == length - 3;
}

/*
 * ".../0000:01:00.0/usb1/1-1/1-1.2/1-1.2:1.0" is usb-0000:01:00.0-1.2: the number of the bus, too, is in the order of arrival.
 * Source: usb_make_path() in Linux' include/linux/usb.h.
 */
static int usb_path(const char *device, char *out, size_t size)
{
	const char *controller = NULL, *part = device, *ports = strchr(last_part(device), '-');
	size_t controller_length = 0;

	while (*part) {
		const size_t length = strcspn(part, "/");

		if (is_root_hub(part, length) && controller && ports) {
			snprintf(out, size, "usb-%.*s-%.*s", (int)controller_length, controller, (int)strcspn(ports + 1, ":"),
				ports + 1);
			return 0;
		}
		controller = part;
		controller_length = length;
		part += length + (part[length] == '/');
	}
	return -ENOENT;
}

static void find_path(const char *card, struct sound_card *out)
{
	char link[PATH_MAX], device[PATH_MAX], bus[PATH_MAX] = "";

	snprintf(link, sizeof(link), "%s/device", card);
	if (!realpath(link, device))
		return;
	snprintf(link, sizeof(link), "%s/device/subsystem", card);
	if (!realpath(link, bus))
		bus[0] = 0;
	if (!strcmp(last_part(bus), "usb") && usb_path(device, out->path, sizeof(out->path)) == 0)
		return;
	snprintf(out->path, sizeof(out->path), "%.15s%s%.62s", last_part(bus), *bus ? "-" : "", last_part(device));
}

size_t sound_cards_list(struct sound_card cards[SOUND_CARDS])
{
	char card[PATH_MAX / 2], id[PATH_MAX];
	size_t count = 0;

	for (int number = 0; number < SOUND_CARDS; number++) {
		struct sound_card found = { .number = number };

		snprintf(card, sizeof(card), "%s/card%d", sound_cards_folder, number);
		snprintf(id, sizeof(id), "%s/id", card);
		read_line(id, found.id, sizeof(found.id));
		if (!found.id[0])
			continue;
		find_path(card, &found);
		cards[count++] = found;
	}
	return count;
}

void sound_cards_say(char *text, size_t size)
{
	struct sound_card cards[SOUND_CARDS];
	const size_t count = sound_cards_list(cards);
	size_t used = 0;

	snprintf(text, size, "none");
	for (size_t k = 0; k < count && used < size; k++)
		used += (size_t)snprintf(text + used, size - used, "%s%s (%s)", k ? ", " : "", cards[k].id,
			cards[k].path[0] ? cards[k].path : "no path");
}

int sound_cards_find(struct sound_card *out, const char *wanted)
{
	struct sound_card cards[SOUND_CARDS];
	const size_t count = sound_cards_list(cards);
	size_t fits = 0;
	char text[1024];

	for (size_t k = 0; k < count; k++)
		if (!strcmp(cards[k].id, wanted) || !strcmp(cards[k].path, wanted))
			cards[fits++] = cards[k];
	if (fits == 1) {
		*out = cards[0];
		return 0;
	}
	sound_cards_say(text, sizeof(text));
	if (fits) {
		log_error("card: \"%s\" fits %zu cards; there are %s", wanted, fits, text);
		return -EINVAL;
	}
	log_error("card: no card here has the id or path \"%s\"; there are %s", wanted, text);
	return -ENODEV;
}
