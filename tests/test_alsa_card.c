/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <alsa/asoundlib.h>
#include <cmocka.h>
#include <errno.h>
#include <math.h>
#include <poll.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/syscall.h>
#include <time.h>
#include <unistd.h>
#include "support/intake_probe.h"

/*
 * The alsa intake at a simulated card with a simulated clock.  Opening goes to alsa-lib's null plug-in; the calls
 * below stand before alsa-lib's.  The card's crystal never stops: each sample is its own number since the card was
 * switched on, so the numbers in the samples tell what the frame numbers ought to be.
 */
static struct card {
	int64_t now;                    /* CLOCK_MONOTONIC, ns */
	int64_t slept;                  /* CLOCK_BOOTTIME is so much ahead; the crystal goes on in sleep */
	double rate;
	int64_t position;               /* number of the next sample to be read */
	int64_t capacity;
	int64_t on_the_way;             /* sampled, not yet in the buffer */
	enum { RUNS, OVERRUN, ASLEEP, GONE, STOPPED } state;
	bool dropped, stays_dead;
	enum { OWN, NONE, OTHER_CLOCK } stamps;
	int resume_again, resume_result, prepare_result, wait_result;
	int restarts, polls;
	bool wakes_in_vain, mute;
	unsigned numerator, denominator;        /* of the rate it has set itself to; 0: as asked */
	unsigned formats;               /* bit k: enum sample_type k */
} card;

static struct probe probe;

int clock_gettime(clockid_t clock, struct timespec *out)
{
	const int64_t ns = card.now + (clock == CLOCK_BOOTTIME ? card.slept : 0);

	if (clock != CLOCK_MONOTONIC && clock != CLOCK_BOOTTIME)
		return (int)syscall(SYS_clock_gettime, clock, out);
	*out = (struct timespec){ ns / 1000000000, ns % 1000000000 };
	return 0;
}

static int64_t sampled(void)
{
	return (int64_t)floor((double)(card.now + card.slept) * 1e-9 * card.rate) - card.on_the_way;
}

static int64_t waiting(void)
{
	if (card.mute)
		return 0;
	if (card.state == RUNS && sampled() - card.position >= card.capacity)
		card.state = OVERRUN;
	return sampled() > card.position ? sampled() - card.position : 0;
}

static int trouble(void)
{
	waiting();
	switch (card.state) {
	case RUNS:
		return 0;
	case OVERRUN:
		return -EPIPE;
	case ASLEEP:
		return -ESTRPIPE;
	case STOPPED:
		return -EBADFD;
	default:
		return -ENODEV;
	}
}

/* Only the intake waits here: time passes until a block is there, or with no descriptor for the whole of it. */
int poll(struct pollfd *descriptors, nfds_t count, int timeout_ms)
{
	const int64_t period = 480, end = card.now + (int64_t)timeout_ms * 1000000;

	(void)descriptors;
	card.polls++;
	if (count && card.wakes_in_vain)
		return 1;
	while (card.now < end) {
		card.now += 100000;
		if (count && (trouble() || waiting() >= period))
			return 1;
	}
	return 0;
}

int snd_pcm_poll_descriptors(snd_pcm_t *pcm, struct pollfd *descriptors, unsigned space)
{
	(void)pcm;
	assert_true(space >= 1);
	descriptors[0] = (struct pollfd){ .fd = 1000, .events = POLLIN };
	return 1;
}

int snd_pcm_poll_descriptors_revents(snd_pcm_t *pcm, struct pollfd *descriptors, unsigned count, unsigned short *events)
{
	(void)pcm;
	(void)descriptors;
	assert_int_equal(count, 1);
	*events = trouble() ? POLLERR : POLLIN;
	return 0;
}

/* The kernel's answer in a state without frames: none, and no error. */
snd_pcm_sframes_t snd_pcm_avail_update(snd_pcm_t *pcm)
{
	(void)pcm;
	if (card.wait_result)
		return card.wait_result;
	if (trouble() == -EBADFD)
		return 0;
	return trouble() ? trouble() : waiting();
}

