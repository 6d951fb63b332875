/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <alsa/asoundlib.h>
#include <cmocka.h>
#include <errno.h>
#include <fcntl.h>
#include <poll.h>
#include <signal.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/prctl.h>
#include <sys/socket.h>
#include <sys/un.h>
#include <sys/wait.h>
#include <time.h>
#include <unistd.h>
#include "support/intake_probe.h"

/* The alsa intake at a device that keeps real time: PulseAudio's null sink, with a server of our own. */

static struct probe probe;
static pid_t server;

/* libpulse is not built for ThreadSanitizer, which sees its own thread start without seeing how it is kept apart. */
const char *__tsan_default_suppressions(void);
const char *__tsan_default_suppressions(void)
{
	return "race:libpulse\n";
}

static double now_s(void)
{
	struct timespec now;

	clock_gettime(CLOCK_MONOTONIC, &now);
	return (double)now.tv_sec + (double)now.tv_nsec * 1e-9;
}

static bool answers(const char *path)
{
	struct sockaddr_un address = { .sun_family = AF_UNIX };
	const int fd = socket(AF_UNIX, SOCK_STREAM, 0);

	snprintf(address.sun_path, sizeof(address.sun_path), "%s", path);
	const bool yes = connect(fd, (struct sockaddr *)&address, sizeof(address)) == 0;
	close(fd);
	return yes;
}

static int start_server(void **state)
{
	char script[512], address[300];
	const char *socket_path = probe_path(&probe, "socket");

	(void)state;
	snprintf(script, sizeof(script), "load-module module-null-sink sink_name=card rate=48000 channels=2\n"
		"load-module module-native-protocol-unix socket=%s auth-anonymous=1\n", socket_path);
	const char *script_path = probe_file(&probe, "server.pa", script, strlen(script));
	snprintf(address, sizeof(address), "unix:%s", socket_path);
	setenv("LIMBWATCH_PULSE", address, 1);
	setenv("HOME", probe.folder, 1);
	setenv("XDG_RUNTIME_DIR", probe.folder, 1);
	server = fork();
	if (server == 0) {
		prctl(PR_SET_PDEATHSIG, SIGKILL);
		const int nothing = open("/dev/null", O_RDWR);
		dup2(nothing, STDOUT_FILENO);
		dup2(nothing, STDERR_FILENO);
		execlp("pulseaudio", "pulseaudio", "-n", "--daemonize=no", "--exit-idle-time=-1", "--use-pid-file=no",
			"--disable-shm=yes", "-F", script_path, (char *)NULL);
		_exit(127);
	}
	for (const double end = now_s() + 20; !answers(socket_path);) {
		assert_true(now_s() < end);
		poll(NULL, 0, 10);
	}
	return 0;
}

static void stop_server(void)
{
	if (server <= 0)
		return;
	kill(server, SIGKILL);
	waitpid(server, NULL, 0);
	server = 0;
}

static void configure(void)
{
	probe_reset(&probe);
	probe_text(&probe, "device", "paced");
	probe_text(&probe, "format", "S16");
	probe_number(&probe, "rate_hz", 48000);
	probe_number(&probe, "channels", 2);
}

static void samples_come_at_the_devices_pace_with_late_stamps(void **state)
{
	enum { FRAMES = 48000 };
	static int16_t raw[2 * FRAMES];
	struct block block;
	uint64_t next = 0;

	(void)state;
	for (int k = 0; k < 2 * FRAMES; k++)
		raw[k] = (int16_t)(k * 7919);
	setenv("LIMBWATCH_RAW", probe_file(&probe, "raw", raw, sizeof(raw)), 1);
	configure();
	assert_int_equal(probe_open(&probe), 0);
	assert_true(probe.intake->real_time);
	const double begin = now_s();
	assert_int_equal(probe.driver->start(probe.intake), 0);
	while (next < FRAMES) {
		const int ret = probe.driver->read(probe.intake, &block, 100);
		assert_true(ret >= 0 && now_s() < begin + 20);
		if (ret == 0)
			continue;
		assert_int_equal(block.flags, BLOCK_STAMP_LATE);
		assert_int_equal(block.first, next);
		assert_true((double)block.host_ns * 1e-9 <= now_s());
		const size_t rest = FRAMES - next, count = block.count < rest ? block.count : rest;
		assert_memory_equal(block.frames, raw + 2 * next, count * 4);
		next += block.count;
	}
	/* The server may have had up to a buffer of silence ready; it never runs ahead of time by more. */
	assert_true(now_s() - begin >= 1 - 0.55);
}

static void a_server_that_dies_ends_the_reading(void **state)
{
	struct block block;
	int ret = 0;

	(void)state;
	configure();
	assert_int_equal(probe_open(&probe), 0);
	assert_int_equal(probe.driver->start(probe.intake), 0);
	const double begin = now_s();
	while (ret == 0 && now_s() < begin + 20)
		ret = probe.driver->read(probe.intake, &block, 100);
	assert_int_equal(ret, 1);
	stop_server();
	const double killed = now_s();
	while (ret >= 0 && now_s() < killed + 10)
		ret = probe.driver->read(probe.intake, &block, 100);
	assert_true(ret < 0);
	probe.driver->stop(probe.intake);
	probe.driver->explain(probe.intake, probe.explanation, sizeof(probe.explanation));
	assert_non_null(strstr(probe.explanation, "\"paced\""));
	assert_non_null(strstr(probe.explanation, " frames: "));
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(samples_come_at_the_devices_pace_with_late_stamps),
		cmocka_unit_test(a_server_that_dies_ends_the_reading),
	};

	setenv("ALSA_CONFIG_PATH", "tests/data/alsa/pulse.conf", 1);
	probe_create(&probe, &intake_alsa);
	const int failed = cmocka_run_group_tests_name("alsa_paced", tests, start_server, NULL);
	stop_server();
	probe_destroy(&probe);
	snd_config_update_free_global();
	return failed;
}
