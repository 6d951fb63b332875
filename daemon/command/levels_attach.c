/* SPDX-License-Identifier: GPL-3.0-or-later */
/* The recorder's state socket: JSON lines, of which those about levels are shown. */
#include <errno.h>
#include <jansson.h>
#include <poll.h>
#include <stdlib.h>
#include <string.h>
#include <sys/socket.h>
#include <sys/un.h>
#include <unistd.h>
#include "../base/utf8.h"
#include "levels_inner.h"
#include "limbwatch/command.h"
#include "limbwatch/log.h"
#include "screen.h"

enum { LINE = 1 << 18, POLL_MS = 200 };

static const double patience_s = 5;     /* the recorder speaks every second */

struct listener {
	const struct levels_run *run;
	const char *path;
	int fd;
	struct meter_report report;
	unsigned reports;
	double heard, said;             /* when the last report came; when its absence was last said */
	char station[64], device[128];
	char trouble[160];              /* why its device is missing; "" when it is not */
	size_t filled;
	char line[LINE];
};

int levels_connect(const char *path)
{
	struct sockaddr_un address = { .sun_family = AF_UNIX };
	int fd, ret;

	if (strlen(path) >= sizeof(address.sun_path))
		return -ENAMETOOLONG;
	strcpy(address.sun_path, path);
	fd = socket(AF_UNIX, SOCK_STREAM | SOCK_CLOEXEC | SOCK_NONBLOCK, 0);
	if (fd < 0)
		return -errno;
	if (connect(fd, (struct sockaddr *)&address, sizeof(address)) == 0)
		return fd;
	ret = -errno;
	close(fd);
	return ret;
}

static void show(struct listener *l, double silent_s)
{
	char title[512];

	if (*l->trouble)
		snprintf(title, sizeof(title), "limbwatch levels: the recorder waits for its device: %s", l->trouble);
	else if (silent_s > 0)
		snprintf(title, sizeof(title), "limbwatch levels: the recorder has been silent for %.0f s", silent_s);
	else
		snprintf(title, sizeof(title), "limbwatch levels: attached to the recorder%s%s, which holds %s",
		         *l->station ? " of " : "", l->station, *l->device ? l->device : "the device");
	levels_show(l->run, title, &l->report);
}

/* A text for the title; what could act on the terminal is left out. */
static void take_text(char *to, size_t size, const json_t *o, const char *name)
{
	const char *text = json_string_value(json_object_get(o, name));

	snprintf(to, size, "%s", text && strlen(text) < size && utf8_text_is_plain(text) ? text : "");
}

/* What else the recorder says and concerns us: who and where it is, and its device. @return 0, or the exit status */
static int take_other(struct listener *l, const char *line, size_t size)
{
	json_t *o = json_loadb(line, size, 0, NULL);
	const char *what = json_string_value(json_object_get(o, "what")), *state;
	int status = 0;

	if (!what) {
		json_decref(o);
		return 0;
	}
	if (!strcmp(what, "full")) {
		log_error("the recorder at %s has as many readers as it takes", l->path);
		status = STATUS_FAILURE;
	} else if (!strcmp(what, "hello")) {
		take_text(l->station, sizeof(l->station), o, "station");
	} else if (!strcmp(what, "device")) {
		state = json_string_value(json_object_get(o, "state"));
		take_text(l->device, sizeof(l->device), o, "name");
		take_text(l->trouble, sizeof(l->trouble), o, "why");
		if (!state || strcmp(state, "missing"))
			*l->trouble = 0;
		else if (!*l->trouble)
			snprintf(l->trouble, sizeof(l->trouble), "it is missing");
	}
	json_decref(o);
	return status;
}

/* @return 0, or the exit status */
static int take_line(struct listener *l, const char *line, size_t size)
{
	char why[160];
	int ret;

	if (size == 0)
		return 0;
	ret = levels_parse(&l->report, line, size, why, sizeof(why));
	if (ret == -ENOMSG)
		return take_other(l, line, size);
	if (ret < 0) {
		log_error("what comes from %s is not understood: %s", l->path, why);
		return STATUS_FAILURE;
	}
	l->reports++;
	l->heard = l->said = levels_now();
	if (l->run->json) {
		printf("%.*s\n", (int)size, line);
		fflush(stdout);
	} else {
		show(l, 0);
	}
	return 0;
}

static int take_lines(struct listener *l)
{
	char *line = l->line, *end;
	int status = 0;

	while (!status && (end = memchr(line, '\n', l->filled - (size_t)(line - l->line)))) {
		status = take_line(l, line, (size_t)(end - line));
		line = end + 1;
	}
	l->filled -= (size_t)(line - l->line);
	memmove(l->line, line, l->filled);
	if (!status && l->filled == LINE) {
		log_error("what comes from %s is not understood: a line of more than %d bytes", l->path, LINE);
		status = STATUS_FAILURE;
	}
	return status;
}

/* @return 0, or the exit status */
static int take_bytes(struct listener *l)
{
	ssize_t n = recv(l->fd, l->line + l->filled, LINE - l->filled, 0);

	if (n < 0 && (errno == EAGAIN || errno == EINTR))
		return 0;
	if (n > 0) {
		l->filled += (size_t)n;
		return take_lines(l);
	}
	if (n == 0)
		log_error("the recorder at %s has ended or closed the connection", l->path);
	else
		log_error("the recorder at %s cannot be heard any more: %s", l->path, strerror(errno));
	return STATUS_FAILURE;
}

static void say_silence(struct listener *l)
{
	double now = levels_now();

	if (now - l->said < patience_s)
		return;
	if (screen_in_place() && !l->run->json && l->reports)
		show(l, now - l->heard);
	else if (*l->trouble)
		log_warning("the recorder at %s waits for its device: %s", l->path, l->trouble);
	else
		log_warning("the recorder at %s has said nothing of levels for %.0f s", l->path, now - l->heard);
	l->said = now;
}

static int listen_on(struct listener *l)
{
	double begun = levels_now();
	int status = 0;

	l->heard = l->said = begun;
	while (!levels_stop && !status && levels_now() - begun < l->run->seconds) {
		struct pollfd poll_fd = { .fd = l->fd, .events = POLLIN };

		if (poll(&poll_fd, 1, POLL_MS) > 0)
			status = take_bytes(l);
		say_silence(l);
	}
	if (!status && !levels_stop && !l->reports) {
		log_error("the recorder at %s said nothing of levels in %g s", l->path, l->run->seconds);
		status = STATUS_FAILURE;
	}
	return status;
}

int levels_run_attached(const struct levels_run *run, int fd, const char *path)
{
	struct listener *l = calloc(1, sizeof(*l));
	int status = STATUS_FAILURE;

	if (l) {
		l->run = run;
		l->path = path;
		l->fd = fd;
		status = listen_on(l);
	} else {
		log_error("no memory");
	}
	close(fd);
	free(l);
	return status;
}
