/* SPDX-License-Identifier: MIT
 *
 * Measures the machine's limits and, beside them, the loops over cells, an iteration and the whole fit of every solver.
 *
 *     BENCH_KERNELS   cells of the table of the loops         [1e6]; 1e7 is beyond the caches
 *     BENCH_LOOPS     of the loops, those whose names hold this, such as "gradient, rows"    [all]
 *     BENCH_RANKS     their ranks                             [5,8,11,16,32]
 *     BENCH_CELLS     cells of the tables that are fitted     [1e5]; such as 1e5,1e6,1e7
 *     BENCH_LARGE     1: also one of 1e8, in fits and growth
 *     BENCH_PARTS     of limits, double, single (both: kernels), moments, fits, alternation, growth   [all but growth]
 *     BENCH_SCRIPTS   where alternation.py is                 [tests/bench]
 *     BUILD           where bench.json and bench.png go       [build]
 */
#include "figures.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

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

int main(void)
{
    struct bench bench = {.figures = json_array(), .build = setting("BUILD", "build")};
    if (has_part("limits"))
        limits_measure(&bench);
    uint64_t kernels = (uint64_t)strtod(setting("BENCH_KERNELS", "1e6"), NULL);
    static const char *const precisions[] = {[FESCUE_DOUBLE] = "double", [FESCUE_SINGLE] = "single"};
    for (int precision = FESCUE_DOUBLE; precision <= FESCUE_SINGLE; precision++)
        if (has_part("kernels") || has_part(precisions[precision]))
            kernels_measure(&bench, kernels, (enum fescue_precision)precision);
    if (has_part("moments"))
        moments_measure(&bench, kernels / 10);
    for (const char *at = setting("BENCH_CELLS", "1e5"); *at != '\0';) {
        char *end;
        uint64_t cells = (uint64_t)strtod(at, &end);
        if (cells == 0)
            break;
        if (has_part("fits"))
            fits_measure(&bench, cells);
        if (has_part("alternation"))
            alternation_measure(&bench, cells);
        at = *end == ',' ? end + 1 : end;
    }
    bool with_large = strcmp(setting("BENCH_LARGE", "0"), "1") == 0;
    if (with_large && has_part("fits"))
        fits_measure(&bench, 100000000);
    if (strstr(setting("BENCH_PARTS", "all"), "growth") != NULL)
        growth_measure(&bench, with_large);
    figures_write(&bench);
    json_decref(bench.figures);
    return 0;
}
