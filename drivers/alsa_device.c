/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include "alsa_device.h"
#include "limbwatch/log.h"
#include "sound_cards.h"

/* Frames per read at most: some devices have only very long periods. */
enum { MAX_BLOCK_FRAMES = 65536 };

_Thread_local bool alsa_quiet;

/* In the order of enum sample_type, which is that of the choices after auto. */
static const snd_pcm_format_t pcm_formats[SAMPLE_TYPES] = {
	SND_PCM_FORMAT_S16_LE, SND_PCM_FORMAT_S24_3LE, SND_PCM_FORMAT_S24_LE, SND_PCM_FORMAT_S32_LE,
	SND_PCM_FORMAT_FLOAT_LE,
};

/*
 * What auto tries.  Converters of 24 bits are offered as S32 by cards on a bus and as S24_3 by USB; a device that has
 * several gives the narrower ones by cutting.
 */
static const enum sample_type preference[SAMPLE_TYPES] = {
	SAMPLE_S32, SAMPLE_S24_3, SAMPLE_S24, SAMPLE_F32, SAMPLE_S16,
};

/* alsa-lib would write to stderr, from wherever it is called. */
__attribute__((format(printf, 5, 6)))
static void chatter(const char *file, int line, const char *function, int error, const char *format, ...)
{
	char sentence[256];
	va_list arguments;

	(void)file;
	(void)line;
	if (alsa_quiet)
		return;
	va_start(arguments, format);
	vsnprintf(sentence, sizeof(sentence), format, arguments);
	va_end(arguments);
	log_detail("alsa-lib, %s: %s%s%s", function, sentence, error ? ": " : "", error ? snd_strerror(error) : "");
}

/* "null, default, ...": what ALSA knows of, for a sentence. */
static void list_devices(char *text, size_t size)
{
	enum { MOST = 12 };
	void **hints;
	size_t used = 0;
	int count = 0;

	text[0] = 0;
	alsa_quiet = true;      /* it tries every name there could be and tells of each that is not */
	const int ret = snd_device_name_hint(-1, "pcm", &hints);
	alsa_quiet = false;
	if (ret < 0)
		return;
	for (void **hint = hints; *hint && used < size; hint++) {
		char *name = snd_device_name_get_hint(*hint, "NAME");
		char *direction = snd_device_name_get_hint(*hint, "IOID");
		if (name && (!direction || strcmp(direction, "Input") == 0) && count++ < MOST)
			used += (size_t)snprintf(text + used, size - used, "%s%s", used ? ", " : "", name);
		free(name);
		free(direction);
	}
	snd_device_name_free_hint(hints);
	if (count > MOST && used < size)
		snprintf(text + used, size - used, " and %d more", count - MOST);
}

/* "0, 2": which PCMs of a card record.  @return whether `wanted` is one of them; true when the card does not tell */
static bool list_recording(int card, long long wanted, char *text, size_t size)
{
	snd_pcm_info_t *info;
	snd_ctl_t *ctl;
	char name[32];
	bool found = false;
	size_t used = 0;

	snprintf(text, size, "none");
	snprintf(name, sizeof(name), "hw:%d", card);
	if (snd_ctl_open(&ctl, name, SND_CTL_NONBLOCK) < 0)
		return true;
	snd_pcm_info_alloca(&info);
	for (int pcm = -1; snd_ctl_pcm_next_device(ctl, &pcm) >= 0 && pcm >= 0 && used < size;) {
		snd_pcm_info_set_device(info, (unsigned)pcm);
		snd_pcm_info_set_stream(info, SND_PCM_STREAM_CAPTURE);
		if (snd_ctl_pcm_info(ctl, info) < 0)
			continue;
		used += (size_t)snprintf(text + used, size - used, "%s%d", used ? ", " : "", pcm);
		found |= pcm == wanted;
	}
	snd_ctl_close(ctl);
	return found;
}

/* Whether ALSA's configuration has a PCM of that name, be it there or not. */
static bool is_defined(const char *pcm)
{
	snd_config_t *top = NULL, *found;
	char base[128];

	snprintf(base, sizeof(base), "%.*s", (int)strcspn(pcm, ":"), pcm);
	if (snd_config_update_ref(&top) < 0)
		return true;
	const bool defined = snd_config_searchv(top, &found, "pcm", base, NULL) >= 0;
	snd_config_unref(top);
	return defined;
}

static int say_why_not_open(const struct alsa_device *device, const char *pcm, int error)
{
	char known[512];

	if (error == -EBUSY) {
		log_error("device: \"%s\" is in use by another program", device->name);
		return error;
	}
	if (device->card >= 0 && !list_recording(device->card, device->card_pcm, known, sizeof(known))) {
		log_error("pcm: \"%s\" does not record; of its PCMs these do: %s", device->name, known);
		return -EINVAL;
	}
	list_devices(known, sizeof(known));
	const char *others = *known ? known : "no device to record from";
	if (error == -ENOENT && !is_defined(pcm)) {
		log_error("device: ALSA knows nothing called \"%s\"; it knows %s", device->name, others);
		return -EINVAL;
	}
	log_error("device: \"%s\" cannot be opened: %s; ALSA knows %s", device->name, snd_strerror(error), others);
	/* A card that is not there, or a sound server, is no fault of the configuration: it may come. */
	if (error == -ENOENT || error == -ENXIO || error == -EINVAL || error == -ECONNREFUSED)
		return -ENODEV;
	return error;
}

