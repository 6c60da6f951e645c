/* SPDX-License-Identifier: MIT
 *
 * How fast the loops over observed cells are, beside what the machine's matrix product does between two of their runs.
 *
 * A figure says nanoseconds a cell, flops and bytes a second, and the share of gemm's rate in the same precision. Bytes
 * are what the loop asks for, wherever it comes from: a cell's position and value and its rows, as wide as they are.
 * FESCUE_KERNEL picks the instruction set.
 */
#include "rating.h"

#include "numeric/numeric.h"

#include <stdlib.h>
#include <string.h>

struct stand {
    struct bench *bench;
    struct rating rating;
    struct sweep sweep;
    struct matrix left, right, a, b, left_out, right_out;
    void *residual;
    double ridge[257];
    size_t rank, threads;
    struct stand *one; /* the same with one thread */
    bench_work *run;   /* what is measured */
};

static void rows_gradient(void *argument)
{
    struct stand *stand = argument;
    double square;
    sweep_residual(&stand->sweep, &stand->rating.cells.by_row, stand->left, stand->right, stand->left_out, NULL,
                   &square);
}

static void columns_gradient(void *argument)
{
    struct stand *stand = argument;
    double square;
    sweep_residual(&stand->sweep, &stand->rating.cells.by_column, stand->right, stand->left, stand->right_out, NULL,
                   &square);
}

static void rows_gradient_kept(void *argument)
{
    struct stand *stand = argument;
    double square;
    sweep_residual(&stand->sweep, &stand->rating.cells.by_row, stand->left, stand->right, stand->left_out,
                   stand->residual, &square);
}

static void rows_residual(void *argument)
{
    struct stand *stand = argument;
    double square;
    sweep_residual(&stand->sweep, &stand->rating.cells.by_row, stand->left, stand->right, (struct matrix){0},
                   stand->residual, &square);
}

static void rows_multiply(void *argument)
{
    struct stand *stand = argument;
    sweep_multiply(&stand->sweep, &stand->rating.cells.by_row, stand->rating.cells.by_row.value, stand->right,
                   stand->left_out);
}

static void columns_multiply(void *argument)
{
    struct stand *stand = argument;
    sweep_multiply(&stand->sweep, &stand->rating.cells.by_column, stand->rating.cells.by_column.value, stand->left,
                   stand->right_out);
}

static void rows_tangent(void *argument)
{
    struct stand *stand = argument;
    double zr, zz;
    sweep_tangent(&stand->sweep, &stand->rating.cells.by_row, stand->a, stand->right, stand->left, stand->b,
                  stand->residual, &zr, &zz);
}

static void rows_solve(void *argument)
{
    struct stand *stand = argument;
    sweep_solve(&stand->sweep, &stand->rating.cells.by_row, stand->right, stand->ridge, stand->left_out, NULL);
}

static void columns_solve(void *argument)
{
    struct stand *stand = argument;
    sweep_solve(&stand->sweep, &stand->rating.cells.by_column, stand->left, stand->ridge, stand->right_out, NULL);
}

static const struct kernel {
    const char *what;
    bench_work *run;
    double flops_line[3]; /* a cell: constant, times the rank, times its square */
    int rows;             /* read or written for each cell */
} kernels[] = {
    {"residual + gradient, rows", rows_gradient, {1, 4, 0}, 1},
    {"residual + gradient, columns", columns_gradient, {1, 4, 0}, 1},
    {"residual kept + gradient, rows", rows_gradient_kept, {1, 4, 0}, 1},
    {"residual kept, rows", rows_residual, {1, 2, 0}, 1},
    {"multiply, rows", rows_multiply, {0, 2, 0}, 1},
    {"multiply, columns", columns_multiply, {0, 2, 0}, 1},
    {"tangent step, rows", rows_tangent, {4, 4, 0}, 2},
    {"normal equations and solves, rows", rows_solve, {0, 3, 1}, 1},
    {"normal equations and solves, columns", columns_solve, {0, 3, 1}, 1},
};

/* The share of gemm's rate that `flops` in the time of a run are, of the medians and of the best runs of both. */
static void share_add(json_t *figure, double flops, struct bench_time own, struct bench_time gemm)
{
    json_object_set_new(figure, "share of gemm", json_real(flops / own.median / (GEMM_FLOPS / gemm.median)));
    json_object_set_new(figure, "at best", json_real(flops / own.least / (GEMM_FLOPS / gemm.least)));
}

