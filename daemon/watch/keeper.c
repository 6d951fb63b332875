/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <fcntl.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>
#include "acquire.h"
#include "health.h"
#include "keeper.h"
#include "limbwatch/log.h"
#include "limbwatch/segment.h"
#include "limbwatch/host_clock.h"
#include "limbwatch/space.h"
#include "limbwatch/undated.h"

enum { RETRY_S = 2 };                   /* between tries of a disk that refuses */

struct work {
	struct keeper *keeper;
	struct plan *plan;              /* being carried out; NULL: none */
	unsigned version;               /* of its sidecar, as last written */
	size_t delivered;               /* contacts of it */
	bool refused;                   /* the disk took nothing of this plan since the last attempt */
	time_t again;                   /* then: when to try again, CLOCK_MONOTONIC seconds */
	size_t held;                    /* frames in the buffer that the disk did not take: live, they are tried again */
	struct ring_news held_news;
	size_t pieces;
	struct piece piece[32];
	size_t max;                     /* frames of buffer */
	void *buffer;
	uint64_t checked;               /* frame at the last look at the free space */
};

int keeper_open(struct keeper *keeper)
{
	keeper->delivery = NULL;
	atomic_init(&keeper->free_bytes, -1);
	keeper->last = &keeper->delivery;
	return -pthread_mutex_init(&keeper->mutex, NULL);
}

void keeper_close(struct keeper *keeper)
{
	struct delivery *delivery;

	while ((delivery = keeper_deliver(keeper)))
		free(delivery);
	pthread_mutex_destroy(&keeper->mutex);
}

struct delivery *keeper_deliver(struct keeper *keeper)
{
	struct delivery *delivery;

	pthread_mutex_lock(&keeper->mutex);
	delivery = keeper->delivery;
	if (delivery) {
		keeper->delivery = delivery->next;
		if (!keeper->delivery)
			keeper->last = &keeper->delivery;
	}
	pthread_mutex_unlock(&keeper->mutex);
	return delivery;
}

static void trouble(struct keeper *keeper, int error)
{
	int none = 0;

	atomic_compare_exchange_strong(&keeper->trouble, &none, error);
}

static bool taken(const struct keeper *keeper, const char *name, const char *ending)
{
	char path[4096];
	int fd;

	snprintf(path, sizeof(path), "%s/%s%s", keeper->config->keep.folder, name, ending);
	fd = keeper->disk->open(path, O_RDONLY | O_CLOEXEC, 0);
	if (fd < 0)
		return fd != -ENOENT;
	keeper->disk->close(fd);
	return true;
}

/* A base name that overwrites nothing: NAME, NAME_2, NAME_3 ... */
static void choose_name(const struct keeper *keeper, char name[SIDECAR_TEXT], const char *wanted)
{
	snprintf(name, SIDECAR_TEXT, "%s", wanted);
	for (int k = 2; k < 10000 && (taken(keeper, name, ".json") || taken(keeper, name, ".wav") ||
	                              taken(keeper, name, ".wav.part")); k++)
		snprintf(name, SIDECAR_TEXT, "%.110s_%d", wanted, k);
}

static int create_segment(struct work *w, struct piece *piece, uint64_t first)
{
	const struct keeper *keeper = w->keeper;
	const struct plan *plan = w->plan;
	double seconds = ((double)first - (double)plan->start_frame) / keeper->intake->rate;
	struct segment_header header = {
		.folder = keeper->config->keep.folder, .name = piece->name,
		.format = keeper->intake->format, .rate = keeper->intake->rate,
		.station = keeper->config->station.name, .description = plan->description,
		.start = tai_add(plan->start, seconds), .quality = plan->quality, .first = first,
		.part_bytes = keeper->config->keep.part_bytes,
	};

	return segment_create(&piece->segment, keeper->disk, &header);
}

static int make_space(struct keeper *keeper)
{
	const struct config *config = keeper->config;
	int ret = keeper->disk->make_folder(config->keep.folder, 0775);

	if (ret == 0)
		ret = space_make(keeper->disk, config->keep.folder, config->keep.free_bytes, config->keep.remove_contacts);

	atomic_store(&keeper->free_bytes, keeper->disk->free_bytes(config->keep.folder));
	return ret;
}

