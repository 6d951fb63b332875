/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <pthread.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <stdint.h>
#include <stdio.h>
#include <string.h>
#include <sys/socket.h>
#include <unistd.h>
#include <cmocka.h>

#include "limbwatch/contact.h"
#include "limbwatch/log.h"

enum { THREADS = 4, SENTENCES = 300 };

/* A datagram socket as stderr: each write(2) arrives as one message, so they can be counted. */
struct capture { int saved, end[2]; };

static void capture_start(struct capture *capture)
{
	assert_int_equal(socketpair(AF_UNIX, SOCK_DGRAM, 0, capture->end), 0);
	fflush(stderr);
	capture->saved = dup(STDERR_FILENO);
	assert_true(capture->saved >= 0);
	assert_true(dup2(capture->end[0], STDERR_FILENO) >= 0);
}

/* One message as text; "" when there is none. */
static const char *capture_take(struct capture *capture, char *line, size_t room)
{
	ssize_t n = recv(capture->end[1], line, room - 1, MSG_DONTWAIT);

	line[n > 0 ? n : 0] = '\0';
	return line;
}

static void capture_stop(struct capture *capture)
{
	dup2(capture->saved, STDERR_FILENO);
	close(capture->saved);
	close(capture->end[0]);
	close(capture->end[1]);
	log_open("limbwatch", LEVEL_NOTICE);
}

static void each_level_has_its_word_and_one_write(void **state)
{
	struct capture capture;
	char line[8192];

	(void)state;
	capture_start(&capture);
	log_open("limbwatchd", LEVEL_DETAIL);
	log_error("%s is %d", "a", 1);
	log_warning("the dome is shut");
	log_notice("vigil opens");
	log_detail("block of %zu frames", (size_t)960);
	assert_string_equal(capture_take(&capture, line, sizeof(line)), "limbwatchd: error: a is 1\n");
	assert_string_equal(capture_take(&capture, line, sizeof(line)), "limbwatchd: warning: the dome is shut\n");
	assert_string_equal(capture_take(&capture, line, sizeof(line)), "limbwatchd: vigil opens\n");
	assert_string_equal(capture_take(&capture, line, sizeof(line)), "limbwatchd: block of 960 frames\n");
	assert_string_equal(capture_take(&capture, line, sizeof(line)), "");
	capture_stop(&capture);
}

static void less_important_levels_are_not_shown(void **state)
{
	struct capture capture;
	char line[8192];

	(void)state;
	capture_start(&capture);
	log_open("limbwatch", LEVEL_WARNING);
	log_notice("unseen");
	log_detail("unseen");
	assert_string_equal(capture_take(&capture, line, sizeof(line)), "");
	log_warning("seen");
	assert_string_equal(capture_take(&capture, line, sizeof(line)), "limbwatch: warning: seen\n");
	capture_stop(&capture);
}

static void hostile_names_cannot_forge_lines(void **state)
{
	static const struct { const char *name, *shown; } cases[] = {
		{ "a\nlimbwatchd: error: forged", "a?limbwatchd: error: forged" },
		{ "tab\there\r", "tab?here?" },
		{ "\033[31mred\033[0m", "?[31mred?[0m" },
		{ "del\177", "del?" },
		{ "c1 \xc2\x9b" "31m", "c1 ??31m" },            /* U+009B, one-byte CSI of some terminals */
		{ "\xc3\xa9toile \xce\xbb \xf0\x9f\x8c\x99", "\xc3\xa9toile \xce\xbb \xf0\x9f\x8c\x99" },
		{ "latin \xe9toile", "latin ?toile" },
		{ "overlong \xc0\xaf", "overlong ??" },
		{ "surrogate \xed\xa0\x80", "surrogate ???" },
		{ "cut \xe2\x82", "cut ??" },
	};
	struct capture capture;
	char line[8192], expected[256];

	(void)state;
	capture_start(&capture);
	for (size_t i = 0; i < sizeof(cases) / sizeof(cases[0]); i++) {
		log_error("%s: not found", cases[i].name);
		snprintf(expected, sizeof(expected), "limbwatch: error: %s: not found\n", cases[i].shown);
		assert_string_equal(capture_take(&capture, line, sizeof(line)), expected);
	}
	capture_stop(&capture);
}

