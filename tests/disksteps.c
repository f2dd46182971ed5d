/* Counts the steps by which a process changes the disk, and at one of them ends it or lets the call fail.
 *
 * Loaded before libc (LD_PRELOAD). Armed by `arm`: from then on each call that makes, writes, syncs, renames
 * or removes a file is a step; so is each `note`, which tells of steps that happen above libc (SQL statements).
 */
#define _GNU_SOURCE
#include <dlfcn.h>
#include <errno.h>
#include <fcntl.h>
#include <signal.h>
#include <stdarg.h>
#include <stdio.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>

enum { COUNT, KILL, TEAR, FULL, FAULT };

static volatile int mode = -1;
static volatile long at, steps;
static char names[1 << 20];
static size_t filled;

void arm(int how, long step) { mode = how; at = step; steps = 0; filled = 0; names[0] = 0; }
void disarm(void) { mode = -1; }
const char *told(void) { return names; }

static void die(void) { kill(getpid(), SIGKILL); for (;;) pause(); }

/* Tells whether the call must fail: with ENOSPC from a step on, or with EIO at it alone. */
static int step(const char *name, int grows) {
  if (mode < 0) return 0;
  long number = __sync_add_and_fetch(&steps, 1);
  if (mode == COUNT && filled + strlen(name) + 2 < sizeof names) {
    strcpy(names + filled, name);
    filled += strlen(name);
    names[filled++] = '\n';
    names[filled] = 0;
  }
  if (mode == KILL && number == at) die();
  if (mode == FULL && number >= at && grows) { errno = ENOSPC; return 1; }
  if (mode == FAULT && number == at) { errno = EIO; return 1; }
  return 0;
}

void note(const char *name) { if (mode == COUNT || mode == KILL) step(name, 0); }

#define NEXT(name) ((__typeof__(&name))dlsym(RTLD_NEXT, #name))

#define WRITES(name, offset_type)                                                        \
  ssize_t name(int file, const void *data, size_t count, offset_type offset) {           \
    if (step("write", 1)) return -1;                                                     \
    if (mode == TEAR && steps == at) { NEXT(name)(file, data, count / 2, offset); die(); } \
    return NEXT(name)(file, data, count, offset);                                        \
  }
WRITES(pwrite, off_t)
WRITES(pwrite64, off64_t)

ssize_t write(int file, const void *data, size_t count) {
  if (step("write", 1)) return -1;
  if (mode == TEAR && steps == at) { NEXT(write)(file, data, count / 2); die(); }
  return NEXT(write)(file, data, count);
}

#define OPENS(name)                                                                      \
  int name(const char *path, int flags, ...) {                                           \
    va_list more; va_start(more, flags); mode_t rights = va_arg(more, mode_t); va_end(more); \
    if (flags & O_CREAT && access(path, F_OK) && step("make", 1)) return -1;             \
    return NEXT(name)(path, flags, rights);                                              \
  }
OPENS(open)
OPENS(open64)

#define SYNCS(name)                                                                      \
  int name(int file) {                                                                   \
    char link[64], path[4096] = "sync ";                                                 \
    snprintf(link, sizeof link, "/proc/self/fd/%d", file);                               \
    ssize_t length = readlink(link, path + 5, sizeof path - 6);                          \
    path[5 + (length < 0 ? 0 : length)] = 0;                                             \
    return step(path, 0) ? -1 : NEXT(name)(file);                                        \
  }
SYNCS(fsync)
SYNCS(fdatasync)

int ftruncate(int file, off_t size) { return step("cut", 1) ? -1 : NEXT(ftruncate)(file, size); }
int ftruncate64(int file, off64_t size) { return step("cut", 1) ? -1 : NEXT(ftruncate64)(file, size); }
int rename(const char *from, const char *to) {
  char both[8400];
  snprintf(both, sizeof both, "rename %s %s", from, to);
  return step(both, 0) ? -1 : NEXT(rename)(from, to);
}
int unlink(const char *path) { return step("remove", 0) ? -1 : NEXT(unlink)(path); }
int mkdir(const char *path, mode_t rights) { return step("make", 1) ? -1 : NEXT(mkdir)(path, rights); }
