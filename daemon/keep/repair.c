/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * After a power cut: a part that was growing has the header of its beginning or of some second, and as much data as the disk
 * kept.  The sizes in the header are made to agree with the file, then it is renamed; that can be cut
 * short and done again.  RIFF/WAVE: Microsoft and IBM, Multimedia Programming Interface, 1991.
 */
#include <errno.h>
#include <fcntl.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include "limbwatch/log.h"
#include "limbwatch/segment.h"
#include "wave_mend.h"

enum { HEADER_BYTES = 8192, PATH_BYTES = 4096, STATE_BYTES = 256 };

struct found { char (*name)[SIDECAR_TEXT + 32]; size_t n, room; bool short_of_memory; };

static bool ends_with(const char *name, const char *ending)
{
	size_t n = strlen(name), m = strlen(ending);

	return n > m && !strcmp(name + n - m, ending);
}

static void note(void *context, const char *name, int64_t size)
{
	struct found *f = context;

	(void)size;
	if (strlen(name) >= sizeof(*f->name) || !(ends_with(name, ".wav.part") || ends_with(name, ".json") ||
	                                          ends_with(name, ".json.tmp") || ends_with(name, ".wav")))
		return;
	if (f->n == f->room) {
		size_t room = f->room ? 2 * f->room : 64;
		void *grown = realloc(f->name, room * sizeof(*f->name));

		if (!grown) {
			f->short_of_memory = true;
			return;
		}
		f->name = grown;
		f->room = room;
	}
	snprintf(f->name[f->n++], sizeof(*f->name), "%s", name);
}

static int by_name(const void *a, const void *b)
{
	return strcmp(a, b);
}

/* ------------------------------------------------------------------ one WAV file */

struct shape { int64_t size, data_begin, fact; uint32_t block; };      /* fact: where its frames stand, 0: no such chunk */

static uint32_t read_u32(const unsigned char *p)
{
	return p[0] | p[1] << 8 | p[2] << 16 | (uint32_t)p[3] << 24;
}

static void write_u32(unsigned char *p, uint32_t x)
{
	for (int b = 0; b < 4; b++)
		p[b] = (unsigned char)(x >> 8 * b);
}

static int read_at(const struct disk *disk, int fd, int64_t offset, unsigned char *data, size_t want)
{
	size_t done = 0;
	int64_t at = disk->seek(fd, offset, SEEK_SET);

	if (at < 0)
		return (int)at;
	while (done < want) {
		ssize_t n = disk->read(fd, data + done, want - done);

		if (n < 0)
			return (int)n;
		if (n == 0)
			break;
		done += (size_t)n;
	}
	return (int)done;
}

static int write_at(const struct disk *disk, int fd, int64_t offset, const unsigned char *data, size_t n)
{
	int64_t at = disk->seek(fd, offset, SEEK_SET);
	ssize_t ret;

	if (at < 0)
		return (int)at;
	ret = disk->write(fd, data, n);
	return ret < 0 ? (int)ret : (size_t)ret == n ? 0 : -EIO;
}

/* @return 0; -EILSEQ: no header to go by */
static int read_shape(const struct disk *disk, int fd, struct shape *out)
{
	unsigned char h[HEADER_BYTES];
	int64_t size = disk->seek(fd, 0, SEEK_END);
	int n;
	size_t at = 12;
	int64_t fact = 0;
	uint32_t block = 0;

	if (size < 0)
		return (int)size;
	n = read_at(disk, fd, 0, h, sizeof(h));
	if (n < 0)
		return n;
	if (n < 12 || memcmp(h, "RIFF", 4) || memcmp(h + 8, "WAVE", 4))
		return -EILSEQ;
	while (at + 8 <= (size_t)n) {
		uint32_t length = read_u32(h + at + 4);

		if (!memcmp(h + at, "data", 4) && block) {
			*out = (struct shape){ .size = size, .data_begin = (int64_t)at + 8, .fact = fact, .block = block };
			return 0;
		}
		if (!memcmp(h + at, "fmt ", 4) && at + 24 <= (size_t)n)
			block = (uint32_t)(h[at + 20] | h[at + 21] << 8);
		if (!memcmp(h + at, "fact", 4))
			fact = (int64_t)at + 8;
		at += 8 + (size_t)length + (length & 1);
	}
	return -EILSEQ;
}

static int write_u32_at(const struct disk *disk, int fd, int64_t offset, int64_t x)
{
	unsigned char word[4];

	write_u32(word, (uint32_t)x);
	return write_at(disk, fd, offset, word, sizeof(word));
}

