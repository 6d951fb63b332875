/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <pthread.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdatomic.h>
#include <stddef.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>
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

/* ------------------------------------------------------------------ threads */

enum { STRESS_FRAMES = 600000 };

struct stress {
	struct ring *ring;
	struct ring_reader *reader;
	bool polite;                    /* the producer waits for room, as in a replay */
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
		size_t n = 1 + step * 263 % 700;

		while (s->polite && ring_room(s->ring) < n)
			sched_yield();
		if (step++ % 50 == 0)
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

static void stress(bool polite, int readers)
{
	struct stress s[3] = { 0 };
	struct ring *ring;
	pthread_t producer, reader[2];

	assert_int_equal(ring_create(&ring, BYTES, 4096), 0);
	for (int k = 0; k <= readers; k++)
		s[k] = (struct stress){ .ring = ring, .polite = polite };
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
	stress(true, 1);
	stress(false, 1);
}

static void three_threads_never_see_a_torn_frame(void **state)
{
	(void)state;
	stress(true, 2);
	stress(false, 2);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(frames_come_back_in_order_across_the_end_of_the_memory),
		cmocka_unit_test(gaps_take_no_room_and_are_told_to_every_reader),
		cmocka_unit_test(a_slow_reader_is_told_what_it_lost),
		cmocka_unit_test(more_gaps_than_the_table_holds_are_an_overrun_not_a_lie),
		cmocka_unit_test(two_threads_never_see_a_torn_frame),
		cmocka_unit_test(three_threads_never_see_a_torn_frame),
	};

	return cmocka_run_group_tests(tests, NULL, NULL);
}
