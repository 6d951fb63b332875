/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <ctype.h>
#include <errno.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include "limbwatch/log.h"
#include "sound_controls.h"
#include "sound_mixer.h"

struct mixer {
	struct sound_controls controls;
	struct intake *intake;
	bool *wished, *was_on;          /* one a control */
};

/* ------------------------------------------------------------------ names */

/* What a name may say, in small letters; with a blank before and behind: as a word of its own. */
static const char *const automatic_words[] = {
	"auto gain", "autogain", "automatic gain", "auto level", "automatic level", " agc ", " alc ", NULL,
};
static const char *const recording_words[] = { "capture", "mic", "input", "adc", "gain", "boost", "line in", " agc ", " alc ", NULL };
static const char *const other_words[] = { "playback", "headphone", "speaker", "master", " dac ", NULL };

static bool says(const char *name, const char *const *words)
{
	char small[80] = " ";
	size_t used = 1;

	for (; *name && used < sizeof(small) - 2; name++)
		small[used++] = isalnum((unsigned char)*name) ? (char)tolower((unsigned char)*name) : ' ';
	small[used++] = ' ';
	small[used] = 0;
	for (; *words; words++)
		if (strstr(small, *words))
			return true;
	return false;
}

bool sound_mixer_is_automatic_gain(const char *name)
{
	return says(name, automatic_words) && !says(name, other_words);
}

/* 0: set by the configuration; 1: says that it concerns recording; 2: may do; 3: does not. */
static int rank(const struct mixer *mixer, size_t k)
{
	const char *name = mixer->controls.control[k].name;

	if (mixer->wished[k])
		return 0;
	if (says(name, recording_words) && (!says(name, other_words) || says(name, (const char *const[]){ "capture", NULL })))
		return 1;
	return says(name, other_words) ? 3 : 2;
}

/* ------------------------------------------------------------------ wishes */

static void list_names(const struct mixer *mixer, char *out, size_t size)
{
	size_t used = 0;

	snprintf(out, size, "none");
	for (size_t k = 0; k < mixer->controls.count && used < size; k++)
		used += (size_t)snprintf(out + used, size - used, "%s%s", k ? ", " : "", mixer->controls.control[k].name);
}

/* The control, or NULL after a sentence. */
static const struct sound_control *find(const struct mixer *mixer, const struct sound_wish *wish)
{
	const struct sound_control *found = NULL;
	char names[2048];

	for (size_t k = 0; k < mixer->controls.count; k++) {
		const struct sound_control *c = &mixer->controls.control[k];

		if (strcmp(c->plain_name, wish->name) || (wish->index >= 0 && wish->index != c->index))
			continue;
		if (found) {
			log_error("controls: \"%s\" has several controls \"%s\"; say which, as in \"%s [%d]\"", mixer->intake->name,
				wish->name, wish->name, c->index);
			return NULL;
		}
		found = c;
	}
	if (found)
		return found;
	list_names(mixer, names, sizeof(names));
	if (wish->index >= 0)
		log_error("controls: \"%s\" has no control \"%s [%d]\"; it has %s", mixer->intake->name, wish->name, wish->index,
			names);
	else
		log_error("controls: \"%s\" has no control \"%s\"; it has %s", mixer->intake->name, wish->name, names);
	return NULL;
}

/* The values a control takes, for a sentence. */
static void say_range(const struct mixer *mixer, const struct sound_control *c, char *out, size_t size)
{
	size_t used = 0;

	if (c->type == SND_CTL_ELEM_TYPE_BOOLEAN) {
		snprintf(out, size, "on or off");
		return;
	}
	if (c->type != SND_CTL_ELEM_TYPE_ENUMERATED) {
		snprintf(out, size, "%lld to %lld or 0%% to 100%%", c->min, c->max);
		return;
	}
	snprintf(out, size, "one of ");
	for (long long item = c->min; item <= c->max && strlen(out) < size - 1; item++) {
		char name[64];

		used = strlen(out);
		sound_control_item(&mixer->controls, c, item, name, sizeof(name));
		snprintf(out + used, size - used, "%s%s", item > c->min ? ", " : "", name);
	}
}

/* One value, for all channels or for one. */
static int parse_value(const struct sound_control *c, const char *text, long long *out)
{
	char *end;

	if (c->type == SND_CTL_ELEM_TYPE_BOOLEAN) {
		*out = !strcmp(text, "on");
		return *out || !strcmp(text, "off") ? 0 : -EINVAL;
	}
	if (!isdigit((unsigned char)*text) && *text != '-')
		return -EINVAL;
	errno = 0;
	if (text[strlen(text) - 1] == '%') {
		const double percent = strtod(text, &end);

		if (strcmp(end, "%") != 0 || !(percent >= 0 && percent <= 100))
			return -EINVAL;
		*out = c->min + llround(percent / 100 * ((double)c->max - (double)c->min));
		return 0;
	}
	*out = strtoll(text, &end, 10);
	return *end || errno || *out < c->min || *out > c->max ? -EINVAL : 0;
}