/* Begins a piece at frame `first`; when the disk is full, after removing what may be removed. */
static int begin_piece(struct work *w, uint64_t first)
{
	struct piece *piece = &w->piece[w->pieces];
	int ret;

	if (w->pieces == sizeof(w->piece) / sizeof(*w->piece))
		return -EMFILE;
	*piece = (struct piece){ .first = first, .end = first };
	choose_name(w->keeper, piece->name, w->plan->name);
	ret = make_space(w->keeper);
	if (ret == 0)
		ret = create_segment(w, piece, first);
	if (ret < 0)
		return ret;
	w->pieces++;
	w->version = 0;                 /* its sidecar is due */
	atomic_store(&w->keeper->writing, true);
	log_detail("recording %s/%s.wav", w->keeper->config->keep.folder, piece->name);
	return 0;
}

static void describe_piece(struct piece *piece)
{
	if (piece->segment && segment_describe(piece->segment, &piece->described) < 0)
		log_error("out of memory while describing %s", piece->name);
}

/* Nothing of it got onto the disk, and it would only be in the way of the next try. */
static void abandon_piece(struct work *w, struct piece *piece)
{
	char path[4096];

	snprintf(path, sizeof(path), "%s/%s.json", w->keeper->config->keep.folder, piece->name);
	segment_abandon(piece->segment);
	w->keeper->disk->unlink(path);
	sidecar_clear(&piece->described);
	w->pieces--;
	atomic_store(&w->keeper->writing, false);
}

static void end_piece(struct work *w)
{
	struct piece *piece = w->pieces ? &w->piece[w->pieces - 1] : NULL;
	int ret;

	if (!piece || !piece->segment)
		return;
	if (segment_position(piece->segment) == piece->first) {
		abandon_piece(w, piece);
		return;
	}
	describe_piece(piece);
	piece->end = segment_position(piece->segment);
	ret = segment_close(piece->segment);
	piece->segment = NULL;
	atomic_store(&w->keeper->writing, false);
	if (ret < 0) {
		log_error("%s/%s.wav: cannot be closed: %s; the next start repairs it", w->keeper->config->keep.folder,
		          piece->name, strerror(-ret));
		trouble(w->keeper, ret);
		return;
	}
	atomic_fetch_add(&w->keeper->segments, 1);
}

static struct piece *open_piece(struct work *w)
{
	struct piece *piece = w->pieces ? &w->piece[w->pieces - 1] : NULL;

	return piece && piece->segment ? piece : NULL;
}

/* Moves the contacts, pulses and expectations that are not of [first, end) out of the sidecar. */
static void confine(struct sidecar *s, uint64_t first, uint64_t end)
{
	size_t n = 0;

	for (size_t k = 0; k < s->contacts; k++)
		if (s->contact[k].frame >= (double)first && s->contact[k].frame < (double)end)
			s->contact[n++] = s->contact[k];
	s->contacts = n;
	n = 0;
	for (size_t k = 0; k < s->pulses; k++)
		if (s->pulse[k].frame >= (double)first && s->pulse[k].frame < (double)end)
			s->pulse[n++] = s->pulse[k];
	s->pulses = n;
	n = 0;
	for (size_t k = 0; k < s->losses; k++)
		if (s->loss[k].before >= first && s->loss[k].after < end)
			s->loss[n++] = s->loss[k];
	s->losses = n;
}

static void *move_array(void **from, size_t *n, size_t *out)
{
	void *p = *from;

	*out = *n;
	*from = NULL;
	*n = 0;
	return p;
}

static void describe_health(const struct keeper *keeper, struct sidecar *s)
{
	struct latency_summary ring, trigger;
	long long free_bytes = atomic_load(&keeper->free_bytes);

	if (!keeper->intake->real_time)
		return;         /* a replay says nothing of the night */
	latency_read(keeper->to_ring, &ring);
	latency_read(keeper->to_trigger, &trigger);
	health_read(&s->health, "/sys");
	s->health.free_bytes = free_bytes < 0 ? NAN : (double)free_bytes;
	s->health.ring_p999_s = ring.p999_s;
	s->health.trigger_p999_s = trigger.p999_s;
	s->healthy = true;
}

