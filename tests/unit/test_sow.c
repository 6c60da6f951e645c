/* SPDX-License-Identifier: MIT
 *
 * Sowing from within: shares of columns, walks through columns, text, and faults at every point. What is in the tables
 * is looked at from outside, by tests/command/sow.sh.
 */
#include "support_faults.h"

#include "job/sow_internal.h"

#include <errno.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

enum { HOLES_SCATTERED, HOLES_RUNS, HOLES_LATE_STARTS, HOLES_SHAPES };

static struct fescue_sow_options options_of(int64_t rows, int64_t columns, double seen)
{
    struct fescue_sow_options options;
    fescue_sow_options_standard(&options);
    options.rows = rows;
    options.columns = columns;
    options.seen = seen;
    return options;
}

/* ---- shares ----------------------------------------------------------------------------------------------------- */

static void shares_check(double seen, double popularity)
{
    enum { COLUMNS = 37 };
    double share[COLUMNS], total = 0;
    struct fescue_sow_options options = options_of(10, COLUMNS, seen);
    options.popularity = popularity;
    holes_shares(&options, share);
    for (size_t j = 0; j < COLUMNS; j++) {
        assert_true(share[j] >= 0 && share[j] <= 1);
        assert_true(j == 0 || share[j] <= share[j - 1]);
        /* Those that are not seen whole are as (j+1)^-s to each other. */
        if (seen > 0 && share[j] < 1)
            assert_close(share[j] / share[COLUMNS - 1], pow(COLUMNS / (double)(j + 1), popularity), 1e-10);
        total += share[j];
    }
    assert_close(total, seen * COLUMNS, 1e-10);
}

static void shares_have_the_wanted_mean(void **state)
{
    static const double seen[] = {0, 1e-9, 0.01, 0.3, 0.5, 0.97, 1}, popularity[] = {0, 0.5, 1, 3};
    (void)state;
    for (size_t s = 0; s < sizeof seen / sizeof seen[0]; s++)
        for (size_t p = 0; p < sizeof popularity / sizeof popularity[0]; p++)
            shares_check(seen[s], popularity[p]);
}

/* ---- walks ------------------------------------------------------------------------------------------------------ */

static uint64_t walk_check(const struct sowing *sowing, uint64_t column, double share)
{
    struct holes holes;
    uint64_t count = 0, last = 0;
    for (holes_open(sowing, column, share, &holes); holes.next < sowing->rows; holes_step(&holes)) {
        assert_true(count == 0 || holes.next > last);
        last = holes.next;
        count++;
    }
    assert_true(holes.next == sowing->rows);
    holes_step(&holes);
    assert_true(holes.next == sowing->rows);
    return count;
}

static void walks_go_up_and_end(void **state)
{
    static const double shares[] = {0, 1e-300, 1e-9, 0.001, 0.3, 0.999999, 1};
    static const uint64_t rows[] = {1, 2, 500, UINT32_MAX};
    (void)state;
    for (int shape = 0; shape < HOLES_SHAPES; shape++)
        for (size_t m = 0; m < sizeof rows / sizeof rows[0]; m++)
            for (size_t s = 0; s < sizeof shares / sizeof shares[0]; s++) {
                if (rows[m] == UINT32_MAX && shares[s] > 1e-6)
                    continue; /* four thousand million steps */
                struct fescue_sow_options options = options_of((int64_t)rows[m], 1, shares[s]);
                options.holes = shape;
                struct sowing sowing = {.options = &options, .rows = rows[m]};
                uint64_t count = walk_check(&sowing, 0, shares[s]);
                assert_true(shares[s] > 0 || count == 0);
                assert_true(shares[s] < 1 || count == rows[m]);
            }
}

/* Over 4000 columns of 50 rows the share of each shape is the wanted one: its standard deviation is below 0.008, the
   widest being that of late starts, sqrt(0.25 / 4000). */
