/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <errno.h>
#include <cmocka.h>
#include <fcntl.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/socket.h>
#include <sys/stat.h>
#include <sys/syscall.h>
#include <sys/un.h>
#include <sys/wait.h>
#include <time.h>
#include <unistd.h>
#include "support/intake_probe.h"

static struct probe probe;

/* Stands before the C library's: a device that fails. */
static bool broken;

ssize_t read(int fd, void *buffer, size_t size)
{
	if (broken) {
		errno = EIO;
		return -1;
	}
	return syscall(SYS_read, fd, buffer, size);
}

static uint64_t state_of_chance;

static unsigned chance(void)
{
	state_of_chance = state_of_chance * 6364136223846793005u + 1442695040888963407u;       /* Knuth, MMIX */
	return (unsigned)(state_of_chance >> 40);
}

static void random_bytes(unsigned char *bytes, size_t size, uint64_t seed)
{
	state_of_chance = seed;
	for (size_t k = 0; k < size; k++)
		bytes[k] = (unsigned char)chance();
}

static int64_t now_ns(void)
{
	struct timespec now;

	clock_gettime(CLOCK_MONOTONIC, &now);
	return (int64_t)now.tv_sec * 1000000000 + now.tv_nsec;
}

static const char *make_fifo(void)
{
	const char *path = probe_path(&probe, "fifo");

	unlink(path);
	assert_int_equal(mkfifo(path, 0600), 0);
	return path;
}

static void configure(const char *path, double rate, int channels, const char *format)
{
	probe_reset(&probe);
	probe_text(&probe, "path", path);
	probe_number(&probe, "rate_hz", rate);
	probe_number(&probe, "channels", channels);
	probe_text(&probe, "format", format);
}

/* A FIFO that the intake reads; the writing end. */
static int start_fifo(double rate, int channels, const char *format)
{
	const char *path = make_fifo();

	configure(path, rate, channels, format);
	assert_int_equal(probe_open(&probe), 0);
	assert_int_equal(probe.driver->start(probe.intake), 0);
	return open(path, O_WRONLY | O_NONBLOCK);
}

static int read_block(struct block *block, int timeout_ms)
{
	return probe.driver->read(probe.intake, block, timeout_ms);
}

static const char *explanation(void)
{
	probe.driver->explain(probe.intake, probe.explanation, sizeof(probe.explanation));
	return probe.explanation;
}

static void a_fifo_waits_for_its_writer(void **state)
{
	const int16_t sample = 1234;
	struct block block;

	(void)state;
	const char *path = make_fifo();
	configure(path, 100, 1, "S16");
	assert_int_equal(probe_open(&probe), 0);
	assert_int_equal(probe.driver->start(probe.intake), 0);
	const int64_t before = now_ns();
	assert_int_equal(read_block(&block, 20), 0);
	assert_true(now_ns() - before >= 19000000);     /* it waited and did not spin */
	assert_int_equal(read_block(&block, 0), 0);
	const int writer = open(path, O_WRONLY | O_NONBLOCK);
	assert_true(writer >= 0);
	assert_int_equal(read_block(&block, 0), 0);
	assert_int_equal(write(writer, &sample, 2), 2);
	assert_int_equal(read_block(&block, 1000), 1);
	assert_int_equal(block.count, 1);
	assert_memory_equal(block.frames, &sample, 2);
	close(writer);
	assert_int_equal(read_block(&block, 1000), -ENODATA);
	assert_int_equal(read_block(&block, 1000), -ENODATA);
	assert_string_equal(explanation(), "");
}

static void a_frame_in_pieces_is_put_together(void **state)
{
	unsigned char bytes[6 * 40];
	struct block block;
	size_t got = 0;

	(void)state;
	random_bytes(bytes, sizeof(bytes), 7201);
	const int writer = start_fifo(100, 2, "S24_3");
	for (size_t k = 0; k < sizeof(bytes); k++) {
		assert_int_equal(write(writer, bytes + k, 1), 1);
		if (read_block(&block, 0) == 0)
			continue;
		assert_int_equal(k % 6, 5);
		assert_int_equal(block.count, 1);
		assert_int_equal(block.first, got);
		assert_memory_equal(block.frames, bytes + 6 * got++, 6);
	}
	assert_int_equal(got, 40);
	close(writer);
}

