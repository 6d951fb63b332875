/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/socket.h>
#include <sys/un.h>
#include <unistd.h>
#include <cmocka.h>
#include "../daemon/watch/state.h"
#include "support/folder.h"

static char path[96];

static int connect_reader(void)
{
	struct sockaddr_un address = { .sun_family = AF_UNIX };
	int fd = socket(AF_UNIX, SOCK_STREAM | SOCK_NONBLOCK, 0);

	memcpy(address.sun_path, path, strlen(path) + 1);
	assert_int_equal(connect(fd, (struct sockaddr *)&address, sizeof(address)), 0);
	return fd;
}

static struct state *open_state(void)
{
	struct state *state;

	snprintf(path, sizeof(path), "%s/state.sock", folder);
	assert_int_equal(state_open(&state, path), 0);
	return state;
}

static size_t read_all(int fd, char *text, size_t size)
{
	size_t used = 0;
	ssize_t n;

	while (used < size - 1 && (n = recv(fd, text + used, size - 1 - used, MSG_DONTWAIT)) > 0)
		used += (size_t)n;
	text[used] = 0;
	return used;
}

static void a_later_reader_gets_the_newest_of_each_kind(void **unused)
{
	struct state *state = open_state();
	char text[256];
	int fd;

	(void)unused;
	state_publish(state, "a", "{\"a\":1}");
	state_publish(state, "b", "{\"b\":1}");
	state_publish(state, NULL, "{\"gone\":1}");
	state_publish(state, "a", "{\"a\":2}");
	fd = connect_reader();
	state_poll(state);
	state_publish(state, NULL, "{\"now\":1}");
	state_poll(state);
	read_all(fd, text, sizeof(text));
	assert_string_equal(text, "{\"a\":2}\n{\"b\":1}\n{\"now\":1}\n");
	close(fd);
	state_close(state);
	assert_int_equal(access(path, F_OK), -1);
}

/* Fills socket and backlog of a reader that does not read, then reads: whole lines, and how many were missed. */
static void a_slow_reader_is_told_what_it_missed(void **unused)
{
	enum { LINES = 4000, WIDTH = 1000, ROOM = LINES * (WIDTH + 1) };
	struct state *state = open_state();
	char line[WIDTH + 1], *text = malloc(ROOM);
	unsigned whole = 0, missed = 0;
	int fd = connect_reader();

	(void)unused;
	memset(line, 'x', WIDTH);
	line[WIDTH] = 0;
	state_poll(state);
	for (int k = 0; k < LINES; k++) {
		state_publish(state, NULL, line);
		state_poll(state);
	}
	size_t used = 0, n;
	while ((n = read_all(fd, text + used, ROOM - used)) > 0) {
		used += n;
		state_poll(state);
	}
	state_publish(state, NULL, "{\"end\":1}");
	state_poll(state);
	read_all(fd, text + used, ROOM - used);
	for (char *at = strtok(text, "\n"); at; at = strtok(NULL, "\n")) {
		if (*at == 'x') {
			assert_int_equal(strlen(at), WIDTH);
			whole++;
		} else {
			sscanf(at, "{\"what\":\"missed\",\"lines\":%u}", &missed);
		}
	}
	assert_int_equal(whole + missed, LINES);
	assert_true(missed > 1000);
	free(text);
	close(fd);
	state_close(state);
}

static void whoever_reads_no_more_gives_the_place_to_the_next(void **unused)
{
	enum { PLACES = 16 };
	struct state *state = open_state();
	char line[1001], text[64];
	int fd[PLACES], late;

	(void)unused;
	memset(line, 'x', sizeof(line) - 1);
	line[sizeof(line) - 1] = 0;
	for (int k = 0; k < PLACES; k++)
		fd[k] = connect_reader();
	state_poll(state);
	assert_int_equal(state_readers(state), PLACES);
	late = connect_reader();
	state_poll(state);
	read_all(late, text, sizeof(text));
	assert_string_equal(text, "{\"what\":\"full\"}\n");
	close(late);
	for (int k = 0; k < 4000; k++) {
		state_publish(state, NULL, line);
		state_poll(state);
	}
	late = connect_reader();
	state_poll(state);
	state_publish(state, NULL, "{\"now\":1}");
	state_poll(state);
	read_all(late, text, sizeof(text));
	assert_string_equal(text, "{\"now\":1}\n");
	assert_int_equal(state_readers(state), PLACES);
	for (int k = 0; k < PLACES; k++)
		close(fd[k]);
	close(late);
	state_publish(state, NULL, "{}");
	state_poll(state);
	assert_int_equal(state_readers(state), 0);
	state_close(state);
}

static void a_living_recorders_socket_is_not_taken(void **unused)
{
	struct state *first = open_state(), *second;

	(void)unused;
	assert_int_equal(state_open(&second, path), -EADDRINUSE);
	state_close(first);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test_setup_teardown(a_later_reader_gets_the_newest_of_each_kind, folder_make, folder_remove),
		cmocka_unit_test_setup_teardown(a_slow_reader_is_told_what_it_missed, folder_make, folder_remove),
		cmocka_unit_test_setup_teardown(whoever_reads_no_more_gives_the_place_to_the_next, folder_make, folder_remove),
		cmocka_unit_test_setup_teardown(a_living_recorders_socket_is_not_taken, folder_make, folder_remove),
	};

	return cmocka_run_group_tests_name("state", tests, NULL, NULL);
}
