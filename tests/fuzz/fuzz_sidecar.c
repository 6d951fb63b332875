/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <math.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "limbwatch/log.h"
#include "limbwatch/sidecar.h"
#include "../support/memory_disk.h"

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t n);

static void swallow(void *context, enum log_level level, const char *sentence)
{
	unsigned *seen = context;

	(void)level;
	++*seen;
	if (strpbrk(sentence, "\n\r\033"))
		abort();
}

static void check(const struct sidecar *s)
{
	if (s->format != SIDECAR_FORMAT || s->frames.channels < 1 || s->frames.channels > MAX_CHANNELS || !(s->rate > 0))
		abort();
	for (size_t k = 0; k < s->parts; k++)
		if (!s->part[k].file[0] || s->part[k].file[0] == '.' || strchr(s->part[k].file, '/'))
			abort();
	for (size_t k = 0; k < s->channels; k++)
		if (s->channel[k].column >= MAX_CHANNELS)
			abort();
	for (size_t k = 0; k < s->contacts; k++)
		if (!isfinite(s->contact[k].frame) || s->contact[k].expected < -1)
			abort();
}

static char *text_of(const struct sidecar *s, size_t *size)
{
	const void *content;
	char *copy;

	memory_disk_reset();
	if (sidecar_write(s, &disk_memory, "/d/fuzz.json") < 0)
		abort();
	content = memory_disk_file("fuzz.json", size);
	copy = malloc(*size + 1);
	if (!content || !copy)
		abort();
	memcpy(copy, content, *size);
	return copy;
}

/* Refused with one sentence, or sound; and what is sound is written, read and written again the same. */
int LLVMFuzzerTestOneInput(const uint8_t *data, size_t n)
{
	struct sidecar first, second;
	unsigned said = 0;
	size_t size, again;
	char *text, *other;

	log_set_sink(swallow, &said);
	if (sidecar_parse(&first, (const char *)data, n, "fuzz") < 0) {
		if (said != 1)
			abort();
		return 0;
	}
	if (said)
		abort();
	check(&first);
	text = text_of(&first, &size);
	if (sidecar_parse(&second, text, size, "fuzz") < 0)
		abort();
	other = text_of(&second, &again);
	if (again != size || memcmp(text, other, size))
		abort();
	free(text);
	free(other);
	sidecar_clear(&first);
	sidecar_clear(&second);
	memory_disk_reset();
	return 0;
}

#include "standalone.h"
