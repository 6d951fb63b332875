/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <alsa/asoundlib.h>
#include <cmocka.h>
#include <errno.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>
#include "../drivers/sound_cards.h"
#include "support/intake_probe.h"

/* Sound cards in a folder laid out as the kernel's /sys, and the alsa intake that finds one of them. */

static struct probe probe;
static char root[64], class[128];

/* The PCMs of every card here: 0 plays, 1 and 4 record.  Whether the card tells. */
static bool card_tells;
static snd_ctl_t *const any_card = (snd_ctl_t *)&card_tells;

int snd_ctl_open(snd_ctl_t **out, const char *name, int mode)
{
	(void)mode;
	assert_string_equal(name, "hw:6");
	*out = any_card;
	return card_tells ? 0 : -EACCES;
}

int snd_ctl_close(snd_ctl_t *ctl)
{
	assert_ptr_equal(ctl, any_card);
	return 0;
}

int snd_ctl_pcm_next_device(snd_ctl_t *ctl, int *device)
{
	assert_ptr_equal(ctl, any_card);
	*device = *device < 0 ? 0 : *device == 0 ? 1 : *device == 1 ? 4 : -1;
	return 0;
}

int snd_ctl_pcm_info(snd_ctl_t *ctl, snd_pcm_info_t *info)
{
	assert_ptr_equal(ctl, any_card);
	assert_int_equal(snd_pcm_info_get_stream(info), SND_PCM_STREAM_CAPTURE);
	return snd_pcm_info_get_device(info) == 0 ? -ENOENT : 0;
}

static void run(const char *command)
{
	if (system(command) != 0)
		fail_msg("%s", command);
}

/* A card under `device`, a path below /sys/devices, on `bus`. */
static void plug(int number, const char *id, const char *device, const char *bus)
{
	char command[1024];

	snprintf(command, sizeof(command), "cd '%s' && mkdir -p 'devices/%s/sound/card%d' 'bus/%s' class/sound && "
	         "ln -sfn \"$PWD/bus/%s\" 'devices/%s/subsystem' && cd 'devices/%s/sound/card%d' && ln -sfn ../.. device && "
	         "echo '%s' > id && ln -sfn \"$PWD\" '%s/card%d'", root, device, number, bus, bus, device, device, number, id,
	         class, number);
	run(command);
}

/* One that no device stands behind. */
static void plug_bare(int number, const char *id)
{
	char command[512];

	snprintf(command, sizeof(command), "mkdir -p '%s/card%d' && echo '%s' > '%s/card%d/id'", class, number, id, class, number);
	run(command);
}

static void unplug_all(void)
{
	char command[512];

	snprintf(command, sizeof(command), "rm -rf '%s' && mkdir -p '%s'", root, class);
	run(command);
	sound_cards_folder = class;
}

static void assert_card(const struct sound_card *card, int number, const char *id, const char *path)
{
	assert_int_equal(card->number, number);
	assert_string_equal(card->id, id);
	assert_string_equal(card->path, path);
}

/*
 * Layouts of /sys/devices and the words of /proc/asound/cards ("... at usb-0000:01:00.0-1.2, full speed") as seen on a Raspberry
 * Pi 4 and 3 and a PC: from memory; the rule is usb_make_path() of Linux' include/linux/usb.h.
 */
