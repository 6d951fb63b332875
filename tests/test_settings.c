/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>
#include <cmocka.h>

#include "../daemon/base/suggest.h"
#include "../daemon/base/utf8.h"
#include "fuzz/settings_table.h"
#include "limbwatch/log.h"

enum { SENTENCES = 128, TEXT = 16384 };

static struct {
	unsigned errors, warnings;
	char sentence[SENTENCES][512];
} said;

static void hear(void *context, enum log_level level, const char *sentence)
{
	(void)context;
	snprintf(said.sentence[(said.errors + said.warnings) % SENTENCES], sizeof(said.sentence[0]), "%s", sentence);
	said.errors += level == LEVEL_ERROR;
	said.warnings += level == LEVEL_WARNING;
}

/* A sentence that holds both texts was said. */
static bool was_said(const char *a, const char *b)
{
	for (unsigned i = 0; i < said.errors + said.warnings && i < SENTENCES; i++)
		if (strstr(said.sentence[i], a) && strstr(said.sentence[i], b))
			return true;
	return false;
}

static void assert_said(const char *a, const char *b)
{
	if (was_said(a, b))
		return;
	for (unsigned i = 0; i < said.errors + said.warnings && i < SENTENCES; i++)
		print_message("# said: %s\n", said.sentence[i]);
	fail_msg("nobody said \"%s\" with \"%s\"", a, b);
}

static int parse(struct settings **out, const char *text)
{
	memset(&said, 0, sizeof(said));
	return settings_parse(out, text, "vigil.conf", all_groups);
}

static void assert_refused(const char *text, const char *a, const char *b)
{
	struct settings *settings = NULL;

	if (parse(&settings, text) != -EINVAL)
		fail_msg("accepted, though it should be refused: %s", a);
	assert_null(settings);
	assert_said(a, b);
}

static struct settings *accepted(const char *text)
{
	struct settings *settings = NULL;

	if (parse(&settings, text) != 0)
		fail_msg("refused: %s", said.sentence[0]);
	assert_int_equal(said.errors, 0);
	return settings;
}

/* ---- Malformed configurations made from the table itself ---- */

/* One row of the table under test: its group, and the driver whose further table it stands in, or -1. */
struct target { const struct setting_group *group; const struct setting *row; int driver; };

static void append(char *text, const char *format, ...) __attribute__((format(printf, 2, 3)));

static void append(char *text, const char *format, ...)
{
	size_t n = strlen(text);
	va_list arguments;

	va_start(arguments, format);
	vsnprintf(text + n, TEXT - n, format, arguments);
	va_end(arguments);
}

static void append_rows(char *text, const struct setting *table, const struct target *target, const char *line,
			int *at)
{
	for (; table->name; table++) {
		bool quoted = table->example && table->example[0] != '"'
			&& (table->type == SETTING_CHOICE || table->type == SETTING_INSTANT);

		if (table == target->row) {
			for (const char *p = text; *p; p++)
				*at += *p == '\n';
			append(text, "\t%s\n", line);
		} else if (table->required && strcmp(table->name, "driver") != 0) {
			append(text, quoted ? "\t%s = \"%s\";\n" : "\t%s = %s;\n", table->name, table->example);
		}
	}
}

/* A sound configuration in which `line` stands in the target's place; returns the number of that line. */
static int write_configuration(char *text, const struct target *target, const char *line)
{
	static const char *const drivers[] = { "file", "synthetic", "card" };
	int driver = target->driver >= 0 ? target->driver : 0, at = 1;

	text[0] = '\0';
	for (const struct setting_group *group = all_groups; group->name; group++) {
		if (!group->required && group != target->group)
			continue;
		append(text, group->list ? "%s = ( {\n" : "%s = {\n", group->name);
		if (group->more && target->row != &intake_table[INTAKE_DRIVER])
			append(text, "\tdriver = \"%s\";\n", drivers[driver]);
		append_rows(text, group->settings, target, line, &at);
		if (group->more)
			append_rows(text, intake_tables[driver], target, line, &at);
		append(text, group->list ? "} );\n" : "};\n");
	}
	return at;
}

