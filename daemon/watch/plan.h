/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef PLAN_H
#define PLAN_H

#include <pthread.h>
#include <stdbool.h>
#include <stdint.h>
#include "limbwatch/sidecar.h"

struct segment;

/*
 * A plan becomes one segment, or several when the disk failed in between or a gap was too long: pieces.
 * A piece's sidecar is written when it begins, whenever the plan knows more, and for good when the plan is final.
 */
struct piece {
	char name[SIDECAR_TEXT];
	uint64_t first, end;            /* frames [first, end) */
	struct segment *segment;        /* NULL once closed */
	struct sidecar described;       /* parts and gaps only */
};

/*
 * What is to be kept: the signal thread makes plans, the keeper carries them out.  A plan is a stretch of frames with the
 * sidecar as known so far.  Only the newest plan can still grow; a final one belongs to the keeper alone.
 */
struct plan {
	uint64_t from, to;              /* [from, to) */
	bool final;
	unsigned version;               /* of the sidecar, grows */
	char name[SIDECAR_TEXT];
	char description[256];
	uint64_t start_frame;           /* `from` when the plan was made */
	struct tai start;               /* of that frame, as known then */
	enum time_quality quality;
	struct sidecar sidecar;
	struct plan *next;
	/* Recorded before the time was known, and put aside until it is: then only its sidecars are written again. */
	bool amended;
	size_t pieces;
	struct piece *piece;
	int64_t host_ns;                /* CLOCK_MONOTONIC of start_frame, or INT64_MIN */
	/* The signal thread's own. */
	enum segment_reason reason;
	size_t contacts, room;
	struct contact *contact;
	uint64_t refreshed;             /* frame at the last refresh of the sidecar */
};

struct plans {
	pthread_mutex_t mutex;
	struct plan *head;
	uint64_t decided;               /* frames before this and in no plan are not wanted */
	bool ended;                     /* no more plans will come */
	struct plan *aside;             /* undated ones, newest first */
	size_t asides;
	bool host_known;                /* the host's clock has become known: what earlier runs left can be dated */
	int64_t begun_ns;               /* CLOCK_MONOTONIC when this run began */
};

int  plans_open(struct plans *plans);
void plans_close(struct plans *plans);

/** Signal thread: the newest plan, or NULL. Only the signal thread adds, so the answer stays true until it does. */
struct plan *plans_newest(struct plans *plans);
/** Signal thread: appends a plan (taken over). */
void plans_append(struct plans *plans, struct plan *plan);
/** Signal thread: stretches a plan that is not final. */
void plans_stretch(struct plans *plans, struct plan *plan, uint64_t from, uint64_t to);
/** Signal thread: cuts a plan off. */
void plans_cut(struct plans *plans, struct plan *plan, uint64_t to);
/** Signal thread: a new sidecar (moved in); final: nothing more will come, the plan is the keeper's from then on. */
void plans_describe(struct plans *plans, struct plan *plan, struct sidecar *sidecar, bool final);
/** Signal thread: frames below `decided` in no plan may be forgotten. */
void plans_decide(struct plans *plans, uint64_t decided, bool ended);

/* What the keeper sees of the oldest plan. */
struct plan_view {
	struct plan *plan;              /* NULL: none */
	uint64_t from, to, decided;
	bool final, ended, amended;
	unsigned version;
};
void plans_view(struct plans *plans, struct plan_view *view);
/** Keeper: a copy of the plan's sidecar, the caller's to clear. @return 0 or -ENOMEM */
int  plans_copy_sidecar(struct plans *plans, const struct plan *plan, struct sidecar *out);
/** Keeper: done with the oldest plan, which is final. */
void plans_drop(struct plans *plans);
/** Keeper: the same, but the plan is put aside with its pieces (copied) until it can be dated; of very many the oldest go. */
void plans_put_aside(struct plans *plans, const struct piece *piece, size_t pieces);
/** Signal thread: a plan that was put aside, now the caller's; NULL: none. */
struct plan *plans_take_aside(struct plans *plans);
/** Signal thread: the host's clock is known. */
void plans_host_known(struct plans *plans);
/** Keeper: whether it is, once. */
bool plans_ask_host_known(struct plans *plans);

#endif
