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
#include "limbwatch/space.h"
#include "limbwatch/space.h"
#include "limbwatch/stamp_line.h"
#include "listen.h"
#include "realtime.h"
#include "service.h"
#include "show.h"

static const long idle_live_ns = 4000000, idle_keeper_ns = 20000000, idle_replay_ns = 200000, poll_ns = 50000000;
static const double progress_every_s = 5;
static const int64_t stuck_ns = 10000000000;    /* the signal thread looks for frames every 2 ms */

static atomic_bool stop_requested, reload_requested;

struct recorder {
	const struct config *config;
	const struct recorder_hooks *hooks;
	atomic_bool stop;               /* this run's: also set when a new configuration is taken up */
	bool renew;                     /* a new configuration waits for the end of the vigil */
	bool renewing_said;
	struct device device;
	struct intake face;             /* the device's, as first opened: format and rate stay */
	struct ring *ring;
	struct ring_reader *hearing, *keeping;
	struct plans plans;
	struct keeper keeper;
	struct listener *listener;
	struct acquire acquire;
	struct glance glance;
	struct shown shown;
	pthread_t signal_thread, keeper_thread;
	unsigned long long beats;       /* of the signal thread */
	int64_t beat_ns;
	bool stuck_said;
	unsigned losses_shown;
	enum device_state state_shown;
	double said_s;                  /* CLOCK_MONOTONIC of the last progress line */
};

void recorder_stop(void)
{
	atomic_store(&stop_requested, true);
}

