/* SPDX-License-Identifier: MIT
 *
 * Offsets: the normal equations hold to rounding; ridges are those of a textbook's analysis of variance where the table
 * is full, and near the truth where effects are random; nothing depends on units or on the number of workers.
 */
#include "model/model.h"
#include "support_table.h"

#include <float.h>
#include <math.h>
#include <string.h>

/* x_ij = mean + spread of rows * normal + spread of columns * normal + noise * normal, the seen ones. A row is seen
   with its own share, so that the pattern is far from balanced. */
struct effects {
    uint32_t rows, columns;
    double share, mean, row, column, noise;
    double factor, shift; /* x -> factor x + shift */
    enum fescue_precision precision;
};

static double normal_at(uint32_t which, uint64_t index)
{
    struct random_stream stream = random_open(17, RANDOM_TEST, which);
    stream.index = index;
    return random_normal(&stream);
}

static void effects_sow(fescue_context *context, const struct effects *effects, struct cells *cells)
{
    struct triplet_list list = {.precision = effects->precision};
    for (uint32_t i = 0; i < effects->rows; i++)
        for (uint32_t j = 0; j < effects->columns; j++) {
            uint64_t cell = (uint64_t)i * effects->columns + j;
            double share = effects->share * (1 + i % 7) / 4 * (1 + j % 5) / 3;
            if (random_uniform_at(17, RANDOM_TEST, 1, cell) >= share)
                continue;
            double x = effects->mean + effects->row * normal_at(2, i) + effects->column * normal_at(3, j) +
                       effects->noise * normal_at(4, cell);
            x = x * effects->factor + effects->shift;
            assert_status(context, triplets_append(context, &list, i, j, x), FESCUE_OK);
        }
    assert_status(context, cells_build(context, effects->rows, effects->columns, &list, cells), FESCUE_OK);
    triplets_free(context, &list);
}

static const struct effects ordinary = {
    .rows = 300, .columns = 120, .share = 0.15, .mean = 40, .row = 2, .column = 0.7, .noise = 1.5, .factor = 1};

static void fit(fescue_context *context, const struct cells *cells, enum fescue_offsets kind, struct offsets *offsets)
{
    assert_status(context, offsets_fit(context, cells, kind, offsets), FESCUE_OK);
    assert_int_equal(offsets->kind, kind);
}

/* The gradient of the penalised squares in every unknown, against the size of its terms. */
static void normal_check(const struct cells *cells, const struct offsets *offsets, double tolerance)
{
    double all = 0, all_size = 0;
    for (int side = 0; side < 2; side++) {
        const struct half *half = side == 0 ? &cells->by_row : &cells->by_column;
        const double *effect = side == 0 ? offsets->row : offsets->column;
        double ridge = side == 0 ? offsets->row_ridge : offsets->column_ridge, together = 0;
        for (uint32_t i = 0; i < half->lines; i++) {
            double rest = isfinite(ridge) ? ridge * effect[i] : 0, size = fabs(rest);
            for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++) {
                uint32_t j = half->across[k];
                double x = cells_value(cells, half, k);
                double r = offsets_at(offsets, side == 0 ? i : j, side == 0 ? j : i) - x;
                rest += r;
                size += fabs(r) + fabs(x);
                all += side == 0 ? r : 0;
                all_size += fabs(r) + fabs(x);
            }
            together += effect[i];
            if (isfinite(ridge))
                assert_close(rest, 0, tolerance * size);
            else
                assert_true(effect[i] == 0);
            if (half->start[i] == half->start[i + 1])
                assert_true(effect[i] == 0);
        }
        assert_close(together, 0, tolerance * all_size);
    }
    assert_close(all, 0, tolerance * all_size);
}

static void normal_equations_hold(void **state)
{
    static const enum fescue_offsets kinds[] = {FESCUE_OFFSETS_BOTH, FESCUE_OFFSETS_ROWS, FESCUE_OFFSETS_COLUMNS,
                                                FESCUE_OFFSETS_MEAN};
    fescue_context *context = bench_of(state)->context;
    for (int precision = FESCUE_DOUBLE; precision <= FESCUE_SINGLE; precision++) {
        struct effects effects = ordinary;
        struct cells cells;
        effects.precision = (enum fescue_precision)precision;
        effects_sow(context, &effects, &cells);
        for (size_t k = 0; k < 4; k++) {
            struct offsets offsets;
            fit(context, &cells, kinds[k], &offsets);
            bool rows = kinds[k] == FESCUE_OFFSETS_BOTH || kinds[k] == FESCUE_OFFSETS_ROWS;
            bool columns = kinds[k] == FESCUE_OFFSETS_BOTH || kinds[k] == FESCUE_OFFSETS_COLUMNS;
            assert_int_equal(isfinite(offsets.row_ridge), rows);
            assert_int_equal(isfinite(offsets.column_ridge), columns);
            normal_check(&cells, &offsets, 1e-13);
            offsets_free(context, &offsets);
        }
        cells_free(context, &cells);
    }
}