static int write_piece_sidecar(struct work *w, struct piece *piece)
{
	char path[4096];
	struct sidecar s;
	int ret;

	ret = plans_copy_sidecar(w->keeper->plans, w->plan, &s);
	if (ret < 0)
		return ret;
	describe_piece(piece);
	if (w->pieces > 1)
		confine(&s, piece->first, piece->segment ? UINT64_MAX : piece->end);
	free(s.part);
	free(s.gap);
	s.part = move_array((void **)&piece->described.part, &piece->described.parts, &s.parts);
	s.gap = move_array((void **)&piece->described.gap, &piece->described.gaps, &s.gaps);
	s.first = piece->first;
	if (w->plan->host_ns != INT64_MIN)
		s.monotonic_ns = w->plan->host_ns +
			llround(((double)piece->first - (double)w->plan->start_frame) / w->keeper->intake->rate * 1e9);
	s.state = piece->segment ? SEGMENT_RECORDING : SEGMENT_CLOSED;
	describe_health(w->keeper, &s);
	snprintf(path, sizeof(path), "%s/%s.json", w->keeper->config->keep.folder, piece->name);
	ret = sidecar_write(&s, w->keeper->disk, path);
	/* Parts and gaps of a closed piece are still needed by a later writing. */
	piece->described.part = move_array((void **)&s.part, &s.parts, &piece->described.parts);
	piece->described.gap = move_array((void **)&s.gap, &s.gaps, &piece->described.gaps);
	sidecar_clear(&s);
	return ret;
}

static void write_sidecars(struct work *w, unsigned version)
{
	for (size_t k = 0; k < w->pieces; k++) {
		int ret = write_piece_sidecar(w, &w->piece[k]);

		if (ret < 0) {
			log_error("%s/%s.json: cannot be written: %s", w->keeper->config->keep.folder, w->piece[k].name,
			          strerror(-ret));
			trouble(w->keeper, ret);
		}
	}
	w->version = version;
}

/* The file that will hold frame `frame`, or an empty text. */
static void segment_path(const struct work *w, double frame, char *path, size_t size)
{
	*path = 0;
	for (size_t k = 0; k < w->pieces; k++) {
		const struct piece *piece = &w->piece[k];
		uint64_t end = piece->segment ? UINT64_MAX : piece->end;

		if (frame < (double)piece->first || frame >= (double)end)
			continue;
		for (size_t j = 0; j < piece->described.parts; j++)
			if (frame >= (double)piece->described.part[j].first)
				snprintf(path, size, "%s/%s", w->keeper->config->keep.folder,
				         piece->described.part[j].file);
	}
}

static void deliver(struct work *w)
{
	struct sidecar s;

	if (plans_copy_sidecar(w->keeper->plans, w->plan, &s) < 0)
		return;
	for (; w->delivered < s.contacts; w->delivered++) {
		struct delivery *delivery = calloc(1, sizeof(*delivery));

		if (!delivery)
			break;
		delivery->contact = s.contact[w->delivered];
		segment_path(w, delivery->contact.frame, delivery->segment, sizeof(delivery->segment));
		pthread_mutex_lock(&w->keeper->mutex);
		*w->keeper->last = delivery;
		w->keeper->last = &delivery->next;
		pthread_mutex_unlock(&w->keeper->mutex);
	}
	sidecar_clear(&s);
}

