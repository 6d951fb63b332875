/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * A device that misbehaves in every way, under the whole recorder.  Its samples are true frame numbers, so the
 * recording itself shows whether the gaps were counted rightly.
 */
#include <errno.h>
#include <math.h>
#include <pthread.h>
#include <semaphore.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdatomic.h>
#include <stddef.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>
#include <sys/syscall.h>
#include <time.h>
#include <unistd.h>
#include <cmocka.h>
#include <sndfile.h>
#include "limbwatch/disk.h"
#include "limbwatch/log.h"
#include "limbwatch/recorder.h"
#include "limbwatch/sidecar.h"
#include "limbwatch/stamp_line.h"
#include "support/folder.h"

enum { RATE = 8000, BLOCK = 80 };

/* What it does next, in order; each lasts so many seconds. */
enum act { WORK, GONE, SILENT, HANG, DROWSY, OTHER_RATE, OVERRUN, ASLEEP, END };
struct scene { enum act act; double seconds; };

static struct play {
	const struct scene *scene;
	int64_t born_ns;                /* true frame 0 */
	_Atomic int64_t scene_ns;       /* when the present scene began */
	_Atomic size_t at;
	sem_t never;
	unsigned opened, closed;
} play;

/* The computer's sleep: CLOCK_MONOTONIC stands still in it, the other clocks and the device's crystal do not. */
static _Atomic int64_t slept_ns;

int clock_gettime(clockid_t clock, struct timespec *out)
{
	const int ret = (int)syscall(SYS_clock_gettime, clock, out);

	if (clock == CLOCK_BOOTTIME || clock == CLOCK_REALTIME) {
		const int64_t ns = out->tv_nsec + atomic_load(&slept_ns);
		out->tv_sec += ns / 1000000000;
		out->tv_nsec = ns % 1000000000;
	}
	return ret;
}

struct actor { struct intake intake; uint64_t next; int64_t taken_ns; int32_t samples[BLOCK]; };

/* Scenes that end by themselves; SILENT, HANG and DROWSY (silent, then hanging until then) end when the recorder opens the device anew. */
static enum act act_now(void)
{
	const struct scene *s = &play.scene[atomic_load(&play.at)];
	int64_t now = host_now();

	if (s->act == END || s->act == SILENT || s->act == HANG || s->act == DROWSY || s->act == OVERRUN || s->act == ASLEEP ||
	    now - play.scene_ns < (int64_t)(s->seconds * 1e9))
		return s->act;
	atomic_store(&play.scene_ns, now);
	atomic_fetch_add(&play.at, 1);
	return act_now();
}

static const struct intake_driver actor;

static int actor_open(struct intake **out, const struct setting_value *values)
{
	struct actor *a;
	enum act act = act_now();

	(void)values;
	if (act == GONE) {
		log_error("the card is not there");
		return -ENODEV;
	}
	if (act == SILENT || act == HANG || act == DROWSY) {
		atomic_store(&play.scene_ns, host_now());
		atomic_fetch_add(&play.at, 1);
	}
	a = calloc(1, sizeof(*a));
	a->intake = (struct intake){
		.driver = &actor,
		.format = { SAMPLE_S32, 1 }, .rate = act == OTHER_RATE ? 2 * RATE : RATE, .real_time = true, .name = "card",
	};
	play.opened++;
	*out = &a->intake;
	return 0;
}

static int actor_start(struct intake *intake)
{
	((struct actor *)intake)->taken_ns = host_now();
	return 0;
}

static int actor_stop(struct intake *intake)
{
	(void)intake;
	return 0;
}

static void actor_close(struct intake *intake)
{
	free(intake);
	play.closed++;
}

/* Reads time out at first; then one does not come back before the next opening. */
static int read_drowsily(const struct timespec *pause)
{
	const size_t at = atomic_load(&play.at);

	if (host_now() - play.scene_ns < 600000000) {
		nanosleep(pause, NULL);
		return 0;
	}
	while (atomic_load(&play.at) == at)
		nanosleep(pause, NULL);
	return -EIO;
}

static int actor_read(struct intake *intake, struct block *block, int timeout_ms)
{
	struct actor *a = (struct actor *)intake;
	const struct timespec pause = { .tv_nsec = timeout_ms * 1000000L }, moment = { .tv_nsec = 1000000 };
	double truth;
	unsigned flags = 0;

	switch (act_now()) {
	case GONE: case OTHER_RATE: return -ENODEV;
	case ASLEEP:            /* the card is gone when the computer wakes up */
		atomic_fetch_add(&slept_ns, 40000000000);
		atomic_store(&play.scene_ns, host_now());
		atomic_fetch_add(&play.at, 1);
		return -ENODEV;
	case OVERRUN:
		a->next += BLOCK * 20;
		a->taken_ns += BLOCK * 20 * (1000000000 / RATE);
		flags = BLOCK_GAP | BLOCK_OVERRUN;
		atomic_store(&play.scene_ns, host_now());
		atomic_fetch_add(&play.at, 1);
		break;
	case SILENT: nanosleep(&pause, NULL); return 0;
	case DROWSY: return read_drowsily(&pause);
	case HANG: sem_wait(&play.never); return -EIO;
	case END: recorder_stop(); return 0;
	default: break;
	}
	while (host_now() < a->taken_ns + BLOCK * (1000000000 / RATE))
		nanosleep(&moment, NULL);
	truth = round((double)(a->taken_ns + slept_ns - play.born_ns) * 1e-9 * RATE);
	for (int k = 0; k < BLOCK; k++)
		a->samples[k] = (int32_t)truth + k + 1;         /* never zero: zeros fill gaps */
	*block = (struct block){ a->samples, BLOCK, a->next, a->taken_ns, flags };
	a->next += BLOCK;
	a->taken_ns += BLOCK * (1000000000 / RATE);
	return 1;
}

