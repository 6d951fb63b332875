/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <fcntl.h>
#include <stdbool.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/socket.h>
#include <sys/stat.h>
#include <sys/un.h>
#include <unistd.h>
#include "state.h"

enum { READERS = 16, KINDS = 16, BACKLOG = 262144 };    /* bytes a reader may be behind: about a minute of lines */

struct reader {
	int fd;                         /* -1: free */
	char *waiting;                  /* BACKLOG bytes */
	size_t used;
	unsigned missed;                /* lines, since the last one passed on */
};

struct kept { char kind[32]; char *line; };

struct state {
	int fd;
	char path[4096];
	dev_t device;
	ino_t inode;                    /* of the socket made here: nothing else is removed at the end */
	size_t readers;
	struct reader reader[READERS];
	size_t kinds;
	struct kept kept[KINDS];
};

static int address_of(const char *path, struct sockaddr_un *address)
{
	*address = (struct sockaddr_un){ .sun_family = AF_UNIX };
	if (strlen(path) >= sizeof(address->sun_path))
		return -ENAMETOOLONG;
	memcpy(address->sun_path, path, strlen(path));
	return 0;
}

/* A socket nobody listens at is what a killed recorder left. */
static bool left_over(const struct sockaddr_un *address)
{
	int fd = socket(AF_UNIX, SOCK_STREAM | SOCK_NONBLOCK | SOCK_CLOEXEC, 0);
	struct stat st;
	bool left;

	if (fd < 0)
		return false;
	left = connect(fd, (const struct sockaddr *)address, sizeof(*address)) < 0 && errno == ECONNREFUSED &&
		lstat(address->sun_path, &st) == 0 && S_ISSOCK(st.st_mode);
	close(fd);
	return left;
}

static int listen_at(const char *path)
{
	struct sockaddr_un address;
	int ret = address_of(path, &address), fd;

	if (ret < 0)
		return ret;
	fd = socket(AF_UNIX, SOCK_STREAM | SOCK_NONBLOCK | SOCK_CLOEXEC, 0);
	if (fd < 0)
		return -errno;
	if (left_over(&address))
		unlink(path);
	if (bind(fd, (struct sockaddr *)&address, sizeof(address)) < 0 || chmod(path, 0660) < 0 || listen(fd, READERS) < 0) {
		ret = -errno;
		close(fd);
		return ret;
	}
	return fd;
}

int state_open(struct state **out, const char *path)
{
	struct state *state = calloc(1, sizeof(*state));
	struct stat st;

	if (!state)
		return -ENOMEM;
	for (size_t k = 0; k < READERS; k++)
		state->reader[k].fd = -1;
	state->fd = listen_at(path);
	if (state->fd < 0) {
		int ret = state->fd;

		free(state);
		return ret;
	}
	snprintf(state->path, sizeof(state->path), "%s", path);
	if (lstat(path, &st) == 0) {
		state->device = st.st_dev;
		state->inode = st.st_ino;
	}
	*out = state;
	return 0;
}

static void dismiss(struct state *state, struct reader *reader)
{
	close(reader->fd);
	free(reader->waiting);
	*reader = (struct reader){ .fd = -1 };
	state->readers--;
}

size_t state_readers(const struct state *state)
{
	return state ? state->readers : 0;
}

static bool append(struct reader *reader, const char *text, size_t n)
{
	if (reader->used + n > BACKLOG)
		return false;
	memcpy(reader->waiting + reader->used, text, n);
	reader->used += n;
	return true;
}

/* Whole lines or nothing. */
static void tell(struct reader *reader, const char *line)
{
	size_t n = strlen(line);
	char missed[64];
	int m = snprintf(missed, sizeof(missed), "{\"what\":\"missed\",\"lines\":%u}\n", reader->missed);

	if (reader->used + n + 1 + (reader->missed ? (size_t)m : 0) > BACKLOG) {
		reader->missed++;
		return;
	}
	if (reader->missed && append(reader, missed, (size_t)m))
		reader->missed = 0;
	append(reader, line, n);
	append(reader, "\n", 1);
}

