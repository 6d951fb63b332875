/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * libsndfile makes the Broadcast Wave; its virtual I/O goes through struct disk.  While a part grows only its end changes,
 * and once a second its header: the file is readable by anything after any sync, and segment_repair() needs
 * nothing but the header written at the beginning and the size of the file.
 */
#include <assert.h>
#include <errno.h>
#include <fcntl.h>
#include <sndfile.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>
#include "bext.h"
#include "limbwatch/segment.h"
#include "wave_mend.h"

static const int64_t default_part_bytes = INT64_C(2147483648) - 4194304;        /* 2 GiB less a margin */
static const int64_t allocate_bytes = 16 << 20;
static const double longest_gap_s = 3600;

enum { PATH_BYTES = 4096, PACK_FRAMES = 4096 };

struct segment {
	const struct disk *disk;
	struct segment_header header;
	char folder[PATH_BYTES - 512], name[SIDECAR_TEXT], station[32], description[256];
	size_t bytes;                   /* of a frame in the file */
	uint64_t position;              /* number after the last frame written */
	int64_t synced_frames;          /* of this part, at the last sync */
	/* The growing part. */
	SNDFILE *file;
	int fd, error, broke;           /* error: what the disk said inside libsndfile's call; broke: what `broken` came of */
	bool broken, mute;              /* a call failed: libsndfile's idea of the file is not to be trusted any more */
	int64_t offset, size, data_begin, allocated, frames;
	unsigned number;
	size_t parts, parts_room, gaps, gaps_room;
	struct sidecar_part *part;      /* the growing one is the last */
	struct sidecar_gap *gap;
	unsigned char packed[PACK_FRAMES * MAX_CHANNELS * 4];
};

/* ------------------------------------------------------------------ libsndfile's virtual I/O */

static sf_count_t virtual_length(void *context)
{
	return ((struct segment *)context)->size;
}

static sf_count_t virtual_seek(sf_count_t offset, int whence, void *context)
{
	struct segment *s = context;
	int64_t to = whence == SEEK_SET ? offset : whence == SEEK_CUR ? s->offset + offset : s->size + offset, ret;

	if (s->mute)
		return to;
	ret = s->disk->seek(s->fd, to, SEEK_SET);
	if (ret < 0) {
		s->broken = true;
		s->error = (int)ret;
		return -1;
	}
	return s->offset = ret;
}

static sf_count_t virtual_read(void *data, sf_count_t count, void *context)
{
	struct segment *s = context;
	ssize_t ret = s->mute ? 0 : s->disk->read(s->fd, data, (size_t)count);

	if (ret < 0) {
		s->broken = true;
		s->error = (int)ret;
		return 0;
	}
	s->offset += ret;
	return ret;
}

static sf_count_t virtual_write(const void *data, sf_count_t count, void *context)
{
	struct segment *s = context;
	sf_count_t done = 0;

	/* After a seek that failed the bytes would land in the wrong place. */
	if (s->mute)
		return count;
	if (s->broken) {
		if (!s->error)
			s->error = s->broke;
		return 0;
	}
	while (done < count) {
		ssize_t ret = s->disk->write(s->fd, (const char *)data + done, (size_t)(count - done));

		if (ret <= 0) {
			s->broken = true;
			s->error = s->broke = ret < 0 ? (int)ret : -ENOSPC;
			break;
		}
		done += ret;
		s->offset += ret;
		if (s->offset > s->size)
			s->size = s->offset;
	}
	return done;
}

static sf_count_t virtual_tell(void *context)
{
	return ((struct segment *)context)->offset;
}

static SF_VIRTUAL_IO virtual_io = { virtual_length, virtual_seek, virtual_read, virtual_write, virtual_tell };

/* ------------------------------------------------------------------ names */

static void part_path(const struct segment *s, char path[PATH_BYTES], const char *file, const char *ending)
{
	snprintf(path, PATH_BYTES, "%s/%s%s", s->folder, file, ending);
}

static bool exists(const struct segment *s, const char *path)
{
	int fd = s->disk->open(path, O_RDONLY, 0);

	if (fd >= 0)
		s->disk->close(fd);
	return fd != -ENOENT;
}

