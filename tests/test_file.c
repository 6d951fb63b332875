/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <setjmp.h>
#include <stdarg.h>
#include <stddef.h>
#include <errno.h>
#include <cmocka.h>
#include <math.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <sys/syscall.h>
#include <unistd.h>
#include "support/intake_probe.h"

static struct probe probe;

/* Stands before the C library's for libsndfile too: a disk that fails once the allowance is used up. */
static size_t allowance = SIZE_MAX;

ssize_t read(int fd, void *buffer, size_t size)
{
	if (allowance < size) {
		errno = EIO;
		return -1;
	}
	if (allowance != SIZE_MAX)
		allowance -= size;
	return syscall(SYS_read, fd, buffer, size);
}

/* Files made by hand: RIFF with fmt and data (EBU Tech 3285), so that nothing of libsndfile is on both sides. */
struct draft {
	unsigned char bytes[65536];
	size_t size;
};

static void put(struct draft *draft, const void *bytes, size_t size)
{
	assert_true(draft->size + size <= sizeof(draft->bytes));
	memcpy(draft->bytes + draft->size, bytes, size);
	draft->size += size;
}

static void put_number(struct draft *draft, uint64_t number, size_t size)
{
	put(draft, &number, size);      /* little-endian, as the machines we run on */
}

enum { WAVE_PCM = 1, WAVE_FLOAT = 3 };

static void put_wave_head(struct draft *draft, int tag, unsigned channels, unsigned rate, unsigned bits)
{
	put(draft, "RIFF", 4);
	put_number(draft, UINT32_MAX, 4);       /* set by put_data() */
	put(draft, "WAVE", 4);
	put(draft, "fmt ", 4);
	put_number(draft, 16, 4);
	put_number(draft, (unsigned)tag, 2);
	put_number(draft, channels, 2);
	put_number(draft, rate, 4);
	put_number(draft, rate * channels * bits / 8, 4);
	put_number(draft, channels * bits / 8, 2);
	put_number(draft, bits, 2);
}

static void put_data(struct draft *draft, const void *samples, size_t size)
{
	put(draft, "data", 4);
	put_number(draft, size, 4);
	put(draft, samples, size);
	const uint32_t riff = (uint32_t)(draft->size - 8);
	memcpy(draft->bytes + 4, &riff, 4);
}

/* OriginationDate stands at byte 320 of the chunk, OriginationTime at 330, TimeReference at 338: EBU Tech 3285. */
static void put_bext(struct draft *draft, const char *date, const char *time, uint64_t reference)
{
	unsigned char chunk[602] = "an invented recording";

	memcpy(chunk + 256, "Brackenfold", 11);
	memcpy(chunk + 320, date, strlen(date));
	memcpy(chunk + 330, time, strlen(time));
	memcpy(chunk + 338, &reference, 8);
	chunk[346] = 1;
	put(draft, "bext", 4);
	put_number(draft, sizeof(chunk), 4);
	put(draft, chunk, sizeof(chunk));
}

static const char *wave_file(int tag, unsigned channels, unsigned rate, unsigned bits, const void *samples,
			     size_t size)
{
	static struct draft draft;

	draft.size = 0;
	put_wave_head(&draft, tag, channels, rate, bits);
	put_data(&draft, samples, size);
	return probe_file(&probe, "made.wav", draft.bytes, draft.size);
}

static void random_bytes(unsigned char *bytes, size_t size, uint64_t seed)
{
	for (size_t k = 0; k < size; k++) {
		seed = seed * 6364136223846793005u + 1442695040888963407u;      /* Knuth, MMIX */
		bytes[k] = (unsigned char)(seed >> 56);
	}
}

static void run_path(const char *path)
{
	probe_text(&probe, "path", path);
	probe_run(&probe, SIZE_MAX);
}

