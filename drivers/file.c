/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <inttypes.h>
#include <math.h>
#include <sndfile.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>
#include "limbwatch/intake.h"
#include "limbwatch/log.h"
#include "origin.h"

/* Sound files: whatever libsndfile reads, in the file's own resolution. */

_Static_assert(__BYTE_ORDER__ == __ORDER_LITTLE_ENDIAN__, "libsndfile gives the host's order, frames are little");

/*
 * Frames per read.  Small, because libsndfile drops what it had decoded of a read that meets a damaged
 * FLAC frame: at most this many good frames before the damage are lost.
 */
enum { FRAMES_PER_BLOCK = 1024, MIN_RATE_HZ = 1, MAX_RATE_HZ = 10000000 };

enum { FILE_PATH, FILE_RATE, FILE_START, FILE_START_SIGMA, FILE_BEXT_SIGMA };

static const struct setting file_settings[] = {
	[FILE_PATH] = { "path", SETTING_TEXT, .required = true,
		.meaning = "sound file: WAV, Broadcast Wave, RF64, FLAC, AIFF or another that libsndfile reads",
		.example = "brackenfold.wav" },
	[FILE_RATE] = { "rate_hz", SETTING_NUMBER, 0, 0, MAX_RATE_HZ,
		.meaning = "sampling rate the file must have; 0: whatever the file says" },
	[FILE_START] = { "start_utc", SETTING_INSTANT,
		.meaning = "UTC of the first frame, used when the file says nothing of it in a bext chunk",
		.example = "2031-04-02T01:23:45Z" },
	[FILE_START_SIGMA] = { "start_sigma_s", SETTING_NUMBER, 0.5, 1e-6, 1e6,
		.meaning = "standard deviation of start_utc" },
	/* Common practice: the reference counts samples, but is no better than the clock that started it. */
	[FILE_BEXT_SIGMA] = { "bext_sigma_s", SETTING_NUMBER, 0.5, 1e-6, 1e6,
		.meaning = "standard deviation of the start a bext chunk gives, that is of the clock of its recorder" },
	{ .name = NULL },
};

struct file_intake {
	struct intake intake;           /* first */
	SNDFILE *sound;
	uint64_t next;                  /* number of the next frame */
	uint64_t promised;              /* frames the header speaks of; 0: it does not say */
	int error;                      /* libsndfile's, once a read has failed */
	bool ended;
	int32_t *buffer;                /* wide enough for every sample type */
};

/* How each encoding is kept, and its bytes per sample on disk when that is fixed. */
static const struct encoding { int subformat; enum sample_type type; unsigned disk_bytes; } encodings[] = {
	{ SF_FORMAT_PCM_S8,  SAMPLE_S16,   1 }, { SF_FORMAT_PCM_U8,  SAMPLE_S16,   1 },
	{ SF_FORMAT_PCM_16,  SAMPLE_S16,   2 }, { SF_FORMAT_PCM_24,  SAMPLE_S24_3, 3 },
	{ SF_FORMAT_PCM_32,  SAMPLE_S32,   4 }, { SF_FORMAT_FLOAT,   SAMPLE_F32,   4 },
	{ SF_FORMAT_DOUBLE,  SAMPLE_F32,   8 }, { SF_FORMAT_ALAC_16, SAMPLE_S16,   0 },
	{ SF_FORMAT_ALAC_20, SAMPLE_S24_3, 0 }, { SF_FORMAT_ALAC_24, SAMPLE_S24_3, 0 },
	{ SF_FORMAT_ALAC_32, SAMPLE_S32,   0 }, { SF_FORMAT_DPCM_8,  SAMPLE_S16,   0 },
	{ SF_FORMAT_DPCM_16, SAMPLE_S16,   0 }, { SF_FORMAT_DWVW_12, SAMPLE_S16,   0 },
	{ SF_FORMAT_DWVW_16, SAMPLE_S16,   0 }, { SF_FORMAT_DWVW_24, SAMPLE_S24_3, 0 },
};

static struct encoding encoding_of(int format)
{
	for (size_t k = 0; k < sizeof(encodings) / sizeof(encodings[0]); k++)
		if (encodings[k].subformat == (format & SF_FORMAT_SUBMASK))
			return encodings[k];
	/* Vorbis, Opus, MPEG, ADPCM and the like round to no grid: float keeps what the decoder gives. */
	return (struct encoding){ format & SF_FORMAT_SUBMASK, SAMPLE_F32, 0 };
}

static uint64_t number_at(const unsigned char *bytes, size_t count, bool big)
{
	uint64_t number = 0;

	for (size_t k = 0; k < count; k++)
		number = number << 8 | bytes[big ? k : count - 1 - k];
	return number;
}

