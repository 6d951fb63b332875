/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <fcntl.h>
#include <inttypes.h>
#include <limits.h>
#include <poll.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/socket.h>
#include <sys/stat.h>
#include <sys/un.h>
#include <unistd.h>
#include "limbwatch/intake.h"
#include "limbwatch/log.h"
#include "origin.h"
#include "limbwatch/stamp_line.h"

/*
 * Raw interleaved frames from whatever program receives: standard input, a FIFO, a Unix stream socket that is
 * listened on, or a character device or plain file of samples.  The writer is held back when we are slow, so
 * nothing is dropped here and the intake is a replay to the ring.
 */

enum { BUFFER_BYTES = 65536 };          /* what a Linux pipe holds by default: pipe(7) */

enum { PIPE_PATH, PIPE_RATE, PIPE_CHANNELS, PIPE_FORMAT, PIPE_START, PIPE_START_SIGMA };

static const struct setting pipe_settings[] = {
	[PIPE_PATH] = { "path", SETTING_TEXT, .required = true,
		.meaning = "FIFO, listening Unix stream socket, or file of raw frames; -: standard input",
		.example = "-" },
	[PIPE_RATE] = { "rate_hz", SETTING_NUMBER, 0, 1, 1e7, .required = true,
		.meaning = "frames per second", .example = "48000" },
	[PIPE_CHANNELS] = { "channels", SETTING_INTEGER, 1, 1, MAX_CHANNELS,
		.meaning = "samples in a frame, one of each channel" },
	/* In the order of enum sample_type. */
	[PIPE_FORMAT] = { "format", SETTING_CHOICE, .text = "S16", .choices = "S16|S24_3|S24|S32|FLOAT",
		.meaning = "little-endian samples: 16 bits, 24 in three bytes, 24 in the low three of four, 32, or IEEE float" },
	[PIPE_START] = { "start_utc", SETTING_INSTANT,
		.meaning = "UTC of the first frame of an old recording; then the time of arrival dates nothing",
		.example = "2031-04-02T01:23:45Z" },
	[PIPE_START_SIGMA] = { "start_sigma_s", SETTING_NUMBER, 0.5, 1e-6, 1e6,
		.meaning = "standard deviation of start_utc" },
	{ .name = NULL },
};

struct pipe_intake {
	struct intake intake;           /* first */
	char *path;
	int fd;                         /* -1: stopped */
	bool live;                      /* frames arrive as they are taken */
	uint64_t next;                  /* number of the next frame */
	size_t lent;                    /* bytes of the block lent last, at the head of the buffer */
	size_t filled;                  /* bytes in the buffer: those lent, then the beginning of a frame */
	int error;                      /* errno of a failed read */
	unsigned char buffer[BUFFER_BYTES];
};

static bool is_standard_input(const char *path)
{
	return strcmp(path, "-") == 0;
}

/* The path's kind, judged before anything is opened: a wrong one is said at the start of the night. */
static int check_path(const char *path, struct stat *status)
{
	const bool standard = is_standard_input(path);
	int ret = -EINVAL;

	if ((standard ? fstat(STDIN_FILENO, status) : stat(path, status)) < 0 ||
	    (!standard && access(path, R_OK) < 0)) {
		ret = -errno;
		log_error("path: \"%s\" cannot be read: %s%s", path, strerror(-ret),
			ret == -ENOENT ? " (mkfifo makes a pipe of that name)" : "");
	} else if (S_ISDIR(status->st_mode)) {
		ret = -EISDIR;
		log_error("path: \"%s\" is a folder, not a pipe, socket or file of samples", path);
	} else if (S_ISBLK(status->st_mode)) {
		log_error("path: \"%s\" is a disk, not a pipe, socket or file of samples", path);
	} else if (!standard && S_ISSOCK(status->st_mode) && strlen(path) >= sizeof(((struct sockaddr_un *)0)->sun_path)) {
		ret = -ENAMETOOLONG;
		log_error("path: \"%s\" is too long for a socket: %zu bytes are allowed", path,
			sizeof(((struct sockaddr_un *)0)->sun_path) - 1);
	} else {
		return 0;
	}
	return ret;
}

