/* SPDX-License-Identifier: MIT
 *
 * The main job through the public header: from cells in memory to estimates and files.
 */
#include "support_locale.h"
#include "support_table.h"

#include <errno.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

/* ---- tables ---------------------------------------------------------------------------------------------------------
 */

static fescue_table *table_of(fescue_context *context, uint32_t rows, uint32_t columns, const struct triplet_list *list,
                              enum fescue_precision precision)
{
    struct fescue_options options;
    fescue_table *table = NULL;
    assert_int_equal(list->precision, FESCUE_DOUBLE); /* what the public function takes */
    fescue_options_standard(&options);
    options.threads = 1;
    options.precision = (int)precision;
    assert_status(context,
                  fescue_table_from_cells(context, rows, columns, list->count, list->row, list->column, list->value,
                                          &options, &table),
                  FESCUE_OK);
    return table;
}

static fescue_table *table_sown(fescue_context *context, const struct sowing *sowing)
{
    struct triplet_list list = {0};
    struct sowing exact = *sowing;
    exact.precision = FESCUE_DOUBLE;
    sow_triplets(context, &exact, &list);
    fescue_table *table = table_of(context, sowing->rows, sowing->columns, &list, sowing->precision);
    triplets_free(context, &list);
    return table;
}

/* A rows x columns table of given values; NAN is a hole. */
static fescue_table *table_made(fescue_context *context, uint32_t rows, uint32_t columns, const double *values)
{
    struct triplet_list list = {0};
    for (uint32_t i = 0; i < rows; i++)
        for (uint32_t j = 0; j < columns; j++)
            if (!isnan(values[i * columns + j]))
                assert_status(context, triplets_append(context, &list, i, j, values[i * columns + j]), FESCUE_OK);
    fescue_table *table = table_of(context, rows, columns, &list, FESCUE_DOUBLE);
    triplets_free(context, &list);
    return table;
}

static const struct sowing clean = {.rows = 60, .columns = 45, .rank = 2, .share = 0.5, .noise = 0, .seed = 3};
static const struct sowing noisy = {.rows = 120, .columns = 80, .rank = 2, .share = 0.4, .noise = 0.1, .seed = 5};

/* Standard options with `settings`, pairs of name and value up to a NULL. */
static struct fescue_options options_of(fescue_context *context, const char *const *settings)
{
    struct fescue_options options;
    fescue_options_standard(&options);
    options.threads = 1;
    for (; *settings != NULL; settings += 2)
        assert_status(context, fescue_options_set(context, &options, settings[0], settings[1]), FESCUE_OK);
    return options;
}
#define OPTIONS(context, ...) options_of((context), (const char *const[]){__VA_ARGS__, NULL})

static fescue_fill *filled(const fescue_table *table, const struct fescue_options *options)
{
    fescue_fill *fill = NULL;
    assert_status(table->context, fescue_fill_table(table, options, &fill), FESCUE_OK);
    return fill;
}

static void has_text(const fescue_fill *fill, const char *words)
{
    if (strstr(fescue_fill_text(fill), words) == NULL)
        fail_msg("\"%s\" is not in:\n%s", words, fescue_fill_text(fill));
}

static void has_no_text(const fescue_fill *fill, const char *words)
{
    if (strstr(fescue_fill_text(fill), words) != NULL)
        fail_msg("\"%s\" is in:\n%s", words, fescue_fill_text(fill));
}

static bool is_seen(const fescue_table *table, uint32_t row, uint32_t column)
{
    const struct half *half = &table->cells.by_row;
    for (uint64_t k = half->start[row]; k < half->start[row + 1]; k++)
        if (half->across[k] == column)
            return true;
    return false;
}

