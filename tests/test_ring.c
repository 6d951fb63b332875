/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <pthread.h>
#include <setjmp.h>
#include <signal.h>
#include <stdarg.h>
#include <stdatomic.h>
#include <stddef.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>
#include <cmocka.h>
#include <sched.h>
#include "limbwatch/ring.h"

/* Frames that know their own number: three bytes, so that words and frames never agree. */
enum { BYTES = 3 };

static void number_frames(unsigned char *to, uint64_t first, size_t count)
{
	for (size_t k = 0; k < count; k++)
		for (int b = 0; b < BYTES; b++)
			to[BYTES * k + b] = (unsigned char)((first + k) >> 8 * b);
}

static uint64_t frame_number(const unsigned char *frame)
{
	return frame[0] | (uint64_t)frame[1] << 8 | (uint64_t)frame[2] << 16;
}

static bool numbered(const unsigned char *frames, uint64_t first, size_t count)
{
	for (size_t k = 0; k < count; k++)
		if (frame_number(frames + BYTES * k) != ((first + k) & 0xffffff))
			return false;
	return true;
}

static void put(struct ring *ring, uint64_t first, size_t count)
{
	unsigned char *frames = malloc(BYTES * count);

	number_frames(frames, first, count);
	ring_write(ring, frames, count, first);
	free(frames);
}

static void frames_come_back_in_order_across_the_end_of_the_memory(void **state)
{
	struct ring *ring;
	struct ring_reader *reader;
	struct ring_news news;
	static unsigned char frames[BYTES * 5000];
	uint64_t next = 0;

	(void)state;
	assert_int_equal(ring_create(&ring, BYTES, 5000), 0);
	assert_int_equal(ring_capacity(ring), 8192);
	assert_int_equal(ring_reader_open(&reader, ring), 0);
	for (int round = 0; round < 50; round++) {
		put(ring, next, 1777);
		assert_int_equal(ring_room(ring), 8192 - 1777);
		assert_int_equal(ring_read(reader, frames, 5000, &news), 1777);
		assert_true(news.first == next && news.lost == 0 && !news.ended);
		assert_true(numbered(frames, next, 1777));
		next += 1777;
	}
	assert_int_equal(ring_read(reader, frames, 5000, &news), 0);
	assert_false(news.ended);
	ring_end(ring);
	assert_int_equal(ring_read(reader, frames, 5000, &news), 0);
	assert_true(news.ended);
	ring_reader_close(reader);
	ring_destroy(ring);
}

static void gaps_take_no_room_and_are_told_to_every_reader(void **state)
{
	struct ring *ring;
	struct ring_reader *a, *b;
	struct ring_news news;
	unsigned char frames[BYTES * 1000];

	(void)state;
	assert_int_equal(ring_create(&ring, BYTES, 4096), 0);
	assert_int_equal(ring_reader_open(&a, ring), 0);
	assert_int_equal(ring_reader_open(&b, ring), 0);
	put(ring, 0, 100);
	put(ring, 1000000, 50);         /* an hour away */
	put(ring, 1000060, 10);
	assert_int_equal(ring_head(ring), 1000070);
	assert_int_equal(ring_read(a, frames, 1000, &news), 100);
	assert_true(news.first == 0 && news.lost == 0);
	assert_int_equal(ring_reader_position(a), 1000000);
	assert_int_equal(ring_read(a, frames, 1000, &news), 50);
	assert_true(news.first == 1000000 && news.lost == 999900 && news.overrun == 0 && numbered(frames, 1000000, 50));
	assert_int_equal(ring_read(a, frames, 1000, &news), 10);
	assert_true(news.first == 1000060 && news.lost == 10);
	ring_skip_to(b, 1000020);
	assert_int_equal(ring_reader_position(b), 1000020);
	assert_int_equal(ring_read(b, frames, 1000, &news), 30);
	assert_true(news.first == 1000020 && news.lost == 0 && numbered(frames, 1000020, 30));
	ring_skip_to(b, 2000000);
	assert_int_equal(ring_reader_position(b), 1000070);
	ring_reader_close(a);
	ring_reader_close(b);
	ring_destroy(ring);
}

