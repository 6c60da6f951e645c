/* SPDX-License-Identifier: MIT
 *
 * Fault sweeps over a whole job.
 */
#include "support_faults.h"

#include <dirent.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>

/* ---- snapshots -------------------------------------------------------------------------------------------------- */

static int files_compare(const void *a, const void *b)
{
    return strcmp(((const struct snapshot_file *)a)->name, ((const struct snapshot_file *)b)->name);
}

void snapshot_take(const char *folder, struct snapshot *snapshot)
{
    char path[PATH_SIZE];
    *snapshot = (struct snapshot){0};
    size_t room = folder_count(folder);
    snapshot->files = calloc(room + 1, sizeof *snapshot->files);
    assert_non_null(snapshot->files);
    DIR *directory = opendir(folder);
    if (directory == NULL)
        return;
    for (const struct dirent *entry; (entry = readdir(directory)) != NULL;) {
        if (strcmp(entry->d_name, ".") == 0 || strcmp(entry->d_name, "..") == 0)
            continue;
        assert_true(snapshot->count < room);
        struct snapshot_file *file = &snapshot->files[snapshot->count++];
        file->name = strdup(entry->d_name);
        file->bytes = file_get(path_in(folder, entry->d_name, path), &file->size);
        assert_true(file->name != NULL && file->bytes != NULL);
    }
    closedir(directory);
    qsort(snapshot->files, snapshot->count, sizeof *snapshot->files, files_compare);
}

void snapshot_put(const struct snapshot *snapshot, const char *folder)
{
    char path[PATH_SIZE];
    assert_int_equal(mkdir(folder, 0777), 0);
    for (size_t k = 0; k < snapshot->count; k++)
        file_put(path_in(folder, snapshot->files[k].name, path), snapshot->files[k].bytes, snapshot->files[k].size);
}

static size_t compared_size(const struct snapshot_file *file)
{
    const char *timing = strcmp(file->name, "run.json") == 0 ? strstr(file->bytes, "\"timing\"") : NULL;
    return timing == NULL ? file->size : (size_t)(timing - file->bytes);
}

bool snapshots_match(const struct snapshot *a, const struct snapshot *b)
{
    if (a->count != b->count)
        return false;
    for (size_t k = 0; k < a->count; k++) {
        size_t size = compared_size(&a->files[k]);
        if (strcmp(a->files[k].name, b->files[k].name) != 0 || size != compared_size(&b->files[k]) ||
            memcmp(a->files[k].bytes, b->files[k].bytes, size) != 0)
            return false;
    }
    return true;
}

void snapshot_free(struct snapshot *snapshot)
{
    for (size_t k = 0; k < snapshot->count; k++) {
        free(snapshot->files[k].name);
        free(snapshot->files[k].bytes);
    }
    free(snapshot->files);
    *snapshot = (struct snapshot){0};
}

/* ---- one run ---------------------------------------------------------------------------------------------------- */

fescue_status fault_job_run(const struct fault_job *job)
{
    fescue_context *context;
    fescue_status status = test_context_try(&context);
    if (status != FESCUE_OK) {
        assert_null(context);
        return status;
    }
    status = job->run(context, job);
    if (status != FESCUE_OK)
        assert_true(fescue_failure_text(context)[0] != '\0');
    assert_no_leak(context);
    fescue_context_destroy(&context);
    return status;
}

static bool has_file(const struct snapshot *snapshot, const char *name)
{
    for (size_t k = 0; k < snapshot->count; k++)
        if (strcmp(snapshot->files[k].name, name) == 0)
            return true;
    return false;
}

/* Whether what lies in the directory keeps the promise; else why not. */
static const char *directory_complaint(const struct fault_sweep *sweep, bool is_done)
{
    struct snapshot found;
    const char *complaint = NULL;
    if (sweep->job->seal == NULL)
        return NULL;
    snapshot_take(sweep->job->directory, &found);
    if (is_done)
        complaint = snapshots_match(&found, sweep->reference) ? NULL : "done, but not with the files of the reference";
    else if (sweep->older == NULL && found.count > 0)
        complaint = "failed, but left files";
    else if (has_file(&found, sweep->job->seal) && !snapshots_match(&found, sweep->older))
        complaint = "failed, and the older run is sealed but not whole";
    snapshot_free(&found);
    return complaint;
}

/* ---- the sweep -------------------------------------------------------------------------------------------------- */

static void directory_prepare(const struct fault_sweep *sweep)
{
    const char *directory = sweep->job->directory;
    if (sweep->job->seal == NULL)
        return;
    if (file_exists(directory))
        folder_remove(directory);
    if (sweep->older != NULL)
        snapshot_put(sweep->older, directory);
}

/* Fails the test when there is a complaint, and names the run that gave cause. */
static void complain(const struct fault_sweep *sweep, uint64_t nth, const char *complaint)
{
    if (complaint != NULL)
        fail_msg("%s, %zu threads, variant %d, %s number %llu%s: %s", sweep->job->name, sweep->job->threads,
                 sweep->job->variant, fault_name(sweep->fault->kind), (unsigned long long)nth,
                 sweep->lasting ? " and all later ones" : "", complaint);
}

/* A run whose nth call fails. *met: whether there was one. */
static const char *faulty_complaint(const struct fault_sweep *sweep, uint64_t nth, bool *met)
{
    static char text[128];
    size_t descriptors = descriptors_count();
    uint64_t blocks = test_blocks_alive();
    fault_plan(sweep->fault->kind, nth, sweep->lasting, sweep->fault->error);
    fescue_status status = fault_job_run(sweep->job);
    *met = fault_met();
    fault_clear();
    if (test_blocks_alive() != blocks)
        return "blocks are alive";
    if (descriptors_count() != descriptors)
        return "a descriptor is open, or one too many was closed";
    if (*met ? (sweep->fault->allowed & ALLOWED(status)) == 0 : status != FESCUE_OK) {
        snprintf(text, sizeof text, "an unexpected status, \"%s\"", fescue_status_text(status));
        return text;
    }
    if (sweep->fault->kind == FAULT_UNLINK && sweep->lasting && status != FESCUE_OK)
        return NULL; /* nothing can be tidied up then */
    if (sweep->job->seal != NULL && folder_count_suffix(sweep->job->directory, ".part") > 0)
        return "a temporary file is left";
    return directory_complaint(sweep, status == FESCUE_OK);
}

static const char *clean_complaint(const struct fault_sweep *sweep)
{
    if (fault_job_run(sweep->job) != FESCUE_OK)
        return "the clean run after it failed";
    return directory_complaint(sweep, true) != NULL ? "the clean run after it differs from the reference" : NULL;
}

/* A sweep over allocations has hundreds of runs. A clean run after each would double the time, and most of them would
   start from what the one before did: an empty directory. Sweeps over file calls are shorter than CLEAN_ALWAYS. */
enum { CLEAN_ALWAYS = 100, CLEAN_EVERY = 10 };

uint64_t fault_sweep_run(const struct fault_sweep *sweep)
{
    const uint64_t first = sweep->first > 0 ? sweep->first : 1, step = sweep->step > 0 ? sweep->step : 1;
    for (uint64_t runs = 0;; runs++) {
        uint64_t nth = first + runs * step;
        bool met;
        directory_prepare(sweep);
        complain(sweep, nth, faulty_complaint(sweep, nth, &met));
        if (!met || runs < CLEAN_ALWAYS || runs % CLEAN_EVERY == 0)
            complain(sweep, nth, clean_complaint(sweep));
        if (!met)
            return runs;
    }
}
