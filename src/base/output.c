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
 *     3  remove what the new set retires,
 *        rename every file but the seal            flush the directory
 *     4  rename the seal                           flush the directory
 *
 * So a crash at any point leaves either a sealed directory whose files belong together, or one without a seal. A
 * failure in 3 or 4 removes the files already renamed, the seal first; files of an older run that they replaced are
 * lost with them, and what else is left of that run has no seal.
 */
#include "base/output_internal.h"

#include <assert.h>
#include <dirent.h>
#include <errno.h>
#include <fcntl.h>
#include <signal.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>

struct retired { /* a name that must be gone when the set is there */
    struct retired *next;
    char *path;
};

struct output {
    fescue_context *context;
    char *directory;     /* ends in a slash */
    char *seal;          /* path, or NULL */
    int descriptor;      /* of the directory */
    struct outfile *set; /* in the order they were added */
    struct retired *retired;
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

/* Some file systems know no flush of a directory and say EINVAL or ENOTSUP: nothing more can be done there. */
static int directory_sync(fescue_context *context, int descriptor)
{
    return descriptor_sync(context, descriptor) == 0 || errno == EINVAL || errno == ENOTSUP ? 0 : -1;
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

fescue_status directory_make(fescue_context *context, const char *path)
{
    struct output *output = NULL;
    fescue_status status = output_open(context, path, NULL, &output);
    output_abandon(&output);
    return status;
}

/* ---- the set ---------------------------------------------------------------------------------------------------- */

fescue_status output_open(fescue_context *context, const char *directory, const char *seal, struct output **out)
{
    fescue_status status;
    *out = NULL;
    if (directory[0] == '\0')
        return FAIL(context, FESCUE_CANNOT_CREATE, "the name of the output directory is empty");
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

/* The file of the set with this final path, or NULL. */
static struct outfile *outfile_find(const struct output *output, const char *path)
{
    struct outfile *file = output->set;
    while (file != NULL && (path == NULL || strcmp(file->final, path) != 0))
        file = file->next;
    return file;
}

static void retired_destroy(fescue_context *context, struct retired *retired)
{
    GIVE(context, &retired->path);
    GIVE(context, &retired);
}

void output_abandon(struct output **pointer)
{
    struct output *output = *pointer;
    if (output == NULL)
        return;
    fescue_context *context = output->context;
    struct outfile *seal = outfile_find(output, output->seal);
    if (seal != NULL && seal->state == OUTFILE_RENAMED)
        outfile_remove(seal);
    while (output->set != NULL) {
        struct outfile *file = output->set;
        output->set = file->next;
        outfile_destroy(file);
    }
    while (output->retired != NULL) {
        struct retired *retired = output->retired;
        output->retired = retired->next;
        retired_destroy(context, retired);
    }
    if (output->descriptor >= 0)
        context->files->close(output->descriptor);
    GIVE(context, &output->seal);
    GIVE(context, &output->directory);
    GIVE(context, pointer);
}

static bool is_name(const char *name)
{
    return name[0] != '\0' && strchr(name, '/') == NULL;
}

static bool has_file(const struct output *output, const char *name)
{
    size_t directory = strlen(output->directory);
    const struct outfile *file = output->set;
    while (file != NULL && strcmp(file->final + directory, name) != 0)
        file = file->next;
    return file != NULL;
}

fescue_status output_add(struct output *output, const char *name, struct outfile **out)
{
    assert(is_name(name) && !has_file(output, name));
    fescue_status status = outfile_create(output->context, output->directory, name, out);
    if (status != FESCUE_OK)
        return status;
    struct outfile **end = &output->set;
    while (*end != NULL)
        end = &(*end)->next;
    *end = *out;
    return FESCUE_OK;
}

fescue_status output_retire(struct output *output, const char *name)
{
    fescue_context *context = output->context;
    fescue_status status;
    struct retired *retired = NULL;
    assert(is_name(name));
    TRY(TAKE(context, 1, &retired));
    TRY(path_join(context, output->directory, "", name, "", &retired->path));
    retired->next = output->retired;
    output->retired = retired;
done:
    if (status != FESCUE_OK && retired != NULL)
        retired_destroy(context, retired);
    return status;
}

/* ---- what the dead left ------------------------------------------------------------------------------------------ */

/* A process that has ended but whose parent has not looked yet is as dead as one that is gone. */
static bool is_alive(long process)
{
    char path[64], text[512] = "";
    if (kill((pid_t)process, 0) != 0 && errno == ESRCH)
        return false;
    snprintf(path, sizeof path, "/proc/%ld/stat", process);
    int descriptor = open(path, O_RDONLY | O_CLOEXEC);
    ptrdiff_t got = descriptor < 0 ? 0 : read(descriptor, text, sizeof text - 1);
    if (descriptor >= 0)
        close(descriptor);
    const char *name_end = got > 0 ? strrchr(text, ')') : NULL; /* "123 (name) S ..." */
    return name_end == NULL || strncmp(name_end, ") Z", 3) != 0;
}

/* ".NAME.PROCESS.part" of a process that is no more. */
static bool is_left(const char *name)
{
    static const char ending[] = ".part";
    size_t length = strlen(name), cut = sizeof ending - 1;
    if (name[0] != '.' || length <= cut || strcmp(name + length - cut, ending) != 0)
        return false;
    size_t first = length - cut;
    while (first > 1 && name[first - 1] >= '0' && name[first - 1] <= '9')
        first--;
    long process = strtol(name + first, NULL, 10);
    return first < length - cut && name[first - 1] == '.' && process > 0 && process < INT32_MAX && !is_alive(process);
}

fescue_status output_sweep(fescue_context *context, const char *directory)
{
    char *path = NULL;
    fescue_status status = FESCUE_OK;
    DIR *folder = opendir(directory);
    for (struct dirent *entry = NULL; folder != NULL && (entry = readdir(folder)) != NULL;) {
        if (!is_left(entry->d_name))
            continue;
        TRY(path_join(context, directory, "/", entry->d_name, "", &path));
        context->files->unlink(path);
        GIVE(context, &path);
    }
done:
    if (folder != NULL)
        closedir(folder);
    return status;
}

/* ---- publishing ------------------------------------------------------------------------------------------------- */

static fescue_status output_sync(struct output *output)
{
    if (directory_sync(output->context, output->descriptor) == 0)
        return FESCUE_OK;
    return FAIL(output->context, FESCUE_CANNOT_WRITE, "%s: cannot be flushed to disk: %s", output->directory,
                error_text(output->context, errno));
}

/* Removes what an older run left under the path; *was_there tells. */
static fescue_status older_remove(struct output *output, const char *path, bool *was_there)
{
    *was_there = output->context->files->unlink(path) == 0;
    if (*was_there || errno == ENOENT)
        return FESCUE_OK;
    return FAIL(output->context, FESCUE_CANNOT_WRITE, "%s: the one of an older run cannot be removed: %s", path,
                error_text(output->context, errno));
}

static fescue_status seal_break(struct output *output)
{
    bool was_there = false;
    fescue_status status = output->seal == NULL ? FESCUE_OK : older_remove(output, output->seal, &was_there);
    return was_there ? output_sync(output) : status;
}

static fescue_status retired_remove(struct output *output)
{
    fescue_status status = FESCUE_OK;
    bool was_there;
    for (const struct retired *old = output->retired; old != NULL && status == FESCUE_OK; old = old->next)
        if (outfile_find(output, old->path) == NULL)
            status = older_remove(output, old->path, &was_there);
    return status;
}

fescue_status output_publish(struct output **pointer)
{
    struct output *output = *pointer;
    struct outfile *seal = outfile_find(output, output->seal);
    fescue_status status = FESCUE_OK;
    for (struct outfile *file = output->set; file != NULL; file = file->next)
        TRY(outfile_finish(file));
    TRY(seal_break(output));
    TRY(retired_remove(output));
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