static void a_slow_reader_is_told_what_it_lost(void **state)
{
	struct ring *ring;
	struct ring_reader *reader;
	struct ring_news news;
	static unsigned char frames[BYTES * 4096];
	uint64_t next = 0, seen = 0, lost = 0;

	(void)state;
	assert_int_equal(ring_create(&ring, BYTES, 4096), 0);
	assert_int_equal(ring_reader_open(&reader, ring), 0);
	for (int round = 0; round < 10; round++, next += 1000)
		put(ring, next, 1000);
	ring_end(ring);
	for (;;) {
		size_t n = ring_read(reader, frames, 4096, &news);

		if (!n)
			break;
		assert_true(numbered(frames, news.first, n));
		assert_int_equal(news.lost, news.overrun);
		seen += n;
		lost += news.lost;
	}
	assert_int_equal(seen + lost, 10000);
	assert_true(seen >= 2048 && seen <= 4096);
	ring_reader_close(reader);
	ring_destroy(ring);
}

static void more_gaps_than_the_table_holds_are_an_overrun_not_a_lie(void **state)
{
	struct ring *ring;
	struct ring_reader *reader;
	struct ring_news news;
	unsigned char frames[BYTES * 16];
	uint64_t next = 0, seen = 0, lost = 0, last = 0;
	size_t n;

	(void)state;
	assert_int_equal(ring_create(&ring, BYTES, 65536), 0);
	assert_int_equal(ring_reader_open(&reader, ring), 0);
	for (int gap = 0; gap < 6000; gap++, next += 7)
		put(ring, next, 4);     /* four of every seven frames arrive */
	ring_end(ring);
	while ((n = ring_read(reader, frames, 16, &news))) {
		assert_true(numbered(frames, news.first, n));
		assert_true(news.first == last + news.lost);
		last = news.first + n;
		seen += n;
		lost += news.lost;
	}
	assert_int_equal(seen + lost, 6000 * 7 - 3);
	ring_reader_close(reader);
	ring_destroy(ring);
}

static void the_head_counts_a_gap_once_frames_follow_it(void **state)
{
	struct ring *ring;

	(void)state;
	assert_int_equal(ring_create(&ring, BYTES, 4096), 0);
	assert_int_equal(ring_head(ring), 0);
	put(ring, 0, 100);
	ring_write(ring, NULL, 0, 500);
	assert_int_equal(ring_head(ring), 100);
	put(ring, 600, 10);
	assert_int_equal(ring_head(ring), 610);
	ring_destroy(ring);
}

/* A driver at fault: its frames are kept under the numbers that follow, and a later gap is as long as it says. */
static void numbers_never_go_back(void **state)
{
	struct ring *ring;
	struct ring_reader *reader;
	struct ring_news news;
	unsigned char frames[BYTES * 100];

	(void)state;
	assert_int_equal(ring_create(&ring, BYTES, 4096), 0);
	assert_int_equal(ring_reader_open(&reader, ring), 0);
	put(ring, 0, 50);
	put(ring, 10, 20);
	put(ring, 90, 5);
	assert_int_equal(ring_head(ring), 95);
	assert_int_equal(ring_read(reader, frames, 100, &news), 70);
	assert_true(news.first == 0 && news.lost == 0);
	assert_int_equal(ring_read(reader, frames, 100, &news), 5);
	assert_true(news.first == 90 && news.lost == 20 && news.overrun == 0);
	ring_reader_close(reader);
	ring_destroy(ring);
}

static void what_was_passed_over_is_no_overrun(void **state)
{
	struct ring *ring;
	struct ring_reader *reader;
	struct ring_news news;
	unsigned char frames[BYTES * 100];
	uint64_t next = 0;

	(void)state;
	assert_int_equal(ring_create(&ring, BYTES, 65536), 0);
	assert_int_equal(ring_reader_open(&reader, ring), 0);
	for (int gap = 0; gap < 6000; gap++, next += 7)
		put(ring, next, 4);
	ring_skip_to(reader, next - 7);
	assert_int_equal(ring_read(reader, frames, 100, &news), 4);
	assert_true(news.first == next - 7 && news.overrun <= news.lost && news.lost <= 3);
	assert_true(numbered(frames, next - 7, 4));
	ring_reader_close(reader);
	ring_destroy(ring);
}

/* ------------------------------------------------------------------ threads */

enum { STRESS_FRAMES = 3000000 };

