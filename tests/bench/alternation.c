/* SPDX-License-Identifier: MIT
 *
 * Against a ridge alternation in NumPy (alternation.py) on the same sown table, rank 16, one thread each: a sweep of
 * normal equations and solves over both sides, in double precision both, and the time until the error on hidden cells
 * is within one in a hundred of where the alternation ends.
 *
 * The clock of all begins with the table in memory, sorted both ways; the alternation's grouping of its cells is not
 * counted, our start is. Solvers get the rank and the ridge; values are held in single precision, which costs nothing
 * next to noise of one half. What is asked of everything by itself (auto) gets the rank alone; its time is that of the
 * whole job with error and intervals, and its shares are those of what the alternation took to come as near, and of
 * all that it took to end there.
 */
#include "rating.h"

#include "numeric/numeric.h"
#include "solve/solve.h"

#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

enum { SWEEPS = 40 };
/* Noise variance over the factors' variance of 1/4 each, as the table is sown. */
#define RIDGE "1.0"
#define RANK "16" /* RATING_RANK */

static void column_write(const char *prefix, const char *name, const void *data, size_t size, uint64_t count)
{
    char path[1200];
    snprintf(path, sizeof path, "%s.%s", prefix, name);
    FILE *to = fopen(path, "wb");
    if (to == NULL || fwrite(data, size, count, to) != count || fclose(to) != 0) {
        fprintf(stderr, "bench: %s could not be written\n", path);
        exit(1);
    }
}

static void table_write(const struct rating *rating, const char *prefix)
{
    const struct half *half = &rating->cells.by_row;
    uint32_t *row = bench_take(rating->cells.count, sizeof *row);
    for (uint32_t i = 0; i < half->lines; i++)
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++)
            row[k] = i;
    column_write(prefix, "row", row, sizeof *row, rating->cells.count);
    column_write(prefix, "column", half->across, sizeof *half->across, rating->cells.count);
    column_write(prefix, "value", half->value, sizeof(double), rating->cells.count);
    column_write(prefix, "hidden.row", rating->row, sizeof *rating->row, rating->hidden);
    column_write(prefix, "hidden.column", rating->column, sizeof *rating->column, rating->hidden);
    column_write(prefix, "hidden.value", rating->value, sizeof *rating->value, rating->hidden);
    free(row);
}

static void table_remove(const char *prefix)
{
    static const char *const names[] = {"row", "column", "value", "hidden.row", "hidden.column", "hidden.value"};
    for (size_t k = 0; k < sizeof names / sizeof *names; k++) {
        char path[1200];
        snprintf(path, sizeof path, "%s.%s", prefix, names[k]);
        remove(path);
    }
}

/* What alternation.py says; NULL when it, or NumPy, is not there. */
static json_t *alternation_run(const char *prefix)
{
    const char *python = getenv("PYTHON"), *scripts = getenv("BENCH_SCRIPTS");
    char command[2600], line[512];
    snprintf(command, sizeof command, "OPENBLAS_NUM_THREADS=1 %s %s/alternation.py %s %d " RIDGE " %d",
             python != NULL ? python : "/usr/bin/python3", scripts != NULL ? scripts : "tests/bench", prefix,
             RATING_RANK, SWEEPS);
    FILE *from = popen(command, "r");
    json_t *said = from != NULL && fgets(line, sizeof line, from) != NULL ? json_loads(line, 0, NULL) : NULL;
    if (from != NULL)
        pclose(from);
    return said;
}

/* ---- a sweep ------------------------------------------------------------------------------------------------------
 */

struct sweep_stand {
    const struct rating *rating;
    struct sweep sweep;
    struct matrix left, right;
    double ridge[RATING_RANK];
};

static void both_solve(void *argument)
{
    struct sweep_stand *stand = argument;
    sweep_solve(&stand->sweep, &stand->rating->cells.by_row, stand->right, stand->ridge, stand->left, NULL);
    sweep_solve(&stand->sweep, &stand->rating->cells.by_column, stand->left, stand->ridge, stand->right, NULL);
}