/* What the row does not take, each one as it would stand behind the =; NULL at the end. */
static size_t malformed_values(const struct setting *row, char value[][64])
{
	static const char *const wrong_type[][16] = {
		[SETTING_NUMBER] = { "true", "\"5\"", "{ }", "( )", "[ ]", "( 1.0 )", "1e999", "-1e999", NULL },
		[SETTING_INTEGER] = { "1.5", "true", "\"5\"", "{ }", "( )", "[ 1 ]", "1e999", "1e300", NULL },
		[SETTING_BOOLEAN] = { "1", "0.0", "\"true\"", "{ }", "( true )", "[ ]", NULL },
		[SETTING_TEXT] = { "5", "1.5", "true", "{ }", "( \"a\" )", "[ \"a\" ]", "\"a\\x07\"", "\"\xe9\"", NULL },
		[SETTING_CHOICE] = { "0", "true", "{ }", "( )", "\"\"", "\"no_such_word\"", "\"immersion|emersion\"", "\"|\"", NULL },
		[SETTING_INSTANT] = { "0", "{ }", "( )", "\"\"", "\"2031-04-02T01:23:45\"", "\"2031-04-02T01:23:45+02:00\"",
			"\"2031-02-30T01:23:45Z\"", "\"2031-04-02T01:23:60Z\"", "\"1971-04-02T01:23:45Z\"",
			"\"2262-04-02T01:23:45Z\"", "\"tomorrow\"", NULL },
	};
	size_t n = 0;

	for (; wrong_type[row->type][n]; n++)
		snprintf(value[n], 64, "%s", wrong_type[row->type][n]);
	if (row->type == SETTING_TEXT && (row->required || row->min > 0))
		snprintf(value[n++], 64, "\"\"");
	if (row->type == SETTING_TEXT && row->max > 0)
		snprintf(value[n++], 64, "\"%0*d\"", (int)row->max + 1, 0);
	if ((row->type != SETTING_NUMBER && row->type != SETTING_INTEGER) || row->min == row->max)
		return n;
	if (isfinite(row->min) && row->type == SETTING_INTEGER)
		snprintf(value[n++], 64, "%.0f", row->min - 1);
	else if (isfinite(row->min))
		snprintf(value[n++], 64, "%.17e", row->min - 1e-9 * (1 + fabs(row->min)));
	if (isfinite(row->max) && row->type == SETTING_INTEGER)
		snprintf(value[n++], 64, "%lld", (long long)row->max + 1);
	else if (isfinite(row->max))
		snprintf(value[n++], 64, "%.17e", row->max + 1e-9 * (1 + fabs(row->max)));
	return n;
}

static void each_value_is_refused_by_name(const struct target *target)
{
	char value[24][64], line[256], where[256], name[256], text[TEXT];
	size_t n = malformed_values(target->row, value);
	struct settings *settings = NULL;

	for (size_t i = 0; i < n; i++) {
		snprintf(line, sizeof(line), "%s = %s;", target->row->name, value[i]);
		snprintf(where, sizeof(where), "vigil.conf line %d: %s.%s is ", write_configuration(text, target, line),
			 target->group->name, target->row->name);
		snprintf(name, sizeof(name), "(%.100s", target->row->meaning);
		assert_refused(text, where, name);
		if (said.errors != 1)
			fail_msg("%u sentences about %s", said.errors, line);
	}
	/* What is no value at all stops libconfig; the line is shown. */
	static const char *const no_value[] = { "nan", "inf", "five", "=", "1..2", "\"open", "0x", "{", "3 = 4", "\\" };

	for (size_t i = 0; i < sizeof(no_value) / sizeof(no_value[0]); i++) {
		snprintf(line, sizeof(line), "%s = %s;", target->row->name, no_value[i]);
		snprintf(where, sizeof(where), "vigil.conf line %d: ", write_configuration(text, target, line));
		if (parse(&settings, text) != -EINVAL || said.errors != 1)
			fail_msg("%u sentences about %s", said.errors, line);
		assert_said("vigil.conf line ", "");
		if (no_value[i][0] != '{' && no_value[i][0] != '"')
			assert_said(where, target->row->name);
	}
}

static void misspelt_name_is_answered_with_the_right_one(const struct target *target)
{
	char line[256], name[128], text[TEXT], where[256], answer[256];
	size_t last = strlen(target->row->name) - 1;
	int at;

	snprintf(name, sizeof(name), "%s", target->row->name);
	name[last] = target->row->name[last - 1];
	name[last - 1] = target->row->name[last];
	snprintf(line, sizeof(line), "%s = 1;", name);
	at = write_configuration(text, target, line);
	snprintf(where, sizeof(where), "vigil.conf line %d: %s.%s is unknown", at, target->group->name, name);
	snprintf(answer, sizeof(answer), "did you mean %s?", target->row->name);
	assert_refused(text, where, answer);
	if (target->row->required) {
		snprintf(where, sizeof(where), "%s.%s is missing", target->group->name, target->row->name);
		assert_said(where, "for example");
	}
	assert_int_equal(said.errors, target->row->required ? 2 : 1);
}

static void name_given_twice_is_refused(const struct target *target)
{
	char line[256], text[TEXT], where[64];
	int at;

	snprintf(line, sizeof(line), "%s = 1;\n\t%s = 1;", target->row->name, target->row->name);
	at = write_configuration(text, target, line);
	snprintf(where, sizeof(where), "vigil.conf line %d: ", at + 1);
	assert_refused(text, where, "duplicate");
	assert_said("", target->row->name);
}