/*
 * Bytes of samples the header promises: libsndfile quietly corrects them to what is there.  0: it does not say,
 * as in a recording whose header was never completed.
 *
 * Source: RIFF and ds64, EBU Tech 3306; AIFF, Apple (1989), Audio Interchange File Format 1.3; AU, common practice.
 */
static uint64_t promised_bytes(const char *path)
{
	enum { MAX_CHUNKS = 1000 };
	unsigned char head[16];
	uint64_t promised = 0, wide = 0;
	FILE *stream = fopen(path, "rb");

	if (!stream || fread(head, 12, 1, stream) != 1)
		goto close_stream;
	if (memcmp(head, ".snd", 4) == 0) {
		promised = number_at(head + 8, 4, true);
		goto close_stream;
	}
	const bool aiff = memcmp(head, "FORM", 4) == 0, big = aiff || memcmp(head, "RIFX", 4) == 0;
	if (!big && memcmp(head, "RIFF", 4) != 0 && memcmp(head, "RF64", 4) != 0 && memcmp(head, "BW64", 4) != 0)
		goto close_stream;
	for (int chunk = 0; chunk < MAX_CHUNKS && fread(head, 8, 1, stream) == 1; chunk++) {
		const uint64_t size = number_at(head + 4, 4, big);
		uint64_t rest = size + (size & 1);
		if (memcmp(head, aiff ? "SSND" : "data", 4) == 0) {
			promised = size == UINT32_MAX && wide ? wide : size;
			if (aiff && size >= 8 && size != UINT32_MAX)
				promised -= 8;  /* offset and block size stand before the samples */
			break;
		}
		if (memcmp(head, "ds64", 4) == 0 && size >= 16) {
			if (fread(head, 16, 1, stream) != 1)
				break;
			wide = number_at(head + 8, 8, false);
			rest -= 16;
		}
		if (fseeko(stream, (off_t)rest, SEEK_CUR) != 0)
			break;
	}
close_stream:
	if (stream)
		fclose(stream);
	return promised == UINT32_MAX ? 0 : promised;
}

/* Date and time of a bext chunk, parted by '-', '_', ':', ' ' or '.' (EBU Tech 3285). */
static int bext_instant(struct tai *out, const char *date, const char *time)
{
	char text[TAI_TEXT];

	snprintf(text, sizeof(text), "%.4s-%.2s-%.2sT%.2s:%.2s:%.2sZ", date, date + 5, date + 8, time, time + 3, time + 6);
	return strlen(text) == strlen("2031-04-02T01:23:45Z") ? tai_parse_utc(out, text) : -EINVAL;
}

/* Text of a chunk for a sentence: other bytes than printable ones become '?'. */
static char *printable(char *out, const char *text, size_t size)
{
	size_t n = 0;

	for (; n < size && text[n]; n++)
		out[n] = text[n] >= 0x20 && text[n] < 0x7f ? text[n] : '?';
	out[n] = 0;
	return out;
}

/*
 * Start from the date, time and time reference of a bext chunk (EBU Tech 3285), taken as UTC.  The reference, samples
 * since midnight, gives the part of a second when it agrees with the time of day; across midnight it belongs to the
 * nearer day.  Otherwise the time of day stands for the middle of its second.
 */
static bool bext_origin(struct intake *intake, SNDFILE *sound, double sigma_s)
{
	SF_BROADCAST_INFO bext = { .version = 0 };
	struct tai said, midnight;
	char date[11], time[9];

	if (!sf_command(sound, SFC_GET_BROADCAST_INFO, &bext, sizeof(bext)))
		return false;
	printable(date, bext.origination_date, sizeof(bext.origination_date));
	printable(time, bext.origination_time, sizeof(bext.origination_time));
	if (strspn(date, " 0-_:.") == strlen(date)) {
		log_notice("\"%s\" has a bext chunk without a date", intake->name);
		return false;
	}
	if (bext_instant(&said, bext.origination_date, bext.origination_time) < 0 ||
	    bext_instant(&midnight, bext.origination_date, "00:00:00") < 0) {
		log_warning("\"%s\" has a bext chunk with the impossible date \"%s\" or time \"%s\", which is not used",
			intake->name, date, time);
		return false;
	}
	const uint64_t reference = (uint64_t)bext.time_reference_high << 32 | bext.time_reference_low;
	const double since_midnight = (double)reference / intake->rate, day = 86400;
	double ahead = since_midnight - tai_difference(said, midnight);
	if (ahead < -day / 2)
		ahead += day;
	else if (ahead > day / 2)
		ahead -= day;
	if (ahead >= -1 && ahead < 2) {         /* within 1 s of the second that the time of day names */
		intake->origin.when = tai_add(said, ahead);
		intake->origin.sigma_s = sigma_s;
	} else {
		if (reference)
			log_warning("\"%s\" has a bext chunk whose time reference, %.3f s since midnight, contradicts its time "
				"%s: the time is used, to the second", intake->name, since_midnight, time);
		else
			log_notice("\"%s\" has a bext chunk without a time reference: its start is known to the second",
				intake->name);
		intake->origin.when = tai_add(said, 0.5);
		intake->origin.sigma_s = hypot(sigma_s, 1 / sqrt(12));      /* uniform within the second */
	}
	intake->origin.quality = TIME_HOST;
	intake->origin.source = "bext";
	return true;
}

