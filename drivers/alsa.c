/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <inttypes.h>
#include <math.h>
#include <poll.h>
#include <stdio.h>
#include <stdlib.h>
#include "alsa_device.h"
#include "limbwatch/intake.h"
#include "limbwatch/log.h"
#include "limbwatch/stamp_line.h"
#include "origin.h"
#include "sound_mixer.h"

/*
 * A sound card or any other PCM that ALSA knows.  Nothing on the way may touch the samples: no rate is converted, and
 * by default the widest format the device has is taken.
 */

static const struct setting alsa_settings[] = {
	[ALSA_DEVICE] = { "device", SETTING_TEXT, .text = "default",
		.meaning = "PCM as ALSA names it; only hw: devices are free of plug-ins and have stamps of their own",
		.example = "hw:1,0" },
	[ALSA_CARD] = { "card", SETTING_TEXT,
		.meaning = "instead of device: sound card by id or, found again in the same socket whatever its number, by path; one "
			"that is not there is answered with a list",
		.example = "usb-0000:01:00.0-1.2" },
	[ALSA_PCM] = { "pcm", SETTING_INTEGER, 0, 0, 31,
		.meaning = "which of that card's PCMs, as the card counts them" },
	[ALSA_RATE] = { "rate_hz", SETTING_INTEGER, 48000, 8000, 192000,
		.meaning = "frames per second, which the device must have itself" },
	[ALSA_CHANNELS] = { "channels", SETTING_INTEGER, 2, 1, MAX_CHANNELS,
		.meaning = "samples in a frame, one of each channel" },
	[ALSA_FORMAT] = { "format", SETTING_CHOICE, .text = "auto", .choices = "auto|S16|S24_3|S24|S32|FLOAT",
		.meaning = "sample format; auto: the widest the device has" },
	[ALSA_PERIOD] = { "period_s", SETTING_NUMBER, 0.01, 0.0005, 1,
		.meaning = "time between deliveries: shorter delays a trigger less, longer costs less" },
	[ALSA_BUFFER] = { "buffer_s", SETTING_NUMBER, 0.5, 0.002, 10,
		.meaning = "what the device may hold back before frames are lost" },
	[ALSA_PACED] = { "paced", SETTING_BOOLEAN, 1, 0, 1,
		.meaning = "the device delivers at its rate; false: a plug-in that gives a file's samples at once" },
	[ALSA_CONTROLS] = { "controls", SETTING_TEXT,
		.meaning = "mixer controls set each time the card is opened, by their names, to a number, a percentage of the range, on, "
			"off or an item; / parts channels",
		.example = "Mic Capture Volume = 60%, Mic Capture Switch = on" },
	[ALSA_AUTOMATIC_GAIN] = { "automatic_gain", SETTING_CHOICE, .text = "switch_off", .choices = "switch_off|refuse|allow",
		.meaning = "what is done when the card's gain follows the signal, which spoils amplitudes" },
	{ .name = NULL },
};

/* A card has one descriptor, a multi many. */
enum { MAX_DESCRIPTORS = 32 };

/* Started again so often without a block in between, the device is given up: opening it anew goes deeper. */
enum { MAX_IN_VAIN = 5 };
/* A device that runs and delivers nothing for so long, or for some of its buffers, is started again. */
static const double silence_s = 2, silence_buffers = 4;
/* A rate so far off for so long is another rate: no crystal errs by a thousandth, and a loss passes. */
static const double wrong_rate = 0.01, wrong_rate_s = 10;

struct alsa_intake {
	struct intake intake;           /* first */
	struct alsa_device device;
	snd_pcm_status_t *status;
	struct pollfd descriptors[MAX_DESCRIPTORS];
	unsigned descriptor_count;
	void *buffer;
	uint64_t next;                  /* number of the next frame, counting those lost */
	unsigned gap;                   /* flags of the gap, of a length still unknown, before the next block; 0: none */
	unsigned in_vain;               /* restarts since the last block */
	int64_t heard_ns;               /* when the last block came, or the device was started */
	int64_t slept_ns;               /* by the computer since it was switched on */
	struct stamp_line line;         /* in true time: a gap is as long as the sleep was */
	int64_t right_ns;               /* when the rate was last seen to be right, in that time */
	double measured;                /* frames per second, when that is not the rate granted */
	int error;                      /* errno of a failed read */
};

static void alsa_close(struct intake *intake)
{
	struct alsa_intake *alsa = (struct alsa_intake *)intake;

	if (!alsa)
		return;
	snd_pcm_close(alsa->device.pcm);
	if (alsa->status)
		snd_pcm_status_free(alsa->status);
	free(alsa->buffer);
	free(alsa);
}