/* A sound value, to prove that the rest of the made configuration is sound. */
static void sound_value_is_accepted(const struct target *target)
{
	static const char *const value[] = {
		[SETTING_NUMBER] = "%.17g", [SETTING_INTEGER] = "%.0f", [SETTING_BOOLEAN] = "true", [SETTING_TEXT] = "\"x y\"",
		[SETTING_CHOICE] = "\"%.*s\"", [SETTING_INSTANT] = "\"2016-12-31T23:59:60Z\"",
	};
	char line[256], shown[128], text[TEXT];
	const struct setting *row = target->row;

	if (row->type == SETTING_CHOICE)
		snprintf(shown, sizeof(shown), "\"%.*s\"", (int)strcspn(row->choices, "|"), row->choices);
	else if (row->type == SETTING_NUMBER || row->type == SETTING_INTEGER)
		snprintf(shown, sizeof(shown), "%.17g", isfinite(row->max) ? row->max : row->min);
	else
		snprintf(shown, sizeof(shown), "%s", value[row->type]);
	snprintf(line, sizeof(line), "%s = %s;", row->name, shown);
	write_configuration(text, target, line);
	settings_free(accepted(text));
}

static void for_every_row(void (*check)(const struct target *target))
{
	unsigned rows = 0;

	for (const struct setting_group *group = all_groups; group->name; group++) {
		for (const struct setting *row = group->settings; row->name; row++, rows++)
			check(&(struct target){ group, row, -1 });
		for (int driver = 0; group->more && driver < 3; driver++)
			for (const struct setting *row = intake_tables[driver]; row->name; row++, rows++)
				check(&(struct target){ group, row, driver });
	}
	assert_int_equal(rows, 24);
}

static void sound_values_are_accepted_in_every_row(void **state)
{
	(void)state;
	for_every_row(sound_value_is_accepted);
}

static void malformed_values_are_refused_in_every_row(void **state)
{
	(void)state;
	for_every_row(each_value_is_refused_by_name);
}

static void misspelt_names_are_answered_in_every_row(void **state)
{
	(void)state;
	for_every_row(misspelt_name_is_answered_with_the_right_one);
}

static void doubles_are_refused_in_every_row(void **state)
{
	(void)state;
	for_every_row(name_given_twice_is_refused);
}

/* ---- Values ---- */

#define SITE "site = { station = \"Brackenfold\"; };\n"
#define INTAKE "intake = { driver = \"file\"; path = \"evening.wav\"; };\n"
#define CHANNELS "channels = ( { name = \"red\"; } );\n"
#define SOUND SITE INTAKE CHANNELS

static void values_and_fallbacks_stand_in_the_order_of_the_table(void **state)
{
	struct settings *settings = accepted(
		"site = { station = \"Brackenfold\"; latitude_deg = -47; };\n"
		"intake : { driver = \"card\"; columns = 2; rate_hz = 96e3; }\n"
		"channels = (\n"
		"  { name = \"red\"; inverted = TRUE; },\n"
		"  { name = \"blue\";\n"
		"    column = 0x2; measure = \"count\"; wavelength_m = .45e-6; offset = -99999999999; }\n"
		");\n");
	const struct setting_value *site = settings_values(settings, "site", 0);
	const struct setting_value *intake = settings_values(settings, "intake", 0);
	const struct setting_value *blue = settings_values(settings, "channels", 1);
	const struct setting_value *keep = settings_values(settings, "keep", 0);

	(void)state;
	assert_string_equal(settings_path(settings), "vigil.conf");
	assert_string_equal(site[SITE_STATION].text, "Brackenfold");
	assert_true(site[SITE_LATITUDE].number == -47 && site[SITE_LATITUDE].given && site[SITE_LATITUDE].line == 1);
	assert_true(site[SITE_HEIGHT].number == 0 && !site[SITE_HEIGHT].given && site[SITE_HEIGHT].line == 0);
	assert_int_equal(intake[INTAKE_DRIVER].integer, 2);
	assert_string_equal(intake[INTAKE_DRIVER].text, "card");
	assert_true(intake[INTAKE_PERIOD].number == 0.02);
	assert_string_equal(intake[INTAKE_BASE + 0].text, "hw:0");
	assert_int_equal(intake[INTAKE_BASE + 1].integer, 96000);
	assert_int_equal(settings_count(settings, "channels"), 2);
	assert_int_equal(settings_values(settings, "channels", 0)[CHANNEL_INVERTED].integer, 1);
	assert_int_equal(blue[CHANNEL_COLUMN].integer, 2);
	assert_int_equal(blue[CHANNEL_COLUMN].line, 6);
	assert_int_equal(blue[CHANNEL_MEASURE].integer, 2);
	assert_int_equal(blue[CHANNEL_INVERTED].integer, 0);
	assert_true(blue[CHANNEL_WAVELENGTH].number == 0.45e-6);
	assert_int_equal(blue[CHANNEL_OFFSET].integer, -99999999999);
	assert_int_equal(settings_line(settings, "channels", 0), 4);
	assert_int_equal(settings_line(settings, "channels", 1), 5);
	assert_null(settings_values(settings, "channels", 2));
	assert_int_equal(settings_count(settings, "keep"), 1);
	assert_int_equal(settings_line(settings, "keep", 0), 0);
	assert_true(keep[KEEP_PRE].number == 5 && !keep[KEEP_PRE].given);
	assert_int_equal(keep[KEEP_LIMIT].integer, 2147483648);
	assert_int_equal(settings_count(settings, "expected"), 0);
	assert_null(settings_values(settings, "expected", 0));
	assert_int_equal(settings_count(settings, "no such group"), 0);
	settings_free(settings);
}