static void whole_bytes_arrive_as_they_are(void **state)
{
	static const struct { int tag; unsigned bits; enum sample_type type; } cases[] = {
		{ WAVE_PCM, 16, SAMPLE_S16 }, { WAVE_PCM, 24, SAMPLE_S24_3 }, { WAVE_PCM, 32, SAMPLE_S32 },
		{ WAVE_FLOAT, 32, SAMPLE_F32 },
	};
	unsigned char samples[3 * 4 * 3001];

	(void)state;
	print_message("seed 7101\n");
	random_bytes(samples, sizeof(samples), 7101);
	for (unsigned channels = 1; channels <= 3; channels += 2)
		for (size_t k = 0; k < sizeof(cases) / sizeof(cases[0]); k++) {
			const size_t frame = channels * cases[k].bits / 8;
			probe_reset(&probe);
			run_path(wave_file(cases[k].tag, channels, 48000, cases[k].bits, samples, 3001 * frame));
			assert_int_equal(probe.last, -ENODATA);
			assert_int_equal(probe.intake->format.type, cases[k].type);
			assert_int_equal(probe.intake->format.channels, channels);
			assert_true(probe.intake->rate == 48000 && !probe.intake->real_time);
			assert_int_equal(probe.intake->total_frames, 3001);
			assert_int_equal(probe.frames, 3001);
			assert_memory_equal(probe.bytes, samples, 3001 * frame);        /* random floats hold NaN too */
			assert_string_equal(probe.explanation, "");
			assert_int_equal(probe.intake->origin.quality, TIME_FREE);
		}
}

static void eight_bits_become_the_upper_byte(void **state)
{
	unsigned char samples[256];
	const int16_t *out;

	(void)state;
	for (int k = 0; k < 256; k++)
		samples[k] = (unsigned char)k;
	run_path(wave_file(WAVE_PCM, 1, 8000, 8, samples, sizeof(samples)));
	out = (const int16_t *)probe.bytes;
	assert_int_equal(probe.intake->format.type, SAMPLE_S16);
	for (int k = 0; k < 256; k++)
		assert_int_equal(out[k], (k - 128) * 256);
}

static void doubles_become_floats_and_nan_stays(void **state)
{
	const double samples[] = { 0.1, -3.5, NAN, INFINITY, 1e-300, 12345.678 };
	const float *out;

	(void)state;
	run_path(wave_file(WAVE_FLOAT, 2, 250, 64, samples, sizeof(samples)));
	out = (const float *)probe.bytes;
	assert_int_equal(probe.intake->format.type, SAMPLE_F32);
	assert_int_equal(probe.frames, 3);
	for (int k = 0; k < 6; k++)
		assert_true(isnan(samples[k]) ? isnan(out[k]) : out[k] == (float)samples[k]);
}

/* sox decodes FLAC and AIFF by its own means. */
static void sox_decodes_the_same_bytes(void **state)
{
	static const struct { const char *name; int bits; enum sample_type type; } cases[] = {
		{ "a.flac", 16, SAMPLE_S16 }, { "b.flac", 24, SAMPLE_S24_3 }, { "c.aiff", 24, SAMPLE_S24_3 },
		{ "d.aiff", 16, SAMPLE_S16 }, { "e.au", 32, SAMPLE_S32 },
	};
	static unsigned char raw[4 * 2 * 9600];
	char command[512];

	(void)state;
	for (size_t k = 0; k < sizeof(cases) / sizeof(cases[0]); k++) {
		const char *path = probe_path(&probe, cases[k].name);
		probe_reset(&probe);
		snprintf(command, sizeof(command), "sox -R -n -r 96000 -b %d -c 2 %s synth 0.1 sine 440 whitenoise vol 0.5",
			cases[k].bits, path);
		assert_int_equal(system(command), 0);
		run_path(path);
		assert_int_equal(probe.intake->format.type, cases[k].type);
		assert_int_equal(probe.frames, 9600);
		snprintf(command, sizeof(command), "sox -D %s -t raw -e signed -b %d -L -", path, cases[k].bits);
		FILE *stream = popen(command, "r");
		const size_t size = 9600u * 2 * (size_t)cases[k].bits / 8;
		assert_int_equal(fread(raw, 1, size, stream), size);
		assert_int_equal(pclose(stream), 0);
		assert_memory_equal(probe.bytes, raw, size);
	}
}

