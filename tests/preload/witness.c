/* SPDX-License-Identifier: GPL-3.0-or-later */
/*
 * A witness of what the acquisition thread does once it runs: preloaded (LD_PRELOAD) into the plain build of limbwatchd, it counts
 * allocations and locks by interposing the C library's functions, and every system call but the few that waiting for a device
 * takes by a seccomp filter of that thread alone.  Page faults count too.  Says what it saw in the file named by WITNESS.
 *
 * With WITNESS_TEMPT set it commits each sin once itself, in that thread: so it is known that it would see them.
 */
#include <errno.h>
#include <fcntl.h>
#include <linux/audit.h>
#include <linux/filter.h>
#include <linux/seccomp.h>
#include <pthread.h>
#include <signal.h>
#include <stdatomic.h>
#include <stddef.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <dlfcn.h>
#include <sys/prctl.h>
#include <sys/resource.h>
#include <sys/syscall.h>
#include <time.h>
#include <unistd.h>

#if defined(__x86_64__)
#define ARCHITECTURE AUDIT_ARCH_X86_64
#elif defined(__aarch64__)
#define ARCHITECTURE AUDIT_ARCH_AARCH64
#else
#error "no seccomp architecture for this machine"
#endif

enum { WARM_UP = 200, SYSCALLS = 512 };         /* readings of the clock by that thread before it is watched */

static atomic_bool known;               /* which thread it is */
static pthread_t watched;
static atomic_uint readings;
static atomic_bool armed;
static atomic_uint allocations, locks, calls[SYSCALLS];
static long faults_before;
static struct { unsigned allocations, locks; long faults; } seen;       /* read when the thread has been joined */

void *__libc_malloc(size_t size);
void *__libc_calloc(size_t n, size_t size);
void *__libc_realloc(void *old, size_t size);
void  __libc_free(void *old);

static int mine(void)
{
	return atomic_load(&known) && pthread_equal(pthread_self(), watched);
}

static void count(atomic_uint *sin)
{
	if (atomic_load(&armed) && mine())
		atomic_fetch_add(sin, 1);
}

void *malloc(size_t size)              { count(&allocations); return __libc_malloc(size); }
void *calloc(size_t n, size_t size)    { count(&allocations); return __libc_calloc(n, size); }
void *realloc(void *old, size_t size)  { count(&allocations); return __libc_realloc(old, size); }
void free(void *old)                   { count(&allocations); __libc_free(old); }

int pthread_mutex_lock(pthread_mutex_t *mutex)
{
	static int (*next)(pthread_mutex_t *mutex);

	if (!next)
		next = (int (*)(pthread_mutex_t *))dlsym(RTLD_NEXT, "pthread_mutex_lock");
	count(&locks);
	return next(mutex);
}

/* The main thread names its threads. */
int pthread_setname_np(pthread_t thread, const char *name)
{
	static int (*next)(pthread_t thread, const char *name);

	if (!next)
		next = (int (*)(pthread_t, const char *))dlsym(RTLD_NEXT, "pthread_setname_np");
	if (!strcmp(name, "acquire") && !atomic_load(&known)) {
		watched = thread;
		atomic_store(&known, 1);
	}
	return next(thread, name);
}

static void on_call(int number, siginfo_t *info, void *context)
{
	(void)number;
	(void)context;
	if (info->si_syscall >= 0 && info->si_syscall < SYSCALLS)
		atomic_fetch_add(&calls[info->si_syscall], 1);
}

/* What waiting for a device takes, and what ends a thread; everything else is trapped (and not carried out). */
static const int allowed[] = {
	SYS_clock_nanosleep, SYS_clock_gettime, SYS_ioctl, SYS_ppoll, SYS_getrusage /* the witness's own */,
#ifdef SYS_poll
	SYS_poll,
#endif
	SYS_rt_sigreturn, SYS_rt_sigprocmask, SYS_exit, SYS_madvise, SYS_sched_yield,
};
enum { ALLOWED = sizeof(allowed) / sizeof(*allowed) };