static int pipe_open(struct intake **out, const struct setting_value *values)
{
	const char *path = values[PIPE_PATH].text;
	struct pipe_intake *pipe;
	struct stat status;
	int ret = check_path(path, &status);

	if (ret < 0)
		return ret;
	pipe = calloc(1, sizeof(*pipe));
	if (!pipe)
		return -ENOMEM;
	pipe->fd = -1;
	pipe->path = strdup(path);
	if (!pipe->path) {
		ret = -ENOMEM;
		goto free_pipe;
	}
	pipe->intake.driver = &intake_pipe;
	pipe->intake.format.type = (enum sample_type)values[PIPE_FORMAT].integer;
	pipe->intake.format.channels = (unsigned)values[PIPE_CHANNELS].integer;
	pipe->intake.rate = values[PIPE_RATE].number;
	pipe->intake.real_time = false;
	if (S_ISREG(status.st_mode) && !is_standard_input(path))
		pipe->intake.total_frames = (uint64_t)status.st_size / frame_bytes(pipe->intake.format);
	intake_rename(&pipe->intake, is_standard_input(path) ? "standard input" : path);
	ret = origin_configure(&pipe->intake, &values[PIPE_START], &values[PIPE_START_SIGMA]);
	if (ret < 0)
		goto free_path;
	pipe->live = !S_ISREG(status.st_mode) && pipe->intake.origin.quality == TIME_FREE;
	*out = &pipe->intake;
	return 0;

free_path:
	free(pipe->path);
free_pipe:
	free(pipe);
	return ret;
}

static int connect_socket(const char *path)
{
	struct sockaddr_un address = { .sun_family = AF_UNIX };
	const int fd = socket(AF_UNIX, SOCK_STREAM | SOCK_NONBLOCK | SOCK_CLOEXEC, 0);

	if (fd < 0)
		return -errno;
	strncpy(address.sun_path, path, sizeof(address.sun_path) - 1);
	if (connect(fd, (struct sockaddr *)&address, sizeof(address)) < 0) {
		const int ret = -errno;
		close(fd);
		return ret;
	}
	return fd;
}

static int pipe_start(struct intake *intake)
{
	struct pipe_intake *pipe = (struct pipe_intake *)intake;
	struct stat status;
	int fd = check_path(pipe->path, &status);

	if (fd < 0)
		return fd;
	/* Standard input keeps its flags, which belong to whoever shares it: poll comes before every read anyway. */
	if (is_standard_input(pipe->path))
		fd = STDIN_FILENO;
	else if (S_ISSOCK(status.st_mode))
		fd = connect_socket(pipe->path);
	else if ((fd = open(pipe->path, O_RDONLY | O_NONBLOCK | O_CLOEXEC | O_NOCTTY)) < 0)
		fd = -errno;
	if (fd < 0) {
		log_error("path: \"%s\" cannot be opened: %s%s", pipe->path, strerror(-fd),
			fd == -ECONNREFUSED ? " (no program listens on the socket)" : "");
		return fd;
	}
	pipe->fd = fd;
	pipe->next = 0;
	pipe->lent = pipe->filled = 0;
	pipe->error = 0;
	return 0;
}

static int pipe_stop(struct intake *intake)
{
	struct pipe_intake *pipe = (struct pipe_intake *)intake;

	if (pipe->fd >= 0 && pipe->fd != STDIN_FILENO)
		close(pipe->fd);
	pipe->fd = -1;
	return 0;
}

static void pipe_close(struct intake *intake)
{
	struct pipe_intake *pipe = (struct pipe_intake *)intake;

	if (!pipe)
		return;
	pipe_stop(intake);
	free(pipe->path);
	free(pipe);
}