static int file_origin(struct file_intake *file, const struct setting_value *values)
{
	struct intake *intake = &file->intake;
	const int ret = origin_configure(intake, &values[FILE_START], &values[FILE_START_SIGMA]);

	if (ret < 0)
		return ret;
	const bool configured = intake->origin.quality != TIME_FREE;
	const struct tai start = intake->origin.when;
	if (!bext_origin(intake, file->sound, values[FILE_BEXT_SIGMA].number) || !configured)
		return 0;
	const double off = tai_difference(start, intake->origin.when);
	if (fabs(off) > 3 * hypot(intake->origin.sigma_s, values[FILE_START_SIGMA].number))
		log_warning("start_utc: %s is %.3f s from what the bext chunk of \"%s\" says, which is used",
			values[FILE_START].text, off, intake->name);
	return 0;
}

/* Says what keeps the path from being a sound file, before libsndfile would hang on a pipe or say less. */
static int check_path(const char *path)
{
	struct stat status;
	int ret = -EINVAL;

	if (stat(path, &status) < 0 || access(path, R_OK) < 0) {
		ret = -errno;
		log_error("path: \"%s\" cannot be read: %s", path, strerror(-ret));
	} else if (S_ISDIR(status.st_mode)) {
		ret = -EISDIR;
		log_error("path: \"%s\" is a folder, not a sound file", path);
	} else if (!S_ISREG(status.st_mode)) {
		log_error("path: \"%s\" is not a file; samples from a pipe, socket or device need the pipe intake", path);
	} else if (status.st_size == 0) {
		ret = -ENODATA;
		log_error("path: \"%s\" is empty (0 bytes)", path);
	} else {
		return 0;
	}
	return ret;
}

static int check_info(const char *path, const SF_INFO *info, double rate_hz)
{
	if (info->channels < 1 || info->channels > MAX_CHANNELS)
		log_error("path: \"%s\" has %d channels; 1 to %d are allowed", path, info->channels, MAX_CHANNELS);
	else if (info->samplerate < MIN_RATE_HZ || info->samplerate > MAX_RATE_HZ)
		log_error("path: \"%s\" says it was sampled at %d Hz; %d to %d are allowed", path, info->samplerate,
			MIN_RATE_HZ, MAX_RATE_HZ);
	else if (info->frames <= 0)
		log_error("path: \"%s\" says it holds not a single frame (sox --ignore-length repairs a WAV file whose header was "
			"never completed)", path);
	else if (rate_hz != 0 && rate_hz != info->samplerate) {
		log_error("rate_hz: %.9g was asked for, but \"%s\" was sampled at %d Hz", rate_hz, path, info->samplerate);
		return -EINVAL;         /* the configuration contradicts the file; the rest is the file's own fault */
	} else
		return 0;
	return -EILSEQ;
}

static void describe(struct file_intake *file, const char *path, const SF_INFO *info)
{
	const struct encoding encoding = encoding_of(info->format);
	struct intake *intake = &file->intake;

	intake->format = (struct frame_format){ encoding.type, (unsigned)info->channels };
	intake->rate = info->samplerate;
	intake->real_time = false;
	intake_rename(intake, path);
	if (info->frames != SF_COUNT_MAX)       /* a stream of unknown length */
		intake->total_frames = (uint64_t)info->frames;
	if (encoding.disk_bytes)
		file->promised = promised_bytes(path) / (encoding.disk_bytes * intake->format.channels);
	if (file->promised < intake->total_frames)
		file->promised = intake->total_frames;
}

static void file_close(struct intake *intake)
{
	struct file_intake *file = (struct file_intake *)intake;

	if (!file)
		return;
	sf_close(file->sound);
	free(file->buffer);
	free(file);
}

