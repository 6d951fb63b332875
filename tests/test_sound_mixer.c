/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <alsa/asoundlib.h>
#include <alsa/control_external.h>
#include <cmocka.h>
#include <errno.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include "../drivers/sound_mixer.h"
#include "support/intake_probe.h"

/*
 * A sound card's mixer by alsa-lib's own kit for control plug-ins: all calls but the opening of card 3 go through
 * alsa-lib to the callbacks below.
 */
struct element {
	const char *name;
	unsigned index;
	snd_ctl_elem_iface_t where;
	int type;
	unsigned access, count;         /* access 0: read and write */
	long min, max, value[8];
	const char *items[8];
	enum { OBEYS, STICKS, FAILS, ROUNDS, NOT_READ } temper;
};

static struct element card[64];
static unsigned elements, opened;
static int open_result;
static struct probe probe;
static struct intake intake;
static unsigned int decibels[4] = { SND_CTL_TLVT_DB_SCALE, 8, (unsigned)-1200, 50 };    /* -12 dB, then 0.5 dB a step */

static int elem_count(snd_ctl_ext_t *ext)
{
	(void)ext;
	return (int)elements;
}

static int elem_list(snd_ctl_ext_t *ext, unsigned offset, snd_ctl_elem_id_t *id)
{
	(void)ext;
	snd_ctl_elem_id_set_interface(id, card[offset].where);
	snd_ctl_elem_id_set_name(id, card[offset].name);
	snd_ctl_elem_id_set_index(id, card[offset].index);
	return 0;
}

static snd_ctl_ext_key_t find_elem(snd_ctl_ext_t *ext, const snd_ctl_elem_id_t *id)
{
	const unsigned number = snd_ctl_elem_id_get_numid(id);

	(void)ext;
	for (unsigned k = 0; k < elements; k++)
		if (number ? number == k + 1 : !strcmp(card[k].name, snd_ctl_elem_id_get_name(id)) &&
		    card[k].index == snd_ctl_elem_id_get_index(id) && card[k].where == snd_ctl_elem_id_get_interface(id))
			return k;
	return SND_CTL_EXT_KEY_NOT_FOUND;
}

static int get_attribute(snd_ctl_ext_t *ext, snd_ctl_ext_key_t key, int *type, unsigned *access, unsigned *count)
{
	(void)ext;
	*type = card[key].type;
	*access = card[key].access ? card[key].access : SND_CTL_EXT_ACCESS_READWRITE;
	*count = card[key].count;
	return 0;
}

static int get_integer_info(snd_ctl_ext_t *ext, snd_ctl_ext_key_t key, long *min, long *max, long *step)
{
	(void)ext;
	*min = card[key].min;
	*max = card[key].max;
	*step = 1;
	return 0;
}

static int get_integer64_info(snd_ctl_ext_t *ext, snd_ctl_ext_key_t key, int64_t *min, int64_t *max, int64_t *step)
{
	(void)ext;
	*min = card[key].min;
	*max = card[key].max;
	*step = 1;
	return 0;
}

static int get_enumerated_info(snd_ctl_ext_t *ext, snd_ctl_ext_key_t key, unsigned *items)
{
	(void)ext;
	for (*items = 0; card[key].items[*items];)
		++*items;
	return 0;
}

static int get_enumerated_name(snd_ctl_ext_t *ext, snd_ctl_ext_key_t key, unsigned item, char *name, size_t size)
{
	(void)ext;
	snprintf(name, size, "%s", card[key].items[item]);
	return 0;
}

static int give(snd_ctl_ext_key_t key, unsigned k, long *out)
{
	*out = card[key].value[k];
	return card[key].temper == NOT_READ ? -EIO : 0;
}

static int take(snd_ctl_ext_key_t key, unsigned k, long value)
{
	if (card[key].temper == FAILS)
		return -EIO;
	if (card[key].temper == ROUNDS)
		value = value / 4 * 4;
	if (card[key].temper != STICKS)
		card[key].value[k] = value;
	return 1;
}

static int read_integer(snd_ctl_ext_t *ext, snd_ctl_ext_key_t key, long *value)
{
	int ret = 0;

	(void)ext;
	for (unsigned k = 0; k < card[key].count && ret == 0; k++)
		ret = give(key, k, &value[k]);
	return ret;
}