/* Root mean square of estimate minus truth over the unseen cells. */
static double unseen_rmse(const fescue_fill *fill, const fescue_table *table, const struct sowing *sowing)
{
    double square = 0, count = 0;
    for (uint32_t i = 0; i < sowing->rows; i++)
        for (uint32_t j = 0; j < sowing->columns; j++)
            if (!is_seen(table, i, j)) {
                double error = fescue_fill_estimate(fill, i, j) - sowing_truth(sowing, i, j);
                square += error * error;
                count++;
            }
    return sqrt(square / count);
}

/* ---- what comes out -------------------------------------------------------------------------------------------------
 */

static void a_clean_table_is_recovered(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options = OPTIONS(context, NULL);
    fescue_table *table = table_sown(context, &clean);
    fescue_fill *fill = filled(table, &options);
    /* singular values of the truth are about sqrt(60 * 45): its cells are of size sqrt(2) */
    assert_true(unseen_rmse(fill, table, &clean) < 1e-8);
    has_text(fill, "rank 2 (chosen)");
    has_text(fill, "the hidden cells are met to rounding: the table is free of noise");
    has_no_text(fill, "WARNING");
    fescue_fill_destroy(&fill);
    assert_null(fill);
    fescue_table_destroy(&table);
}

/* The bound of Candes, Plan 2010 ("Matrix completion with noise", section IV): no estimator that does not know the
   subspaces does better than sigma sqrt(r (m + n - r) / |seen|) by much. */
static void a_noisy_table_comes_near_the_oracle(void **state)
{
    fescue_context *context = bench_of(state)->context;
    static const char *const solvers[] = {"fixed-rank-cg", "grassmann-cg"};
    for (size_t k = 0; k < 2; k++) {
        struct fescue_options options = OPTIONS(context, "solver", solvers[k]);
        fescue_table *table = table_sown(context, &noisy);
        fescue_fill *fill = filled(table, &options);
        double freedom = noisy.rank * (noisy.rows + noisy.columns - (double)noisy.rank);
        double oracle = noisy.noise * sqrt(freedom / (double)table->cells.count);
        assert_true(unseen_rmse(fill, table, &noisy) < 1.25 * oracle);
        has_text(fill, "rank 2 (chosen)");
        has_text(fill, solvers[k]);
        has_no_text(fill, "WARNING");
        fescue_fill_destroy(&fill);
        fescue_table_destroy(&table);
    }
}

/* Where a fit is felt nothing is learnt twice: the fit on all cells goes on from that on the kept ones, which is also
   what the error is measured with. The estimates are near the oracle all the same, the error is that of unseen
   readings, and threads do not matter. */
static void a_large_table_is_learnt_once(void **state)
{
    fescue_context *context = bench_of(state)->context;
    static const struct sowing large = {.rows = 900, .columns = 1000, .rank = 3, .share = 0.6, .noise = 0.8, .seed = 6};
    struct fescue_options options = OPTIONS(context, "rank", "3");
    fescue_table *table = table_sown(context, &large);
    double freedom = large.rank * (large.rows + large.columns - (double)large.rank), estimate[2];
    double oracle = large.noise * sqrt(freedom / (double)table->cells.count);
    assert_true(table->cells.count > 500000);
    for (size_t k = 0; k < 2; k++) {
        options.threads = k == 0 ? 1 : 2;
        fescue_fill *fill = filled(table, &options);
        const char *said = strstr(fescue_fill_text(fill), "error      RMSE");
        double rmse = k == 0 ? unseen_rmse(fill, table, &large) : 0, announced = 0;
        assert_true(said != NULL && sscanf(said, "error      RMSE %lf", &announced) == 1);
        assert_true(rmse < 1.03 * oracle);
        assert_true(k > 0 || fabs(announced - hypot(rmse, large.noise)) < 0.01);
        has_text(fill, "hidden cells in 1 fold");
        estimate[k] = fescue_fill_estimate(fill, 7, 8);
        fescue_fill_destroy(&fill);
    }
    assert_true(estimate[0] == estimate[1]);
    fescue_table_destroy(&table);
}

