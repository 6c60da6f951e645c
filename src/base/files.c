/* SPDX-License-Identifier: MIT
 *
 * The table of system calls, and reading.
 */
#include "base/context_internal.h"

#include <errno.h>
#include <fcntl.h>
#include <stdio.h>
#include <string.h>
#include <sys/mman.h>
#include <sys/stat.h>
#include <unistd.h>

static int posix_open(const char *path, int flags, unsigned mode)
{
    return open(path, flags, mode);
}

static int posix_make_directory(const char *path, unsigned mode)
{
    return mkdir(path, mode);
}

static int64_t posix_size(int descriptor)
{
    struct stat about;
    return fstat(descriptor, &about) == 0 && S_ISREG(about.st_mode) ? about.st_size : -1;
}

/* Pages come as they are looked at, by all workers; large ones, where the file is not in memory yet and the system has
   them. */
static void *posix_map(int descriptor, size_t size)
{
    void *bytes = mmap(NULL, size, PROT_READ, MAP_PRIVATE, descriptor, 0);
    if (bytes == MAP_FAILED)
        return NULL;
    (void)madvise(bytes, size, MADV_HUGEPAGE); /* a wish: it may be refused */
    return bytes;
}

static int posix_rest(void *bytes, size_t size)
{
    return madvise(bytes, size, MADV_DONTNEED); /* nobody may write there, so nothing is lost */
}

const struct file_calls posix_file_calls = {
    .open = posix_open,
    .read = read,
    .write = write,
    .sync = fsync,
    .close = close,
    .rename = rename,
    .unlink = unlink,
    .make_directory = posix_make_directory,
    .size = posix_size,
    .map = posix_map,
    .unmap = munmap,
    .rest = posix_rest,
};

void file_calls_set(fescue_context *context, const struct file_calls *calls)
{
    context->files = calls != NULL ? calls : &posix_file_calls;
}

static bool is_standard_input(const char *path)
{
    return strcmp(path, "-") == 0;
}

fescue_status file_open_read(fescue_context *context, const char *path, int *descriptor)
{
    if (is_standard_input(path)) {
        *descriptor = STDIN_FILENO;
        return FESCUE_OK;
    }
    do
        *descriptor = context->files->open(path, O_RDONLY | O_CLOEXEC, 0);
    while (*descriptor < 0 && errno == EINTR && !is_cancelled(context)); /* a named pipe waits for its writer */
    if (*descriptor >= 0)
        return FESCUE_OK;
    *descriptor = -1;
    if (errno == EINTR)
        return FAIL(context, FESCUE_STOPPED, "%s: asked to stop while opening", path);
    return FAIL(context, FESCUE_NO_INPUT, "%s: cannot be opened: %s", path, error_text(context, errno));
}

fescue_status file_read(fescue_context *context, const char *path, int descriptor, void *bytes, size_t count,
                        size_t *got)
{
    ptrdiff_t read;
    do
        read = context->files->read(descriptor, bytes, count);
    while (read < 0 && errno == EINTR && !is_cancelled(context)); /* a pipe or a terminal may wait for ever */
    *got = read < 0 ? 0 : (size_t)read;
    if (read >= 0)
        return FESCUE_OK;
    const char *name = is_standard_input(path) ? "standard input" : path;
    if (errno == EINTR)
        return FAIL(context, FESCUE_STOPPED, "%s: asked to stop while reading", name);
    return FAIL(context, FESCUE_NO_INPUT, "%s: cannot be read: %s", name, error_text(context, errno));
}

uint64_t file_size(fescue_context *context, int descriptor)
{
    int64_t size = context->files->size(descriptor);
    return size < 0 ? 0 : (uint64_t)size;
}

void file_map(fescue_context *context, int descriptor, size_t size, const void **bytes)
{
    *bytes = context->files->map(descriptor, size);
}

void file_unmap(fescue_context *context, const void **bytes, size_t size)
{
    if (*bytes != NULL)
        context->files->unmap((void *)(uintptr_t)*bytes, size);
    *bytes = NULL;
}

void file_rest(fescue_context *context, const void *bytes, size_t size)
{
    (void)context->files->rest((void *)(uintptr_t)bytes, size); /* a wish: it may be refused */
}

void file_close(fescue_context *context, int *descriptor)
{
    if (*descriptor >= 0 && *descriptor != STDIN_FILENO)
        context->files->close(*descriptor);
    *descriptor = -1;
}