static void long_sentence_is_cut_visibly_and_stays_one_write(void **state)
{
	struct capture capture;
	char text[10000], line[16384];

	(void)state;
	memset(text, 'x', sizeof(text) - 1);
	text[sizeof(text) - 1] = '\0';
	capture_start(&capture);
	log_error("%s", text);
	capture_take(&capture, line, sizeof(line));
	assert_true(strlen(line) > 4000 && strlen(line) <= 4096);       /* PIPE_BUF */
	assert_string_equal(line + strlen(line) - 5, "x...\n");
	assert_string_equal(capture_take(&capture, line, sizeof(line)), "");
	capture_stop(&capture);
}

static void errno_survives(void **state)
{
	struct capture capture;

	(void)state;
	capture_start(&capture);
	close(capture.end[1]);                  /* the write itself fails */
	capture.end[1] = dup(capture.end[0]);
	errno = ENOSPC;
	log_error("disk: %s", strerror(errno));
	assert_int_equal(errno, ENOSPC);
	capture_stop(&capture);
}

struct heard { enum log_level level; char sentence[128]; unsigned count; };

static void hear(void *context, enum log_level level, const char *sentence)
{
	struct heard *heard = context;

	heard->level = level;
	heard->count++;
	snprintf(heard->sentence, sizeof(heard->sentence), "%s", sentence);
}

static void sink_takes_all_levels_without_program_name(void **state)
{
	struct capture capture;
	struct heard heard = { .count = 0 };
	char line[256];

	(void)state;
	capture_start(&capture);
	log_open("limbwatch", LEVEL_ERROR);
	log_set_sink(hear, &heard);
	log_detail("detail %d\n", 7);
	assert_int_equal(heard.level, LEVEL_DETAIL);
	assert_string_equal(heard.sentence, "detail 7?");
	log_error("error");
	assert_int_equal(heard.level, LEVEL_ERROR);
	assert_int_equal(heard.count, 2);
	assert_string_equal(capture_take(&capture, line, sizeof(line)), "");
	log_set_sink(NULL, NULL);
	log_error("back");
	assert_string_equal(capture_take(&capture, line, sizeof(line)), "limbwatch: error: back\n");
	capture_stop(&capture);
}

static void *say_many(void *argument)
{
	char text[200];

	memset(text, 'a' + (int)(intptr_t)argument, sizeof(text) - 1);
	text[sizeof(text) - 1] = '\0';
	for (int i = 0; i < SENTENCES; i++)
		log_notice("%s", text);
	return NULL;
}

/* A pipe this time: the kernel keeps writes up to PIPE_BUF whole there (pipe(7)). */
static void threads_do_not_mix_their_lines(void **state)
{
	pthread_t thread[THREADS];
	char line[512];
	int saved = dup(STDERR_FILENO), end[2], lines = 0;
	FILE *reader;

	(void)state;
	assert_int_equal(pipe(end), 0);
	dup2(end[1], STDERR_FILENO);
	close(end[1]);
	for (intptr_t i = 0; i < THREADS; i++)
		assert_int_equal(pthread_create(&thread[i], NULL, say_many, (void *)i), 0);
	reader = fdopen(end[0], "r");
	for (; lines < THREADS * SENTENCES && fgets(line, sizeof(line), reader); lines++) {
		const char *text = line + strlen("limbwatch: ");

		assert_int_equal(strlen(line), strlen("limbwatch: ") + 200);
		assert_memory_equal(line, "limbwatch: ", strlen("limbwatch: "));
		assert_int_equal(strspn(text, (char[]){ text[0], '\0' }), 199);
	}
	for (int i = 0; i < THREADS; i++)
		pthread_join(thread[i], NULL);
	dup2(saved, STDERR_FILENO);
	close(saved);
	fclose(reader);
	assert_int_equal(lines, THREADS * SENTENCES);
}

static void contacts_and_verdicts_have_their_names(void **state)
{
	(void)state;
	assert_string_equal(contact_kind_name(CONTACT_IMMERSION), "immersion");
	assert_string_equal(contact_kind_name(CONTACT_EMERSION), "emersion");
	assert_string_equal(verdict_name(VERDICT_STEP), "step-like");
	assert_string_equal(verdict_name(VERDICT_FRINGES), "fringes confirmed");
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test(each_level_has_its_word_and_one_write),
		cmocka_unit_test(less_important_levels_are_not_shown),
		cmocka_unit_test(hostile_names_cannot_forge_lines),
		cmocka_unit_test(long_sentence_is_cut_visibly_and_stays_one_write),
		cmocka_unit_test(errno_survives),
		cmocka_unit_test(sink_takes_all_levels_without_program_name),
		cmocka_unit_test(threads_do_not_mix_their_lines),
		cmocka_unit_test(contacts_and_verdicts_have_their_names),
	};

	return cmocka_run_group_tests(tests, NULL, NULL);
}
