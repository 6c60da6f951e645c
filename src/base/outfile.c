/* SPDX-License-Identifier: MIT
 *
 * One file of an output set: buffered appending under a temporary name, in the states that output.c tells of. Numbers
 * are written without the C library's formatting, so that no locale changes them.
 */
#include "base/output_internal.h"

#include <errno.h>
#include <fcntl.h>
#include <stdio.h>
#include <string.h>
#include <unistd.h>

/* Large enough that the price of a system call is lost in that of copying; a set has about ten files. */
enum { BUFFER_SIZE = 128 * 1024 };

/* ---- from its creation to its end ------------------------------------------------------------------------------- */

fescue_status path_join(fescue_context *context, const char *directory, const char *prefix, const char *name,
                        const char *suffix, char **out)
{
    size_t size = strlen(directory) + strlen(prefix) + strlen(name) + strlen(suffix) + 1;
    fescue_status status = TAKE(context, size, out);
    if (status == FESCUE_OK)
        snprintf(*out, size, "%s%s%s%s", directory, prefix, name, suffix);
    return status;
}

int descriptor_sync(fescue_context *context, int descriptor)
{
    int result;
    do
        result = context->files->sync(descriptor);
    while (result != 0 && errno == EINTR);
    return result;
}

static void outfile_close(struct outfile *file)
{
    if (file->descriptor >= 0)
        file->context->files->close(file->descriptor);
    file->descriptor = -1;
}

void outfile_remove(struct outfile *file)
{
    if (file->state == OUTFILE_TEMPORARY)
        file->context->files->unlink(file->temporary);
    if (file->state == OUTFILE_RENAMED)
        file->context->files->unlink(file->final);
    file->state = OUTFILE_ABSENT;
}

void outfile_destroy(struct outfile *file)
{
    fescue_context *context = file->context;
    outfile_close(file);
    if (file->state != OUTFILE_KEPT)
        outfile_remove(file);
    GIVE(context, &file->buffer);
    GIVE(context, &file->temporary);
    GIVE(context, &file->final);
    GIVE(context, &file);
}

/* O_EXCL, so that nothing that lies there under this name is written through; a rest of a process that died and had our
   number is removed once. */
static fescue_status temporary_create(struct outfile *file)
{
    const struct file_calls *files = file->context->files;
    bool again;
    bool removed = false;
    do {
        file->descriptor = files->open(file->temporary, O_WRONLY | O_CREAT | O_EXCL | O_CLOEXEC, 0666);
        again = file->descriptor < 0 && errno == EINTR;
        if (file->descriptor < 0 && errno == EEXIST && !removed)
            again = removed = files->unlink(file->temporary) == 0;
    } while (again);
    if (file->descriptor < 0) {
        file->descriptor = -1;
        return FAIL(file->context, FESCUE_CANNOT_CREATE, "%s: cannot be created: %s", file->final,
                    error_text(file->context, errno));
    }
    file->state = OUTFILE_TEMPORARY;
    return FESCUE_OK;
}

fescue_status outfile_create(fescue_context *context, const char *directory, const char *name, struct outfile **out)
{
    fescue_status status;
    char suffix[32];
    *out = NULL;
    TRY(TAKE(context, 1, out));
    struct outfile *file = *out;
    file->context = context;
    file->descriptor = -1;
    snprintf(suffix, sizeof suffix, ".%ld.part", (long)getpid());
    TRY(path_join(context, directory, "", name, "", &file->final));
    TRY(path_join(context, directory, ".", name, suffix, &file->temporary));
    TRY(TAKE(context, BUFFER_SIZE, &file->buffer));
    file->size = BUFFER_SIZE;
    TRY(temporary_create(file));
done:
    if (status != FESCUE_OK && *out != NULL) {
        outfile_destroy(*out);
        *out = NULL;
    }
    return status;
}

static fescue_status outfile_fail(struct outfile *file, const char *what, int error)
{
    file->status = FAIL(file->context, FESCUE_CANNOT_WRITE, "%s: cannot be %s: %s", file->final, what,
                        error_text(file->context, error));
    return file->status;
}

