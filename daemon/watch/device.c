/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <inttypes.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>
#include "device.h"
#include "limbwatch/log.h"
#include "realtime.h"

static const int64_t retry_first_ns = 500000000, retry_ns = 3000000000;         /* quick replugs, then patience */
static const int64_t remind_ns = 600000000000;          /* a missing device is said again every ten minutes */
static const int64_t gaps_ns = 60000000000;             /* gaps are said at once, for one reason not oftener than once a minute */
static const int64_t hung_patience_ns = 60000000000;
static const int64_t hang_stopping_ns = 1000000000;     /* a read comes back within 0.1 s */
static const int64_t absent_ns = 1000000000;            /* this thread comes by several times a second */

/* Sessions whose threads have not come back, with all that those still hold. */
static struct abandoned {
	struct session *session;
	struct abandoned *next;
} *abandoned;

int device_create(struct device *d, const struct config *config, atomic_bool *stop)
{
	*d = (struct device){ .config = config, .stop = stop, .realtime = 1 };
	return -pthread_mutex_init(&d->mutex, NULL);
}

void device_face(struct device *d, struct intake *out)
{
	pthread_mutex_lock(&d->mutex);
	*out = d->face;
	pthread_mutex_unlock(&d->mutex);
}

static void show_face(struct device *d)
{
	pthread_mutex_lock(&d->mutex);
	d->face = *d->intake;
	pthread_mutex_unlock(&d->mutex);
}

/* ------------------------------------------------------------------ opening */

/* The ring and all that listens are built for one format and rate: a device that comes back otherwise is another one. */
static bool same_stream(struct device *d)
{
	const struct intake *in = d->intake;

	if (!d->known) {
		d->known = true;
		d->format = in->format;
		d->rate = in->rate;
		return true;
	}
	if (in->format.type == d->format.type && in->format.channels == d->format.channels && in->rate == d->rate)
		return true;
	log_error("\"%s\" came back with %u channels of %s at %.9g Hz instead of %u of %s at %.9g Hz: not used", in->name,
	          in->format.channels, sample_type_name(in->format.type), in->rate, d->format.channels,
	          sample_type_name(d->format.type), d->rate);
	return false;
}

static bool passing(int error)
{
	return error == -ENODEV || error == -ENXIO || error == -ENOENT || error == -EBUSY || error == -EIO ||
		error == -EACCES || error == -ECONNREFUSED || error == -ETIMEDOUT || error == -EHOSTDOWN || error == -EAGAIN;
}

static void wait_for_it(struct device *d, int64_t now)
{
	bool early = now - d->lost_ns < 10 * retry_first_ns;

	d->retry_ns = now + (early ? retry_first_ns : retry_ns);
}

int device_find(struct device *d)
{
	const struct intake_driver *driver = d->config->driver;
	int64_t now = host_now();
	bool say = !d->said_ns || now - d->said_ns >= remind_ns;
	int ret;

	if (d->intake)
		return 1;
	if (now < d->retry_ns)
		return 0;
	log_hush(!say);
	ret = driver->open(&d->intake, d->config->driver_values);
	if (ret == 0 && !same_stream(d)) {
		driver->close(d->intake);
		d->intake = NULL;
		ret = -EREMCHG;
	}
	log_hush(false);
	if (ret == 0) {
		show_face(d);
		return 1;
	}
	if (!driver->comes_back || (!passing(ret) && !d->known))
		return ret;
	if (!say && ret != d->said_error) {
		say = true;
		log_error("%s", log_hushed());
	}
	if (say)
		log_warning("the %s intake is not to be had: it is tried again until it is", driver->name);
	if (say) {
		d->said_ns = now;
		d->said_error = ret;
	}
	if (!d->lost_ns)
		d->lost_ns = now;
	wait_for_it(d, now);
	return 0;
}

static int start_thread(struct device *d)
{
	int ret = -pthread_create(&d->thread, NULL, acquire_run, d->session), priority = d->config->live.priority;

	if (ret < 0) {
		log_error("cannot start the acquire thread: %s", strerror(-ret));
		return ret;
	}
	pthread_setname_np(d->thread, "acquire");
	d->realtime = priority > 0 && d->intake->real_time ? realtime_raise(d->thread, priority) : 1;
	return 0;
}