/* Row and column effects and noise: nothing for a low-rank part to find. */
static void a_table_without_structure_gets_rank_0(void **state)
{
    enum { ROWS = 60, COLUMNS = 50 };
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options = OPTIONS(context, NULL);
    struct triplet_list list = {0};
    struct random_stream random = random_open(11, RANDOM_TEST, 0);
    double row[ROWS], column[COLUMNS];
    char path[PATH_SIZE];
    for (uint32_t i = 0; i < ROWS; i++)
        row[i] = 3 * random_normal(&random);
    for (uint32_t j = 0; j < COLUMNS; j++)
        column[j] = 2 * random_normal(&random);
    for (uint32_t i = 0; i < ROWS; i++)
        for (uint32_t j = 0; j < COLUMNS; j++)
            if (random_uniform(&random) < 0.4)
                assert_status(context,
                              triplets_append(context, &list, i, j, 20 + row[i] + column[j] + random_normal(&random)),
                              FESCUE_OK);
    fescue_table *table = table_of(context, ROWS, COLUMNS, &list, FESCUE_DOUBLE);
    fescue_fill *fill = filled(table, &options);
    has_text(fill, "offsets of rows and columns (chosen), rank 0 (chosen)");
    has_text(fill, "no usable low-rank structure: offsets alone predict hidden cells better");
    for (uint32_t i = 0; i < ROWS; i++) /* standard error of an effect seen 20 times: 0.22; 5 of them and both sides */
        assert_close(fescue_fill_estimate(fill, i, i % COLUMNS), 20 + row[i] + column[i % COLUMNS], 1.6);
    assert_status(context, fescue_fill_write(fill, bench_of(state)->folder), FESCUE_OK);
    assert_false(file_exists(path_in(bench_of(state)->folder, "left.mtx", path)));
    assert_true(file_exists(path_in(bench_of(state)->folder, "row-offsets.mtx", path)));
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
    triplets_free(context, &list);
}

static void bounds_hold_everywhere(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options = OPTIONS(context, "bounds", "-0.5:0.75");
    fescue_table *table = table_sown(context, &noisy);
    fescue_fill *fill = filled(table, &options);
    bool low = false, high = false;
    for (uint32_t i = 0; i < noisy.rows; i++)
        for (uint32_t j = 0; j < noisy.columns; j++) {
            double estimate = fescue_fill_estimate(fill, i, j);
            assert_true(estimate >= -0.5 && estimate <= 0.75);
            low |= estimate == -0.5;
            high |= estimate == 0.75;
        }
    assert_true(low && high);
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
}

/* ---- odd tables -----------------------------------------------------------------------------------------------------
 */

/* Fills and writes; every estimate must be finite. */
static fescue_fill *odd_fill(void **state, fescue_table *table, const struct fescue_options *options)
{
    char directory[PATH_SIZE];
    fescue_fill *fill = filled(table, options);
    for (uint32_t i = 0; i < table->cells.rows; i++)
        for (uint32_t j = 0; j < table->cells.columns; j++)
            assert_true(isfinite(fescue_fill_estimate(fill, i, j)));
    path_in(bench_of(state)->folder, "odd", directory);
    assert_status(table->context, fescue_fill_write(fill, directory), FESCUE_OK);
    return fill;
}

static void odd_shapes_are_filled(void **state)
{
    static const double numbers[] = {1, NAN, 3, NAN, 5, 6, NAN, 8, 9.5, 10, NAN, 12};
    static const struct {
        uint32_t rows, columns;
    } shapes[] = {{1, 12}, {12, 1}, {1, 1}, {2, 2}, {2, 6}, {6, 2}, {3, 4}};
    static const char *const ranks[] = {"auto", "0", "1", "200"}, *const shares[] = {"0", "0.1", "0.5"};
    fescue_context *context = bench_of(state)->context;
    for (size_t s = 0; s < sizeof shapes / sizeof shapes[0]; s++)
        for (size_t r = 0; r < sizeof ranks / sizeof ranks[0]; r++)
            for (size_t h = 0; h < sizeof shares / sizeof shares[0]; h++) {
                struct fescue_options options = OPTIONS(context, "rank", ranks[r], "holdout", shares[h]);
                fescue_table *table = table_made(context, shapes[s].rows, shapes[s].columns, numbers);
                fescue_fill *fill = odd_fill(state, table, &options);
                fescue_fill_destroy(&fill);
                fescue_table_destroy(&table);
            }
}