int64_t wave_mend(const struct disk *disk, int fd)
{
	struct shape shape;
	int64_t bytes, end;
	int ret = read_shape(disk, fd, &shape);

	if (ret < 0)
		return ret;
	bytes = (shape.size - shape.data_begin) / shape.block * shape.block;
	end = shape.data_begin + bytes + (bytes & 1);   /* a chunk of odd size is followed by a zero */
	ret = disk->truncate(fd, shape.data_begin + bytes);
	if (ret == 0 && bytes & 1)
		ret = disk->truncate(fd, end);
	if (ret == 0)
		ret = write_u32_at(disk, fd, 4, end - 8);
	if (ret == 0 && shape.fact)
		ret = write_u32_at(disk, fd, shape.fact, bytes / shape.block);
	if (ret == 0)
		ret = write_u32_at(disk, fd, shape.data_begin - 4, bytes);
	if (ret == 0)
		ret = disk->datasync(fd);
	return ret < 0 ? ret : bytes / shape.block;
}

/* A name that is free: FILE.wav, else FILE-r2.wav ... */
static void free_name(const struct disk *disk, const char *folder, const char *wanted, char path[PATH_BYTES])
{
	int fd;

	snprintf(path, PATH_BYTES, "%s/%s", folder, wanted);
	for (int k = 2; (fd = disk->open(path, O_RDONLY, 0)) != -ENOENT && k < 10000; k++) {
		if (fd >= 0)
			disk->close(fd);
		snprintf(path, PATH_BYTES, "%s/%.*s-r%d.wav", folder, (int)strlen(wanted) - 4, wanted, k);
	}
}

/* @return frames in the file that is now called NAME.wav; -ENODATA: it held none and is gone; other -errno */
static int64_t mend_part(const struct disk *disk, const char *folder, const char *part)
{
	char from[PATH_BYTES], to[PATH_BYTES], wanted[SIDECAR_TEXT + 32];
	int64_t frames;
	int fd, ret;

	snprintf(from, sizeof(from), "%s/%s", folder, part);
	snprintf(wanted, sizeof(wanted), "%.*s", (int)(strlen(part) - strlen(".part")), part);
	fd = disk->open(from, O_RDWR, 0);
	if (fd < 0)
		return fd;
	frames = wave_mend(disk, fd);
	disk->close(fd);
	if (frames == -EILSEQ || frames == 0) {
		/* The header is synced before the first frame is written: without one, nothing was recorded. */
		ret = disk->unlink(from);
		return ret < 0 ? ret : -ENODATA;
	}
	if (frames < 0)
		return frames;
	free_name(disk, folder, wanted, to);
	ret = disk->rename(from, to);
	if (ret == 0)
		ret = disk->sync_folder(folder);
	return ret < 0 ? ret : frames;
}

/* ------------------------------------------------------------------ the sidecars */

/* Whether the sidecar says near its beginning that its segment was being recorded. */
static bool says_recording(const struct disk *disk, const char *path)
{
	unsigned char head[STATE_BYTES];
	int fd = disk->open(path, O_RDONLY, 0), n;

	if (fd < 0)
		return false;
	n = read_at(disk, fd, 0, head, sizeof(head) - 1);
	disk->close(fd);
	if (n < 0)
		return false;
	head[n] = 0;
	return strstr((char *)head, "\"state\": \"recording\"") != NULL;
}

static int64_t frames_in(const struct disk *disk, const char *folder, const char *file)
{
	char path[PATH_BYTES];
	struct shape shape;
	int fd, ret;

	snprintf(path, sizeof(path), "%s/%s", folder, file);
	fd = disk->open(path, O_RDONLY, 0);
	if (fd < 0)
		return fd;
	ret = read_shape(disk, fd, &shape);
	disk->close(fd);
	return ret < 0 ? ret : (shape.size - shape.data_begin) / shape.block;
}

/* NAME.wav, NAME_p2.wav; with -2 or -r2 before the ending where a name was taken. */
static bool belongs(const char *file, const char *base)
{
	size_t n = strlen(base), digits;

	if (strncmp(file, base, n))
		return false;
	file += n;
	if (!strncmp(file, "_p", 2) && (digits = strspn(file + 2, "0123456789")))
		file += 2 + digits;
	if (!strncmp(file, "-r", 2) && (digits = strspn(file + 2, "0123456789")))
		file += 2 + digits;
	else if (*file == '-' && (digits = strspn(file + 1, "0123456789")))
		file += 1 + digits;
	return !strcmp(file, ".wav");
}