static int write_integer(snd_ctl_ext_t *ext, snd_ctl_ext_key_t key, long *value)
{
	int ret = 0;

	(void)ext;
	for (unsigned k = 0; k < card[key].count && ret >= 0; k++)
		ret = take(key, k, value[k]);
	return ret;
}

static int read_integer64(snd_ctl_ext_t *ext, snd_ctl_ext_key_t key, int64_t *value)
{
	(void)ext;
	value[0] = card[key].value[0];
	return 0;
}

static int write_integer64(snd_ctl_ext_t *ext, snd_ctl_ext_key_t key, int64_t *value)
{
	(void)ext;
	return take(key, 0, (long)value[0]);
}

static int read_enumerated(snd_ctl_ext_t *ext, snd_ctl_ext_key_t key, unsigned *items)
{
	(void)ext;
	for (unsigned k = 0; k < card[key].count; k++)
		items[k] = (unsigned)card[key].value[k];
	return 0;
}

static int write_enumerated(snd_ctl_ext_t *ext, snd_ctl_ext_key_t key, unsigned *items)
{
	(void)ext;
	return take(key, 0, (long)items[0]);
}

static void shut(snd_ctl_ext_t *ext)
{
	opened--;
	free(ext);
}

int snd_ctl_open(snd_ctl_t **out, const char *name, int mode)
{
	static const snd_ctl_ext_callback_t callbacks = {
		.close = shut, .elem_count = elem_count, .elem_list = elem_list, .find_elem = find_elem,
		.get_attribute = get_attribute, .get_integer_info = get_integer_info, .get_integer64_info = get_integer64_info,
		.get_enumerated_info = get_enumerated_info, .get_enumerated_name = get_enumerated_name,
		.read_integer = read_integer, .read_integer64 = read_integer64, .read_enumerated = read_enumerated,
		.write_integer = write_integer, .write_integer64 = write_integer64, .write_enumerated = write_enumerated,
	};
	snd_ctl_ext_t *ext;

	assert_string_equal(name, "hw:3");
	if (open_result < 0)
		return open_result;
	ext = calloc(1, sizeof(*ext));
	assert_non_null(ext);
	ext->version = SND_CTL_EXT_VERSION;
	ext->poll_fd = -1;
	ext->callback = &callbacks;
	ext->tlv.p = decibels;
	assert_int_equal(snd_ctl_ext_create(ext, name, mode), 0);
	opened++;
	*out = ext->handle;
	return 0;
}

int snd_pcm_info_get_card(const snd_pcm_info_t *info)
{
	(void)info;
	return 3;
}

/* ------------------------------------------------------------------ the card */

static struct element *add(struct element e)
{
	e.where = e.where ? e.where : SND_CTL_ELEM_IFACE_MIXER;
	e.count = e.count ? e.count : 1;
	card[elements] = e;
	return &card[elements++];
}

enum { VOLUME, SWITCH, SOURCE, PLAYBACK, FIRST_ADC, SECOND_ADC };

/* As a USB card and a codec have them; the names are those of Linux' sound/usb/mixer.c and of ALSA's ControlNames.rst. */
static void build_card(void)
{
	memset(card, 0, sizeof(card));
	elements = 0;
	open_result = 0;
	add((struct element){ .name = "Mic Capture Volume", .type = SND_CTL_ELEM_TYPE_INTEGER, .count = 2, .max = 40,
		.value = { 8, 9 }, .access = SND_CTL_EXT_ACCESS_READWRITE | SND_CTL_EXT_ACCESS_TLV_READ });
	add((struct element){ .name = "Mic Capture Switch", .type = SND_CTL_ELEM_TYPE_BOOLEAN, .count = 2 });
	add((struct element){ .name = "Input Source", .type = SND_CTL_ELEM_TYPE_ENUMERATED,
		.items = { "Mic", "Line", "Front Mic/Line" } });
	add((struct element){ .name = "Speaker Playback Volume", .type = SND_CTL_ELEM_TYPE_INTEGER, .max = 37, .value = { 12 } });
	add((struct element){ .name = "ADC Volume", .type = SND_CTL_ELEM_TYPE_INTEGER, .min = -12, .max = 12 });
	add((struct element){ .name = "ADC Volume", .index = 1, .type = SND_CTL_ELEM_TYPE_INTEGER, .min = -12, .max = 12 });
	add((struct element){ .name = "PCM Capture Channel Map", .where = SND_CTL_ELEM_IFACE_PCM,
		.type = SND_CTL_ELEM_TYPE_INTEGER, .max = 36 });
	add((struct element){ .name = "Sleeping Capture Volume", .type = SND_CTL_ELEM_TYPE_INTEGER, .max = 3,
		.access = SND_CTL_EXT_ACCESS_READWRITE | SND_CTL_EXT_ACCESS_INACTIVE });
}