static int fill(struct alsa_intake *alsa, const struct setting_value *values)
{
	const struct alsa_device *device = &alsa->device;

	alsa->intake.driver = &intake_alsa;
	alsa->intake.format = device->format;
	alsa->intake.rate = device->rate;
	alsa->intake.real_time = values[ALSA_PACED].integer;
	intake_rename(&alsa->intake, device->name);
	alsa->buffer = calloc(device->block_frames, frame_bytes(device->format));
	return alsa->buffer && snd_pcm_status_malloc(&alsa->status) >= 0 ? 0 : -ENOMEM;
}

static int alsa_open(struct intake **out, const struct setting_value *values)
{
	struct sound_wish wishes[SOUND_WISHES];
	const int count = sound_wishes_parse(wishes, values[ALSA_CONTROLS].text);
	struct alsa_intake *alsa;
	int ret;

	if (count < 0)
		return count;
	alsa = calloc(1, sizeof(*alsa));
	if (!alsa)
		return -ENOMEM;
	ret = alsa_device_open(&alsa->device, values);
	if (ret < 0) {
		free(alsa);
		return ret;
	}
	/* The mixer last: now no other program has the card's PCM. */
	if ((ret = fill(alsa, values)) < 0 || (ret = sound_mixer_apply(&alsa->intake, alsa->device.card, wishes, count,
	     (enum automatic_gain)values[ALSA_AUTOMATIC_GAIN].integer)) < 0) {
		alsa_close(&alsa->intake);
		return ret;
	}
	log_detail("\"%s\", %s, gives %u channels of %s at %.9g Hz every %.1f ms and holds %.0f ms", alsa->intake.name,
		alsa->device.own_stamps ? "a device with stamps of its own" : "a plug-in dated by the arrival of its frames",
		alsa->intake.format.channels, sample_type_name(alsa->intake.format.type), alsa->intake.rate,
		alsa->device.period_us * 1e-3, alsa->device.buffer_us * 1e-3);
	if (!alsa->device.own_stamps && alsa->intake.real_time)
		log_warning("\"%s\" is a plug-in, not the card itself: no real time; its frames are dated by their arrival, and a "
			"busy computer may lose some (hw:CARD,DEVICE or card = gives the card)", alsa->intake.name);
	*out = &alsa->intake;
	return 0;
}

/* Empties the device, whatever it is doing, and lets it run. */
static int restart(struct alsa_intake *alsa)
{
	snd_pcm_drop(alsa->device.pcm);
	alsa->heard_ns = host_now();
	const int ret = snd_pcm_prepare(alsa->device.pcm);

	return ret < 0 ? ret : snd_pcm_start(alsa->device.pcm);
}

/* What a card pulled out of its socket answers depends on the call. */
static int name_error(const struct alsa_intake *alsa, int error)
{
	const bool gone = error == -ENODEV || error == -ENXIO || error == -ENOTTY ||
		snd_pcm_state(alsa->device.pcm) == SND_PCM_STATE_DISCONNECTED;

	return gone ? -ENODEV : error;
}

/* Whether the computer has slept since the last call. */
static bool woke_up(struct alsa_intake *alsa)
{
	int64_t late_ns;
	const int64_t least_ns = 5000000, slept_ns = host_slept(&late_ns);
	const bool woke = slept_ns - alsa->slept_ns > least_ns + late_ns;

	if (woke)
		alsa->slept_ns = slept_ns;
	return woke;
}

static int alsa_start(struct intake *intake)
{
	struct alsa_intake *alsa = (struct alsa_intake *)intake;
	const int ret = restart(alsa);

	if (ret < 0) {
		log_error("device: \"%s\" does not start: %s", intake->name, snd_strerror(ret));
		return name_error(alsa, ret);
	}
	const int count = snd_pcm_poll_descriptors(alsa->device.pcm, alsa->descriptors, MAX_DESCRIPTORS);
	alsa->descriptor_count = count > 0 ? (unsigned)count : 0;
	alsa->next = 0;
	alsa->gap = alsa->in_vain = 0;
	alsa->error = 0;
	alsa->slept_ns = host_slept(NULL);
	stamp_line_create(&alsa->line, intake->rate);
	return 0;
}

static int alsa_stop(struct intake *intake)
{
	struct alsa_intake *alsa = (struct alsa_intake *)intake;

	snd_pcm_drop(alsa->device.pcm);        /* of a device that has gone this fails, and it stands still all the same */
	return 0;
}

static void alsa_nap(int timeout_ms)
{
	poll(NULL, 0, timeout_ms < 10 ? timeout_ms : 10);
}

static unsigned why_lost(int error)
{
	return error == -EPIPE ? BLOCK_OVERRUN : error == -ESTRPIPE ? BLOCK_SLEPT : BLOCK_STALLED;
}