/* Waits for bytes and appends them: their number, 0 when the time is over, -ENODATA at the end. */
static ssize_t receive(struct pipe_intake *pipe, int timeout_ms)
{
	struct pollfd waiting = { .fd = pipe->fd, .events = POLLIN };
	const int ready = poll(&waiting, 1, timeout_ms);

	if (ready <= 0)
		return ready == 0 || errno == EINTR ? 0 : -errno;
	/* A FIFO without a writer yet reports nothing; POLLHUP alone means the writer came and went: poll(2). */
	const ssize_t count = read(pipe->fd, pipe->buffer + pipe->filled, sizeof(pipe->buffer) - pipe->filled);
	if (count < 0)
		return errno == EAGAIN || errno == EINTR ? 0 : -errno;
	return count > 0 ? count : -ENODATA;
}

/* The block of all whole frames in the buffer; the beginning of another stays behind them for the next read. */
static void lend(struct pipe_intake *pipe, struct block *block, int64_t now)
{
	const struct intake *intake = &pipe->intake;
	const size_t count = pipe->filled / frame_bytes(intake->format);

	/*
	 * The last frame was taken before it arrived, the first that much earlier: an upper limit.  An old
	 * recording may arrive faster than it was taken, then there is none.
	 */
	*block = (struct block){
		.frames = pipe->buffer,
		.count = count,
		.first = pipe->next,
		.host_ns = pipe->live ? now - (int64_t)((double)count / intake->rate * 1e9) : INT64_MIN,
		.flags = pipe->live ? BLOCK_STAMP_LATE : 0,
	};
	pipe->next += count;
	pipe->lent = count * frame_bytes(intake->format);
}

static int pipe_read(struct intake *intake, struct block *block, int timeout_ms)
{
	struct pipe_intake *pipe = (struct pipe_intake *)intake;
	const size_t bytes = frame_bytes(intake->format);
	const int64_t deadline = host_now() + (int64_t)timeout_ms * 1000000;

	if (pipe->error)
		return -pipe->error;
	pipe->filled -= pipe->lent;
	memmove(pipe->buffer, pipe->buffer + pipe->lent, pipe->filled);
	pipe->lent = 0;
	do {
		const int64_t left_ms = (deadline - host_now() + 999999) / 1000000;
		const ssize_t count = receive(pipe, left_ms > 0 ? (int)left_ms : 0);
		if (count < 0) {
			pipe->error = (int)-count;
			return (int)count;
		}
		pipe->filled += (size_t)count;
	} while (pipe->filled < bytes && host_now() < deadline);
	if (pipe->filled < bytes)
		return 0;
	lend(pipe, block, host_now());
	return 1;
}

static void pipe_explain(struct intake *intake, char *sentence, size_t size)
{
	const struct pipe_intake *pipe = (const struct pipe_intake *)intake;
	const size_t left = pipe->filled - pipe->lent;

	sentence[0] = 0;
	if (pipe->error && pipe->error != ENODATA)
		snprintf(sentence, size, "%s could not be read after %" PRIu64 " frames: %s", intake->name, pipe->next,
			strerror(pipe->error));
	else if (pipe->error && left)
		snprintf(sentence, size, "%s ended in the middle of a frame: %zu of its %zu bytes are left over after %" PRIu64
			" whole frames", intake->name, left, frame_bytes(intake->format), pipe->next);
	else if (pipe->error && pipe->next == 0)
		snprintf(sentence, size, "%s ended before the first frame", intake->name);
}

const struct intake_driver intake_pipe = {
	.name = "pipe", .summary = "raw frames from a FIFO, a Unix socket or standard input",
	.settings = pipe_settings,
	.open = pipe_open, .start = pipe_start, .stop = pipe_stop, .close = pipe_close,
	.read = pipe_read, .explain = pipe_explain,
};