static void lossy_files_come_as_floats(void **state)
{
	char command[512];
	double power = 0;

	(void)state;
	const char *path = probe_path(&probe, "tone.ogg");
	snprintf(command, sizeof(command), "sox -R -n -r 48000 -c 1 %s synth 1 sine 440 vol 0.5", path);
	assert_int_equal(system(command), 0);
	run_path(path);
	assert_int_equal(probe.intake->format.type, SAMPLE_F32);
	assert_int_equal(probe.frames, 48000);
	for (size_t k = 0; k < probe.frames; k++)
		power += pow(((const float *)probe.bytes)[k], 2) / 48000;
	assert_true(fabs(power - 0.125) < 0.004);       /* amplitude 0.5; 3% for the coder */
}

static void a_bext_chunk_dates_the_first_frame(void **state)
{
	static const double other = 0.5773502691896258;         /* hypot(0.5, 1/sqrt(12)) */
	static const char start[] = "2031-04-01T00:00:00.000000Z";
	static const struct {
		const char *date, *time;
		double reference_s;
		unsigned rate;
		const char *utc;
		double sigma_s;
		const char *source, *said;
	} cases[] = {
		{ "2031-04-02", "01:23:45", 5025.25, 48000, "2031-04-02T01:23:45.250000Z", 0.5, "bext", "" },
		{ "2031_04.02", "01-23 45", 5025.25, 8000, "2031-04-02T01:23:45.250000Z", 0.5, "bext", "" },
		{ "2031-04-02", "23:59:59", 0.3, 10000, "2031-04-03T00:00:00.300000Z", 0.5, "bext", "" },
		{ "2031-04-03", "00:00:00", 86399.9, 10000, "2031-04-02T23:59:59.900000Z", 0.5, "bext", "" },
		/* More than 32 bits of samples. */
		{ "2031-04-02", "22:13:20", 80000.125, 10000000, "2031-04-02T22:13:20.125000Z", 0.5, "bext", "" },
		/* The leap second of 2016: IERS Bulletin C 52. */
		{ "2016-12-31", "23:59:60", 86400.5, 48000, "2016-12-31T23:59:60.500000Z", 0.5, "bext", "" },
		{ "2031-04-02", "01:23:45", 0, 48000, "2031-04-02T01:23:45.500000Z", other, "bext",
			"without a time reference" },
		{ "2031-04-02", "01:23:45", 9000, 48000, "2031-04-02T01:23:45.500000Z", other, "bext",
			"contradicts its time 01:23:45" },
		{ "2031-02-30", "01:23:45", 5025, 48000, start, 2, "configuration", "impossible date \"2031-02-30\"" },
		{ "2031-04-02", "25:00:00", 5025, 48000, start, 2, "configuration", "time \"25:00:00\"" },
		{ "spring\1!\n", "noon", 5025, 48000, start, 2, "configuration", "\"spring?!?\"" },
		{ "0000-00-00", "00:00:00", 0, 48000, start, 2, "configuration", "without a date" },
		{ "", "", 0, 48000, start, 2, "configuration", "without a date" },
	};
	const int16_t sample[4] = { 1, 2, 3, 4 };
	static struct draft draft;
	char text[TAI_TEXT];

	(void)state;
	for (size_t k = 0; k < sizeof(cases) / sizeof(cases[0]); k++) {
		draft.size = 0;
		probe_reset(&probe);
		put_wave_head(&draft, WAVE_PCM, 1, cases[k].rate, 16);
		put_bext(&draft, cases[k].date, cases[k].time, (uint64_t)llround(cases[k].reference_s * cases[k].rate));
		put_data(&draft, sample, sizeof(sample));
		probe_text(&probe, "path", probe_file(&probe, "bext.wav", draft.bytes, draft.size));
		if (strcmp(cases[k].source, "bext") != 0) {
			probe_text(&probe, "start_utc", start);
			probe_number(&probe, "start_sigma_s", 2);
		}
		assert_int_equal(probe_open(&probe), 0);
		assert_int_equal(probe.intake->origin.quality, TIME_HOST);
		assert_string_equal(tai_format_utc(text, probe.intake->origin.when, 6), cases[k].utc);
		assert_true(fabs(probe.intake->origin.sigma_s - cases[k].sigma_s) < 1e-12);
		assert_string_equal(probe.intake->origin.source, cases[k].source);
		assert_non_null(strstr(probe.said, cases[k].said));
		assert_true(*cases[k].said || !*probe.said);
	}
	/* Both given and far apart: said, and the file believed. */
	draft.size = 0;
	probe_reset(&probe);
	put_wave_head(&draft, WAVE_PCM, 1, 48000, 16);
	put_bext(&draft, "2031-04-02", "01:00:00", 3600u * 48000);
	put_data(&draft, sample, sizeof(sample));
	probe_text(&probe, "path", probe_file(&probe, "bext.wav", draft.bytes, draft.size));
	probe_text(&probe, "start_utc", "2031-04-02T02:00:00Z");
	assert_int_equal(probe_open(&probe), 0);
	assert_string_equal(probe.intake->origin.source, "bext");
	assert_non_null(strstr(probe.said, "start_utc: 2031-04-02T02:00:00Z is 3600.000 s from what the bext chunk"));
}