static void none_is_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    struct offsets offsets;
    effects_sow(context, &ordinary, &cells);
    fit(context, &cells, FESCUE_OFFSETS_NONE, &offsets);
    for (uint32_t i = 0; i < cells.rows; i++)
        assert_true(offsets_at(&offsets, i, i % cells.columns) == 0);
    offsets_free(context, &offsets);
    assert_null(offsets.row);
    cells_free(context, &cells);
}

/* Ratios of variances from 300 and 120 random effects, seen some 20 and 50 times each: the sampling error of a variance
   from n effects is sqrt(2/n) of it, 8 and 13 %; three of these are allowed. */
static void ridges_are_near_the_truth(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    struct offsets offsets;
    effects_sow(context, &ordinary, &cells);
    fit(context, &cells, FESCUE_OFFSETS_BOTH, &offsets);
    assert_close(offsets.row_ridge / (1.5 * 1.5 / (2.0 * 2.0)), 1, 0.25);
    assert_close(offsets.column_ridge / (1.5 * 1.5 / (0.7 * 0.7)), 1, 0.4);
    offsets_free(context, &offsets);
    fit(context, &cells, FESCUE_OFFSETS_ROWS, &offsets);
    assert_close(offsets.row_ridge / ((1.5 * 1.5 + 0.7 * 0.7) / (2.0 * 2.0)), 1, 0.25);
    offsets_free(context, &offsets);
    cells_free(context, &cells);
}

/* Full p x q table, one observation a cell: the mean squares of the two-way analysis of variance (Searle, Casella,
   McCulloch 1992, section 4.2) give var_row = (MS_row - MS_rest) / q, noise = MS_rest. */
static void full_tables_give_the_analysis_of_variance(void **state)
{
    enum { P = 9, Q = 6 };
    fescue_context *context = bench_of(state)->context;
    struct effects effects = {.rows = P, .columns = Q, .share = 100, .row = 1, .column = 2, .noise = 1, .factor = 1};
    struct cells cells;
    struct offsets offsets;
    double x[P][Q], row[P] = {0}, column[Q] = {0}, mean = 0, ms_row = 0, ms_column = 0, ms_rest = 0;
    effects_sow(context, &effects, &cells);
    assert_int_equal(cells.count, P * Q);
    for (size_t i = 0; i < P; i++)
        for (size_t j = 0; j < Q; j++) {
            x[i][j] = cells_value(&cells, &cells.by_row, i * Q + j);
            row[i] += x[i][j] / Q;
            column[j] += x[i][j] / P;
            mean += x[i][j] / (P * Q);
        }
    for (size_t i = 0; i < P; i++)
        for (size_t j = 0; j < Q; j++) {
            ms_row += pow(row[i] - mean, 2) / (P - 1);
            ms_column += pow(column[j] - mean, 2) / (Q - 1);
            ms_rest += pow(x[i][j] - row[i] - column[j] + mean, 2) / ((P - 1) * (Q - 1));
        }
    assert_true(ms_row > ms_rest && ms_column > ms_rest);
    fit(context, &cells, FESCUE_OFFSETS_BOTH, &offsets);
    assert_close(offsets.row_ridge / (ms_rest / ((ms_row - ms_rest) / Q)), 1, 1e-9);
    assert_close(offsets.column_ridge / (ms_rest / ((ms_column - ms_rest) / P)), 1, 1e-9);
    /* In a full table effects are shrunken means. */
    assert_close(offsets.mean, mean, 1e-12);
    for (size_t i = 0; i < P; i++)
        assert_close(offsets.row[i], (row[i] - mean) * Q / (Q + offsets.row_ridge), 1e-12);
    offsets_free(context, &offsets);
    cells_free(context, &cells);
}

