/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef LIMBWATCH_SEGMENT_H
#define LIMBWATCH_SEGMENT_H

#include <stddef.h>
#include <stdint.h>
#include "limbwatch/disk.h"
#include "limbwatch/frames.h"
#include "limbwatch/sidecar.h"
#include "limbwatch/tai.h"

/*
 * Saved samples: Broadcast Wave (EBU Tech 3285) in the intake's native sample type, all channels, streamed.  While it
 * grows it is called NAME.wav.part; closing syncs, renames to NAME.wav and syncs the folder.  Header and
 * data are synced every second of recording; a new part NAME_p2.wav begins before 2 GiB.
 */
struct segment;

struct segment_header {
	const char *folder;             /* exists */
	const char *name;               /* base name without ending: "20310402T012345Z_brackenfold" */
	struct frame_format format;
	double rate;                    /* whole frames per second go into the WAV header */
	const char *station;            /* bext originator, cut to 32 bytes */
	const char *description;        /* bext description, cut to 256 bytes */
	struct tai start;               /* of the first frame */
	enum time_quality quality;      /* TIME_FREE: no date in bext */
	uint64_t first;                 /* number of the first frame */
	int64_t  part_bytes;            /* limit of a part; 0: 2 GiB less a margin */
};

/** Creates the first part. -errno without a sentence (the caller decides). Caller closes or abandons. */
int segment_create(struct segment **out, const struct disk *disk, const struct segment_header *header);

/**
 * Keeper thread.  Appends frames numbered first ..; frames missing before them (up to an hour) are written as zeros and
 * noted as a gap with the given uncertainty.  Syncs when a second has been written since the last sync.
 *
 * @return 0; -errno: what was written so far is closed properly by segment_close
 */
int segment_write(struct segment *segment, const void *frames, size_t count, uint64_t first, double gap_sigma_frames);

/** @return 0; -ENOENT: the growing file has been taken away, and what is written to it is lost */
int segment_look(const struct segment *segment);

/** Number after the last frame written. */
uint64_t segment_position(const struct segment *segment);

/** Parts and gaps so far, appended into the sidecar's own arrays (replacing what was there). @return 0 or -ENOMEM */
int segment_describe(const struct segment *segment, struct sidecar *sidecar);

/** Closes properly: header, sync, rename, sync of the folder.  Frees `segment` whatever happens. @return 0 or -errno */
int segment_close(struct segment *segment);

/** The disk took none of its frames: removes what there is of it and frees it. */
void segment_abandon(struct segment *segment);

/**
 * After a power cut or kill: closes every NAME.wav.part in the folder (header made to agree with the data that are
 * there, incomplete frame cut off, renamed), marks their sidecars REPAIRED (parts, frames), removes temporary
 * files.  One notice per segment.
 *
 * @return segments repaired, or -errno
 */
int segment_repair(const struct disk *disk, const char *folder);

#endif