/* A name for part `number` that overwrites nothing. */
static void choose_file(const struct segment *s, char file[SIDECAR_TEXT])
{
	char path[PATH_BYTES], part[PATH_BYTES], number[16] = "", other[16] = "";

	if (s->number > 1)
		snprintf(number, sizeof(number), "_p%u", s->number);
	for (unsigned k = 1; k < 10000; k++) {
		if (k > 1)
			snprintf(other, sizeof(other), "-%u", k);
		snprintf(file, SIDECAR_TEXT, "%.96s%s%s.wav", s->name, number, other);
		part_path(s, path, file, "");
		part_path(s, part, file, ".part");
		if (!exists(s, path) && !exists(s, part))
			return;
	}
}

/* ------------------------------------------------------------------ one part */

static int sf_format(enum sample_type type)
{
	static const int subtype[SAMPLE_TYPES] = {
		[SAMPLE_S16] = SF_FORMAT_PCM_16, [SAMPLE_S24_3] = SF_FORMAT_PCM_24, [SAMPLE_S24] = SF_FORMAT_PCM_24,
		[SAMPLE_S32] = SF_FORMAT_PCM_32, [SAMPLE_F32] = SF_FORMAT_FLOAT,
	};

	return SF_FORMAT_WAV | subtype[type];
}

/* EBU Tech 3285: texts are padded with zeros, not terminated; the time reference counts samples since midnight. */
static void set_bext(const struct segment *s, uint64_t first)
{
	SF_BROADCAST_INFO info = { .version = 1 };
	struct bext_origin origin;

	snprintf(info.description, sizeof(info.description), "%s", s->description);
	snprintf(info.originator, sizeof(info.originator), "%s", s->station);
	snprintf(info.originator_reference, sizeof(info.originator_reference), "limbwatch");
	if (s->header.quality != TIME_FREE) {
		bext_origin(&origin, tai_add(s->header.start, (double)(first - s->header.first) / s->header.rate), s->header.rate);
		memcpy(info.origination_date, origin.date, sizeof(origin.date));
		memcpy(info.origination_time, origin.time, sizeof(origin.time));
		info.time_reference_low = (uint32_t)origin.reference;
		info.time_reference_high = (uint32_t)(origin.reference >> 32);
	}
	sf_command(s->file, SFC_SET_BROADCAST_INFO, &info, sizeof(info));
}

static void *grow(void *array, size_t used, size_t *room, size_t size)
{
	void *grown;

	if (used < *room)
		return array;
	grown = realloc(array, (*room ? 2 * *room : 4) * size);
	if (grown)
		*room = *room ? 2 * *room : 4;
	return grown;
}

static int write_header(struct segment *s)
{
	s->error = 0;
	sf_command(s->file, SFC_UPDATE_HEADER_NOW, NULL, 0);
	return s->error;
}

static int sync_part(struct segment *s)
{
	int ret = write_header(s);

	if (ret == 0)
		ret = s->disk->datasync(s->fd);
	if (ret == 0)
		s->synced_frames = s->frames;
	return ret;
}

/* On failure nothing of the part remains but perhaps an empty file, which segment_repair() removes. */
static int begin_part(struct segment *s)
{
	SF_INFO info = {
		.samplerate = (int)(s->header.rate + 0.5), .channels = (int)s->header.format.channels,
		.format = sf_format(s->header.format.type),
	};
	struct sidecar_part *part;
	void *grown = grow(s->part, s->parts, &s->parts_room, sizeof(*s->part));
	char path[PATH_BYTES];
	int ret;

	if (!grown)
		return -ENOMEM;
	s->part = grown;
	s->number++;
	part = &s->part[s->parts];
	choose_file(s, part->file);
	part->first = s->position;
	part->frames = 0;
	part_path(s, path, part->file, ".part");
	s->fd = s->disk->open(path, O_RDWR | O_CREAT | O_EXCL, 0664);
	if (s->fd < 0)
		return s->fd;
	s->offset = s->size = s->allocated = s->frames = s->synced_frames = 0;
	s->error = 0;
	s->broken = false;
	s->file = sf_open_virtual(&virtual_io, SFM_WRITE, &info, s);
	if (!s->file) {
		ret = s->error ? s->error : -EINVAL;
		goto close_file;
	}
	/* libsndfile does not look at what is written raw: its peaks of a FLOAT file would be wrong. */
	sf_command(s->file, SFC_SET_ADD_PEAK_CHUNK, NULL, SF_FALSE);
	set_bext(s, s->position);
	ret = sync_part(s);
	if (ret == 0)
		ret = s->disk->sync_folder(s->folder);
	if (ret < 0)
		goto close_sound;
	s->data_begin = s->size;
	s->parts++;
	return 0;
close_sound:
	sf_close(s->file);
	s->file = NULL;
close_file:
	s->disk->close(s->fd);
	s->disk->unlink(path);
	s->fd = -1;
	return ret;
}

