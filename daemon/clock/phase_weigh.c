/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * What a jump of the phase is: frames lost or given twice, which are whole, and as many as the stamps allow; or else the pulse itself
 * has moved.
 */
#include <math.h>
#include <string.h>
#include "pulse_phase_inner.h"

static const double least_frames = 0.5;
static const double sigmas = 6;
static const double whole_frame = 0.02;         /* by so much an edge depends on where in a frame it falls */
static const double doubled_s = 0.1;            /* more than a buffer is not given twice: it was lost */

/* ------------------------------------------------------------------ stamps */

void pulse_phase_add_stamp(struct pulse_phase *p, double frame, int64_t host_ns, bool late)
{
	double seconds = (double)host_ns * 1e-9;

	if (!isfinite(frame) || (p->stamps && frame - p->stamp[p->stamps - 1].frame < 0.25 * p->settings.rate))
		return;
	if (p->stamps == STAMPS)
		memmove(p->stamp, p->stamp + 1, --p->stamps * sizeof(*p->stamp));
	p->stamp[p->stamps++] = (struct phase_stamp){ frame, seconds, late };
}

/* Time less frames of the stamps in [from, to]: the least (stamps err late), and their spread. */
struct offsets { int count; double least, most; bool late; };

static struct offsets offsets_within(const struct pulse_phase *p, double from, double to)
{
	struct offsets o = { 0, INFINITY, -INFINITY, false };

	for (int i = 0; i < p->stamps; i++) {
		double offset = p->stamp[i].seconds - (p->stamp[i].frame - p->newest) / p->slope;

		if (p->stamp[i].frame < from || p->stamp[i].frame > to)
			continue;
		o.least = fmin(o.least, offset);
		o.most = fmax(o.most, offset);
		o.late |= p->stamp[i].late;
		o.count++;
	}
	return o;
}

/* What the stamps say was lost, frames; late: perhaps less. */
struct stamped { double frames, sigma; bool late; };

/* Frames lost between two frames by the stamps. @return false: they do not tell */
static bool lost_by_stamps(const struct pulse_phase *p, double after, double before, struct stamped *out)
{
	struct offsets then = offsets_within(p, after - 15 * p->slope, after), now = offsets_within(p, before, INFINITY);

	if (then.count < 2 || now.count < 1)
		return false;
	out->sigma = (0.002 + 0.5 * (then.most - then.least)) * p->slope;
	out->frames = (now.least - then.least) * p->slope;
	out->late = now.late;
	return out->sigma < 0.1 * p->slope;
}

/* Whatever makes a computer lose frames makes it late as well: too many lost by late stamps is no contradiction. */
static bool contradicts(const struct pulse_phase *p, const struct stamped *s, double frames, int whole)
{
	double excess = s->frames - frames;

	if (excess > 0 && s->late && whole == 1 && frames > -doubled_s * p->slope)
		return false;
	return fabs(excess) > sigmas * s->sigma;
}

/* ------------------------------------------------------------------ the meaning */

double phase_shift_variance(const struct pulse_phase *p, const struct phase_shift *s, double seconds)
{
	double edges = p->scatter * s->sigma;

	return edges * edges / s->count + phase_place_variance(p, 0.5 * (s->first_k + s->last_k) + seconds);
}

/* 1: whole frames; 0: not; -1: the pulses are not sharp enough to tell. */
static int is_whole(double frames, double sigma)
{
	if (4 * sigma + whole_frame > 0.35)
		return -1;
	return fabs(frames) > least_frames && fabs(frames - rint(frames)) <= 4 * sigma + whole_frame;
}

/*
 * The pulses say what was lost but for whole seconds.  Without stamps: rather lost than given twice, and rather a whole number
 * of frames.
 */
void phase_weigh(const struct pulse_phase *p, const struct phase_shift *s, struct phase_loss *out)
{
	double off = -s->sum / s->count, sigma = sqrt(phase_shift_variance(p, s, 0));
	double usual = off < -doubled_s * p->slope ? off + p->slope : off, other = usual == off ?
		(off > 0 ? off - p->slope : off + p->slope) : off;
	struct stamped stamped;

	*out = (struct phase_loss){
		.after = (uint64_t)fmax(0, ceil(p->newest)), .before = (uint64_t)fmax(0, floor(s->first)), .frames = usual,
	};
	if (out->before < out->after)
		out->before = out->after;
	if (lost_by_stamps(p, p->newest, s->first, &stamped)) {
		double seconds = rint((stamped.frames - off) / p->slope);

		out->frames = off + seconds * p->slope;
		sigma = sqrt(phase_shift_variance(p, s, seconds));      /* the card is known less well after so long */
		out->pulse_moved = contradicts(p, &stamped, out->frames, is_whole(out->frames, sigma));
	} else if (is_whole(usual, sigma) == 0 && is_whole(other, sigma) == 1) {
		out->frames = other;
	}
	out->pulse_moved |= is_whole(out->frames, sigma) == 0;
	out->sigma_frames = sigma;
	if (out->pulse_moved) {
		out->frames = off;
	} else if (is_whole(out->frames, sigma) == 1) {
		out->frames = rint(out->frames);
		out->sigma_frames = 0;
	}
}