int snd_pcm_status(snd_pcm_t *pcm, snd_pcm_status_t *status)
{
	(void)pcm;
	(void)status;
	return trouble();
}

snd_pcm_uframes_t snd_pcm_status_get_avail(const snd_pcm_status_t *status)
{
	(void)status;
	return (snd_pcm_uframes_t)waiting();
}

snd_pcm_sframes_t snd_pcm_status_get_delay(const snd_pcm_status_t *status)
{
	(void)status;
	return (snd_pcm_sframes_t)(waiting() + card.on_the_way);
}

void snd_pcm_status_get_htstamp(const snd_pcm_status_t *status, snd_htimestamp_t *out)
{
	const double other = card.stamps == OTHER_CLOCK ? 1.9e9 : 0;   /* as CLOCK_REALTIME is */
	const double seconds = (double)(sampled() + card.on_the_way) / card.rate - (double)card.slept * 1e-9 + other;
	const int64_t ns = card.stamps == NONE ? 0 : llround(seconds * 1e9);

	(void)status;
	*out = (snd_htimestamp_t){ ns / 1000000000, ns % 1000000000 };
}

snd_pcm_sframes_t snd_pcm_readi(snd_pcm_t *pcm, void *buffer, snd_pcm_uframes_t size)
{
	int32_t *out = buffer;
	const int64_t count = waiting() < (int64_t)size ? waiting() : (int64_t)size;

	(void)pcm;
	if (trouble())
		return trouble();
	for (int64_t k = 0; k < count; k++)
		out[k] = (int32_t)card.position++;
	return (snd_pcm_sframes_t)count;
}

int snd_pcm_hw_params_test_format(snd_pcm_t *pcm, snd_pcm_hw_params_t *params, snd_pcm_format_t format)
{
	static const snd_pcm_format_t known[] = { SND_PCM_FORMAT_S16_LE, SND_PCM_FORMAT_S24_3LE, SND_PCM_FORMAT_S24_LE,
		SND_PCM_FORMAT_S32_LE, SND_PCM_FORMAT_FLOAT_LE };

	(void)pcm;
	(void)params;
	for (int k = 0; k < 5; k++)
		if (known[k] == format && card.formats >> k & 1)
			return 0;
	return -EINVAL;
}

int snd_pcm_hw_params_get_rate_numden(const snd_pcm_hw_params_t *params, unsigned *numerator, unsigned *denominator)
{
	(void)params;
	*numerator = card.denominator ? card.numerator : 48000;
	*denominator = card.denominator ? card.denominator : 1;
	return 0;
}

int snd_pcm_prepare(snd_pcm_t *pcm)
{
	(void)pcm;
	return card.state == GONE ? -ENODEV : card.prepare_result;
}

int snd_pcm_start(snd_pcm_t *pcm)
{
	(void)pcm;
	assert_true(card.dropped);      /* one that runs must be stopped first */
	card.dropped = false;
	card.position = sampled() + card.on_the_way + 1;
	card.state = card.stays_dead ? STOPPED : RUNS;
	card.restarts++;
	return 0;
}

int snd_pcm_drop(snd_pcm_t *pcm)
{
	(void)pcm;
	card.dropped = true;
	return 0;
}

/* Resumed, it goes on with what its buffer held before the sleep. */
int snd_pcm_resume(snd_pcm_t *pcm)
{
	(void)pcm;
	if (card.resume_again-- > 0)
		return -EAGAIN;
	if (card.resume_result == 0)
		card.state = RUNS;
	return card.resume_result;
}

snd_pcm_state_t snd_pcm_state(snd_pcm_t *pcm)
{
	(void)pcm;
	switch (trouble()) {
	case -EPIPE:
		return SND_PCM_STATE_XRUN;
	case -ESTRPIPE:
		return SND_PCM_STATE_SUSPENDED;
	case -ENODEV:
		return SND_PCM_STATE_DISCONNECTED;
	case -EBADFD:
		return SND_PCM_STATE_SETUP;
	default:
		return SND_PCM_STATE_RUNNING;
	}
}