/* Cuts off what is no whole frame (a write that failed half way) and what was only allocated. */
static int trim(struct segment *s)
{
	int64_t good = s->data_begin + s->frames * (int64_t)s->bytes;
	int ret = s->disk->truncate(s->fd, good);

	if (ret < 0)
		return ret;
	s->size = good;
	return s->disk->seek(s->fd, good, SEEK_SET) < 0 ? -EIO : (s->offset = good, 0);
}

/* libsndfile writes the header for good; after a failure its sizes are put right without it. */
static int finish_header(struct segment *s)
{
	int64_t frames;
	int ret = trim(s);

	s->error = 0;
	s->mute = s->broken || ret < 0;
	sf_close(s->file);
	s->file = NULL;
	if (!s->mute && !s->error)
		return 0;
	s->mute = false;
	ret = trim(s);
	if (ret < 0)
		return ret;
	frames = wave_mend(s->disk, s->fd);
	return frames < 0 ? (int)frames : 0;
}

static int end_part(struct segment *s)
{
	char from[PATH_BYTES], to[PATH_BYTES];
	int ret, more;

	if (!s->file)
		return 0;
	ret = finish_header(s);
	if (ret == 0)
		ret = s->disk->datasync(s->fd);
	more = s->disk->close(s->fd);
	s->fd = -1;
	if (ret == 0)
		ret = more;
	if (ret < 0)
		return ret;             /* the .part stays for segment_repair() */
	part_path(s, from, s->part[s->parts - 1].file, ".part");
	part_path(s, to, s->part[s->parts - 1].file, "");
	ret = s->disk->rename(from, to);
	return ret < 0 ? ret : s->disk->sync_folder(s->folder);
}

/* ------------------------------------------------------------------ the segment */

int segment_create(struct segment **out, const struct disk *disk, const struct segment_header *header)
{
	struct segment *s;
	int ret;

	if (header->format.channels < 1 || header->format.channels > MAX_CHANNELS || !(header->rate >= 1))
		return -EINVAL;
	s = calloc(1, sizeof(*s));
	if (!s)
		return -ENOMEM;
	s->disk = disk;
	s->header = *header;
	s->fd = -1;
	s->position = header->first;
	s->bytes = header->format.type == SAMPLE_S24 ? 3 * header->format.channels : frame_bytes(header->format);
	if (s->header.part_bytes <= 0 || s->header.part_bytes > default_part_bytes)
		s->header.part_bytes = default_part_bytes;
	snprintf(s->folder, sizeof(s->folder), "%s", header->folder);
	snprintf(s->name, sizeof(s->name), "%s", header->name);
	snprintf(s->station, sizeof(s->station), "%s", header->station ? header->station : "");
	snprintf(s->description, sizeof(s->description), "%s", header->description ? header->description : "");
	ret = begin_part(s);
	if (ret < 0) {
		free(s->part);
		free(s);
		return ret;
	}
	*out = s;
	return 0;
}

/* Room ahead, so that a full disk is found out early and the file stays in one piece; a refusal is fine. */
static void allocate_ahead(struct segment *s, int64_t need)
{
	if (s->allocated < 0 || s->size + need <= s->allocated)
		return;
	s->allocated = s->size + need + allocate_bytes;
	if (s->disk->allocate(s->fd, s->allocated) < 0)
		s->allocated = -1;
}

static int write_raw(struct segment *s, const void *data, size_t frames)
{
	sf_count_t want = (sf_count_t)(frames * s->bytes);

	s->error = 0;
	if (sf_write_raw(s->file, data, want) != want)
		return s->error ? s->error : -EIO;
	s->frames += (int64_t)frames;
	s->position += frames;
	s->part[s->parts - 1].frames = (uint64_t)s->frames;
	return 0;
}

/* Low three bytes of four. */
static void pack(unsigned char *to, const unsigned char *from, size_t samples)
{
	for (size_t k = 0; k < samples; k++)
		memcpy(to + 3 * k, from + 4 * k, 3);
}