/* The disk failed: what is there is closed properly, and after a while a new piece is tried. */
static void disk_failed(struct work *w, int ret)
{
	const char *folder = w->keeper->config->keep.folder;
	struct timespec now;

	end_piece(w);
	clock_gettime(CLOCK_MONOTONIC, &now);
	if (ret == -ERANGE)             /* a gap too long for one file: simply a new piece */
		return;
	if (ret == -ENOENT) {
		log_error("%s: the recording was taken away while it was being written; a new one begins", folder);
		trouble(w->keeper, ret);
		return;
	}
	if (!w->refused)
		log_error("%s: %s: RECORDING STOPPED; watching goes on, the disk is tried again every %d s%s", folder,
		          strerror(-ret), RETRY_S, w->keeper->intake->real_time ? ", and memory keeps what comes meanwhile" : "");
	trouble(w->keeper, ret);
	w->refused = true;
	atomic_store(&w->keeper->refusing, ret);
	w->again = now.tv_sec + RETRY_S;
}

static bool disk_ready(struct work *w)
{
	struct timespec now;

	if (!w->refused)
		return true;
	clock_gettime(CLOCK_MONOTONIC, &now);
	return now.tv_sec >= w->again;
}

/* Now and then: there must be room, and the file must still be where it was made (a folder can be removed or renamed). */
static int keep_space(struct work *w, uint64_t first)
{
	int ret;

	if ((double)(first - w->checked) < 10 * w->keeper->intake->rate)
		return 0;
	w->checked = first;
	ret = segment_look(open_piece(w)->segment);
	return ret < 0 ? ret : make_space(w->keeper);
}

/* @return whether the disk took them */
static bool write_frames(struct work *w, size_t count, const struct ring_news *news)
{
	int ret = 0;

	if (news->overrun) {
		atomic_fetch_add(&w->keeper->lost, news->overrun);
		log_error("%s: the disk was too slow: %llu frames lost", w->keeper->config->keep.folder,
		          (unsigned long long)news->overrun);
	}
	for (int attempt = 0; attempt < 2; attempt++) {
		if (!open_piece(w)) {
			if (!disk_ready(w))
				return false;
			ret = begin_piece(w, news->first);
		}
		if (ret == 0)
			ret = keep_space(w, news->first);
		if (ret == 0)
			ret = segment_write(open_piece(w)->segment, w->buffer, count, news->first,
			                    gap_sigma_frames(w->keeper->intake->rate, news->lost));
		if (ret == 0) {
			if (w->refused)
				log_notice("%s: recording again", w->keeper->config->keep.folder);
			w->refused = false;
			atomic_store(&w->keeper->refusing, 0);
			return true;
		}
		disk_failed(w, ret);
		if (ret != -ERANGE && ret != -ENOENT)
			return false;
		ret = 0;
	}
	return false;
}

/*
 * While the disk refuses, what a live device delivers waits in the ring, which is as long as a stall may be.  A replay waits for nobody.
 *
 * @return false: still refused
 */
static bool write_held(struct work *w, bool ended)
{
	if (!ended && !disk_ready(w))
		return false;
	if (write_frames(w, w->held, &w->held_news)) {
		w->held = 0;
		return true;
	}
	if (ended) {
		atomic_fetch_add(&w->keeper->lost, w->held);
		w->held = 0;
		return true;
	}
	w->held_news.overrun = 0;       /* has been said */
	return false;
}

static void finish_plan(struct work *w, unsigned version)
{
	end_piece(w);
	write_sidecars(w, version);
	deliver(w);
	if (w->plan->sidecar.start.quality == TIME_FREE && w->keeper->intake->real_time && w->pieces) {
		plans_put_aside(w->keeper->plans, w->piece, w->pieces);
	} else {
		for (size_t k = 0; k < w->pieces; k++)
			sidecar_clear(&w->piece[k].described);
		plans_drop(w->keeper->plans);
	}
	w->plan = NULL;
	w->pieces = 0;
	w->delivered = 0;
	w->version = 0;
}

static void say_dated(const struct keeper *keeper, const char *name, const struct sidecar *s)
{
	char text[TAI_TEXT];

	log_notice("%s/%s, recorded before the time was known, began at %s \xc2\xb1 %.3g s (time: %s)",
	           keeper->config->keep.folder, name, tai_format_utc(text, s->start.when, 3), s->start.sigma_s,
	           time_quality_name(s->start.quality));
	for (size_t k = 0; k < s->contacts; k++)
		log_notice("  its %s: %s \xc2\xb1 %.3g s", contact_kind_name(s->contact[k].kind),
		           tai_format_utc(text, s->contact[k].when, 6), s->contact[k].sigma_s);
}

