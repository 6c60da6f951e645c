/* SPDX-License-Identifier: MIT
 *
 * The two-way system: against Gaussian elimination on the full matrix where that is small, by its residual where not;
 * both ways of solving it; refusals.
 */
#include "numeric/numeric.h"
#include "support_table.h"

#include <float.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

struct system {
    fescue_context *context;
    struct cells cells;
    size_t size, count;
    double *diagonal, *rhs, *solution;
};

static double *numbers(size_t count)
{
    double *block = calloc(count, sizeof *block);
    assert_non_null(block);
    return block;
}

/* d = cells of the line + ridge; lines without cells get 1. */
static void system_open(struct system *system, fescue_context *context, double ridge)
{
    struct random_stream stream = random_open(8, RANDOM_TEST, 1);
    const struct cells *cells = &system->cells;
    system->context = context;
    system->size = (size_t)cells->rows + cells->columns;
    system->count = 2;
    system->diagonal = numbers(system->size);
    system->rhs = numbers(2 * system->size);
    system->solution = numbers(2 * system->size);
    for (size_t i = 0; i < system->size; i++) {
        const struct half *half = i < cells->rows ? &cells->by_row : &cells->by_column;
        size_t line = i < cells->rows ? i : i - cells->rows;
        uint64_t seen = half->start[line + 1] - half->start[line];
        system->diagonal[i] = seen > 0 ? (double)seen + ridge : 1;
        system->rhs[i] = random_normal(&stream);
        system->rhs[system->size + i] = (double)seen;
    }
}

static void system_close(struct system *system)
{
    free(system->diagonal);
    free(system->rhs);
    free(system->solution);
    cells_free(system->context, &system->cells);
}

static void solve(struct system *system)
{
    assert_status(system->context,
                  sparse_two_way_solve(system->context, &system->cells, system->diagonal, system->count, system->rhs,
                                       system->solution),
                  FESCUE_OK);
}

/* |K y - rhs| against |rhs| in the norm of D^-1. */
static double residual_of(const struct system *system, size_t which)
{
    const double *y = system->solution + which * system->size, *g = system->rhs + which * system->size;
    size_t rows = system->cells.rows;
    const struct half *half = &system->cells.by_row;
    double *rest = numbers(system->size), square = 0, whole = 0;
    for (size_t i = 0; i < system->size; i++)
        rest[i] = system->diagonal[i] * y[i] - g[i];
    for (uint32_t i = 0; i < half->lines; i++)
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++) {
            rest[i] += y[rows + half->across[k]];
            rest[rows + half->across[k]] += y[i];
        }
    for (size_t i = 0; i < system->size; i++) {
        square += rest[i] * rest[i] / system->diagonal[i];
        whole += g[i] * g[i] / system->diagonal[i];
    }
    free(rest);
    return sqrt(square / whole);
}

/* x <- A^-1 x by elimination with pivots. */
static void eliminate(double *a, double *x, size_t n)
{
    for (size_t j = 0; j < n; j++) {
        size_t best = j;
        for (size_t i = j; i < n; i++)
            best = fabs(a[i * n + j]) > fabs(a[best * n + j]) ? i : best;
        for (size_t c = 0; c < n; c++) {
            double keep = a[j * n + c];
            a[j * n + c] = a[best * n + c];
            a[best * n + c] = keep;
        }
        double keep = x[j];
        x[j] = x[best];
        x[best] = keep;
        for (size_t i = j + 1; i < n; i++) {
            double share = a[i * n + j] / a[j * n + j];
            for (size_t c = j; c < n; c++)
                a[i * n + c] -= share * a[j * n + c];
            x[i] -= share * x[j];
        }
    }
    for (size_t j = n; j-- > 0;) {
        for (size_t c = j + 1; c < n; c++)
            x[j] -= a[j * n + c] * x[c];
        x[j] /= a[j * n + j];
    }
}