static int apply_on(int number, const char *controls, enum automatic_gain gain)
{
	struct sound_wish wishes[SOUND_WISHES];
	int count;

	probe_reset(&probe);
	intake = (struct intake){ .name = "CODEC" };
	count = sound_wishes_parse(wishes, controls);
	if (count < 0)
		return count;
	const int ret = sound_mixer_apply(&intake, number, wishes, count, gain);
	assert_int_equal(opened, 0);
	return ret;
}

static int apply(const char *controls)
{
	return apply_on(3, controls, AUTOMATIC_GAIN_SWITCH_OFF);
}

/* What was recorded of a control, or NULL. */
static const char *recorded(const char *name)
{
	for (size_t k = 0; k < intake.controls; k++)
		if (!strcmp(intake.control[k].name, name))
			return intake.control[k].value;
	return NULL;
}

/* ------------------------------------------------------------------ wishes */

static void wishes_are_granted_and_recorded(void **state)
{
	(void)state;
	build_card();
	assert_int_equal(apply(" Mic Capture Volume=60% ,Mic Capture Switch = on,Input Source=Line, ADC Volume [1]=-7"), 0);
	assert_string_equal(probe.said, "");
	assert_true(card[VOLUME].value[0] == 24 && card[VOLUME].value[1] == 24);
	assert_true(card[SWITCH].value[0] == 1 && card[SWITCH].value[1] == 1);
	assert_true(card[SOURCE].value[0] == 1 && card[FIRST_ADC].value[0] == 0 && card[SECOND_ADC].value[0] == -7);
	/* In the order of the configuration's; playback, PCM's own and sleeping ones are not recorded. */
	assert_int_equal(intake.controls, 5);
	assert_string_equal(intake.control[0].name, "Mic Capture Volume");
	assert_string_equal(recorded("Mic Capture Volume"), "24 of 0 to 40, 0.00 dB");
	assert_string_equal(recorded("Mic Capture Switch"), "on");
	assert_string_equal(recorded("Input Source"), "Line");
	assert_string_equal(recorded("ADC Volume [0]"), "0 of -12 to 12");
	assert_string_equal(recorded("ADC Volume [1]"), "-7 of -12 to 12");
}

static void channels_may_differ(void **state)
{
	(void)state;
	build_card();
	assert_int_equal(apply("Mic Capture Volume = 25%/7, Mic Capture Switch = off/on, Input Source = Front Mic/Line"), 0);
	assert_true(card[VOLUME].value[0] == 10 && card[VOLUME].value[1] == 7);
	assert_true(card[SWITCH].value[0] == 0 && card[SWITCH].value[1] == 1 && card[SOURCE].value[0] == 2);
	assert_string_equal(recorded("Mic Capture Volume"), "10/7 of 0 to 40");
	assert_string_equal(recorded("Mic Capture Switch"), "off/on");
	assert_string_equal(recorded("Input Source"), "Front Mic/Line");
}

static void a_percentage_is_of_the_range(void **state)
{
	static const struct { const char *value; long result; } cases[] = {
		{ "0%", -12 }, { "100%", 12 }, { "50%", 0 }, { "2.1%", -11 }, { "2%", -12 }, { "33.4%", -4 },
	};

	(void)state;
	for (size_t k = 0; k < sizeof(cases) / sizeof(*cases); k++) {
		char controls[64];

		build_card();
		snprintf(controls, sizeof(controls), "ADC Volume [0] = %s", cases[k].value);
		assert_int_equal(apply(controls), 0);
		assert_int_equal(card[FIRST_ADC].value[0], cases[k].result);
	}
}

