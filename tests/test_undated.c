/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * A board without a clock battery: recordings begin before this computer knows what time it is, and are dated when it
 * does.  adjtimex() is this program's own, so the kernel's word is the test's.
 */
#include <errno.h>
#include <math.h>
#include <setjmp.h>
#include <stdarg.h>
#include <stdatomic.h>
#include <stddef.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>
#include <sys/timex.h>
#include <time.h>
#include <unistd.h>
#include <cmocka.h>
#include <sndfile.h>
#include "limbwatch/disk.h"
#include "limbwatch/host_clock.h"
#include "limbwatch/log.h"
#include "limbwatch/recorder.h"
#include "limbwatch/sidecar.h"
#include "limbwatch/undated.h"
#include "support/folder.h"

static char said[16384];
static atomic_bool known;               /* whether the kernel calls its clock synchronised */
static atomic_int recordings;           /* closed ones in the folder after which it does; 0: never */

static void count_closed(void *context, const char *name, int64_t size)
{
	size_t n = strlen(name);

	(void)size;
	*(int *)context += n > 4 && !strcmp(name + n - 4, ".wav");
}

int adjtimex(struct timex *timex)
{
	int closed = 0, wanted = atomic_load(&recordings);

	disk_real.list(folder, count_closed, &closed);
	if (wanted && closed >= wanted)
		atomic_store(&known, true);
	timex->status = atomic_load(&known) ? 0 : STA_UNSYNC;
	timex->esterror = 2000;         /* us */
	timex->maxerror = 6000;
	return atomic_load(&known) ? TIME_OK : TIME_ERROR;
}

static void hear(void *context, enum log_level level, const char *sentence)
{
	size_t n = strlen(said);

	(void)context;
	if (level <= LEVEL_NOTICE)
		snprintf(said + n, sizeof(said) - n, "%s\n", sentence);
	if (strstr(sentence, "its immersion"))
		recorder_stop();
}

static double real_now(void)
{
	struct timespec t;

	clock_gettime(CLOCK_REALTIME, &t);
	return (double)t.tv_sec + (double)t.tv_nsec * 1e-9;
}

/* A live evening with a contact after 4 s and without a pulse. */
static int evening(double seconds, const char *kind, double *began)
{
	struct recorder_hooks hooks = { 0 };
	struct config config;
	char text[1024];
	int ret;

	snprintf(text, sizeof(text),
	         "station = { name = \"Brackenfold\"; };\n"
	         "intake = { driver = \"synthetic\"; rate_hz = 8000; real_time_pace = true; start_sigma_s = 0.0; snr = 60.0;\n"
	         "  kind = \"%s\"; contact_s = 4.0; duration_s = %.1f; };\n"
	         "channels = ( { name = \"photodiode\"; column = 1; wavelength_nm = 620; response_delay_s = 0.25; } );\n"
	         "keep = { folder = \"%s\"; everything = %s; pre_trigger_s = 1; post_trigger_s = 1; free_mib = 0; };\n",
	         kind, seconds, folder, strcmp(kind, "none") ? "false" : "true");
	assert_int_equal(config_parse(&config, text, "undated.conf"), 0);
	*said = 0;
	log_set_sink(hear, NULL);
	*began = real_now();
	ret = recorder_run(&config, &hooks);
	log_set_sink(NULL, NULL);
	config_free(&config);
	return ret;
}

struct found { size_t n; struct sidecar sidecar[8]; };

static void read_one(void *context, const char *name, int64_t size)
{
	struct found *f = context;
	char path[300];

	(void)size;
	if (!strstr(name, ".json") || f->n == 8)
		return;
	snprintf(path, sizeof(path), "%s/%s", folder, name);
	assert_int_equal(strncmp(name, "undated-", 8), 0);
	assert_int_equal(sidecar_read(&f->sidecar[f->n++], &disk_real, path), 0);
}

static double unix_of(struct tai when)
{
	char text[TAI_TEXT];
	struct tm tm = { 0 };
	double fraction;

	tai_format_utc(text, when, 6);
	sscanf(text, "%d-%d-%dT%d:%d:%d", &tm.tm_year, &tm.tm_mon, &tm.tm_mday, &tm.tm_hour, &tm.tm_min, &tm.tm_sec);
	fraction = atof(strchr(text, '.'));
	tm.tm_year -= 1900;
	tm.tm_mon--;
	return (double)timegm(&tm) + fraction;
}