struct stress {
	struct ring *ring;
	struct ring_reader *reader;
	bool polite;                    /* the producer waits for room, as in a replay */
	unsigned most;                  /* frames at once */
	unsigned gap_every;             /* blocks */
	uint64_t seen, lost;
	bool wrong;
};

static void *produce(void *argument)
{
	struct stress *s = argument;
	unsigned char frames[BYTES * 701];
	uint64_t next = 0;
	unsigned step = 1;

	while (next < STRESS_FRAMES) {
		size_t n = 1 + step * 263 % s->most;

		while (s->polite && ring_room(s->ring) < n)
			sched_yield();
		if (step++ % s->gap_every == 0)
			next += 5;              /* the intake lost some */
		number_frames(frames, next, n);
		ring_write(s->ring, frames, n, next);
		next += n;
	}
	ring_end(s->ring);
	return NULL;
}

static void *consume(void *argument)
{
	struct stress *s = argument;
	unsigned char frames[BYTES * 900];
	struct ring_news news;
	uint64_t expected = 0;

	for (;;) {
		size_t n = ring_read(s->reader, frames, 900, &news);

		if (!n && news.ended)
			return NULL;
		if (!n) {
			sched_yield();
			continue;
		}
		s->wrong |= !numbered(frames, news.first, n) || news.first != expected + news.lost;
		s->wrong |= s->polite && news.overrun;
		expected = news.first + n;
		s->seen += n;
		s->lost += news.lost;
	}
}

static void stress(bool polite, int readers, unsigned most, unsigned gap_every)
{
	struct stress s[3] = { 0 };
	struct ring *ring;
	pthread_t producer, reader[2];

	assert_int_equal(ring_create(&ring, BYTES, 4096), 0);
	for (int k = 0; k <= readers; k++)
		s[k] = (struct stress){ .ring = ring, .polite = polite, .most = most, .gap_every = gap_every };
	for (int k = 0; k < readers; k++) {
		assert_int_equal(ring_reader_open(&s[k].reader, ring), 0);
		pthread_create(&reader[k], NULL, consume, &s[k]);
	}
	pthread_create(&producer, NULL, produce, &s[readers]);
	pthread_join(producer, NULL);
	for (int k = 0; k < readers; k++) {
		pthread_join(reader[k], NULL);
		assert_false(s[k].wrong);
		assert_true(s[k].seen + s[k].lost >= STRESS_FRAMES);
		ring_reader_close(s[k].reader);
	}
	ring_destroy(ring);
}

static void two_threads_never_see_a_torn_frame(void **state)
{
	(void)state;
	stress(true, 1, 700, 50);
	stress(false, 1, 700, 50);
}

static void three_threads_never_see_a_torn_frame(void **state)
{
	(void)state;
	stress(true, 2, 700, 50);
	stress(false, 2, 700, 50);
}

/* A gap before every frame or two: the table of gaps goes round as the ring does. */
static void gaps_told_by_two_threads_are_those_entered(void **state)
{
	(void)state;
	stress(false, 2, 2, 1);
}

/* ------------------------------------------------------------------ a race as hard as it can be */

/*
 * The producer only copies, from frames made before, and never waits; the reader asks for all there is: the producer often
 * overwrites what is just being copied.  A frame is its number, modulo twice the capacity, four times.
 */
enum { RACE_CAPACITY = 4096, RACE_CYCLE = 2 * RACE_CAPACITY, RACE_BLOCK = 256, RACE_FRAMES = 4000 * RACE_BLOCK };

static uint64_t race_source[RACE_CYCLE][4], race_copy[RACE_CAPACITY][4];

static void *race(void *argument)
{
	for (uint64_t next = 0; next < RACE_FRAMES; next += RACE_BLOCK)
		ring_write(argument, race_source[next % RACE_CYCLE], RACE_BLOCK, next);
	ring_end(argument);
	return NULL;
}

