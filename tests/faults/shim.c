/* Counts the calls by which a process changes files below one folder, and makes one of them fail, or the last thing
 * the process does. Preloaded into a process that then calls faults_attach(); until then every call passes.
 *
 * The control block is shared memory: whoever runs the process reads the count, and which call was hit, while it
 * lives and after it was killed, and can lift a fault that lasts. */
#define _GNU_SOURCE
#include <dlfcn.h>
#include <errno.h>
#include <fcntl.h>
#include <limits.h>
#include <signal.h>
#include <stdarg.h>
#include <stdio.h>
#include <string.h>
#include <sys/mman.h>
#include <sys/stat.h>
#include <sys/types.h>
#include <sys/uio.h>
#include <unistd.h>

enum { NOTHING, KILL, TEAR, EIO_ONCE, EIO_ALWAYS, ENOSPC_ONCE, ENOSPC_ALWAYS };
enum { N_LOGGED = 16384, N_TEXT = 112 };

struct entry {
    char call[16];
    char path[N_TEXT];
};
struct control {
    long kind, at, count, n_hit;
    struct entry hit;
    struct entry log[N_LOGGED];
};

static struct control *control;
static char prefix[PATH_MAX];
static size_t prefix_length;

int faults_attach(const char *control_path, const char *folder) {
    int fd = open(control_path, O_RDWR | O_CLOEXEC);
    if (fd < 0) return errno;
    void *block = mmap(NULL, sizeof *control, PROT_READ | PROT_WRITE, MAP_SHARED, fd, 0);
    close(fd);
    if (block == MAP_FAILED) return errno;
    snprintf(prefix, sizeof prefix, "%s", folder);
    prefix_length = strlen(prefix);
    control = block;
    return 0;
}

static int below(const char *path) {
    return strncmp(path, prefix, prefix_length) == 0 && (path[prefix_length] == '/' || path[prefix_length] == 0);
}

static int path_of(int fd, char *path) {
    char link[64];
    snprintf(link, sizeof link, "/proc/self/fd/%d", fd);
    ssize_t n = readlink(link, path, PATH_MAX - 1);
    if (n < 0) return 0;
    path[n] = 0;
    return below(path);
}

/* The path that a call names: absolute, or beside an open folder. */
static int path_at(int folder, const char *name, char *path) {
    if (name[0] == '/' || folder == AT_FDCWD) {
        snprintf(path, PATH_MAX, "%s", name);
        return below(path);
    }
    char base[PATH_MAX];
    if (!path_of(folder, base)) return 0;
    snprintf(path, PATH_MAX, "%.2000s/%.2000s", base, name);
    return 1;
}

static void note(struct entry *entry, const char *call, const char *path) {
    const char *rest = path + (below(path) ? prefix_length : 0);
    snprintf(entry->call, sizeof entry->call, "%s", call);
    snprintf(entry->path, sizeof entry->path, "%.100s", rest);
}

static void die(void) {
    kill(getpid(), SIGKILL);
    for (;;) pause();
}

/* What becomes of this call: 0 it passes, -1 it tears, else the errno with which it fails. */
static int judge(const char *call, const char *path, int needs_room) {
    long number = __atomic_add_fetch(&control->count, 1, __ATOMIC_SEQ_CST);
    if (number <= N_LOGGED) note(&control->log[number - 1], call, path);
    long kind = control->kind, at = control->at;
    int lasting = kind == EIO_ALWAYS || kind == ENOSPC_ALWAYS;
    if (kind == NOTHING || number < at || (number > at && !lasting)) return 0;
    if ((kind == ENOSPC_ONCE || kind == ENOSPC_ALWAYS) && !needs_room) return 0;
    if (__atomic_add_fetch(&control->n_hit, 1, __ATOMIC_SEQ_CST) == 1) note(&control->hit, call, path);
    if (kind == KILL) die();
    if (kind == TEAR) return -1;
    return kind == EIO_ONCE || kind == EIO_ALWAYS ? EIO : ENOSPC;
}

