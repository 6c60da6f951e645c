/* SPDX-License-Identifier: MIT
 *
 * Fault sweeps over the main job, from a file to files: read a small table, fill it, write the results. What is checked
 * after each run stands in support_faults.h.
 */
#include "../unit/support_faults.h"
#include "../unit/support_malloc.h"

#include <errno.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

/* ---- the job ---------------------------------------------------------------------------------------------------- */

/* Variants: a usual run; an older, other one; one with fewer files; one that chooses nothing and so is short. */
enum { FILL_ALL, FILL_OLDER, FILL_FEWER, FILL_SHORT };

static void options_put(fescue_context *context, const struct fault_job *job, struct fescue_options *options)
{
    fescue_options_standard(options);
    options->threads = (int64_t)job->threads;
    assert_status(context, fescue_options_set(context, options, "rank-most", "2"), FESCUE_OK);
    if (job->variant == FILL_OLDER)
        assert_status(context, fescue_options_set(context, options, "rank", "2"), FESCUE_OK);
    if (job->variant == FILL_SHORT) {
        assert_status(context, fescue_options_set(context, options, "rank", "1"), FESCUE_OK);
        assert_status(context, fescue_options_set(context, options, "ridge", "0.1"), FESCUE_OK);
        assert_status(context, fescue_options_set(context, options, "offsets", "both"), FESCUE_OK);
    }
    if (job->variant == FILL_FEWER)
        assert_status(context, fescue_options_set(context, options, "write", "filled,cells"), FESCUE_OK);
}

static uint64_t takes_before_writing; /* allocations of the last run until then */

static fescue_status fill_job(fescue_context *context, const struct fault_job *job)
{
    struct fescue_options options;
    fescue_table *table = NULL;
    fescue_fill *fill = NULL;
    fescue_status status;
    options_put(context, job, &options);
    status = fescue_table_read(context, job->input, &options, &table);
    assert_int_equal(status == FESCUE_OK, table != NULL);
    if (status != FESCUE_OK)
        goto done;
    status = fescue_fill_table(table, &options, &fill);
    assert_int_equal(status == FESCUE_OK, fill != NULL);
    if (status != FESCUE_OK)
        goto done;
    takes_before_writing = fault_calls(FAULT_TAKE);
    status = fescue_fill_write(fill, job->directory);
    assert_true(fescue_fill_text(fill)[0] != '\0'); /* the fill stays good when writing failed */
done:
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
    return status;
}

/* ---- the ground of all sweeps ----------------------------------------------------------------------------------- */

enum { ROWS = 12, COLUMNS = 8 };

static struct ground {
    struct bench *bench;
    char input[PATH_SIZE], directory[PATH_SIZE];
    struct snapshot reference[FILL_SHORT + 1]; /* by variant */
    uint64_t takes_before_writing;
} ground;

/* 12 x 8, labelled, of rank 1 and a little noise, a fifth of it holes. */
static void table_put(const char *path)
{
    FILE *file = fopen(path, "w");
    assert_non_null(file);
    fputs("week", file);
    for (unsigned j = 0; j < COLUMNS; j++)
        fprintf(file, ",\"well %u\"", j);
    for (unsigned i = 0; i < ROWS; i++) {
        fprintf(file, "\nw%u", i);
        for (unsigned j = 0; j < COLUMNS; j++) {
            double noise = random_uniform_at(41, RANDOM_TEST, 0, i * COLUMNS + j) - 0.5;
            double value = 30 + 5 * (1 + i % 5) * (0.2 + j % 3) + noise;
            if (random_uniform_at(41, RANDOM_TEST, 1, i * COLUMNS + j) < 0.2)
                fputc(',', file);
            else
                fprintf(file, ",%.2f", value);
        }
    }
    fputc('\n', file);
    assert_int_equal(fclose(file), 0);
}

static struct fault_job fill_job_of(int variant, size_t threads)
{
    return (struct fault_job){.name = "fill",
                              .input = ground.input,
                              .directory = ground.directory,
                              .seal = "run.json",
                              .threads = threads,
                              .variant = variant,
                              .run = fill_job};
}

static void reference_take(int variant)
{
    struct fault_job job = fill_job_of(variant, 1);
    fault_clear();
    assert_int_equal(fault_job_run(&job), FESCUE_OK);
    snapshot_take(ground.directory, &ground.reference[variant]);
    assert_true(ground.reference[variant].count > 2);
    folder_remove(ground.directory);
}

static int ground_open(void **state)
{
    bench_setup(state);
    ground.bench = bench_of(state);
    table_put(path_in(ground.bench->folder, "levels.csv", ground.input));
    path_in(ground.bench->folder, "results", ground.directory);
    for (int variant = FILL_ALL; variant <= FILL_SHORT; variant++) {
        reference_take(variant);
        if (variant == FILL_FEWER)
            ground.takes_before_writing = takes_before_writing;
    }
    assert_false(snapshots_match(&ground.reference[FILL_ALL], &ground.reference[FILL_OLDER]));
    assert_true(ground.reference[FILL_FEWER].count < ground.reference[FILL_OLDER].count);
    return 0;
}

static int ground_close(void **state)
{
    for (int variant = FILL_ALL; variant <= FILL_SHORT; variant++)
        snapshot_free(&ground.reference[variant]);
    return bench_teardown(state);
}

/* ---- the sweeps ------------------------------------------------------------------------------------------------- */