/* A table with no noise is met; the estimates, not the split into parts, are what counts. */
static void tables_without_noise_are_met(void **state)
{
    static const double spreads[][2] = {{2, 0.7}, {2, 0}, {0, 2}, {0, 0}};
    fescue_context *context = bench_of(state)->context;
    for (size_t s = 0; s < 4; s++) {
        struct effects effects = ordinary;
        struct cells cells;
        struct offsets offsets;
        effects.row = spreads[s][0];
        effects.column = spreads[s][1];
        effects.noise = 0;
        effects_sow(context, &effects, &cells);
        fit(context, &cells, FESCUE_OFFSETS_BOTH, &offsets);
        for (uint32_t i = 0; i < cells.rows; i++)
            for (uint64_t k = cells.by_row.start[i]; k < cells.by_row.start[i + 1]; k++)
                assert_close(offsets_at(&offsets, i, cells.by_row.across[k]), cells_value(&cells, &cells.by_row, k),
                             1e-7);
        /* Between mean and effects the tiny ridges decide: effects sum to zero. */
        double rows = 0, columns = 0;
        for (uint32_t i = 0; i < cells.rows; i++)
            rows += offsets.row[i];
        for (uint32_t j = 0; j < cells.columns; j++)
            columns += offsets.column[j];
        assert_close(rows, 0, 1e-11);
        assert_close(columns, 0, 1e-11);
        if (s == 3) {
            assert_close(offsets.mean, 40, 1e-13);
            for (uint32_t i = 0; i < cells.rows; i++)
                assert_true(offsets.row[i] == 0);
        }
        offsets_free(context, &offsets);
        cells_free(context, &cells);
    }
}

static void effects_that_are_not_there_are_off(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct effects effects = ordinary;
    struct cells cells;
    struct offsets offsets;
    size_t off = 0;
    /* Without any effect a variance comes out as negative in about half of the tables. */
    for (uint32_t trial = 0; trial < 12; trial++) {
        effects.row = effects.column = 0;
        effects.rows = 100 + trial;
        effects_sow(context, &effects, &cells);
        fit(context, &cells, FESCUE_OFFSETS_BOTH, &offsets);
        normal_check(&cells, &offsets, 1e-12);
        off += isfinite(offsets.row_ridge) ? 0 : 1;
        off += isfinite(offsets.column_ridge) ? 0 : 1;
        if (isfinite(offsets.row_ridge))
            assert_true(offsets.row_ridge > 20);
        offsets_free(context, &offsets);
        cells_free(context, &cells);
    }
    assert_true(off > 3 && off < 21);
}

/* x -> a x + b: the same ridges, and mean a m + b. By a power of two, the same bits. */
static void units_do_not_matter(void **state)
{
    static const double maps[][2] = {{1, 1000}, {-3, 7}, {1e-150, 0}, {1e150, 1e151}, {0x1p-1000, 0}, {0x1p900, 0}};
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    struct offsets first, second;
    effects_sow(context, &ordinary, &cells);
    fit(context, &cells, FESCUE_OFFSETS_BOTH, &first);
    cells_free(context, &cells);
    for (size_t m = 0; m < sizeof maps / sizeof *maps; m++) {
        struct effects effects = ordinary;
        effects.factor = maps[m][0];
        effects.shift = maps[m][1];
        effects_sow(context, &effects, &cells);
        fit(context, &cells, FESCUE_OFFSETS_BOTH, &second);
        assert_close(second.row_ridge / first.row_ridge, 1, 1e-9);
        assert_close(second.column_ridge / first.column_ridge, 1, 1e-9);
        assert_close((second.mean - effects.shift) / effects.factor, first.mean, 1e-9);
        for (uint32_t i = 0; i < cells.rows; i++)
            assert_close(second.row[i] / effects.factor, first.row[i], 1e-9);
        if (m > 3) {
            assert_true(second.row_ridge == first.row_ridge && second.mean == first.mean * effects.factor);
            for (uint32_t j = 0; j < cells.columns; j++)
                assert_true(second.column[j] == first.column[j] * effects.factor);
        }
        offsets_free(context, &second);
        cells_free(context, &cells);
    }
    offsets_free(context, &first);
}

static void workers_leave_no_trace(void **state)
{
    static const size_t workers[] = {1, 2, 7};
    fescue_context *context = bench_of(state)->context;
    struct effects effects = ordinary;
    struct cells cells;
    struct offsets first, second;
    effects.rows = 1500;
    effects_sow(context, &effects, &cells);
    assert_true(cells.by_row.blocks > 5);
    for (size_t w = 0; w < 3; w++) {
        assert_status(context, team_resize(context, workers[w]), FESCUE_OK);
        fit(context, &cells, FESCUE_OFFSETS_BOTH, &second);
        if (w == 0)
            assert_status(context, offsets_copy(context, cells.rows, cells.columns, &second, &first), FESCUE_OK);
        assert_memory_equal(&first.mean, &second.mean, sizeof first.mean);
        assert_memory_equal(&first.row_ridge, &second.row_ridge, 2 * sizeof(double));
        assert_memory_equal(first.row, second.row, cells.rows * sizeof(double));
        assert_memory_equal(first.column, second.column, cells.columns * sizeof(double));
        offsets_free(context, &second);
    }
    offsets_free(context, &first);
    cells_free(context, &cells);
}

