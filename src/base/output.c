/* SPDX-License-Identifier: MIT
 *
 * Files that appear whole under their final names, or not at all.
 *
 * A file NAME of the set is written as .NAME.PID.part in the same directory (a rename across file systems is no rename)
 * and takes these states:
 *
 *     absent --add--> temporary --rename--> renamed --publish succeeded--> kept
 *
 * What is temporary or renamed when the set ends is removed. publish goes in this order:
 *
 *     1  flush every file to disk and close it     the old files are still in place, whole
 *     2  remove the old seal, flush the directory  from here on the old run no longer counts as complete
 *     3  rename every file but the seal            flush the directory
 *     4  rename the seal                           flush the directory
 *
 * So a crash at any point leaves either a sealed directory whose files belong together, or one without a seal. A
 * failure in 3 or 4 removes the files already renamed, the seal first; files of an older run that they replaced are
 * lost with them, and what else is left of that run has no seal.
 */
#include "base/context_internal.h"

#include <assert.h>
#include <errno.h>
#include <fcntl.h>
#include <stdio.h>
#include <string.h>
#include <unistd.h>

/* Large enough that the price of a system call is lost in that of copying; a set has about ten files. */
enum { BUFFER_SIZE = 128 * 1024 };

enum outfile_state { OUTFILE_ABSENT, OUTFILE_TEMPORARY, OUTFILE_RENAMED, OUTFILE_KEPT };

struct outfile {
    struct outfile *next;
    fescue_context *context;
    char *final, *temporary; /* paths */
    enum outfile_state state;
    int descriptor; /* -1 once closed */
    fescue_status status;
    size_t used;
    char *buffer;
};

struct output {
    fescue_context *context;
    char *directory;     /* ends in a slash */
    char *seal;          /* path, or NULL */
    int descriptor;      /* of the directory */
    struct outfile *set; /* in the order they were added */
};

/* ---- directories ------------------------------------------------------------------------------------------------ */

static int directory_descriptor(fescue_context *context, const char *path)
{
    int descriptor;
    do
        descriptor = context->files->open(path, O_RDONLY | O_DIRECTORY | O_CLOEXEC, 0);
    while (descriptor < 0 && errno == EINTR);
    return descriptor;
}

static int descriptor_sync(fescue_context *context, int descriptor)
{
    int result;
    do
        result = context->files->sync(descriptor);
    while (result != 0 && errno == EINTR);
    return result;
}

/* Some file systems know no flush of a directory and say EINVAL: nothing more can be done there. */
static int directory_sync(fescue_context *context, int descriptor)
{
    return descriptor_sync(context, descriptor) == 0 || errno == EINVAL ? 0 : -1;
}

/* Flushes the directory that holds path[0 .. length-1]. One that may not be read cannot be flushed and is left. */
static int parent_sync(fescue_context *context, char *path, size_t length)
{
    size_t slash = length;
    while (slash > 0 && path[slash - 1] != '/')
        slash--;
    char cut = path[slash];
    path[slash] = '\0';
    int descriptor = directory_descriptor(context, slash > 0 ? path : ".");
    path[slash] = cut;
    if (descriptor < 0)
        return 0;
    int result = directory_sync(context, descriptor), error = errno;
    context->files->close(descriptor);
    errno = error;
    return result;
}

/* Makes the directory and its missing parents. Failures to make one show when the last is opened; *error is the first
   that was not "it is there already". */
static int directories_make(fescue_context *context, char *path, int *error)
{
    *error = 0;
    for (size_t k = 1; path[k - 1] != '\0'; k++) {
        if (path[k] != '/' || path[k - 1] == '/')
            continue;
        path[k] = '\0';
        bool made = context->files->make_directory(path, 0777) == 0;
        if (!made && errno != EEXIST && *error == 0)
            *error = errno;
        path[k] = '/';
        if (made && parent_sync(context, path, k) != 0)
            return -1;
    }
    return 0;
}

static fescue_status directory_open(struct output *output)
{
    fescue_context *context = output->context;
    int error = 0;
    if (directories_make(context, output->directory, &error) != 0)
        return FAIL(context, FESCUE_CANNOT_CREATE, "%s: cannot be flushed to disk: %s", output->directory,
                    error_text(context, errno));
    output->descriptor = directory_descriptor(context, output->directory);
    if (output->descriptor >= 0)
        return FESCUE_OK;
    return FAIL(context, FESCUE_CANNOT_CREATE, "%s: cannot be made or opened as a directory: %s", output->directory,
                error_text(context, errno == ENOENT && error != 0 ? error : errno));
}

/* ---- the set ---------------------------------------------------------------------------------------------------- */

/* New text: the pieces one after the other. */
static fescue_status path_join(fescue_context *context, const char *directory, const char *prefix, const char *name,
                               const char *suffix, char **out)
{
    size_t size = strlen(directory) + strlen(prefix) + strlen(name) + strlen(suffix) + 1;
    fescue_status status = TAKE(context, size, out);
    if (status == FESCUE_OK)
        snprintf(*out, size, "%s%s%s%s", directory, prefix, name, suffix);
    return status;
}

