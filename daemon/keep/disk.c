/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <dirent.h>
#include <errno.h>
#include <fcntl.h>
#include <stdio.h>
#include <sys/stat.h>
#include <sys/statvfs.h>
#include <unistd.h>
#include "limbwatch/disk.h"

static int result(int ret)
{
	return ret < 0 ? -errno : ret;
}

static int real_open(const char *path, int flags, mode_t mode)
{
	return result(open(path, flags | O_CLOEXEC, mode));
}

static ssize_t real_read(int fd, void *data, size_t n)
{
	ssize_t ret;

	do
		ret = read(fd, data, n);
	while (ret < 0 && errno == EINTR);
	return ret < 0 ? -errno : ret;
}

static ssize_t real_write(int fd, const void *data, size_t n)
{
	ssize_t ret;

	do
		ret = write(fd, data, n);
	while (ret < 0 && errno == EINTR);
	return ret < 0 ? -errno : ret;
}

static int64_t real_seek(int fd, int64_t offset, int whence)
{
	int64_t ret = lseek(fd, offset, whence);

	return ret < 0 ? -errno : ret;
}

static int real_truncate(int fd, int64_t size)
{
	return result(ftruncate(fd, size));
}

/* Beyond the end, without changing the size: room kept, nothing to read. */
static int real_allocate(int fd, int64_t size)
{
	return result(fallocate(fd, FALLOC_FL_KEEP_SIZE, 0, size));
}

static int real_datasync(int fd)
{
	return result(fdatasync(fd));
}

static int real_close(int fd)
{
	return result(close(fd));
}

static int real_rename(const char *from, const char *to)
{
	return result(rename(from, to));
}

static int real_unlink(const char *path)
{
	return result(unlink(path));
}

static int real_sync_folder(const char *path)
{
	int fd = open(path, O_RDONLY | O_DIRECTORY | O_CLOEXEC), ret;

	if (fd < 0)
		return -errno;
	ret = result(fsync(fd));
	close(fd);
	return ret;
}

static int real_make_folder(const char *path, mode_t mode)
{
	struct stat status;
	int ret = result(mkdir(path, mode));

	if (ret != -EEXIST)
		return ret;
	if (stat(path, &status) < 0)
		return -errno;
	return S_ISDIR(status.st_mode) ? 0 : -ENOTDIR;
}

static int64_t real_free_bytes(const char *path)
{
	struct statvfs status;

	if (statvfs(path, &status) < 0)
		return -errno;
	return (int64_t)status.f_bavail * (int64_t)status.f_frsize;
}

static int real_list(const char *path, void (*each)(void *context, const char *name, int64_t size), void *context)
{
	DIR *folder = opendir(path);
	struct dirent *entry;
	struct stat status;

	if (!folder)
		return -errno;
	while ((entry = readdir(folder)))
		if (fstatat(dirfd(folder), entry->d_name, &status, 0) == 0 && S_ISREG(status.st_mode))
			each(context, entry->d_name, status.st_size);
	closedir(folder);
	return 0;
}

const struct disk disk_real = {
	.open = real_open, .read = real_read, .write = real_write, .seek = real_seek, .truncate = real_truncate,
	.allocate = real_allocate, .datasync = real_datasync, .close = real_close, .rename = real_rename,
	.unlink = real_unlink, .sync_folder = real_sync_folder, .make_folder = real_make_folder,
	.free_bytes = real_free_bytes, .list = real_list,
};
