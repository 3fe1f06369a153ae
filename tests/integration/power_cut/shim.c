/* Loaded before a program (LD_PRELOAD), this keeps a journal of everything that
 * the program does to the files of one folder, so that a test can work out
 * afterwards what a power cut would have left of them: what had been synced, and
 * whatever part of the rest it pleases.
 *
 * Every call is made for real by its system call, and journalled after it, both
 * under one lock: the journal is the order in which things happened. A process
 * that is killed between the two has told nobody of the call, so that it may as
 * well not have happened. The write-ahead log's index ("-shm") is shared memory
 * and no file to SQLite: it is not looked at, and no cut leaves any of it.
 *
 * Settings, all by environment:
 *   POWER_CUT_FOLDER   the folder; absolute, without symbolic links
 *   POWER_CUT_JOURNAL  where the journal is appended
 *   POWER_CUT_AFTER    die (SIGKILL) after so many writes, truncations and syncs
 *   POWER_CUT_ARMED    a file; count nothing until it is there
 *   POWER_CUT_FILE     count only those of the file of this name
 *   POWER_CUT_WEATHER  a file; while its first letter is
 *                      'r' whatever writes fails with EROFS, while it is
 *                      'f' with ENOSPC, while it is
 *                      's' syncs fail with EIO
 *
 * A record is five numbers of 64 bits in the machine's order (kind, file, place,
 * length of the bytes that follow, spare) and those bytes. */

#define _GNU_SOURCE
#include <errno.h>
#include <fcntl.h>
#include <pthread.h>
#include <signal.h>
#include <stdarg.h>
#include <stdint.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>
#include <sys/syscall.h>
#include <sys/uio.h>
#include <unistd.h>

enum kind { OPENED = 1, WRITTEN, LENGTH, SYNCED, FOLDER_SYNCED, REMOVED, UNFORESEEN };

#define MOST_DESCRIPTORS 65536
#define MOST_NAMES 256
#define LONGEST_NAME 200
#define THE_FOLDER UINT32_MAX

static pthread_mutex_t lock = PTHREAD_MUTEX_INITIALIZER;
static uint32_t file_of[MOST_DESCRIPTORS];
static struct { char name[LONGEST_NAME]; uint32_t file; } names[MOST_NAMES];
static uint32_t last_file = 0;
static const char *folder, *weather, *counted, *armed;
static int journal = -1;
static uint32_t counted_file = 0;
static long left = -1;

__attribute__((constructor)) static void start(void) {
    const char *path = getenv("POWER_CUT_JOURNAL"), *after = getenv("POWER_CUT_AFTER");
    folder = getenv("POWER_CUT_FOLDER");
    weather = getenv("POWER_CUT_WEATHER");
    counted = getenv("POWER_CUT_FILE");
    armed = getenv("POWER_CUT_ARMED");
    if (after) left = atol(after);
    if (path)
        journal = (int)syscall(SYS_openat, AT_FDCWD, path, O_WRONLY | O_CREAT | O_APPEND | O_CLOEXEC, 0644);
}

static void note(enum kind kind, uint32_t file, uint64_t place, const void *bytes, uint64_t length) {
    if (journal < 0) return;
    uint64_t head[5] = { kind, file, place, length, 0 };
    struct iovec parts[2] = { { head, sizeof head }, { (void *)bytes, length } };
    syscall(SYS_writev, journal, parts, length ? 2 : 1);
}

/* Under the lock, which is never given back by the dead. */
static void count(uint32_t file) {
    if (left < 0 || (counted && file != counted_file)) return;
    if (armed) {
        if (syscall(SYS_faccessat, AT_FDCWD, armed, F_OK) != 0) return;
        armed = NULL;
    }
    if (left-- > 0) return;
    kill(getpid(), SIGKILL);
    for (;;) pause();
}

static char sky(void) {
    char letter = 0;
    if (!weather) return 0;
    int fd = (int)syscall(SYS_openat, AT_FDCWD, weather, O_RDONLY | O_CLOEXEC, 0);
    if (fd < 0) return 0;
    if (read(fd, &letter, 1) != 1) letter = 0;
    syscall(SYS_close, fd);
    return letter;
}

/* Whether writing is refused now; sets errno. */
static int refused(void) {
    char letter = sky();
    if (letter == 'r') errno = EROFS;
    else if (letter == 'f') errno = ENOSPC;
    else return 0;
    return 1;
}

static uint32_t tracked(int fd) {
    return fd >= 0 && fd < MOST_DESCRIPTORS ? file_of[fd] : 0;
}

