/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * Frames that no number counts.  All the clock's work is on frames counted truly; so a loss bends nothing and breaks no comb,
 * wherever it is found.
 */
#include <errno.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>
#include "frame_clock_inner.h"

enum { LOSSES = 32768 };                /* one a second for nine hours */

/* When the memory is full the oldest half goes; later frames are counted as before. */
static bool loss_room(struct frame_clock *c)
{
	size_t room = c->loss_room ? 2 * c->loss_room : 16;
	struct lost *grown;

	if (c->losses < c->loss_room)
		return true;
	if (c->losses == LOSSES) {
		c->losses /= 2;
		memmove(c->loss, c->loss + LOSSES - c->losses, c->losses * sizeof(*c->loss));
		return true;
	}
	grown = realloc(c->loss, room * sizeof(*grown));
	if (!grown)
		return false;
	c->loss = grown;
	c->loss_room = room;
	return true;
}

/* In the order of their frames: a jump of the phase is found when later gaps have been told. */
static void note_gap(struct frame_clock *c, double told, double sigma_s)
{
	size_t k;

	if (c->gaps == FRAME_CLOCK_GAPS)
		memmove(c->gap_at, c->gap_at + 1, --c->gaps * sizeof(*c->gap_at));
	for (k = c->gaps++; k > 0 && c->gap_at[k - 1].told > told; k--)
		c->gap_at[k] = c->gap_at[k - 1];
	c->gap_at[k] = (struct gap_at){ told, clock_counted(c, told, NULL), sigma_s };
}

void frame_clock_add_gap(struct frame_clock *c, double frame, double sigma_frames)
{
	if (!isfinite(frame) || !(sigma_frames >= 0))
		return;
	note_gap(c, frame, sigma_frames / c->settings.rate);
	if (c->phase)
		pulse_phase_add_gap(c->phase, clock_counted(c, frame, NULL) - c->found, sigma_frames);
}

static int note_loss(struct frame_clock *c, const struct lost *loss)
{
	const struct lost *newest;
	struct lost *l;

	if (!loss_room(c))
		return -ENOMEM;
	newest = c->losses ? &c->loss[c->losses - 1] : NULL;
	l = &c->loss[c->losses++];
	*l = *loss;
	if (newest) {
		l->after = fmax(l->after, newest->before);
		l->before = fmax(l->before, l->after);
		l->sum = newest->sum + newest->frames;
	}
	return 0;
}

/* The same loss as the clock found itself: what is told counts. */
static bool replace_found(struct frame_clock *c, double after, double before, double frames)
{
	struct lost *l = c->losses ? &c->loss[c->losses - 1] : NULL;

	if (!l || !l->found || l->before <= after || before <= l->after)
		return false;
	c->found += frames - l->frames;
	l->frames = frames;
	return true;
}

int frame_clock_add_loss(struct frame_clock *c, double after, double before, double frames, double sigma_frames)
{
	const struct lost loss = { .after = after, .before = before, .frames = frames };
	int ret;

	if (!isfinite(after) || !isfinite(before) || !isfinite(frames) || !(sigma_frames >= 0) || before < after)
		return -EINVAL;
	if (!replace_found(c, after, before, frames)) {
		ret = note_loss(c, &loss);
		if (ret < 0)
			return ret;
	}
	if (sigma_frames > 0)
		frame_clock_add_gap(c, before, sigma_frames);
	return 0;
}

void clock_watch_phase(struct frame_clock *c, double frame, double sigma_frames)
{
	struct phase_loss loss;
	struct lost lost = { .found = true };

	if (!c->phase || pulse_phase_add_edge(c->phase, frame - c->found, sigma_frames, &loss) != PHASE_JUMPED)
		return;
	lost.after = clock_told(c, (double)loss.after + c->found);
	lost.before = clock_told(c, (double)loss.before + c->found);
	lost.frames = loss.frames;
	/* It goes on counting with the jump in it, whatever is made of it here. */
	if (loss.pulse_moved || note_loss(c, &lost) < 0) {
		note_gap(c, lost.before, fabs(loss.frames) / c->settings.rate);
		return;
	}
	c->found += loss.frames;
	if (loss.sigma_frames > 0)
		note_gap(c, lost.before, loss.sigma_frames / c->settings.rate);
}

/* The newest loss that begins at or before a frame, or NULL. */
static const struct lost *loss_before(const struct frame_clock *c, double told)
{
	size_t low = 0, high = c->losses;

	while (low < high) {
		size_t middle = low + (high - low) / 2;

		if (c->loss[middle].after <= told)
			low = middle + 1;
		else
			high = middle;
	}
	return low ? &c->loss[low - 1] : NULL;
}

/* Every place between is as likely: at part u of the way the loss is over with probability u. */
double clock_counted(const struct frame_clock *c, double told, double *sigma_frames)
{
	const struct lost *l = loss_before(c, told);
	double u = 1;

	if (sigma_frames)
		*sigma_frames = 0;
	if (!l)
		return told;
	if (told < l->before)
		u = (told - l->after) / (l->before - l->after);
	if (sigma_frames)
		*sigma_frames = sqrt(u * (1 - u)) * fabs(l->frames);
	return told + l->sum + u * l->frames;
}

double clock_told(const struct frame_clock *c, double frame)
{
	size_t low = 0, high = c->losses;
	const struct lost *l;

	while (low < high) {
		size_t middle = low + (high - low) / 2;

		if (c->loss[middle].after + c->loss[middle].sum <= frame)
			low = middle + 1;
		else
			high = middle;
	}
	if (!low)
		return frame;
	l = &c->loss[low - 1];
	if (frame >= l->before + l->sum + l->frames)
		return frame - l->sum - l->frames;
	/* More given twice than the span holds is no truth, but must not mislead. */
	if (l->before - l->after + l->frames <= 0)
		return l->before;
	return l->after + (frame - l->after - l->sum) / (l->before - l->after + l->frames) * (l->before - l->after);
}

/*
 * Edges come up to two seconds after their frame, later than news of a gap: which pulse is the first behind a gap is known only
 * now.  Pulses before the oldest gap that is remembered keep what was found then.
 */
static void place_gaps(struct frame_clock *c)
{
	size_t g = 0;

	for (size_t i = 0; c->gaps && i < c->nodes; i++) {
		struct node *n = &c->node[i];

		if (n->told < c->gap_at[0].told)
			continue;
		n->gap_s = 0;
		for (; g < c->gaps && c->gap_at[g].told <= n->told; g++) {
			n->gap_s = hypot(n->gap_s, c->gap_at[g].sigma_s);
			n->gap_told = c->gap_at[g].told;
		}
	}
}

void clock_count_all(struct frame_clock *c)
{
	for (size_t i = 0; i < c->nodes; i++)
		c->node[i].frame = clock_counted(c, c->node[i].told, NULL);
	for (size_t i = 0; i < c->gaps; i++)
		c->gap_at[i].frame = clock_counted(c, c->gap_at[i].told, NULL);
	for (size_t i = 0; i < c->labels; i++) {
		double sigma;

		c->label[i].frame = clock_counted(c, c->label[i].told, &sigma);
		c->label[i].sigma_s = hypot(c->label[i].told_sigma_s, sigma / c->settings.rate);
	}
	place_gaps(c);
}