static void the_rest_is_recorded_without_a_wish(void **state)
{
	(void)state;
	build_card();
	add((struct element){ .name = "Mic Boost", .type = SND_CTL_ELEM_TYPE_BOOLEAN, .value = { 1 } });
	add((struct element){ .name = "Counter Gain", .type = SND_CTL_ELEM_TYPE_INTEGER64, .max = 9, .value = { 4 } });
	add((struct element){ .name = "ADC Dead", .type = SND_CTL_ELEM_TYPE_INTEGER, .max = 9, .temper = NOT_READ });
	assert_int_equal(apply(NULL), 0);
	assert_string_equal(probe.said, "");
	assert_string_equal(recorded("Mic Boost"), "on");
	assert_string_equal(recorded("Counter Gain"), "4 of 0 to 9");
	assert_string_equal(recorded("Mic Capture Volume"), "8/9 of 0 to 40");
	assert_null(recorded("ADC Dead"));
	assert_null(recorded("Speaker Playback Volume"));
	assert_int_equal(apply("Counter Gain = 7, Speaker Playback Volume = 0"), 0);
	assert_int_equal(card[elements - 2].value[0], 7);
	assert_string_equal(recorded("Speaker Playback Volume"), "0 of 0 to 37");       /* asked for, so it matters */
}

static void what_concerns_recording_goes_first_when_there_are_too_many(void **state)
{
	static char names[50][32];

	(void)state;
	build_card();
	for (int k = 0; k < 50; k++) {
		snprintf(names[k], sizeof(names[k]), k < 40 ? "Mystery %d" : "Mic %d Capture Volume", k);
		add((struct element){ .name = names[k], .type = SND_CTL_ELEM_TYPE_INTEGER, .max = 9 });
	}
	assert_int_equal(apply("Mystery 39 = 3"), 0);
	assert_int_equal(intake.controls, INTAKE_CONTROLS);
	assert_string_equal(intake.control[0].name, "Mystery 39");
	for (int k = 40; k < 50; k++)
		assert_non_null(recorded(names[k]));
	assert_non_null(recorded("Mystery 0"));
	assert_null(recorded("Mystery 38"));
}

static void refuse(const char *controls, int error, const char *sentence)
{
	if (apply(controls) != error || strcmp(probe.said, sentence) != 0)
		fail_msg("%s: \"%s\"", controls, probe.said);
	assert_int_equal(intake.controls, 0);
}

#define ALL "Mic Capture Volume, Mic Capture Switch, Input Source, Speaker Playback Volume, ADC Volume [0], ADC Volume [1]"

static void what_does_not_fit_the_card_is_said(void **state)
{
	(void)state;
	build_card();
	refuse("Mic Capture = 3", -EINVAL, "controls: \"CODEC\" has no control \"Mic Capture\"; it has " ALL "\n");
	refuse("PCM Capture Channel Map = 3", -EINVAL, "controls: \"CODEC\" has no control \"PCM Capture Channel Map\"; it has "
	       ALL "\n");
	refuse("ADC Volume [2] = 3", -EINVAL, "controls: \"CODEC\" has no control \"ADC Volume [2]\"; it has " ALL "\n");
	refuse("ADC Volume = 3", -EINVAL, "controls: \"CODEC\" has several controls \"ADC Volume\"; say which, as in \"ADC Volume "
	       "[1]\"\n");
	refuse("Mic Capture Volume = 41", -EINVAL, "controls: \"Mic Capture Volume\" of \"CODEC\" is 0 to 40 or 0% to 100%, not "
	       "\"41\"\n");
	refuse("Mic Capture Switch = yes", -EINVAL, "controls: \"Mic Capture Switch\" of \"CODEC\" is on or off, not \"yes\"\n");
	refuse("Input Source = line", -EINVAL, "controls: \"Input Source\" of \"CODEC\" is one of Mic, Line, Front Mic/Line, not "
	       "\"line\"\n");
	refuse("Mic Capture Volume = 3/4/5", -EINVAL, "controls: \"Mic Capture Volume\" of \"CODEC\" is 0 to 40 or 0% to 100%, not "
	       "\"3/4/5\"; one value for all channels, or one for each with / between\n");
	card[VOLUME].access = SND_CTL_EXT_ACCESS_READ;
	refuse("Mic Capture Volume = 4", -EINVAL, "controls: \"Mic Capture Volume\" of \"CODEC\" can be read only\n");
	card[SWITCH].temper = FAILS;
	refuse("Mic Capture Switch = on", -EIO, "controls: \"Mic Capture Switch\" of \"CODEC\" does not take on: Input/output "
	       "error\n");
	elements = 0;
	refuse("Mic = 3", -EINVAL, "controls: \"CODEC\" has no control \"Mic\"; it has none\n");
}

