/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <fcntl.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include "memory_disk.h"

enum { FILES = 256, OPEN = 32 };

/* An inode: what it holds now and what would be left of it. */
struct content {
	bool used;
	unsigned char *now, *synced;
	size_t size, synced_size, room;
};

struct name { char text[256]; int content; };   /* content: index, -1: free */

static struct content contents[FILES];
static struct name names[FILES], synced_names[FILES];
static struct { int content; size_t at; bool used; } files[OPEN];
static unsigned calls, fail_at;
static int fail_with;
static bool fail_dead;
static int64_t free_space;

void memory_disk_reset(void)
{
	for (int k = 0; k < FILES; k++) {
		free(contents[k].now);
		free(contents[k].synced);
		contents[k] = (struct content){ 0 };
		names[k].content = synced_names[k].content = -1;
	}
	memset(files, 0, sizeof(files));
	calls = 0;
	fail_with = 0;
	free_space = INT64_C(1) << 40;
}

unsigned memory_disk_calls(void)
{
	return calls;
}

void memory_disk_fail(unsigned k, int error, bool dead)
{
	fail_at = k;
	fail_with = error;
	fail_dead = dead;
}

void memory_disk_set_free(int64_t bytes)
{
	free_space = bytes;
}

/* 0, or what this call fails with. */
static int strike(void)
{
	unsigned k = calls++;

	return fail_with && (k == fail_at || (fail_dead && k > fail_at)) ? -fail_with : 0;
}

static void *duplicate(const void *from, size_t n)
{
	void *to = malloc(n + 1);

	if (!to)
		abort();
	memcpy(to, from ? from : "", from ? n : 0);
	return to;
}

void memory_disk_reboot(enum survival survival)
{
	fail_with = 0;
	memset(files, 0, sizeof(files));
	if (survival == SURVIVE_NAMES)
		memcpy(synced_names, names, sizeof(names));
	memcpy(names, synced_names, sizeof(names));
	for (int k = 0; k < FILES; k++) {
		struct content *c = &contents[k];
		size_t left = c->synced_size;

		if (!c->used)
			continue;
		/* What was appended may have reached the disk in part; what was overwritten has not. */
		if (survival == SURVIVE_HALF && c->size > left) {
			size_t more = (c->size - left) / 2;
			unsigned char *to = duplicate(c->now, left + more);

			if (left)
				memcpy(to, c->synced, left);
			free(c->synced);
			c->synced = to;
			c->synced_size = left + more;
		}
		free(c->now);
		c->now = duplicate(c->synced, c->synced_size);
		c->size = c->room = c->synced_size;
	}
}

static struct name *find(const char *text)
{
	for (int k = 0; k < FILES; k++)
		if (names[k].content >= 0 && !strcmp(names[k].text, text))
			return &names[k];
	return NULL;
}

static const char *base(const char *path)
{
	return strncmp(path, "/d/", 3) ? NULL : path + 3;
}

const void *memory_disk_file(const char *text, size_t *size)
{
	struct name *name = find(text);

	if (!name)
		return NULL;
	*size = contents[name->content].size;
	return contents[name->content].now ? contents[name->content].now : (unsigned char *)"";
}

const char *memory_disk_name(size_t k)
{
	for (int i = 0; i < FILES; i++)
		if (names[i].content >= 0 && k-- == 0)
			return names[i].text;
	return NULL;
}

static struct name *make(const char *text)
{
	int c = 0, n = 0;

	while (contents[c].used)
		c++;
	while (names[n].content >= 0)
		n++;
	if (c >= FILES || n >= FILES)
		abort();
	contents[c] = (struct content){ .used = true };
	snprintf(names[n].text, sizeof(names[n].text), "%s", text);
	names[n].content = c;
	return &names[n];
}

static int memory_open(const char *path, int flags, mode_t mode)
{
	int ret = strike(), fd = 0;
	struct name *name;

	(void)mode;
	if (ret < 0)
		return ret;
	if (!base(path))
		return -ENOENT;
	name = find(base(path));
	if (!name && !(flags & O_CREAT))
		return -ENOENT;
	if (name && flags & O_EXCL)
		return -EEXIST;
	if (!name)
		name = make(base(path));
	if (flags & O_TRUNC)
		contents[name->content].size = 0;
	while (files[fd].used)
		if (++fd == OPEN)
			abort();        /* a leak of descriptors */
	files[fd].used = true;
	files[fd].content = name->content;
	files[fd].at = 0;
	return fd;
}