static void fallbacks_need_no_file(void **state)
{
	struct setting_value value[CHANNEL_ROWS];

	(void)state;
	assert_int_equal(settings_fallbacks(channel_table, value), CHANNEL_ROWS);
	assert_int_equal(value[CHANNEL_COLUMN].integer, 1);
	assert_int_equal(value[CHANNEL_OFFSET].integer, -3);
	assert_true(value[CHANNEL_WAVELENGTH].number == 6.5e-7);
	assert_int_equal(value[CHANNEL_MEASURE].integer, 0);
	assert_string_equal(value[CHANNEL_MEASURE].text, "voltage");
	assert_null(value[CHANNEL_NAME].text);
	assert_int_equal(settings_fallbacks(site_table, value), SITE_ROWS);
	assert_true(isnan(value[SITE_LATITUDE].number));
	assert_int_equal(settings_fallbacks(intake_table, value), INTAKE_BASE);
	assert_int_equal(value[INTAKE_DRIVER].integer, -1);
	assert_int_equal(settings_fallbacks(NULL, value), 0);
}

/* libconfig 1.5 by itself reads the first as 505032704 and the third as -1. */
static void whole_numbers_keep_all_their_digits(void **state)
{
	static const struct { const char *text; double number; } cases[] = {
		{ "4800000000", 4800000000.0 }, { "-2147483649", -2147483649.0 }, { "0xFFFFFFFF", 4294967295.0 },
		{ "0010", 10 }, { "+7", 7 }, { "5L", 5 }, { "-0", 0 }, { "1e3", 1000 }, { "1.5E-3", 0.0015 }, { "5.", 5 },
		{ ".5", 0.5 }, { "-1e-3", -0.001 }, { "9223372036854775807", 9223372036854775807.0 }, { "1.0e+2", 100 },
	};

	(void)state;
	for (size_t i = 0; i < sizeof(cases) / sizeof(cases[0]); i++) {
		struct settings *settings;
		char text[512];

		snprintf(text, sizeof(text), SOUND "keep = { anything = %s; };", cases[i].text);
		settings = accepted(text);
		if (settings_values(settings, "keep", 0)[KEEP_FREE].number != cases[i].number)
			fail_msg("%s is read as %.17g", cases[i].text, settings_values(settings, "keep", 0)[KEEP_FREE].number);
		settings_free(settings);
	}
	assert_refused(SOUND "keep = { anything = 9223372036854775808; };", "line 4", "9223372036854775808 is outside");
	assert_refused(SOUND "keep = { anything = 0xFFFFFFFFFFFFFFFFF; };", "line 4", "0xFFFFFFFFFFFFFFFFF is outside");
	assert_refused(SOUND "keep = { limit_bytes = 9007199254740994; };", "keep.limit_bytes is 9007199254740994", "outside");
}

static void earlier_names_are_understood_with_a_warning(void **state)
{
	struct settings *settings = accepted(SOUND "keep = { before_s = 12; };");

	(void)state;
	assert_int_equal(said.warnings, 1);
	assert_said("vigil.conf line 4: keep.before_s", "pre_trigger_s");
	assert_true(settings_values(settings, "keep", 0)[KEEP_PRE].number == 12);
	settings_free(settings);
	assert_refused(SOUND "keep = { before_s = 12;\n pre_trigger_s = 13; };", "keep.before_s", "pre_trigger_s");
	assert_refused(SOUND "keep = { before_s = -12; };", "keep.before_s is -12, outside 0 to 600", "seconds recorded");
}

/* ---- Names and forms ---- */

