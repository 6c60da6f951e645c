/* SPDX-License-Identifier: MIT
 *
 * The low-rank problem: targets both ways, scale, ridge, rounding, extreme numbers.
 */
#include "support_solve.h"

#include <float.h>

static const struct sowing sown = {.rows = 23, .columns = 17, .rank = 2, .share = 0.4, .seed = 5};

static struct offsets offsets_made(fescue_context *context, uint32_t rows, uint32_t columns, double mean)
{
    struct offsets offsets = {.kind = FESCUE_OFFSETS_BOTH, .mean = mean};
    assert_status(context, TAKE(context, rows, &offsets.row), FESCUE_OK);
    assert_status(context, TAKE(context, columns, &offsets.column), FESCUE_OK);
    for (uint32_t i = 0; i < rows; i++)
        offsets.row[i] = 0.25 * i;
    for (uint32_t j = 0; j < columns; j++)
        offsets.column[j] = 1 - 0.5 * j;
    return offsets;
}

static void the_targets_are_what_the_formula_says(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct plot plot = {.context = context, .sowing = sown};
    struct offsets offsets = offsets_made(context, sown.rows, sown.columns, 3);
    double square = 0;
    sow_cells(context, &sown, &plot.cells);
    assert_status(context, problem_create(context, &plot.cells, &offsets, 0.5, &plot.problem), FESCUE_OK);
    const struct cells *target = &plot.problem.target;
    for (uint32_t i = 0; i < sown.rows; i++)
        for (uint64_t k = target->by_row.start[i]; k < target->by_row.start[i + 1]; k++) {
            uint32_t j = target->by_row.across[k];
            double x = cells_value(&plot.cells, &plot.cells.by_row, k) - (3 + 0.25 * i + 1 - 0.5 * j);
            double t = cells_value(target, &target->by_row, k);
            assert_close(t * plot.problem.scale, x, 1e-14 * fabs(x) + 1e-15);
            square += t * t;
        }
    assert_close(square / (double)target->count, 1, 1e-14);
    assert_close(plot.problem.norm, sqrt((double)target->count), 1e-12);
    assert_close(plot.problem.lambda, 0.5 * (double)target->count / (23 * 17), 1e-15);
    problem_set_ridge(&plot.problem, 2);
    assert_close(plot.problem.lambda, 2 * (double)target->count / (23 * 17), 1e-15);
    assert_close(plot.problem.ridge, 2, 0);
    offsets_free(context, &offsets);
    plot_free(&plot);
}

static void both_directions_hold_the_same(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (int precision = 0; precision < 2; precision++) {
        struct sowing sowing = sown;
        sowing.precision = precision == 0 ? FESCUE_DOUBLE : FESCUE_SINGLE;
        struct plot plot = plot_sow(context, &sowing, 0);
        const struct cells *target = &plot.problem.target;
        double *dense = dense_targets(&plot, NAN);
        uint64_t met = 0;
        for (uint32_t j = 0; j < target->columns; j++)
            for (uint64_t k = target->by_column.start[j]; k < target->by_column.start[j + 1]; k++, met++)
                assert_close(cells_value(target, &target->by_column, k),
                             dense[target->by_column.across[k] * target->columns + j], 0);
        assert_int_equal(met, target->count);
        free(dense);
        plot_free(&plot);
    }
}

/* Targets in single precision are those in double, rounded; all else is the same but for what rounding is said to be.
 */
static void targets_may_be_coarser_than_the_store(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct plot plot = plot_sow(context, &sown, 0);
    struct problem coarse;
    assert_status(context, problem_create_in(context, &plot.cells, NULL, 0.5, FESCUE_SINGLE, &coarse), FESCUE_OK);
    assert_int_equal(coarse.target.precision, FESCUE_SINGLE);
    assert_memory_equal(&coarse.scale, &plot.problem.scale, sizeof(double));
    assert_close(coarse.rounding, FLT_EPSILON, 0);
    for (int side = 0; side < 2; side++) {
        const struct half *fine = side == 0 ? &plot.problem.target.by_row : &plot.problem.target.by_column;
        const struct half *half = side == 0 ? &coarse.target.by_row : &coarse.target.by_column;
        for (uint64_t k = 0; k < plot.cells.count; k++)
            assert_close(cells_value(&coarse.target, half, k), (float)cells_value(&plot.problem.target, fine, k), 0);
    }
    problem_free(&coarse);
    plot_free(&plot);
}

