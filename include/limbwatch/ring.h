/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_RING_H
#define LIMBWATCH_RING_H

#include <stdbool.h>
#include <stddef.h>
#include <stdint.h>

/*
 * One producer, several readers, lock-free; whole frames in the intake's native format; memory mapped once.
 * The producer never waits: a reader that falls behind loses frames and is told how many.  In a replay the
 * producer asks ring_room() first, so that nothing is lost.  Gaps of the intake take no room: the ring
 * remembers where they were.  Frame numbers count frames lost.
 */
struct ring;
struct ring_reader;

/** Main thread.  `frames` is rounded up to a power of two, 4096 at least; memory is touched. Caller destroys. */
int  ring_create(struct ring **out, size_t frame_bytes, size_t frames);
void ring_destroy(struct ring *ring);           /* NULL is fine; after all readers are closed */
size_t ring_capacity(const struct ring *ring);  /* frames */
/** The capacity that ring_create() makes of a number of frames. */
size_t ring_round(size_t frames);

/** Producer.  Appends frames numbered first, first + 1 ...; first beyond the last number + 1 is a gap before them. No allocation, lock or system call. */
void ring_write(struct ring *ring, const void *frames, size_t count, uint64_t first);
/** Producer.  No more will come. */
void ring_end(struct ring *ring);
/** Frames that can be written before the slowest open reader would lose some. Any thread. */
size_t ring_room(const struct ring *ring);

/** Main thread, before the producer starts. Caller closes. Reads from the first frame on. */
int  ring_reader_open(struct ring_reader **out, struct ring *ring);
void ring_reader_close(struct ring_reader *reader);

struct ring_news {
	uint64_t first;                 /* number of the first frame copied */
	uint64_t lost;                  /* frames missing just before it: the intake's gap plus what this reader was too slow for */
	uint64_t overrun;               /* of these, by this reader's slowness */
	bool     ended;                 /* ring_end was called and everything has been read */
};

/**
 * The reader's thread.  Copies what is there, up to `max` frames, never across a gap.
 *
 * @return frames copied; 0: nothing new, or ended (see news->ended)
 */
size_t ring_read(struct ring_reader *reader, void *frames, size_t max, struct ring_news *news);

/** The reader's thread.  Passes over unread frames with numbers below `frame`, without copying. */
void ring_skip_to(struct ring_reader *reader, uint64_t frame);
/** Number of the next frame the reader would get (or the next after the last written). */
uint64_t ring_reader_position(const struct ring_reader *reader);
/** Number after the last frame written. Any thread. */
uint64_t ring_head(const struct ring *ring);

#endif
