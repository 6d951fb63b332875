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
	double rate;
	int64_t position;               /* number of the next sample to be read */
	int64_t capacity;
	int64_t on_the_way;             /* sampled, not yet in the buffer */
	enum { RUNS, OVERRUN, ASLEEP, GONE } state;
	enum { OWN, NONE, OTHER_CLOCK } stamps;
	int resume_again, resume_result, prepare_result, wait_result;
	int restarts, polls;
	bool wakes_in_vain;
	unsigned formats;               /* bit k: enum sample_type k */
} card;

static struct probe probe;

int clock_gettime(clockid_t clock, struct timespec *out)
{
	if (clock != CLOCK_MONOTONIC)
		return (int)syscall(SYS_clock_gettime, clock, out);
	*out = (struct timespec){ card.now / 1000000000, card.now % 1000000000 };
	return 0;
}

static int64_t sampled(void)
{
	return (int64_t)floor((double)card.now * 1e-9 * card.rate) - card.on_the_way;
}

static int64_t waiting(void)
{
	if (card.state == RUNS && sampled() - card.position >= card.capacity)
		card.state = OVERRUN;
	return sampled() > card.position ? sampled() - card.position : 0;
}

static int trouble(void)
{
	waiting();
	return card.state == RUNS ? 0 : card.state == OVERRUN ? -EPIPE : card.state == ASLEEP ? -ESTRPIPE : -ENODEV;
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

snd_pcm_sframes_t snd_pcm_avail_update(snd_pcm_t *pcm)
{
	(void)pcm;
	if (card.wait_result)
		return card.wait_result;
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
	const double seconds = (double)(sampled() + card.on_the_way) / card.rate + other;
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

int snd_pcm_prepare(snd_pcm_t *pcm)
{
	(void)pcm;
	return card.prepare_result;
}

int snd_pcm_start(snd_pcm_t *pcm)
{
	(void)pcm;
	card.position = sampled() + card.on_the_way + 1;
	card.state = RUNS;
	card.restarts++;
	return 0;
}

int snd_pcm_drop(snd_pcm_t *pcm)
{
	(void)pcm;
	return 0;
}

int snd_pcm_resume(snd_pcm_t *pcm)
{
	(void)pcm;
	if (card.resume_again-- > 0)
		return -EAGAIN;
	if (card.resume_result == 0)
		snd_pcm_start(pcm);
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
		assert_int_equal(offset(&block), straight);
		assert_int_equal(card.restarts, 2);
	}
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
	assert_int_equal(probe.driver->start(probe.intake), 0);
	assert_int_equal(read_block(&block), 1);
	assert_int_equal(block.first, 0);

	card.wait_result = -EIO;
	assert_int_equal(read_block(&block), -EIO);
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

static double taken_ns(const struct block *block)
{
	return (double)*(const int32_t *)block->frames / card.rate * 1e9;
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