static double sweep_seconds(const struct rating *rating)
{
    struct sweep_stand stand = {.rating = rating};
    struct arena arena = {0};
    fescue_context *context = rating->context;
    struct random_stream stream = random_open(4, RANDOM_TEST, 0);
    matrix_reserve(&arena, rating->cells.rows, RATING_RANK);
    matrix_reserve(&arena, rating->cells.columns, RATING_RANK);
    bench_check(context, arena_open(context, &arena));
    stand.left = matrix_carve(&arena, rating->cells.rows, RATING_RANK);
    stand.right = matrix_carve(&arena, rating->cells.columns, RATING_RANK);
    for (size_t j = 0; j < rating->cells.columns; j++)
        for (size_t k = 0; k < RATING_RANK; k++)
            MATRIX_AT(stand.right, j, k) = 0.25 * random_normal(&stream);
    for (size_t k = 0; k < RATING_RANK; k++)
        stand.ridge[k] = 1;
    bench_check(context, team_resize(context, 1));
    bench_check(context, sweep_create(context, &rating->cells, RATING_RANK, &stand.sweep));
    double seconds = bench_seconds(1, both_solve, &stand);
    sweep_destroy(&stand.sweep);
    arena_close(context, &arena);
    return seconds;
}

/* ---- a fit --------------------------------------------------------------------------------------------------------
 */

/* Processor seconds of the shortest fit that gets there, from the start on; 0 when none of up to `most` seconds does.
 */
static double seconds_until(const struct rating *rating, const char *solver, double error, double most,
                            struct fit_outcome *out)
{
    static const uint64_t lengths[] = {1, 2, 3, 4, 6, 8, 11, 15, 20, 30, 45};
    for (size_t k = 0; k < sizeof lengths / sizeof *lengths; k++) {
        rating_fit(rating, solver, RATING_RANK, 1, lengths[k], out);
        if (out->rmse <= error)
            return out->cpu;
        if (out->cpu > most)
            break;
    }
    return 0;
}

/* The same for the fit that auto has for a table of this size: rank told, all shrinkage learnt, no offsets. */
static double learnt_until(const struct rating *rating, double error, struct fit_outcome *out)
{
    static const uint64_t rounds[] = {1, 2, 4, 8, 16};
    for (size_t k = 0; k < sizeof rounds / sizeof *rounds; k++) {
        const struct evidence_request request = {.offsets = FESCUE_OFFSETS_NONE,
                                                 .noise = EVIDENCE_NOISE_EQUAL,
                                                 .rank = RATING_RANK,
                                                 .rank_most = RATING_RANK,
                                                 .seed = 1,
                                                 .rounds = rounds[k],
                                                 .change = 1e-4};
        struct evidence_result result = {0};
        fescue_context *context;
        if (fescue_context_create(NULL, &context) != FESCUE_OK)
            exit(1);
        bench_check(context, team_resize(context, 1));
        double begin = clock_cpu();
        bench_check(context, evidence_learn(context, &rating->cells, &request, &result));
        *out = (struct fit_outcome){.cpu = clock_cpu() - begin, .iterations = rounds[k]};
        out->rmse = rating_error(rating, &result.model.low_rank, 1);
        evidence_result_free(context, &result);
        fescue_context_destroy(&context);
        if (out->rmse <= error)
            return out->cpu;
    }
    return 0;
}

