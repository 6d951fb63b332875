/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * What a frame costs on its way from the intake to the series: one line per case, nanoseconds of processor time per call
 * (median of the rounds, and the middle half of them) and per frame.  bench_ring CASE CALLS runs one case, counted from 0,
 * that often and prints nothing: for callgrind, which is to see two numbers of calls and take the difference.
 */
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>
#include "limbwatch/conditioner.h"
#include "limbwatch/ring.h"
#include "limbwatch/synthetic.h"

enum { ROUNDS = 31, FRAMES = 480, CALLS = 500 };        /* a call: 10 ms of 48 kHz */

struct bench {
	unsigned char frames[FRAMES * MAX_CHANNELS * 4];
	double number[FRAMES];
	float rough[FRAMES];
	struct ring *ring;
	struct ring_reader *reader;
	struct conditioner *conditioner;
	struct intake *intake;
	struct frame_format format;
	uint64_t next;
};

static void fail(const char *what)
{
	fprintf(stderr, "bench_ring: %s failed\n", what);
	exit(1);
}

static void write_ring(struct bench *b)
{
	ring_write(b->ring, b->frames, FRAMES, b->next);
	b->next += FRAMES;
}

static void write_and_read_ring(struct bench *b)
{
	static unsigned char copy[FRAMES * MAX_CHANNELS * 4];
	struct ring_news news;

	write_ring(b);
	if (ring_read(b->reader, copy, FRAMES, &news) != FRAMES)
		fail("ring_read");
}

static void convert_float(struct bench *b)
{
	frames_to_float(b->rough, b->frames, b->format, 0, FRAMES);
}

static void convert_double(struct bench *b)
{
	frames_to_double(b->number, b->frames, b->format, 0, FRAMES);
}

static void convert_back(struct bench *b)
{
	frames_from_double(b->frames, b->format, 0, b->number, FRAMES);
}

static void condition(struct bench *b)
{
	float out[FRAMES];
	uint64_t index;

	conditioner_execute(b->conditioner, b->frames, FRAMES, b->next, out, &index);
	b->next += FRAMES;
}

/* A call is a block of 4096 frames here. */
static void play(struct bench *b)
{
	struct block block;

	if (b->intake->driver->read(b->intake, &block, 0) != 1)
		fail("synthetic read");
}

static const struct bench_case {
	const char *name;
	struct frame_format format;
	void (*call)(struct bench *b);
	double frames;                  /* per call */
} cases[] = {
	{ "ring_write, S16 mono", { SAMPLE_S16, 1 }, write_ring, FRAMES },
	{ "ring_write, S24_3 stereo", { SAMPLE_S24_3, 2 }, write_ring, FRAMES },
	{ "ring_write, S32 8 channels", { SAMPLE_S32, 8 }, write_ring, FRAMES },
	{ "ring_write and ring_read, S24_3 stereo", { SAMPLE_S24_3, 2 }, write_and_read_ring, FRAMES },
	{ "frames_to_float, S16 mono", { SAMPLE_S16, 1 }, convert_float, FRAMES },
	{ "frames_to_float, S16 stereo", { SAMPLE_S16, 2 }, convert_float, FRAMES },
	{ "frames_to_float, S24_3 mono", { SAMPLE_S24_3, 1 }, convert_float, FRAMES },
	{ "frames_to_float, S24_3 stereo", { SAMPLE_S24_3, 2 }, convert_float, FRAMES },
	{ "frames_to_double, S24_3 stereo", { SAMPLE_S24_3, 2 }, convert_double, FRAMES },
	{ "frames_to_float, S32 stereo", { SAMPLE_S32, 2 }, convert_float, FRAMES },
	{ "frames_from_double, S24_3 stereo", { SAMPLE_S24_3, 2 }, convert_back, FRAMES },
	{ "conditioner, S24_3 stereo, 12 to 1", { SAMPLE_S24_3, 2 }, condition, FRAMES },
	{ "conditioner, S24_3 stereo, 48 to 1", { SAMPLE_S24_3, 2 }, condition, FRAMES },
	{ "synthetic, event and pulse", { SAMPLE_S24_3, 2 }, play, 4096 },
};
enum { CASES = sizeof(cases) / sizeof(*cases) };

static void set_value(struct setting_value *values, const char *name, double x)
{
	for (size_t k = 0; intake_synthetic.settings[k].name; k++)
		if (!strcmp(intake_synthetic.settings[k].name, name)) {
			values[k].number = x;
			values[k].integer = llround(x);
		}
}

static void prepare(struct bench *b, const struct bench_case *c)
{
	struct setting_value values[128];
	struct conditioner_settings settings = {
		.format = c->format, .measure = MEASURE_VOLTAGE, .polarity = 1,
		.decimation = strstr(c->name, "48 to 1") ? 48 : 12,
	};

	memset(b, 0, sizeof(*b));
	b->format = c->format;
	for (size_t k = 0; k < sizeof(b->frames); k++)
		b->frames[k] = (unsigned char)(k * 2654435761u >> 24);
	for (size_t k = 0; k < FRAMES; k++)
		b->number[k] = 0.9 * sin(0.1 * (double)k);
	settings_fallbacks(intake_synthetic.settings, values);
	set_value(values, "duration_s", 864000);
	set_value(values, "pulse", 1);
	if (ring_create(&b->ring, frame_bytes(c->format), 65536) < 0 || ring_reader_open(&b->reader, b->ring) < 0 ||
	    conditioner_create(&b->conditioner, &settings) < 0 || intake_synthetic.open(&b->intake, values) < 0)
		fail("prepare");
	intake_synthetic.start(b->intake);
}

static void clear(struct bench *b)
{
	ring_reader_close(b->reader);
	ring_destroy(b->ring);
	conditioner_destroy(b->conditioner);
	intake_synthetic.close(b->intake);
}

static double now_ns(void)
{
	struct timespec t;

	clock_gettime(CLOCK_THREAD_CPUTIME_ID, &t);
	return (double)t.tv_sec * 1e9 + (double)t.tv_nsec;
}

static int ascending(const void *a, const void *b)
{
	double x = *(const double *)a, y = *(const double *)b;

	return (x > y) - (x < y);
}

static void run(struct bench *b, const struct bench_case *c)
{
	int calls = c->frames > FRAMES ? CALLS / 20 : CALLS;
	double ns[ROUNDS];

	prepare(b, c);
	for (int round = 0; round < ROUNDS; round++) {
		double begin = now_ns();

		for (int k = 0; k < calls; k++)
			c->call(b);
		ns[round] = (now_ns() - begin) / calls;
	}
	clear(b);
	qsort(ns, ROUNDS, sizeof(*ns), ascending);
	printf("%-40s %9.0f ns a call (%.0f to %.0f), %.2f ns a frame, %.0f Mframes/s\n", c->name, ns[ROUNDS / 2],
	       ns[ROUNDS / 4], ns[3 * ROUNDS / 4], ns[ROUNDS / 2] / c->frames, 1e3 * c->frames / ns[ROUNDS / 2]);
}

int main(int argc, char **argv)
{
	static struct bench b;
	long one = argc > 1 ? strtol(argv[1], NULL, 10) : -1;

	if (one >= 0 && one < CASES) {
		int calls = argc > 2 ? (int)strtol(argv[2], NULL, 10) : 1;

		prepare(&b, &cases[one]);
		for (int k = 0; k < calls; k++)
			cases[one].call(&b);
		clear(&b);
		return 0;
	}
	for (size_t k = 0; k < CASES; k++)
		run(&b, &cases[k]);
	return 0;
}