static void a_value_of_the_wrong_kind_is_refused(void **state)
{
	static const char *const wrong[] = {
		"-1", "-1%", "100.5%", "%", "60 %%", "4x", "x4", "4.5", "nan%", "inf", "1e9999%", "99999999999999999999", "on", "/", "4/",
		"/4", "4//4", "0x10", "+3",
	};

	(void)state;
	for (size_t k = 0; k < sizeof(wrong) / sizeof(*wrong); k++) {
		char controls[96];

		build_card();
		snprintf(controls, sizeof(controls), "Mic Capture Volume = %s", wrong[k]);
		if (apply(controls) != -EINVAL || !strstr(probe.said, "is 0 to 40 or 0% to 100%, not"))
			fail_msg("%s: \"%s\"", wrong[k], probe.said);
		assert_true(card[VOLUME].value[0] == 8 && card[VOLUME].value[1] == 9);
	}
}

static void a_value_that_the_card_bends_is_said(void **state)
{
	(void)state;
	build_card();
	card[VOLUME].temper = ROUNDS;
	assert_int_equal(apply("Mic Capture Volume = 23"), 0);
	assert_string_equal(probe.said, "controls: \"Mic Capture Volume\" of \"CODEC\" was set to 23 and stands at 20 of 0 to 40, "
	                    "-2.00 dB\n");
	assert_string_equal(recorded("Mic Capture Volume"), "20 of 0 to 40, -2.00 dB");
}

static void a_setting_that_cannot_be_read_is_said(void **state)
{
	static const struct { const char *controls, *sentence; } cases[] = {
		{ "Line", "controls: \"Line\" is not of the form NAME = VALUE, such as Mic Capture Volume = 60%\n" },
		{ "A = 1,, B = 2", "controls: \"\" stands where a control is expected: one comma too many\n" },
		{ "A = 1,", "controls: \"\" stands where a control is expected: one comma too many\n" },
		{ "= 1", "controls: \"= 1\" does not begin with the name of a control, 1 to 43 bytes long\n" },
		{ "[3] = 1", "controls: \"[3] = 1\" does not begin with the name of a control, 1 to 43 bytes long\n" },
		{ "A name of forty-four bytes, which is too many = 1", "controls: \"A name of forty-four bytes\" is not of the form NAME "
			"= VALUE, such as Mic Capture Volume = 60%\n" },
		{ "A name of forty-four bytes and which is to be = 1", "controls: \"A name of forty-four bytes and which is to be = 1\" "
			"does not begin with the name of a control, 1 to 43 bytes long\n" },
		{ "A =", "controls: \"A =\" does not end with a value, 1 to 63 bytes long\n" },
		{ "A [x] = 1", "controls: \"A [x] = 1\" has no whole number from 0 to 999 in its brackets\n" },
		{ "A [] = 1", "controls: \"A [] = 1\" has no whole number from 0 to 999 in its brackets\n" },
		{ "A 1] = 1", "controls: \"A 1] = 1\" has no whole number from 0 to 999 in its brackets\n" },
		{ "A [1000] = 1", "controls: \"A [1000] = 1\" has no whole number from 0 to 999 in its brackets\n" },
		{ "A = 1, B = 2, A = 1", "controls: \"A = 1\" is given a second time\n" },
	};
	char many[512] = "";

	(void)state;
	build_card();
	for (size_t k = 0; k < sizeof(cases) / sizeof(*cases); k++)
		refuse(cases[k].controls, -EINVAL, cases[k].sentence);
	for (int k = 0; k <= SOUND_WISHES; k++)
		snprintf(many + strlen(many), sizeof(many) - strlen(many), "%sC%d = 1", k ? ", " : "", k);
	refuse(many, -EINVAL, "controls: \"C32 = 1\" is one more than the 32 controls that can be set\n");
}

static void a_pcm_without_a_card_has_no_controls(void **state)
{
	(void)state;
	build_card();
	assert_int_equal(apply_on(-1, "", AUTOMATIC_GAIN_REFUSE), 0);
	assert_int_equal(intake.controls, 0);
	assert_int_equal(apply_on(-1, "Mic Capture Volume = 3", AUTOMATIC_GAIN_SWITCH_OFF), -EINVAL);
	assert_string_equal(probe.said, "controls: \"CODEC\" is no sound card and has no \"Mic Capture Volume\"\n");
	open_result = -ENOENT;
	assert_int_equal(apply(""), -ENODEV);
	assert_string_equal(probe.said, "controls: the mixer of \"CODEC\" cannot be read: No such file or directory\n");
}

