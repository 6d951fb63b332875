/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * Frames stand in the ring at positions 0, 1, 2 ... (modulo the capacity) without the intake's gaps; the gap table says
 * how many frames had been lost in all from a position on.  The copy that a reader makes may race with the producer: it is
 * made of atomic words and judged afterwards by `reserved` (a seqlock).  Words are stored with release and loaded with
 * acquire order instead of fences: whoever sees a new word sees it reserved, and ThreadSanitizer can follow.
 */
#include <errno.h>
#include <stdatomic.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>
#include "limbwatch/ring.h"

enum { GAPS = 4096, READERS = 4 };
typedef uint64_t word;

struct gap {
	_Atomic uint64_t position;      /* first frame after the gap */
	_Atomic uint64_t lost;          /* frames lost from the start to here, this gap included */
};

struct ring {
	size_t frame_bytes, capacity;   /* capacity: frames, a power of two */
	size_t bytes;                   /* capacity * frame_bytes, a multiple of the word */
	_Atomic word *data;
	_Atomic uint64_t reserved, written;     /* positions */
	_Atomic uint64_t gaps;          /* entered so far */
	_Atomic bool ended;
	struct gap gap[GAPS];
	uint64_t expected;              /* producer: number of the next frame without a gap */
	struct ring_reader *reader[READERS];
};

struct ring_reader {
	struct ring *ring;
	_Atomic uint64_t position;      /* of the next frame, read by ring_room() */
	uint64_t lost;                  /* intake's lost frames before `position` */
	uint64_t gap;                   /* next entry of the gap table to look at */
	uint64_t expected;              /* number of the next frame if nothing is lost */
	uint64_t overrun;               /* since the last frames given */
};

size_t ring_round(size_t frames)
{
	size_t capacity = 4096;

	while (capacity < frames)
		capacity *= 2;
	return capacity;
}

int ring_create(struct ring **out, size_t frame_bytes, size_t frames)
{
	struct ring *ring;
	size_t capacity;

	if (frame_bytes == 0 || frames > SIZE_MAX / 4 / frame_bytes)
		return -EINVAL;
	capacity = ring_round(frames);
	ring = calloc(1, sizeof(*ring));
	if (!ring)
		return -ENOMEM;
	ring->frame_bytes = frame_bytes;
	ring->capacity = capacity;
	ring->bytes = capacity * frame_bytes;   /* capacity is a multiple of the word */
	ring->data = mmap(NULL, ring->bytes, PROT_READ | PROT_WRITE, MAP_PRIVATE | MAP_ANONYMOUS | MAP_POPULATE, -1, 0);
	if (ring->data == MAP_FAILED) {
		free(ring);
		return -ENOMEM;
	}
	*out = ring;
	return 0;
}

void ring_destroy(struct ring *ring)
{
	if (!ring)
		return;
	munmap((void *)ring->data, ring->bytes);
	free(ring);
}

size_t ring_capacity(const struct ring *ring)
{
	return ring->capacity;
}

/* ------------------------------------------------------------------ copying in whole words */

static word load_word(const struct ring *ring, size_t k)
{
	return atomic_load_explicit(&ring->data[k], memory_order_acquire);
}

static void store_word(struct ring *ring, size_t k, word w)
{
	atomic_store_explicit(&ring->data[k], w, memory_order_release);
}

/* Bytes of word k from `skip` on, `n` of them: the ends of a stretch. */
static void part_out(const struct ring *ring, unsigned char *to, size_t k, size_t skip, size_t n)
{
	word w = load_word(ring, k);

	memcpy(to, (unsigned char *)&w + skip, n);
}

static void part_in(struct ring *ring, const unsigned char *from, size_t k, size_t skip, size_t n)
{
	word w = load_word(ring, k);

	memcpy((unsigned char *)&w + skip, from, n);
	store_word(ring, k, w);
}

/* Bytes up to the next whole word, of `n` from `offset` on. */
static size_t until_word(size_t offset, size_t n)
{
	size_t head = -offset % sizeof(word);

	return head < n ? head : n;
}

/* Bytes [offset, offset + n) of the ring's memory, which do not wrap. */
static void copy_out(const struct ring *ring, unsigned char *to, size_t offset, size_t n)
{
	size_t k = offset / sizeof(word), head = until_word(offset, n);

	if (head) {
		part_out(ring, to, k++, offset % sizeof(word), head);
		to += head;
		n -= head;
	}
	for (; n >= sizeof(word); n -= sizeof(word), to += sizeof(word)) {
		word w = load_word(ring, k++);

		memcpy(to, &w, sizeof(word));
	}
	if (n)
		part_out(ring, to, k, 0, n);
}

