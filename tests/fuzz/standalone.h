/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * Included at the end of a fuzz target, after LLVMFuzzerTestOneInput().  Without libFuzzer (-DLIBFUZZER) it gives the
 * target a main of its own:
 *
 *   fuzz_x FILE...                          runs each file once
 *   fuzz_x --mutate SEED COUNT FILE...      runs COUNT mutations of the files, the same ones for the same seed
 *   fuzz_x --show SEED NUMBER FILE...       writes one of them to standard output
 *
 * When an input crashes, its seed and number are on standard output already: the last line is it.  One that takes
 * longer than FUZZ_SECONDS ends the program with SIGALRM.
 */
#ifndef LIMBWATCH_FUZZ_STANDALONE_H
#define LIMBWATCH_FUZZ_STANDALONE_H
#ifndef LIBFUZZER

#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>

enum { FUZZ_SECONDS = 10, FUZZ_ROOM = 1 << 16, FUZZ_STEPS = 6 };

struct fuzz_input { uint8_t *data; size_t n; };

/* xorshift64*: Vigna (2016), ACM Trans. Math. Softw. 42, 30. */
static uint64_t fuzz_state;

static size_t fuzz_random(size_t below)
{
	fuzz_state ^= fuzz_state >> 12;
	fuzz_state ^= fuzz_state << 25;
	fuzz_state ^= fuzz_state >> 27;
	return below ? (size_t)((fuzz_state * 0x2545f4914f6cdd1d) >> 33) % below : 0;
}

static struct fuzz_input fuzz_read(const char *path)
{
	struct fuzz_input input = { malloc(FUZZ_ROOM), 0 };
	FILE *file = fopen(path, "rb");

	if (!file || !input.data) {
		perror(path);
		exit(2);
	}
	input.n = fread(input.data, 1, FUZZ_ROOM, file);
	fclose(file);
	return input;
}

/* Replaces `gone` bytes at `at` by the `n` bytes of `with`, cut to the room there is. */
static void fuzz_replace(struct fuzz_input *x, size_t at, size_t gone, const void *with, size_t n)
{
	gone = gone < x->n - at ? gone : x->n - at;
	n = n < FUZZ_ROOM - (x->n - gone) ? n : FUZZ_ROOM - (x->n - gone);
	memmove(x->data + at + n, x->data + at + gone, x->n - at - gone);
	memcpy(x->data + at, with, n);
	x->n += n - gone;
}

/* Puts an extreme in the place of a number, at or behind a random place. */
static void fuzz_number(struct fuzz_input *x)
{
	static const char *const extreme[] = {
		"0", "-1", "1e999", "-1e999", "1e-999", "nan", "-0.0", "2147483648", "-2147483649", "0x7fffffffffffffffL",
		"9223372036854775808", "99999999999999999999999999", "018", "1.7976931348623157e308", "4294967295", "",
	};
	const char *with = extreme[fuzz_random(sizeof(extreme) / sizeof(extreme[0]))];
	size_t at = fuzz_random(x->n), end;

	while (at < x->n && (x->data[at] < '0' || x->data[at] > '9'))
		at++;
	for (end = at; end < x->n && x->data[end] && strchr("0123456789.eE+-x", x->data[end]); end++)
		;
	if (at < x->n)
		fuzz_replace(x, at, end - at, with, strlen(with));
}