static int parse_item(const struct mixer *mixer, const struct sound_control *c, const char *text, long long *values)
{
	char name[64];

	for (long long item = c->min; item <= c->max; item++) {
		sound_control_item(&mixer->controls, c, item, name, sizeof(name));
		if (strcmp(name, text) != 0)
			continue;
		for (unsigned k = 0; k < c->count; k++)
			values[k] = item;
		return 0;
	}
	return -EINVAL;
}

/* "60%" for all channels, "60%/40%" one each. */
static int parse_values(const struct mixer *mixer, const struct sound_control *c, const char *text, long long *values)
{
	char copy[64], *next = copy;
	unsigned count = 0;

	if (c->type == SND_CTL_ELEM_TYPE_ENUMERATED)
		return parse_item(mixer, c, text, values);
	snprintf(copy, sizeof(copy), "%s", text);
	for (char *one; (one = strsep(&next, "/"));)
		if (count == c->count || parse_value(c, one, &values[count++]) < 0)
			return -EINVAL;
	if (count != 1 && count != c->count)
		return -EINVAL;
	for (unsigned k = count; k < c->count; k++)
		values[k] = values[0];
	return 0;
}

static bool equal(const struct sound_control *c, const long long *a, const long long *b)
{
	for (unsigned k = 0; k < c->count; k++)
		if (a[k] != b[k])
			return false;
	return true;
}

static int grant(struct mixer *mixer, const struct sound_wish *wish)
{
	const struct sound_control *c = find(mixer, wish);
	long long values[SOUND_VALUES], found[SOUND_VALUES];
	const char *card = mixer->intake->name;
	char text[1024];
	int ret;

	if (!c)
		return -EINVAL;
	mixer->wished[c - mixer->controls.control] = true;
	if (parse_values(mixer, c, wish->value, values) < 0) {
		say_range(mixer, c, text, sizeof(text));
		log_error("controls: \"%s\" of \"%s\" is %s, not \"%s\"%s", c->name, card, text, wish->value,
			strchr(wish->value, '/') && c->type != SND_CTL_ELEM_TYPE_ENUMERATED ?
			"; one value for all channels, or one for each with / between" : "");
		return -EINVAL;
	}
	if (!c->writable) {
		log_error("controls: \"%s\" of \"%s\" can be read only", c->name, card);
		return -EINVAL;
	}
	ret = sound_control_write(&mixer->controls, c, values);
	if (ret < 0) {
		log_error("controls: \"%s\" of \"%s\" does not take %s: %s", c->name, card, wish->value, snd_strerror(ret));
		return ret;
	}
	if (sound_control_read(&mixer->controls, c, found) < 0 || equal(c, values, found))
		return 0;
	sound_control_say(&mixer->controls, c, found, text, sizeof(text));
	log_warning("controls: \"%s\" of \"%s\" was set to %s and stands at %s", c->name, card, wish->value, text);
	return 0;
}

/* ------------------------------------------------------------------ automatic gain */

/* The value that means off; -1: the control is no switch. */
static long long off_value(const struct mixer *mixer, const struct sound_control *c)
{
	static const char *const words[] = { " off ", " disable ", " disabled ", " none ", " manual ", NULL };
	char item[64];

	if (c->type == SND_CTL_ELEM_TYPE_BOOLEAN)
		return 0;
	for (long long k = c->min; c->type == SND_CTL_ELEM_TYPE_ENUMERATED && k <= c->max; k++) {
		sound_control_item(&mixer->controls, c, k, item, sizeof(item));
		if (says(item, words))
			return k;
	}
	return -1;
}

static bool is_on(const struct mixer *mixer, const struct sound_control *c, long long off)
{
	long long values[SOUND_VALUES];

	if (sound_control_read(&mixer->controls, c, values) < 0)
		return false;
	for (unsigned k = 0; k < c->count; k++)
		if (values[k] != off)
			return true;
	return false;
}