/*
 * Brings the device back after `error` of a call.
 *
 * @return 0: try again, later; -errno: it is not to be had any more
 */
static int recover(struct alsa_intake *alsa, int error, int timeout_ms)
{
	int ret = name_error(alsa, error);

	if (error == -EAGAIN || error == -EINTR) {
		alsa_nap(timeout_ms < 1 ? timeout_ms : 1);
		return 0;
	}
	if (error == -ESTRPIPE && snd_pcm_resume(alsa->device.pcm) == -EAGAIN) {
		alsa_nap(timeout_ms);   /* still asleep */
		return 0;
	}
	/*
	 * However it stopped it is emptied: frames from before a sleep would be taken for later ones.  What stops again and
	 * again before it has given anything must not take the core away.
	 */
	if (ret != -ENODEV && alsa->in_vain < MAX_IN_VAIN) {
		if (alsa->in_vain++)
			alsa_nap(timeout_ms);
		ret = name_error(alsa, restart(alsa));
		alsa->gap |= BLOCK_GAP | why_lost(error);
		if (ret >= 0)
			return 0;
	}
	alsa->error = -ret;
	return ret;
}

/*
 * When the next frame to be read was taken.  A stamp that is zero, of another clock or older than the device can hold
 * is none; then the moment of asking stands for it.  Either errs late only.
 */
static int64_t stamp_next_frame(struct alsa_intake *alsa, int64_t now, bool *late)
{
	const snd_pcm_sframes_t avail = (snd_pcm_sframes_t)snd_pcm_status_get_avail(alsa->status);
	const snd_pcm_sframes_t delay = snd_pcm_status_get_delay(alsa->status);
	/* The delay of a card counts what is on the way to the buffer, too; a plug-in's is an estimate, perhaps too long. */
	const double frames = (double)(alsa->device.own_stamps && delay > avail ? delay : avail);
	const double oldest_ns = alsa->device.buffer_us * 1e3 + 1e9;
	snd_htimestamp_t own;

	snd_pcm_status_get_htstamp(alsa->status, &own);
	const int64_t stamp = (int64_t)own.tv_sec * 1000000000 + own.tv_nsec;
	const bool valid = stamp > 0 && stamp <= now && (double)(now - stamp) < oldest_ns;
	*late = !valid || !alsa->device.own_stamps;
	return (valid ? stamp : now) - (int64_t)(frames / alsa->intake.rate * 1e9);
}

static int state_error(snd_pcm_t *pcm)
{
	switch (snd_pcm_state(pcm)) {
	case SND_PCM_STATE_XRUN:
		return -EPIPE;
	case SND_PCM_STATE_SUSPENDED:
		return -ESTRPIPE;
	case SND_PCM_STATE_DISCONNECTED:
		return -ENODEV;
	default:
		return -EBADFD; /* it stopped by itself, as a loopback does when its other end is set up anew */
	}
}

/*
 * Waits for a block: 1, 0 when the time is over, or -errno.  Not snd_pcm_wait: it goes round and round, past its
 * timeout, while a plug-in's descriptor is ready and its frames are not (seen with PulseAudio's), which at real-time
 * priority would take a core away.  Woken in vain, this naps.
 */
static int await_block(struct alsa_intake *alsa, int timeout_ms)
{
	const int64_t deadline = host_now() + (int64_t)timeout_ms * 1000000;

	for (bool in_vain = false;;) {
		const snd_pcm_sframes_t avail = snd_pcm_avail_update(alsa->device.pcm);
		unsigned short events = 0;
		if (avail < 0)
			return (int)avail;
		if (avail >= (snd_pcm_sframes_t)alsa->device.block_frames)
			return 1;
		const int64_t left_ns = deadline - host_now();
		if (left_ns <= 0)
			return 0;
		if (in_vain)
			poll(NULL, 0, 1);
		const int ready = poll(alsa->descriptors, alsa->descriptor_count, (int)((left_ns + 999999) / 1000000));
		if (ready < 0 && errno != EINTR)
			return -errno;
		in_vain = ready > 0;
		if (in_vain)
			snd_pcm_poll_descriptors_revents(alsa->device.pcm, alsa->descriptors, alsa->descriptor_count, &events);
		if (events & (POLLERR | POLLHUP | POLLNVAL))
			return state_error(alsa->device.pcm);
	}
}

/* A plug-in is let alone: what it would be stopped through may be the very server that hangs. */
static bool is_silent(const struct alsa_intake *alsa)
{
	const double limit_ns = fmax(silence_s * 1e9, silence_buffers * alsa->device.buffer_us * 1e3);

	return alsa->device.own_stamps && (double)(host_now() - alsa->heard_ns) > limit_ns;
}