/* The name within the folder, or NULL for what is not looked at. */
static const char *within(const char *path) {
    if (!folder || !path) return NULL;
    size_t length = strlen(folder);
    if (strncmp(path, folder, length) != 0 || path[length] != '/') return NULL;
    const char *name = path + length + 1;
    size_t size = strlen(name);
    if (size == 0 || size >= LONGEST_NAME || strchr(name, '/')) return NULL;
    if (size > 4 && strcmp(name + size - 4, "-shm") == 0) return NULL;
    return name;
}

static int slot(const char *name) {
    for (int i = 0; i < MOST_NAMES; i++)
        if (names[i].file && strcmp(names[i].name, name) == 0) return i;
    return -1;
}

static uint32_t number(const char *name, int fresh) {
    int at = slot(name);
    if (at >= 0 && !fresh) return names[at].file;
    for (int i = 0; at < 0 && i < MOST_NAMES; i++)
        if (!names[i].file) at = i;
    if (at < 0) { note(UNFORESEEN, 0, 0, "names", 5); return 0; }
    strcpy(names[at].name, name);
    names[at].file = ++last_file;
    if (counted && strcmp(counted, name) == 0) counted_file = last_file;
    return last_file;
}

static int opening(int at, const char *path, int flags, mode_t mode) {
    const char *name = within(path);
    int is_folder = folder && path && strcmp(path, folder) == 0;
    if (!name && !is_folder) return (int)syscall(SYS_openat, at, path, flags, mode);
    int writes = (flags & O_ACCMODE) != O_RDONLY || (flags & O_CREAT);
    if (name && writes && sky() == 'r') { errno = EROFS; return -1; }
    pthread_mutex_lock(&lock);
    int existed = is_folder || syscall(SYS_faccessat, AT_FDCWD, path, F_OK) == 0;
    int fd = (int)syscall(SYS_openat, at, path, flags, mode);
    int error = errno;
    if (fd >= MOST_DESCRIPTORS) note(UNFORESEEN, 0, 0, "descriptor", 10);
    else if (fd >= 0 && is_folder) file_of[fd] = THE_FOLDER;
    else if (fd >= 0) {
        file_of[fd] = number(name, !existed);
        note(OPENED, file_of[fd], !existed, name, strlen(name));
        if (existed && (flags & O_TRUNC)) note(LENGTH, file_of[fd], 0, NULL, 0);
        if (flags & O_APPEND) note(UNFORESEEN, 0, 0, "append", 6);
    }
    pthread_mutex_unlock(&lock);
    errno = error;
    return fd;
}

#define MODE(flags) \
    mode_t mode = 0; \
    if ((flags) & (O_CREAT | __O_TMPFILE)) { va_list more; va_start(more, flags); mode = va_arg(more, mode_t); va_end(more); }

int open(const char *path, int flags, ...) { MODE(flags) return opening(AT_FDCWD, path, flags, mode); }
int open64(const char *path, int flags, ...) { MODE(flags) return opening(AT_FDCWD, path, flags, mode); }
int openat(int at, const char *path, int flags, ...) { MODE(flags) return opening(at, path, flags, mode); }
int openat64(int at, const char *path, int flags, ...) { MODE(flags) return opening(at, path, flags, mode); }
int creat(const char *path, mode_t mode) { return opening(AT_FDCWD, path, O_CREAT | O_WRONLY | O_TRUNC, mode); }

int close(int fd) {
    if (!tracked(fd)) return (int)syscall(SYS_close, fd);
    pthread_mutex_lock(&lock);
    file_of[fd] = 0;
    int done = (int)syscall(SYS_close, fd);
    int error = errno;
    pthread_mutex_unlock(&lock);
    errno = error;
    return done;
}

static ssize_t writing(int fd, const void *bytes, size_t length, off_t place, int at_place) {
    uint32_t file = tracked(fd);
    if (!file)
        return at_place ? syscall(SYS_pwrite64, fd, bytes, length, place) : syscall(SYS_write, fd, bytes, length);
    if (refused()) return -1;
    pthread_mutex_lock(&lock);
    if (!at_place) place = syscall(SYS_lseek, fd, 0, SEEK_CUR);
    ssize_t done = at_place ? syscall(SYS_pwrite64, fd, bytes, length, place) : syscall(SYS_write, fd, bytes, length);
    int error = errno;
    if (done > 0) { note(WRITTEN, file, (uint64_t)place, bytes, (uint64_t)done); count(file); }
    pthread_mutex_unlock(&lock);
    errno = error;
    return done;
}

ssize_t pwrite(int fd, const void *bytes, size_t length, off_t place) { return writing(fd, bytes, length, place, 1); }
ssize_t pwrite64(int fd, const void *bytes, size_t length, off64_t place) { return writing(fd, bytes, length, place, 1); }
ssize_t write(int fd, const void *bytes, size_t length) { return writing(fd, bytes, length, 0, 0); }