/* The whole job, everything chosen by itself but the rank, on one thread; the reading is not counted. */
static void auto_run(const struct rating *rating, struct fit_outcome *out)
{
    const struct half *half = &rating->cells.by_row;
    uint32_t *row = bench_take(rating->cells.count, sizeof *row);
    struct fescue_options options;
    fescue_table *table;
    fescue_fill *fill;
    fescue_context *context;
    double sum = 0;
    if (fescue_context_create(NULL, &context) != FESCUE_OK)
        exit(1);
    fescue_options_standard(&options);
    bench_check(context, fescue_options_set(context, &options, "threads", "1"));
    bench_check(context, fescue_options_set(context, &options, "rank", RANK));
    for (uint32_t i = 0; i < half->lines; i++)
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++)
            row[k] = i;
    bench_check(context,
                fescue_table_from_cells(context, rating->cells.rows, rating->cells.columns, rating->cells.count, row,
                                        half->across, half->value, &options, &table));
    double begin = clock_cpu();
    bench_check(context, fescue_fill_table(table, &options, &fill));
    *out = (struct fit_outcome){.cpu = clock_cpu() - begin};
    for (uint64_t k = 0; k < rating->hidden; k++) {
        double off = fescue_fill_estimate(fill, rating->row[k], rating->column[k]) - rating->value[k];
        sum += off * off;
    }
    out->rmse = sqrt(sum / (double)rating->hidden);
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
    fescue_context_destroy(&context);
    free(row);
}

static void reached_report(struct bench *bench, const struct rating *rating, const char *solver, double seconds,
                           const struct fit_outcome *outcome, const json_t *said)
{
    double near = json_real_value(json_object_get(said, "near")),
           all = json_real_value(json_object_get(said, "seconds"));
    json_t *figure = json_pack(
        "{s:s, s:s, s:I, s:i, s:f, s:f, s:f, s:f, s:f, s:f, s:f, s:I}", "what", "time to the alternation's error",
        "solver", solver, "cells", (json_int_t)rating->cells.count, "threads", 1, "seconds", seconds, "alternation's",
        near, "share of the alternation's", seconds / near, "alternation's to its end", all, "share of that",
        seconds / all, "error on hidden cells", outcome->rmse, "alternation's error",
        json_real_value(json_object_get(said, "error")), "iterations", (json_int_t)outcome->iterations);
    figure_add(bench, figure);
}

void alternation_measure(struct bench *bench, uint64_t cells)
{
    struct rating rating;
    char prefix[1100];
    rating_sow(cells, FESCUE_DOUBLE, &rating);
    snprintf(prefix, sizeof prefix, "%s/bench-table", bench->build);
    table_write(&rating, prefix);
    json_t *said = alternation_run(prefix);
    table_remove(prefix);
    double theirs = json_real_value(json_object_get(said, "sweep"));
    double error = json_real_value(json_object_get(said, "error")), ours = sweep_seconds(&rating);
    json_int_t count = (json_int_t)rating.cells.count;
    figure_add(bench, json_pack("{s:s, s:I, s:i, s:i, s:f, s:f, s:f}", "what", "sweep of normal equations, both sides",
                                "cells", count, "rank", RATING_RANK, "threads", 1, "seconds", ours, "NumPy's", theirs,
                                "share of NumPy's", ours / theirs));
    if (said != NULL) {
        struct fit_outcome outcome;
        double seconds = learnt_until(&rating, 1.01 * error, &outcome);
        if (seconds > 0)
            reached_report(bench, &rating, "auto, its fit", seconds, &outcome, said);
        auto_run(&rating, &outcome);
        reached_report(bench, &rating, "auto, the whole job", outcome.cpu, &outcome, said);
    }
    rating_free(&rating);
    rating_sow(cells, FESCUE_SINGLE, &rating);
    for (size_t k = 0; said != NULL && solver_at(k) != NULL; k++) {
        struct fit_outcome outcome;
        double most = 2 * json_real_value(json_object_get(said, "seconds"));
        double seconds = seconds_until(&rating, solver_name(solver_at(k)), 1.01 * error, most, &outcome);
        if (seconds > 0) /* those that end elsewhere say nothing here */
            reached_report(bench, &rating, solver_name(solver_at(k)), seconds, &outcome, said);
    }
    json_decref(said);
    rating_free(&rating);
}