static void walks_have_the_wanted_share(void **state)
{
    enum { ROWS = 50, COLUMNS = 4000 };
    static const double shares[] = {0.03, 0.3, 0.8};
    (void)state;
    for (int shape = 0; shape < HOLES_SHAPES; shape++)
        for (size_t s = 0; s < sizeof shares / sizeof shares[0]; s++) {
            struct fescue_sow_options options = options_of(ROWS, COLUMNS, shares[s]);
            options.holes = shape;
            struct sowing sowing = {.options = &options, .rows = ROWS};
            uint64_t count = 0;
            for (uint64_t j = 0; j < COLUMNS; j++)
                count += walk_check(&sowing, j, shares[s]);
            /* A late start falls on a whole row, half a row early on the average. */
            double early = shape == HOLES_LATE_STARTS ? 0.5 / ROWS : 0;
            assert_close((double)count / (ROWS * COLUMNS), shares[s] + early, 0.024);
        }
}

/* ---- text ------------------------------------------------------------------------------------------------------- */

struct paper {
    struct sowing sowing;
    struct fescue_sow_options options;
    struct sink sink;
};

static void paper_open(struct bench *bench, struct paper *paper, bool is_packed)
{
    paper->options = options_of(1, 1, 1);
    paper->options.gzip = is_packed;
    paper->sowing = (struct sowing){.context = bench->context, .options = &paper->options};
    assert_status(bench->context, output_open(bench->context, bench->folder, NULL, &paper->sowing.output), FESCUE_OK);
    assert_status(bench->context, sink_open(&paper->sowing, "text", &paper->sink), FESCUE_OK);
}

static void paper_close(struct bench *bench, struct paper *paper)
{
    assert_status(bench->context, sink_close(&paper->sink), FESCUE_OK);
    assert_status(bench->context, output_publish(&paper->sowing.output), FESCUE_OK);
}

static void numbers_are_written(void **state)
{
    struct bench *bench = bench_of(state);
    struct paper paper;
    char path[PATH_SIZE];
    paper_open(bench, &paper, false);
    static const struct {
        double value;
        int places;
    } fixed[] = {{0, 0},     {0, 1},     {-0.04, 1},  {-0.06, 1},  {2.5, 0},       {9.96, 1},
                 {9.999, 2}, {0.05, 2},  {-12.3, 1},  {1234.5, 4}, {0.0001, 4},    {-0.00004, 4},
                 {10, 1},    {0.001, 3}, {99.995, 1}, {1e11, 1},   {-0.999951, 4}, {7, 2}};
    for (size_t k = 0; k < sizeof fixed / sizeof fixed[0]; k++) {
        sink_fixed(&paper.sink, fixed[k].value, fixed[k].places);
        sink_text(&paper.sink, " ");
    }
    sink_count(&paper.sink, 0);
    sink_text(&paper.sink, " ");
    sink_count(&paper.sink, UINT64_MAX);
    sink_text(&paper.sink, " ");
    sink_real(&paper.sink, 0.1);
    paper_close(bench, &paper);
    file_check(path_in(bench->folder, "text", path),
               "0 0.0 0.0 -0.1 3 10.0 10.00 0.05 -12.3 1234.5000 0.0001 0.0000 10.0 0.001 100.0 100000000000.0 "
               "-1.0000 7.00 0 18446744073709551615 0.1");
}

/* More than the buffers hold, in pieces of every length, against zlib's own reading of the file. */
static void gzip_holds_the_text(void **state)
{
    struct bench *bench = bench_of(state);
    struct paper paper;
    enum { PIECES = 700, SIZE = PIECES * (PIECES + 1) / 2 };
    char *text = malloc(SIZE), *got = malloc(SIZE + 1), path[PATH_SIZE];
    assert_true(text != NULL && got != NULL);
    struct random_stream stream = random_open(1, RANDOM_TEST, 0);
    for (size_t k = 0; k < SIZE; k++)
        text[k] = (char)random_below(&stream, 256);
    paper_open(bench, &paper, true);
    for (size_t length = 0, at = 0; length <= PIECES; at += length++)
        sink_write(&paper.sink, text + at, length);
    paper_close(bench, &paper);
    gzFile file = gzopen(path_in(bench->folder, "text.gz", path), "rb");
    assert_non_null(file);
    assert_int_equal(gzread(file, got, SIZE + 1), SIZE);
    assert_int_equal(gzclose(file), Z_OK);
    assert_memory_equal(got, text, SIZE);
    /* RFC 1952: no flags, no time. */
    size_t count;
    char *bytes = file_get(path, &count);
    assert_memory_equal(bytes, "\x1f\x8b\x08\x00\x00\x00\x00\x00", 8);
    free(bytes);
    free(text);
    free(got);
}

/* ---- faults ----------------------------------------------------------------------------------------------------- */

