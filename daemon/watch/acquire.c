/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <math.h>
#include <sched.h>
#include <string.h>
#include <time.h>
#include "acquire.h"

/* Who may write to the ring: the session's thread only while it holds the grip. */
enum grip { GRIP_FREE, GRIP_HELD, GRIP_ABANDONED };

void acquire_create(struct acquire *a, struct ring *ring, double rate, atomic_bool *stop)
{
	memset(a, 0, sizeof(*a));
	a->ring = ring;
	a->rate = rate;
	a->stop = stop;
	a->stamped = INT64_MIN;
	atomic_init(&a->origin_ns, INT64_MIN);
	stamp_line_create(&a->line, rate);
}

double gap_sigma_frames(double rate, uint64_t lost)
{
	return hypot(1e-3 * rate, 30e-6 * (double)lost);        /* see stamp_line.c */
}

bool acquire_stamp(struct acquire *a, struct stamp *out)
{
	unsigned read = atomic_load_explicit(&a->stamps_read, memory_order_relaxed);

	if (read == atomic_load_explicit(&a->stamps_written, memory_order_acquire))
		return false;
	*out = a->stamp[read % STAMPS];
	atomic_store_explicit(&a->stamps_read, read + 1, memory_order_release);
	return true;
}

bool acquire_frame_time(const struct acquire *a, uint64_t frame, int64_t *host_ns)
{
	int64_t origin = atomic_load_explicit(&a->origin_ns, memory_order_relaxed);

	if (origin == INT64_MIN)
		return false;
	*host_ns = origin + (int64_t)((double)frame / a->rate * 1e9);
	return true;
}

/* A full queue drops the stamp: more will come. */
static void put_stamp(struct acquire *a, const struct block *block)
{
	unsigned written = atomic_load_explicit(&a->stamps_written, memory_order_relaxed);

	if (written - atomic_load_explicit(&a->stamps_read, memory_order_acquire) == STAMPS)
		return;
	a->stamp[written % STAMPS] = (struct stamp){
		.frame = block->first, .host_ns = block->host_ns, .late = block->flags & BLOCK_STAMP_LATE,
	};
	atomic_store_explicit(&a->stamps_written, written + 1, memory_order_release);
}

/* A replay loses nothing: it waits for the slowest reader.  Never called for a live device.  @return false: stopped */
static bool wait_for_room(struct acquire *a, size_t count)
{
	const struct timespec moment = { .tv_nsec = 200000 };

	while (ring_room(a->ring) < count) {
		if (atomic_load(a->stop))
			return false;
		nanosleep(&moment, NULL);
	}
	return true;
}

static void pass_replay(struct acquire *a, const struct intake *intake, const struct block *block)
{
	/* A block may be larger than the room: in portions. */
	size_t most = ring_capacity(a->ring) / 4, size = frame_bytes(intake->format);

	for (size_t done = 0; done < block->count; ) {
		size_t count = block->count - done < most ? block->count - done : most;

		if (!wait_for_room(a, count))
			return;         /* written all the same, it would push out what is still to be read */
		ring_write(a->ring, (const char *)block->frames + done * size, count, block->first + done);
		done += count;
	}
}

static void pass_live(struct acquire *a, const struct block *block)
{
	int64_t span = (int64_t)((double)block->count / a->rate * 1e9);

	ring_write(a->ring, block->frames, block->count, block->first);
	if (block->host_ns == INT64_MIN)
		return;
	atomic_store_explicit(&a->origin_ns, block->host_ns - (int64_t)((double)block->first / a->rate * 1e9),
	                      memory_order_relaxed);
	if (!(block->flags & BLOCK_STAMP_LATE))
		latency_add(&a->latency, host_now() - block->host_ns - span);
}

/*
 * Counts frames from the start of the run, across the gap since an earlier session: its length by the host's clock, which
 * has to count a sleep of the computer, too.
 */
static void renumber(struct acquire *a, struct block *block, uint64_t *base, bool first)
{
	int64_t ns = block->host_ns;

	if (ns == INT64_MIN)
		ns = host_now() - (int64_t)((double)block->count / a->rate * 1e9);
	ns += host_slept(NULL);
	if (first && a->next) {
		*base = a->next + stamp_line_gap(&a->line, a->next, ns) - block->first;
		block->flags |= BLOCK_GAP;
	} else {
		stamp_line_add(&a->line, *base + block->first, ns);
	}
	block->first += *base;
}

static void pass_block(struct acquire *a, const struct intake *intake, const struct block *block)
{
	if (block->host_ns != INT64_MIN &&
	    (a->stamped == INT64_MIN || block->host_ns - a->stamped >= 1000000000 || block->flags & BLOCK_GAP)) {
		put_stamp(a, block);
		a->stamped = block->host_ns;
	}
	if (block->first > a->next) {
		atomic_fetch_or_explicit(&a->why, BLOCK_GAP | (block->flags & ~(unsigned)BLOCK_STAMP_LATE), memory_order_relaxed);
		atomic_fetch_add_explicit(&a->lost, block->first - a->next, memory_order_release);
	}
	a->next = block->first + block->count;
	if (intake->real_time)
		pass_live(a, block);
	else
		pass_replay(a, intake, block);
	atomic_fetch_add_explicit(&a->frames, block->count, memory_order_relaxed);
}

static bool take_grip(struct session *s)
{
	int wanted = GRIP_FREE;

	return atomic_compare_exchange_strong(&s->grip, &wanted, GRIP_HELD);
}

void acquire_abandon(struct session *s)
{
	int wanted = GRIP_FREE;

	while (!atomic_compare_exchange_strong(&s->grip, &wanted, GRIP_ABANDONED)) {
		wanted = GRIP_FREE;
		sched_yield();          /* held for the microseconds of one block */
	}
}

/* A page fault in the loop would be a file access: the stack is there beforehand. */
static void touch_stack(void)
{
	volatile char page[65536];

	for (size_t k = 0; k < sizeof(page); k += 4096)
		page[k] = 0;
}

static int take_blocks(struct session *s)
{
	struct acquire *a = s->acquire;
	struct intake *intake = s->intake;
	uint64_t base = 0;
	bool first = true;
	struct block block;
	int ret = 0;

	while (!atomic_load(a->stop)) {
		ret = intake->driver->read(intake, &block, 100);
		if (!take_grip(s))
			return 0;
		atomic_fetch_add_explicit(&a->beats, 1, memory_order_relaxed);
		if (ret > 0) {
			if (intake->real_time)
				renumber(a, &block, &base, first);
			pass_block(a, intake, &block);
			first = false;
		}
		atomic_store(&s->grip, GRIP_FREE);
		if (ret < 0)
			return ret;
	}
	return -ECANCELED;
}

void *acquire_run(void *argument)
{
	struct session *s = argument;
	int ret;

	touch_stack();
	ret = take_blocks(s);           /* 0: abandoned */
	if (ret == -ENODATA || ret == -ECANCELED || (ret < 0 && !s->intake->driver->comes_back))
		ring_end(s->acquire->ring);
	atomic_store(&s->result, ret);
	atomic_store(&s->left, true);   /* an abandoned session is the main thread's from here on */
	return NULL;
}
