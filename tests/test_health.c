/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <cmocka.h>
#include "../daemon/watch/health.h"
#include "support/folder.h"

static void put(const char *below, const char *file, const char *text)
{
	char command[512];

	snprintf(command, sizeof(command), "mkdir -p '%s/%s' && printf '%s' > '%s/%s/%s'", folder, below, text, folder, below, file);
	assert_int_equal(system(command), 0);
}

static void a_computer_that_tells_nothing_is_not_called_ill(void **state)
{
	struct sidecar_health h;

	(void)state;
	health_read(&h, folder);
	assert_true(isnan(h.temperature_c) && !h.under_voltage && !h.throttled && h.load >= 0);
}

static void the_hottest_part_counts(void **state)
{
	struct sidecar_health h;

	(void)state;
	put("class/thermal/thermal_zone0", "temp", "41312\\n");
	put("class/thermal/thermal_zone1", "temp", "63900\\n");
	put("class/thermal/thermal_zone2", "temp", "nonsense\\n");
	health_read(&h, folder);
	assert_true(fabs(h.temperature_c - 63.9) < 1e-9);
}

static void what_the_firmware_saw_is_told(void **state)
{
	struct sidecar_health h;

	(void)state;
	put("devices/platform/soc/soc:firmware", "get_throttled", "50005\\n");  /* both now, and both have occurred */
	health_read(&h, folder);
	assert_true(h.under_voltage && h.throttled);
	put("devices/platform/soc/soc:firmware", "get_throttled", "0\\n");
	health_read(&h, folder);
	assert_true(!h.under_voltage && !h.throttled);
	put("class/hwmon/hwmon1", "in0_lcrit_alarm", "1\\n");
	health_read(&h, folder);
	assert_true(h.under_voltage);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test_setup_teardown(a_computer_that_tells_nothing_is_not_called_ill, folder_make, folder_remove),
		cmocka_unit_test_setup_teardown(the_hottest_part_counts, folder_make, folder_remove),
		cmocka_unit_test_setup_teardown(what_the_firmware_saw_is_told, folder_make, folder_remove),
	};

	return cmocka_run_group_tests_name("health", tests, NULL, NULL);
}
