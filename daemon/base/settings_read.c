/* SPDX-License-Identifier: GPL-3.0-or-later */
#include "settings_parts.h"

#include <errno.h>
#include <stdlib.h>
#include <string.h>

#include "check.h"
#include "limbwatch/log.h"
#include "suggest.h"

enum {
	WHERE_TEXT = 1024,
	WRONG_MAX = 100,                /* sentences about one file; nobody reads more */
};

/* What a reading function needs to say where it is and to count what it refused. */
struct reader {
	const char *path;
	const struct setting_group *groups;
	unsigned wrong;
};

size_t settings_rows(const struct setting *table)
{
	size_t n = 0;

	while (table && table[n].name)
		n++;
	return n;
}

size_t settings_fallbacks(const struct setting *table, struct setting_value *values)
{
	size_t n = settings_rows(table);

	for (size_t i = 0; i < n; i++)
		values[i] = check_fallback(&table[i]);
	return n;
}

static const struct setting *find_row(const struct setting *table, const char *name)
{
	for (size_t i = 0; i < settings_rows(table); i++)
		if (strcmp(table[i].name, name) == 0)
			return &table[i];
	return NULL;
}

static void offer_rows(struct suggestion *suggestion, const struct setting *table)
{
	for (size_t i = 0; i < settings_rows(table); i++)
		suggest_offer(suggestion, table[i].name, strlen(table[i].name));
}

/* Whether the group knows a name, and if only for some choice, under which heading. */
static bool group_knows(const struct setting_group *group, const char *name, const char **heading)
{
	const struct setting *table;

	*heading = NULL;
	if (find_row(group->settings, name))
		return true;
	for (size_t k = 0; group->variant && (table = group->variant(k, heading)); k++)
		if (find_row(table, name))
			return true;
	return false;
}

/* The group, other than `except`, that knows a name. */
static const struct setting_group *find_owner(const struct setting_group *groups, const struct setting_group *except,
					      const char *name)
{
	const char *heading;

	for (; groups->name; groups++)
		if (groups != except && group_knows(groups, name, &heading))
			return groups;
	return NULL;
}

/* How an element of the group stands in the file. */
static const char *opening(const struct setting_group *group)
{
	return group->list ? "( { ... } )" : "{ ... }";
}

static void refuse_unknown(struct reader *reader, const struct setting_group *group, const struct element *element,
			   config_setting_t *node, bool choices_are_sound)
{
	const char *name = config_setting_name(node), *heading;
	int line = (int)config_setting_source_line(node);
	struct suggestion suggestion = suggest_for(name);
	const struct setting_group *owner = find_owner(reader->groups, group, name);
	bool elsewhere = group_knows(group, name, &heading);

	/* With the choice itself wrong, nobody can tell which rows follow it: that one sentence is enough. */
	if (elsewhere && !choices_are_sound)
		return;
	reader->wrong++;
	offer_rows(&suggestion, group->settings);
	offer_rows(&suggestion, element->more);
	if (elsewhere && heading)
		log_error("%s line %d: %s.%s does not apply here; it belongs to: %s", reader->path, line, group->name,
			  name, heading);
	else if (suggestion.nearest && !(owner && suggestion.distance > 1))
		log_error("%s line %d: %s.%s is unknown; did you mean %s?", reader->path, line, group->name, name,
			  suggestion.nearest);
	else if (owner)
		log_error("%s line %d: %s.%s is unknown; %s belongs into %s = %s", reader->path, line, group->name, name,
			  name, owner->name, opening(owner));
	else
		log_error("%s line %d: %s.%s is unknown", reader->path, line, group->name, name);
}