static void filter_calls(void)
{
	struct sock_filter filter[4 + ALLOWED + 2], *f = filter;
	struct sock_fprog program = { .filter = filter };
	struct sigaction trap = { .sa_sigaction = on_call, .sa_flags = SA_SIGINFO };

	sigaction(SIGSYS, &trap, NULL);
	*f++ = (struct sock_filter)BPF_STMT(BPF_LD | BPF_W | BPF_ABS, offsetof(struct seccomp_data, arch));
	*f++ = (struct sock_filter)BPF_JUMP(BPF_JMP | BPF_JEQ | BPF_K, ARCHITECTURE, 1, 0);
	*f++ = (struct sock_filter)BPF_STMT(BPF_RET | BPF_K, SECCOMP_RET_KILL_PROCESS);
	*f++ = (struct sock_filter)BPF_STMT(BPF_LD | BPF_W | BPF_ABS, offsetof(struct seccomp_data, nr));
	for (int k = 0; k < ALLOWED; k++)
		*f++ = (struct sock_filter)BPF_JUMP(BPF_JMP | BPF_JEQ | BPF_K, (unsigned)allowed[k], (unsigned char)(ALLOWED - k), 0);
	*f++ = (struct sock_filter)BPF_STMT(BPF_RET | BPF_K, SECCOMP_RET_TRAP);
	*f++ = (struct sock_filter)BPF_STMT(BPF_RET | BPF_K, SECCOMP_RET_ALLOW);
	program.len = (unsigned short)(f - filter);
	prctl(PR_SET_NO_NEW_PRIVS, 1, 0, 0, 0);
	if (prctl(PR_SET_SECCOMP, SECCOMP_MODE_FILTER, &program) < 0)
		_exit(77);
}

static long page_faults(void)
{
	struct rusage usage;

	getrusage(RUSAGE_THREAD, &usage);
	return usage.ru_minflt + usage.ru_majflt;
}

/* Before the filter: a thread's first allocation maps its memory. */
static void tempt_library(void)
{
	static pthread_mutex_t mutex = PTHREAD_MUTEX_INITIALIZER;
	void *volatile block = malloc(100);

	free(block);
	pthread_mutex_lock(&mutex);
	pthread_mutex_unlock(&mutex);
}

static void tempt_kernel(void)
{
	int word = 1;

	syscall(SYS_openat, AT_FDCWD, "/dev/null", O_RDONLY);
	syscall(SYS_futex, &word, 1, 1, NULL, NULL, 0);
}

/* What ends the thread is no sin: what counts is what had been seen at its last look at the clock. */
static void look(void)
{
	seen.allocations = atomic_load(&allocations);
	seen.locks = atomic_load(&locks);
	seen.faults = page_faults() - faults_before;
}

/* The watched thread reads the clock with every block: there it is armed, and looked at again. */
int clock_gettime(clockid_t id, struct timespec *t)
{
	static int (*next)(clockid_t id, struct timespec *t);

	if (!next)
		next = (int (*)(clockid_t, struct timespec *))dlsym(RTLD_NEXT, "clock_gettime");
	if (!mine())
		return next(id, t);
	if (atomic_fetch_add(&readings, 1) == WARM_UP) {
		atomic_store(&armed, 1);
		if (getenv("WITNESS_TEMPT"))
			tempt_library();
		filter_calls();
		if (getenv("WITNESS_TEMPT"))
			tempt_kernel();
		faults_before = page_faults();          /* arming took some */
	}
	if (atomic_load(&armed))
		look();
	return next(id, t);
}

static void __attribute__((destructor)) testify(void)
{
	const char *path = getenv("WITNESS");
	FILE *out = path ? fopen(path, "w") : NULL;
	unsigned total = 0;

	if (!out)
		return;
	fprintf(out, "armed %d\nreadings %u\nallocations %u\nlocks %u\n", atomic_load(&armed), atomic_load(&readings),
	        seen.allocations, seen.locks);
	for (int k = 0; k < SYSCALLS; k++) {
		if (atomic_load(&calls[k]))
			fprintf(out, "syscall %d %u\n", k, atomic_load(&calls[k]));
		total += atomic_load(&calls[k]);
	}
	fprintf(out, "syscalls %u\nfaults %ld\n", total, seen.faults);
	fclose(out);
}
