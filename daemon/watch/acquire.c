/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <time.h>
#include "acquire.h"

bool acquire_stamp(struct acquire *a, struct stamp *out)
{
	unsigned read = atomic_load_explicit(&a->stamps_read, memory_order_relaxed);

	if (read == atomic_load_explicit(&a->stamps_written, memory_order_acquire))
		return false;
	*out = a->stamp[read % STAMPS];
	atomic_store_explicit(&a->stamps_read, read + 1, memory_order_release);
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

/* A replay loses nothing: it waits for the slowest reader.  Never called for a live device. */
static void wait_for_room(struct acquire *a, size_t count)
{
	const struct timespec moment = { .tv_nsec = 200000 };

	while (ring_room(a->ring) < count && !atomic_load(a->stop))
		nanosleep(&moment, NULL);
}

static void pass_block(struct acquire *a, const struct block *block, uint64_t *expected)
{
	if (block->first > *expected)
		atomic_fetch_add_explicit(&a->lost, block->first - *expected, memory_order_relaxed);
	*expected = block->first + block->count;
	if (a->intake->real_time) {
		ring_write(a->ring, block->frames, block->count, block->first);
		return;
	}
	/* A block may be larger than the room: in portions. */
	size_t most = ring_capacity(a->ring) / 4, size = frame_bytes(a->intake->format);

	for (size_t done = 0; done < block->count; ) {
		size_t count = block->count - done < most ? block->count - done : most;

		wait_for_room(a, count);
		ring_write(a->ring, (const char *)block->frames + done * size, count, block->first + done);
		done += count;
	}
}

void *acquire_run(void *argument)
{
	struct acquire *a = argument;
	uint64_t expected = 0;
	int64_t stamped = INT64_MIN;
	struct block block;
	int ret = 0;

	while (!atomic_load(a->stop)) {
		ret = a->intake->driver->read(a->intake, &block, 100);
		if (ret < 0)
			break;
		if (ret == 0)
			continue;
		if (block.host_ns != INT64_MIN &&
		    (stamped == INT64_MIN || block.host_ns - stamped >= 1000000000 || block.flags & BLOCK_GAP)) {
			put_stamp(a, &block);
			stamped = block.host_ns;
		}
		pass_block(a, &block, &expected);
	}
	ring_end(a->ring);
	atomic_store(&a->result, ret < 0 ? ret : -ECANCELED);
	return NULL;
}
