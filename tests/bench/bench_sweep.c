/* SPDX-License-Identifier: MIT
 *
 * How fast the loops over observed cells are, beside what the machine's matrix product does in the same run.
 *
 *     bench_sweep [rows columns cells [rank ...]]          default 100000 20000 5000000, ranks 8 16 32
 *
 * The pattern is that of ratings: rows have 20 to 180 % of the mean number of cells, columns are popular as u^-1/2. One
 * line for each precision, operation and number of threads: nanoseconds a cell, GFLOP/s, and the share of gemm's rate
 * on as many threads. The best of several runs counts; with one thread it is processor time, which a busy machine
 * disturbs least. FESCUE_KERNEL picks the instruction set.
 */
#include "numeric/numeric.h"

#include <cblas.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

enum { RUNS = 7, GEMM_SIZE = 1024 };
static const double least_seconds = 0.4; /* of runs of one operation: a busy machine needs many for a good one */

struct bench {
    fescue_context *context;
    struct cells cells;
    struct sweep sweep;
    struct matrix left, right, a, b, gradient;
    void *residual;
    double ridge[257];
    size_t rank, threads;
    double gemm; /* GFLOP/s */
};
typedef void operation(struct bench *bench);

static void check(const struct bench *bench, fescue_status status)
{
    if (status == FESCUE_OK)
        return;
    fprintf(stderr, "bench_sweep: %s\n", fescue_failure_text(bench->context));
    exit(1);
}

/* ---- the table ----------------------------------------------------------------------------------------------------
 */

static void row_append(struct bench *bench, struct triplet_list *list, uint32_t row, uint32_t columns, uint64_t wanted,
                       uint32_t *last_row)
{
    struct random_stream stream = random_open(1, RANDOM_TEST, row);
    for (uint64_t c = 0; c < wanted; c++) {
        double u = random_uniform(&stream);
        uint32_t column = (uint32_t)(u * u * columns);
        if (last_row[column] == row + 1)
            continue; /* seen already: a few cells fewer */
        last_row[column] = row + 1;
        check(bench, triplets_append(bench->context, list, row, column, 0.5 * (double)(1 + random_below(&stream, 10))));
    }
}

static void table_make(struct bench *bench, uint32_t rows, uint32_t columns, uint64_t cells,
                       enum fescue_precision precision)
{
    struct triplet_list list = {.precision = precision};
    uint32_t *last_row = calloc(columns, sizeof *last_row);
    if (last_row == NULL)
        exit(1);
    for (uint32_t i = 0; i < rows; i++) {
        double share = 0.2 + 1.6 * random_uniform_at(1, RANDOM_TEST, 0, i);
        row_append(bench, &list, i, columns, (uint64_t)(share * (double)cells / rows), last_row);
    }
    check(bench, cells_build(bench->context, rows, columns, &list, &bench->cells));
    triplets_free(bench->context, &list);
    free(last_row);
}

/* ---- what is measured ---------------------------------------------------------------------------------------------
 */

static void rows_residual_gradient(struct bench *bench)
{
    double square;
    sweep_residual(&bench->sweep, &bench->cells.by_row, bench->left, bench->right, bench->gradient, bench->residual,
                   &square);
}

static void columns_residual_gradient(struct bench *bench)
{
    double square;
    sweep_residual(&bench->sweep, &bench->cells.by_column, bench->right, bench->left, bench->b, NULL, &square);
}

static void rows_residual(struct bench *bench)
{
    double square;
    sweep_residual(&bench->sweep, &bench->cells.by_row, bench->left, bench->right, (struct matrix){0}, bench->residual,
                   &square);
}

static void columns_multiply(struct bench *bench)
{
    sweep_multiply(&bench->sweep, &bench->cells.by_column, bench->cells.by_column.value, bench->left, bench->b);
}

static void rows_tangent(struct bench *bench)
{
    double zr, zz;
    sweep_tangent(&bench->sweep, &bench->cells.by_row, bench->a, bench->right, bench->left, bench->b, bench->residual,
                  &zr, &zz);
}

static void rows_solve(struct bench *bench)
{
    sweep_solve(&bench->sweep, &bench->cells.by_row, bench->right, bench->ridge, bench->gradient, NULL);
}

static void columns_solve(struct bench *bench)
{
    sweep_solve(&bench->sweep, &bench->cells.by_column, bench->left, bench->ridge, bench->b, NULL);
}

static double best_seconds(struct bench *bench, operation *run)
{
    double (*const clock)(void) = bench->threads == 1 ? clock_cpu : clock_wall;
    double best = 1e300, all = 0;
    for (int k = 0; k < RUNS || all < least_seconds; k++) {
        double begin = clock();
        run(bench);
        double seconds = clock() - begin;
        best = seconds < best ? seconds : best;
        all += seconds;
    }
    return best;
}

static void operation_report(struct bench *bench, const char *name, operation *run, double flops)
{
    double seconds = best_seconds(bench, run), cells = (double)bench->cells.count;
    double rate = cells * flops / seconds / 1e9;
    printf("%-8s %-6s rank %3zu  %zu threads  %-28s %7.2f ns a cell %7.2f GFLOP/s  %.2f of gemm\n", bench->sweep.kernel,
           bench->cells.precision == FESCUE_SINGLE ? "single" : "double", bench->rank, bench->threads, name,
           seconds / cells * 1e9, rate, rate / bench->gemm / (double)bench->threads);
}

