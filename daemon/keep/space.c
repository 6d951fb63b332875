/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include "limbwatch/log.h"
#include "limbwatch/sidecar.h"
#include "limbwatch/space.h"

enum { PATH_BYTES = 4096 };

struct found { char (*name)[SIDECAR_TEXT + 32]; size_t n, room; };

static void note(void *context, const char *name, int64_t size)
{
	struct found *f = context;
	size_t length = strlen(name);

	(void)size;
	if (length < 6 || length >= sizeof(*f->name) || strcmp(name + length - 5, ".json"))
		return;
	if (f->n == f->room) {
		size_t room = f->room ? 2 * f->room : 64;
		void *grown = realloc(f->name, room * sizeof(*f->name));

		if (!grown)
			return;         /* the ones known so far will do */
		f->name = grown;
		f->room = room;
	}
	snprintf(f->name[f->n++], sizeof(*f->name), "%s", name);
}

static int by_name(const void *a, const void *b)
{
	return strcmp(a, b);
}

/* Samples first, the sidecar last: what is cut short by a power failure is found again. */
static int remove_segment(const struct disk *disk, const char *folder, const char *name, const struct sidecar *s)
{
	char path[PATH_BYTES];
	int ret = 0;

	for (size_t k = 0; k < s->parts; k++) {
		snprintf(path, sizeof(path), "%s/%s", folder, s->part[k].file);
		ret = disk->unlink(path);
		if (ret < 0 && ret != -ENOENT)
			return ret;
	}
	snprintf(path, sizeof(path), "%s/%s", folder, name);
	ret = disk->unlink(path);
	if (ret == 0)
		log_notice("%s removed to make room: the oldest recording %s", path,
		           s->contacts ? "(with a contact, as the configuration allows)" : "without a contact");
	return ret;
}

/* Goes through the sidecars from the oldest. @return bytes free in the end, or -errno */
static int64_t sweep(const struct disk *disk, const char *folder, const struct found *f, int64_t need, bool marked)
{
	int64_t free_bytes = disk->free_bytes(folder);

	for (size_t k = 0; free_bytes >= 0 && free_bytes < need && k < f->n; k++) {
		char path[PATH_BYTES];
		struct sidecar s;
		int ret;

		snprintf(path, sizeof(path), "%s/%s", folder, f->name[k]);
		if (sidecar_read(&s, disk, path) < 0)
			continue;       /* said; not ours to remove */
		ret = 0;
		if (s.state != SEGMENT_RECORDING && (s.contacts > 0) == marked)
			ret = remove_segment(disk, folder, f->name[k], &s);
		sidecar_clear(&s);
		if (ret < 0)
			return ret;
		free_bytes = disk->free_bytes(folder);
	}
	return free_bytes;
}

int space_make(const struct disk *disk, const char *folder, int64_t need, bool may_remove_contacts)
{
	struct found f = { 0 };
	int64_t ret = disk->free_bytes(folder);

	if (ret >= need)
		return 0;
	if (ret < 0)
		return (int)ret;
	ret = disk->list(folder, note, &f);
	if (ret == 0 && f.n)
		qsort(f.name, f.n, sizeof(*f.name), by_name);
	if (ret == 0)
		ret = sweep(disk, folder, &f, need, false);
	if (ret >= 0 && ret < need && may_remove_contacts)
		ret = sweep(disk, folder, &f, need, true);
	free(f.name);
	return ret < 0 ? (int)ret : ret < need ? -ENOSPC : 0;
}