static void everything_wrong_is_said_at_once(void **state)
{
	(void)state;
	assert_refused("intake = { driver = \"card\"; columns = 2; rate_hz = 1; period_s = 7; };\n"
		       "channels = ( { column = 9;\n measure = \"cuont\"; }, 5 );\n"
		       "keep = { pre_trigger_s = -3; };\n"
		       "kep = { };\n", "vigil.conf: site = { ... } is missing", "where the telescope stands");
	assert_said("line 1: intake.rate_hz is 1, outside 8000 to 192000 (frames per second)", "");
	assert_said("line 1: intake.period_s is 7, outside 0.001 to 1", "");
	assert_said("line 2: channels.name is missing (name of the channel), for example name = \"red\";", "");
	assert_said("line 2: channels.column is 9, outside 1 to 8", "");
	assert_said("line 3: channels.measure is \"cuont\", but must be one of \"voltage\", \"power\", \"count\"",
		    "did you mean \"count\"?");
	assert_said("line 2: number 2 of the list channels is not { ... }", "");
	assert_said("line 4: keep.pre_trigger_s is -3, outside 0 to 600 (seconds recorded before a trigger)", "");
	assert_said("line 5: kep is unknown; did you mean keep?", "");
	assert_int_equal(said.errors, 9);
}

static void settings_in_the_wrong_group_are_sent_to_theirs(void **state)
{
	(void)state;
	assert_refused(SITE INTAKE "channels = ( { name = \"red\"; pre_trigger_s = 5; } );", "channels.pre_trigger_s",
		       "belongs into keep = { ... }");
	assert_refused(SOUND "column = 3;", "line 4: column stands outside its group", "channels = ( { ... } )");
	assert_refused(SOUND "height = 3;", "line 4: height is unknown", "no group of settings");
	assert_refused(SOUND "keep = { zzzzzzzz = 3; };", "line 4: keep.zzzzzzzz is unknown", "");
	assert_refused(SOUND "keep = { pre_trigger = 3; };", "keep.pre_trigger is unknown", "did you mean pre_trigger_s?");
	assert_refused(SITE "intake = { driver = \"file\"; path = \"a\"; device = \"hw:1\"; };\n" CHANNELS,
		       "line 2: intake.device does not apply here", "driver = \"card\": a sound card");
}

/* Which rows follow a wrong choice nobody knows: only the choice is said. */
static void rows_behind_a_wrong_choice_are_not_called_unknown(void **state)
{
	(void)state;
	assert_refused(SITE "intake = { driver = \"flie\"; path = \"a\"; device = \"hw:1\"; };\n" CHANNELS,
		       "intake.driver is \"flie\"", "did you mean \"file\"?");
	assert_int_equal(said.errors, 1);
	assert_refused(SITE "intake = { path = \"a\"; };\n" CHANNELS, "intake.driver is missing", "driver = \"file\";");
	assert_int_equal(said.errors, 1);
	assert_refused(SITE "intake = { driver = \"file\"; };\n" CHANNELS, "line 2: intake.path is missing", "evening.wav");
	assert_int_equal(said.errors, 1);
}

static void groups_in_the_wrong_form_are_refused(void **state)
{
	static const char *const forms[] = { "5", "\"a\"", "[ ]", "true", "[ 1, 2 ]", "1.5" };
	char text[512];

	(void)state;
	for (size_t i = 0; i < sizeof(forms) / sizeof(forms[0]); i++) {
		snprintf(text, sizeof(text), SITE INTAKE "channels = %s;", forms[i]);
		assert_refused(text, "line 3: channels must be a list of groups", "( { ... }, { ... } )");
		snprintf(text, sizeof(text), INTAKE CHANNELS "site = %s;", forms[i]);
		assert_refused(text, "line 3: site must be one group", "site = { ... };");
	}
	assert_refused(SITE INTAKE "channels = { name = \"red\"; };", "line 3: channels must be a list of groups", "");
	assert_refused(INTAKE CHANNELS "site = ( { station = \"a\"; } );", "line 3: site must be one group", "");
	assert_refused(SITE INTAKE "channels = ( );", "line 3: channels is empty", "at least one");
	assert_refused(SITE INTAKE, "channels = ( { ... } ) is missing", "the columns that are watched");
	assert_refused(SOUND "site = { };", "line 4", "duplicate");
}

/* ---- The file ---- */