/* Values whose squares overflow or vanish have the targets of the same table in ordinary units. */
static void extreme_units_do_not_matter(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const double units[] = {0x1p-500, 0x1p500, 0x1p-1030};
    const double plain[] = {1, -2, NAN, 4, 0.5, 3};
    struct plot reference = plot_dense(context, 2, 3, plain, 0);
    for (int u = 0; u < 3; u++) {
        double values[6];
        for (int k = 0; k < 6; k++)
            values[k] = plain[k] * units[u];
        struct plot plot = plot_dense(context, 2, 3, values, 0);
        for (uint64_t k = 0; k < 5; k++)
            assert_close(cells_value(&plot.problem.target, &plot.problem.target.by_row, k),
                         cells_value(&reference.problem.target, &reference.problem.target.by_row, k), 1e-14);
        plot_free(&plot);
    }
    plot_free(&reference);
}

static void a_table_of_zeros_keeps_scale_one(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const double zeros[] = {0, 0, NAN, 0, 0, 0};
    struct plot plot = plot_dense(context, 2, 3, zeros, 1);
    assert_close(plot.problem.scale, 1, 0);
    assert_close(plot.problem.norm, 0, 0);
    assert_close(plot.problem.lambda, 5.0 / 6, 1e-15);
    plot_free(&plot);
}

static void a_table_without_cells_is_a_problem_too(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const double nothing[] = {NAN, NAN};
    struct plot plot = plot_dense(context, 1, 2, nothing, 1);
    assert_close(plot.problem.scale, 1, 0);
    assert_close(plot.problem.lambda, 0, 0);
    plot_free(&plot);
}

/* Numbers near 1000 that differ by about one: what is left of them is as exact as 1000 is, not as 1 is. */
static void rounding_is_that_of_the_observed(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct plot plot = plot_sow(context, &sown, 0), shifted = {.context = context};
    struct offsets offsets = {.kind = FESCUE_OFFSETS_MEAN, .mean = 1000};
    double values[] = {1001, 999, 1001, 999};
    assert_close(plot.problem.rounding, DBL_EPSILON, 0);
    struct plot high = plot_dense(context, 2, 2, values, 0);
    assert_status(context, TAKE(context, 2, &offsets.row), FESCUE_OK);
    assert_status(context, TAKE(context, 2, &offsets.column), FESCUE_OK);
    assert_status(context, problem_create(context, &high.cells, &offsets, 0, &shifted.problem), FESCUE_OK);
    assert_close(shifted.problem.rounding / DBL_EPSILON, sqrt(1e6 + 1), 1e-9);
    problem_free(&shifted.problem);
    offsets_free(context, &offsets);
    plot_free(&high);
    plot_free(&plot);
}

static void the_bits_do_not_depend_on_the_workers(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing large = {.rows = 400, .columns = 90, .rank = 2, .share = 0.5, .noise = 1, .seed = 8};
    struct plot plot = plot_sow(context, &large, 0);
    for (size_t workers = 2; workers <= 7; workers += 5) {
        struct problem again;
        assert_status(context, team_resize(context, workers), FESCUE_OK);
        assert_status(context, problem_create(context, &plot.cells, NULL, 0, &again), FESCUE_OK);
        assert_memory_equal(&again.scale, &plot.problem.scale, sizeof(double));
        assert_memory_equal(again.target.by_row.value, plot.problem.target.by_row.value,
                            plot.cells.count * sizeof(double));
        assert_memory_equal(again.target.by_column.value, plot.problem.target.by_column.value,
                            plot.cells.count * sizeof(double));
        problem_free(&again);
    }
    plot_free(&plot);
}

static void lack_of_memory_leaves_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct plot plot = {.context = context, .sowing = sown};
    sow_cells(context, &sown, &plot.cells);
    uint64_t alive = fescue_memory_usage(context).blocks;
    for (uint64_t nth = 1;; nth++) {
        fault_plan(FAULT_TAKE, nth, false, 0);
        fescue_status status = problem_create(context, &plot.cells, NULL, 0, &plot.problem);
        bool met = fault_met();
        fault_clear();
        if (!met) {
            assert_status(context, status, FESCUE_OK);
            break;
        }
        assert_status(context, status, FESCUE_NO_MEMORY);
        assert_int_equal(fescue_memory_usage(context).blocks, alive);
        fescue_failure_clear(context);
    }
    plot_free(&plot);
    problem_free(NULL);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(the_targets_are_what_the_formula_says), BENCH_TEST(both_directions_hold_the_same),
        BENCH_TEST(targets_may_be_coarser_than_the_store), BENCH_TEST(extreme_units_do_not_matter),
        BENCH_TEST(a_table_of_zeros_keeps_scale_one),      BENCH_TEST(a_table_without_cells_is_a_problem_too),
        BENCH_TEST(rounding_is_that_of_the_observed),      BENCH_TEST(the_bits_do_not_depend_on_the_workers),
        BENCH_TEST(lack_of_memory_leaves_nothing),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
