/* SPDX-License-Identifier: GPL-3.0-or-later */
#ifndef REALTIME_H
#define REALTIME_H

#include <pthread.h>
#include <stdbool.h>

/* What keeps the acquisition on time: memory that is never paged out, a thread that nothing ordinary displaces. */

/** Locks what is touched from now on, as far as the limit allows: all of it or nothing. @return 0 or -errno */
int realtime_lock_memory(void);
/** Gives a thread real-time priority (SCHED_FIFO, not inherited by children), 1 to 99. @return 0 or -errno */
int realtime_raise(pthread_t thread, int priority);
/** One clear sentence on each refusal, with what would help: for the log of a live device. */
void realtime_say(int memory, int priority);

#endif