/* ------------------------------------------------------------------ automatic gain */

/* Names that Linux' drivers use: sound/usb/mixer.c, sound/soc/codecs (wm8960, max98090, tlv320aic3x, rt5645, es8328). */
static void automatic_gain_is_known_by_its_name(void **state)
{
	static const char *const are[] = {
		"Auto Gain Control", "Mic Auto Gain Control", "AGC", "AGC Switch", "Left AGC Switch", "mic agc", "ALC Function",
		"ALC Capture Switch", "Automatic Gain Control Switch", "Mic AutoGain", "Capture Auto Level Switch",
	};
	static const char *const are_not[] = {
		"Mic Capture Volume", "Mic Boost", "Magcard Switch", "ALCove Switch", "Input Gain", "Speaker ALC Switch",
		"AGC Playback Switch", "Talc",
	};

	(void)state;
	for (size_t k = 0; k < sizeof(are) / sizeof(*are); k++)
		if (!sound_mixer_is_automatic_gain(are[k]))
			fail_msg("%s", are[k]);
	for (size_t k = 0; k < sizeof(are_not) / sizeof(*are_not); k++)
		if (sound_mixer_is_automatic_gain(are_not[k]))
			fail_msg("%s", are_not[k]);
}

static struct element *add_agc(void)
{
	build_card();
	return add((struct element){ .name = "Mic Auto Gain Control", .type = SND_CTL_ELEM_TYPE_BOOLEAN, .value = { 1 } });
}

static void automatic_gain_is_switched_off_and_said(void **state)
{
	(void)state;
	struct element *agc = add_agc();
	assert_int_equal(apply(""), 0);
	assert_string_equal(probe.said, "\"Mic Auto Gain Control\" of \"CODEC\" was on: it has been switched off, as it would follow "
	                    "the light\n");
	assert_int_equal(agc->value[0], 0);
	assert_string_equal(recorded("Mic Auto Gain Control"), "off, was on");
	assert_int_equal(apply(""), 0);
	assert_string_equal(probe.said, "");
	assert_string_equal(recorded("Mic Auto Gain Control"), "off");

	build_card();
	agc = add((struct element){ .name = "ALC Function", .type = SND_CTL_ELEM_TYPE_ENUMERATED, .value = { 3 },
		.items = { "Right", "Off", "Left", "Stereo" } });
	assert_int_equal(apply(""), 0);
	assert_int_equal(agc->value[0], 1);
	assert_string_equal(recorded("ALC Function"), "Off, was on");
}

static void what_only_shapes_it_is_left_alone(void **state)
{
	(void)state;
	build_card();
	add((struct element){ .name = "ALC Mode", .type = SND_CTL_ELEM_TYPE_ENUMERATED, .items = { "ALC", "Limiter" } });
	add((struct element){ .name = "AGC Target", .type = SND_CTL_ELEM_TYPE_INTEGER, .max = 15, .value = { 7 } });
	add((struct element){ .name = "AGC Switch", .type = SND_CTL_ELEM_TYPE_BOOLEAN, .value = { 1 },
		.access = SND_CTL_EXT_ACCESS_READWRITE | SND_CTL_EXT_ACCESS_INACTIVE });
	assert_int_equal(apply_on(3, "", AUTOMATIC_GAIN_REFUSE), 0);
	assert_string_equal(probe.said, "");
	assert_string_equal(recorded("ALC Mode"), "ALC");
	assert_string_equal(recorded("AGC Target"), "7 of 0 to 15");
}

static void automatic_gain_that_stays_on_is_refused(void **state)
{
	(void)state;
	add_agc()->temper = STICKS;
	refuse("", -EINVAL, "automatic_gain: \"Mic Auto Gain Control\" of \"CODEC\" is on and does not go off\n");
	add_agc()->temper = FAILS;
	refuse("", -EINVAL, "automatic_gain: \"Mic Auto Gain Control\" of \"CODEC\" is on and does not go off: Input/output error\n");
	add_agc()->access = SND_CTL_EXT_ACCESS_READ;
	refuse("", -EINVAL, "automatic_gain: \"Mic Auto Gain Control\" of \"CODEC\" is on and does not go off: Operation not "
	       "permitted\n");
	add_agc();
	refuse("Mic Auto Gain Control = on", -EINVAL, "controls: \"Mic Auto Gain Control\" would be on, which automatic_gain = "
	       "\"switch_off\" does not allow\n");
	assert_int_equal(apply("Mic Auto Gain Control = off"), 0);
	assert_string_equal(probe.said, "");
}

