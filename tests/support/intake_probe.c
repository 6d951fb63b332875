/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/types.h>
#include "intake_probe.h"
#include "limbwatch/log.h"

static void require(bool condition, const char *what)
{
	if (condition)
		return;
	fprintf(stderr, "intake_probe: %s\n", what);
	abort();
}

static void hear(void *context, enum log_level level, const char *sentence)
{
	struct probe *probe = context;
	const size_t used = strlen(probe->said);

	if (level != LEVEL_DETAIL)
		snprintf(probe->said + used, sizeof(probe->said) - used, "%s\n", sentence);
}

void probe_create(struct probe *probe, const struct intake_driver *driver)
{
	*probe = (struct probe){ .driver = driver };
	strcpy(probe->folder, "/tmp/limbwatch-intake-XXXXXX");
	require(mkdtemp(probe->folder), "no temporary folder");
	log_set_sink(hear, probe);
	probe_reset(probe);
}

void probe_destroy(struct probe *probe)
{
	char command[128];

	probe_reset(probe);
	log_set_sink(NULL, NULL);
	snprintf(command, sizeof(command), "rm -rf '%s'", probe->folder);
	require(system(command) == 0, "the temporary folder stays");
}

void probe_reset(struct probe *probe)
{
	if (probe->intake)
		probe->driver->close(probe->intake);
	probe->intake = NULL;
	free(probe->bytes);
	probe->bytes = NULL;
	probe->frames = probe->gaps = 0;
	probe->next = 0;
	probe->last = 0;
	probe->said[0] = probe->explanation[0] = 0;
	require(settings_fallbacks(probe->driver->settings, probe->values) <= PROBE_SETTINGS, "too many settings");
}

static size_t row_of(const struct probe *probe, const char *setting)
{
	const struct setting *rows = probe->driver->settings;
	size_t k = 0;

	while (rows[k].name && strcmp(rows[k].name, setting) != 0)
		k++;
	require(rows[k].name, setting);
	return k;
}

void probe_text(struct probe *probe, const char *setting, const char *text)
{
	const size_t row = row_of(probe, setting);
	struct setting_value *value = &probe->values[row];
	const char *word = probe->driver->settings[row].choices;

	value->text = text;
	value->given = true;
	if (probe->driver->settings[row].type != SETTING_CHOICE)
		return;
	for (value->integer = 0; word; value->integer++) {
		const size_t length = strcspn(word, "|");
		if (strlen(text) == length && strncmp(text, word, length) == 0)
			return;
		word = word[length] ? word + length + 1 : NULL;
	}
	require(false, text);
}

void probe_number(struct probe *probe, const char *setting, double number)
{
	struct setting_value *value = &probe->values[row_of(probe, setting)];

	value->number = number;
	value->integer = (long long)number;
	value->given = true;
}

const char *probe_path(struct probe *probe, const char *name)
{
	static char paths[8][256];
	static unsigned turn;
	char *path = paths[turn++ % 8];

	snprintf(path, sizeof(paths[0]), "%s/%s", probe->folder, name);
	return path;
}

const char *probe_file(struct probe *probe, const char *name, const void *bytes, size_t count)
{
	const char *path = probe_path(probe, name);
	FILE *stream = fopen(path, "wb");

	require(stream && fwrite(bytes, 1, count, stream) == count && fclose(stream) == 0, path);
	return path;
}

int probe_open(struct probe *probe)
{
	return probe->driver->open(&probe->intake, probe->values);
}

static void keep(struct probe *probe, const struct block *block)
{
	const size_t size = frame_bytes(probe->intake->format), frames = probe->frames + block->count;

	require(block->first >= probe->next, "frames came twice");
	require((block->first > probe->next) == !!(block->flags & BLOCK_GAP), "a gap and its flag disagree");
	probe->gaps += !!(block->flags & BLOCK_GAP);
	probe->next = block->first + block->count;
	probe->bytes = realloc(probe->bytes, frames * size);
	require(probe->bytes, "no memory");
	memcpy(probe->bytes + probe->frames * size, block->frames, block->count * size);
	probe->frames = frames;
}

void probe_run(struct probe *probe, size_t most)
{
	const int timeout_ms = 200, patience = 50;
	struct block block;
	int silent = 0;

	if (!probe->intake)
		require(probe_open(probe) == 0, probe->said);
	require(probe->driver->start(probe->intake) == 0, probe->said);
	while (probe->frames < most && silent < patience) {
		probe->last = probe->driver->read(probe->intake, &block, timeout_ms);
		if (probe->last < 0)
			break;
		silent = probe->last ? 0 : silent + 1;
		if (probe->last)
			keep(probe, &block);
	}
	require(silent < patience, "the intake stays silent");
	probe->driver->stop(probe->intake);
	probe->driver->explain(probe->intake, probe->explanation, sizeof(probe->explanation));
}