static void one_run(void *stand)
{
    const struct stand *two = stand;
    two->run(two->one);
}

/* One thread beside gemm; two beside one of them. */
static void kernel_report(struct stand *stand, const struct kernel *kernel)
{
    bool is_single = stand->rating.cells.precision == FESCUE_SINGLE;
    double cells = (double)stand->rating.cells.count, rank = (double)stand->rank, size = is_single ? 4 : 8;
    double flops = cells * (kernel->flops_line[0] + rank * (kernel->flops_line[1] + rank * kernel->flops_line[2]));
    bench_work *beside = stand->threads > 1 ? one_run : is_single ? gemm_single_run : gemm_double_run;
    struct bench_time other;
    stand->run = kernel->run;
    struct bench_time own = bench_measure(stand->threads, kernel->run, stand, beside, &other);
    json_t *figure =
        json_pack("{s:s, s:s, s:s, s:I, s:I, s:I, s:f, s:f, s:f}", "what", kernel->what, "precision",
                  is_single ? "single" : "double", "kernel", stand->sweep.kernel, "cells",
                  (json_int_t)stand->rating.cells.count, "rank", (json_int_t)stand->rank, "threads",
                  (json_int_t)stand->threads, "ns a cell", own.median / cells * 1e9, "GFLOP/s",
                  flops / own.median / 1e9, "GB/s", cells * (4 + size + kernel->rows * size * rank) / own.median / 1e9);
    if (stand->threads == 1)
        share_add(figure, flops, own, other);
    else {
        figure_times_add(figure, other.median / own.median);
        json_object_set_new(figure, "at best", json_real(other.least / own.least));
    }
    figure_add(stand->bench, figure);
}

static void factors_draw(struct stand *stand, struct arena *arena)
{
    struct matrix *const factor[] = {&stand->left,  &stand->a, &stand->left_out,
                                     &stand->right, &stand->b, &stand->right_out};
    const struct cells *cells = &stand->rating.cells;
    struct random_stream stream = random_open(2, RANDOM_TEST, 0);
    for (size_t f = 0; f < 6; f++)
        matrix_reserve(arena, f < 3 ? cells->rows : cells->columns, stand->rank);
    bench_check(stand->rating.context, arena_open(stand->rating.context, arena));
    for (size_t f = 0; f < 6; f++) {
        *factor[f] = matrix_carve(arena, f < 3 ? cells->rows : cells->columns, stand->rank);
        for (size_t i = 0; i < factor[f]->rows; i++)
            for (size_t j = 0; j < stand->rank; j++)
                MATRIX_AT(*factor[f], i, j) = random_uniform(&stream) - 0.5;
    }
}

/* A sweep of its own, in a context that has so many threads. */
static void stand_open(struct stand *stand, fescue_context *context, size_t threads)
{
    stand->threads = threads;
    bench_check(context, team_resize(context, threads));
    bench_check(context, sweep_create(context, &stand->rating.cells, stand->rank, &stand->sweep));
    bench_check(context, sweep_arrange(&stand->sweep, &stand->rating.cells.by_column));
}

static void rank_report(struct stand *one, fescue_context *context, bool with_two)
{
    enum { COUNT = sizeof kernels / sizeof *kernels };
    struct arena arena = {0};
    const char *only = getenv("BENCH_LOOPS");
    for (size_t j = 0; j < one->rank; j++)
        one->ridge[j] = 0.1;
    factors_draw(one, &arena);
    stand_open(one, one->rating.context, 1);
    struct stand two = *one;
    two.one = one;
    if (with_two)
        stand_open(&two, context, 2);
    for (struct stand *stand = one; stand != NULL; stand = stand == one && with_two ? &two : NULL)
        for (size_t k = 0; k < COUNT; k++)
            if (only == NULL || strstr(kernels[k].what, only) != NULL)
                kernel_report(stand, &kernels[k]);
    if (with_two)
        sweep_destroy(&two.sweep);
    sweep_destroy(&one->sweep);
    arena_close(one->rating.context, &arena);
}