int device_start(struct device *d, struct acquire *acquire)
{
	const struct intake_driver *driver = d->config->driver;
	int ret = driver->start(d->intake);

	if (ret < 0)
		return ret;
	d->session = calloc(1, sizeof(*d->session));
	ret = -ENOMEM;
	if (!d->session)
		goto stop;
	d->acquire = d->session->acquire = acquire;
	d->session->intake = d->intake;
	d->beat_ns = d->frame_ns = host_now();
	d->beats = atomic_load(&acquire->beats);
	d->frames = d->frames_at_start = atomic_load(&acquire->frames);
	ret = start_thread(d);
	if (ret < 0)
		goto free_session;
	d->state = DEVICE_RUNNING;
	return 0;
free_session:
	free(d->session);
	d->session = NULL;
stop:
	driver->stop(d->intake);
	return ret;
}

/* ------------------------------------------------------------------ losing it */

static void close_intake(struct device *d)
{
	d->config->driver->stop(d->intake);
	d->config->driver->close(d->intake);
	d->intake = NULL;
}

/* The thread has ended by itself. */
static void end_session(struct device *d)
{
	pthread_join(d->thread, NULL);
	d->result = atomic_load(&d->session->result);
	free(d->session);
	d->session = NULL;
	*d->why = 0;
	if (d->result != -ECANCELED && d->config->driver->explain)
		d->config->driver->explain(d->intake, d->why, sizeof(d->why));
	if (!*d->why && d->result != -ECANCELED && d->result != -ENODATA)
		snprintf(d->why, sizeof(d->why), "\"%s\": %s", d->intake->name, strerror(-d->result));
	close_intake(d);
}

/* The thread, from which the grip has been taken, hangs in a driver: it is left there with its intake. */
static void leave_session(struct device *d)
{
	struct abandoned *a = malloc(sizeof(*a));

	pthread_detach(d->thread);
	if (a) {
		*a = (struct abandoned){ d->session, abandoned };
		abandoned = a;
	}
	d->session = NULL;
	d->intake = NULL;
	d->result = -ETIMEDOUT;
}

/* A thread that came back after all leaves its intake to be closed: until then a card may be busy, or keep its number. */
static void close_left(void)
{
	struct abandoned **at = &abandoned;

	while (*at) {
		struct abandoned *a = *at;
		struct intake *intake = a->session->intake;

		if (!atomic_load(&a->session->left)) {
			at = &a->next;
			continue;
		}
		intake->driver->stop(intake);
		intake->driver->close(intake);
		free(a->session);
		*at = a->next;
		free(a);
	}
}

static void lost(struct device *d)
{
	int64_t now = host_now();

	d->state = DEVICE_MISSING;
	d->losses++;
	d->lost_ns = now;
	d->retry_ns = now;              /* at once: it may only have stumbled */
	d->said_ns = 0;
	log_error("%s; the gap is counted, and it is opened anew as soon as it is there", d->why);
}

static void ended(struct device *d)
{
	d->state = DEVICE_ENDED;
	ring_end(d->acquire->ring);     /* its thread may have had no time for it */
}

static int64_t silence_ns(const struct device *d)
{
	return (int64_t)(d->config->live.silence_s * 1e9);
}

static void check_hang(struct device *d, int64_t now)
{
	unsigned long long beats = atomic_load(&d->acquire->beats);
	bool stopping = atomic_load(d->stop);

	if (beats != d->beats || !d->intake->real_time) {
		d->beats = beats;
		d->beat_ns = now;
	}
	if (now - d->beat_ns < (stopping ? hang_stopping_ns : silence_ns(d)))
		return;
	snprintf(d->why, sizeof(d->why), "\"%s\" hangs: a read has not come back for %.0f s", d->intake->name,
	         (double)(now - d->beat_ns) * 1e-9);
	acquire_abandon(d->session);
	leave_session(d);
	if (stopping)
		d->result = -ECANCELED;
	if (stopping || !d->config->driver->comes_back)
		ended(d);
	else
		lost(d);
}

/* The thread is in a read that times out: this takes its grip before the next block, and it ends.  @return false: it hangs after all */
static bool comes_out(struct device *d)
{
	const struct timespec moment = { .tv_nsec = 10000000 };
	const int64_t until = host_now() + hang_stopping_ns;

	acquire_abandon(d->session);
	while (!atomic_load(&d->session->left) && host_now() < until)
		nanosleep(&moment, NULL);
	if (!atomic_load(&d->session->left))
		return false;
	pthread_join(d->thread, NULL);
	free(d->session);
	d->session = NULL;
	return true;
}