fescue_status output_open(fescue_context *context, const char *directory, const char *seal, struct output **out)
{
    fescue_status status;
    *out = NULL;
    assert(directory[0] != '\0');
    TRY(TAKE(context, 1, out));
    struct output *output = *out;
    output->context = context;
    output->descriptor = -1;
    TRY(path_join(context, directory, "", "", "/", &output->directory));
    if (seal != NULL)
        TRY(path_join(context, output->directory, "", seal, "", &output->seal));
    TRY(directory_open(output));
done:
    if (status != FESCUE_OK)
        output_abandon(out);
    return status;
}

static void outfile_close(struct outfile *file)
{
    if (file->descriptor >= 0)
        file->context->files->close(file->descriptor);
    file->descriptor = -1;
}

static void outfile_remove(struct outfile *file)
{
    if (file->state == OUTFILE_TEMPORARY)
        file->context->files->unlink(file->temporary);
    if (file->state == OUTFILE_RENAMED)
        file->context->files->unlink(file->final);
    file->state = OUTFILE_ABSENT;
}

static void outfile_destroy(struct outfile *file)
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

static struct outfile *seal_file(const struct output *output)
{
    struct outfile *file = output->set;
    while (file != NULL && (output->seal == NULL || strcmp(file->final, output->seal) != 0))
        file = file->next;
    return file;
}

void output_abandon(struct output **pointer)
{
    struct output *output = *pointer;
    if (output == NULL)
        return;
    fescue_context *context = output->context;
    struct outfile *seal = seal_file(output);
    if (seal != NULL && seal->state == OUTFILE_RENAMED)
        outfile_remove(seal);
    while (output->set != NULL) {
        struct outfile *file = output->set;
        output->set = file->next;
        outfile_destroy(file);
    }
    if (output->descriptor >= 0)
        context->files->close(output->descriptor);
    GIVE(context, &output->seal);
    GIVE(context, &output->directory);
    GIVE(context, pointer);
}

/* O_EXCL, so that nothing that lies there under this name is written through; a rest of a process that died and had our
   number is removed once. */
static fescue_status outfile_create(struct outfile *file)
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

fescue_status output_add(struct output *output, const char *name, struct outfile **out)
{
    fescue_context *context = output->context;
    fescue_status status;
    char suffix[32];
    struct outfile *file = NULL;
    *out = NULL;
    assert(name[0] != '\0' && strchr(name, '/') == NULL);
    TRY(TAKE(context, 1, &file));
    file->context = context;
    file->descriptor = -1;
    snprintf(suffix, sizeof suffix, ".%ld.part", (long)getpid());
    TRY(path_join(context, output->directory, "", name, "", &file->final));
    TRY(path_join(context, output->directory, ".", name, suffix, &file->temporary));
    TRY(TAKE(context, BUFFER_SIZE, &file->buffer));
    TRY(outfile_create(file));

    struct outfile **end = &output->set;
    while (*end != NULL)
        end = &(*end)->next;
    *end = file;
    *out = file;
done:
    if (status != FESCUE_OK && file != NULL)
        outfile_destroy(file);
    return status;
}

/* ---- publishing ------------------------------------------------------------------------------------------------- */

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

static fescue_status outfile_finish(struct outfile *file)
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

static fescue_status outfile_rename(struct outfile *file)
{
    if (file->context->files->rename(file->temporary, file->final) != 0)
        return outfile_fail(file, "renamed from its temporary name", errno);
    file->state = OUTFILE_RENAMED;
    return FESCUE_OK;
}

static fescue_status output_sync(struct output *output)
{
    if (directory_sync(output->context, output->descriptor) == 0)
        return FESCUE_OK;
    return FAIL(output->context, FESCUE_CANNOT_WRITE, "%s: cannot be flushed to disk: %s", output->directory,
                error_text(output->context, errno));
}

static fescue_status seal_break(struct output *output)
{
    if (output->seal == NULL)
        return FESCUE_OK;
    if (output->context->files->unlink(output->seal) == 0)
        return output_sync(output);
    if (errno == ENOENT)
        return FESCUE_OK;
    return FAIL(output->context, FESCUE_CANNOT_WRITE, "%s: the one of an older run cannot be removed: %s", output->seal,
                error_text(output->context, errno));
}

fescue_status output_publish(struct output **pointer)
{
    struct output *output = *pointer;
    struct outfile *seal = seal_file(output);
    fescue_status status = FESCUE_OK;
    for (struct outfile *file = output->set; file != NULL; file = file->next)
        TRY(outfile_finish(file));
    TRY(seal_break(output));
    for (struct outfile *file = output->set; file != NULL; file = file->next)
        if (file != seal)
            TRY(outfile_rename(file));
    TRY(output_sync(output));
    if (seal != NULL) {
        TRY(outfile_rename(seal));
        TRY(output_sync(output));
    }
    for (struct outfile *file = output->set; file != NULL; file = file->next)
        file->state = OUTFILE_KEPT;
done:
    output_abandon(pointer);
    return status;
}

/* ---- appending -------------------------------------------------------------------------------------------------- */

fescue_status outfile_status(const struct outfile *file)
{
    return file->status;
}

void outfile_write(struct outfile *file, const void *bytes, size_t count)
{
    if (file->status != FESCUE_OK || count == 0)
        return;
    if (count > BUFFER_SIZE - file->used)
        outfile_flush(file);
    if (count > BUFFER_SIZE) {
        outfile_put(file, bytes, count);
    } else {
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