void kernels_measure(struct bench *bench, uint64_t cells, enum fescue_precision precision)
{
    const char *ranks = getenv("BENCH_RANKS");
    struct stand stand = {.bench = bench};
    fescue_context *context; /* of two threads */
    if (fescue_context_create(NULL, &context) != FESCUE_OK)
        exit(1);
    rating_sow(cells, precision, &stand.rating);
    stand.residual = bench_take(stand.rating.cells.count, sizeof(double));
    for (const char *at = ranks != NULL ? ranks : "5,8,11,16,32"; *at != '\0';) {
        char *end;
        stand.rank = strtoul(at, &end, 10);
        if (stand.rank == 0 || stand.rank > 256)
            break;
        rank_report(&stand, context, stand.rank == 16);
        at = *end == ',' ? end + 1 : end;
    }
    free(stand.residual);
    fescue_context_destroy(&context);
    rating_free(&stand.rating);
}

/* ---- moments ------------------------------------------------------------------------------------------------------
 */

struct moments_stand {
    const struct half *half;
    struct moments moments;
    struct moments_batch batch;
};

static void half_gather(void *argument)
{
    struct moments_stand *stand = argument;
    for (size_t first = 0; first < stand->half->lines; first += BATCH_LANES)
        moments_gather(&stand->moments, stand->half, FESCUE_DOUBLE, first, &stand->batch);
}

/* In doubles, or in halves; memory as a fit takes it. */
static void moments_report(struct bench *bench, const struct cells *cells, size_t rank, bool in_halves,
                           const char *const what[2])
{
    size_t d = rank + 2, stride = moments_stride(d);
    double *work = bench_take(moments_batch_size(d), sizeof *work);
    fescue_context *context;
    if (fescue_context_create(NULL, &context) != FESCUE_OK)
        exit(1);
    for (int side = 0; side < 2; side++) {
        struct moments_stand stand = {.half = side == 0 ? &cells->by_row : &cells->by_column};
        uint64_t *halves = NULL;
        stand.moments =
            (struct moments){.stride = stride, .regressors = d, .one = rank, .kernel = batch_kernel_choose()};
        bench_check(context, TAKE(context, stand.half->length * stride, &stand.moments.data));
        bench_check(context, TAKE(context, in_halves ? stand.half->length * moments_words(d) : 0, &halves));
        stand.moments.halves = in_halves ? halves : NULL;
        stand.batch = moments_batch_carve(work, d);
        struct bench_time gemm, own = bench_measure(1, half_gather, &stand, gemm_double_run, &gemm);
        double count = (double)cells->count, flops = count * (2 * (double)packed_size(d) + 2 * (double)d);
        double bytes = (in_halves ? 4 : 8) * (double)packed_size(d);
        json_t *figure = json_pack("{s:s, s:s, s:I, s:I, s:i, s:f, s:f, s:f}", "what", what[side], "precision",
                                   in_halves ? "halves of double" : "double", "cells", (json_int_t)cells->count, "rank",
                                   (json_int_t)rank, "threads", 1, "ns a cell", own.median / count * 1e9, "GFLOP/s",
                                   flops / own.median / 1e9, "GB/s", bytes * count / own.median / 1e9);
        share_add(figure, flops, own, gemm);
        figure_add(bench, figure);
        memory_give(context, &stand.moments.data);
        GIVE(context, &halves);
    }
    fescue_context_destroy(&context);
    free(work);
}

void moments_measure(struct bench *bench, uint64_t cells)
{
    static const char *const of_ratings[] = {"moments of ratings, rows", "moments of ratings, columns"};
    static const char *const of_sensors[] = {"moments of sensors, rows", "moments of sensors, columns"};
    struct rating rating;
    rating_sow(cells, FESCUE_DOUBLE, &rating);
    for (int in_halves = 0; in_halves < 2; in_halves++)
        moments_report(bench, &rating.cells, 16, in_halves != 0, of_ratings);
    rating_free(&rating);
    /* Sensors: many times, few places, half of it there. */
    fescue_context *context;
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    struct random_stream stream = random_open(3, RANDOM_TEST, 0);
    struct cells dense;
    if (fescue_context_create(NULL, &context) != FESCUE_OK)
        exit(1);
    for (uint32_t i = 0; i < 4400; i++)
        for (uint32_t j = 0; j < 70; j++)
            if (random_uniform(&stream) < 0.5)
                bench_check(context, triplets_append(context, &list, i, j, random_normal(&stream)));
    bench_check(context, cells_build(context, 4400, 70, &list, &dense));
    triplets_free(context, &list);
    for (int in_halves = 0; in_halves < 2; in_halves++)
        moments_report(bench, &dense, 20, in_halves != 0, of_sensors);
    cells_free(context, &dense);
    fescue_context_destroy(&context);
}