static const char *const variants[][6] = {{"gzip", NULL},
                                          {"truth", "factors", "shape", "long", "holes", "runs"},
                                          {"shape", "wide", "offset-scale", "1", NULL}};

static fescue_status sow_job(fescue_context *context, const struct fault_job *job)
{
    struct fescue_sow_options options = options_of(12, 7, 0.5);
    char *text = NULL;
    const char *const *words = variants[job->variant];
    for (size_t k = 0; k < 6 && words[k] != NULL; k += 2)
        assert_status(context, fescue_sow_options_set(context, &options, words[k], words[k + 1]), FESCUE_OK);
    fescue_status status = fescue_sow(context, &options, job->directory, &text);
    assert_int_equal(status == FESCUE_OK, text != NULL);
    fescue_text_free(context, &text);
    return status;
}

static void every_fault_is_borne(void **state)
{
    static const struct fault_case faults[] = {
        {FAULT_TAKE, 0, ALLOWED(FESCUE_NO_MEMORY)},
        /* A parent directory that cannot be opened is not flushed, that is all. */
        {FAULT_OPEN, EACCES, ALLOWED(FESCUE_CANNOT_CREATE) | ALLOWED(FESCUE_OK)},
        {FAULT_WRITE, ENOSPC, ALLOWED(FESCUE_CANNOT_WRITE)},
        {FAULT_SHORT_WRITE, 0, ALLOWED(FESCUE_OK)},
        {FAULT_SYNC, EIO, ALLOWED(FESCUE_CANNOT_WRITE) | ALLOWED(FESCUE_CANNOT_CREATE)},
        {FAULT_CLOSE, EIO, ALLOWED(FESCUE_CANNOT_WRITE) | ALLOWED(FESCUE_OK)},
        {FAULT_RENAME, EXDEV, ALLOWED(FESCUE_CANNOT_WRITE)},
        {FAULT_MAKE_DIRECTORY, EROFS, ALLOWED(FESCUE_CANNOT_CREATE) | ALLOWED(FESCUE_OK)},
    };
    struct bench *bench = bench_of(state);
    char directory[PATH_SIZE];
    path_in(bench->folder, "sown", directory);
    for (int variant = 0; variant < 3; variant++) {
        struct fault_job job = {.name = "sow",
                                .input = "",
                                .directory = directory,
                                .seal = "sow.json",
                                .threads = 1,
                                .variant = variant,
                                .run = sow_job};
        struct snapshot reference;
        fault_clear();
        assert_int_equal(fault_job_run(&job), FESCUE_OK);
        snapshot_take(directory, &reference);
        folder_remove(directory);
        for (size_t k = 0; k < sizeof faults / sizeof faults[0]; k++) {
            struct fault_sweep sweep = {.job = &job, .fault = &faults[k], .reference = &reference};
            assert_true(fault_sweep_run(&sweep) > 0);
        }
        snapshot_free(&reference);
    }
}

static bool stop_at_once(void *data, const char *stage, double share)
{
    (void)stage;
    (void)share;
    ++*(int *)data;
    return false;
}

static void asked_to_stop_it_stops(void **state)
{
    struct bench *bench = bench_of(state);
    int calls = 0;
    const struct fescue_hooks hooks = {.data = &calls, .progress = stop_at_once};
    fescue_context *context;
    char directory[PATH_SIZE], *text;
    path_in(bench->folder, "sown", directory);
    assert_int_equal(fescue_context_create(&hooks, &context), FESCUE_OK);
    for (int scene = 0; scene < 3; scene++) {
        struct fescue_sow_options options;
        fescue_sow_options_standard(&options);
        options.scene = scene;
        fescue_failure_clear(context);
        assert_int_equal(fescue_sow(context, &options, directory, &text), FESCUE_STOPPED);
        assert_null(text);
        assert_int_equal(folder_count(directory), 0);
        assert_int_equal(calls, scene + 1);
    }
    fescue_context_destroy(&context);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(shares_have_the_wanted_mean),
        cmocka_unit_test(walks_go_up_and_end),
        cmocka_unit_test(walks_have_the_wanted_share),
        BENCH_TEST(numbers_are_written),
        BENCH_TEST(gzip_holds_the_text),
        BENCH_TEST(every_fault_is_borne),
        BENCH_TEST(asked_to_stop_it_stops),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
