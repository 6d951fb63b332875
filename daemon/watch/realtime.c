/* SPDX-License-Identifier: GPL-3.0-or-later */
#include <errno.h>
#include <sched.h>
#include <string.h>
#include <sys/mman.h>
#include <sys/resource.h>
#include <unistd.h>
#include "limbwatch/log.h"
#include "realtime.h"

#ifndef MCL_ONFAULT
#define MCL_ONFAULT 4
#endif

/*
 * Pages are locked as they are touched (MCL_ONFAULT): whole stacks and libraries would take tens of megabytes.  Under a
 * limit every later mapping could fail, malloc with it; then memory is better left unlocked.
 */
int realtime_lock_memory(void)
{
	struct rlimit limit;

	if (getrlimit(RLIMIT_MEMLOCK, &limit) == 0 && limit.rlim_cur != RLIM_INFINITY && geteuid() != 0)
		return -EPERM;
	return mlockall(MCL_CURRENT | MCL_FUTURE | MCL_ONFAULT) < 0 ? -errno : 0;
}

int realtime_raise(pthread_t thread, int priority)
{
	struct sched_param param = { .sched_priority = priority };

	return -pthread_setschedparam(thread, SCHED_FIFO | SCHED_RESET_ON_FORK, &param);
}

void realtime_say(int memory, int priority)
{
	if (priority < 0)
		log_warning("no real-time priority for the acquisition (%s): a busy computer may lose frames; the systemd unit "
		            "grants it, in a shell \"ulimit -r\" shows the limit", strerror(-priority));
	if (memory < 0)
		log_warning("memory is not locked (%s): a page fetched from disk may cost frames; the systemd unit grants it, "
		            "in a shell \"ulimit -l unlimited\"", strerror(-memory));
}