static void texts_that_are_no_configuration_are_refused(void **state)
{
	(void)state;
	assert_refused("", "site = { ... } is missing", "");
	assert_refused("RIFF\x01\x02\x03", "line 1: the byte 0x01", "no text file");
	assert_refused("\n\n\177ELF", "line 3: the byte 0x7f", "");
	assert_refused("site = {\n station = \"a\";\n", "line 1: the bracket opened here", "}");
	assert_refused("site = {\n station = \"a\"; );\n", "line 2: ) stands where the { of line 1", "closed with }");
	assert_refused("\n}", "line 2: } closes nothing", "");
	assert_refused("site = { station = \"a;\n};\n", "line 1: a text has no closing quote", "");
	assert_refused("site = { station = \"a\\\n\"; };\n", "line 1: a text has no closing quote", "");
	assert_refused("site = { station = \"a\\x00b\"; };\n", "line 1: a text holds \\x00", "");
	assert_refused("\n/* site\n", "line 2: the comment", "*/");
	assert_refused("\n@include \"/etc/hostname\"\n", "line 2: @include is refused", "");
	assert_refused("a=(((((((((((((((((1)))))))))))))))));", "nested more than 16 deep", "");
	assert_refused("site = station = 3;", "line 1: syntax error", "site = station = 3;");
	settings_free(accepted("\xef\xbb\xbf" SOUND));                      /* as some editors begin a file */
	settings_free(accepted("// } {\r\n# @include \"x\"\r\n/* \" \n*/" SITE "\r\n" INTAKE CHANNELS));
	settings_free(accepted(SITE "intake = { driver = \"file\"; path = \"a{(\\\"[#//\"; };" CHANNELS));
}

static void endless_files_end_with_a_sentence(void **state)
{
	static char text[1 << 20];
	struct settings *settings;
	size_t n = 0;

	(void)state;
	for (int i = 0; i < 30000; i++)
		n += (size_t)sprintf(text + n, "a%d=%d;", i, i);
	assert_refused(text, "more than 256 settings in one group", "");
	n = (size_t)sprintf(text, SITE INTAKE "channels = (");
	for (int i = 0; i < 2000; i++)
		n += (size_t)sprintf(text + n, "%s{ name = \"channel %d\"; column = 1; }", i ? ", " : "", i);
	sprintf(text + n, ");");
	settings = accepted(text);
	assert_int_equal(settings_count(settings, "channels"), 2000);
	assert_string_equal(settings_values(settings, "channels", 1999)[CHANNEL_NAME].text, "channel 1999");
	settings_free(settings);
	n = (size_t)sprintf(text, "channels=(");
	for (int i = 0; i < 100000; i++)
		n += (size_t)sprintf(text + n, "1,");
	sprintf(text + n, "1);");
	assert_refused(text, "number 1 of the list channels is not { ... }", "");
	assert_true(said.errors < 120);
	assert_said("more is wrong than these", "");
}

static void assert_load_fails(const char *path, int expected, const char *reason)
{
	struct settings *settings = NULL;

	memset(&said, 0, sizeof(said));
	assert_int_equal(settings_load(&settings, path, all_groups), expected);
	assert_null(settings);
	assert_int_equal(said.errors, 1);
	assert_said(path, reason);
}

static void files_that_cannot_be_read_are_said(void **state)
{
	char folder[] = "/tmp/limbwatch-settings-XXXXXX", path[128], zeros[4096] = { 0 };
	struct settings *settings = NULL;
	FILE *file;

	(void)state;
	assert_non_null(mkdtemp(folder));
	assert_load_fails(folder, -EISDIR, "is a folder");
	snprintf(path, sizeof(path), "%s/a.conf", folder);
	assert_load_fails(path, -ENOENT, "No such file");
	assert_load_fails("/dev/zero", -EINVAL, "is a device");
	assert_int_equal(mkfifo(path, 0600), 0);
	assert_load_fails(path, -EINVAL, "not a configuration file");
	unlink(path);
	assert_int_equal(symlink(path, path), 0);
	assert_load_fails(path, -ELOOP, "symbolic links");
	unlink(path);

	file = fopen(path, "w");
	assert_non_null(file);
	fputs(SOUND, file);
	fwrite(zeros, 1, 1, file);
	fclose(file);
	assert_load_fails(path, -EINVAL, "line 4: the byte 0x00");
	file = fopen(path, "w");
	for (int i = 0; i < 257; i++)
		fwrite(zeros, 1, sizeof(zeros), file);
	fclose(file);
	assert_load_fails(path, -EINVAL, "longer than 1048576 bytes");
	file = fopen(path, "w");
	fputs(SOUND, file);
	fclose(file);
	assert_int_equal(settings_load(&settings, path, all_groups), 0);
	assert_string_equal(settings_path(settings), path);
	settings_free(settings);
	unlink(path);
	rmdir(folder);
	settings_free(NULL);
}

/* ---- Sample and manual ---- */

static char *written(void (*write)(FILE *out, const struct setting_group *groups))
{
	char *text = NULL;
	size_t n;
	FILE *out = open_memstream(&text, &n);

	assert_non_null(out);
	write(out, all_groups);
	fclose(out);
	return text;
}

