/* SPDX-License-Identifier: MIT
 *
 * How an iteration's time and the memory of a fit grow with the cells: sown ratings of 1e6 and 1e7 cells and, when
 * asked for, 1e8, rank 16, single precision, one thread; a cell's share in each, and in relation to the smallest table.
 * Memory is the most that was held, the table with both orders included.
 */
#include "rating.h"

#include "solve/solve.h"

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

void growth_measure(struct bench *bench, bool with_large)
{
    static const uint64_t sizes[SIZES] = {1000000, 10000000, 100000000};
    struct share first[SOLVERS];
    for (size_t k = 0; k < (with_large ? SIZES : SIZES - 1); k++) {
        struct rating rating;
        rating_sow(sizes[k], FESCUE_SINGLE, &rating);
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
