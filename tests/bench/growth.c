/* SPDX-License-Identifier: MIT
 *
 * How an iteration's time and the memory of a fit grow with the cells: sown ratings of 1e6 and 1e7 cells and, when
 * asked for, 1e8, rank 16, single precision, one thread; a cell's share in each, and in relation to the smallest table.
 * Memory is the most that was held, the table with both orders included. And what it takes to load them from a pack.
 */
#include "rating.h"

#include "solve/solve.h"

#include <stdio.h>
#include <stdlib.h>
#include <unistd.h>

/* Of the two that take large tables: what auto has for them, and the quickest. */
static const char *const solvers[] = {"fixed-rank-cg", "alternating"};
enum { SOLVERS = sizeof solvers / sizeof *solvers, SIZES = 3, ITERATIONS = 12 };

struct share {
    double iteration, start, bytes; /* of a cell, seconds and bytes */
};

static struct share share_measure(const struct rating *rating, const char *solver)
{
    struct fit_outcome fit;
    double cells = (double)rating->cells.count;
    rating_fit(rating, solver, RATING_RANK, 1, ITERATIONS, &fit);
    return (struct share){fit.iteration / cells, (fit.cpu - fit.iteration * (double)fit.iterations) / cells,
                          (double)fit.bytes / cells};
}

/* Loads it LOADS times, from the page cache but for the first time. */
static void load_report(struct bench *bench, const struct rating *rating, const char *path, size_t threads)
{
    enum { LOADS = 5 };
    double wall[LOADS], cpu[LOADS];
    for (int k = 0; k < LOADS; k++) {
        fescue_context *context;
        double wall_start = clock_wall(), cpu_start = clock_cpu();
        fescue_table *table = bench_load(path, FESCUE_SINGLE, threads, &context);
        wall[k] = clock_wall() - wall_start;
        cpu[k] = clock_cpu() - cpu_start;
        table_destroy(&table);
        fescue_context_destroy(&context);
    }
    figure_add(bench, json_pack("{s:s, s:s, s:I, s:i, s:f, s:f}", "what", "growth", "of", "load pack", "cells",
                                (json_int_t)rating->cells.count, "threads", (int)threads, "wall seconds",
                                bench_median(wall, LOADS), "processor seconds", bench_median(cpu, LOADS)));
}

static void loads_report(struct bench *bench, const struct rating *rating)
{
    const char *parent = getenv("TMPDIR");
    char path[512];
    snprintf(path, sizeof path, "%s/fescue-bench-XXXXXX", parent != NULL ? parent : "/tmp");
    int file = mkstemp(path);
    if (file < 0 || close(file) != 0)
        exit(1);
    rating_pack(rating, path);
    for (size_t threads = 1; threads <= 2; threads++)
        load_report(bench, rating, path, threads);
    unlink(path);
}

void growth_measure(struct bench *bench, bool with_large)
{
    static const uint64_t sizes[SIZES] = {1000000, 10000000, 100000000};
    struct share first[SOLVERS];
    for (size_t k = 0; k < (with_large ? SIZES : SIZES - 1); k++) {
        struct rating rating;
        rating_sow(sizes[k], FESCUE_SINGLE, &rating);
        loads_report(bench, &rating);
        for (size_t s = 0; s < SOLVERS; s++) {
            struct share share = share_measure(&rating, solvers[s]);
            if (k == 0)
                first[s] = share;
            figure_add(bench, json_pack("{s:s, s:s, s:I, s:I, s:I, s:i, s:f, s:f, s:f, s:f, s:f}", "what", "growth",
                                        "solver", solvers[s], "cells", (json_int_t)rating.cells.count, "rows",
                                        (json_int_t)rating.cells.rows, "columns", (json_int_t)rating.cells.columns,
                                        "rank", RATING_RANK, "ns a cell and iteration", share.iteration * 1e9,
                                        "ns a cell for the start", share.start * 1e9, "bytes a cell", share.bytes,
                                        "time over that of 1e6", share.iteration / first[s].iteration,
                                        "bytes over those of 1e6", share.bytes / first[s].bytes));
        }
        rating_free(&rating);
    }
}
