/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef SIDECAR_WORDS_H
#define SIDECAR_WORDS_H

/* Words of the sidecar in the order of their enumerations, NULL at the end. */
extern const char *const reason_words[], *const state_words[], *const quality_words[], *const kind_words[],
	*const verdict_words[], *const measure_words[], *const sample_words[];

#endif