/* One thread; what several do is taken to be as many times that. */
static double gemm_rate(enum fescue_precision precision)
{
    size_t count = GEMM_SIZE * GEMM_SIZE, size = precision == FESCUE_SINGLE ? sizeof(float) : sizeof(double);
    void *a = calloc(3 * count, size);
    double best = 1e300;
    if (a == NULL)
        exit(1);
    for (int k = 0; k < RUNS; k++) {
        double begin = clock_cpu();
        if (precision == FESCUE_SINGLE)
            cblas_sgemm(CblasRowMajor, CblasNoTrans, CblasNoTrans, GEMM_SIZE, GEMM_SIZE, GEMM_SIZE, 1, a, GEMM_SIZE,
                        (float *)a + count, GEMM_SIZE, 0, (float *)a + 2 * count, GEMM_SIZE);
        else
            cblas_dgemm(CblasRowMajor, CblasNoTrans, CblasNoTrans, GEMM_SIZE, GEMM_SIZE, GEMM_SIZE, 1, a, GEMM_SIZE,
                        (double *)a + count, GEMM_SIZE, 0, (double *)a + 2 * count, GEMM_SIZE);
        double seconds = clock_cpu() - begin;
        best = seconds < best ? seconds : best;
    }
    free(a);
    return 2 * (double)GEMM_SIZE * GEMM_SIZE * GEMM_SIZE / best / 1e9;
}

static void factors_draw(struct bench *bench, struct arena *arena)
{
    struct matrix *const factor[] = {&bench->left, &bench->a, &bench->gradient, &bench->right, &bench->b};
    struct random_stream stream = random_open(2, RANDOM_TEST, 0);
    for (size_t f = 0; f < 5; f++)
        matrix_reserve(arena, f < 3 ? bench->cells.rows : bench->cells.columns, bench->rank);
    check(bench, arena_open(bench->context, arena));
    for (size_t f = 0; f < 5; f++) {
        *factor[f] = matrix_carve(arena, f < 3 ? bench->cells.rows : bench->cells.columns, bench->rank);
        for (size_t i = 0; i < factor[f]->rows; i++)
            for (size_t j = 0; j < bench->rank; j++)
                MATRIX_AT(*factor[f], i, j) = random_uniform(&stream) - 0.5;
    }
}

static void rank_report(struct bench *bench)
{
    struct arena arena = {0};
    double rank = (double)bench->rank;
    for (size_t j = 0; j < bench->rank; j++)
        bench->ridge[j] = 0.1;
    factors_draw(bench, &arena);
    for (bench->threads = 1; bench->threads <= 2; bench->threads++) {
        check(bench, team_resize(bench->context, bench->threads));
        check(bench, sweep_create(bench->context, &bench->cells, bench->rank, &bench->sweep));
        operation_report(bench, "residual + gradient, rows", rows_residual_gradient, 4 * rank + 1);
        operation_report(bench, "residual + gradient, columns", columns_residual_gradient, 4 * rank + 1);
        operation_report(bench, "residual, rows", rows_residual, 2 * rank + 1);
        operation_report(bench, "multiply, columns", columns_multiply, 2 * rank);
        operation_report(bench, "tangent, rows", rows_tangent, 4 * rank + 4);
        operation_report(bench, "solve, rows", rows_solve, rank * (rank + 1) + 2 * rank);
        operation_report(bench, "solve, columns", columns_solve, rank * (rank + 1) + 2 * rank);
        sweep_destroy(&bench->sweep);
    }
    arena_close(bench->context, &arena);
}

int main(int count, char **argument)
{
    static const size_t standard[] = {8, 16, 32};
    uint32_t rows = count > 3 ? (uint32_t)strtoul(argument[1], NULL, 10) : 100000;
    uint32_t columns = count > 3 ? (uint32_t)strtoul(argument[2], NULL, 10) : 20000;
    uint64_t cells = count > 3 ? strtoull(argument[3], NULL, 10) : 5000000;
    for (int precision = FESCUE_DOUBLE; precision <= FESCUE_SINGLE; precision++) {
        struct bench bench = {0};
        if (fescue_context_create(NULL, &bench.context) != FESCUE_OK)
            return 1;
        table_make(&bench, rows, columns, cells, (enum fescue_precision)precision);
        check(&bench, memory_take(bench.context, bench.cells.count, sizeof(double), &bench.residual));
        struct matrix none = {0};
        matrix_multiply(1, none, false, none, false, 0, none); /* holds OpenBLAS at one thread */
        bench.gemm = gemm_rate(bench.cells.precision);
        printf("%u x %u, %llu cells; gemm %.1f GFLOP/s on one thread\n", rows, columns,
               (unsigned long long)bench.cells.count, bench.gemm);
        for (int r = 0; r < (count > 4 ? count - 4 : 3); r++) {
            bench.rank = count > 4 ? strtoul(argument[4 + r], NULL, 10) : standard[r];
            rank_report(&bench);
        }
        memory_give(bench.context, &bench.residual);
        cells_free(bench.context, &bench.cells);
        fescue_context_destroy(&bench.context);
    }
    return 0;
}