static const struct intake_driver actor = {
	.name = "actor", .open = actor_open, .start = actor_start, .stop = actor_stop, .close = actor_close,
	.read = actor_read, .comes_back = true,
};

/* ------------------------------------------------------------------ the recorder around it */

static char said[16384];
static pthread_mutex_t saying = PTHREAD_MUTEX_INITIALIZER;      /* several threads speak */

static void hear(void *context, enum log_level level, const char *sentence)
{
	(void)context;
	pthread_mutex_lock(&saying);
	const size_t n = strlen(said);
	if (level <= LEVEL_NOTICE)
		snprintf(said + n, sizeof(said) - n, "%s\n", sentence);
	pthread_mutex_unlock(&saying);
}

static char socket_path[96];

static int perform(const struct scene *scenes)
{
	struct recorder_hooks hooks = { .service = true };
	struct config config;
	char text[1024];
	int ret;

	snprintf(socket_path, sizeof(socket_path), "%s/state.sock", folder);
	snprintf(text, sizeof(text),
	         "station = { name = \"Brackenfold\"; }; intake = { driver = \"synthetic\"; rate_hz = 8000; };\n"
	         "channels = ( { name = \"photodiode\"; column = 1; wavelength_nm = 620; } );\n"
	         "watch = { outside_vigils = false; };\n"
	         "keep = { folder = \"%s\"; everything = true; free_mib = 0; };\n"
	         "live = { silence_s = 1.5; lock_memory = false; }; state = { socket = \"%s\"; };\n", folder, socket_path);
	assert_int_equal(config_parse(&config, text, "device.conf"), 0);
	config.driver = &actor;
	play.scene = scenes;
	play.at = 0;
	play.opened = play.closed = 0;
	play.born_ns = host_now();
	play.scene_ns = play.born_ns;
	*said = 0;
	log_set_sink(hear, NULL);
	ret = recorder_run(&config, &hooks);
	log_set_sink(NULL, NULL);
	config_free(&config);
	return ret;
}

static void find_sidecar(void *context, const char *name, int64_t size)
{
	(void)size;
	if (strstr(name, ".json"))
		snprintf(context, 300, "%s/%s", folder, name);
}

/* How far the recording's frames stand from their true places at most; the frames that are there. */
static long worst_place(const struct sidecar *s, long *present)
{
	long worst = 0, first = 0;

	*present = 0;
	for (size_t p = 0; p < s->parts; p++) {
		char path[512];
		SF_INFO info = { 0 };
		SNDFILE *file;
		int *x;

		snprintf(path, sizeof(path), "%s/%s", folder, s->part[p].file);
		file = sf_open(path, SFM_READ, &info);
		assert_non_null(file);
		assert_int_equal(info.frames, s->part[p].frames);
		x = malloc((size_t)info.frames * sizeof(*x));
		assert_int_equal(sf_read_int(file, x, info.frames), info.frames);
		for (long k = 0; k < info.frames; k++) {
			long place = (long)s->part[p].first + k;

			if (!x[k])
				continue;
			if (!*present)
				first = x[k] - place;
			(*present)++;
			if (labs(x[k] - place - first) > worst)
				worst = labs(x[k] - place - first);
		}
		free(x);
		sf_close(file);
	}
	return worst;
}

static void a_card_lost_silent_or_hanging_is_recorded_on(void **state)
{
	static const struct scene scenes[] = {
		{ GONE, 0.7 }, { WORK, 1 }, { OVERRUN, 0 }, { WORK, 0.3 }, { ASLEEP, 0 }, { GONE, 0.9 }, { WORK, 1 }, { SILENT, 0 }, { WORK, 1 }, { HANG, 0 }, { WORK, 1 },
		{ DROWSY, 0 }, { WORK, 1 },
		{ GONE, 0.3 }, { OTHER_RATE, 1.2 }, { WORK, 0.5 }, { END, 0 },
	};
	struct sidecar s;
	char path[300] = "";
	long present, worst;

	(void)state;
	sem_init(&play.never, 0, 0);
	assert_int_equal(perform(scenes), 0);
	assert_non_null(strstr(said, "the card is not there"));
	assert_non_null(strstr(said, "not to be had"));
	assert_non_null(strstr(said, "delivered nothing"));
	assert_non_null(strstr(said, "hangs"));
	assert_non_null(strstr(said, "not used"));
	assert_non_null(strstr(said, "is back after"));
	assert_null(strstr(said, "clock was set"));
	disk_real.list(folder, find_sidecar, path);
	assert_int_equal(sidecar_read(&s, &disk_real, path), 0);
	assert_int_equal(s.gaps, 6);
	assert_int_equal(play.closed, play.opened - 1);         /* all but the one that hangs still */
	assert_non_null(strstr(said, "\"card\" lost 1600 frames, 0.2 s: it was not read in time"));
	worst = worst_place(&s, &present);
	print_message("# %ld frames, at most %ld from their places\n", present, worst);
	/* Stamps of this device are exact; the rest is the host's rounding. */
	assert_true(worst <= 2);
	assert_true(present > 3.5 * RATE);
	sidecar_clear(&s);
	assert_int_equal(access(socket_path, F_OK), -1);
	sem_post(&play.never);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test_setup_teardown(a_card_lost_silent_or_hanging_is_recorded_on, folder_make, folder_remove),
	};

	return cmocka_run_group_tests_name("device", tests, NULL, NULL);
}