#define REAL(name) \
    static __typeof__(&name) real; \
    if (!real) real = (__typeof__(&name))dlsym(RTLD_NEXT, #name)

#define PASS_OR_FAIL(verdict) \
    do { \
        if ((verdict) == -1) die(); \
        if ((verdict) > 0) { errno = (verdict); return -1; } \
    } while (0)

#define ON_DESCRIPTOR(call, needs_room) \
    if (control) { \
        char path[PATH_MAX]; \
        if (path_of(fd, path)) { int verdict = judge(call, path, needs_room); PASS_OR_FAIL(verdict); } \
    }

#define ON_PATH(call, folder, name, needs_room) \
    if (control) { \
        char path[PATH_MAX]; \
        if (path_at(folder, name, path)) { int verdict = judge(call, path, needs_room); PASS_OR_FAIL(verdict); } \
    }

/* A write that tears has brought half of its bytes to the file when the process ends. */
#define ON_WRITE(call, half) \
    if (control) { \
        char path[PATH_MAX]; \
        if (path_of(fd, path)) { \
            int verdict = judge(call, path, 1); \
            if (verdict == -1) (void)!(half); \
            PASS_OR_FAIL(verdict); \
        } \
    }

ssize_t write(int fd, const void *bytes, size_t n) {
    REAL(write);
    ON_WRITE("write", real(fd, bytes, n / 2));
    return real(fd, bytes, n);
}

ssize_t pwrite(int fd, const void *bytes, size_t n, off_t at) {
    REAL(pwrite);
    ON_WRITE("pwrite", real(fd, bytes, n / 2, at));
    return real(fd, bytes, n, at);
}

ssize_t pwrite64(int fd, const void *bytes, size_t n, off64_t at) {
    REAL(pwrite64);
    ON_WRITE("pwrite", real(fd, bytes, n / 2, at));
    return real(fd, bytes, n, at);
}

ssize_t writev(int fd, const struct iovec *parts, int n) {
    REAL(writev);
    ON_WRITE("writev", real(fd, parts, n / 2));
    return real(fd, parts, n);
}

int fsync(int fd) {
    REAL(fsync);
    ON_DESCRIPTOR("fsync", 0);
    return real(fd);
}

int fdatasync(int fd) {
    REAL(fdatasync);
    ON_DESCRIPTOR("fdatasync", 0);
    return real(fd);
}

int ftruncate(int fd, off_t n) {
    REAL(ftruncate);
    ON_DESCRIPTOR("ftruncate", 0);
    return real(fd, n);
}

int ftruncate64(int fd, off64_t n) {
    REAL(ftruncate64);
    ON_DESCRIPTOR("ftruncate", 0);
    return real(fd, n);
}

int rename(const char *from, const char *to) {
    REAL(rename);
    ON_PATH("rename", AT_FDCWD, to, 1);
    return real(from, to);
}

int renameat(int from_folder, const char *from, int to_folder, const char *to) {
    REAL(renameat);
    ON_PATH("rename", to_folder, to, 1);
    return real(from_folder, from, to_folder, to);
}

int unlink(const char *name) {
    REAL(unlink);
    ON_PATH("unlink", AT_FDCWD, name, 0);
    return real(name);
}

int unlinkat(int folder, const char *name, int flags) {
    REAL(unlinkat);
    ON_PATH("unlink", folder, name, 0);
    return real(folder, name, flags);
}

int rmdir(const char *name) {
    REAL(rmdir);
    ON_PATH("rmdir", AT_FDCWD, name, 0);
    return real(name);
}

int mkdir(const char *name, mode_t mode) {
    REAL(mkdir);
    ON_PATH("mkdir", AT_FDCWD, name, 1);
    return real(name, mode);
}

int mkdirat(int folder, const char *name, mode_t mode) {
    REAL(mkdirat);
    ON_PATH("mkdir", folder, name, 1);
    return real(folder, name, mode);
}

#define TAKE_MODE \
    mode_t mode = 0; \
    if (flags & O_CREAT) { \
        va_list rest; \
        va_start(rest, flags); \
        mode = va_arg(rest, mode_t); \
        va_end(rest); \
    }

/* Opening counts where it may make a file. */
#define CHANGES (flags & O_CREAT)

int open(const char *name, int flags, ...) {
    REAL(open);
    TAKE_MODE
    if (CHANGES) ON_PATH("open", AT_FDCWD, name, 1);
    return real(name, flags, mode);
}

int open64(const char *name, int flags, ...) {
    REAL(open64);
    TAKE_MODE
    if (CHANGES) ON_PATH("open", AT_FDCWD, name, 1);
    return real(name, flags, mode);
}

int openat(int folder, const char *name, int flags, ...) {
    REAL(openat);
    TAKE_MODE
    if (CHANGES) ON_PATH("open", folder, name, 1);
    return real(folder, name, flags, mode);
}

int openat64(int folder, const char *name, int flags, ...) {
    REAL(openat64);
    TAKE_MODE
    if (CHANGES) ON_PATH("open", folder, name, 1);
    return real(folder, name, flags, mode);
}