/* A short write is an answer that every caller has to take. */
static ssize_t first_of(int fd, const struct iovec *parts, int count, off_t place, int at_place) {
    for (int i = 0; i < count; i++)
        if (parts[i].iov_len) return writing(fd, parts[i].iov_base, parts[i].iov_len, place, at_place);
    return 0;
}

ssize_t writev(int fd, const struct iovec *parts, int count) {
    return tracked(fd) ? first_of(fd, parts, count, 0, 0) : syscall(SYS_writev, fd, parts, count);
}
ssize_t pwritev(int fd, const struct iovec *parts, int count, off_t place) {
    return tracked(fd) ? first_of(fd, parts, count, place, 1) : syscall(SYS_pwritev, fd, parts, count, place, 0);
}
ssize_t pwritev64(int fd, const struct iovec *parts, int count, off64_t place) { return pwritev(fd, parts, count, place); }

int ftruncate(int fd, off_t length) {
    uint32_t file = tracked(fd);
    if (!file) return (int)syscall(SYS_ftruncate, fd, length);
    if (refused()) return -1;
    pthread_mutex_lock(&lock);
    int done = (int)syscall(SYS_ftruncate, fd, length);
    int error = errno;
    if (done == 0) { note(LENGTH, file, (uint64_t)length, NULL, 0); count(file); }
    pthread_mutex_unlock(&lock);
    errno = error;
    return done;
}
int ftruncate64(int fd, off64_t length) { return ftruncate(fd, length); }

/* Nothing has to reach a real disk here: the journal is the disk. */
static int syncing(int fd, long call) {
    uint32_t file = tracked(fd);
    if (!file) return (int)syscall(call, fd);
    char letter = sky();
    if (letter == 's') { errno = EIO; return -1; }
    if (letter == 'r') { errno = EROFS; return -1; }
    pthread_mutex_lock(&lock);
    note(file == THE_FOLDER ? FOLDER_SYNCED : SYNCED, file, 0, NULL, 0);
    count(file);
    pthread_mutex_unlock(&lock);
    return 0;
}
int fsync(int fd) { return syncing(fd, SYS_fsync); }
int fdatasync(int fd) { return syncing(fd, SYS_fdatasync); }

int unlinkat(int at, const char *path, int flags) {
    const char *name = within(path);
    if (!name) return (int)syscall(SYS_unlinkat, at, path, flags);
    if (sky() == 'r') { errno = EROFS; return -1; }
    pthread_mutex_lock(&lock);
    int done = (int)syscall(SYS_unlinkat, at, path, flags);
    int error = errno;
    if (done == 0) {
        int at_slot = slot(name);
        if (at_slot >= 0) names[at_slot].file = 0;
        note(REMOVED, 0, 0, name, strlen(name));
    }
    pthread_mutex_unlock(&lock);
    errno = error;
    return done;
}
int unlink(const char *path) { return unlinkat(AT_FDCWD, path, 0); }

int renameat(int from_at, const char *from, int to_at, const char *to) {
    const char *old = within(from), *new = within(to);
    if (!old && !new) return (int)syscall(SYS_renameat2, from_at, from, to_at, to, 0);
    pthread_mutex_lock(&lock);
    int done = (int)syscall(SYS_renameat2, from_at, from, to_at, to, 0);
    int error = errno;
    /* The service does not rename what it writes; if it ever does, the test has to learn it. */
    note(UNFORESEEN, 0, 0, "rename", 6);
    pthread_mutex_unlock(&lock);
    errno = error;
    return done;
}
int rename(const char *from, const char *to) { return renameat(AT_FDCWD, from, AT_FDCWD, to); }

static void unforeseen(int fd, const char *what) {
    if (!tracked(fd)) return;
    pthread_mutex_lock(&lock);
    note(UNFORESEEN, 0, 0, what, strlen(what));
    pthread_mutex_unlock(&lock);
}

int fallocate(int fd, int mode, off_t place, off_t length) {
    unforeseen(fd, "fallocate");
    return (int)syscall(SYS_fallocate, fd, mode, place, length);
}
int fallocate64(int fd, int mode, off64_t place, off64_t length) { return fallocate(fd, mode, place, length); }
int posix_fallocate(int fd, off_t place, off_t length) { return fallocate(fd, 0, place, length) == 0 ? 0 : errno; }
int posix_fallocate64(int fd, off64_t place, off64_t length) { return posix_fallocate(fd, place, length); }

void *mmap(void *address, size_t length, int protection, int flags, int fd, off_t place) {
    if ((protection & PROT_WRITE) && (flags & MAP_SHARED)) unforeseen(fd, "mmap");
    return (void *)syscall(SYS_mmap, address, length, protection, flags, fd, place);
}
void *mmap64(void *address, size_t length, int protection, int flags, int fd, off64_t place) {
    return mmap(address, length, protection, flags, fd, place);
}