static void a_card_is_told_by_its_socket(void **state)
{
	static const struct { const char *device, *bus, *path; } layouts[] = {
		{ "platform/scb/fd500000.pcie/pci0000:00/0000:00:00.0/0000:01:00.0/usb1/1-1/1-1.2/1-1.2:1.0", "usb",
			"usb-0000:01:00.0-1.2" },
		{ "platform/soc/3f980000.usb/usb1/1-1/1-1.4/1-1.4.1/1-1.4.1:1.1", "usb", "usb-3f980000.usb-1.4.1" },
		{ "pci0000:00/0000:00:14.0/usb12/12-3/12-3:1.0", "usb", "usb-0000:00:14.0-3" },
		{ "pci0000:00/0000:00:1f.3", "pci", "pci-0000:00:1f.3" },
		{ "platform/soc/soc:sound", "platform", "platform-soc:sound" },
		{ "platform/snd_aloop.0", "platform", "platform-snd_aloop.0" },
	};
	enum { COUNT = sizeof(layouts) / sizeof(*layouts) };
	struct sound_card cards[SOUND_CARDS], found;
	char id[16];

	(void)state;
	unplug_all();
	for (int k = 0; k < COUNT; k++) {
		snprintf(id, sizeof(id), "Card_%d", k);
		plug(2 * k, id, layouts[k].device, layouts[k].bus);
	}
	plug_bare(31, "Bare");
	assert_int_equal(sound_cards_list(cards), COUNT + 1);
	assert_card(&cards[COUNT], 31, "Bare", "");
	probe_reset(&probe);
	for (int k = 0; k < COUNT; k++) {
		snprintf(id, sizeof(id), "Card_%d", k);
		assert_card(&cards[k], 2 * k, id, layouts[k].path);
		assert_int_equal(sound_cards_find(&found, id), 0);
		assert_card(&found, 2 * k, id, layouts[k].path);
		assert_int_equal(sound_cards_find(&found, layouts[k].path), 0);
		assert_int_equal(found.number, 2 * k);
	}
	assert_string_equal(probe.said, "");
}

static void a_card_that_is_not_there_is_answered_with_a_list(void **state)
{
	struct sound_card found;

	(void)state;
	unplug_all();
	probe_reset(&probe);
	assert_int_equal(sound_cards_find(&found, "CODEC"), -ENODEV);
	assert_string_equal(probe.said, "card: no card here has the id or path \"CODEC\"; there are none\n");
	plug(1, "CODEC", "pci0000:00/0000:00:14.0/usb1/1-3/1-3:1.0", "usb");
	plug(0, "PCH", "pci0000:00/0000:00:1f.3", "pci");
	plug_bare(2, "Bare");
	probe_reset(&probe);
	assert_int_equal(sound_cards_find(&found, "codec"), -ENODEV);
	assert_string_equal(probe.said, "card: no card here has the id or path \"codec\"; there are PCH (pci-0000:00:1f.3), "
	                    "CODEC (usb-0000:00:14.0-3), Bare (no path)\n");
}

/* One device with two cards: the socket does not tell them apart. */
static void a_name_that_fits_two_is_refused(void **state)
{
	struct sound_card found;

	(void)state;
	unplug_all();
	plug(1, "CODEC", "pci0000:00/0000:00:14.0/usb1/1-3/1-3:1.0", "usb");
	plug(2, "CODEC_1", "pci0000:00/0000:00:14.0/usb1/1-3/1-3:1.2", "usb");
	probe_reset(&probe);
	assert_int_equal(sound_cards_find(&found, "usb-0000:00:14.0-3"), -EINVAL);
	assert_string_equal(probe.said, "card: \"usb-0000:00:14.0-3\" fits 2 cards; there are CODEC (usb-0000:00:14.0-3), "
	                    "CODEC_1 (usb-0000:00:14.0-3)\n");
	assert_int_equal(sound_cards_find(&found, "CODEC_1"), 0);
	assert_int_equal(found.number, 2);
}

/* The samples of a card's device. */
static void give_samples(int card, int device, unsigned char value)
{
	enum { BYTES = 4000 };
	char name[32];
	unsigned char bytes[BYTES];

	memset(bytes, value, BYTES);
	snprintf(name, sizeof(name), "pcm%dc%dc", card, device);
	probe_file(&probe, name, bytes, BYTES);
}

static void want(const char *card, int device)
{
	probe_reset(&probe);
	probe_text(&probe, "card", card);
	if (device)
		probe_number(&probe, "pcm", device);
	probe_text(&probe, "format", "S16");
	probe_number(&probe, "paced", 0);
}