/* Tabs reach to the next multiple of 8, as in an editor. */
static void assert_within_100_columns(const char *text)
{
	size_t column = 0;

	for (; *text; text++) {
		column = *text == '\n' ? 0 : *text == '\t' ? (column / 8 + 1) * 8
			: column + (((unsigned char)*text & 0xc0) != 0x80);
		if (column > 100)
			fail_msg("a line is longer than 100 columns: ...%.40s", text - 40);
	}
}

static void sample_parses_with_fallbacks_and_examples(void **state)
{
	char *sample = written(settings_write_sample);
	struct settings *settings = accepted(sample);

	(void)state;
	assert_within_100_columns(sample);
	assert_string_equal(settings_values(settings, "site", 0)[SITE_STATION].text, "Brackenfold");
	assert_string_equal(settings_values(settings, "intake", 0)[INTAKE_BASE + FILE_PATH].text, "evening.wav");
	assert_int_equal(settings_count(settings, "channels"), 1);
	assert_int_equal(settings_count(settings, "expected"), 0);
	assert_false(settings_values(settings, "keep", 0)[KEEP_PRE].given);
	assert_false(settings_values(settings, "channels", 0)[CHANNEL_MEASURE].given);
	settings_free(settings);
	free(sample);
}

/* Takes "# " from a group that sleeps, and from "# name = value;" in it, except in the tables of other drivers. */
static void uncomment(char *sample)
{
	char *whole = strdup(sample), *out = sample, *rest = whole, *line;
	bool asleep = false, other_driver = false;

	assert_non_null(whole);
	while ((line = strsep(&rest, "\n"))) {
		char *mark;
		const char *end;

		asleep = asleep ? strcmp(line, "# );") != 0 : strncmp(line, "# expected = (", 14) == 0;
		other_driver = line[0] != '}' && (other_driver || strstr(line, "-- driver = \"synthetic\""));
		if (strncmp(line, "# \t", 3) == 0 || strcmp(line, "# );") == 0 || strncmp(line, "# expected = (", 14) == 0)
			line += 2;
		mark = strstr(line, "\t# ");
		end = line + strlen(line);
		if (mark && strspn(mark + 3, "abcdefghijklmnopqrstuvwxyz_") == strcspn(mark + 3, " ")
		    && strstr(mark, " = ") == mark + 3 + strcspn(mark + 3, " ") && end[-1] == ';' && !other_driver)
			memmove(mark + 1, mark + 3, strlen(mark + 3) + 1);
		out += sprintf(out, "%s\n", line);
	}
	free(whole);
}

static void sample_without_its_marks_says_the_same(void **state)
{
	char *sample = written(settings_write_sample);
	char *loose = calloc(2, strlen(sample) + 2);
	struct settings *settings;
	struct setting_value fallback[CHANNEL_ROWS];
	const struct setting_value *channel;

	(void)state;
	strcpy(loose, sample);
	uncomment(loose);
	settings = accepted(loose);
	settings_fallbacks(channel_table, fallback);
	channel = settings_values(settings, "channels", 0);
	for (size_t i = CHANNEL_COLUMN; i < CHANNEL_ROWS; i++) {
		assert_true(channel[i].given);
		assert_int_equal(channel[i].integer, fallback[i].integer);
		assert_true(channel[i].number == fallback[i].number || channel_table[i].type == SETTING_CHOICE);
	}
	assert_int_equal(settings_values(settings, "keep", 0)[KEEP_LIMIT].integer, 2147483648);
	assert_true(settings_values(settings, "site", 0)[SITE_LATITUDE].number == 47.25);
	assert_int_equal(settings_count(settings, "expected"), 1);
	assert_true(settings_values(settings, "expected", 0)[EXPECTED_SIGMA].given);
	assert_true(settings_values(settings, "intake", 0)[INTAKE_BASE + FILE_START].given);
	settings_free(settings);
	free(loose);
	free(sample);
}

static void assert_names_row(const char *text, const struct setting *row)
{
	char name[128];

	snprintf(name, sizeof(name), "  %s: ", row->name);
	if (!strstr(text, name))
		fail_msg("%s is not in the manual", row->name);
}

static void manual_names_every_row_within_100_columns(void **state)
{
	char *manual = written(settings_write_manual);

	(void)state;
	assert_within_100_columns(manual);
	for (const struct setting_group *group = all_groups; group->name; group++)
		for (const struct setting *row = group->settings; row->name; row++)
			assert_names_row(manual, row);
	for (int driver = 0; driver < 3; driver++)
		for (const struct setting *row = intake_tables[driver]; row->name; row++)
			assert_names_row(manual, row);
	assert_non_null(strstr(manual, "a number, 0 to 600; default 5; earlier called before_s\n"));
	assert_non_null(strstr(manual, " driver = \"card\": a sound card\n"));
	free(manual);
}

/* ---- Parts ---- */

