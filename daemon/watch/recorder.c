/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <fcntl.h>
#include <math.h>
#include <pthread.h>
#include <stdlib.h>
#include <string.h>
#include <sys/file.h>
#include <time.h>
#include <unistd.h>
#include "acquire.h"
#include "keeper.h"
#include "limbwatch/log.h"
#include "limbwatch/recorder.h"
#include "limbwatch/segment.h"
#include "listen.h"

static const long idle_live_ns = 2000000, idle_replay_ns = 200000, poll_ns = 50000000;
static const double progress_every_s = 5;

static atomic_bool stop_requested;

struct recorder {
	const struct config *config;
	const struct recorder_hooks *hooks;
	struct intake *intake;
	struct ring *ring;
	struct ring_reader *hearing, *keeping;
	struct plans plans;
	struct keeper keeper;
	struct listener *listener;
	struct acquire acquire;
	pthread_t acquire_thread, signal_thread, keeper_thread;
	double said_s;                  /* CLOCK_MONOTONIC of the last progress line */
};

void recorder_stop(void)
{
	atomic_store(&stop_requested, true);
}

static double monotonic_s(void)
{
	struct timespec now;

	clock_gettime(CLOCK_MONOTONIC, &now);
	return (double)now.tv_sec + (double)now.tv_nsec * 1e-9;
}

/* One recorder a folder: another would take what this one is writing for the remains of a power cut. */
static int lock_folder(const char *folder)
{
	int fd = open(folder, O_RDONLY | O_DIRECTORY | O_CLOEXEC), ret;

	if (fd < 0) {
		ret = -errno;
		log_error("keep.folder %s cannot be opened: %s", folder, strerror(-ret));
		return ret;
	}
	if (flock(fd, LOCK_EX | LOCK_NB) == 0)
		return fd;
	ret = -errno;
	if (ret == -EWOULDBLOCK)
		log_error("keep.folder %s is in use by another limbwatchd", folder);
	else
		log_error("keep.folder %s cannot be locked: %s", folder, strerror(-ret));
	close(fd);
	return ret;
}

/*
 * The folder must take files before recording begins: better refused at dusk than found out at the contact.
 *
 * @return descriptor that holds the lock until it is closed, or -errno
 */
static int prepare_folder(const struct config *config)
{
	const char *folder = config->keep.folder;
	char path[4096];
	int fd, ret, lock;

	ret = disk_real.make_folder(folder, 0775);
	if (ret < 0) {
		log_error("keep.folder %s cannot be made: %s", folder, strerror(-ret));
		return ret;
	}
	lock = lock_folder(folder);
	if (lock < 0)
		return lock;
	snprintf(path, sizeof(path), "%s/.limbwatch-%ld", folder, (long)getpid());
	fd = disk_real.open(path, O_CREAT | O_WRONLY | O_EXCL | O_CLOEXEC, 0600);
	if (fd < 0) {
		ret = fd;
		log_error("keep.folder %s cannot be written to: %s", folder, strerror(-ret));
		goto unlock;
	}
	ret = disk_real.write(fd, path, 1) < 1 ? -ENOSPC : 0;
	disk_real.close(fd);
	disk_real.unlink(path);
	if (ret < 0) {
		log_error("keep.folder %s cannot be written to: %s", folder, strerror(-ret));
		goto unlock;
	}
	ret = segment_repair(&disk_real, folder);
	if (ret >= 0)
		return lock;
	log_error("keep.folder %s: recordings left open cannot be repaired: %s", folder, strerror(-ret));
unlock:
	close(lock);
	return ret;
}

static int create_ring(struct recorder *r)
{
	double frames = (double)listener_backlog(r->listener) + r->config->keep.ring_s * r->intake->rate;
	size_t bytes = frame_bytes(r->intake->format);
	int ret;

	ret = ring_create(&r->ring, bytes, (size_t)frames);
	if (ret < 0) {
		log_error("no memory for a ring of %.0f s (%.0f MB): %s", frames / r->intake->rate,
		          frames * (double)bytes / 1e6, strerror(-ret));
		return ret;
	}
	ret = ring_reader_open(&r->hearing, r->ring);
	if (ret < 0)
		goto destroy_ring;
	ret = ring_reader_open(&r->keeping, r->ring);
	if (ret < 0)
		goto close_hearing;
	listener_attach(r->listener, r->hearing);
	return 0;
close_hearing:
	ring_reader_close(r->hearing);
destroy_ring:
	ring_destroy(r->ring);
	return ret;
}

static void destroy_ring(struct recorder *r)
{
	ring_reader_close(r->keeping);
	ring_reader_close(r->hearing);
	ring_destroy(r->ring);
}

static void deliver(struct recorder *r)
{
	struct delivery *delivery;

	while ((delivery = keeper_deliver(&r->keeper))) {
		if (r->hooks->contact)
			r->hooks->contact(r->hooks->context, r->config, &delivery->contact,
			                  *delivery->segment ? delivery->segment : NULL);
		free(delivery);
	}
}