/* ---- corners ------------------------------------------------------------------------------------------------------
 */

struct cell {
    uint32_t row, column;
    double value;
};

static void cells_put(fescue_context *context, uint32_t rows, uint32_t columns, const struct cell *cell, size_t count,
                      struct cells *cells)
{
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    for (size_t k = 0; k < count; k++)
        assert_status(context, triplets_append(context, &list, cell[k].row, cell[k].column, cell[k].value), FESCUE_OK);
    assert_status(context, cells_build(context, rows, columns, &list, cells), FESCUE_OK);
    triplets_free(context, &list);
}

static void poor_tables_are_borne(void **state)
{
    static const struct cell none[1] = {{0, 0, 0}};
    static const struct cell one[] = {{1, 2, 5}};
    static const struct cell row[] = {{1, 0, 5}, {1, 2, 7}, {1, 3, 9}};
    static const struct cell column[] = {{0, 1, 5}, {2, 1, 7}, {3, 1, 9}};
    static const struct cell tree[] = {{0, 0, 1}, {0, 1, 3}, {1, 1, 4}, {1, 2, 8}, {3, 3, 2}};
    static const struct cell blocks[] = {{0, 0, 1}, {0, 1, 3},  {1, 0, 4},  {1, 1, 8},
                                         {2, 2, 2}, {2, 3, 29}, {3, 2, 24}, {3, 3, 21}};
    static const struct cell largest[] = {{0, 0, DBL_MAX}, {0, 1, -DBL_MAX}, {1, 0, DBL_MAX}, {1, 1, DBL_MAX / 2}};
    static const struct cell smallest[] = {{0, 0, 5e-324}, {0, 1, 1e-323}, {1, 0, 0}, {1, 1, 5e-324}};
    static const struct {
        const struct cell *cell;
        size_t count;
    } tables[] = {{none, 0}, {one, 1}, {row, 3}, {column, 3}, {tree, 5}, {blocks, 8}, {largest, 4}, {smallest, 4}};
    fescue_context *context = bench_of(state)->context;
    for (size_t t = 0; t < sizeof tables / sizeof *tables; t++)
        for (int kind = FESCUE_OFFSETS_BOTH; kind <= FESCUE_OFFSETS_NONE; kind++) {
            struct cells cells;
            struct offsets offsets;
            cells_put(context, 4, 4, tables[t].cell, tables[t].count, &cells);
            fit(context, &cells, (enum fescue_offsets)kind, &offsets);
            assert_true(offsets.row_ridge >= 1e-8 && offsets.column_ridge >= 1e-8);
            for (uint32_t i = 0; i < 4; i++)
                for (uint32_t j = 0; j < 4; j++)
                    assert_true(isfinite(offsets_at(&offsets, i, j)));
            if (tables[t].cell != largest && tables[t].cell != smallest && kind != FESCUE_OFFSETS_NONE)
                normal_check(&cells, &offsets, 1e-13);
            if (tables[t].cell == tree && kind == FESCUE_OFFSETS_BOTH)
                assert_true(offsets.row_ridge == 1 && offsets.column_ridge == 1);
            if (tables[t].cell == one && kind != FESCUE_OFFSETS_NONE)
                assert_true(offsets_at(&offsets, 0, 0) == 5);
            offsets_free(context, &offsets);
            cells_free(context, &cells);
        }
}

static void memory_that_is_refused(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    struct offsets offsets;
    effects_sow(context, &ordinary, &cells);
    for (uint64_t nth = 1;; nth++) {
        fault_plan(FAULT_TAKE, nth, false, 0);
        fescue_status status = offsets_fit(context, &cells, FESCUE_OFFSETS_BOTH, &offsets);
        bool met = fault_met();
        fault_clear();
        if (!met) {
            assert_int_equal(status, FESCUE_OK);
            assert_true(nth > 3);
            break;
        }
        assert_int_equal(status, FESCUE_NO_MEMORY);
        assert_null(offsets.row);
        fescue_failure_clear(context);
    }
    offsets_free(context, &offsets);
    cells_free(context, &cells);
    assert_no_leak(context);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(normal_equations_hold),        BENCH_TEST(none_is_nothing),
        BENCH_TEST(ridges_are_near_the_truth),    BENCH_TEST(full_tables_give_the_analysis_of_variance),
        BENCH_TEST(tables_without_noise_are_met), BENCH_TEST(effects_that_are_not_there_are_off),
        BENCH_TEST(units_do_not_matter),          BENCH_TEST(workers_leave_no_trace),
        BENCH_TEST(poor_tables_are_borne),        BENCH_TEST(memory_that_is_refused),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
