/* SPDX-License-Identifier: MIT
 *
 * A lock on a name: one holder at a time, among all processes of the machine.
 *
 * The lock is one of the kernel's on an open file (F_OFD_SETLK), so it ends with its holder, however that ends: what a
 * dead process leaves is a file that nobody holds, and the next one takes it over. The file's text says who holds it.
 * The holder removes it before letting go; so whoever got the lock looks whether the file that it opened is still the
 * one of that name, and begins again if not.
 */
#include "base/context_internal.h"

#include <errno.h>
#include <fcntl.h>
#include <stdio.h>
#include <string.h>
#include <sys/stat.h>
#include <time.h>
#include <unistd.h>

enum { HOLDER_SIZE = 64 };
static const double look_again = 0.05; /* seconds between two tries: short against what is waited for */

/* "process 123", out of the file's text; what is not a number there is not repeated. */
static void holder_read(fescue_context *context, int descriptor, char text[HOLDER_SIZE])
{
    char bytes[HOLDER_SIZE] = "";
    ptrdiff_t got = context->files->read(descriptor, bytes, sizeof bytes - 1);
    size_t digits = got > 0 ? strspn(bytes, "0123456789") : 0;
    if (digits > 0 && digits < 12)
        snprintf(text, HOLDER_SIZE, "process %.*s", (int)digits, bytes);
    else
        snprintf(text, HOLDER_SIZE, "another process");
}

/* Who cannot read it later only learns less. */
static void holder_write(fescue_context *context, int descriptor)
{
    char text[HOLDER_SIZE];
    int length = snprintf(text, sizeof text, "%ld\n", (long)getpid());
    if (ftruncate(descriptor, 0) == 0)
        (void)(context->files->write(descriptor, text, (size_t)length) == length);
}

static bool is_of_its_name(const char *path, int descriptor)
{
    struct stat named, opened;
    return stat(path, &named) == 0 && fstat(descriptor, &opened) == 0 && named.st_ino == opened.st_ino &&
           named.st_dev == opened.st_dev;
}

static fescue_status lock_open(fescue_context *context, const char *path, struct lock *lock)
{
    do
        lock->descriptor = context->files->open(path, O_RDWR | O_CREAT | O_CLOEXEC, 0666);
    while (lock->descriptor < 0 && errno == EINTR);
    if (lock->descriptor >= 0)
        return FESCUE_OK;
    lock->descriptor = -1;
    return FAIL(context, FESCUE_CANNOT_CREATE, "%s: cannot be created: %s", path, error_text(context, errno));
}

static void lock_close(fescue_context *context, struct lock *lock)
{
    if (lock->descriptor >= 0)
        context->files->close(lock->descriptor);
    lock->descriptor = -1;
}

/* One try; *is_held: somebody else has it, `holder` says who. */
static fescue_status lock_try(fescue_context *context, struct lock *lock, bool *is_held, char holder[HOLDER_SIZE])
{
    struct flock whole = {.l_type = F_WRLCK, .l_whence = SEEK_SET};
    fescue_status status;
    *is_held = false;
    for (;;) {
        TRY(lock_open(context, lock->path, lock));
        if (fcntl(lock->descriptor, F_OFD_SETLK, &whole) != 0)
            break;
        if (is_of_its_name(lock->path, lock->descriptor)) {
            holder_write(context, lock->descriptor);
            return FESCUE_OK;
        }
        lock_close(context, lock);
    }
    *is_held = errno == EAGAIN || errno == EACCES;
    if (!*is_held)
        TRY(FAIL(context, FESCUE_CANNOT_CREATE, "%s: cannot be locked: %s", lock->path, error_text(context, errno)));
    holder_read(context, lock->descriptor, holder);
done:
    lock_close(context, lock);
    return status;
}

fescue_status lock_take(fescue_context *context, const char *path, const char *what, double patience, struct lock *lock)
{
    char holder[HOLDER_SIZE];
    double began = clock_wall();
    bool is_held;
    fescue_status status;
    *lock = (struct lock){.descriptor = -1};
    TRY(memory_copy_text(context, path, strlen(path), &lock->path));
    TRY(lock_try(context, lock, &is_held, holder));
    while (is_held && clock_wall() - began < patience && !is_cancelled(context)) {
        struct timespec rest = {.tv_nsec = (long)(look_again * 1e9)};
        nanosleep(&rest, NULL);
        TRY(lock_try(context, lock, &is_held, holder));
    }
    if (is_held)
        TRY(FAIL(context, FESCUE_CANNOT_CREATE, "%s: %s is at work on it (%s)", what, holder, path));
done:
    if (status != FESCUE_OK)
        lock_give(context, lock);
    return status;
}

void lock_give(fescue_context *context, struct lock *lock)
{
    if (lock->path == NULL)
        return;
    if (lock->descriptor >= 0)
        context->files->unlink(lock->path);
    lock_close(context, lock);
    GIVE(context, &lock->path);
}