static void automatic_gain_is_refused_or_allowed_as_configured(void **state)
{
	(void)state;
	struct element *agc = add_agc();
	assert_int_equal(apply_on(3, "", AUTOMATIC_GAIN_REFUSE), -EINVAL);
	assert_string_equal(probe.said, "automatic_gain: \"Mic Auto Gain Control\" of \"CODEC\" is on, which \"refuse\" does not allow; "
	                    "switch_off would switch it off\n");
	assert_int_equal(agc->value[0], 1);
	assert_int_equal(apply_on(3, "", AUTOMATIC_GAIN_ALLOW), 0);
	assert_string_equal(probe.said, "\"Mic Auto Gain Control\" of \"CODEC\" is on: the gain follows the light, and amplitudes mean "
	                    "little\n");
	assert_string_equal(recorded("Mic Auto Gain Control"), "on");
	agc->value[0] = 0;
	assert_int_equal(apply_on(3, "", AUTOMATIC_GAIN_REFUSE), 0);
	assert_string_equal(probe.said, "");
}

/* ------------------------------------------------------------------ through the intake */

static void the_intake_sets_the_mixer_at_each_open(void **state)
{
	(void)state;
	add_agc();
	for (int round = 0; round < 2; round++) {
		card[VOLUME].value[0] = card[VOLUME].value[1] = 40;    /* somebody turned it up */
		probe_reset(&probe);
		probe_text(&probe, "device", "nothing");
		probe_text(&probe, "controls", "Mic Capture Volume = 60%");
		assert_int_equal(probe_open(&probe), 0);
		assert_int_equal(card[VOLUME].value[0], 24);
		assert_string_equal(probe.intake->control[0].value, "24 of 0 to 40, 0.00 dB");
		assert_true(!!strstr(probe.said, "was on: it has been switched off") == (round == 0));
	}
	add_agc();
	probe_reset(&probe);
	probe_text(&probe, "device", "nothing");
	probe_text(&probe, "automatic_gain", "refuse");
	assert_int_equal(probe_open(&probe), -EINVAL);
	assert_null(probe.intake);
	/* What is wrong in the setting is said though the card is not there. */
	probe_reset(&probe);
	probe_text(&probe, "device", "absent");
	probe_text(&probe, "controls", "Mic Capture Volume");
	assert_int_equal(probe_open(&probe), -EINVAL);
	assert_non_null(strstr(probe.said, "is not of the form NAME = VALUE"));
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(wishes_are_granted_and_recorded),
		cmocka_unit_test(channels_may_differ),
		cmocka_unit_test(a_percentage_is_of_the_range),
		cmocka_unit_test(the_rest_is_recorded_without_a_wish),
		cmocka_unit_test(what_concerns_recording_goes_first_when_there_are_too_many),
		cmocka_unit_test(what_does_not_fit_the_card_is_said),
		cmocka_unit_test(a_value_of_the_wrong_kind_is_refused),
		cmocka_unit_test(a_value_that_the_card_bends_is_said),
		cmocka_unit_test(a_setting_that_cannot_be_read_is_said),
		cmocka_unit_test(a_pcm_without_a_card_has_no_controls),
		cmocka_unit_test(automatic_gain_is_known_by_its_name),
		cmocka_unit_test(automatic_gain_is_switched_off_and_said),
		cmocka_unit_test(what_only_shapes_it_is_left_alone),
		cmocka_unit_test(automatic_gain_that_stays_on_is_refused),
		cmocka_unit_test(automatic_gain_is_refused_or_allowed_as_configured),
		cmocka_unit_test(the_intake_sets_the_mixer_at_each_open),
	};

	setenv("ALSA_CONFIG_PATH", "tests/data/alsa/cards.conf", 1);
	probe_create(&probe, &intake_alsa);
	const int failed = cmocka_run_group_tests_name("sound_mixer", tests, NULL, NULL);
	probe_destroy(&probe);
	snd_config_update_free_global();
	return failed;
}