static void copy_in(struct ring *ring, const unsigned char *from, size_t offset, size_t n)
{
	size_t k = offset / sizeof(word), head = until_word(offset, n);

	if (head) {
		part_in(ring, from, k++, offset % sizeof(word), head);
		from += head;
		n -= head;
	}
	for (; n >= sizeof(word); n -= sizeof(word), from += sizeof(word)) {
		word w;

		memcpy(&w, from, sizeof(word));
		store_word(ring, k++, w);
	}
	if (n)
		part_in(ring, from, k, 0, n);
}

/* Where a stretch of `count` frames from `position` wraps: frames up to the end of the memory. */
static size_t first_span(const struct ring *ring, uint64_t position, size_t count)
{
	size_t until_end = ring->capacity - (position & (ring->capacity - 1));

	return count < until_end ? count : until_end;
}

static size_t byte_offset(const struct ring *ring, uint64_t position)
{
	return (position & (ring->capacity - 1)) * ring->frame_bytes;
}

/* ------------------------------------------------------------------ the producer */

static void enter_gap(struct ring *ring, uint64_t position, uint64_t lost)
{
	uint64_t n = atomic_load_explicit(&ring->gaps, memory_order_relaxed);
	uint64_t before = n ? atomic_load_explicit(&ring->gap[(n - 1) % GAPS].lost, memory_order_relaxed) : 0;

	atomic_store_explicit(&ring->gap[n % GAPS].position, position, memory_order_release);
	atomic_store_explicit(&ring->gap[n % GAPS].lost, before + lost, memory_order_release);
	atomic_store_explicit(&ring->gaps, n + 1, memory_order_release);
}

/* Gap n, which has been entered. @return false: the table has gone round meanwhile (whoever sees a new entry sees the count before it) */
static bool look_up_gap(const struct ring *ring, uint64_t n, uint64_t *position, uint64_t *lost)
{
	*position = atomic_load_explicit(&ring->gap[n % GAPS].position, memory_order_acquire);
	*lost = atomic_load_explicit(&ring->gap[n % GAPS].lost, memory_order_acquire);
	return atomic_load_explicit(&ring->gaps, memory_order_relaxed) - n < GAPS;
}

static void write_span(struct ring *ring, const unsigned char *frames, size_t count)
{
	uint64_t position = atomic_load_explicit(&ring->written, memory_order_relaxed);
	size_t span = first_span(ring, position, count);

	atomic_store_explicit(&ring->reserved, position + count, memory_order_relaxed);
	copy_in(ring, frames, byte_offset(ring, position), span * ring->frame_bytes);
	copy_in(ring, frames + span * ring->frame_bytes, 0, (count - span) * ring->frame_bytes);
	atomic_store_explicit(&ring->written, position + count, memory_order_release);
}

void ring_write(struct ring *ring, const void *frames, size_t count, uint64_t first)
{
	const unsigned char *from = frames;
	size_t most = ring->capacity / 4;       /* at once, so that a reader is never further behind than it can tell */

	if (first > ring->expected) {
		enter_gap(ring, atomic_load_explicit(&ring->written, memory_order_relaxed), first - ring->expected);
		ring->expected = first;
	}
	ring->expected += count;                /* numbers never go back, whatever the intake says */
	while (count) {
		size_t n = count < most ? count : most;

		write_span(ring, from, n);
		from += n * ring->frame_bytes;
		count -= n;
	}
}

void ring_end(struct ring *ring)
{
	atomic_store_explicit(&ring->ended, true, memory_order_release);
}

size_t ring_room(const struct ring *ring)
{
	uint64_t written = atomic_load_explicit(&ring->written, memory_order_acquire), behind = 0;

	for (size_t k = 0; k < READERS; k++) {
		uint64_t position;

		if (!ring->reader[k])
			continue;
		position = atomic_load_explicit(&ring->reader[k]->position, memory_order_acquire);
		if (written > position && written - position > behind)
			behind = written - position;
	}
	return behind >= ring->capacity ? 0 : ring->capacity - (size_t)behind;
}

uint64_t ring_head(const struct ring *ring)
{
	uint64_t written = atomic_load_explicit(&ring->written, memory_order_acquire);
	uint64_t newest = atomic_load_explicit(&ring->gaps, memory_order_acquire), position, lost;

	for (uint64_t n = newest; n > 0; n--) {
		if (!look_up_gap(ring, n - 1, &position, &lost))
			return ring_head(ring); /* the table has gone round: look again */
		if (position < written)
			return written + lost;
		/* else entered, but its frames were not there yet */
	}
	return written;
}

/* ------------------------------------------------------------------ readers */

int ring_reader_open(struct ring_reader **out, struct ring *ring)
{
	struct ring_reader *reader;

	for (size_t k = 0; k < READERS; k++) {
		if (ring->reader[k])
			continue;
		reader = calloc(1, sizeof(*reader));
		if (!reader)
			return -ENOMEM;
		reader->ring = ring;
		ring->reader[k] = reader;
		*out = reader;
		return 0;
	}
	return -EMFILE;
}