static ssize_t memory_read(int fd, void *data, size_t n)
{
	struct content *c = &contents[files[fd].content];
	int ret = strike();

	if (ret < 0)
		return ret;
	if (files[fd].at >= c->size)
		return 0;
	n = c->size - files[fd].at < n ? c->size - files[fd].at : n;
	memcpy(data, c->now + files[fd].at, n);
	files[fd].at += n;
	return (ssize_t)n;
}

/* Makes the file at least `size` long; what is new is zeros. */
static void stretch(struct content *c, size_t size)
{
	if (size > c->room) {
		c->room = 2 * size;
		c->now = realloc(c->now, c->room);
		if (!c->now)
			abort();
	}
	if (size > c->size) {
		memset(c->now + c->size, 0, size - c->size);
		c->size = size;
	}
}

/* A write that fails for want of space has taken half of it. */
static ssize_t memory_write(int fd, const void *data, size_t n)
{
	struct content *c = &contents[files[fd].content];
	int ret = strike();

	if (ret == -ENOSPC && n > 1)
		n /= 2;
	else if (ret < 0)
		return ret;
	stretch(c, files[fd].at + n);
	memcpy(c->now + files[fd].at, data, n);
	files[fd].at += n;
	return (ssize_t)n;
}

static int64_t memory_seek(int fd, int64_t offset, int whence)
{
	int ret = strike();

	if (ret < 0)
		return ret;
	files[fd].at = (size_t)(offset + (whence == SEEK_END ? (int64_t)contents[files[fd].content].size :
	                                  whence == SEEK_CUR ? (int64_t)files[fd].at : 0));
	return (int64_t)files[fd].at;
}

static int memory_truncate(int fd, int64_t size)
{
	struct content *c = &contents[files[fd].content];
	int ret = strike();

	if (ret == 0)
		stretch(c, (size_t)size);
	if (ret == 0)
		c->size = (size_t)size;
	return ret;
}

static int memory_allocate(int fd, int64_t size)
{
	(void)fd;
	(void)size;
	return strike();
}

static int memory_datasync(int fd)
{
	struct content *c = &contents[files[fd].content];
	int ret = strike();

	if (ret < 0)
		return ret;
	free(c->synced);
	c->synced = duplicate(c->now, c->size);
	c->synced_size = c->size;
	return 0;
}

static int memory_close(int fd)
{
	files[fd].used = false;
	return strike();
}

static int memory_rename(const char *from, const char *to)
{
	int ret = strike();
	struct name *name, *gone;

	if (ret < 0)
		return ret;
	name = find(base(from));
	if (!name)
		return -ENOENT;
	gone = find(base(to));
	if (gone && gone != name)
		gone->content = -1;
	snprintf(name->text, sizeof(name->text), "%s", base(to));
	return 0;
}

static int memory_unlink(const char *path)
{
	int ret = strike();
	struct name *name = find(base(path));

	if (ret < 0)
		return ret;
	if (!name)
		return -ENOENT;
	name->content = -1;
	return 0;
}

static int memory_sync_folder(const char *path)
{
	int ret = strike();

	(void)path;
	if (ret == 0)
		memcpy(synced_names, names, sizeof(names));
	return ret;
}

static int memory_make_folder(const char *path, mode_t mode)
{
	(void)path;
	(void)mode;
	return strike();
}

static int64_t memory_free_bytes(const char *path)
{
	int ret = strike();

	(void)path;
	return ret < 0 ? ret : free_space;
}

static int memory_list(const char *path, void (*each)(void *context, const char *name, int64_t size), void *context)
{
	int ret = strike();

	(void)path;
	for (int k = 0; ret == 0 && k < FILES; k++)
		if (names[k].content >= 0)
			each(context, names[k].text, (int64_t)contents[names[k].content].size);
	return ret;
}

const struct disk disk_memory = {
	.open = memory_open, .read = memory_read, .write = memory_write, .seek = memory_seek,
	.truncate = memory_truncate, .allocate = memory_allocate, .datasync = memory_datasync, .close = memory_close,
	.rename = memory_rename, .unlink = memory_unlink, .sync_folder = memory_sync_folder,
	.make_folder = memory_make_folder, .free_bytes = memory_free_bytes, .list = memory_list,
};
