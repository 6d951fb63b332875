/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include "sound_controls.h"

void sound_controls_close(struct sound_controls *controls)
{
	if (controls->ctl)
		snd_ctl_close(controls->ctl);
	free(controls->control);
	*controls = (struct sound_controls){ 0 };
}

static bool has_values(snd_ctl_elem_type_t type)
{
	return type == SND_CTL_ELEM_TYPE_BOOLEAN || type == SND_CTL_ELEM_TYPE_INTEGER ||
		type == SND_CTL_ELEM_TYPE_INTEGER64 || type == SND_CTL_ELEM_TYPE_ENUMERATED;
}

static void take_range(struct sound_control *c, const snd_ctl_elem_info_t *info)
{
	c->max = 1;
	if (c->type == SND_CTL_ELEM_TYPE_ENUMERATED) {
		c->max = (long long)snd_ctl_elem_info_get_items(info) - 1;
	} else if (c->type == SND_CTL_ELEM_TYPE_INTEGER) {
		c->min = snd_ctl_elem_info_get_min(info);
		c->max = snd_ctl_elem_info_get_max(info);
	} else if (c->type == SND_CTL_ELEM_TYPE_INTEGER64) {
		c->min = snd_ctl_elem_info_get_min64(info);
		c->max = snd_ctl_elem_info_get_max64(info);
	}
}

/* 1: a control of the mixer that is in use; 0: something else. */
static int take(snd_ctl_t *ctl, const snd_ctl_elem_id_t *id, struct sound_control *c)
{
	snd_ctl_elem_info_t *info;

	snd_ctl_elem_info_alloca(&info);
	if (snd_ctl_elem_id_get_interface(id) != SND_CTL_ELEM_IFACE_MIXER)
		return 0;
	snd_ctl_elem_info_set_id(info, id);
	if (snd_ctl_elem_info(ctl, info) < 0 || snd_ctl_elem_info_is_inactive(info) ||
	    !has_values(snd_ctl_elem_info_get_type(info)))
		return 0;
	*c = (struct sound_control){ .number = snd_ctl_elem_info_get_numid(info),
		.type = snd_ctl_elem_info_get_type(info), .count = snd_ctl_elem_info_get_count(info),
		.index = (int)snd_ctl_elem_info_get_index(info), .readable = snd_ctl_elem_info_is_readable(info),
		.writable = snd_ctl_elem_info_is_writable(info) };
	snprintf(c->plain_name, sizeof(c->plain_name), "%s", snd_ctl_elem_info_get_name(info));
	take_range(c, info);
	return c->count >= 1 && c->count <= SOUND_VALUES && c->max >= c->min;
}

static void name_all(struct sound_controls *controls)
{
	for (size_t k = 0; k < controls->count; k++) {
		struct sound_control *c = &controls->control[k];

		for (size_t j = 0; j < controls->count; j++)
			c->several |= j != k && !strcmp(controls->control[j].plain_name, c->plain_name);
		if (c->several)
			snprintf(c->name, sizeof(c->name), "%s [%d]", c->plain_name, c->index);
		else
			snprintf(c->name, sizeof(c->name), "%s", c->plain_name);
	}
}

static int list(struct sound_controls *controls)
{
	snd_ctl_elem_list_t *all;
	snd_ctl_elem_id_t *id;
	int ret;

	snd_ctl_elem_list_alloca(&all);
	snd_ctl_elem_id_alloca(&id);
	if ((ret = snd_ctl_elem_list(controls->ctl, all)) < 0 ||
	    (ret = snd_ctl_elem_list_alloc_space(all, snd_ctl_elem_list_get_count(all))) < 0)
		return ret;
	if ((ret = snd_ctl_elem_list(controls->ctl, all)) < 0)
		goto free_space;
	const unsigned used = snd_ctl_elem_list_get_used(all);
	controls->control = calloc(used + 1, sizeof(*controls->control));
	if (!controls->control) {
		ret = -ENOMEM;
		goto free_space;
	}
	for (unsigned k = 0; k < used; k++) {
		snd_ctl_elem_list_get_id(all, k, id);
		controls->count += (size_t)take(controls->ctl, id, &controls->control[controls->count]);
	}
	name_all(controls);
	ret = 0;

free_space:
	snd_ctl_elem_list_free_space(all);
	return ret;
}

int sound_controls_open(struct sound_controls *controls, int card)
{
	char name[32];
	int ret;

	*controls = (struct sound_controls){ 0 };
	snprintf(name, sizeof(name), "hw:%d", card);
	ret = snd_ctl_open(&controls->ctl, name, SND_CTL_NONBLOCK);
	if (ret >= 0)
		ret = list(controls);
	if (ret < 0)
		sound_controls_close(controls);
	return ret < 0 ? ret : 0;
}