/* The bext date of a part, to the second, as libsndfile reads it. */
static void check_bext(const struct sidecar *s)
{
	char path[300], text[TAI_TEXT];
	SF_BROADCAST_INFO bext;
	SF_INFO info = { 0 };
	SNDFILE *file;

	snprintf(path, sizeof(path), "%s/%s", folder, s->part[0].file);
	file = sf_open(path, SFM_READ, &info);
	assert_non_null(file);
	assert_true(sf_command(file, SFC_GET_BROADCAST_INFO, &bext, sizeof(bext)));
	tai_format_utc(text, s->start.when, 9);
	assert_memory_equal(bext.origination_date, text, 10);
	assert_memory_equal(bext.origination_time, text + 11, 8);
	assert_true(sf_seek(file, 0, SEEK_SET) == 0 && info.frames == (sf_count_t)s->part[0].frames);
	sf_close(file);
}

static void what_was_recorded_before_the_time_was_known_is_dated(void **state)
{
	struct found undated = { 0 }, dated = { 0 };
	double first, second;

	(void)state;
	/* A run that never learns the time. */
	atomic_store(&known, false);
	assert_int_equal(evening(0.5, "none", &first), 0);
	disk_real.list(folder, read_one, &undated);
	assert_int_equal(undated.n, 1);
	assert_int_equal(undated.sidecar[0].start.quality, TIME_FREE);
	sidecar_clear(&undated.sidecar[0]);
	/* The next one does, after its contact has been recorded. */
	atomic_store(&recordings, 2);
	assert_int_equal(evening(30, "immersion", &second), 0);
	assert_non_null(strstr(said, "recorded before the time was known"));
	disk_real.list(folder, read_one, &dated);
	assert_int_equal(dated.n, 2);
	for (size_t k = 0; k < dated.n; k++) {
		struct sidecar *s = &dated.sidecar[k];
		double truth = s->contacts ? second : first, late;

		assert_int_equal(s->start.quality, TIME_HOST);
		assert_true(s->start.sigma_s >= 0.001 && s->start.sigma_s < 0.1);
		late = unix_of(s->start.when) - truth - (double)s->first / s->rate;
		print_message("# the device ran %.3f s after the start of the run\n", late);
		assert_true(late > -0.05 && late < 10);         /* what the recorder took to start */
		check_bext(s);
		if (s->contacts) {
			assert_int_equal(s->contacts, 1);
			assert_int_equal(s->contact[0].time_quality, TIME_HOST);
			assert_true(fabs(unix_of(s->contact[0].when) - (second + late + 4 - 0.25)) < 0.01);
		}
		sidecar_clear(s);
	}
}

static void the_delay_of_the_detector_is_taken_off_once(void **state)
{
	struct sidecar_channel channel = { .response_delay_s = 0.25 };
	struct contact contact = { .frame = 18000, .terms = { .fit = 3e-3, .response = 4e-3 } };
	struct sidecar_part part = { .first = 2000, .frames = 32000 };
	struct sidecar s = {
		.rate = 8000, .true_rate = 8000, .first = 2000, .channels = 1, .channel = &channel, .contacts = 1,
		.contact = &contact, .parts = 1, .part = &part,
	};
	struct tai start = { 1900000000000000000 };

	(void)state;
	undated_fill(&s, start, 0.012);
	assert_true(fabs(tai_difference(contact.when, start) - (2 - 0.25)) < 1e-9);
	assert_true(fabs(contact.sigma_s - sqrt(9e-6 + 16e-6 + 0.012 * 0.012 + 2e-4 * 2e-4)) < 1e-9);
	assert_true(fabs(tai_difference(s.end.when, start) - 4) < 1e-9);
	assert_true(s.end.sigma_s > s.start.sigma_s);
}

int main(void)
{
	const struct CMUnitTest tests[] = {
		cmocka_unit_test_setup_teardown(what_was_recorded_before_the_time_was_known_is_dated, folder_make, folder_remove),
		cmocka_unit_test(the_delay_of_the_detector_is_taken_off_once),
	};

	return cmocka_run_group_tests_name("undated", tests, NULL, NULL);
}