/* Part k of base: NAME.wav, NAME_p2.wav ...: the order in which they were recorded. */
static unsigned part_number(const char *file, const char *base)
{
	unsigned k = 1;

	if (sscanf(file + strlen(base), "_p%u", &k) != 1)
		k = 1;
	return k;
}

/* The parts as they are on the disk now. */
static int list_parts(const struct disk *disk, const char *folder, const char *base, const struct found *files,
                      struct sidecar *s)
{
	struct sidecar_part *part = calloc(files->n + 1, sizeof(*part));
	uint64_t first = s->first;
	size_t n = 0;

	if (!part)
		return -ENOMEM;
	for (unsigned number = 1; number <= files->n; number++)
		for (size_t k = 0; k < files->n; k++) {
			int64_t frames;

			if (!belongs(files->name[k], base) || part_number(files->name[k], base) != number)
				continue;
			frames = frames_in(disk, folder, files->name[k]);
			if (frames < 0)
				continue;
			snprintf(part[n].file, sizeof(part[n].file), "%.*s", SIDECAR_TEXT - 1, files->name[k]);
			part[n].first = first;
			part[n].frames = (uint64_t)frames;
			first += (uint64_t)frames;
			n++;
		}
	free(s->part);
	s->part = part;
	s->parts = n;
	return 0;
}

/* @return 1: a segment was repaired; 0: nothing was there to repair; -errno */
static int mend_sidecar(const struct disk *disk, const char *folder, const char *name, const struct found *files)
{
	char path[PATH_BYTES], base[SIDECAR_TEXT + 32];
	struct sidecar s;
	int ret;

	snprintf(path, sizeof(path), "%s/%s", folder, name);
	snprintf(base, sizeof(base), "%.*s", (int)(strlen(name) - strlen(".json")), name);
	if (!says_recording(disk, path))
		return 0;
	ret = sidecar_read(&s, disk, path);
	if (ret == -EINVAL || ret == -EFBIG)
		return 0;               /* said; it stays as it is */
	if (ret < 0)
		return ret;
	ret = list_parts(disk, folder, base, files, &s);
	if (ret == 0 && s.parts == 0) {
		log_notice("%s: nothing had been recorded yet: removed", path);
		sidecar_clear(&s);
		return disk->unlink(path);
	}
	s.state = SEGMENT_REPAIRED;
	if (ret == 0)
		ret = sidecar_write(&s, disk, path);
	if (ret == 0)
		log_notice("%s/%s: repaired: it was being recorded when the power failed or the program was killed", folder,
		           base);
	sidecar_clear(&s);
	return ret < 0 ? ret : 1;
}

static int list(const struct disk *disk, const char *folder, struct found *f)
{
	int ret;

	f->n = 0;
	ret = disk->list(folder, note, f);
	if (ret == 0 && f->short_of_memory)
		ret = -ENOMEM;
	if (ret == 0 && f->n)
		qsort(f->name, f->n, sizeof(*f->name), by_name);
	return ret;
}

/* One that cannot be mended leaves the others their turn. @return 0, or -errno of the first */
static int mend_parts(const struct disk *disk, const char *folder, const struct found *f)
{
	int first = 0;

	for (size_t k = 0; k < f->n; k++) {
		char path[PATH_BYTES];
		int64_t ret = 0;

		if (ends_with(f->name[k], ".json.tmp")) {
			snprintf(path, sizeof(path), "%s/%s", folder, f->name[k]);
			ret = disk->unlink(path);
		} else if (ends_with(f->name[k], ".wav.part")) {
			ret = mend_part(disk, folder, f->name[k]);
			if (ret == -ENODATA)
				ret = 0;
		}
		if (ret < 0)
			log_error("%s/%s cannot be repaired: %s", folder, f->name[k], strerror((int)-ret));
		if (ret < 0 && !first)
			first = (int)ret;
	}
	return first;
}

int segment_repair(const struct disk *disk, const char *folder)
{
	struct found f = { 0 };
	int ret, first = 0, repaired = 0;

	ret = list(disk, folder, &f);
	if (ret == 0) {
		first = mend_parts(disk, folder, &f);
		ret = list(disk, folder, &f);
	}
	for (size_t k = 0; ret >= 0 && k < f.n; k++) {
		int mended = ends_with(f.name[k], ".json") ? mend_sidecar(disk, folder, f.name[k], &f) : 0;

		repaired += mended > 0;
		if (mended < 0 && !first)
			first = mended;
	}
	free(f.name);
	return ret < 0 ? ret : first ? first : repaired;
}