static void a_full_table_has_nothing_to_fill(void **state)
{
    static const double numbers[] = {1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 11, 12};
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options = OPTIONS(context, NULL);
    char directory[PATH_SIZE], path[PATH_SIZE];
    fescue_table *table = table_made(context, 4, 3, numbers);
    fescue_fill *fill = odd_fill(state, table, &options);
    has_text(fill, "filled     nothing: every cell was seen\n");
    path_in(bench_of(state)->folder, "odd", directory);
    file_check(path_in(directory, "cells.csv", path),
               "row,column,estimate,lower,upper,basis,row_support,column_support\n");
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
}

/* All the same number, zero too: no spread, no scale. */
static void constant_tables_are_filled_with_the_constant(void **state)
{
    static const double constants[] = {0, 7.25, -1e12, 1e-12};
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options = OPTIONS(context, NULL);
    for (size_t k = 0; k < sizeof constants / sizeof constants[0]; k++) {
        double numbers[12], c = constants[k];
        for (size_t n = 0; n < 12; n++)
            numbers[n] = n % 5 == 3 ? NAN : c;
        fescue_table *table = table_made(context, 4, 3, numbers);
        fescue_fill *fill = odd_fill(state, table, &options);
        for (uint32_t i = 0; i < 4; i++)
            for (uint32_t j = 0; j < 3; j++)
                assert_close(fescue_fill_estimate(fill, i, j), c, 1e-6 * fabs(c));
        fescue_fill_destroy(&fill);
        fescue_table_destroy(&table);
    }
}

/* Too little to choose by, or no time: the mean and shrunk effects, never 0 for a table of numbers around 100. */
static void with_nothing_to_go_by_the_mean_is_the_ground(void **state)
{
    static const double numbers[] = {101, 102, 103, 102, 104, NAN, 103, NAN, 109};
    fescue_context *context = bench_of(state)->context;
    static const char *const settings[][3] = {{"holdout", "0.1", NULL},
                                              {"holdout", "0.5", NULL},
                                              {"holdout", "0", NULL},
                                              {"time-limit", "0.000001", NULL},
                                              {"rank", "0", NULL}};
    for (size_t k = 0; k < sizeof settings / sizeof settings[0]; k++) {
        struct fescue_options options = options_of(context, settings[k]);
        fescue_table *table = table_made(context, 3, 3, numbers);
        fescue_fill *fill = filled(table, &options);
        assert_close(fescue_fill_estimate(fill, 1, 2), 103, 6);
        assert_close(fescue_fill_estimate(fill, 2, 1), 103, 6);
        fescue_fill_destroy(&fill);
        fescue_table_destroy(&table);
    }
}

static void a_table_without_cells_is_refused(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options = OPTIONS(context, NULL);
    fescue_table *table = NULL;
    assert_int_equal(fescue_table_from_cells(context, 3, 2, 0, NULL, NULL, NULL, &options, &table), FESCUE_BAD_DATA);
    assert_null(table);
}

static void a_rank_beyond_the_table_is_lowered_and_said(void **state)
{
    static const double numbers[] = {1, 2, 3, 4, NAN, 6, 7, 8, 9, 1, 11, 12};
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options = OPTIONS(context, "rank", "7");
    fescue_table *table = table_made(context, 4, 3, numbers);
    fescue_fill *fill = odd_fill(state, table, &options);
    has_text(fill, "rank 7 was asked for; the table is too small for it");
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
}