/* The node that gives a row, under its name or its earlier one. */
static config_setting_t *find_node(struct reader *reader, const char *group, const struct setting *row,
				   config_setting_t *element)
{
	config_setting_t *node = config_setting_get_member(element, row->name);
	config_setting_t *old = row->was ? config_setting_get_member(element, row->was) : NULL;

	if (node && old) {
		log_error("%s line %d: %s.%s is the earlier name of %s, which line %d gives too", reader->path,
			  (int)config_setting_source_line(old), group, row->was, row->name,
			  (int)config_setting_source_line(node));
		reader->wrong++;
	} else if (old) {
		log_warning("%s line %d: %s.%s is now called %s; the earlier name is still understood", reader->path,
			    (int)config_setting_source_line(old), group, row->was, row->name);
	}
	return node ? node : old;
}

/* False when a choice is wrong, on which a further table may depend. */
static bool read_rows(struct reader *reader, const struct setting_group *group, const struct setting *table,
		      struct setting_value *values, config_setting_t *element)
{
	char where[WHERE_TEXT], example[CHECK_TEXT];
	bool choices_are_sound = true;

	for (size_t i = 0; i < settings_rows(table); i++) {
		config_setting_t *node = find_node(reader, group->name, &table[i], element);
		unsigned wrong = reader->wrong;

		if (node) {
			snprintf(where, sizeof(where), "%s line %d: %s.%s", reader->path,
				 (int)config_setting_source_line(node), group->name, config_setting_name(node));
			if (check_value(&values[i], &table[i], node, where) < 0) {
				values[i] = check_fallback(&table[i]);
				reader->wrong++;
			}
		} else if (table[i].required) {
			log_error("%s line %d: %s.%s is missing (%s), for example %s = %s;", reader->path,
				  (int)config_setting_source_line(element), group->name, table[i].name,
				  table[i].meaning, table[i].name, check_example_text(example, &table[i]));
			reader->wrong++;
		}
		choices_are_sound &= table[i].type != SETTING_CHOICE || reader->wrong == wrong;
	}
	return choices_are_sound;
}

static bool is_known(const struct setting *table, const char *name)
{
	for (size_t i = 0; i < settings_rows(table); i++)
		if (strcmp(table[i].name, name) == 0 || (table[i].was && strcmp(table[i].was, name) == 0))
			return true;
	return false;
}

/* `node` NULL: the fallbacks stand. */
static int read_element(struct reader *reader, const struct setting_group *group, struct element *element,
			config_setting_t *node)
{
	size_t base = settings_rows(group->settings), more;
	struct setting_value *grown;
	bool choices_are_sound = true;

	element->values = calloc(base + 1, sizeof(*element->values));
	if (!element->values)
		return -ENOMEM;
	settings_fallbacks(group->settings, element->values);
	if (node) {
		element->line = (int)config_setting_source_line(node);
		choices_are_sound = read_rows(reader, group, group->settings, element->values, node);
	}
	if (group->more && choices_are_sound)
		element->more = group->more(element->values);
	more = settings_rows(element->more);
	grown = realloc(element->values, (base + more + 1) * sizeof(*grown));
	if (!grown)
		return -ENOMEM;
	element->values = grown;
	settings_fallbacks(element->more, grown + base);
	if (!node)
		return 0;
	read_rows(reader, group, element->more, grown + base, node);
	for (int i = 0; i < config_setting_length(node) && reader->wrong < WRONG_MAX; i++) {
		config_setting_t *child = config_setting_get_elem(node, (unsigned)i);

		if (!is_known(group->settings, config_setting_name(child))
		    && !is_known(element->more, config_setting_name(child)))
			refuse_unknown(reader, group, element, child, choices_are_sound);
	}
	return 0;
}

/* Says in one sentence why a node is not the group it is named after; true when it is. */
static bool has_right_form(struct reader *reader, const struct setting_group *group, config_setting_t *node)
{
	int line = (int)config_setting_source_line(node);

	if (group->list ? config_setting_is_list(node) : config_setting_is_group(node))
		return true;
	reader->wrong++;
	log_error("%s line %d: %s must be %s, written %s = %s; (%s)", reader->path, line, group->name,
		  group->list ? "a list of groups" : "one group", group->name,
		  group->list ? "( { ... }, { ... } )" : "{ ... }", group->meaning);
	return false;
}

