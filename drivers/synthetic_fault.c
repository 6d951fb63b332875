/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <math.h>
#include "synthetic_fault.h"

static uint64_t frame_of(const struct synthetic_card *card, double t)
{
	return (uint64_t)llround(fmax(0, synthetic_card_frame(card, t)));
}

void synthetic_fault_init(struct synthetic_fault *out, const struct synthetic_card *card,
                          const struct synthetic_fault_settings *s)
{
	*out = (struct synthetic_fault){ .loss_at = UINT64_MAX, .gap_at = UINT64_MAX };
	if (s->loss_frames != 0)
		out->loss_at = frame_of(card, s->loss_s);
	if (s->gap_frames > 0)
		out->gap_at = frame_of(card, s->gap_s);
	out->gap = (uint64_t)(s->gap_frames > 0 ? s->gap_frames : 0);
	if (s->loss_frames > 0)
		out->lost = (uint64_t)s->loss_frames;
	else if (s->loss_frames < 0)
		out->twice = (uint64_t)-s->loss_frames;
	if (out->twice > out->loss_at)
		out->twice = out->loss_at;      /* there are no more to be given again */
	/* One thing after the other. */
	if (out->gap && out->gap_at < out->loss_at + out->lost && out->gap_at + out->twice > out->loss_at)
		out->gap_at = out->loss_at + out->lost;
}

static size_t until(uint64_t taken, uint64_t at, size_t most)
{
	return at > taken && at - taken < most ? (size_t)(at - taken) : most;
}

size_t synthetic_fault_quiet(const struct synthetic_fault *f, uint64_t taken, size_t most)
{
	/* What is given twice is a block of its own. */
	if (f->twice)
		most = until(taken, f->loss_at - f->twice, most);
	return until(taken, f->gap_at, until(taken, f->loss_at, most));
}

double synthetic_fault_told(const struct synthetic_fault *f, double taken)
{
	if (f->loss_at == UINT64_MAX || taken < (double)f->loss_at)
		return taken;
	return fmax((double)f->loss_at, taken - (double)f->lost) + (double)f->twice;
}
