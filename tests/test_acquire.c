/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <pthread.h>
#include <sched.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdatomic.h>
#include <stddef.h>
#include <stdint.h>
#include <cmocka.h>
#include "../daemon/watch/acquire.h"

/* From the intake to the ring: a replay that is stopped. */

enum { BLOCK = 1000, ROOM = 4096 };

static int16_t samples[BLOCK];
static uint64_t given;

static int give(struct intake *intake, struct block *block, int timeout_ms)
{
	(void)intake;
	(void)timeout_ms;
	*block = (struct block){ samples, BLOCK, given, INT64_MIN, 0 };
	given += BLOCK;
	return 1;
}

static const struct intake_driver endless = { .name = "endless", .read = give };

/* The ring is full and its reader slow: what it has not read yet must not be pushed out by the block that waits. */
static void a_replay_stopped_at_a_full_ring_loses_nothing(void **state)
{
	struct intake intake = { .driver = &endless, .format = { SAMPLE_S16, 1 }, .rate = 48000 };
	struct session session = { .intake = &intake };
	struct acquire acquire;
	struct ring_reader *reader;
	struct ring_news news = { 0 };
	struct ring *ring;
	atomic_bool stop = false;
	pthread_t thread;
	int16_t out[ROOM];
	size_t heard = 0;

	(void)state;
	assert_int_equal(ring_create(&ring, sizeof(int16_t), ROOM), 0);
	assert_int_equal(ring_reader_open(&reader, ring), 0);
	acquire_create(&acquire, ring, intake.rate, &stop);
	session.acquire = &acquire;
	assert_int_equal(pthread_create(&thread, NULL, acquire_run, &session), 0);
	while (ring_room(ring) >= BLOCK)
		sched_yield();
	atomic_store(&stop, true);
	assert_int_equal(pthread_join(thread, NULL), 0);
	assert_int_equal(atomic_load(&session.result), -ECANCELED);
	while (!news.ended) {
		heard += ring_read(reader, out, ROOM, &news);
		assert_true(news.lost == 0 && news.overrun == 0);
	}
	assert_true(heard > ROOM - BLOCK && heard <= ROOM);
	ring_reader_close(reader);
	ring_destroy(ring);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(a_replay_stopped_at_a_full_ring_loses_nothing),
	};

	return cmocka_run_group_tests_name("acquire", tests, NULL, NULL);
}