static void a_writer_that_stops_in_mid_frame_is_said(void **state)
{
	unsigned char bytes[8 * 5 + 3] = { 1, 2, 3 };
	struct block block;

	(void)state;
	int writer = start_fifo(100, 2, "S32");
	assert_int_equal(write(writer, bytes, sizeof(bytes)), sizeof(bytes));
	close(writer);
	assert_int_equal(read_block(&block, 1000), 1);
	assert_int_equal(block.count, 5);
	assert_memory_equal(block.frames, bytes, 40);
	assert_int_equal(read_block(&block, 1000), -ENODATA);
	assert_non_null(strstr(explanation(), "ended in the middle of a frame: 3 of its 8 bytes are left over after 5 "
		"whole frames"));
	probe.driver->stop(probe.intake);
	assert_non_null(strstr(explanation(), "3 of its 8 bytes"));

	writer = start_fifo(100, 2, "S32");
	close(writer);
	assert_int_equal(read_block(&block, 1000), -ENODATA);
	assert_non_null(strstr(explanation(), "ended before the first frame"));
}

/* A child writes in pieces of any length; more than the pipe holds, so it is held back meanwhile. */
static pid_t feed(const char *path, int fd, const unsigned char *bytes, size_t size)
{
	const pid_t child = fork();

	if (child != 0)
		return child;
	if (path)
		fd = open(path, O_WRONLY);
	for (size_t done = 0; done < size;) {
		const size_t piece = 1 + chance() % 9000;
		const ssize_t count = write(fd, bytes + done, piece < size - done ? piece : size - done);
		if (count < 0)
			_exit(1);
		done += (size_t)count;
	}
	_exit(0);
}

static void check_feed(pid_t child, const unsigned char *bytes, size_t size)
{
	int status;

	probe_run(&probe, SIZE_MAX);
	assert_int_equal(waitpid(child, &status, 0), child);
	assert_int_equal(status, 0);
	assert_int_equal(probe.last, -ENODATA);
	assert_int_equal(probe.frames, size / frame_bytes(probe.intake->format));
	assert_int_equal(probe.next, probe.frames);
	assert_memory_equal(probe.bytes, bytes, size);
	assert_string_equal(probe.explanation, "");
}

enum { FEED = 24 * 8 * 4000 };          /* whole frames of every format and 1, 2, 8 channels */
static unsigned char feed_bytes[FEED];

static void every_format_passes_unchanged(void **state)
{
	static const char *const formats[] = { "S16", "S24_3", "S24", "S32", "FLOAT" };

	(void)state;
	print_message("seed 7202\n");
	random_bytes(feed_bytes, FEED, 7202);
	for (unsigned k = 0; k < 5; k++)
		for (int channels = 1; channels <= 8; channels *= channels == 2 ? 4 : 2) {
			const char *path = make_fifo();
			configure(path, 48000, channels, formats[k]);
			assert_int_equal(probe_open(&probe), 0);
			assert_int_equal(probe.intake->format.type, k);
			assert_int_equal(probe.intake->format.channels, channels);
			assert_true(probe.intake->rate == 48000 && !probe.intake->real_time);
			check_feed(feed(path, -1, feed_bytes, FEED), feed_bytes, FEED);
		}
}

static void standard_input_is_a_dash(void **state)
{
	const int kept = dup(STDIN_FILENO);
	int ends[2];

	(void)state;
	assert_int_equal(pipe(ends), 0);
	dup2(ends[0], STDIN_FILENO);
	close(ends[0]);
	configure("-", 48000, 2, "S16");
	const pid_t child = feed(NULL, ends[1], feed_bytes, FEED);
	close(ends[1]);
	assert_int_equal(probe_open(&probe), 0);
	assert_string_equal(probe.intake->name, "standard input");
	check_feed(child, feed_bytes, FEED);
	assert_int_equal(fcntl(STDIN_FILENO, F_GETFL) & O_NONBLOCK, 0); /* shared with others: left as it was */
	dup2(kept, STDIN_FILENO);
	close(kept);
}

static int listen_at(const char *path)
{
	struct sockaddr_un address = { .sun_family = AF_UNIX };
	const int fd = socket(AF_UNIX, SOCK_STREAM, 0);

	assert_true(strlen(path) < sizeof(address.sun_path));
	strcpy(address.sun_path, path);
	assert_int_equal(bind(fd, (struct sockaddr *)&address, sizeof(address)), 0);
	assert_int_equal(listen(fd, 1), 0);
	return fd;
}