/* ---- hold-out -------------------------------------------------------------------------------------------------------
 */

static void without_a_holdout_nothing_is_announced(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options = OPTIONS(context, "holdout", "0", "rank", "2", "ridge", "0.01", "offsets", "none");
    fescue_table *table = table_sown(context, &noisy);
    fescue_fill *fill = filled(table, &options);
    has_text(fill, "no offsets (as asked), rank 2 (as asked), ridge 0.01 (as asked)");
    has_text(fill, "error      not measured: no cells were hidden\n");
    has_text(fill, "interval   none: no cells were hidden\n");
    has_no_text(fill, "RMSE");
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
}

static void a_holdout_for_the_choice_alone_is_said(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options = OPTIONS(context, "holdout", "0");
    fescue_table *table = table_sown(context, &noisy);
    fescue_fill *fill = filled(table, &options);
    has_text(fill, "rank 2 (chosen)");
    has_text(fill, "no cells were to be kept hidden; a tenth was, for the choice alone");
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
}

/* ---- files ----------------------------------------------------------------------------------------------------------
 */

/* Estimates in the files are those of fescue_fill_estimate, to the last bit, and seen cells are as they were. */
static void files_hold_the_estimates(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options = OPTIONS(context, NULL);
    char path[PATH_SIZE];
    size_t count;
    fescue_table *table = table_sown(context, &noisy);
    fescue_fill *fill = filled(table, &options);
    has_no_text(fill, "written");
    assert_status(context, fescue_fill_write(fill, bench_of(state)->folder), FESCUE_OK);
    has_text(fill, "written    filled.mtx, cells.csv, factors, trace.csv, run.json\n");
    char *bytes = file_get(path_in(bench_of(state)->folder, "filled.mtx", path), &count), *next = bytes;
    assert_non_null(bytes);
    while (*next == '%')
        next = strchr(next, '\n') + 1;
    assert_int_equal(strtoul(next, &next, 10), noisy.rows);
    assert_int_equal(strtoul(next, &next, 10), noisy.columns);
    uint64_t seen = 0;
    for (uint32_t j = 0; j < noisy.columns; j++)
        for (uint32_t i = 0; i < noisy.rows; i++) {
            double value = strtod(next, &next);
            const struct half *half = &table->cells.by_column;
            bool is_read = seen < half->start[j + 1] && half->across[seen] == i;
            double expected = is_read ? cells_value(&table->cells, half, seen++) : fescue_fill_estimate(fill, i, j);
            assert_true(value == expected);
        }
    assert_string_equal(next, "\n");
    free(bytes);
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
}

/* The numbers of a Matrix Market array file, from malloc. */
static double *array_read(const char *folder, const char *name, size_t numbers)
{
    char path[PATH_SIZE];
    size_t count;
    char *bytes = file_get(path_in(folder, name, path), &count), *next = bytes;
    double *array = malloc(numbers * sizeof *array);
    assert_non_null(bytes);
    assert_non_null(array);
    while (*next == '%')
        next = strchr(next, '\n') + 1;
    next = strchr(next, '\n');
    for (size_t k = 0; k < numbers; k++)
        array[k] = strtod(next, &next);
    assert_string_equal(next, "\n");
    free(bytes);
    return array;
}

