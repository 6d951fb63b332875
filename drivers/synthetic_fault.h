/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_SYNTHETIC_FAULT_H
#define LIMBWATCH_SYNTHETIC_FAULT_H

#include "synthetic_card.h"

/*
 * How the synthetic intake misbehaves: frames lost (or given twice) in silence, and frames lost and said.  `taken` counts the frames the
 * card has taken, lost ones too; `told` is the number it gives to one.
 */
struct synthetic_fault {
	uint64_t loss_at, gap_at;       /* taken; UINT64_MAX: never */
	uint64_t lost, twice, gap;      /* frames */
};

struct synthetic_fault_settings { double loss_s, gap_s; long long loss_frames, gap_frames; };

void synthetic_fault_init(struct synthetic_fault *out, const struct synthetic_card *card,
                          const struct synthetic_fault_settings *settings);
/** How many of `most` frames from `taken` on come before something happens. */
size_t synthetic_fault_quiet(const struct synthetic_fault *fault, uint64_t taken, size_t most);
/** Number given to a frame; one that was lost has that of the next. */
double synthetic_fault_told(const struct synthetic_fault *fault, double taken);

#endif