static void the_configuration_dates_a_file_without_bext(void **state)
{
	const int16_t sample[2] = { 1, 2 };
	char text[TAI_TEXT];

	(void)state;
	probe_text(&probe, "start_utc", "2031-04-02T01:23:45.25Z");
	probe_number(&probe, "start_sigma_s", 0.02);
	run_path(wave_file(WAVE_PCM, 1, 1, 16, sample, sizeof(sample)));        /* a slow logger: 1 Hz */
	assert_true(probe.intake->rate == 1);
	assert_int_equal(probe.intake->origin.quality, TIME_HOST);
	assert_string_equal(tai_format_utc(text, probe.intake->origin.when, 3), "2031-04-02T01:23:45.250Z");
	assert_true(probe.intake->origin.sigma_s == 0.02);

	probe_reset(&probe);
	probe_text(&probe, "path", probe_path(&probe, "made.wav"));
	probe_text(&probe, "start_utc", "yesterday");
	assert_int_equal(probe_open(&probe), -EINVAL);
	assert_non_null(strstr(probe.said, "start_utc: \"yesterday\""));
}

static void a_wrong_rate_is_refused_with_both_rates(void **state)
{
	const int16_t sample[2] = { 1, 2 };

	(void)state;
	probe_text(&probe, "path", wave_file(WAVE_PCM, 1, 44100, 16, sample, sizeof(sample)));
	probe_number(&probe, "rate_hz", 48000);
	assert_int_equal(probe_open(&probe), -EINVAL);
	assert_non_null(strstr(probe.said, "rate_hz: 48000 was asked for"));
	assert_non_null(strstr(probe.said, "44100 Hz"));
	probe_number(&probe, "rate_hz", 44100);
	assert_int_equal(probe_open(&probe), 0);
}

static void refuse(const char *path, int error, const char *said)
{
	probe_reset(&probe);
	probe_text(&probe, "path", path);
	assert_int_equal(probe_open(&probe), error);
	assert_null(probe.intake);
	assert_non_null(strstr(probe.said, said));
	assert_non_null(strstr(probe.said, path));
	assert_ptr_equal(strchr(probe.said, '\n'), probe.said + strlen(probe.said) - 1);        /* one sentence */
}

static void what_is_no_sound_file_is_said_in_one_sentence(void **state)
{
	const int16_t samples[18] = { 1, 2 };
	const char text[] = "These are the notes of the night, and no samples at all.\n";

	(void)state;
	refuse(probe_path(&probe, "missing.wav"), -ENOENT, "No such file");
	refuse(probe.folder, -EISDIR, "is a folder");
	refuse(probe_file(&probe, "empty.wav", "", 0), -ENODATA, "is empty (0 bytes)");
	refuse(probe_file(&probe, "notes.txt", text, strlen(text)), -EILSEQ, "no sound file that can be read");
	char beyond[300];
	snprintf(beyond, sizeof(beyond), "%s/deeper.wav", probe_path(&probe, "notes.txt"));
	refuse(beyond, -ENOTDIR, "Not a directory");
	refuse(wave_file(WAVE_PCM, 9, 48000, 16, samples, sizeof(samples)), -EILSEQ, "has 9 channels; 1 to 8 are allowed");
	refuse(wave_file(WAVE_PCM, 1, 20000000, 16, samples, sizeof(samples)), -EILSEQ, "20000000 Hz; 1 to 10000000");
	refuse(wave_file(WAVE_PCM, 1, 48000, 16, samples, 0), -EILSEQ, "not a single frame");
	assert_int_equal(mkfifo(probe_path(&probe, "fifo"), 0600), 0);
	refuse(probe_path(&probe, "fifo"), -EINVAL, "need the pipe intake");
}