static void a_socket_is_connected_to(void **state)
{
	const char *path = probe_path(&probe, "socket");
	struct block block;

	(void)state;
	const int listener = listen_at(path);
	configure(path, 48000, 1, "FLOAT");
	assert_int_equal(probe_open(&probe), 0);
	for (int round = 0; round < 2; round++) {       /* started again, it connects again and counts from 0 */
		assert_int_equal(probe.driver->start(probe.intake), 0);
		const int peer = accept(listener, NULL, NULL);
		assert_true(peer >= 0);
		assert_int_equal(read_block(&block, 0), 0);
		assert_int_equal(write(peer, feed_bytes, 4003), 4003);
		assert_int_equal(read_block(&block, 1000), 1);
		assert_int_equal(block.count, 1000);
		assert_int_equal(block.first, 0);
		assert_memory_equal(block.frames, feed_bytes, 4000);
		close(peer);
		assert_int_equal(read_block(&block, 1000), -ENODATA);
		assert_non_null(strstr(explanation(), "3 of its 4 bytes are left over after 1000 whole frames"));
		probe.driver->stop(probe.intake);
	}
	close(listener);
	assert_int_equal(probe.driver->start(probe.intake), -ECONNREFUSED);
	assert_non_null(strstr(probe.said, "no program listens on the socket"));
}

static void the_time_of_arrival_limits_the_stamp(void **state)
{
	enum { FRAMES = 3000 };
	const int64_t length = FRAMES * 1000000000ll / 48000;
	struct block block;

	(void)state;
	int writer = start_fifo(48000, 1, "S16");
	for (int round = 0; round < 2; round++) {
		const int64_t before = now_ns();
		assert_int_equal(write(writer, feed_bytes, 2 * FRAMES), 2 * FRAMES);
		assert_int_equal(read_block(&block, 1000), 1);
		const int64_t after = now_ns();
		assert_int_equal(block.count, FRAMES);
		assert_int_equal(block.first, round * FRAMES);
		assert_int_equal(block.flags, BLOCK_STAMP_LATE);
		assert_true(block.host_ns >= before - length && block.host_ns <= after - length);
	}
	close(writer);

	/* An old recording is dated by its start alone. */
	char text[TAI_TEXT];
	const char *path = make_fifo();
	configure(path, 48000, 1, "S16");
	probe_text(&probe, "start_utc", "2031-04-02T01:23:45.5Z");
	probe_number(&probe, "start_sigma_s", 0.001);
	assert_int_equal(probe_open(&probe), 0);
	assert_int_equal(probe.driver->start(probe.intake), 0);
	assert_int_equal(probe.intake->origin.quality, TIME_HOST);
	assert_string_equal(probe.intake->origin.source, "configuration");
	assert_string_equal(tai_format_utc(text, probe.intake->origin.when, 1), "2031-04-02T01:23:45.5Z");
	assert_true(probe.intake->origin.sigma_s == 0.001);
	writer = open(path, O_WRONLY | O_NONBLOCK);
	assert_int_equal(write(writer, feed_bytes, 2 * FRAMES), 2 * FRAMES);
	assert_int_equal(read_block(&block, 1000), 1);
	assert_true(block.host_ns == INT64_MIN && block.flags == 0);
	close(writer);
}

static void a_slow_reader_holds_the_writer_back(void **state)
{
	size_t written = 0, got = 0;
	struct block block;

	(void)state;
	const int writer = start_fifo(48000, 2, "S16");
	for (ssize_t count; (count = write(writer, feed_bytes + written, 4096)) > 0;)
		written += (size_t)count;
	assert_int_equal(errno, EAGAIN);
	close(writer);
	while (read_block(&block, 1000) == 1) {
		assert_memory_equal(block.frames, feed_bytes + got, block.count * 4);
		got += block.count * 4;
	}
	assert_int_equal(got, written);
}