snd_pcm_type_t snd_pcm_type(snd_pcm_t *pcm)
{
	(void)pcm;
	return SND_PCM_TYPE_HW;
}

static void start_card(double rate)
{
	card = (struct card){ .now = 7000000000, .rate = rate, .capacity = 24000, .formats = 31 };
	probe_reset(&probe);
	probe_text(&probe, "device", "nothing");
	probe_number(&probe, "channels", 1);
	probe_number(&probe, "buffer_s", 0.5);
	probe_number(&probe, "period_s", 0.01);
	assert_int_equal(probe_open(&probe), 0);
	assert_int_equal(probe.intake->format.type, SAMPLE_S32);
	assert_true(probe.intake->real_time);
	assert_int_equal(probe.driver->start(probe.intake), 0);
}

static int read_block(struct block *block)
{
	return probe.driver->read(probe.intake, block, 100);
}

/* What the number in the sample is ahead of the frame's: constant when nothing is lost uncounted. */
static int64_t offset(const struct block *block)
{
	return *(const int32_t *)block->frames - (int64_t)block->first;
}

static double taken_ns(const struct block *block)
{
	return (double)*(const int32_t *)block->frames / card.rate * 1e9 - (double)card.slept;
}

/* Reads for some time, all of it in one piece; the offset. */
static int64_t read_for(double seconds)
{
	const int64_t end = card.now + llround(seconds * 1e9);
	struct block block;
	uint64_t next = 0;
	int64_t first = INT64_MIN;

	while (card.now < end) {
		const int ret = read_block(&block);
		assert_in_range(ret, 0, 1);
		if (ret == 0)
			continue;
		if (first == INT64_MIN)
			first = offset(&block);
		else
			assert_true(block.first == next && !(block.flags & BLOCK_GAP));
		assert_int_equal(offset(&block), first);
		next = block.first + block.count;
	}
	return first;
}

static void read_gap(struct block *block)
{
	int ret = 0;

	for (int k = 0; k < 10 && ret == 0; k++)
		ret = read_block(block);
	assert_int_equal(ret, 1);
	assert_true(block->flags & BLOCK_GAP);
}

static void an_overrun_becomes_a_gap_of_its_length(void **state)
{
	static const double stalls[] = { 0.5001, 0.7, 1.3, 17, 600, 7200 };
	struct block block;

	(void)state;
	start_card(48000);
	const int64_t straight = read_for(3);
	for (size_t k = 0; k < sizeof(stalls) / sizeof(stalls[0]); k++) {
		card.now += llround(stalls[k] * 1e9);
		read_gap(&block);
		assert_int_equal(block.flags, BLOCK_GAP | BLOCK_OVERRUN);
		assert_int_equal(offset(&block), straight);
		assert_int_equal(read_for(3), straight);
		assert_int_equal(card.restarts, k + 2);
	}
}

static void a_stall_within_the_buffer_loses_nothing(void **state)
{
	(void)state;
	start_card(48000);
	const int64_t straight = read_for(1);
	card.now += 480000000;
	assert_int_equal(read_for(1), straight);
	assert_int_equal(card.restarts, 1);
}

static void a_card_off_by_100_ppm_still_counts_its_gap(void **state)
{
	struct block block;

	(void)state;
	for (int sign = -1; sign <= 1; sign += 2) {
		start_card(48000 * (1 + sign * 100e-6));
		const int64_t straight = read_for(100);
		card.now += 10000000000;        /* at the nominal rate this would be 48 frames wrong */
		read_gap(&block);
		assert_true(llabs(offset(&block) - straight) <= 1);
	}
}