/* Frames that fit into this part. */
static int write_some(struct segment *s, const unsigned char *frames, size_t count)
{
	size_t bytes = frame_bytes(s->header.format);
	int ret = 0;

	allocate_ahead(s, (int64_t)(count * s->bytes));
	if (s->header.format.type != SAMPLE_S24)
		return write_raw(s, frames, count);
	for (size_t done = 0; ret == 0 && done < count; ) {
		size_t n = count - done < PACK_FRAMES ? count - done : PACK_FRAMES;

		pack(s->packed, frames + done * bytes, n * s->header.format.channels);
		ret = write_raw(s, s->packed, n);
		done += n;
	}
	return ret;
}

static int write_frames(struct segment *s, const unsigned char *frames, size_t count)
{
	size_t bytes = frame_bytes(s->header.format);
	int ret = 0;

	while (ret == 0 && count) {
		int64_t room = (s->header.part_bytes - s->size) / (int64_t)s->bytes;
		size_t n = room < (int64_t)count ? (size_t)(room > 0 ? room : 0) : count;

		if (n == 0) {
			ret = end_part(s);
			if (ret == 0)
				ret = begin_part(s);
			if (ret == 0 && s->size + (int64_t)s->bytes > s->header.part_bytes)
				ret = -EINVAL;  /* a part that holds no frame */
			continue;
		}
		ret = write_some(s, frames, n);
		frames += n * bytes;
		count -= n;
		if (ret == 0 && (double)(s->frames - s->synced_frames) >= s->header.rate)
			ret = sync_part(s);
	}
	return ret;
}

/* The gap noted is as long as the zeros that stand in the file, also when the disk refuses some of them. */
static int write_gap(struct segment *s, uint64_t lost, double sigma_frames)
{
	static const unsigned char zeros[PACK_FRAMES * MAX_CHANNELS * 4];
	void *grown = grow(s->gap, s->gaps, &s->gaps_room, sizeof(*s->gap));
	uint64_t first = s->position;
	int ret = 0;

	if (!grown)
		return -ENOMEM;
	s->gap = grown;
	while (ret == 0 && lost) {
		size_t n = lost < PACK_FRAMES ? (size_t)lost : PACK_FRAMES;

		ret = write_frames(s, zeros, n);
		lost -= n;
	}
	if (s->position > first)
		s->gap[s->gaps++] = (struct sidecar_gap){ .first = first, .frames = s->position - first,
			.sigma_frames = sigma_frames };
	return ret;
}

int segment_write(struct segment *s, const void *frames, size_t count, uint64_t first, double gap_sigma_frames)
{
	int ret = 0;

	if (!s->file)
		return -EBADF;
	if (first < s->position)
		return -EINVAL;
	if ((double)(first - s->position) > longest_gap_s * s->header.rate)
		return -ERANGE;
	if (first > s->position)
		ret = write_gap(s, first - s->position, gap_sigma_frames);
	return ret < 0 ? ret : write_frames(s, frames, count);
}

int segment_look(const struct segment *segment)
{
	char path[PATH_BYTES];

	part_path(segment, path, segment->part[segment->parts - 1].file, ".part");
	return exists(segment, path) ? 0 : -ENOENT;
}

uint64_t segment_position(const struct segment *segment)
{
	return segment->position;
}

static void *copy(const void *from, size_t n, size_t size)
{
	void *to = malloc((n ? n : 1) * size);

	if (to)
		memcpy(to, from ? from : "", from ? n * size : 0);
	return to;
}

int segment_describe(const struct segment *s, struct sidecar *sidecar)
{
	struct sidecar_part *part = copy(s->part, s->parts, sizeof(*part));
	struct sidecar_gap *gap = copy(s->gap, s->gaps, sizeof(*gap));

	if (!part || !gap) {
		free(part);
		free(gap);
		return -ENOMEM;
	}
	free(sidecar->part);
	free(sidecar->gap);
	sidecar->part = part;
	sidecar->parts = s->parts;
	sidecar->gap = gap;
	sidecar->gaps = s->gaps;
	return 0;
}

static void release(struct segment *s)
{
	free(s->part);
	free(s->gap);
	free(s);
}

int segment_close(struct segment *s)
{
	int ret = end_part(s);

	release(s);
	return ret;
}

void segment_abandon(struct segment *s)
{
	char path[PATH_BYTES];

	assert(s->parts == 1 && s->position == s->header.first);
	part_path(s, path, s->part[0].file, ".part");
	s->mute = true;                 /* libsndfile would write its header once more */
	sf_close(s->file);
	s->disk->close(s->fd);
	s->disk->unlink(path);
	release(s);
}
