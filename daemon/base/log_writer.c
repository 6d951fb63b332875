/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <pthread.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>
#include "limbwatch/stamp_line.h"
#include "log_writer.h"

enum { WAITING = 512, KINDS = 64, BURST = 30 };
static const int64_t quiet_ns = 60000000000;            /* one kind of sentence: so many, then a minute's silence */

static pthread_mutex_t mutex = PTHREAD_MUTEX_INITIALIZER;
static pthread_cond_t news = PTHREAD_COND_INITIALIZER;
static pthread_t thread;
static bool running, ending;
static char *line[WAITING];
static unsigned first, waiting, dropped;
static void (*write_line)(const char *text);

static struct kind { const char *format; int64_t since_ns; unsigned said, held; } kinds[KINDS];

/* mutex is held. @return false: dropped */
static bool append(char *text)
{
	if (waiting == WAITING) {
		dropped++;
		return false;
	}
	line[(first + waiting++) % WAITING] = text;
	pthread_cond_signal(&news);
	return true;
}

static struct kind *kind_of(const char *format, int64_t now)
{
	struct kind *oldest = kinds;

	for (struct kind *k = kinds; k < kinds + KINDS; k++) {
		if (k->format == format)
			return k;
		if (k->since_ns < oldest->since_ns)
			oldest = k;
	}
	*oldest = (struct kind){ .format = format, .since_ns = now };
	return oldest;
}

/* mutex is held. @return false: too many of this kind of late; *held: how many have been held back before this one */
static bool may_say(const char *format, unsigned *held)
{
	int64_t now = host_now();
	struct kind *kind = kind_of(format, now);

	*held = 0;
	if (now - kind->since_ns > quiet_ns) {
		*held = kind->held;
		*kind = (struct kind){ .format = format, .since_ns = now };
	}
	if (kind->said < BURST) {
		kind->said++;
		return true;
	}
	kind->held++;
	return false;
}

bool log_writer_take(const char *format, const char *text)
{
	char *copy, more[96];
	unsigned held;

	pthread_mutex_lock(&mutex);
	if (!running) {
		pthread_mutex_unlock(&mutex);
		return false;
	}
	if (may_say(format, &held)) {
		copy = strdup(text);
		if (!copy || !append(copy))
			free(copy);
		snprintf(more, sizeof(more), "(%u sentences like the last were held back in between)\n", held);
		copy = held ? strdup(more) : NULL;
		if (copy && !append(copy))
			free(copy);
	}
	pthread_mutex_unlock(&mutex);
	return true;
}

/* mutex is held; gives it up while writing. */
static void write_next(void)
{
	char *text = line[first], more[96];
	unsigned lost = dropped;

	first = (first + 1) % WAITING;
	waiting--;
	dropped = 0;
	pthread_mutex_unlock(&mutex);
	write_line(text);
	free(text);
	if (lost) {
		snprintf(more, sizeof(more), "(%u sentences were lost: whoever reads them was too slow)\n", lost);
		write_line(more);
	}
	pthread_mutex_lock(&mutex);
}

static void *run(void *unused)
{
	pthread_mutex_lock(&mutex);
	for (;;) {
		while (!waiting && !ending)
			pthread_cond_wait(&news, &mutex);
		if (!waiting)
			break;
		write_next();
	}
	pthread_mutex_unlock(&mutex);
	return unused;
}

int log_writer_start(void (*write_text)(const char *text))
{
	int ret;

	write_line = write_text;
	ending = false;
	ret = -pthread_create(&thread, NULL, run, NULL);
	if (ret < 0)
		return ret;
	pthread_setname_np(thread, "log");
	pthread_mutex_lock(&mutex);
	running = true;
	pthread_mutex_unlock(&mutex);
	return 0;
}

void log_writer_end(void)
{
	const struct timespec moment = { .tv_nsec = 5000000 };
	int64_t until = host_now() + 2000000000;        /* for a reader that does not read: not for ever */
	bool was;

	pthread_mutex_lock(&mutex);
	was = running;
	running = false;
	ending = true;
	pthread_cond_signal(&news);
	pthread_mutex_unlock(&mutex);
	if (!was)
		return;
	while (pthread_tryjoin_np(thread, NULL)) {
		if (host_now() > until) {
			pthread_detach(thread);
			return;
		}
		nanosleep(&moment, NULL);
	}
}