static void say_progress(struct recorder *r)
{
	double now = monotonic_s();
	double heard = (double)listener_heard(r->listener);

	if (!r->hooks->progress || r->intake->real_time || now - r->said_s < progress_every_s)
		return;
	r->said_s = now;
	if (r->intake->total_frames)
		log_notice("replay: %.0f%% (%.1f of %.1f h), contacts so far: %u",
		           100 * heard / (double)r->intake->total_frames, heard / r->intake->rate / 3600,
		           (double)r->intake->total_frames / r->intake->rate / 3600, listener_contacts(r->listener));
	else
		log_notice("replay: %.1f h, contacts so far: %u", heard / r->intake->rate / 3600,
		           listener_contacts(r->listener));
}

/* The main thread's loop: contacts out, progress, until the keeper has carried out the last plan. */
static void watch_over(struct recorder *r)
{
	const struct timespec moment = { .tv_nsec = r->intake->real_time ? poll_ns : poll_ns / 10 };

	while (pthread_tryjoin_np(r->keeper_thread, NULL) == EBUSY) {
		deliver(r);
		say_progress(r);
		nanosleep(&moment, NULL);
	}
	deliver(r);
}

static int start_thread(pthread_t *thread, const char *name, void *(*run)(void *), void *argument)
{
	int ret = -pthread_create(thread, NULL, run, argument);

	if (ret < 0)
		log_error("cannot start the %s thread: %s", name, strerror(-ret));
	else
		pthread_setname_np(*thread, name);
	return ret;
}

static int run_threads(struct recorder *r)
{
	int ret;

	ret = start_thread(&r->keeper_thread, "keeper", keeper_run, &r->keeper);
	if (ret < 0)
		return ret;
	ret = start_thread(&r->signal_thread, "signal", listener_run, r->listener);
	if (ret < 0)
		goto end_plans;
	ret = start_thread(&r->acquire_thread, "acquire", acquire_run, &r->acquire);
	if (ret < 0)
		goto end_ring;
	watch_over(r);
	pthread_join(r->signal_thread, NULL);
	pthread_join(r->acquire_thread, NULL);
	return 0;
end_ring:
	ring_end(r->ring);
	pthread_join(r->signal_thread, NULL);
end_plans:
	plans_decide(&r->plans, UINT64_MAX, true);
	pthread_join(r->keeper_thread, NULL);
	return ret;
}

/* How it ended, in words; the result of the run. */
static int say_end(struct recorder *r)
{
	int result = atomic_load(&r->acquire.result), disk = atomic_load(&r->keeper.trouble);
	unsigned long long lost = atomic_load(&r->keeper.lost), gaps = atomic_load(&r->acquire.lost);
	char sentence[512] = "";

	if (result != -ECANCELED && r->intake->driver->explain)
		r->intake->driver->explain(r->intake, sentence, sizeof(sentence));
	if (result != -ECANCELED && result != -ENODATA)
		log_error("%s", *sentence ? sentence : strerror(-result));
	else if (*sentence)
		log_warning("%s", sentence);
	if (gaps)
		log_warning("%s lost %llu frames; the gaps are noted in the sidecars", r->intake->name, gaps);
	log_notice("%.3f s of samples heard, %u contact%s, %u segment%s in %s",
	           (double)listener_heard(r->listener) / r->intake->rate, listener_contacts(r->listener),
	           listener_contacts(r->listener) == 1 ? "" : "s", atomic_load(&r->keeper.segments),
	           atomic_load(&r->keeper.segments) == 1 ? "" : "s", r->config->keep.folder);
	if (result != -ECANCELED && result != -ENODATA)
		return result;
	return disk ? disk : lost || *sentence ? -EIO : 0;      /* incomplete data count as a failure, kept though they are */
}

static int run(struct recorder *r)
{
	long idle = r->intake->real_time ? idle_live_ns : idle_replay_ns;
	struct listener_settings listener = {
		.config = r->config, .intake = r->intake, .acquire = &r->acquire, .plans = &r->plans, .idle_ns = idle,
	};
	int ret;

	ret = plans_open(&r->plans);
	if (ret < 0)
		return ret;
	ret = listener_create(&r->listener, &listener);
	if (ret < 0)
		goto close_plans;
	ret = create_ring(r);
	if (ret < 0)
		goto destroy_listener;
	r->keeper = (struct keeper){
		.config = r->config, .disk = &disk_real, .intake = r->intake, .reader = r->keeping, .plans = &r->plans,
		.idle_ns = idle,
	};
	ret = keeper_open(&r->keeper);
	if (ret < 0)
		goto destroy_ring;
	r->acquire = (struct acquire){ .intake = r->intake, .ring = r->ring, .stop = &stop_requested };
	ret = r->intake->driver->start(r->intake);
	if (ret < 0)
		goto close_keeper;
	ret = run_threads(r);
	if (ret == 0)
		ret = say_end(r);
	r->intake->driver->stop(r->intake);
close_keeper:
	keeper_close(&r->keeper);
destroy_ring:
	destroy_ring(r);
destroy_listener:
	listener_destroy(r->listener);
close_plans:
	plans_close(&r->plans);
	return ret;
}

int recorder_run(const struct config *config, const struct recorder_hooks *hooks)
{
	struct recorder r = { .config = config, .hooks = hooks, .said_s = monotonic_s() };
	int lock = prepare_folder(config), ret;

	if (lock < 0)
		return lock;
	ret = config->driver->open(&r.intake, config->driver_values);
	if (ret == 0) {
		ret = run(&r);
		config->driver->close(r.intake);
	}
	close(lock);
	return ret;
}