static int open_pcm(struct alsa_device *device, const char *pcm)
{
	/* Non-blocking: a device held by another program is said, not waited for. */
	const int ret = snd_pcm_open(&device->pcm, pcm, SND_PCM_STREAM_CAPTURE, SND_PCM_NONBLOCK);

	if (ret < 0)
		return say_why_not_open(device, pcm, ret);
	snd_pcm_info_t *info;
	snd_pcm_info_alloca(&info);
	device->card = snd_pcm_info(device->pcm, info) < 0 ? -1 : snd_pcm_info_get_card(info);
	return 0;
}

static int refused(const struct alsa_device *device, const char *what, int error)
{
	log_error("device: \"%s\" refuses %s: %s", device->name, what, snd_strerror(error));
	return error;
}

static int choose_format(struct alsa_device *device, snd_pcm_hw_params_t *params, const struct setting_value *value)
{
	char offered[64] = "";
	size_t used = 0;
	int chosen = -1;

	for (int k = SAMPLE_TYPES - 1; k >= 0; k--) {
		const enum sample_type type = preference[k];
		if (snd_pcm_hw_params_test_format(device->pcm, params, pcm_formats[type]) < 0)
			continue;
		used += (size_t)snprintf(offered + used, sizeof(offered) - used, "%s%s", used ? ", " : "",
			sample_type_name(type));
		if (value->integer == 0 || value->integer == (long long)type + 1)
			chosen = (int)type;
	}
	if (chosen < 0) {
		log_error("format: \"%s\" does not have %s; it offers %s", device->name,
			value->integer ? sample_type_name((enum sample_type)(value->integer - 1)) : "any format known here",
			*offered ? offered : "none of S16, S24_3, S24, S32, FLOAT");
		return -EINVAL;
	}
	device->format.type = (enum sample_type)chosen;
	const int ret = snd_pcm_hw_params_set_format(device->pcm, params, pcm_formats[chosen]);
	return ret < 0 ? refused(device, "the format it offers", ret) : 0;
}

static int choose_channels(struct alsa_device *device, snd_pcm_hw_params_t *params, unsigned channels)
{
	unsigned min = 0, max = 0;

	device->format.channels = channels;
	if (snd_pcm_hw_params_set_channels(device->pcm, params, channels) >= 0)
		return 0;
	snd_pcm_hw_params_get_channels_min(params, &min);
	snd_pcm_hw_params_get_channels_max(params, &max);
	log_error("channels: \"%s\" does not record %u; it offers %u to %u", device->name, channels, min, max);
	return -EINVAL;
}

/* The rate asked for or none: converted samples would blur the edge and bend the card's clock. */
static int choose_rate(struct alsa_device *device, snd_pcm_hw_params_t *params, unsigned rate)
{
	unsigned granted = rate;

	snd_pcm_hw_params_set_rate_resample(device->pcm, params, 0);
	const int ret = snd_pcm_hw_params_set_rate_near(device->pcm, params, &granted, NULL);
	if (ret < 0)
		return refused(device, "every rate", ret);
	if (granted != rate) {
		log_error("rate_hz: \"%s\" grants %u where %u was asked for", device->name, granted, rate);
		return -EINVAL;
	}
	device->rate = rate;
	return 0;
}

/* What the device has set itself to in the end.  A card's nominal rate need not be whole, but the one asked for. */
static int check_rate(struct alsa_device *device, const snd_pcm_hw_params_t *params)
{
	const double asked = device->rate;
	unsigned numerator = 0, denominator = 0;

	if (snd_pcm_hw_params_get_rate_numden(params, &numerator, &denominator) >= 0 && denominator)
		device->rate = (double)numerator / denominator;
	if (fabs(device->rate - asked) < 1)
		return 0;
	log_error("rate_hz: \"%s\" runs at %.9g where %.9g was asked for and granted", device->name, device->rate, asked);
	return -EINVAL;
}

/* The buffer first: what it can hold matters more than how often it is emptied. */
static int choose_buffer(struct alsa_device *device, snd_pcm_hw_params_t *params, const struct setting_value *values)
{
	unsigned buffer_us = (unsigned)(values[ALSA_BUFFER].number * 1e6);
	unsigned period_us = (unsigned)(values[ALSA_PERIOD].number * 1e6);
	int ret;

	if (buffer_us < 2 * period_us) {
		log_error("buffer_s: %g is less than twice period_s, which is %g", values[ALSA_BUFFER].number,
			values[ALSA_PERIOD].number);
		return -EINVAL;
	}
	if ((ret = snd_pcm_hw_params_set_buffer_time_near(device->pcm, params, &buffer_us, NULL)) < 0 ||
	    (ret = snd_pcm_hw_params_set_period_time_near(device->pcm, params, &period_us, NULL)) < 0)
		return refused(device, "buffer_s and period_s", ret);
	device->buffer_us = buffer_us;
	device->period_us = period_us;
	return 0;
}