static void a_suspended_card_resumes_or_is_restarted(void **state)
{
	static const int results[] = { 0, -ENOSYS };
	struct block block;

	(void)state;
	for (int k = 0; k < 2; k++) {
		start_card(48000);
		const int64_t straight = read_for(2);
		card.state = ASLEEP;
		card.resume_again = 3;
		card.resume_result = results[k];
		for (int again = 0; again < 3; again++) {
			assert_int_equal(read_block(&block), 0);
			card.now += 900000000;
		}
		read_gap(&block);
		assert_int_equal(block.flags, BLOCK_GAP | BLOCK_SLEPT);
		assert_int_equal(offset(&block), straight);
		assert_int_equal(card.restarts, 2);
	}
}

/* CLOCK_MONOTONIC stands still meanwhile; the gap is as long as the sleep, whether the card's driver says so or not. */
static void a_computer_that_slept_leaves_a_gap_of_true_length(void **state)
{
	static const double sleeps[] = { 0.02, 0.3, 40, 30000 };
	struct block block;

	(void)state;
	for (int silent = 0; silent < 2; silent++)
		for (size_t k = 0; k < sizeof(sleeps) / sizeof(sleeps[0]); k++) {
			start_card(48000);
			const int64_t straight = read_for(3.005);
			card.slept += llround(sleeps[k] * 1e9);
			if (silent)     /* it never stopped: its buffer holds old and new frames */
				card.position = sampled() - 1000;
			else
				card.state = ASLEEP;
			read_gap(&block);
			assert_int_equal(block.flags, BLOCK_GAP | BLOCK_SLEPT);
			assert_int_equal(offset(&block), straight);
			assert_true(fabs((double)block.host_ns - taken_ns(&block)) <= 2);
			assert_int_equal(read_for(1), straight);
		}
}

static void a_card_that_stopped_by_itself_is_started_again(void **state)
{
	struct block block;

	(void)state;
	start_card(48000);
	const int64_t straight = read_for(1);
	card.state = STOPPED;
	card.now += 250000000;
	read_gap(&block);
	assert_int_equal(block.flags, BLOCK_GAP | BLOCK_STALLED);
	assert_int_equal(offset(&block), straight);
	/* One that stops as often as it is started is given up, without taking the core away meanwhile. */
	card.stays_dead = true;
	card.state = STOPPED;
	const int before = card.restarts;
	const int64_t from = card.now;
	int ret = 0;
	for (int k = 0; k < 100 && ret == 0; k++)
		ret = read_block(&block);
	assert_int_equal(ret, -EBADFD);
	assert_int_equal(card.restarts - before, 5);
	assert_true(card.now - from >= 40000000);
}

static void a_card_that_falls_silent_is_started_again(void **state)
{
	struct block block;

	(void)state;
	start_card(48000);
	const int64_t straight = read_for(1), before = card.now;
	card.mute = true;
	for (int k = 0; k < 30 && card.mute; k++) {
		assert_int_equal(read_block(&block), 0);
		card.mute = card.restarts < 2;
	}
	assert_false(card.mute);
	assert_in_range(card.now - before, 2000000000, 2200000000);
	read_gap(&block);
	assert_int_equal(block.flags, BLOCK_GAP | BLOCK_STALLED);
	assert_int_equal(offset(&block), straight);
	/* In vain: opening it anew is all that is left. */
	card.mute = true;
	int ret = 0;
	for (int k = 0; k < 200 && ret == 0; k++)
		ret = read_block(&block);
	assert_int_equal(ret, -ETIMEDOUT);
	probe.driver->explain(probe.intake, probe.explanation, sizeof(probe.explanation));
	assert_non_null(strstr(probe.explanation, "\"nothing\" has delivered nothing since"));
}