/* Writes bytes past the buffer, in as many calls as the system wants. */
static void outfile_put(struct outfile *file, const char *bytes, size_t count)
{
    while (count > 0 && file->status == FESCUE_OK) {
        ptrdiff_t put = file->context->files->write(file->descriptor, bytes, count);
        if (put > 0) {
            bytes += put;
            count -= (size_t)put;
        } else if (put == 0 || errno != EINTR) {
            outfile_fail(file, "written", put == 0 ? ENOSPC : errno);
        }
    }
}

static void outfile_flush(struct outfile *file)
{
    outfile_put(file, file->buffer, file->used);
    file->used = 0;
}

fescue_status outfile_widen(struct outfile *file, size_t size)
{
    if (file->status != FESCUE_OK || size <= file->size)
        return file->status;
    file->status = RESIZE(file->context, size, &file->buffer);
    if (file->status == FESCUE_OK)
        file->size = size;
    return file->status;
}

fescue_status outfile_finish(struct outfile *file)
{
    outfile_flush(file);
    if (file->status != FESCUE_OK)
        return file->status;
    if (descriptor_sync(file->context, file->descriptor) != 0)
        return outfile_fail(file, "flushed to disk", errno);
    int result = file->context->files->close(file->descriptor);
    file->descriptor = -1; /* closed whatever the result: a number given back must not be closed again */
    return result != 0 && errno != EINTR ? outfile_fail(file, "written", errno) : FESCUE_OK;
}

fescue_status outfile_rename(struct outfile *file)
{
    if (file->context->files->rename(file->temporary, file->final) != 0)
        return outfile_fail(file, "renamed from its temporary name", errno);
    file->state = OUTFILE_RENAMED;
    return FESCUE_OK;
}

/* ---- appending -------------------------------------------------------------------------------------------------- */

fescue_status outfile_status(const struct outfile *file)
{
    return file->status;
}

/* Puts are whole buffers, so that they begin at multiples of its size; those that come whole need not go through it. */
static void buffers_put(struct outfile *file, const char *bytes, size_t count)
{
    while (count > 0 && file->status == FESCUE_OK) {
        size_t room = file->size - file->used, step = count < room ? count : room;
        if (file->used == 0 && count >= file->size) {
            step = count / file->size * file->size;
            outfile_put(file, bytes, step);
        } else {
            memcpy(file->buffer + file->used, bytes, step);
            file->used += step;
            if (file->used == file->size)
                outfile_flush(file);
        }
        bytes += step;
        count -= step;
    }
}

void outfile_write(struct outfile *file, const void *bytes, size_t count)
{
    if (file->status != FESCUE_OK || count == 0)
        return;
    if (!file->grows) {
        buffers_put(file, bytes, count);
    } else if (count <= file->size - file->used || sink_grow(file, count)) {
        memcpy(file->buffer + file->used, bytes, count);
        file->used += count;
    }
}

void outfile_text(struct outfile *file, const char *text)
{
    outfile_write(file, text, strlen(text));
}

void outfile_format(struct outfile *file, const char *format, ...)
{
    char small[512], *text = small, *large = NULL;
    va_list arguments;
    if (file->status != FESCUE_OK)
        return;
    va_start(arguments, format);
    int length = text_format(file->context, small, sizeof small, format, arguments);
    va_end(arguments);
    if (length >= (int)sizeof small) {
        file->status = TAKE(file->context, (size_t)length + 1, &large);
        if (file->status != FESCUE_OK)
            return;
        va_start(arguments, format);
        length = text_format(file->context, large, (size_t)length + 1, format, arguments);
        va_end(arguments);
        text = large;
    }
    if (length < 0)
        outfile_fail(file, "written", errno);
    else
        outfile_write(file, text, (size_t)length);
    GIVE(file->context, &large);
}

void outfile_real(struct outfile *file, double value, enum fescue_precision precision)
{
    char text[32];
    outfile_write(file, text, real_to_text(value, precision, text));
}

void outfile_count(struct outfile *file, uint64_t value)
{
    char digits[20]; /* of 2^64 - 1 */
    size_t first = sizeof digits;
    do
        digits[--first] = (char)('0' + value % 10);
    while ((value /= 10) != 0);
    outfile_write(file, digits + first, sizeof digits - first);
}
