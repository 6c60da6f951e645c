/* SPDX-License-Identifier: MIT
 *
 * Measures the machine's limits and, beside them, loading, the loops over cells, an iteration and the whole fit of
 * every solver.
 *
 *     BENCH_LOADED    cells of the table that is loaded       [1e7]
 *     BENCH_KERNELS   cells of the tables of the loops        [1e5,1e6,1e7]; 1e7 is beyond the caches
 *     BENCH_LOOPS     of the loops, those whose names hold this, such as "gradient, rows"    [all]
 *     BENCH_RANKS     their ranks                             [5,8,11,16,32]
 *     BENCH_CELLS     cells of the tables that are fitted     [1e5,1e6,1e7]; 1e5 takes a minute, all an hour
 *     BENCH_LARGE     1: also one of 1e8, in fits and growth
 *     BENCH_PARTS     of limits, loading, double, single (both: kernels), moments, fits, alternation, growth   [all]
 *     BENCH_SCRIPTS   where alternation.py is                 [tests/bench]
 *     BUILD           where bench.json and bench.png go       [build]
 */
#include "figures.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>

static const char *setting(const char *name, const char *standard)
{
    const char *value = getenv(name);
    return value != NULL && *value != '\0' ? value : standard;
}

static bool has_part(const char *name)
{
    const char *parts = setting("BENCH_PARTS", "all");
    return strcmp(parts, "all") == 0 || strstr(parts, name) != NULL;
}

typedef void measure(struct bench *bench, uint64_t cells);

/* Calls it for each number of a list such as 1e5,1e6. */
static void each_measure(struct bench *bench, const char *list, measure *what)
{
    for (const char *at = list; *at != '\0';) {
        char *end;
        uint64_t cells = (uint64_t)strtod(at, &end);
        if (cells == 0)
            break;
        what(bench, cells);
        at = *end == ',' ? end + 1 : end;
    }
}

static void loops_measure(struct bench *bench, uint64_t cells)
{
    if (has_part("kernels") || has_part("double"))
        kernels_measure(bench, cells, FESCUE_DOUBLE);
    if (has_part("kernels") || has_part("single"))
        kernels_measure(bench, cells, FESCUE_SINGLE);
    if (has_part("moments"))
        moments_measure(bench, cells / 10);
}

static void solvers_measure(struct bench *bench, uint64_t cells)
{
    if (has_part("fits"))
        fits_measure(bench, cells);
    if (has_part("alternation"))
        alternation_measure(bench, cells);
}

int main(int argc, char **argv)
{
    const char *missed = fescue_openblas_kernels_missed();
    if (argc > 0 && missed != NULL && setenv("OPENBLAS_CORETYPE", missed, 1) == 0)
        execv("/proc/self/exe", argv); /* as the program does: the limits are those of the best kernels */
    struct bench bench = {.figures = json_array(), .build = setting("BUILD", "build")};
    bool with_large = strcmp(setting("BENCH_LARGE", "0"), "1") == 0;
    if (has_part("limits"))
        limits_measure(&bench);
    if (has_part("loading"))
        each_measure(&bench, setting("BENCH_LOADED", "1e7"), loading_measure);
    each_measure(&bench, setting("BENCH_KERNELS", "1e5,1e6,1e7"), loops_measure);
    each_measure(&bench, setting("BENCH_CELLS", "1e5,1e6,1e7"), solvers_measure);
    if (with_large && has_part("fits"))
        fits_measure(&bench, 100000000);
    if (has_part("growth"))
        growth_measure(&bench, with_large);
    figures_write(&bench);
    json_decref(bench.figures);
    return 0;
}