int sound_control_read(const struct sound_controls *controls, const struct sound_control *c, long long values[SOUND_VALUES])
{
	snd_ctl_elem_value_t *value;
	int ret;

	snd_ctl_elem_value_alloca(&value);
	snd_ctl_elem_value_set_numid(value, c->number);
	ret = c->readable ? snd_ctl_elem_read(controls->ctl, value) : -EPERM;
	for (unsigned k = 0; ret >= 0 && k < c->count; k++) {
		if (c->type == SND_CTL_ELEM_TYPE_BOOLEAN)
			values[k] = !!snd_ctl_elem_value_get_boolean(value, k);
		else if (c->type == SND_CTL_ELEM_TYPE_INTEGER)
			values[k] = snd_ctl_elem_value_get_integer(value, k);
		else if (c->type == SND_CTL_ELEM_TYPE_INTEGER64)
			values[k] = snd_ctl_elem_value_get_integer64(value, k);
		else
			values[k] = snd_ctl_elem_value_get_enumerated(value, k);
	}
	return ret < 0 ? ret : 0;
}

int sound_control_write(const struct sound_controls *controls, const struct sound_control *c, const long long *values)
{
	snd_ctl_elem_value_t *value;
	int ret;

	snd_ctl_elem_value_alloca(&value);
	snd_ctl_elem_value_set_numid(value, c->number);
	for (unsigned k = 0; k < c->count; k++) {
		if (c->type == SND_CTL_ELEM_TYPE_BOOLEAN)
			snd_ctl_elem_value_set_boolean(value, k, values[k]);
		else if (c->type == SND_CTL_ELEM_TYPE_INTEGER)
			snd_ctl_elem_value_set_integer(value, k, (long)values[k]);
		else if (c->type == SND_CTL_ELEM_TYPE_INTEGER64)
			snd_ctl_elem_value_set_integer64(value, k, values[k]);
		else
			snd_ctl_elem_value_set_enumerated(value, k, (unsigned)values[k]);
	}
	ret = c->writable ? snd_ctl_elem_write(controls->ctl, value) : -EPERM;
	return ret < 0 ? ret : 0;
}

void sound_control_item(const struct sound_controls *controls, const struct sound_control *c, long long item, char *out,
                        size_t size)
{
	snd_ctl_elem_info_t *info;

	snd_ctl_elem_info_alloca(&info);
	snd_ctl_elem_info_set_numid(info, c->number);
	snd_ctl_elem_info_set_item(info, (unsigned)item);
	if (item < c->min || item > c->max || snd_ctl_elem_info(controls->ctl, info) < 0)
		out[0] = 0;
	else
		snprintf(out, size, "%s", snd_ctl_elem_info_get_item_name(info));
}

static void say_value(const struct sound_controls *controls, const struct sound_control *c, long long value, char *out,
                      size_t size)
{
	if (c->type == SND_CTL_ELEM_TYPE_BOOLEAN)
		snprintf(out, size, "%s", value ? "on" : "off");
	else if (c->type == SND_CTL_ELEM_TYPE_ENUMERATED)
		sound_control_item(controls, c, value, out, size);
	else
		snprintf(out, size, "%lld", value);
}

/* ", 11.50 dB" where the driver says what a step is worth. */
static void say_decibels(const struct sound_controls *controls, const struct sound_control *c, long long value, char *out,
                         size_t size)
{
	snd_ctl_elem_id_t *id;
	long hundredths;

	snd_ctl_elem_id_alloca(&id);
	snd_ctl_elem_id_set_numid(id, c->number);
	if (snd_ctl_convert_to_dB(controls->ctl, id, (long)value, &hundredths) >= 0)
		snprintf(out, size, ", %.2f dB", (double)hundredths / 100);
}

void sound_control_say(const struct sound_controls *controls, const struct sound_control *c, const long long *values,
                       char *out, size_t size)
{
	const bool number = c->type == SND_CTL_ELEM_TYPE_INTEGER || c->type == SND_CTL_ELEM_TYPE_INTEGER64;
	unsigned different = 0;
	size_t used = 0;

	for (unsigned k = 1; k < c->count; k++)
		different += values[k] != values[0];
	out[0] = 0;
	for (unsigned k = 0; k < (different ? c->count : 1) && used < size; k++) {
		char one[64];

		say_value(controls, c, values[k], one, sizeof(one));
		used += (size_t)snprintf(out + used, size - used, "%s%s", k ? "/" : "", one);
	}
	if (number && used < size)
		used += (size_t)snprintf(out + used, size - used, " of %lld to %lld", c->min, c->max);
	if (number && !different && used < size)
		say_decibels(controls, c, values[0], out + used, size - used);
}
