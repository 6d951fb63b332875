/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <cmocka.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include "limbwatch/intake.h"
#include "limbwatch/settings.h"

static void a_driver_is_found_by_its_name(void **state)
{
	static const char *const names[] = { "alsa", "file", "pipe", "synthetic" };

	(void)state;
	for (size_t k = 0; k < 4; k++) {
		assert_non_null(intake_driver_find(names[k]));
		assert_string_equal(intake_driver_find(names[k])->name, names[k]);
		assert_ptr_equal(intake_driver_find(names[k]), intake_drivers[k]);
	}
	assert_null(intake_drivers[4]);
	assert_null(intake_driver_find(""));
	assert_null(intake_driver_find("alsa "));
	assert_null(intake_driver_find("als"));
}

static void every_driver_is_complete(void **state)
{
	(void)state;
	for (size_t k = 0; intake_drivers[k]; k++) {
		const struct intake_driver *driver = intake_drivers[k];
		assert_true(driver->summary && *driver->summary && driver->settings);
		assert_true(driver->open && driver->start && driver->stop && driver->close && driver->read);
	}
}

static void every_fallback_is_in_range_or_zero(void **state)
{
	(void)state;
	for (size_t k = 0; intake_drivers[k]; k++)
		for (const struct setting *row = intake_drivers[k]->settings; row->name; row++) {
			assert_true(row->meaning && *row->meaning);
			if (row->type == SETTING_NUMBER || row->type == SETTING_INTEGER || row->type == SETTING_BOOLEAN)
				/* 0 beyond the range: left out. */
				assert_true(row->required || row->fallback == 0 ||
					(row->fallback >= row->min && row->fallback <= row->max));
			if (row->type == SETTING_CHOICE)
				assert_true(row->choices && row->text && strstr(row->choices, row->text));
			assert_true(!row->required || row->example);
		}
}

/* What the sample configuration shows of a driver, the reader of configurations takes. */
static void every_sample_configuration_parses(void **state)
{
	(void)state;
	for (size_t k = 0; intake_drivers[k]; k++) {
		const struct setting_group groups[] = {
			{ .name = "intake", .meaning = intake_drivers[k]->summary, .settings = intake_drivers[k]->settings },
			{ .name = NULL },
		};
		struct settings *settings = NULL;
		char *text = NULL;
		size_t size = 0;
		FILE *stream = open_memstream(&text, &size);
		settings_write_sample(stream, groups);
		fclose(stream);
		assert_int_equal(settings_parse(&settings, text, intake_drivers[k]->name, groups), 0);
		assert_non_null(settings_values(settings, "intake", 0));
		settings_free(settings);
		free(text);
	}
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(a_driver_is_found_by_its_name),
		cmocka_unit_test(every_driver_is_complete),
		cmocka_unit_test(every_fallback_is_in_range_or_zero),
		cmocka_unit_test(every_sample_configuration_parses),
	};

	return cmocka_run_group_tests_name("intakes", tests, NULL, NULL);
}