/* The device's next frames into the buffer: 1, 0 or -errno. */
static int fetch(struct alsa_intake *alsa, struct block *block, int timeout_ms)
{
	bool late;
	int ret = await_block(alsa, timeout_ms);

	if (ret == 0 && is_silent(alsa))
		return -ETIMEDOUT;
	if (ret <= 0)
		return ret;
	ret = snd_pcm_status(alsa->device.pcm, alsa->status);
	if (ret < 0)
		return ret;
	const int64_t now = host_now(), stamp = stamp_next_frame(alsa, now, &late);
	const snd_pcm_sframes_t count = snd_pcm_readi(alsa->device.pcm, alsa->buffer, alsa->device.block_frames);
	if (count <= 0)
		return (int)count;
	alsa->heard_ns = now;
	*block = (struct block){ alsa->buffer, (size_t)count, alsa->next, stamp, late ? BLOCK_STAMP_LATE : 0 };
	return 1;
}

/* The block's place among all frames, by the true time since the last one when some were lost. */
static void place(struct alsa_intake *alsa, struct block *block)
{
	const int64_t true_ns = block->host_ns + alsa->slept_ns;

	if (alsa->gap || !alsa->line.started)
		alsa->right_ns = true_ns;
	if (alsa->gap) {
		block->first += stamp_line_gap(&alsa->line, alsa->next, true_ns);
		block->flags |= alsa->gap;
	} else {
		stamp_line_add(&alsa->line, block->first, true_ns);
	}
	alsa->gap = alsa->in_vain = 0;
	alsa->next = block->first + block->count;
}

/* Whether the device delivers at another rate than the one granted: nothing that is dated by its frames would be right. */
static bool rate_is_wrong(struct alsa_intake *alsa, const struct block *block)
{
	const int64_t true_ns = block->host_ns + alsa->slept_ns;
	const double rate = stamp_line_recent_rate(&alsa->line, block->first, true_ns);

	if (!alsa->device.own_stamps || rate <= 0)
		return false;
	if (fabs(rate / alsa->intake.rate - 1) <= wrong_rate)
		alsa->right_ns = true_ns;
	if ((double)(true_ns - alsa->right_ns) < wrong_rate_s * 1e9)
		return false;
	alsa->measured = rate;
	alsa->error = ERANGE;
	return true;
}

static int alsa_read(struct intake *intake, struct block *block, int timeout_ms)
{
	struct alsa_intake *alsa = (struct alsa_intake *)intake;
	int ret;

	if (alsa->error)
		return -alsa->error;
	alsa_quiet = true;
	ret = fetch(alsa, block, timeout_ms);
	/* A driver that sleeps and says nothing has frames of before and after in one buffer. */
	if (intake->real_time && woke_up(alsa) && ret >= 0)
		ret = -ESTRPIPE;        /* whatever was read is dropped, and counted as lost */
	if (ret < 0)
		ret = recover(alsa, ret, timeout_ms);
	alsa_quiet = false;
	if (ret <= 0)
		return ret;
	place(alsa, block);
	if (rate_is_wrong(alsa, block))
		return -alsa->error;
	if (!intake->real_time) {
		block->host_ns = INT64_MIN;
		block->flags &= ~(unsigned)BLOCK_STAMP_LATE;
	}
	return 1;
}

static void alsa_explain(struct intake *intake, char *sentence, size_t size)
{
	const struct alsa_intake *alsa = (const struct alsa_intake *)intake;

	sentence[0] = 0;
	if (alsa->error == ENODEV)
		snprintf(sentence, size, "\"%s\" has gone after %" PRIu64 " frames: was it unplugged?", intake->name,
			alsa->next);
	else if (alsa->error == ERANGE)
		snprintf(sentence, size, "\"%s\" gives %.0f frames a second where %.9g were granted", intake->name,
			alsa->measured, intake->rate);
	else if (alsa->error == ETIMEDOUT)
		snprintf(sentence, size, "\"%s\" has delivered nothing since %" PRIu64 " frames, though it was started again",
			intake->name, alsa->next);
	else if (alsa->error)
		snprintf(sentence, size, "\"%s\" failed after %" PRIu64 " frames: %s", intake->name, alsa->next,
			snd_strerror(-alsa->error));
}

const struct intake_driver intake_alsa = {
	.name = "alsa", .summary = "a sound card, or any other PCM of ALSA",
	.settings = alsa_settings,
	.open = alsa_open, .start = alsa_start, .stop = alsa_stop, .close = alsa_close,
	.read = alsa_read, .explain = alsa_explain, .comes_back = true,
};