static void distances_are_those_of_the_textbooks(void **state)
{
	static const struct { const char *a, *b; unsigned distance; } cases[] = {
		{ "kitten", "sitting", 3 },             /* the usual example of the plain distance; from memory */
		{ "saturday", "sunday", 3 },            /* the same */
		{ "ca", "abc", 3 },                     /* restricted form; 2 in the unrestricted: Boytsov (2011), from memory */
		{ "", "abc", 3 }, { "abc", "", 3 }, { "", "", 0 }, { "abc", "ABC", 0 },
		{ "ab", "ba", 1 }, { "abcd", "acbd", 1 }, { "abcd", "badc", 2 },
	};

	(void)state;
	for (size_t i = 0; i < sizeof(cases) / sizeof(cases[0]); i++)
		assert_int_equal(suggest_distance(cases[i].a, strlen(cases[i].a), cases[i].b, strlen(cases[i].b)),
				 cases[i].distance);
}

static void names_too_far_away_are_not_suggested(void **state)
{
	static const struct { const char *word, *nearest; } cases[] = {
		{ "threshold_srn", "threshold_snr" }, { "treshold_snr", "threshold_snr" }, { "threshold", "threshold_snr" },
		{ "gain", NULL }, { "", NULL }, { "rate", "rate_hz" }, { "rates_hz", "rate_hz" }, { "snr", NULL },
		{ "thr", "threshold_snr" }, { "th", NULL },
		{ "a_name_so_long_that_no_row_of_a_table_will_ever_have_it_without_being_told", NULL },
	};

	(void)state;
	for (size_t i = 0; i < sizeof(cases) / sizeof(cases[0]); i++) {
		struct suggestion suggestion = suggest_for(cases[i].word);

		suggest_offer(&suggestion, "threshold_snr", 13);
		suggest_offer(&suggestion, "rate_hz", 7);
		if (!cases[i].nearest)
			assert_null(suggestion.nearest);
		else
			assert_string_equal(suggestion.nearest, cases[i].nearest);
	}
}

/* Every code point, encoded by the rule of RFC 3629 section 3 here, is taken as one character; surrogates are not. */
static void utf8_is_what_rfc_3629_says(void **state)
{
	(void)state;
	for (unsigned c = 1; c < 0x120000; c++) {
		bool valid = c <= 0x10ffff && (c < 0xd800 || c > 0xdfff);
		size_t length = c < 0x80 ? 1 : c < 0x800 ? 2 : c < 0x10000 ? 3 : 4;
		static const unsigned char lead[] = { 0, 0, 0xc0, 0xe0, 0xf0 };
		char text[8] = { 0 };
		unsigned rest = c;

		for (size_t i = length; i-- > 1; rest >>= 6)
			text[i] = (char)(0x80 | (rest & 0x3f));
		text[0] = (char)(lead[length] | rest);
		if (utf8_length(text) != (valid ? length : 0))
			fail_msg("U+%04X", c);
		if (utf8_text_is_plain(text) != (valid && c >= 0x20 && (c < 0x7f || c >= 0xa0)))
			fail_msg("U+%04X", c);
	}
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(sound_values_are_accepted_in_every_row),
		cmocka_unit_test(malformed_values_are_refused_in_every_row),
		cmocka_unit_test(misspelt_names_are_answered_in_every_row),
		cmocka_unit_test(doubles_are_refused_in_every_row),
		cmocka_unit_test(values_and_fallbacks_stand_in_the_order_of_the_table),
		cmocka_unit_test(fallbacks_need_no_file),
		cmocka_unit_test(whole_numbers_keep_all_their_digits),
		cmocka_unit_test(earlier_names_are_understood_with_a_warning),
		cmocka_unit_test(everything_wrong_is_said_at_once),
		cmocka_unit_test(settings_in_the_wrong_group_are_sent_to_theirs),
		cmocka_unit_test(rows_behind_a_wrong_choice_are_not_called_unknown),
		cmocka_unit_test(groups_in_the_wrong_form_are_refused),
		cmocka_unit_test(texts_that_are_no_configuration_are_refused),
		cmocka_unit_test(endless_files_end_with_a_sentence),
		cmocka_unit_test(files_that_cannot_be_read_are_said),
		cmocka_unit_test(sample_parses_with_fallbacks_and_examples),
		cmocka_unit_test(sample_without_its_marks_says_the_same),
		cmocka_unit_test(manual_names_every_row_within_100_columns),
		cmocka_unit_test(distances_are_those_of_the_textbooks),
		cmocka_unit_test(names_too_far_away_are_not_suggested),
		cmocka_unit_test(utf8_is_what_rfc_3629_says),
	};

	log_set_sink(hear, NULL);
	return cmocka_run_group_tests(tests, NULL, NULL);
}