static int read_list(struct reader *reader, struct part *part, config_setting_t *node)
{
	size_t n = (size_t)config_setting_length(node);
	int ret = 0;

	part->elements = calloc(n + 1, sizeof(*part->elements));
	if (!part->elements)
		return -ENOMEM;
	for (; part->count < n && ret == 0 && reader->wrong < WRONG_MAX; part->count++) {
		config_setting_t *child = config_setting_get_elem(node, (unsigned)part->count);

		if (config_setting_is_group(child)) {
			ret = read_element(reader, part->group, &part->elements[part->count], child);
			continue;
		}
		log_error("%s line %d: number %zu of the list %s is not { ... } (%s)", reader->path,
			  (int)config_setting_source_line(node), part->count + 1, part->group->name,
			  part->group->meaning);
		reader->wrong++;
	}
	return ret;
}

static int read_single(struct reader *reader, struct part *part, config_setting_t *node)
{
	part->elements = calloc(1, sizeof(*part->elements));
	if (!part->elements)
		return -ENOMEM;
	part->count = 1;
	return read_element(reader, part->group, part->elements, node);
}

static int read_part(struct reader *reader, struct part *part, config_setting_t *root)
{
	config_setting_t *node = config_setting_get_member(root, part->group->name);

	if (node && !has_right_form(reader, part->group, node))
		return 0;
	if (part->group->required && !node)
		log_error("%s: %s = %s is missing (%s)", reader->path, part->group->name, opening(part->group),
			  part->group->meaning);
	else if (part->group->required && part->group->list && config_setting_length(node) == 0)
		log_error("%s line %d: %s is empty, but must hold at least one { ... } (%s)", reader->path,
			  (int)config_setting_source_line(node), part->group->name, part->group->meaning);
	else if (part->group->list)
		return node ? read_list(reader, part, node) : 0;
	else
		return read_single(reader, part, node);
	reader->wrong++;
	return 0;
}

/* What stands in the file outside every known group. */
static void refuse_strays(struct reader *reader, config_setting_t *root)
{
	for (int i = 0; i < config_setting_length(root) && reader->wrong < WRONG_MAX; i++) {
		config_setting_t *node = config_setting_get_elem(root, (unsigned)i);
		const char *name = config_setting_name(node);
		int line = (int)config_setting_source_line(node);
		struct suggestion suggestion = suggest_for(name);
		const struct setting_group *group = reader->groups, *owner;

		for (; group->name && strcmp(group->name, name) != 0; group++)
			suggest_offer(&suggestion, group->name, strlen(group->name));
		if (group->name)
			continue;
		reader->wrong++;
		owner = find_owner(reader->groups, NULL, name);
		if (owner && !config_setting_is_aggregate(node))
			log_error("%s line %d: %s stands outside its group; it belongs into %s = %s", reader->path, line, name,
				  owner->name, opening(owner));
		else if (suggestion.nearest)
			log_error("%s line %d: %s is unknown; did you mean %s?", reader->path, line, name,
				  suggestion.nearest);
		else
			log_error("%s line %d: %s is unknown; no group of settings has this name", reader->path, line, name);
	}
}

int settings_read(struct part *parts, size_t count, config_setting_t *root, const char *path,
		  const struct setting_group *groups)
{
	struct reader reader = { path, groups, 0 };
	int ret = 0;

	for (size_t i = 0; i < count && ret == 0; i++)
		ret = read_part(&reader, &parts[i], root);
	if (ret < 0)
		return ret;
	refuse_strays(&reader, root);
	if (reader.wrong >= WRONG_MAX)
		log_error("%s: more is wrong than these %u sentences say", path, reader.wrong);
	return reader.wrong > 0 ? -EINVAL : 0;
}