/* Cut at every byte: never more or less than the whole frames that are there. */
static void a_cut_file_gives_what_is_there_and_counts_the_rest(void **state)
{
	enum { FRAMES = 100, FRAME = 6, HEAD = 44 };
	unsigned char samples[FRAMES * FRAME];
	static struct draft draft;
	char wanted[128];

	(void)state;
	random_bytes(samples, sizeof(samples), 7102);
	draft.size = 0;
	put_wave_head(&draft, WAVE_PCM, 2, 48000, 24);
	put_data(&draft, samples, sizeof(samples));
	assert_int_equal(draft.size, HEAD + sizeof(samples));
	for (size_t size = 1; size <= draft.size; size++) {
		const size_t whole = size < HEAD ? 0 : (size - HEAD) / FRAME;
		probe_reset(&probe);
		probe_text(&probe, "path", probe_file(&probe, "cut.wav", draft.bytes, size));
		if (whole == 0) {
			assert_int_equal(probe_open(&probe), -EILSEQ);
			assert_true(strlen(probe.said) > 10);
			continue;
		}
		probe_run(&probe, SIZE_MAX);
		assert_int_equal(probe.last, -ENODATA);
		assert_int_equal(probe.frames, whole);
		assert_memory_equal(probe.bytes, samples, whole * FRAME);
		snprintf(wanted, sizeof(wanted), "promises 100 frames, but only %zu are there (%zu are missing)", whole,
			FRAMES - whole);
		assert_true(whole == FRAMES ? !*probe.explanation : strstr(probe.explanation, wanted) != NULL);
	}
}

static void other_containers_count_what_is_missing_too(void **state)
{
	static const char *const names[] = { "cut.aiff", "cut.au", "cut.rf64" };
	static struct draft draft;
	const uint64_t sizes[3] = { 4 + 36 + 24 + 8 + 20000, 20000, 10000 };     /* RIFF, data, frames: EBU Tech 3306 */
	char command[512];

	(void)state;
	for (int k = 0; k < 2; k++) {
		snprintf(command, sizeof(command), "sox -R -n -r 48000 -b 16 -c 1 %s synth 10000s whitenoise && "
			"truncate -s -2000 %s", probe_path(&probe, names[k]), probe_path(&probe, names[k]));
		assert_int_equal(system(command), 0);
	}
	put(&draft, "RF64\xff\xff\xff\xffWAVEds64", 16);
	put_number(&draft, 28, 4);
	put(&draft, sizes, sizeof(sizes));
	put_number(&draft, 0, 4);
	struct draft head = { .size = 0 };
	put_wave_head(&head, WAVE_PCM, 1, 48000, 16);
	put(&draft, head.bytes + 12, head.size - 12);
	put(&draft, "data\xff\xff\xff\xff", 8);
	for (int k = 0; k < 9000; k++)
		put_number(&draft, (uint64_t)k, 2);
	probe_file(&probe, names[2], draft.bytes, draft.size);
	for (int k = 0; k < 3; k++) {
		probe_reset(&probe);
		run_path(probe_path(&probe, names[k]));
		assert_int_equal(probe.frames, 9000);
		assert_non_null(strstr(probe.explanation, "promises 10000 frames, but only 9000 are there (1000 are missing)"));
	}
}

/* A recorder that lost power leaves 0 or all ones for the size: common practice. */
static void a_header_never_completed_promises_nothing(void **state)
{
	const int16_t samples[500] = { 5, 6, 7 };
	const uint32_t none = 0, all = UINT32_MAX;
	static struct draft draft;

	(void)state;
	draft.size = 0;
	put_wave_head(&draft, WAVE_PCM, 1, 48000, 16);
	put_data(&draft, samples, sizeof(samples));
	memcpy(draft.bytes + 40, &all, 4);
	run_path(probe_file(&probe, "open.wav", draft.bytes, draft.size));
	assert_int_equal(probe.frames, 500);
	assert_string_equal(probe.explanation, "");
	memcpy(draft.bytes + 40, &none, 4);
	refuse(probe_file(&probe, "open.wav", draft.bytes, draft.size), -EILSEQ, "header was never completed");
}

