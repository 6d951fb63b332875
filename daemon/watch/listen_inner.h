/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LISTEN_INNER_H
#define LISTEN_INNER_H

#include "lane.h"
#include "limbwatch/host_clock.h"
#include "limbwatch/levels.h"
#include "limbwatch/pulse.h"
#include "listen.h"
#include "loss.h"

/* What listen.c (the thread), vigil.c (expected contacts) and sighting.c (seen contacts, plans) share: all of it is
 * the signal thread's. */

enum { SIGHTINGS = 64, OUTSIDE_LANES = 8 };

enum vigil_state { VIGIL_WAITING, VIGIL_OPEN, VIGIL_DONE };

struct vigil {
	enum vigil_state state;
	struct tai begin, end;
	uint64_t first, last;           /* frames, once open */
	unsigned seen;
	struct lane *lane[CONFIG_CHANNELS];     /* NULL where the channel is not watched */
};

/* A contact on its way: held until every lane has had its say, then until pulses on both sides are in. */
struct sighting {
	struct contact contact;
	bool announced;
};

struct listener {
	struct listener_settings settings;
	const struct config *config;
	double rate;
	size_t lanes;
	struct lane *lane[OUTSIDE_LANES * CONFIG_CHANNELS];
	struct vigil vigil[CONFIG_EXPECTED];
	int pulse_channel;              /* index in the configuration, or -1 */
	struct pulse_detector *pulses;
	struct frame_clock *clock;
	struct loss_watch *loss;        /* between the two; NULL without a pulse channel */
	struct host_clock_watch host;   /* whether the host's clock is set meanwhile */
	uint64_t next_frame;            /* after the newest heard */
	uint64_t solved;                /* frame at the last solution */
	bool dated;                     /* some label says what time it is */
	bool undated_said;
	uint64_t hold, settle;          /* frames: until all lanes have spoken; until later pulses are in */
	uint64_t startup;               /* frames the lanes hold back at the beginning */
	size_t sightings;
	struct sighting sighting[SIGHTINGS];
	uint64_t resumed;               /* first frame after the last break */
	size_t plans;                   /* not final yet, oldest first */
	struct plan *plan[16];
	uint64_t clipped;               /* of lanes already gone */
	void *frames;                   /* one chunk */
	double *samples;
	struct strip strip;
	struct meter *meter;            /* NULL: nobody looks */
	uint64_t metered;               /* frame at the last report of it */
	uint64_t shown;                 /* frame at the last glance */
	bool busy;                      /* as shown */
	struct latency latency;
	atomic_ullong heard, lost, beats;
	atomic_uint contacts;
};

enum { CHUNK = 4096 };                  /* frames */

/* listen.c */
/** Shows at once that there is no time for changes, or that there is again. */
void listener_show_busy(struct listener *l, bool busy);

/* vigil.c */
void vigils_create(struct listener *l);
/** Opens, refreshes and closes vigils as the frames pass. `ending`: no more frames will come. */
void vigils_update(struct listener *l, bool ending);
/** Feeds the open vigils' lanes. */
void vigils_execute(struct listener *l, const void *frames, size_t count, uint64_t first);
/** Tells open vigils where the better clock now puts their contacts. */
void vigils_refresh(struct listener *l);
void vigils_destroy(struct listener *l);

/* sighting.c */
/** A lane gave these contacts. */
void sightings_add(struct listener *l, const struct contact *contact, size_t n);
/** Announces those all lanes have spoken about, and hands settled ones to their plan. `ending`: all of them. */
void sightings_update(struct listener *l, bool ending);
/** Keeps [from, to), stretched into the newest plan where it overlaps. `what` names it in the file name; may be "". */
void plans_keep(struct listener *l, uint64_t from, uint64_t to, enum segment_reason reason, const char *what);
/** Closes plans whose frames and settling time have passed. */
void plans_update(struct listener *l, bool ending);
/** After a gap too long to fill: every plan ends at `frame`; what is still wanted begins anew at `resumed`. */
void plans_break(struct listener *l, uint64_t frame, uint64_t resumed);

#endif