static void keep(struct state *state, const char *kind, const char *line)
{
	char *copy = strdup(line);
	size_t k = 0;

	while (k < state->kinds && strcmp(state->kept[k].kind, kind))
		k++;
	if (!copy || k == KINDS) {
		free(copy);
		return;
	}
	if (k == state->kinds) {
		state->kinds++;
		snprintf(state->kept[k].kind, sizeof(state->kept[k].kind), "%s", kind);
	}
	free(state->kept[k].line);
	state->kept[k].line = copy;
}

void state_publish(struct state *state, const char *kind, const char *line)
{
	if (!state)
		return;
	if (kind)
		keep(state, kind, line);
	for (size_t k = 0; k < READERS; k++)
		if (state->reader[k].fd >= 0)
			tell(&state->reader[k], line);
}

/* Who has missed most reads no more, perhaps: the place is given to somebody who comes. @return past the end when all keep up */
static struct reader *make_place(struct state *state)
{
	struct reader *worst = state->reader;

	for (struct reader *reader = state->reader; reader < state->reader + READERS; reader++)
		if (reader->missed > worst->missed)
			worst = reader;
	if (!worst->missed)
		return state->reader + READERS;
	dismiss(state, worst);
	return worst;
}

static bool let_in(struct state *state)
{
	int fd = accept4(state->fd, NULL, NULL, SOCK_NONBLOCK | SOCK_CLOEXEC);
	struct reader *reader = state->reader;

	if (fd < 0)
		return false;
	while (reader < state->reader + READERS && reader->fd >= 0)
		reader++;
	if (reader == state->reader + READERS)
		reader = make_place(state);
	if (reader == state->reader + READERS) {
		static const char full[] = "{\"what\":\"full\"}\n";

		if (send(fd, full, sizeof(full) - 1, MSG_NOSIGNAL | MSG_DONTWAIT) < 0) {}
		close(fd);
		return true;
	}
	*reader = (struct reader){ .fd = fd, .waiting = malloc(BACKLOG) };
	state->readers++;
	if (!reader->waiting) {
		dismiss(state, reader);
		return true;
	}
	for (size_t k = 0; k < state->kinds; k++)
		tell(reader, state->kept[k].line);
	return true;
}

static void pass_on(struct state *state, struct reader *reader)
{
	char scrap[256];
	ssize_t n = recv(reader->fd, scrap, sizeof(scrap), MSG_DONTWAIT);       /* whatever they say is not heard */

	/* An end of what they say is not yet the end of what they read: that one is found by sending. */
	if (n < 0 && errno != EAGAIN && errno != EINTR) {
		dismiss(state, reader);
		return;
	}
	while (reader->used) {
		n = send(reader->fd, reader->waiting, reader->used, MSG_NOSIGNAL | MSG_DONTWAIT);
		if (n < 0 && errno != EAGAIN && errno != EINTR) {
			dismiss(state, reader);
			return;
		}
		if (n <= 0)
			return;
		reader->used -= (size_t)n;
		memmove(reader->waiting, reader->waiting + n, reader->used);
	}
}

void state_poll(struct state *state)
{
	if (!state)
		return;
	while (let_in(state)) {}
	for (size_t k = 0; k < READERS; k++)
		if (state->reader[k].fd >= 0)
			pass_on(state, &state->reader[k]);
}

void state_close(struct state *state)
{
	struct stat st;

	if (!state)
		return;
	state_poll(state);              /* the last contacts are told at the very end */
	for (size_t k = 0; k < READERS; k++)
		if (state->reader[k].fd >= 0)
			dismiss(state, &state->reader[k]);
	for (size_t k = 0; k < state->kinds; k++)
		free(state->kept[k].line);
	if (lstat(state->path, &st) == 0 && st.st_dev == state->device && st.st_ino == state->inode)
		unlink(state->path);
	close(state->fd);
	free(state);
}