void ring_reader_close(struct ring_reader *reader)
{
	if (!reader)
		return;
	for (size_t k = 0; k < READERS; k++)
		if (reader->ring->reader[k] == reader)
			reader->ring->reader[k] = NULL;
	free(reader);
}

static void set_position(struct ring_reader *reader, uint64_t position)
{
	atomic_store_explicit(&reader->position, position, memory_order_release);
}

/* Too many gaps are outstanding, entries may soon be overwritten: gives up the frames before the newer half of them. */
static void give_up_gaps(struct ring_reader *reader, uint64_t n)
{
	uint64_t position = atomic_load_explicit(&reader->position, memory_order_relaxed), at, lost;

	if (!look_up_gap(reader->ring, n - GAPS / 2, &at, &lost))
		return;                         /* still more have come: the caller tries again */
	reader->gap = n - GAPS / 2;
	if (at <= position)
		return;
	reader->overrun += at - position;
	set_position(reader, at);
}

/* Position of the next gap after the reader's position, or UINT64_MAX; takes gaps at or before it into reader->lost. */
static uint64_t next_gap(struct ring_reader *reader)
{
	const struct ring *ring = reader->ring;

	for (;;) {
		uint64_t n = atomic_load_explicit(&ring->gaps, memory_order_acquire), at, lost;

		if (n - reader->gap > GAPS / 2)
			give_up_gaps(reader, n);
		while (reader->gap < n && look_up_gap(ring, reader->gap, &at, &lost)) {
			if (at > atomic_load_explicit(&reader->position, memory_order_relaxed))
				return at;
			reader->lost = lost;
			reader->gap++;
		}
		if (reader->gap == n)
			return UINT64_MAX;
	}
}

/* A reader that was overtaken goes on in the middle of what is still there. */
static void catch_up(struct ring_reader *reader)
{
	const struct ring *ring = reader->ring;
	uint64_t position = atomic_load_explicit(&reader->position, memory_order_relaxed);
	uint64_t reserved = atomic_load_explicit(&ring->reserved, memory_order_relaxed);
	uint64_t to = reserved - ring->capacity / 2;

	reader->overrun += to - position;
	set_position(reader, to);
}

static bool overtaken(const struct ring_reader *reader)
{
	uint64_t position = atomic_load_explicit(&reader->position, memory_order_relaxed);

	return atomic_load_explicit(&reader->ring->reserved, memory_order_relaxed) > position + reader->ring->capacity;
}

size_t ring_read(struct ring_reader *reader, void *frames, size_t max, struct ring_news *news)
{
	const struct ring *ring = reader->ring;
	bool ended = atomic_load_explicit(&ring->ended, memory_order_acquire);  /* before `written`: nothing comes after */
	uint64_t written = atomic_load_explicit(&ring->written, memory_order_acquire), position, gap;
	size_t count, span;

	*news = (struct ring_news){ 0 };
	if (overtaken(reader))
		catch_up(reader);
	for (;;) {
		gap = next_gap(reader);         /* may move the position */
		position = atomic_load_explicit(&reader->position, memory_order_relaxed);
		if (position >= written) {
			news->ended = ended;
			return 0;
		}
		count = written - position < max ? (size_t)(written - position) : max;
		if (gap - position < count)
			count = (size_t)(gap - position);
		span = first_span(ring, position, count);
		copy_out(ring, frames, byte_offset(ring, position), span * ring->frame_bytes);
		copy_out(ring, (unsigned char *)frames + span * ring->frame_bytes, 0, (count - span) * ring->frame_bytes);
		if (!overtaken(reader))
			break;
		catch_up(reader);
	}
	set_position(reader, position + count);
	news->first = position + reader->lost;
	news->lost = news->first - reader->expected;
	news->overrun = reader->overrun < news->lost ? reader->overrun : news->lost;    /* ring_skip_to passed over some */
	reader->overrun = 0;
	reader->expected = news->first + count;
	return count;
}

uint64_t ring_reader_position(const struct ring_reader *reader)
{
	struct ring_reader copy = { .ring = reader->ring, .lost = reader->lost, .gap = reader->gap };

	atomic_init(&copy.position, atomic_load_explicit(&reader->position, memory_order_relaxed));
	next_gap(&copy);
	return atomic_load_explicit(&copy.position, memory_order_relaxed) + copy.lost;
}

void ring_skip_to(struct ring_reader *reader, uint64_t frame)
{
	uint64_t written = atomic_load_explicit(&reader->ring->written, memory_order_acquire);

	for (;;) {
		uint64_t gap = next_gap(reader), end = gap < written ? gap : written;   /* may move the position */
		uint64_t position = atomic_load_explicit(&reader->position, memory_order_relaxed);
		uint64_t number = position + reader->lost;

		if (position >= written || number >= frame)
			break;
		if (frame - number < end - position)
			end = position + (frame - number);
		set_position(reader, end);
		reader->expected = end + reader->lost;
	}
}