void recorder_reload(void)
{
	atomic_store(&reload_requested, true);
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

/* @return 0 or -errno, unsaid: whether a file can be made and written */
static int try_folder(const char *folder)
{
	char path[4096];
	int fd, ret;

	snprintf(path, sizeof(path), "%s/.limbwatch-%ld", folder, (long)getpid());
	fd = disk_real.open(path, O_CREAT | O_WRONLY | O_EXCL | O_CLOEXEC, 0600);
	if (fd < 0)
		return fd;
	ret = disk_real.write(fd, path, 1) < 1 ? -ENOSPC : 0;
	disk_real.close(fd);
	disk_real.unlink(path);
	return ret;
}

/*
 * A full disk is no reason not to watch: what may be removed goes, and recording begins when there is room.
 *
 * @return 0 or -errno (said)
 */
static int try_and_repair(const struct config *config)
{
	const char *folder = config->keep.folder;
	int ret;

	space_make(&disk_real, folder, config->keep.free_bytes, config->keep.remove_contacts);
	ret = try_folder(folder);
	if (ret < 0 && ret != -ENOSPC) {
		log_error("keep.folder %s cannot be written to: %s", folder, strerror(-ret));
		return ret;
	}
	if (ret == -ENOSPC)
		log_error("keep.folder %s: the disk is full, and nothing on it may be removed: RECORDING BEGINS WHEN THERE IS ROOM", folder);
	ret = segment_repair(&disk_real, folder);
	if (ret < 0)                    /* an old recording that cannot be read is no reason to miss the next contact */
		log_error("keep.folder %s: not everything that was left open could be repaired: %s", folder, strerror(-ret));
	return 0;
}

/*
 * The folder must take files before recording begins: better refused at dusk than found out at the contact.
 *
 * @return descriptor that holds the lock until it is closed, or -errno
 */
static int prepare_folder(const struct config *config)
{
	const char *folder = config->keep.folder;
	int ret, lock;

	ret = disk_real.make_folder(folder, 0775);
	if (ret < 0) {
		log_error("keep.folder %s cannot be made: %s", folder, strerror(-ret));
		return ret;
	}
	lock = lock_folder(folder);
	if (lock < 0)
		return lock;
	ret = try_and_repair(config);
	if (ret == 0)
		return lock;
	close(lock);
	return ret;
}

static int create_ring(struct recorder *r)
{
	double frames = (double)listener_backlog(r->listener) + r->config->keep.ring_s * r->face.rate;
	size_t bytes = frame_bytes(r->face.format);
	int ret;

	ret = ring_create(&r->ring, bytes, (size_t)frames);
	if (ret < 0) {
		log_error("no memory for a ring of %.0f s (%.0f MB): %s", frames / r->face.rate,
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
		const char *segment = *delivery->segment ? delivery->segment : NULL;

		if (r->hooks->contact)
			r->hooks->contact(r->hooks->context, r->config, &delivery->contact, segment);
		show_contact(&r->shown, &delivery->contact, segment);
		free(delivery);
	}
}

static void say_progress(struct recorder *r)
{
	double now = monotonic_s();
	double heard = (double)listener_heard(r->listener);

	if (!r->hooks->progress || r->face.real_time || now - r->said_s < progress_every_s)
		return;
	r->said_s = now;
	if (r->face.total_frames)
		log_notice("replay: %.0f%% (%.1f of %.1f h), contacts so far: %u",
		           100 * heard / (double)r->face.total_frames, heard / r->face.rate / 3600,
		           (double)r->face.total_frames / r->face.rate / 3600, listener_contacts(r->listener));
	else
		log_notice("replay: %.1f h, contacts so far: %u", heard / r->face.rate / 3600,
		           listener_contacts(r->listener));
}

/* ------------------------------------------------------------------ the main thread's loop */

/* Signals become this run's own flags here, for a handler may not do more. */
static void heed_signals(struct recorder *r)
{
	if (atomic_load(&stop_requested)) {
		if (!atomic_exchange(&r->stop, true) && r->hooks->service)
			service_stopping();
		r->renew = false;
	}
	if (!atomic_exchange(&reload_requested, false) || !r->hooks->reload)
		return;
	if (r->hooks->service)
		service_reloading();
	r->renew = r->hooks->reload(r->hooks->context) || r->renew;
	r->renewing_said = false;
	if (r->hooks->service && !r->renew)
		service_ready();
}

/* A new configuration is taken up between vigils, and not while a contact is still being timed. */
static void renew_when_quiet(struct recorder *r)
{
	bool busy;

	if (!r->renew || atomic_load(&r->stop))
		return;
	pthread_mutex_lock(&r->glance.mutex);
	busy = r->glance.view.busy;
	pthread_mutex_unlock(&r->glance.mutex);
	if (!busy)
		atomic_store(&r->stop, true);
	else if (!r->renewing_said)
		log_notice("the new configuration is taken up when the vigil is over");
	if (busy && !r->renewing_said && r->hooks->service)
		service_ready();
	r->renewing_said = true;
}

/* What the manager's watchdog is tied to: acquire (looked after by device_watch), signal, and this thread itself. */
static void check_progress(struct recorder *r)
{
	unsigned long long beats = r->listener ? listener_beats(r->listener) : r->beats + 1;
	int64_t now = host_now();

	if (beats != r->beats || !r->face.real_time) {
		r->beats = beats;
		r->beat_ns = now;
		r->stuck_said = false;
	}
	if (now - r->beat_ns < stuck_ns) {
		service_alive();
		return;
	}
	if (!r->stuck_said)
		log_error("the signal thread has made no progress for %.0f s", (double)(now - r->beat_ns) * 1e-9);
	r->stuck_said = true;
}

static void show_changes(struct recorder *r)
{
	if (r->device.losses != r->losses_shown)
		show_event(&r->shown, r->device.why);
	else if (r->device.state != r->state_shown && r->device.state == DEVICE_RUNNING && r->losses_shown)
		show_event(&r->shown, "the device is back");
	r->losses_shown = r->device.losses;
	r->state_shown = r->device.state;
	show_round(&r->shown, &r->device, &r->acquire, &r->keeper, &r->glance, listener_latency(r->listener),
	           listener_contacts(r->listener));
	state_poll(r->shown.state);
}

/* Until the keeper has carried out the last plan. */
static void watch_over(struct recorder *r)
{
	const struct timespec moment = { .tv_nsec = r->face.real_time ? poll_ns : poll_ns / 10 };

	while (pthread_tryjoin_np(r->keeper_thread, NULL) == EBUSY) {
		heed_signals(r);
		renew_when_quiet(r);
		device_watch(&r->device);
		deliver(r);
		say_progress(r);
		if (r->hooks->service)
			show_changes(r);
		check_progress(r);
		nanosleep(&moment, NULL);
	}
	while (r->device.state != DEVICE_ENDED) {       /* its thread ends the ring a moment before itself */
		device_watch(&r->device);
		nanosleep(&(struct timespec){ .tv_nsec = idle_replay_ns }, NULL);
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
	ret = device_start(&r->device, &r->acquire);
	if (ret < 0)
		goto end_ring;
	if (r->hooks->service && r->face.real_time)
		realtime_say(r->config->live.lock_memory ? realtime_lock_memory() : 0,
		             r->device.realtime < 0 ? r->device.realtime : 0);
	if (r->hooks->service)
		service_ready();
	if (r->hooks->running)
		r->hooks->running(r->hooks->context);
	watch_over(r);
	pthread_join(r->signal_thread, NULL);
	return 0;
end_ring:
	ring_end(r->ring);
	pthread_join(r->signal_thread, NULL);
end_plans:
	plans_decide(&r->plans, UINT64_MAX, true);
	pthread_join(r->keeper_thread, NULL);
	return ret;
}

static void say_latency(const char *what, const struct latency *latency)
{
	struct latency_summary s;
	char p50[32], p999[32], worst[32];

	latency_read(latency, &s);
	if (s.count)
		log_detail("sample in to %s: %s half the time, %s at 99.9%%, %s at worst (%llu times)", what,
		           report_interval(p50, s.p50_s), report_interval(p999, s.p999_s), report_interval(worst, s.worst_s),
		           s.count);
}

/* How it ended, in words; the result of the run. */
static int say_end(struct recorder *r)
{
	int result = r->device.result, disk = atomic_load(&r->keeper.trouble);
	unsigned long long lost = atomic_load(&r->keeper.lost), gaps = atomic_load(&r->acquire.lost);
	const char *sentence = r->device.why;

	if (result != -ECANCELED && result != -ENODATA)
		log_error("%s", sentence);
	else if (*sentence)
		log_warning("%s", sentence);
	if (lost)
		log_error("%llu frames are in no recording: the disk did not take them in time", lost);
	if (gaps)
		log_warning("%s lost %llu frames; the gaps are noted in the sidecars", r->face.name, gaps);
	say_latency("ring", &r->acquire.latency);
	say_latency("trigger", listener_latency(r->listener));
	log_notice("%.3f s of samples heard, %u contact%s, %u segment%s in %s",
	           (double)listener_heard(r->listener) / r->face.rate, listener_contacts(r->listener),
	           listener_contacts(r->listener) == 1 ? "" : "s", atomic_load(&r->keeper.segments),
	           atomic_load(&r->keeper.segments) == 1 ? "" : "s", r->config->keep.folder);
	if (result != -ECANCELED && result != -ENODATA)
		return result;
	if (r->renew)
		return RECORDER_RENEW;
	return disk ? disk : lost || *sentence ? -EIO : 0;      /* incomplete data count as a failure, kept though they are */
}

/* Waits for a device that is not there yet. @return 1: found; 0: stopped, or a new configuration to take up; -errno */
static int find_device(struct recorder *r)
{
	const struct timespec moment = { .tv_nsec = poll_ns };
	int ret;

	while ((ret = device_find(&r->device)) == 0) {
		heed_signals(r);
		if (r->renew || atomic_load(&r->stop))
			return 0;
		if (r->hooks->service) {
			service_ready();
			show_waiting(&r->shown);
			state_poll(r->shown.state);
		}
		check_progress(r);
		nanosleep(&moment, NULL);
	}
	return ret;
}

static int run(struct recorder *r)
{
	long idle = r->face.real_time ? idle_live_ns : idle_replay_ns;
	struct listener_settings listener = {
		.config = r->config, .intake = &r->face, .device = &r->device, .acquire = &r->acquire, .plans = &r->plans,
		.glance = r->hooks->service ? &r->glance : NULL, .idle_ns = idle,
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
		.config = r->config, .disk = &disk_real, .intake = &r->face, .reader = r->keeping, .plans = &r->plans,
		.idle_ns = r->face.real_time ? idle_keeper_ns : idle, .to_ring = &r->acquire.latency,
		.to_trigger = listener_latency(r->listener),
	};
	ret = keeper_open(&r->keeper);
	if (ret < 0)
		goto destroy_ring;
	acquire_create(&r->acquire, r->ring, r->face.rate, &r->stop);
	ret = run_threads(r);
	if (ret == 0)
		ret = say_end(r);
	keeper_close(&r->keeper);
destroy_ring:
	destroy_ring(r);
destroy_listener:
	listener_destroy(r->listener);
	r->listener = NULL;
close_plans:
	plans_close(&r->plans);
	return ret;
}

static void open_state(struct recorder *r)
{
	const char *path = r->config->state.socket;
	int ret;

	r->shown = (struct shown){ .config = r->config };
	if (!r->hooks->service || !*path)
		return;
	ret = state_open(&r->shown.state, path);
	if (ret == 0)
		show_hello(&r->shown);
	else if (r->config->state.given)
		log_warning("state.socket %s cannot be made: %s; nobody can look in", path, strerror(-ret));
	else
		log_detail("no state socket at %s: %s", path, strerror(-ret));
}

static int find_and_run(struct recorder *r)
{
	int ret = find_device(r);

	if (ret < 0)
		return ret;
	if (ret == 0)
		return r->renew ? RECORDER_RENEW : 0;
	device_face(&r->device, &r->face);
	return run(r);
}

int recorder_run(const struct config *config, const struct recorder_hooks *hooks)
{
	struct recorder *r = calloc(1, sizeof(*r));
	int lock, ret;

	if (!r)
		return -ENOMEM;
	r->config = config;
	r->hooks = hooks;
	r->said_s = monotonic_s();
	r->beat_ns = host_now();
	pthread_mutex_init(&r->glance.mutex, NULL);
	r->glance.view.open = r->glance.view.next = -1;
	ret = lock = prepare_folder(config);
	if (lock < 0)
		goto free_recorder;
	ret = device_create(&r->device, config, &r->stop);
	if (ret < 0)
		goto unlock;
	open_state(r);
	ret = find_and_run(r);
	state_close(r->shown.state);
	device_destroy(&r->device);
unlock:
	close(lock);
free_recorder:
	pthread_mutex_destroy(&r->glance.mutex);
	free(r);
	return ret;
}