static void a_failing_disk_is_told_from_the_end(void **state)
{
	static unsigned char samples[20000];

	(void)state;
	random_bytes(samples, sizeof(samples), 7103);
	probe_text(&probe, "path", wave_file(WAVE_PCM, 1, 48000, 16, samples, sizeof(samples)));
	assert_int_equal(probe_open(&probe), 0);
	allowance = 10000;
	probe_run(&probe, SIZE_MAX);
	allowance = SIZE_MAX;
	assert_int_equal(probe.last, -EIO);
	assert_in_range(probe.frames, 5000 - 1024, 5000);
	assert_memory_equal(probe.bytes, samples, probe.frames * 2);
	char wanted[64];
	snprintf(wanted, sizeof(wanted), "beyond frame %zu of 10000", probe.frames);
	assert_non_null(strstr(probe.explanation, wanted));
	assert_non_null(strstr(probe.explanation, "Input/output error"));

	/* A failed read may be followed by stop and start: the disk is well again, so all is there. */
	probe.frames = 0;
	probe.next = 0;
	probe_run(&probe, SIZE_MAX);
	assert_int_equal(probe.last, -ENODATA);
	assert_int_equal(probe.frames, 10000);
	assert_memory_equal(probe.bytes, samples, sizeof(samples));
	assert_string_equal(probe.explanation, "");
}

static void a_damaged_flac_file_is_read_up_to_the_damage(void **state)
{
	char command[1024];

	(void)state;
	const char *path = probe_path(&probe, "noise.flac");
	snprintf(command, sizeof(command), "sox -R -n -r 48000 -b 16 -c 1 %s synth 1 whitenoise && "
		"dd if=/dev/zero of=%s bs=1 seek=50000 count=2000 conv=notrunc status=none", path, path);
	assert_int_equal(system(command), 0);
	run_path(path);
	assert_int_equal(probe.last, -EIO);
	/* Byte 50000 of some 96000 for 48000 frames; blocks of 4096 frames, and one read more may be lost. */
	assert_in_range(probe.frames, 25000 - 2 * 4096, 25000);
	assert_non_null(strstr(probe.explanation, "of 48000"));
}

static int set_up(void **state)
{
	(void)state;
	probe_reset(&probe);
	return 0;
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test_setup(whole_bytes_arrive_as_they_are, set_up),
		cmocka_unit_test_setup(eight_bits_become_the_upper_byte, set_up),
		cmocka_unit_test_setup(doubles_become_floats_and_nan_stays, set_up),
		cmocka_unit_test_setup(sox_decodes_the_same_bytes, set_up),
		cmocka_unit_test_setup(lossy_files_come_as_floats, set_up),
		cmocka_unit_test_setup(a_bext_chunk_dates_the_first_frame, set_up),
		cmocka_unit_test_setup(the_configuration_dates_a_file_without_bext, set_up),
		cmocka_unit_test_setup(a_wrong_rate_is_refused_with_both_rates, set_up),
		cmocka_unit_test_setup(what_is_no_sound_file_is_said_in_one_sentence, set_up),
		cmocka_unit_test_setup(a_cut_file_gives_what_is_there_and_counts_the_rest, set_up),
		cmocka_unit_test_setup(other_containers_count_what_is_missing_too, set_up),
		cmocka_unit_test_setup(a_header_never_completed_promises_nothing, set_up),
		cmocka_unit_test_setup(a_failing_disk_is_told_from_the_end, set_up),
		cmocka_unit_test_setup(a_damaged_flac_file_is_read_up_to_the_damage, set_up),
	};

	probe_create(&probe, &intake_file);
	const int failed = cmocka_run_group_tests_name("file", tests, NULL, NULL);
	probe_destroy(&probe);
	return failed;
}
