/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef STATE_H
#define STATE_H

#include <stddef.h>

/*
 * The local state socket: whoever connects is told, in lines of JSON, what the recorder is doing.  Nothing is read from
 * them and nobody is waited for: who reads too slowly misses lines and is told how many.  Main thread only.
 */
struct state;

/**
 * Listens at `path`, group-readable; what an earlier recorder left there is replaced, a living one's is not.
 *
 * @return 0; -errno: nobody can look in (the caller says so), which never keeps the recorder from recording
 */
int  state_open(struct state **out, const char *path);
/** Passes on what readers take at once, removes the socket.  NULL is fine. */
void state_close(struct state *state);

/**
 * One line for everybody.
 *
 * @param kind  what it is about; the newest line of each kind is given to later comers. NULL: not kept (a passing event)
 * @param line  without its newline
 */
void state_publish(struct state *state, const char *kind, const char *line);
/** Lets readers in and passes on what is waiting.  Never blocks. */
void state_poll(struct state *state);
size_t state_readers(const struct state *state);

#endif
