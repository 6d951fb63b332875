/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "limbwatch/log.h"
#include "settings_table.h"

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t n);

static void swallow(void *context, enum log_level level, const char *sentence)
{
	unsigned long *seen = context;

	(void)level;
	*seen += strlen(sentence);
	if (strpbrk(sentence, "\n\r\033"))
		abort();
}

/* Whatever bytes stand in the file: accepted with every value inside its range, or refused with a sentence. */
int LLVMFuzzerTestOneInput(const uint8_t *data, size_t n)
{
	char *text = strndup((const char *)data, n);
	struct settings *settings = NULL;
	unsigned long said = 0;
	int ret;

	log_set_sink(swallow, &said);
	ret = text ? settings_parse(&settings, text, "fuzz", all_groups) : -1;
	if (ret < 0 && (settings || (text && said == 0)))
		abort();
	for (size_t k = 0; ret == 0 && k < settings_count(settings, "channels"); k++) {
		const struct setting_value *channel = settings_values(settings, "channels", k);

		if (channel[CHANNEL_COLUMN].integer < 1 || channel[CHANNEL_COLUMN].integer > 8
		    || !(channel[CHANNEL_WAVELENGTH].number >= 1e-7 && channel[CHANNEL_WAVELENGTH].number <= 100)
		    || channel[CHANNEL_MEASURE].integer < 0 || channel[CHANNEL_NAME].text[0] == '\0')
			abort();
	}
	if (ret == 0 && !settings_values(settings, "intake", 0))
		abort();
	settings_free(settings);
	free(text);
	return 0;
}

#include "standalone.h"