static void a_card_at_another_rate_than_granted_is_said(void **state)
{
	static const double rates[] = { 44100, 96000, 47000 };
	struct block block;

	(void)state;
	for (size_t k = 0; k < sizeof(rates) / sizeof(rates[0]); k++) {
		char said[128];
		int ret = 0;

		start_card(48000);
		card.rate = rates[k];
		card.position = sampled();
		for (int n = 0; n < 5000 && ret >= 0; n++)
			ret = read_block(&block);
		assert_int_equal(ret, -ERANGE);
		assert_in_range(card.now, 17000000000, 17200000000);
		probe.driver->explain(probe.intake, probe.explanation, sizeof(probe.explanation));
		snprintf(said, sizeof(said), "\"nothing\" gives %.0f frames a second where 48000 were granted", rates[k]);
		assert_string_equal(probe.explanation, said);
	}
	/* A crystal that is merely bad is none of that, and neither are frames that got lost. */
	start_card(48000 * 1.0009);
	read_for(100);
	for (int k = 0; k < 10; k++) {
		card.position += 4800;
		card.now += 100000000;
		read_for(5);
	}
}

/* What the hardware was set to in the end, in the kernel's own fraction. */
static void a_rate_that_comes_out_otherwise_is_refused(void **state)
{
	(void)state;
	start_card(48000);
	probe_reset(&probe);
	probe_text(&probe, "device", "nothing");
	card.numerator = 48000 * 999;
	card.denominator = 1000;
	assert_int_equal(probe_open(&probe), -EINVAL);
	assert_non_null(strstr(probe.said, "rate_hz: \"nothing\" runs at 47952 where 48000 was asked for and granted"));
	card.numerator = 47999500;
	assert_int_equal(probe_open(&probe), 0);
	assert_true(probe.intake->rate == 47999.5);
}

static void a_card_that_has_gone_is_said(void **state)
{
	struct block block;

	(void)state;
	for (int way = 0; way < 3; way++) {
		start_card(48000);
		read_for(1);
		switch (way) {
		case 0:
			card.state = GONE;
			break;
		case 1:         /* first an overrun, then nothing there to prepare */
			card.now += 1000000000;
			card.prepare_result = -ENODEV;
			break;
		case 2:
			card.state = GONE;
			card.wait_result = -EBADFD;
			break;
		}
		assert_int_equal(read_block(&block), -ENODEV);
		assert_int_equal(read_block(&block), -ENODEV);
		probe.driver->stop(probe.intake);
		probe.driver->explain(probe.intake, probe.explanation, sizeof(probe.explanation));
		assert_non_null(strstr(probe.explanation, "\"nothing\" has gone after 48"));
		assert_string_equal(probe.said, "");
	}
	/* Still gone, then there again: counted from 0. */
	card.wait_result = 0;
	card.prepare_result = -ENODEV;
	assert_int_equal(probe.driver->start(probe.intake), -ENODEV);
	assert_non_null(strstr(probe.said, "device: \"nothing\" does not start: No such device"));
	card.prepare_result = 0;
	card.state = STOPPED;
	assert_int_equal(probe.driver->start(probe.intake), 0);
	assert_int_equal(read_block(&block), 1);
	assert_int_equal(block.first, 0);

	card.wait_result = -EIO;
	int ret = 0;
	for (int k = 0; k < 20 && ret == 0; k++)
		ret = read_block(&block);
	assert_int_equal(ret, -EIO);
	probe.driver->explain(probe.intake, probe.explanation, sizeof(probe.explanation));
	assert_non_null(strstr(probe.explanation, "failed after 48"));
	assert_non_null(strstr(probe.explanation, "Input/output error"));
}

static void a_silent_card_times_out(void **state)
{
	struct block block;

	(void)state;
	start_card(48000);
	card.rate = 1;
	card.position = 0;
	const int64_t before = card.now;
	assert_int_equal(read_block(&block), 0);
	assert_true(card.now - before >= 100000000);
}