/* A plan that was put aside has its date: its sidecars and file headers are written again. */
static void amend(struct work *w)
{
	struct plan *plan = w->plan;

	w->pieces = plan->pieces;
	memcpy(w->piece, plan->piece, plan->pieces * sizeof(*plan->piece));
	write_sidecars(w, plan->version);
	for (size_t k = 0; k < w->pieces; k++) {
		struct sidecar s = plan->sidecar;       /* arrays stay the plan's */

		s.first = w->piece[k].first;
		s.start.when = tai_add(s.start.when, ((double)s.first - (double)plan->from) / s.true_rate);
		s.parts = w->piece[k].described.parts;
		s.part = w->piece[k].described.part;
		undated_mark_files(&s, w->keeper->disk, w->keeper->config->keep.folder);
		say_dated(w->keeper, w->piece[k].name, &s);
	}
	memcpy(plan->piece, w->piece, plan->pieces * sizeof(*plan->piece));
	plans_drop(w->keeper->plans);
	w->plan = NULL;
	w->pieces = 0;
	w->version = 0;
}

static void date_earlier_runs(const struct keeper *keeper)
{
	char boot[HOST_CLOCK_BOOT];

	if (plans_ask_host_known(keeper->plans) && host_clock_boot(boot) == 0)
		undated_date(keeper->disk, keeper->config->keep.folder, boot, keeper->plans->begun_ns,
		             keeper->config->clock.host_sigma_s);
}

static void idle(const struct keeper *keeper)
{
	nanosleep(&(struct timespec){ .tv_nsec = keeper->idle_ns }, NULL);
}

/* The disk did not take these. */
static void hold(struct work *w, const struct plan_view *view, size_t count, const struct ring_news *news)
{
	if (!w->keeper->intake->real_time || view->ended) {
		atomic_fetch_add(&w->keeper->lost, count);
		return;
	}
	w->held = count;
	w->held_news = *news;
	w->held_news.overrun = 0;       /* has been said */
}

/* Takes one step of the plan. @return false: nothing to do now */
static bool carry_out(struct work *w, const struct plan_view *view)
{
	struct ring_reader *reader = w->keeper->reader;
	uint64_t position = ring_reader_position(reader);
	struct ring_news news = { 0 };
	bool written = false;

	if (w->held && !write_held(w, view->ended))
		return false;
	if (position < view->from) {
		ring_skip_to(reader, view->decided < view->from ? view->decided : view->from);
		if (ring_reader_position(reader) < view->from)
			return false;   /* an earlier plan may still come */
		position = ring_reader_position(reader);
	}
	if (position < view->to) {
		size_t want = view->to - position < w->max ? view->to - position : w->max;
		size_t count = ring_read(reader, w->buffer, want, &news);

		written = count > 0;
		if (count && !write_frames(w, count, &news))
			hold(w, view, count, &news);
	}
	if (w->version != view->version && view->version && open_piece(w)) {
		write_sidecars(w, view->version);
		deliver(w);
	}
	if (view->final && !written && (position >= view->to || news.ended)) {
		finish_plan(w, view->version);
		return true;
	}
	return written;
}

void *keeper_run(void *argument)
{
	struct keeper *keeper = argument;
	size_t bytes = frame_bytes(keeper->intake->format);
	struct work w = { .keeper = keeper, .max = 4096 };

	w.buffer = malloc(w.max * bytes);
	if (!w.buffer) {
		trouble(keeper, -ENOMEM);
		return NULL;
	}
	for (;;) {
		struct plan_view view;

		date_earlier_runs(keeper);
		plans_view(keeper->plans, &view);
		if (!view.plan) {
			ring_skip_to(keeper->reader, view.decided);
			if (view.ended)
				break;
			idle(keeper);
			continue;
		}
		w.plan = view.plan;
		if (view.amended)
			amend(&w);
		else if (!carry_out(&w, &view))
			idle(keeper);
	}
	free(w.buffer);
	return NULL;
}