static void the_intake_finds_it_again_under_another_number(void **state)
{
	(void)state;
	setenv("LIMBWATCH_CARDS", probe.folder, 1);
	give_samples(1, 0, 0x11);
	give_samples(1, 2, 0x12);
	give_samples(5, 0, 0x51);
	unplug_all();
	plug(0, "PCH", "pci0000:00/0000:00:1f.3", "pci");
	plug(1, "CODEC", "pci0000:00/0000:00:14.0/usb1/1-3/1-3:1.0", "usb");
	want("usb-0000:00:14.0-3", 0);
	probe_run(&probe, 500);
	assert_string_equal(probe.intake->name, "CODEC at usb-0000:00:14.0-3, hw:1,0");
	assert_int_equal(probe.bytes[0], 0x11);
	want("CODEC", 2);
	probe_run(&probe, 500);
	assert_string_equal(probe.intake->name, "CODEC at usb-0000:00:14.0-3, hw:1,2");
	assert_int_equal(probe.bytes[0], 0x12);

	unplug_all();
	want("usb-0000:00:14.0-3", 0);
	assert_int_equal(probe_open(&probe), -ENODEV);
	plug(5, "CODEC_1", "pci0000:00/0000:00:14.0/usb2/2-3/2-3:1.0", "usb");
	want("usb-0000:00:14.0-3", 0);
	probe_run(&probe, 500);
	assert_string_equal(probe.intake->name, "CODEC_1 at usb-0000:00:14.0-3, hw:5,0");
	assert_int_equal(probe.bytes[0], 0x51);
	assert_true(probe.driver->comes_back);
}

static void a_pcm_that_does_not_record_is_answered_with_those_that_do(void **state)
{
	(void)state;
	setenv("LIMBWATCH_CARDS", probe.folder, 1);
	unplug_all();
	plug(6, "PCH", "pci0000:00/0000:00:1f.3", "pci");
	card_tells = true;
	want("PCH", 7);
	assert_int_equal(probe_open(&probe), -EINVAL);
	assert_string_equal(probe.said, "pcm: \"PCH at pci-0000:00:1f.3, hw:6,7\" does not record; of its PCMs these do: 1, 4\n");
	/* One that should be there may come yet, and so may one that is not told of. */
	want("PCH", 4);
	assert_int_equal(probe_open(&probe), -ENODEV);
	assert_non_null(strstr(probe.said, "device: \"PCH at pci-0000:00:1f.3, hw:6,4\" cannot be opened: No such file"));
	card_tells = false;
	want("PCH", 7);
	assert_int_equal(probe_open(&probe), -ENODEV);
}

static void card_and_device_exclude_each_other(void **state)
{
	(void)state;
	unplug_all();
	want("CODEC", 0);
	probe_text(&probe, "device", "hw:1,0");
	assert_int_equal(probe_open(&probe), -EINVAL);
	assert_string_equal(probe.said, "card: \"CODEC\" and device = \"hw:1,0\" are both given; one of them says where samples "
	                    "come from\n");
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(a_card_is_told_by_its_socket),
		cmocka_unit_test(a_card_that_is_not_there_is_answered_with_a_list),
		cmocka_unit_test(a_name_that_fits_two_is_refused),
		cmocka_unit_test(the_intake_finds_it_again_under_another_number),
		cmocka_unit_test(a_pcm_that_does_not_record_is_answered_with_those_that_do),
		cmocka_unit_test(card_and_device_exclude_each_other),
	};

	setenv("ALSA_CONFIG_PATH", "tests/data/alsa/cards.conf", 1);
	probe_create(&probe, &intake_alsa);
	snprintf(root, sizeof(root), "%.40s/sys", probe.folder);
	snprintf(class, sizeof(class), "%s/class/sound", root);
	const int failed = cmocka_run_group_tests_name("sound_cards", tests, NULL, NULL);
	probe_destroy(&probe);
	snd_config_update_free_global();
	return failed;
}
