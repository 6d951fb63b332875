/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <math.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#include "limbwatch/log.h"
#include "limbwatch/sidecar.h"

int LLVMFuzzerTestOneInput(const uint8_t *data, size_t n);

static void swallow(void *context, enum log_level level, const char *sentence)
{
	unsigned *seen = context;

	(void)level;
	(void)sentence;
	++*seen;
}

/* Whatever bytes stand in the file: a sound sidecar, or one sentence. */
int LLVMFuzzerTestOneInput(const uint8_t *data, size_t n)
{
	struct sidecar s;
	unsigned said = 0;
	int ret;

	log_set_sink(swallow, &said);
	ret = sidecar_parse(&s, (const char *)data, n, "fuzz");
	if (ret < 0) {
		if (said != 1)
			abort();
		return 0;
	}
	if (s.format < 1 || s.format > SIDECAR_FORMAT || s.frames.channels < 1 || s.frames.channels > MAX_CHANNELS ||
	    (unsigned)s.frames.type >= SAMPLE_TYPES || !(s.rate > 0))
		abort();
	for (size_t k = 0; k < s.parts; k++)
		if (strchr(s.part[k].file, '/') || s.part[k].file[0] == '.')
			abort();
	for (size_t k = 0; k < s.contacts; k++)
		if (!isfinite(s.contact[k].frame) || (unsigned)s.contact[k].kind > CONTACT_EMERSION)
			abort();
	sidecar_clear(&s);
	return 0;
}

#include "standalone.h"