static void what_is_overwritten_while_it_is_copied_is_lost_not_given(void **state)
{
	struct ring *ring;
	struct ring_reader *reader;
	struct ring_news news = { 0 };
	pthread_t producer;
	uint64_t seen = 0, lost = 0, wrong = 0;

	(void)state;
	for (size_t k = 0; k < RACE_CYCLE; k++)
		for (int w = 0; w < 4; w++)
			race_source[k][w] = k;
	assert_int_equal(ring_create(&ring, sizeof(*race_source), RACE_CAPACITY), 0);
	assert_int_equal(ring_reader_open(&reader, ring), 0);
	pthread_create(&producer, NULL, race, ring);
	while (!news.ended) {
		size_t n = ring_read(reader, race_copy, RACE_CAPACITY, &news);

		for (size_t k = 0; k < n; k++)
			for (int w = 0; w < 4; w++)
				wrong += race_copy[k][w] != (news.first + k) % RACE_CYCLE;
		seen += n;
		lost += news.lost;
	}
	pthread_join(producer, NULL);
	assert_int_equal(wrong, 0);
	assert_int_equal(seen + lost, RACE_FRAMES);
	ring_reader_close(reader);
	ring_destroy(ring);
}

/* The same without chance: the reader's copy stops at a forbidden page, and the producer writes before it may go on. */
static struct ring *stopped_ring;
static unsigned char *forbidden;
static const size_t page = 65536;       /* a multiple of the page of every machine */

static void write_meanwhile(int signal_number)
{
	(void)signal_number;
	mprotect(forbidden, page, PROT_READ | PROT_WRITE);
	for (uint64_t next = RACE_CAPACITY; next < RACE_CAPACITY + 512; next += RACE_BLOCK)
		ring_write(stopped_ring, race_source[next % RACE_CYCLE], RACE_BLOCK, next);
}

static void a_copy_overtaken_half_way_is_made_again(void **state)
{
	unsigned char *buffer = mmap(NULL, 2 * page, PROT_READ | PROT_WRITE, MAP_PRIVATE | MAP_ANONYMOUS, -1, 0);
	struct sigaction act = { .sa_handler = write_meanwhile }, before;
	struct ring_reader *reader;
	struct ring_news news;
	uint64_t (*copy)[4] = (uint64_t (*)[4])buffer;
	size_t n;

	(void)state;
	assert_true(buffer != MAP_FAILED);
	for (size_t k = 0; k < RACE_CYCLE; k++)
		for (int w = 0; w < 4; w++)
			race_source[k][w] = k;
	assert_int_equal(ring_create(&stopped_ring, sizeof(*race_source), RACE_CAPACITY), 0);
	assert_int_equal(ring_reader_open(&reader, stopped_ring), 0);
	ring_write(stopped_ring, race_source[0], RACE_CAPACITY, 0);
	forbidden = buffer + page;
	assert_int_equal(mprotect(forbidden, page, PROT_NONE), 0);
	sigaction(SIGSEGV, &act, &before);
	n = ring_read(reader, copy, RACE_CAPACITY, &news);      /* 128 KiB: two of these pages */
	sigaction(SIGSEGV, &before, NULL);
	/* 4608 frames were written, it goes on half a ring behind; what it saw at first ended at 4096. */
	assert_int_equal(n, 4096 - 2560);
	assert_true(news.first == 2560 && news.lost == 2560 && news.overrun == 2560);
	for (size_t k = 0; k < n; k++)
		assert_int_equal(copy[k][3], 2560 + k);
	ring_reader_close(reader);
	ring_destroy(stopped_ring);
	munmap(buffer, 2 * page);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(frames_come_back_in_order_across_the_end_of_the_memory),
		cmocka_unit_test(gaps_take_no_room_and_are_told_to_every_reader),
		cmocka_unit_test(a_slow_reader_is_told_what_it_lost),
		cmocka_unit_test(more_gaps_than_the_table_holds_are_an_overrun_not_a_lie),
		cmocka_unit_test(the_head_counts_a_gap_once_frames_follow_it),
		cmocka_unit_test(numbers_never_go_back),
		cmocka_unit_test(what_was_passed_over_is_no_overrun),
		cmocka_unit_test(two_threads_never_see_a_torn_frame),
		cmocka_unit_test(three_threads_never_see_a_torn_frame),
		cmocka_unit_test(gaps_told_by_two_threads_are_those_entered),
		cmocka_unit_test(a_copy_overtaken_half_way_is_made_again),
		cmocka_unit_test(what_is_overwritten_while_it_is_copied_is_lost_not_given),
	};

	return cmocka_run_group_tests(tests, NULL, NULL);
}