static void a_plain_file_of_samples_knows_its_length(void **state)
{
	struct block block;

	(void)state;
	configure(probe_file(&probe, "raw", feed_bytes, 200001), 48000, 1, "S16");
	probe_run(&probe, SIZE_MAX);
	assert_int_equal(probe.intake->total_frames, 100000);
	assert_int_equal(probe.frames, 100000);
	assert_memory_equal(probe.bytes, feed_bytes, 200000);
	assert_non_null(strstr(probe.explanation, "1 of its 2 bytes are left over after 100000 whole frames"));
	assert_int_equal(probe.driver->start(probe.intake), 0);
	assert_int_equal(read_block(&block, 0), 1);
	assert_true(block.host_ns == INT64_MIN);        /* a file does not arrive as it is taken */

	configure("/dev/zero", 48000, 8, "S32");
	probe_run(&probe, 10000);
	assert_true(probe.frames >= 10000 && probe.intake->total_frames == 0);
}

static void a_failing_device_is_told_from_the_end(void **state)
{
	struct block block;

	(void)state;
	const int writer = start_fifo(48000, 1, "S16");
	assert_int_equal(write(writer, feed_bytes, 20), 20);
	assert_int_equal(read_block(&block, 1000), 1);
	assert_int_equal(write(writer, feed_bytes, 20), 20);
	broken = true;
	assert_int_equal(read_block(&block, 1000), -EIO);
	broken = false;
	assert_int_equal(read_block(&block, 1000), -EIO);       /* until it is started again */
	assert_non_null(strstr(explanation(), "could not be read after 10 frames: Input/output error"));
	close(writer);
}

static void refuse(const char *path, int error, const char *said)
{
	configure(path, 48000, 1, "S16");
	assert_int_equal(probe_open(&probe), error);
	assert_non_null(strstr(probe.said, said));
	assert_non_null(strstr(probe.said, path));
	assert_ptr_equal(strchr(probe.said, '\n'), probe.said + strlen(probe.said) - 1);        /* one sentence */
}

static void what_cannot_be_a_pipe_is_said_in_one_sentence(void **state)
{
	char deep[120], path[256], here[256];

	(void)state;
	refuse(probe_path(&probe, "missing"), -ENOENT, "mkfifo makes a pipe");
	refuse(probe.folder, -EISDIR, "is a folder");

	/* A socket whose path does not fit: made from within its folder. */
	memset(deep, 'd', sizeof(deep));
	deep[sizeof(deep) - 1] = 0;
	assert_int_equal(mkdir(probe_path(&probe, deep), 0700), 0);
	assert_non_null(getcwd(here, sizeof(here)));
	assert_int_equal(chdir(probe_path(&probe, deep)), 0);
	const int listener = listen_at("s");
	assert_int_equal(chdir(here), 0);
	snprintf(path, sizeof(path), "%s/s", probe_path(&probe, deep));
	refuse(path, -ENAMETOOLONG, "107 bytes are allowed");
	close(listener);

	configure(make_fifo(), 48000, 1, "S16");
	probe_text(&probe, "start_utc", "2031-13-02T01:23:45Z");
	assert_int_equal(probe_open(&probe), -EINVAL);
	assert_non_null(strstr(probe.said, "start_utc: \"2031-13-02T01:23:45Z\""));

	/* Gone between open and start. */
	configure(make_fifo(), 48000, 1, "S16");
	assert_int_equal(probe_open(&probe), 0);
	unlink(probe_path(&probe, "fifo"));
	assert_int_equal(probe.driver->start(probe.intake), -ENOENT);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(a_fifo_waits_for_its_writer),
		cmocka_unit_test(a_frame_in_pieces_is_put_together),
		cmocka_unit_test(a_writer_that_stops_in_mid_frame_is_said),
		cmocka_unit_test(every_format_passes_unchanged),
		cmocka_unit_test(standard_input_is_a_dash),
		cmocka_unit_test(a_socket_is_connected_to),
		cmocka_unit_test(the_time_of_arrival_limits_the_stamp),
		cmocka_unit_test(a_slow_reader_holds_the_writer_back),
		cmocka_unit_test(a_plain_file_of_samples_knows_its_length),
		cmocka_unit_test(a_failing_device_is_told_from_the_end),
		cmocka_unit_test(what_cannot_be_a_pipe_is_said_in_one_sentence),
	};

	probe_create(&probe, &intake_pipe);
	const int failed = cmocka_run_group_tests_name("pipe", tests, NULL, NULL);
	probe_destroy(&probe);
	return failed;
}
