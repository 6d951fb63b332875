/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_DISK_H
#define LIMBWATCH_DISK_H

#include <stdint.h>
#include <sys/types.h>

/*
 * Every system call that touches the recordings, in a table, so that a test can make any of them fail and can forget
 * what was not synced.  All return -errno instead of setting errno.
 */
struct disk {
	int     (*open)(const char *path, int flags, mode_t mode);
	ssize_t (*read)(int fd, void *data, size_t n);
	ssize_t (*write)(int fd, const void *data, size_t n);
	int64_t (*seek)(int fd, int64_t offset, int whence);
	int     (*truncate)(int fd, int64_t size);
	int     (*allocate)(int fd, int64_t size);              /* may be refused: -EOPNOTSUPP */
	int     (*datasync)(int fd);
	int     (*close)(int fd);
	int     (*rename)(const char *from, const char *to);
	int     (*unlink)(const char *path);
	int     (*sync_folder)(const char *path);
	int     (*make_folder)(const char *path, mode_t mode);  /* existing is fine */
	int64_t (*free_bytes)(const char *path);
	int     (*list)(const char *path, void (*each)(void *context, const char *name, int64_t size), void *context);
};

extern const struct disk disk_real;

#endif