static int switch_off(struct mixer *mixer, size_t k, long long off)
{
	const struct sound_control *c = &mixer->controls.control[k];
	long long values[SOUND_VALUES];
	int ret;

	for (unsigned j = 0; j < c->count; j++)
		values[j] = off;
	ret = sound_control_write(&mixer->controls, c, values);
	if (ret == -ENODEV) {
		log_error("automatic_gain: \"%s\" went away while \"%s\" was switched off", mixer->intake->name, c->name);
		return ret;
	}
	if (ret < 0 || is_on(mixer, c, off)) {
		log_error("automatic_gain: \"%s\" of \"%s\" is on and does not go off%s%s", c->name, mixer->intake->name,
			ret < 0 ? ": " : "", ret < 0 ? snd_strerror(ret) : "");
		return -EINVAL;
	}
	mixer->was_on[k] = true;
	log_notice("\"%s\" of \"%s\" was on: it has been switched off, as it would follow the light", c->name,
		mixer->intake->name);
	return 0;
}

static int judge(struct mixer *mixer, size_t k, enum automatic_gain gain)
{
	const struct sound_control *c = &mixer->controls.control[k];
	const long long off = sound_mixer_is_automatic_gain(c->name) ? off_value(mixer, c) : -1;

	if (off < 0 || !is_on(mixer, c, off))
		return 0;
	if (gain == AUTOMATIC_GAIN_ALLOW) {
		log_warning("\"%s\" of \"%s\" is on: the gain follows the light, and amplitudes mean little", c->name,
			mixer->intake->name);
		return 0;
	}
	if (mixer->wished[k]) {
		log_error("controls: \"%s\" would be on, which automatic_gain = \"%s\" does not allow", c->name,
			gain == AUTOMATIC_GAIN_REFUSE ? "refuse" : "switch_off");
		return -EINVAL;
	}
	if (gain == AUTOMATIC_GAIN_REFUSE) {
		log_error("automatic_gain: \"%s\" of \"%s\" is on, which \"refuse\" does not allow; switch_off would switch it off",
			c->name, mixer->intake->name);
		return -EINVAL;
	}
	return switch_off(mixer, k, off);
}

/* ------------------------------------------------------------------ the record */

static void record(struct mixer *mixer)
{
	struct intake *intake = mixer->intake;
	size_t left_out = 0;

	intake->controls = 0;
	for (int wanted = 0; wanted < 3; wanted++)
		for (size_t k = 0; k < mixer->controls.count; k++) {
			const struct sound_control *c = &mixer->controls.control[k];
			long long values[SOUND_VALUES];

			if (rank(mixer, k) != wanted || sound_control_read(&mixer->controls, c, values) < 0)
				continue;
			if (intake->controls == INTAKE_CONTROLS) {
				left_out++;
				continue;
			}
			struct intake_control *out = &intake->control[intake->controls++];
			snprintf(out->name, sizeof(out->name), "%s", c->name);
			sound_control_say(&mixer->controls, c, values, out->value, sizeof(out->value));
			if (mixer->was_on[k])
				snprintf(out->value + strlen(out->value), sizeof(out->value) - strlen(out->value), ", was on");
		}
	if (left_out)
		log_detail("\"%s\" has %zu controls more than the %d in the sidecar", intake->name, left_out, INTAKE_CONTROLS);
}

static int apply(struct mixer *mixer, const struct sound_wish *wishes, int count, enum automatic_gain gain)
{
	int ret = 0;

	mixer->wished = calloc(mixer->controls.count + 1, sizeof(bool));
	mixer->was_on = calloc(mixer->controls.count + 1, sizeof(bool));
	if (!mixer->wished || !mixer->was_on)
		ret = -ENOMEM;
	for (int k = 0; k < count && ret == 0; k++)
		ret = grant(mixer, &wishes[k]);
	for (size_t k = 0; k < mixer->controls.count && ret == 0; k++)
		ret = judge(mixer, k, gain);
	if (ret == 0)
		record(mixer);
	free(mixer->wished);
	free(mixer->was_on);
	return ret;
}

int sound_mixer_apply(struct intake *intake, int card, const struct sound_wish *wishes, int count, enum automatic_gain gain)
{
	struct mixer mixer = { .intake = intake };
	int ret;

	intake->controls = 0;
	if (card < 0 && count == 0)
		return 0;
	if (card < 0) {
		log_error("controls: \"%s\" is no sound card and has no \"%s\"", intake->name, wishes[0].name);
		return -EINVAL;
	}
	ret = sound_controls_open(&mixer.controls, card);
	if (ret < 0) {
		log_error("controls: the mixer of \"%s\" cannot be read: %s", intake->name, snd_strerror(ret));
		return ret == -ENOENT || ret == -ENXIO ? -ENODEV : ret;
	}
	ret = apply(&mixer, wishes, count, gain);
	sound_controls_close(&mixer.controls);
	return ret;
}
