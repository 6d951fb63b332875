/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <math.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>

#include "limbwatch/levels.h"

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t n);

/* What others say must not reach the terminal as control characters, nor break the table. */
static void check_table(const struct meter_report *report)
{
	char *text = NULL;
	size_t size, column = 0;
	FILE *out = open_memstream(&text, &size);

	if (!out)
		abort();
	levels_print(out, "limbwatch levels", report);
	fclose(out);
	for (const char *p = text; *p; p++) {
		column = *p == '\n' ? 0 : column + (((unsigned char)*p & 0xc0) != 0x80);
		if (((unsigned char)*p < 0x20 && *p != '\n') || *p == 0x7f || column > 100)
			abort();
	}
	free(text);
}

/* Refused with a reason, or sound; and what is sound is written, read and written again the same but for rounding. */
int LLVMFuzzerTestOneInput(const uint8_t *data, size_t n)
{
	static struct meter_report first, second;
	char why[160] = "", *line;
	int ret = levels_parse(&first, (const char *)data, n, why, sizeof(why));

	if (ret < 0) {
		if (ret == -EINVAL && (!*why || strpbrk(why, "\n\r\033")))
			abort();
		return 0;
	}
	if (first.channels < 1 || first.channels > MAX_CHANNELS || !(first.rate > 0) ||
	    first.pulse.channel >= (int)first.channels)
		abort();
	check_table(&first);
	line = levels_json(&first);
	if (!line || strchr(line, '\n') || levels_parse(&second, line, strlen(line), why, sizeof(why)) < 0)
		abort();
	if (second.channels != first.channels || second.frames != first.frames ||
	    strcmp(second.channel[0].name, first.channel[0].name))
		abort();
	free(line);
	return 0;
}

#include "standalone.h"