static void fuzz_mutate(struct fuzz_input *x, const struct fuzz_input *corpus, size_t count)
{
	static const char punctuation[] = "{}()[];=:,\"\\#/*.\n\t\0@\xff";
	const struct fuzz_input *other = &corpus[fuzz_random(count)];
	size_t at = fuzz_random(x->n), from;
	uint8_t byte = (uint8_t)fuzz_random(256);
	uint8_t piece[64];

	switch (x->n ? fuzz_random(7) : 2) {
	case 0:                                 /* flip a bit */
		x->data[at] ^= (uint8_t)(1u << fuzz_random(8));
		break;
	case 1:                                 /* lose some bytes */
		fuzz_replace(x, at, 1 + fuzz_random(fuzz_random(4) ? 4 : 256), "", 0);
		break;
	case 2:                                 /* a byte more */
		fuzz_replace(x, at, 0, &byte, 1);
		break;
	case 3:                                 /* punctuation of the grammar more */
		fuzz_replace(x, at, fuzz_random(2), &punctuation[fuzz_random(sizeof(punctuation) - 1)], 1);
		break;
	case 4:                                 /* a piece of it again */
		from = fuzz_random(x->n);
		byte = (uint8_t)(x->n - from < sizeof(piece) ? x->n - from : sizeof(piece));
		memcpy(piece, x->data + from, byte);
		fuzz_replace(x, at, 0, piece, byte);
		break;
	case 5:                                 /* splice: goes on as another one */
		from = fuzz_random(other->n);
		fuzz_replace(x, at, x->n, other->data + from, other->n - from);
		break;
	default:
		fuzz_number(x);
	}
}

/* An exact copy on the heap lets the address sanitizer see the first byte read too far. */
static void fuzz_run(const uint8_t *data, size_t n)
{
	uint8_t *copy = malloc(n ? n : 1);

	if (!copy)
		exit(2);
	memcpy(copy, data, n);
	alarm(FUZZ_SECONDS);
	LLVMFuzzerTestOneInput(copy, n);
	alarm(0);
	free(copy);
}

/* Mutation `number` depends on the seed, the number and the files alone. */
static void fuzz_make(struct fuzz_input *x, uint64_t seed, size_t number, const struct fuzz_input *corpus, size_t files)
{
	const struct fuzz_input *base;

	fuzz_state = (seed * 0x9e3779b97f4a7c15 + number * 0xbf58476d1ce4e5b9) | 1;
	base = &corpus[fuzz_random(files)];
	memcpy(x->data, base->data, base->n);
	x->n = base->n;
	for (size_t steps = 1 + fuzz_random(FUZZ_STEPS); steps > 0; steps--)
		fuzz_mutate(x, corpus, files);
}

static void fuzz_run_mutations(uint64_t seed, size_t count, const struct fuzz_input *corpus, size_t files)
{
	struct fuzz_input x = { malloc(FUZZ_ROOM), 0 };

	if (!x.data)
		exit(2);
	for (size_t k = 0; k < count; k++) {
		fuzz_make(&x, seed, k, corpus, files);
		printf("\rseed %llu mutation %zu", (unsigned long long)seed, k);
		fflush(stdout);
		fuzz_run(x.data, x.n);
	}
	printf("\n");
	free(x.data);
}

static void fuzz_show(uint64_t seed, size_t number, const struct fuzz_input *corpus, size_t files)
{
	struct fuzz_input x = { malloc(FUZZ_ROOM), 0 };

	if (!x.data)
		exit(2);
	fuzz_make(&x, seed, number, corpus, files);
	fwrite(x.data, 1, x.n, stdout);
	free(x.data);
}

int main(int argc, char **argv)
{
	int mutate = argc > 4 && strcmp(argv[1], "--mutate") == 0;
	int show = argc > 4 && strcmp(argv[1], "--show") == 0;
	int first = mutate || show ? 4 : 1;
	size_t files = argc > first ? (size_t)(argc - first) : 0;
	struct fuzz_input *corpus = calloc(files ? files : 1, sizeof(*corpus));

	if (!files || !corpus) {
		fprintf(stderr, "usage: %s [--mutate SEED COUNT | --show SEED NUMBER] FILE...\n", argv[0]);
		return 2;
	}
	for (size_t i = 0; i < files; i++)
		corpus[i] = fuzz_read(argv[first + (int)i]);
	for (size_t i = 0; i < files && !mutate && !show; i++)
		fuzz_run(corpus[i].data, corpus[i].n);
	if (mutate)
		fuzz_run_mutations(strtoull(argv[2], NULL, 10), strtoull(argv[3], NULL, 10), corpus, files);
	if (show)
		fuzz_show(strtoull(argv[2], NULL, 10), strtoull(argv[3], NULL, 10), corpus, files);
	for (size_t i = 0; i < files; i++)
		free(corpus[i].data);
	free(corpus);
	return 0;
}

#endif
#endif
