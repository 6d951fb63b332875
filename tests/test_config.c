/* SPDX-License-Identifier: GPL-3.0-or-later */
/* The recorder's own table of settings: every setting, malformed in every way its type allows, is refused by name. */
#include <errno.h>
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <cmocka.h>
#include "limbwatch/config.h"
#include "limbwatch/log.h"

static char said[16384];

static void catch_sentence(void *context, enum log_level level, const char *sentence)
{
	size_t n = strlen(said);

	(void)context;
	if (level == LEVEL_ERROR)
		snprintf(said + n, sizeof(said) - n, "%s\n", sentence);
}

static const char minimal[] =
	"intake = { driver = \"synthetic\"; };\n"
	"channels = ( { name = \"diode\"; column = 1; wavelength_nm = 600; } );\n"
	"keep = { folder = \"/tmp\"; };\n";

static int load(const char *text)
{
	struct config config;
	int ret;

	said[0] = 0;
	log_set_sink(catch_sentence, NULL);
	ret = config_parse(&config, text, "test.conf");
	log_set_sink(NULL, NULL);
	if (ret == 0)
		config_free(&config);
	return ret;
}

static void the_minimal_configuration_is_accepted(void **state)
{
	(void)state;
	assert_int_equal(load(minimal), 0);
	assert_string_equal(said, "");
}

/* Required settings by their examples, except the one under test. */
static size_t put_required(char *text, size_t size, const struct setting *table, const struct setting *except)
{
	size_t n = 0;

	text[0] = 0;
	for (; table && table->name; table++) {
		bool quoted = table->type == SETTING_TEXT || table->type == SETTING_CHOICE || table->type == SETTING_INSTANT;
		const char *quote = quoted && table->example && table->example[0] != '"' ? "\"" : "";

		if (table->required && table != except)
			n += (size_t)snprintf(text + n, size - n, "%s = %s%s%s; ", table->name, quote, table->example, quote);
	}
	return n;
}

static void put_group(char *text, size_t size, const struct setting_group *group, const char *body)
{
	size_t n = strlen(text);

	snprintf(text + n, size - n, group->list ? "%s = ( { %s } );\n" : "%s = { %s };\n", group->name, body);
}

/* A whole configuration with `assignment` in the place of `setting`; `driver` chooses the intake. */
static void compose(char *text, size_t size, const struct setting_group *group, const struct setting *setting,
                    const char *assignment, const struct intake_driver *driver)
{
	text[0] = 0;
	for (const struct setting_group *g = config_groups; g->name; g++) {
		bool intake = !strcmp(g->name, "intake"), channels = !strcmp(g->name, "channels");
		char body[4096] = "", more[1024];

		if (intake && strcmp(setting->name, "driver"))
			snprintf(body, sizeof(body), "driver = \"%s\"; ", driver->name);
		else if (!intake)
			put_required(body, sizeof(body), g->settings, g == group ? setting : NULL);
		if (intake) {
			put_required(more, sizeof(more), driver->settings, g == group ? setting : NULL);
			strncat(body, more, sizeof(body) - strlen(body) - 1);
		}
		if (channels && strcmp(setting->name, "wavelength_nm") && strcmp(setting->name, "frequency_mhz"))
			strncat(body, "wavelength_nm = 600; ", sizeof(body) - strlen(body) - 1);
		if (g == group)
			strncat(body, assignment, sizeof(body) - strlen(body) - 1);
		if (g->required || g == group)
			put_group(text, size, g, body);
	}
}

static unsigned refused;

static void expect_refusal(const struct setting_group *group, const struct setting *setting, const char *value,
                           const struct intake_driver *driver)
{
	char text[16384], assignment[512];

	snprintf(assignment, sizeof(assignment), "%s = %s;", setting->name, value);
	compose(text, sizeof(text), group, setting, assignment, driver);
	if (load(text) != -EINVAL || !strstr(said, setting->name) || !strstr(said, "test.conf"))
		fail_msg("%s.%s = %s was not refused by name; said: %s", group->name, setting->name, value, said);
	refused++;
}

static void try_setting(const struct setting_group *group, const struct setting *s, const struct intake_driver *driver)
{
	char value[64];

	switch (s->type) {
	case SETTING_NUMBER: case SETTING_INTEGER:
		expect_refusal(group, s, "\"a word\"", driver);
		expect_refusal(group, s, "( 1, 2 )", driver);
		snprintf(value, sizeof(value), "%.17g", s->max + 1 + fabs(s->max) * 0.01);
		expect_refusal(group, s, strpbrk(value, ".e") || s->type == SETTING_INTEGER ? value : strcat(value, ".0"), driver);
		snprintf(value, sizeof(value), "%.17g", s->min - 1 - fabs(s->min) * 0.01);
		/* 0 stands for "not given" where that is the fallback and lies outside the range. */
		if (s->min - 1 != 0 || s->fallback != 0)
			expect_refusal(group, s, strpbrk(value, ".e") || s->type == SETTING_INTEGER ? value : strcat(value, ".0"), driver);
		if (s->type == SETTING_INTEGER)
			expect_refusal(group, s, "1.5", driver);
		break;
	case SETTING_BOOLEAN:
		expect_refusal(group, s, "\"perhaps\"", driver);
		break;
	case SETTING_TEXT:
		expect_refusal(group, s, "12", driver);
		break;
	case SETTING_CHOICE:
		expect_refusal(group, s, "\"no-such-word\"", driver);
		expect_refusal(group, s, "5", driver);
		break;
	case SETTING_INSTANT:
		expect_refusal(group, s, "\"yesterday\"", driver);
		expect_refusal(group, s, "\"2031-04-02T01:23:45\"", driver);
		expect_refusal(group, s, "\"2031-02-30T01:23:45Z\"", driver);
		break;
	}
}