/* A device that runs and delivers nothing is stopped and opened anew. */
static void check_silence(struct device *d, int64_t now)
{
	unsigned long long frames = atomic_load(&d->acquire->frames);

	if (frames != d->frames || !d->config->driver->comes_back || !d->intake->real_time) {
		d->frames = frames;
		d->frame_ns = now;
	}
	if (now - d->frame_ns < silence_ns(d) || atomic_load(d->stop))
		return;
	snprintf(d->why, sizeof(d->why), "\"%s\" has delivered nothing for %.0f s", d->intake->name,
	         (double)(now - d->frame_ns) * 1e-9);
	if (comes_out(d))
		close_intake(d);
	else
		leave_session(d);
	lost(d);
}

static void say_gaps(struct device *d, int64_t now)
{
	static const struct { unsigned flag; const char *reason; } reasons[] = {
		{ BLOCK_OVERRUN, "it was not read in time" }, { BLOCK_SLEPT, "it or the computer slept" },
		{ BLOCK_STALLED, "it had stopped by itself and was started again" },
	};
	const unsigned long long lost = atomic_load(&d->acquire->lost), frames = lost - d->gaps;
	char why[160] = "";

	if (now - d->gaps_said_ns >= gaps_ns)
		d->gaps_why = 0;
	if (!frames || !(atomic_load(&d->acquire->why) & ~d->gaps_why))
		return;
	const unsigned flags = atomic_exchange(&d->acquire->why, 0);
	for (size_t k = 0; k < sizeof(reasons) / sizeof(*reasons); k++)
		if (flags & reasons[k].flag)
			snprintf(why + strlen(why), sizeof(why) - strlen(why), "%s%s", *why ? "; " : ": ", reasons[k].reason);
	log_warning("\"%s\" lost %llu frames, %.4g s%s", d->intake->name, frames, (double)frames / d->rate, why);
	d->gaps = lost;
	d->gaps_why |= flags;
	d->gaps_said_ns = now;
}

static void check_end(struct device *d)
{
	if (!atomic_load(&d->session->result))
		return;
	end_session(d);
	if (d->result == -ECANCELED || d->result == -ENODATA || !d->config->driver->comes_back)
		ended(d);
	else
		lost(d);
}

/* A device held by our own hanging read is free only when this process ends: then the service manager's new start helps. */
static void give_up_hung(struct device *d)
{
	if (!abandoned || d->said_error != -EBUSY || host_now() - d->lost_ns < hung_patience_ns)
		return;
	snprintf(d->why, sizeof(d->why), "\"%s\" is still held by a read that hangs: only a new start of the recorder frees it",
	         d->face.name);
	d->result = -EBUSY;
	ended(d);
}

static void find_again(struct device *d)
{
	int64_t since = d->lost_ns;
	int ret;

	if (atomic_load(d->stop)) {
		d->result = -ECANCELED;
		*d->why = 0;
		ended(d);
		return;
	}
	if (device_find(d) != 1) {
		give_up_hung(d);
		return;
	}
	ret = device_start(d, d->acquire);
	if (ret < 0) {
		d->config->driver->close(d->intake);
		d->intake = NULL;
		wait_for_it(d, host_now());
		return;
	}
	log_notice("\"%s\" is back after %.1f s", d->face.name, (double)(host_now() - since) * 1e-9);
}

/* While the whole program stood still (stopped, or a machine under it asleep) nobody could make progress: that is no fault of the device. */
static void excuse_absence(struct device *d, int64_t now)
{
	int64_t absent = now - d->watched_ns;

	if (d->watched_ns && absent > absent_ns) {
		d->beat_ns = d->beat_ns + absent < now ? d->beat_ns + absent : now;
		d->frame_ns = d->frame_ns + absent < now ? d->frame_ns + absent : now;
	}
	d->watched_ns = now;
}

void device_watch(struct device *d)
{
	int64_t now = host_now();

	excuse_absence(d, now);
	close_left();
	if (d->state == DEVICE_RUNNING)
		check_end(d);
	if (d->state == DEVICE_RUNNING)
		check_hang(d, now);
	if (d->state == DEVICE_RUNNING)
		check_silence(d, now);
	if (d->state == DEVICE_RUNNING)
		say_gaps(d, now);
	if (d->state == DEVICE_MISSING)
		find_again(d);
}

void device_destroy(struct device *d)
{
	if (d->session) {
		/* Only after a failed start of the run: ask the thread to end, and leave it if it does not. */
		atomic_store(d->stop, true);
		while (d->state == DEVICE_RUNNING)
			device_watch(d);
	}
	if (d->intake)
		d->config->driver->close(d->intake);
	pthread_mutex_destroy(&d->mutex);
}
