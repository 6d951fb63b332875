/* SPDX-License-Identifier: GPL-3.0-or-later */
#include "limbwatch/settings.h"

#include <errno.h>
#include <fcntl.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>
#include <libconfig.h>

#include "limbwatch/log.h"
#include "settings_parts.h"
#include "syntax.h"

enum { FILE_MAX = 1 << 20 };

struct settings {
	config_t config;                /* owns the texts */
	char *path;
	struct part *parts;             /* as many as groups, in their order */
	size_t part_count;
};

static int read_groups(struct settings *settings, const struct setting_group *groups)
{
	size_t n = 0;

	while (groups[n].name)
		n++;
	settings->parts = calloc(n + 1, sizeof(*settings->parts));
	if (!settings->parts)
		return -ENOMEM;
	settings->part_count = n;
	for (size_t i = 0; i < n; i++)
		settings->parts[i].group = &groups[i];
	return settings_read(settings->parts, n, config_root_setting(&settings->config), settings->path, groups);
}

/* The line of the text that holds a syntax error, cut for a sentence. */
static void refuse_syntax(const struct settings *settings, const char *text)
{
	int line = config_error_line(&settings->config);
	const char *start = text;

	for (int i = 1; i < line && strchr(start, '\n'); i++)
		start = strchr(start, '\n') + 1;
	start += strspn(start, " \t\r");
	log_error("%s line %d: %s, in or just before \"%.*s\"", settings->path, line, config_error_text(&settings->config),
		  (int)(strcspn(start, "\r\n") < 60 ? strcspn(start, "\r\n") : 60), start);
}

static int parse(struct settings **out, const char *text, size_t n, const char *name,
		 const struct setting_group *groups)
{
	struct settings *settings;
	char *whole, *prepared = NULL;
	int ret = syntax_prepare(&prepared, text, n, name);

	if (ret < 0)
		goto free_prepared;
	settings = calloc(1, sizeof(*settings));
	if (!settings) {
		ret = -ENOMEM;
		goto free_prepared;
	}
	config_init(&settings->config);
	settings->path = strdup(name);
	if (!settings->path) {
		ret = -ENOMEM;
		goto free_settings;
	}
	if (!config_read_string(&settings->config, prepared)) {
		whole = strndup(text, n);       /* the observer's own words, not the copy's */
		refuse_syntax(settings, whole ? whole : prepared);
		free(whole);
		ret = -EINVAL;
		goto free_settings;
	}
	ret = read_groups(settings, groups);
	if (ret < 0)
		goto free_settings;
	*out = settings;
	settings = NULL;
free_settings:
	settings_free(settings);
free_prepared:
	free(prepared);
	if (ret == -ENOMEM)
		log_error("%s: not enough memory to read the configuration", name);
	return ret;
}

int settings_parse(struct settings **out, const char *text, const char *name, const struct setting_group *groups)
{
	return parse(out, text, strlen(text), name, groups);
}

/* The file's bytes, up to one more than allowed. */
static int read_file(char **out, size_t *n, const char *path)
{
	struct stat status;
	ssize_t got = 1;
	char *text;
	int ret = 0;
	int fd = open(path, O_RDONLY | O_CLOEXEC | O_NONBLOCK);       /* a FIFO without a writer must not hang us */

	if (fd < 0 || fstat(fd, &status) < 0) {
		ret = -errno;
		log_error("%s: cannot read the configuration: %s", path, strerror(-ret));
		goto close_file;
	}
	if (!S_ISREG(status.st_mode)) {
		ret = S_ISDIR(status.st_mode) ? -EISDIR : -EINVAL;
		log_error("%s is %s, not a configuration file", path, S_ISDIR(status.st_mode) ? "a folder" : "a device");
		goto close_file;
	}
	text = malloc(FILE_MAX + 1);
	if (!text) {
		ret = -ENOMEM;
		goto close_file;
	}
	for (*n = 0; got > 0 && *n <= FILE_MAX; *n += (size_t)(got > 0 ? got : 0)) {
		got = read(fd, text + *n, FILE_MAX + 1 - *n);
		if (got < 0 && errno != EINTR) {
			ret = -errno;
			log_error("%s: cannot read the configuration: %s", path, strerror(-ret));
			break;
		}
	}
	if (ret == 0)
		*out = text;
	else
		free(text);
close_file:
	if (fd >= 0)
		close(fd);
	return ret;
}

int settings_load(struct settings **out, const char *path, const struct setting_group *groups)
{
	char *text = NULL;
	size_t n = 0;
	int ret = read_file(&text, &n, path);

	if (ret < 0)
		return ret;
	if (n > FILE_MAX) {
		log_error("%s is longer than %d bytes: no configuration is", path, FILE_MAX);
		ret = -EINVAL;
	} else {
		ret = parse(out, text, n, path, groups);
	}
	free(text);
	return ret;
}

void settings_free(struct settings *settings)
{
	if (!settings)
		return;
	for (size_t i = 0; i < settings->part_count; i++) {
		for (size_t k = 0; k < settings->parts[i].count; k++)
			free(settings->parts[i].elements[k].values);
		free(settings->parts[i].elements);
	}
	free(settings->parts);
	free(settings->path);
	config_destroy(&settings->config);
	free(settings);
}

const char *settings_path(const struct settings *settings)
{
	return settings->path;
}

static const struct part *find_part(const struct settings *settings, const char *group)
{
	for (size_t i = 0; i < settings->part_count; i++)
		if (strcmp(settings->parts[i].group->name, group) == 0)
			return &settings->parts[i];
	return NULL;
}

size_t settings_count(const struct settings *settings, const char *group)
{
	const struct part *part = find_part(settings, group);

	return part ? part->count : 0;
}

const struct setting_value *settings_values(const struct settings *settings, const char *group, size_t k)
{
	const struct part *part = find_part(settings, group);

	return part && k < part->count ? part->elements[k].values : NULL;
}

int settings_line(const struct settings *settings, const char *group, size_t k)
{
	const struct part *part = find_part(settings, group);

	return part && k < part->count ? part->elements[k].line : 0;
}