/* estimate = mean + row + column + left diag(spectrum) right', from the files alone. */
static void factors_give_the_estimates(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options = OPTIONS(context, "rank", "2", "offsets", "both");
    const char *folder = bench_of(state)->folder;
    size_t m = noisy.rows, n = noisy.columns;
    char path[PATH_SIZE];
    size_t count;
    fescue_table *table = table_sown(context, &noisy);
    fescue_fill *fill = filled(table, &options);
    assert_status(context, fescue_fill_write(fill, folder), FESCUE_OK);
    char *bytes = file_get(path_in(folder, "row-offsets.mtx", path), &count);
    double mean = strtod(strstr(bytes, "% mean ") + 7, NULL);
    double *row = array_read(folder, "row-offsets.mtx", m), *column = array_read(folder, "column-offsets.mtx", n);
    double *left = array_read(folder, "left.mtx", 2 * m), *right = array_read(folder, "right.mtx", 2 * n);
    double *spectrum = array_read(folder, "spectrum.mtx", 2);
    for (uint32_t i = 0; i < m; i++)
        for (uint32_t j = 0; j < n; j++) {
            double estimate =
                mean + row[i] + column[j] + left[i] * spectrum[0] * right[j] + left[m + i] * spectrum[1] * right[n + j];
            assert_close(estimate, fescue_fill_estimate(fill, i, j), 1e-13);
        }
    free(bytes), free(row), free(column), free(left), free(right), free(spectrum);
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
}

/* What an older run left in the directory, and this one does not have, is gone: record and files belong together. */
static void a_second_run_leaves_nothing_of_the_first(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options = OPTIONS(context, NULL), fewer = OPTIONS(context, "write", "cells");
    const char *folder = bench_of(state)->folder;
    char path[PATH_SIZE];
    fescue_table *table = table_sown(context, &noisy);
    fescue_fill *fill = filled(table, &options), *second = filled(table, &fewer);
    file_put_text(path_in(folder, "notes.txt", path), "mine");
    assert_status(context, fescue_fill_write(fill, folder), FESCUE_OK);
    assert_int_equal(folder_count(folder), 10);
    assert_status(context, fescue_fill_write(second, folder), FESCUE_OK);
    assert_int_equal(folder_count(folder), 4);
    assert_true(file_exists(path_in(folder, "cells.csv", path)) && file_exists(path_in(folder, "notes.txt", path)) &&
                file_exists(path_in(folder, "trace.csv", path)) && file_exists(path_in(folder, "run.json", path)));
    has_text(second, "not filled.mtx: not asked for by --write");
    fescue_fill_destroy(&fill);
    fescue_fill_destroy(&second);
    fescue_table_destroy(&table);
}

static void a_full_disk_changes_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options = OPTIONS(context, NULL);
    char directory[PATH_SIZE], path[PATH_SIZE];
    fescue_table *table = table_sown(context, &clean);
    fescue_fill *fill = filled(table, &options);
    path_in(bench_of(state)->folder, "out", directory);
    fault_plan(FAULT_WRITE, 1, true, ENOSPC);
    assert_int_equal(fescue_fill_write(fill, directory), FESCUE_CANNOT_WRITE);
    fault_clear();
    assert_int_equal(folder_count(directory), 0);
    has_no_text(fill, "written");
    fescue_failure_clear(context);
    assert_status(context, fescue_fill_write(fill, directory), FESCUE_OK);
    has_text(fill, "written");
    assert_true(file_exists(path_in(directory, "run.json", path)));
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
}

/* ---- the same bits --------------------------------------------------------------------------------------------------
 */

static const char *const results[] = {"filled.mtx",      "cells.csv",          "left.mtx",  "spectrum.mtx", "right.mtx",
                                      "row-offsets.mtx", "column-offsets.mtx", "trace.csv", "run.json"};
enum { SUMMARY = sizeof results / sizeof results[0], RESULTS };