static void misspell(const struct setting_group *group, const struct setting *s, const struct intake_driver *driver)
{
	char text[16384], assignment[256];

	/* Two letters swapped: the nearest known name is suggested. */
	snprintf(assignment, sizeof(assignment), "%c%c%s = 1;", s->name[1], s->name[0], s->name + 2);
	if (s->name[0] == s->name[1])
		return;
	compose(text, sizeof(text), group, s, assignment, driver);
	assert_int_equal(load(text), -EINVAL);
	if (!strstr(said, s->name))
		fail_msg("misspelt %s.%s came without its suggestion: %s", group->name, s->name, said);
	refused++;
}

static void every_malformed_setting_is_refused_by_name(void **state)
{
	(void)state;
	for (const struct setting_group *g = config_groups; g->name; g++)
		for (const struct setting *s = g->settings; s->name; s++) {
			try_setting(g, s, &intake_synthetic);
			misspell(g, s, &intake_synthetic);
		}
	for (const struct setting_group *g = config_groups; g->name; g++) {
		if (strcmp(g->name, "intake"))
			continue;
		for (size_t d = 0; intake_drivers[d]; d++)
			for (const struct setting *s = intake_drivers[d]->settings; s->name; s++) {
				try_setting(g, s, intake_drivers[d]);
				misspell(g, s, intake_drivers[d]);
			}
	}
	print_message("# %u malformed configurations refused\n", refused);
	assert_true(refused > 200);
}

/* What the table cannot know: settings that do not go together. */
static void contradictions_are_refused(void **state)
{
	static const struct { const char *text, *sentence; } cases[] = {
		{ "intake = { driver = \"synthetic\"; }; keep = { folder = \"/tmp\"; };\n"
		  "channels = ( { name = \"a\"; column = 1; } );", "wavelength_nm" },
		{ "intake = { driver = \"synthetic\"; }; keep = { folder = \"/tmp\"; };\n"
		  "channels = ( { name = \"a\"; column = 1; wavelength_nm = 600; frequency_mhz = 1420; } );", "only one" },
		{ "intake = { driver = \"synthetic\"; }; keep = { folder = \"/tmp\"; };\n"
		  "channels = ( { name = \"a\"; column = 1; wavelength_nm = 600; }, { name = \"b\"; column = 1;"
		  " measure = \"pulse\"; } );", "column 1" },
		{ "intake = { driver = \"synthetic\"; }; keep = { folder = \"/tmp\"; };\n"
		  "channels = ( { name = \"a\"; column = 1; measure = \"pulse\"; }, { name = \"b\"; column = 2;"
		  " measure = \"pulse\"; } );", "2 channels carry the pulse" },
		{ "intake = { driver = \"synthetic\"; }; keep = { folder = \"/tmp\"; };\n"
		  "channels = ( { name = \"a\"; column = 1; measure = \"power\"; frequency_mhz = 1420; } );", "power" },
		{ "intake = { driver = \"synthetic\"; }; keep = { folder = \"/tmp\"; };\n"
		  "channels = ( { name = \"a\"; column = 1; wavelength_nm = 600; } );\n"
		  "watch = { shadow_speed_min_mps = 800; shadow_speed_max_mps = 400; };", "shadow_speed_min_mps" },
		{ "intake = { driver = \"synthetic\"; }; keep = { folder = \"/tmp\"; };\n"
		  "channels = ( { name = \"a\"; column = 1; wavelength_nm = 600; } );\n"
		  "watch = { threshold_snr = 0.5; };", "outside 3 to 1000" },
		{ "channels = ( { name = \"a\"; column = 1; wavelength_nm = 600; } ); keep = { folder = \"/tmp\"; };",
		  "intake" },
		{ "intake = { driver = \"synthetic\"; }; keep = { folder = \"/tmp\"; }; channels = ();", "channels" },
	};

	(void)state;
	for (size_t k = 0; k < sizeof(cases) / sizeof(*cases); k++) {
		assert_int_equal(load(cases[k].text), -EINVAL);
		if (!strstr(said, cases[k].sentence))
			fail_msg("case %zu: \"%s\" was not said, but: %s", k, cases[k].sentence, said);
	}
}

static void all_that_is_wrong_is_said_at_once(void **state)
{
	(void)state;
	assert_int_equal(load("intake = { driver = \"synthetic\"; };\nkeep = { folder = \"/tmp\"; ring_s = -1; };\n"
	                      "channels = ( { name = \"a\"; column = 77; } );\n"), -EINVAL);
	assert_non_null(strstr(said, "ring_s"));
	assert_non_null(strstr(said, "column"));
	assert_non_null(strstr(said, "line 2"));
	assert_non_null(strstr(said, "line 3"));
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(the_minimal_configuration_is_accepted),
		cmocka_unit_test(every_malformed_setting_is_refused_by_name),
		cmocka_unit_test(contradictions_are_refused),
		cmocka_unit_test(all_that_is_wrong_is_said_at_once),
	};

	return cmocka_run_group_tests(tests, NULL, NULL);
}