static void auto_takes_the_widest_format_offered(void **state)
{
	static const enum sample_type order[] = { SAMPLE_S32, SAMPLE_S24_3, SAMPLE_S24, SAMPLE_F32, SAMPLE_S16 };

	(void)state;
	for (unsigned formats = 0; formats < 32; formats++) {
		card = (struct card){ .formats = formats };
		probe_reset(&probe);
		probe_text(&probe, "device", "nothing");
		if (formats == 0) {
			assert_int_equal(probe_open(&probe), -EINVAL);
			assert_non_null(strstr(probe.said, "it offers none of S16, S24_3, S24, S32, FLOAT"));
			continue;
		}
		assert_int_equal(probe_open(&probe), 0);
		int k = 0;
		while (!(formats >> order[k] & 1))
			k++;
		assert_int_equal(probe.intake->format.type, order[k]);
	}
}

static void woken_in_vain_it_neither_spins_nor_overstays(void **state)
{
	struct block block;

	(void)state;
	start_card(48000);
	card.rate = 1;
	card.position = 0;
	card.wakes_in_vain = true;
	const int64_t before = card.now;
	assert_int_equal(read_block(&block), 0);
	assert_in_range(card.now - before, 100000000, 102000000);
	assert_in_range(card.polls, 1, 210);
}

static void the_cards_own_stamps_are_exact(void **state)
{
	struct block block;

	(void)state;
	start_card(48000);
	for (int k = 0; k < 100; k++) {
		assert_int_equal(read_block(&block), 1);
		assert_int_equal(block.flags, 0);
		assert_true(fabs((double)block.host_ns - taken_ns(&block)) <= 2);       /* two roundings to 1 ns */
	}
	/* Samples on their way into the buffer are older than the newest there by so much. */
	start_card(48000);
	card.on_the_way = 48;
	for (int k = 0; k < 100; k++) {
		assert_int_equal(read_block(&block), 1);
		assert_true(fabs((double)block.host_ns - taken_ns(&block)) <= 2);
	}
}

static void without_stamps_the_arrival_stands_and_is_late_only(void **state)
{
	struct block block;

	(void)state;
	for (int stamps = NONE; stamps <= OTHER_CLOCK; stamps++) {
		start_card(48000);
		card.stamps = stamps;
		for (int k = 0; k < 100; k++) {
			assert_int_equal(read_block(&block), 1);
			assert_int_equal(block.flags, BLOCK_STAMP_LATE);
			const double late = (double)block.host_ns - taken_ns(&block);
			assert_true(late >= -2 && late < 1e9 / 48000 + 2);      /* at most the frame that is being taken */
		}
	}
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(auto_takes_the_widest_format_offered),
		cmocka_unit_test(an_overrun_becomes_a_gap_of_its_length),
		cmocka_unit_test(a_stall_within_the_buffer_loses_nothing),
		cmocka_unit_test(a_card_off_by_100_ppm_still_counts_its_gap),
		cmocka_unit_test(a_suspended_card_resumes_or_is_restarted),
		cmocka_unit_test(a_computer_that_slept_leaves_a_gap_of_true_length),
		cmocka_unit_test(a_card_that_stopped_by_itself_is_started_again),
		cmocka_unit_test(a_card_that_falls_silent_is_started_again),
		cmocka_unit_test(a_card_at_another_rate_than_granted_is_said),
		cmocka_unit_test(a_rate_that_comes_out_otherwise_is_refused),
		cmocka_unit_test(a_card_that_has_gone_is_said),
		cmocka_unit_test(a_silent_card_times_out),
		cmocka_unit_test(woken_in_vain_it_neither_spins_nor_overstays),
		cmocka_unit_test(the_cards_own_stamps_are_exact),
		cmocka_unit_test(without_stamps_the_arrival_stands_and_is_late_only),
	};

	setenv("ALSA_CONFIG_PATH", "tests/data/alsa/cards.conf", 1);
	probe_create(&probe, &intake_alsa);
	const int failed = cmocka_run_group_tests_name("alsa_card", tests, NULL, NULL);
	probe_destroy(&probe);
	snd_config_update_free_global();
	return failed;
}
