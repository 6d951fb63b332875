/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <stdlib.h>
#include <string.h>

#include "check.h"
#include "settings_parts.h"
#include "utf8.h"

enum { WIDTH = 100, TAB = 8, SENTENCE = 2048 };

/* Where lines go, and what stands in front of each. */
struct page {
	FILE *out;
	const char *margin;             /* "# " when the whole group is commented out, else "" */
};

static size_t columns(const char *text)
{
	size_t n = 0;

	for (; *text; text++)
		n = *text == '\t' ? (n / TAB + 1) * TAB : n + (((unsigned char)*text & 0xc0) != 0x80);
	return n;
}

/* Words of `text` in lines that begin with `prefix`, within WIDTH columns unless a word alone is longer. */
static void put_wrapped(const struct page *page, const char *prefix, const char *text)
{
	size_t margin = columns(page->margin) + columns(prefix), at = 0;

	while (*text) {
		size_t bytes = strcspn(text, " ");
		size_t width = utf8_count(text, bytes);

		if (at == 0 || at + 1 + width > WIDTH) {
			fprintf(page->out, "%s%s%s%.*s", at ? "\n" : "", page->margin, prefix, (int)bytes, text);
			at = margin + width;
		} else {
			fprintf(page->out, " %.*s", (int)bytes, text);
			at += 1 + width;
		}
		text += bytes + strspn(text + bytes, " ");
	}
	fputc('\n', page->out);
}

/* "FRONT: a number, 0 to 600; required" and, for the manual, "...; default 5". */
static void describe(char sentence[SENTENCE], const char *front, const struct setting *row, bool whole)
{
	char allowed[CHECK_TEXT], fallback[CHECK_TEXT];
	const char *shown = row->required ? NULL : check_fallback_text(fallback, row);

	snprintf(sentence, SENTENCE, "%s: %s%s%s%s%s", front, check_allowed(allowed, row),
		 row->required ? "; required" : !shown ? "; no default" : whole ? "; default " : "",
		 shown && whole ? shown : "", row->was && whole ? "; earlier called " : "",
		 row->was && whole ? row->was : "");
}

/* One row: what it means, then the row itself, behind # unless it must be given. */
static void sample_row(const struct page *page, const char *indent, const struct setting *row, bool active)
{
	char prefix[16], sentence[SENTENCE], value[CHECK_TEXT];
	const char *shown = row->required || row->shown ? NULL : check_fallback_text(value, row);

	describe(sentence, row->meaning, row, false);
	snprintf(prefix, sizeof(prefix), "%s# ", indent);
	put_wrapped(page, prefix, sentence);
	fprintf(page->out, "%s%s%s%s = %s;\n", page->margin, indent, active && (row->required || row->shown) ? "" : "# ", row->name,
		shown ? shown : check_example_text(value, row));
}

/* The further table that the examples of a group's required choices lead to. */
static const struct setting *example_more(const struct setting_group *group)
{
	size_t n = settings_rows(group->settings);
	struct setting_value *values = calloc(n + 1, sizeof(*values));
	char (*words)[CHECK_TEXT] = calloc(n + 1, sizeof(*words));
	const struct setting *more = NULL;

	if (!values || !words || !group->more)
		goto free_both;
	settings_fallbacks(group->settings, values);
	for (size_t i = 0; i < n; i++) {
		const struct setting *row = &group->settings[i];
		char text[CHECK_TEXT];

		if (row->type != SETTING_CHOICE || !row->required)
			continue;
		snprintf(words[i], sizeof(words[i]), "%s", check_example_text(text, row) + 1);
		words[i][strcspn(words[i], "\"")] = '\0';
		values[i].text = words[i];
		values[i].integer = check_choice_index(row, words[i]);
	}
	more = group->more(values);
free_both:
	free(words);
	free(values);
	return more;
}

static bool needs_something(const struct setting *table)
{
	for (size_t i = 0; i < settings_rows(table); i++)
		if (table[i].required)
			return true;
	return false;
}

static void sample_rows(const struct page *page, const struct setting_group *group, const char *indent)
{
	const struct setting *more = example_more(group), *table;
	const char *heading;
	char prefix[16], line[SENTENCE];

	for (size_t i = 0; i < settings_rows(group->settings); i++)
		sample_row(page, indent, &group->settings[i], true);
	snprintf(prefix, sizeof(prefix), "%s# ", indent);
	for (size_t k = 0; group->variant && (table = group->variant(k, &heading)); k++) {
		fprintf(page->out, "\n");
		snprintf(line, sizeof(line), "-- %s --", heading);
		put_wrapped(page, prefix, line);
		for (size_t i = 0; i < settings_rows(table); i++)
			sample_row(page, indent, &table[i], table == more);
	}
}

static void sample_group(FILE *out, const struct setting_group *group)
{
	/* An optional group with required rows would do something unasked if it stood there with its examples. */
	bool asleep = !group->required && needs_something(group->settings);
	struct page heading = { out, "" }, page = { out, asleep ? "# " : "" };
	char sentence[SENTENCE];

	snprintf(sentence, sizeof(sentence), "%s: %s%s%s", group->name, group->meaning,
		 group->list ? "; as many { } as there are, with commas between" : "",
		 asleep ? "; may be left out: take \"# \" from every line below to use it" : "");
	fprintf(out, "\n");
	put_wrapped(&heading, "# ", sentence);
	fprintf(out, "%s%s = %s\n", page.margin, group->name, group->list ? "(" : "{");
	if (group->list)
		fprintf(out, "%s\t{\n", page.margin);
	sample_rows(&page, group, group->list ? "\t\t" : "\t");
	if (group->list)
		fprintf(out, "%s\t}\n", page.margin);
	fprintf(out, "%s%s;\n", page.margin, group->list ? ")" : "}");
}

void settings_write_sample(FILE *out, const struct setting_group *groups)
{
	struct page page = { out, "" };

	put_wrapped(&page, "# ", "Configuration of limbwatch.  Every setting is here with its meaning and range.  A line behind # "
		    "shows what holds without it: take the # away and change the value.  Texts stand in quotes, every "
		    "line ends with a semicolon, the unit is in the name.");
	for (; groups->name; groups++)
		sample_group(out, groups);
}

static void manual_rows(const struct page *page, const struct setting *table)
{
	char line[SENTENCE], value[CHECK_TEXT];

	for (; table && table->name; table++) {
		describe(line, table->name, table, true);
		put_wrapped(page, "  ", line);
		snprintf(line, sizeof(line), "%s%s%s", table->meaning, table->example ? "; for example " : "",
			 table->example ? check_example_text(value, table) : "");
		put_wrapped(page, "      ", line);
	}
}

void settings_write_manual(FILE *out, const struct setting_group *groups)
{
	struct page page = { out, "" };
	const struct setting *table;
	char line[SENTENCE];
	const char *heading;

	for (const struct setting_group *group = groups; group->name; group++) {
		snprintf(line, sizeof(line), "%s = %s: %s (%s)", group->name, group->list ? "( { ... }, { ... } )" : "{ ... }",
			 group->meaning, group->required ? "required" : "may be left out");
		if (group != groups)
			fprintf(out, "\n");
		put_wrapped(&page, "", line);
		manual_rows(&page, group->settings);
		for (size_t k = 0; group->variant && (table = group->variant(k, &heading)); k++) {
			fprintf(out, "\n");
			put_wrapped(&page, " ", heading);
			manual_rows(&page, table);
		}
	}
}