static int configure_hardware(struct alsa_device *device, const struct setting_value *values)
{
	snd_pcm_uframes_t period = 0, buffer = 0;
	snd_pcm_hw_params_t *params;
	int ret;

	snd_pcm_hw_params_alloca(&params);
	if ((ret = snd_pcm_hw_params_any(device->pcm, params)) < 0 ||
	    (ret = snd_pcm_hw_params_set_access(device->pcm, params, SND_PCM_ACCESS_RW_INTERLEAVED)) < 0)
		return refused(device, "to be read", ret);
	if ((ret = choose_format(device, params, &values[ALSA_FORMAT])) < 0 ||
	    (ret = choose_channels(device, params, (unsigned)values[ALSA_CHANNELS].integer)) < 0 ||
	    (ret = choose_rate(device, params, (unsigned)values[ALSA_RATE].integer)) < 0 ||
	    (ret = choose_buffer(device, params, values)) < 0)
		return ret;
	if ((ret = snd_pcm_hw_params(device->pcm, params)) < 0) {
		log_error("device: \"%s\" refuses %u channels of %s at %g Hz: %s", device->name,
			device->format.channels, sample_type_name(device->format.type), device->rate,
			snd_strerror(ret));
		return ret;
	}
	if ((ret = check_rate(device, params)) < 0)
		return ret;
	snd_pcm_hw_params_get_period_size(params, &period, NULL);
	snd_pcm_hw_params_get_buffer_size(params, &buffer);
	/* Never wait for more than half of what the device holds: a full one is an overrun. */
	device->block_frames = period < buffer / 2 ? period : buffer / 2;
	if (device->block_frames < 1 || device->block_frames > MAX_BLOCK_FRAMES)
		device->block_frames = device->block_frames < 1 ? 1 : MAX_BLOCK_FRAMES;
	return 0;
}

static int configure_software(struct alsa_device *device)
{
	snd_pcm_sw_params_t *params;
	int ret;

	snd_pcm_sw_params_alloca(&params);
	if ((ret = snd_pcm_sw_params_current(device->pcm, params)) < 0 ||
	    (ret = snd_pcm_sw_params_set_avail_min(device->pcm, params, device->block_frames)) < 0)
		return refused(device, "its wake-up", ret);
	/* Stamps are welcome, not needed: each one is judged when it comes. */
	snd_pcm_sw_params_set_tstamp_mode(device->pcm, params, SND_PCM_TSTAMP_ENABLE);
	snd_pcm_sw_params_set_tstamp_type(device->pcm, params, SND_PCM_TSTAMP_TYPE_MONOTONIC);
	ret = snd_pcm_sw_params(device->pcm, params);
	return ret < 0 ? refused(device, "its set-up", ret) : 0;
}

/* What alsa-lib calls the PCM, and what sentences and the sidecar do. */
static int name_pcm(struct alsa_device *device, const struct setting_value *values, char *pcm, size_t size)
{
	const char *wanted = values[ALSA_CARD].text;
	struct sound_card card;

	if (!wanted || !*wanted) {
		snprintf(pcm, size, "%s", values[ALSA_DEVICE].text);
		snprintf(device->name, sizeof(device->name), "%.127s", pcm);
		return 0;
	}
	if (values[ALSA_DEVICE].given) {
		log_error("card: \"%s\" and device = \"%s\" are both given; one of them says where samples come from", wanted,
			values[ALSA_DEVICE].text);
		return -EINVAL;
	}
	const int ret = sound_cards_find(&card, wanted);
	if (ret < 0)
		return ret;
	snprintf(pcm, size, "hw:%d,%lld", card.number, values[ALSA_PCM].integer);
	device->card = card.number;
	device->card_pcm = values[ALSA_PCM].integer;
	snprintf(device->name, sizeof(device->name), "%s at %s, %.16s", card.id, card.path[0] ? card.path : "no path", pcm);
	return 0;
}

int alsa_device_open(struct alsa_device *device, const struct setting_value *values)
{
	char pcm[1024];
	int ret;

	snd_lib_error_set_handler(chatter);
	*device = (struct alsa_device){ .card = -1 };
	if ((ret = name_pcm(device, values, pcm, sizeof(pcm))) < 0 || (ret = open_pcm(device, pcm)) < 0)
		return ret;
	if ((ret = configure_hardware(device, values)) < 0 || (ret = configure_software(device)) < 0) {
		snd_pcm_close(device->pcm);
		return ret;
	}
	device->own_stamps = snd_pcm_type(device->pcm) == SND_PCM_TYPE_HW;
	return 0;
}