static void small_systems_agree_with_elimination(void **state)
{
    static const struct sowing sowings[] = {
        {.rows = 1, .columns = 1, .share = 1},     {.rows = 30, .columns = 4, .share = 0.6},
        {.rows = 4, .columns = 30, .share = 0.6},  {.rows = 40, .columns = 50, .share = 0.1},
        {.rows = 25, .columns = 25, .share = 1.0}, {.rows = 60, .columns = 60, .share = 0.02}};
    for (size_t s = 0; s < sizeof sowings / sizeof *sowings; s++) {
        struct system system;
        sow_cells(bench_of(state)->context, &sowings[s], &system.cells);
        system_open(&system, bench_of(state)->context, 0.3);
        solve(&system);
        size_t n = system.size, rows = system.cells.rows;
        double *full = numbers(n * n), *x = numbers(n);
        for (size_t i = 0; i < n; i++)
            full[i * n + i] = system.diagonal[i];
        for (uint32_t i = 0; i < rows; i++)
            for (uint64_t k = system.cells.by_row.start[i]; k < system.cells.by_row.start[i + 1]; k++) {
                size_t j = rows + system.cells.by_row.across[k];
                full[i * n + j] = full[j * n + i] = 1;
            }
        memcpy(x, system.rhs, n * sizeof *x);
        eliminate(full, x, n);
        for (size_t i = 0; i < n; i++)
            assert_close(system.solution[i], x[i], 1e-11);
        assert_true(residual_of(&system, 1) < 1e-13);
        free(full);
        free(x);
        system_close(&system);
    }
}

/* Above 1e5 cells the order of elimination is given, the longer side first. */
static void longer_sides_go_first(void **state)
{
    static const struct sowing sowings[] = {{.rows = 700, .columns = 300, .share = 0.7, .seed = 2},
                                            {.rows = 300, .columns = 700, .share = 0.7, .seed = 2}};
    for (size_t s = 0; s < 2; s++) {
        struct system system;
        sow_cells(bench_of(state)->context, &sowings[s], &system.cells);
        assert_true(system.cells.count > 100000);
        system_open(&system, bench_of(state)->context, 0.3);
        solve(&system);
        assert_true(residual_of(&system, 0) < 1e-13 && residual_of(&system, 1) < 1e-13);
        system_close(&system);
    }
}

/* Few cells a line, but the factor fills: the analysis advises conjugate gradients. */
static void where_the_factor_fills_gradients_serve(void **state)
{
    static const size_t workers[] = {1, 2, 7};
    enum { LINES = 15000, CELLS_A_LINE = 6 };
    fescue_context *context = bench_of(state)->context;
    struct triplet_list list = {.precision = FESCUE_SINGLE};
    struct random_stream stream = random_open(21, RANDOM_TEST, 1);
    struct system system;
    for (uint32_t i = 0; i < LINES; i++) {
        uint32_t before = 0;
        for (uint32_t c = 0; c < CELLS_A_LINE; c++) {
            uint32_t j = before + (uint32_t)random_below(&stream, LINES / CELLS_A_LINE);
            assert_status(context, triplets_append(context, &list, i, j, 1), FESCUE_OK);
            before = j + 1;
        }
    }
    assert_status(context, cells_build(context, LINES, LINES + CELLS_A_LINE, &list, &system.cells), FESCUE_OK);
    triplets_free(context, &list);
    system_open(&system, context, 0.5);
    double *first = numbers(2 * system.size);
    for (size_t w = 0; w < 3; w++) {
        assert_status(context, team_resize(context, workers[w]), FESCUE_OK);
        solve(&system);
        assert_true(residual_of(&system, 0) < 2e-12 && residual_of(&system, 1) < 2e-12);
        if (w == 0)
            memcpy(first, system.solution, 2 * system.size * sizeof *first);
        assert_memory_equal(first, system.solution, 2 * system.size * sizeof *first);
    }
    free(first);
    system_close(&system);
}

/* Nearly singular: constants on the two sides that cancel are held by 1e-8 alone. */
static void tiny_ridges_are_borne(void **state)
{
    static const struct sowing sowing = {.rows = 300, .columns = 200, .share = 0.2, .seed = 5};
    struct system system;
    sow_cells(bench_of(state)->context, &sowing, &system.cells);
    system_open(&system, bench_of(state)->context, 1e-8);
    solve(&system);
    assert_true(residual_of(&system, 0) < 1e-6);
    assert_true(residual_of(&system, 1) < 1e-6);
    system_close(&system);
}

static void an_indefinite_system_is_a_defect(void **state)
{
    static const struct sowing sowing = {.rows = 30, .columns = 20, .share = 0.5, .seed = 5};
    struct system system;
    sow_cells(bench_of(state)->context, &sowing, &system.cells);
    system_open(&system, bench_of(state)->context, -3);
    assert_status(system.context,
                  sparse_two_way_solve(system.context, &system.cells, system.diagonal, 1, system.rhs, system.solution),
                  FESCUE_DEFECT);
    fescue_failure_clear(system.context);
    system_close(&system);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(small_systems_agree_with_elimination),   BENCH_TEST(longer_sides_go_first),
        BENCH_TEST(where_the_factor_fills_gradients_serve), BENCH_TEST(tiny_ridges_are_borne),
        BENCH_TEST(an_indefinite_system_is_a_defect),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
