/* SPDX-License-Identifier: GPL-3.0-or-later */
/* Sequences of ECMA-48 (CUU, EL, ED) and the private mode 25 for the cursor, which every terminal knows. */
#include <signal.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/ioctl.h>
#include <unistd.h>
#include "../base/utf8.h"
#include "screen.h"

static const char hide_cursor[] = "\033[?25l", show_cursor[] = "\033[?25h";

static struct {
	bool in_place;
	int lines;                      /* of the block that stands there */
	volatile sig_atomic_t moved;    /* stopped and continued: the shell has written since */
	struct sigaction before;
} screen;

static void emit(const char *sequence)
{
	size_t size = strlen(sequence);

	if (write(STDOUT_FILENO, sequence, size) < 0)
		return;                 /* the terminal has gone: nothing to restore */
}

/* Ctrl-Z: the shell gets its cursor back while we are away. */
static void on_stop(int number)
{
	(void)number;
	emit(show_cursor);
	raise(SIGSTOP);
	emit(hide_cursor);
	screen.moved = 1;
}

void screen_open(void)
{
	const struct sigaction stop = { .sa_handler = on_stop, .sa_flags = SA_RESTART };
	const char *terminal = getenv("TERM");

	screen.in_place = isatty(STDOUT_FILENO) && terminal && *terminal && strcmp(terminal, "dumb");
	screen.lines = 0;
	if (!screen.in_place)
		return;
	sigaction(SIGTSTP, &stop, &screen.before);
	emit(hide_cursor);
}

bool screen_in_place(void)
{
	return screen.in_place;
}

/* One line, cut to the width. @return bytes of it in the text, with its newline */
static size_t put_line(const char *line, size_t columns)
{
	size_t size = strcspn(line, "\n"), shown = 0;

	while (shown < size && utf8_count(line, shown + 1) <= columns)
		shown++;
	fwrite(line, 1, shown, stdout);
	fputs("\033[K\n", stdout);
	return size + (line[size] == '\n');
}

void screen_paint(const char *text)
{
	struct winsize size = { .ws_row = 0 };
	int rows = 24;
	size_t columns = 80;

	if (!screen.in_place) {
		printf("%s%s", screen.lines ? "\n" : "", text);
		screen.lines = 1;
		fflush(stdout);
		return;
	}
	if (ioctl(STDOUT_FILENO, TIOCGWINSZ, &size) == 0 && size.ws_row > 1 && size.ws_col > 1) {
		rows = size.ws_row;
		columns = size.ws_col;
	}
	if (screen.moved)
		screen.lines = screen.moved = 0;
	if (screen.lines >= rows)
		screen.lines = rows - 1;        /* the window has shrunk */
	if (screen.lines)
		printf("\033[%dA\r", screen.lines);
	for (screen.lines = 0; *text && screen.lines < rows - 1; screen.lines++)
		text += put_line(text, columns);
	fputs("\033[J", stdout);
	fflush(stdout);
}

void screen_close(void)
{
	if (!screen.in_place)
		return;
	fflush(stdout);
	emit(show_cursor);
	sigaction(SIGTSTP, &screen.before, NULL);
	screen.in_place = false;
}