static void fresh_sweep(int variant, const struct fault_case *fault, size_t threads, bool lasting)
{
    const struct fault_job job = fill_job_of(variant, threads);
    const struct fault_sweep sweep = {
        .job = &job, .fault = fault, .lasting = lasting, .reference = &ground.reference[variant]};
    uint64_t met = fault_sweep_run(&sweep);
    assert_true(met > 0);
    print_message("# %s: %llu met\n", fault_name(fault->kind), (unsigned long long)met);
}

static void over_older_sweep(const struct fault_case *fault, size_t threads, bool lasting)
{
    const struct fault_job job = fill_job_of(FILL_FEWER, threads);
    struct fault_sweep sweep = {.job = &job,
                                .fault = fault,
                                .lasting = lasting,
                                .older = &ground.reference[FILL_OLDER],
                                .reference = &ground.reference[FILL_FEWER]};
    if (fault->kind == FAULT_TAKE) /* those before writing began have no older run to hurt */
        sweep.first = ground.takes_before_writing;
    assert_true(fault_sweep_run(&sweep) > 0);
}

/* A block that was to become smaller may stay as it was. */
static const struct fault_case memory_fault = {FAULT_TAKE, 0, ALLOWED(FESCUE_NO_MEMORY) | ALLOWED(FESCUE_OK)};

static void every_allocation_may_fail(void **state)
{
    (void)state;
    fresh_sweep(FILL_ALL, &memory_fault, 1, false);
}

static void every_allocation_may_fail_with_two_threads(void **state)
{
    (void)state;
    fresh_sweep(FILL_SHORT, &memory_fault, 2, true);
}

static void every_allocation_may_fail_over_an_older_run(void **state)
{
    (void)state;
    over_older_sweep(&memory_fault, 1, false);
}

/* Every third call: those of CHOLMOD are the same for each of the many systems that it solves. */
static void malloc_may_fail(void **state)
{
    static const struct fault_case malloc_fault = {FAULT_MALLOC, ENOMEM,
                                                   ALLOWED(FESCUE_NO_MEMORY) | ALLOWED(FESCUE_OK)};
    const struct fault_job job = fill_job_of(FILL_SHORT, 1);
    const struct fault_sweep sweep = {
        .job = &job, .fault = &malloc_fault, .step = 3, .reference = &ground.reference[FILL_SHORT]};
    (void)state;
    if (HAS_OWN_MALLOC)
        assert_true(fault_sweep_run(&sweep) > 100);
    else
        print_message("# not with a sanitizer\n");
}

static const struct fault_case file_faults[] = {
    /* A parent directory that cannot be opened is not flushed, that is all. */
    {FAULT_OPEN, EACCES, ALLOWED(FESCUE_NO_INPUT) | ALLOWED(FESCUE_CANNOT_CREATE) | ALLOWED(FESCUE_OK)},
    {FAULT_OPEN, EMFILE, ALLOWED(FESCUE_NO_INPUT) | ALLOWED(FESCUE_CANNOT_CREATE) | ALLOWED(FESCUE_OK)},
    {FAULT_READ, EIO, ALLOWED(FESCUE_NO_INPUT)},
    {FAULT_SHORT_READ, 0, ALLOWED(FESCUE_OK)},
    {FAULT_WRITE, ENOSPC, ALLOWED(FESCUE_CANNOT_WRITE)},
    {FAULT_WRITE, EIO, ALLOWED(FESCUE_CANNOT_WRITE)},
    {FAULT_SHORT_WRITE, 0, ALLOWED(FESCUE_OK)},
    {FAULT_SYNC, EIO, ALLOWED(FESCUE_CANNOT_WRITE) | ALLOWED(FESCUE_CANNOT_CREATE)},
    /* Closing what was only read loses nothing. */
    {FAULT_CLOSE, EIO, ALLOWED(FESCUE_CANNOT_WRITE) | ALLOWED(FESCUE_OK)},
    {FAULT_RENAME, EXDEV, ALLOWED(FESCUE_CANNOT_WRITE)},
    {FAULT_UNLINK, EROFS, ALLOWED(FESCUE_CANNOT_WRITE)},
    {FAULT_MAKE_DIRECTORY, EROFS, ALLOWED(FESCUE_CANNOT_CREATE) | ALLOWED(FESCUE_OK)},
};
enum { FILE_FAULTS = sizeof file_faults / sizeof file_faults[0] };

static void every_file_call_may_fail(void **state)
{
    (void)state;
    for (size_t k = 0; k < FILE_FAULTS; k++)
        fresh_sweep(FILL_SHORT, &file_faults[k], 1, false);
}

static void file_calls_may_go_on_failing(void **state)
{
    (void)state;
    for (size_t k = 0; k < FILE_FAULTS; k++)
        fresh_sweep(FILL_SHORT, &file_faults[k], 2, true);
}

static void every_file_call_may_fail_over_an_older_run(void **state)
{
    (void)state;
    for (size_t k = 0; k < FILE_FAULTS; k++) {
        over_older_sweep(&file_faults[k], 2, false);
        over_older_sweep(&file_faults[k], 1, true);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(every_allocation_may_fail),
        cmocka_unit_test(every_allocation_may_fail_with_two_threads),
        cmocka_unit_test(every_allocation_may_fail_over_an_older_run),
        cmocka_unit_test(malloc_may_fail),
        cmocka_unit_test(every_file_call_may_fail),
        cmocka_unit_test(file_calls_may_go_on_failing),
        cmocka_unit_test(every_file_call_may_fail_over_an_older_run),
    };
    return cmocka_run_group_tests(tests, ground_open, ground_close);
}