/* All results with `threads` workers, run.json without its timing, and the summary; from malloc. */
static void results_make(void **state, const struct sowing *sowing, int threads, char *bytes[RESULTS])
{
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options = OPTIONS(context, NULL);
    char directory[PATH_SIZE], path[PATH_SIZE], name[16];
    size_t count;
    options.threads = threads;
    options.folds = 1; /* one does: the others go the same way */
    fescue_table *table = table_sown(context, sowing);
    fescue_fill *fill = filled(table, &options);
    snprintf(name, sizeof name, "out%d", threads);
    path_in(bench_of(state)->folder, name, directory);
    assert_status(context, fescue_fill_write(fill, directory), FESCUE_OK);
    for (size_t k = 0; k < SUMMARY; k++) {
        bytes[k] = file_get(path_in(directory, results[k], path), &count);
        assert_non_null(bytes[k]);
    }
    bytes[SUMMARY] = strdup(fescue_fill_text(fill));
    char *timing = strstr(bytes[SUMMARY - 1], "\"timing\"");
    assert_non_null(timing);
    *timing = '\0';
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
}

static void threads_do_not_matter(void **state)
{
    static const int threads[] = {1, 2, 7};
    struct sowing sowing = noisy;
    sowing.rows = 700; /* enough for several blocks */
    for (int precision = FESCUE_DOUBLE; precision <= FESCUE_SINGLE; precision++) {
        char *bytes[3][RESULTS];
        sowing.precision = (enum fescue_precision)precision;
        for (size_t t = 0; t < 3; t++)
            results_make(state, &sowing, threads[t], bytes[t]);
        for (size_t k = 0; k < RESULTS; k++)
            for (size_t t = 1; t < 3; t++)
                if (strcmp(bytes[0][k], bytes[t][k]) != 0)
                    fail_msg("%s differs with %d threads", k == SUMMARY ? "the summary" : results[k], threads[t]);
        for (size_t t = 0; t < 3; t++)
            for (size_t k = 0; k < RESULTS; k++)
                free(bytes[t][k]);
    }
}

/* A decimal comma around us changes no byte. */
static void the_locale_does_not_matter(void **state)
{
    char *plain[RESULTS], *comma[RESULTS];
    locale_t locale = comma_locale(bench_of(state)->folder);
    results_make(state, &noisy, 1, plain);
    locale_t around = uselocale(locale);
    results_make(state, &noisy, 1, comma);
    uselocale(around);
    freelocale(locale);
    for (size_t k = 0; k < RESULTS; k++) {
        assert_string_equal(plain[k], comma[k]);
        free(plain[k]);
        free(comma[k]);
    }
}

/* ---- limits ---------------------------------------------------------------------------------------------------------
 */

static void a_cancelled_job_leaves_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options = OPTIONS(context, NULL);
    fescue_table *table = table_sown(context, &noisy);
    fescue_fill *fill = NULL;
    fescue_context_cancel(context);
    assert_int_equal(fescue_fill_table(table, &options, &fill), FESCUE_STOPPED);
    assert_null(fill);
    fescue_failure_clear(context);
    fill = filled(table, &options);
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
}

struct patience {
    uint64_t calls, most;
};

static bool patience_ends(void *data, const char *stage, double share)
{
    struct patience *patience = data;
    (void)stage, (void)share;
    return ++patience->calls < patience->most;
}

/* Asked to stop at each of its questions in turn: before the fit on all cells nothing comes out, in it what there is,
   which says so and can be written; while writing nothing under a final name. */