static int file_open(struct intake **out, const struct setting_value *values)
{
	const char *path = values[FILE_PATH].text;
	SF_INFO info = { .format = 0 };
	struct file_intake *file;
	int ret = check_path(path);

	if (ret < 0)
		return ret;
	file = calloc(1, sizeof(*file));
	if (!file)
		return -ENOMEM;
	file->intake.driver = &intake_file;
	file->sound = sf_open(path, SFM_READ, &info);
	if (!file->sound) {
		log_error("path: \"%s\" is no sound file that can be read: %s", path, sf_strerror(NULL));
		ret = -EILSEQ;
		goto free_file;
	}
	ret = check_info(path, &info, values[FILE_RATE].number);
	if (ret < 0)
		goto close_sound;
	describe(file, path, &info);
	ret = file_origin(file, values);
	if (ret < 0)
		goto close_sound;
	file->buffer = calloc(FRAMES_PER_BLOCK * file->intake.format.channels, sizeof(*file->buffer));
	if (!file->buffer) {
		ret = -ENOMEM;
		goto close_sound;
	}
	*out = &file->intake;
	return 0;

close_sound:
	sf_close(file->sound);
free_file:
	free(file);
	return ret;
}

static int file_start(struct intake *intake)
{
	struct file_intake *file = (struct file_intake *)intake;

	/* Only when needed: a decoder need not be able to go back. */
	if (file->next && sf_seek(file->sound, 0, SEEK_SET) != 0) {
		log_error("\"%s\" cannot be read from its beginning again: %s", intake->name, sf_strerror(file->sound));
		return -EIO;
	}
	file->next = 0;
	file->error = 0;
	file->ended = false;
	return 0;
}

static int file_stop(struct intake *intake)
{
	(void)intake;
	return 0;
}

/* libsndfile puts 24 bits into the upper three bytes of four.  In place: what is written stays behind what is read. */
static void pack_s24(int32_t *samples, size_t count)
{
	unsigned char *bytes = (unsigned char *)samples;

	for (size_t k = 0; k < count; k++)
		memmove(bytes + 3 * k, bytes + 4 * k + 1, 3);
}

static sf_count_t read_native(struct file_intake *file)
{
	const struct frame_format format = file->intake.format;
	sf_count_t count;

	switch (format.type) {
	case SAMPLE_S16:
		return sf_readf_short(file->sound, (short *)file->buffer, FRAMES_PER_BLOCK);
	case SAMPLE_F32:
		return sf_readf_float(file->sound, (float *)file->buffer, FRAMES_PER_BLOCK);
	case SAMPLE_S24_3:
		count = sf_readf_int(file->sound, file->buffer, FRAMES_PER_BLOCK);
		if (count > 0)
			pack_s24(file->buffer, (size_t)count * format.channels);
		return count;
	default:
		return sf_readf_int(file->sound, file->buffer, FRAMES_PER_BLOCK);
	}
}

static int file_read(struct intake *intake, struct block *block, int timeout_ms)
{
	struct file_intake *file = (struct file_intake *)intake;

	(void)timeout_ms;               /* a file never lets wait */
	if (file->error)
		return -EIO;
	if (file->ended)
		return -ENODATA;
	const sf_count_t count = read_native(file);
	file->error = sf_error(file->sound);
	if (count <= 0) {
		file->ended = !file->error;
		return file->error ? -EIO : -ENODATA;
	}
	*block = (struct block){ file->buffer, (size_t)count, file->next, INT64_MIN, 0 };
	file->next += (uint64_t)count;
	return 1;
}

static void file_explain(struct intake *intake, char *sentence, size_t size)
{
	const struct file_intake *file = (const struct file_intake *)intake;

	sentence[0] = 0;
	if (file->error)
		snprintf(sentence, size, "\"%s\" could not be read beyond frame %" PRIu64 " of %" PRIu64 ": %s", intake->name,
			file->next, file->promised, sf_strerror(file->sound));
	else if (file->ended && file->next < file->promised)
		snprintf(sentence, size, "\"%s\" is cut short: its header promises %" PRIu64 " frames, but only %" PRIu64
			" are there (%" PRIu64 " are missing)", intake->name, file->promised, file->next,
			file->promised - file->next);
}

const struct intake_driver intake_file = {
	.name = "file", .summary = "a sound file: WAV, Broadcast Wave, RF64, FLAC, AIFF and others, as fast as it goes",
	.settings = file_settings,
	.open = file_open, .start = file_start, .stop = file_stop, .close = file_close,
	.read = file_read, .explain = file_explain,
};
