/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <fcntl.h>
#include <stdio.h>
#include <string.h>
#include <unistd.h>
#include "bext.h"

/* Places in the chunk, after its eight bytes of name and size: EBU Tech 3285, section 2.3. */
enum { DATE_AT = 256 + 32 + 32, ORIGIN_BYTES = 10 + 8 + 8, HEAD = 1024 };

void bext_origin(struct bext_origin *out, struct tai start, double rate)
{
	char text[TAI_TEXT];
	unsigned h = 0, m = 0;
	double seconds = 0;

	tai_format_utc(text, start, 9);
	memcpy(out->date, text, sizeof(out->date));
	memcpy(out->time, text + 11, sizeof(out->time));
	sscanf(text + 11, "%2u:%2u:%lf", &h, &m, &seconds);
	out->reference = (uint64_t)((h * 3600 + m * 60 + seconds) * rate + 0.5);
}

static uint32_t word(const unsigned char *p)
{
	return (uint32_t)p[0] | (uint32_t)p[1] << 8 | (uint32_t)p[2] << 16 | (uint32_t)p[3] << 24;
}

/* Where the date stands in the file, or -EILSEQ. */
static int64_t find_date(const unsigned char *head, size_t n)
{
	size_t at = 12;

	if (n < at || memcmp(head, "RIFF", 4) || memcmp(head + 8, "WAVE", 4))
		return -EILSEQ;
	while (at + 8 <= n) {
		uint32_t size = word(head + at + 4);

		if (!memcmp(head + at, "bext", 4))
			return size >= DATE_AT + ORIGIN_BYTES ? (int64_t)at + 8 + DATE_AT : -EILSEQ;
		if (size > HEAD)
			break;
		at += 8 + size + size % 2;
	}
	return -EILSEQ;
}

static int put_date(const struct disk *disk, int fd, const struct bext_origin *origin)
{
	unsigned char head[HEAD], bytes[ORIGIN_BYTES];
	ssize_t n = disk->read(fd, head, sizeof(head));
	int64_t at;

	if (n < 0)
		return (int)n;
	at = find_date(head, (size_t)n);
	if (at >= 0)
		at = disk->seek(fd, at, SEEK_SET);
	if (at < 0)
		return (int)at;
	memcpy(bytes, origin->date, sizeof(origin->date));
	memcpy(bytes + 10, origin->time, sizeof(origin->time));
	for (int k = 0; k < 8; k++)
		bytes[18 + k] = (unsigned char)(origin->reference >> 8 * k);
	n = disk->write(fd, bytes, sizeof(bytes));
	if (n < 0)
		return (int)n;
	return n < (ssize_t)sizeof(bytes) ? -ENOSPC : disk->datasync(fd);
}

int bext_date(const struct disk *disk, const char *path, struct tai start, double rate)
{
	struct bext_origin origin;
	int fd = disk->open(path, O_RDWR | O_CLOEXEC, 0), ret;

	if (fd < 0)
		return fd;
	bext_origin(&origin, start, rate);
	ret = put_date(disk, fd, &origin);
	disk->close(fd);
	return ret;
}
