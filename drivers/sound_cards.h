/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_SOUND_CARDS_H
#define LIMBWATCH_SOUND_CARDS_H

#include <stddef.h>

/*
 * Which sound card is which.  Its number is given in the order of arrival, so a card pulled out and put back may get
 * another.  Two names last: the id (fifteen characters at most; of two cards of one kind the second gets a number
 * behind it, in the order of arrival again) and the path, which is the socket: "usb-CONTROLLER-PORTS" as the kernel
 * writes it into /proc/asound/cards ("usb-0000:01:00.0-1.2"), else "BUS-DEVICE" ("pci-0000:00:1f.3", "platform-soc:sound").
 */
enum { SOUND_CARDS = 32 };              /* the kernel has no more */

struct sound_card {
	int number;
	char id[16], path[80];          /* path: empty for a card without a device */
};

/** The folder where the kernel tells of its cards; a test sets its own. */
extern const char *sound_cards_folder;

/** @return cards found, by number */
size_t sound_cards_list(struct sound_card cards[SOUND_CARDS]);

/** "CODEC (usb-0000:01:00.0-1.2), Loopback (platform-snd_aloop.0)", for a sentence; "none" when there is none. */
void sound_cards_say(char *text, size_t size);

/**
 * Looks it up now.  Main thread.
 *
 * @param wanted  id or path
 * @return 0; -ENODEV when no card fits, -EINVAL when several do, after a sentence that lists the cards
 */
int sound_cards_find(struct sound_card *out, const char *wanted);

#endif