static void a_job_may_be_stopped_anywhere(void **state)
{
    struct patience patience = {.most = 1};
    const struct fescue_hooks hooks = {.data = &patience, .progress = patience_ends};
    fescue_context *context = NULL;
    char directory[PATH_SIZE];
    uint64_t stopped = 0, cut = 0, unwritten = 0, whole = 0;
    path_in(bench_of(state)->folder, "out", directory);
    assert_int_equal(fescue_context_create(&hooks, &context), FESCUE_OK);
    struct fescue_options options = OPTIONS(context, "rank", "2", "ridge", "0.01", "offsets", "none", "folds", "1");
    fescue_table *table = table_sown(context, &noisy);
    for (; whole == 0; patience.most++) {
        fescue_fill *fill = NULL;
        patience.calls = 0;
        fescue_status status = fescue_fill_table(table, &options, &fill);
        stopped += status != FESCUE_OK;
        if (status == FESCUE_OK) {
            bool is_cut = strstr(fescue_fill_text(fill), "it was asked to stop") != NULL;
            status = fescue_fill_write(fill, directory);
            assert_false(is_cut && status != FESCUE_OK);
            cut += is_cut;
            unwritten += status != FESCUE_OK;
            whole += status == FESCUE_OK && !is_cut;
        }
        assert_true(status == FESCUE_OK || status == FESCUE_STOPPED);
        assert_int_equal(folder_count(directory), status == FESCUE_OK ? 9 : 0);
        if (file_exists(directory))
            folder_remove(directory);
        fescue_fill_destroy(&fill);
        fescue_failure_clear(context);
    }
    assert_true(stopped > 0 && cut > 0 && unwritten > 0);
    fescue_table_destroy(&table);
    assert_no_leak(context);
    fescue_context_destroy(&context);
}

static void a_short_time_limit_still_gives_a_result(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options = OPTIONS(context, "time-limit", "0.000001");
    fescue_table *table = table_sown(context, &noisy);
    fescue_fill *fill = odd_fill(state, table, &options);
    has_text(fill, "WARNING: the time limit ended the search; allow more, or give a --rank\n");
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
}

static void few_iterations_are_a_warning(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options = OPTIONS(context, "iterations", "1", "rank", "2", "ridge", "0.1");
    fescue_table *table = table_sown(context, &noisy);
    fescue_fill *fill = filled(table, &options);
    has_text(fill, "1 iteration: the limit of iterations was reached");
    has_text(fill, "WARNING: the fit did not converge; more --iterations may end it\n");
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
}

static void the_memory_limit_is_kept(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options = OPTIONS(context, NULL);
    fescue_table *table = table_sown(context, &noisy);
    fescue_fill *fill = NULL;
    uint64_t before = fescue_memory_usage(context).blocks;
    options.memory_limit = (int64_t)fescue_memory_usage(context).bytes + 10000;
    assert_int_equal(fescue_fill_table(table, &options, &fill), FESCUE_NO_MEMORY);
    assert_null(fill);
    assert_int_equal(fescue_memory_usage(context).blocks, before);
    fescue_failure_clear(context);
    options.memory_limit = 0;
    fill = filled(table, &options);
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(a_clean_table_is_recovered),
        BENCH_TEST(a_noisy_table_comes_near_the_oracle),
        BENCH_TEST(a_large_table_is_learnt_once),
        BENCH_TEST(a_table_without_structure_gets_rank_0),
        BENCH_TEST(bounds_hold_everywhere),
        BENCH_TEST(odd_shapes_are_filled),
        BENCH_TEST(a_full_table_has_nothing_to_fill),
        BENCH_TEST(constant_tables_are_filled_with_the_constant),
        BENCH_TEST(with_nothing_to_go_by_the_mean_is_the_ground),
        BENCH_TEST(a_table_without_cells_is_refused),
        BENCH_TEST(a_rank_beyond_the_table_is_lowered_and_said),
        BENCH_TEST(without_a_holdout_nothing_is_announced),
        BENCH_TEST(a_holdout_for_the_choice_alone_is_said),
        BENCH_TEST(files_hold_the_estimates),
        BENCH_TEST(factors_give_the_estimates),
        BENCH_TEST(a_second_run_leaves_nothing_of_the_first),
        BENCH_TEST(a_full_disk_changes_nothing),
        BENCH_TEST(threads_do_not_matter),
        BENCH_TEST(the_locale_does_not_matter),
        BENCH_TEST(a_cancelled_job_leaves_nothing),
        BENCH_TEST(a_job_may_be_stopped_anywhere),
        BENCH_TEST(a_short_time_limit_still_gives_a_result),
        BENCH_TEST(few_iterations_are_a_warning),
        BENCH_TEST(the_memory_limit_is_kept),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
