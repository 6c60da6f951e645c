/* SPDX-License-Identifier: MIT
 *
 * Offsets again, to what a low-rank part leaves: against offsets_fit on a table with that part taken out by hand, and
 * against the effects that were sown.
 */
#include "judge/judge_internal.h"
#include "support_table.h"

#include <math.h>

enum { ROWS = 120, COLUMNS = 80 };
static const struct sowing sowing = {
    .rows = ROWS, .columns = COLUMNS, .rank = 2, .share = 0.3, .noise = 0.1, .seed = 5};

static double row_effect(uint32_t i)
{
    return 2 * sin(i);
}

static double column_effect(uint32_t j)
{
    return cos(3 * j);
}

struct fixture {
    struct cells cells;    /* mean 7, effects, low rank, noise */
    struct cells bare;     /* the same without the low-rank part */
    struct low_rank point; /* that part; its left and right are not orthonormal, which nothing here needs */
};

static double left_at(uint32_t i, size_t k)
{
    return k == 0 ? cos(0.7 * i) : sin(1.3 * i + 1);
}

static double right_at(uint32_t j, size_t k)
{
    return k == 0 ? sin(2.1 * j) : cos(0.9 * j);
}

static double low_rank_at(uint32_t i, uint32_t j)
{
    return 1.5 * left_at(i, 0) * right_at(j, 0) + 0.75 * left_at(i, 1) * right_at(j, 1);
}

static void fixture_create(fescue_context *context, enum fescue_precision precision, struct fixture *fixture)
{
    struct triplet_list noise, list = {.precision = precision}, bare = {.precision = precision};
    struct sowing pattern = sowing;
    pattern.rank = 0;
    sow_triplets(context, &pattern, &noise);
    for (uint64_t k = 0; k < noise.count; k++) {
        uint32_t i = noise.row[k], j = noise.column[k];
        double value = 7 + row_effect(i) + column_effect(j) + triplet_value(&noise, k);
        assert_status(context, triplets_append(context, &bare, i, j, value), FESCUE_OK);
        assert_status(context, triplets_append(context, &list, i, j, value + low_rank_at(i, j)), FESCUE_OK);
    }
    assert_status(context, cells_build(context, ROWS, COLUMNS, &list, &fixture->cells), FESCUE_OK);
    assert_status(context, cells_build(context, ROWS, COLUMNS, &bare, &fixture->bare), FESCUE_OK);
    assert_status(context, low_rank_create(context, ROWS, COLUMNS, 2, &fixture->point), FESCUE_OK);
    fixture->point.spectrum[0] = 1.5;
    fixture->point.spectrum[1] = 0.75;
    for (size_t k = 0; k < 2; k++) {
        for (uint32_t i = 0; i < ROWS; i++)
            MATRIX_AT(fixture->point.left, i, k) = left_at(i, k);
        for (uint32_t j = 0; j < COLUMNS; j++)
            MATRIX_AT(fixture->point.right, j, k) = right_at(j, k);
    }
    triplets_free(context, &noise);
    triplets_free(context, &list);
    triplets_free(context, &bare);
}

static void fixture_free(fescue_context *context, struct fixture *fixture)
{
    low_rank_free(context, &fixture->point);
    cells_free(context, &fixture->cells);
    cells_free(context, &fixture->bare);
}

/* The largest difference of the estimates of two sets of offsets, over the whole table. */
static double offsets_apart(const struct offsets *a, const struct offsets *b)
{
    double most = 0;
    for (uint32_t i = 0; i < ROWS; i++)
        for (uint32_t j = 0; j < COLUMNS; j++)
            most = fmax(most, fabs(offsets_at(a, i, j) - offsets_at(b, i, j)));
    return most;
}

static const enum fescue_offsets kinds[] = {FESCUE_OFFSETS_BOTH, FESCUE_OFFSETS_ROWS, FESCUE_OFFSETS_COLUMNS,
                                            FESCUE_OFFSETS_MEAN, FESCUE_OFFSETS_NONE};

static void check_at_once(fescue_context *context, enum fescue_precision precision, double tolerance)
{
    struct fixture fixture;
    fixture_create(context, precision, &fixture);
    for (size_t k = 0; k < sizeof kinds / sizeof kinds[0]; k++) {
        struct offsets again, by_hand;
        assert_status(context, refit_offsets(context, &fixture.cells, kinds[k], &fixture.point, &again), FESCUE_OK);
        assert_status(context, offsets_fit(context, &fixture.bare, kinds[k], &by_hand), FESCUE_OK);
        assert_int_equal(again.kind, kinds[k]);
        assert_true(offsets_apart(&again, &by_hand) <= tolerance);
        offsets_free(context, &again);
        offsets_free(context, &by_hand);
    }
    fixture_free(context, &fixture);
}

static void at_once_is_the_fit_of_the_rest(void **state)
{
    check_at_once(bench_of(state)->context, FESCUE_DOUBLE, 1e-11);
    check_at_once(bench_of(state)->context, FESCUE_SINGLE, 1e-5);
}

static void a_point_of_rank_nothing_changes_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct fixture fixture;
    struct low_rank nothing;
    struct offsets again, plain;
    fixture_create(context, FESCUE_DOUBLE, &fixture);
    assert_status(context, low_rank_create(context, ROWS, COLUMNS, 0, &nothing), FESCUE_OK);
    assert_status(context, refit_offsets(context, &fixture.cells, FESCUE_OFFSETS_BOTH, &nothing, &again), FESCUE_OK);
    assert_status(context, offsets_fit(context, &fixture.cells, FESCUE_OFFSETS_BOTH, &plain), FESCUE_OK);
    assert_true(offsets_apart(&again, &plain) == 0);
    offsets_free(context, &again);
    offsets_free(context, &plain);
    low_rank_free(context, &nothing);
    fixture_free(context, &fixture);
}

/* Sweeps begin at the offsets of the whole and end, after some rounds, at those of the rest. */
static void sweeps_go_where_the_fit_of_the_rest_is(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct fixture fixture;
    fixture_create(context, FESCUE_DOUBLE, &fixture);
    for (size_t k = 0; k < sizeof kinds / sizeof kinds[0]; k++) {
        struct offsets swept, goal;
        assert_status(context, offsets_fit(context, &fixture.cells, kinds[k], &swept), FESCUE_OK);
        assert_status(context, offsets_fit(context, &fixture.bare, kinds[k], &goal), FESCUE_OK);
        double before = offsets_apart(&swept, &goal);
        assert_status(context, refit_sweep(context, &fixture.cells, &fixture.point, &swept), FESCUE_OK);
        double once = offsets_apart(&swept, &goal);
        assert_true(kinds[k] == FESCUE_OFFSETS_NONE ? before == 0 && once == 0 : once < 0.4 * before);
        for (int round = 0; round < 10; round++)
            assert_status(context, refit_sweep(context, &fixture.cells, &fixture.point, &swept), FESCUE_OK);
        /* What is left is the difference between ridges by moments and by maximum likelihood. */
        assert_true(offsets_apart(&swept, &goal) <= 0.05 * before);
        assert_int_equal(swept.kind, kinds[k]);
        offsets_free(context, &swept);
        offsets_free(context, &goal);
    }
    fixture_free(context, &fixture);
}

/* Clean: 200 effects out of some 2900 cells with noise 0.1, sqrt(200/2900) 0.1 = 0.026. Fitted to the whole, the effect
   of a row of 24 cells takes in 1/24 of the low-rank part's mean square of 0.7, that of a column 1/36: 0.22 together.
 */
static void the_effects_sown_come_back(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct fixture fixture;
    struct offsets whole, rest;
    double error[2] = {0, 0};
    fixture_create(context, FESCUE_DOUBLE, &fixture);
    assert_status(context, offsets_fit(context, &fixture.cells, FESCUE_OFFSETS_BOTH, &whole), FESCUE_OK);
    assert_status(context, refit_offsets(context, &fixture.cells, FESCUE_OFFSETS_BOTH, &fixture.point, &rest),
                  FESCUE_OK);
    for (uint32_t i = 0; i < ROWS; i++)
        for (uint32_t j = 0; j < COLUMNS; j++) {
            double truth = 7 + row_effect(i) + column_effect(j);
            error[0] += pow(offsets_at(&whole, i, j) - truth, 2) / (ROWS * COLUMNS);
            error[1] += pow(offsets_at(&rest, i, j) - truth, 2) / (ROWS * COLUMNS);
        }
    assert_true(sqrt(error[1]) < 0.04);
    assert_true(sqrt(error[0]) > 0.15);
    offsets_free(context, &whole);
    offsets_free(context, &rest);
    fixture_free(context, &fixture);
}

static void threads_do_not_change_a_bit(void **state)
{
    fescue_context *context = bench_of(state)->context;
    static const size_t workers[] = {1, 2, 7};
    struct fixture fixture;
    struct offsets swept[3];
    fixture_create(context, FESCUE_DOUBLE, &fixture);
    for (int w = 0; w < 3; w++) {
        assert_status(context, team_resize(context, workers[w]), FESCUE_OK);
        assert_status(context, offsets_fit(context, &fixture.cells, FESCUE_OFFSETS_BOTH, &swept[w]), FESCUE_OK);
        assert_status(context, refit_sweep(context, &fixture.cells, &fixture.point, &swept[w]), FESCUE_OK);
    }
    for (int w = 1; w < 3; w++) {
        assert_true(swept[w].mean == swept[0].mean && swept[w].row_ridge == swept[0].row_ridge);
        assert_memory_equal(swept[w].row, swept[0].row, ROWS * sizeof(double));
        assert_memory_equal(swept[w].column, swept[0].column, COLUMNS * sizeof(double));
    }
    for (int w = 0; w < 3; w++)
        offsets_free(context, &swept[w]);
    fixture_free(context, &fixture);
}

static void a_lack_of_memory_leaks_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct fixture fixture;
    fixture_create(context, FESCUE_DOUBLE, &fixture);
    uint64_t alive = fescue_memory_usage(context).blocks;
    bool met = true;
    for (uint64_t n = 1; met; n++) {
        struct offsets offsets = {0};
        fault_plan(FAULT_TAKE, n, false, 0);
        fescue_status status = refit_offsets(context, &fixture.cells, FESCUE_OFFSETS_BOTH, &fixture.point, &offsets);
        if (status == FESCUE_OK)
            status = refit_sweep(context, &fixture.cells, &fixture.point, &offsets);
        met = fault_met();
        assert_status(context, status, met ? FESCUE_NO_MEMORY : FESCUE_OK);
        offsets_free(context, &offsets);
        assert_int_equal(fescue_memory_usage(context).blocks, alive);
        fescue_failure_clear(context);
    }
    fault_clear();
    fixture_free(context, &fixture);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(at_once_is_the_fit_of_the_rest),
        BENCH_TEST(a_point_of_rank_nothing_changes_nothing),
        BENCH_TEST(sweeps_go_where_the_fit_of_the_rest_is),
        BENCH_TEST(the_effects_sown_come_back),
        BENCH_TEST(threads_do_not_change_a_bit),
        BENCH_TEST(a_lack_of_memory_leaks_nothing),
    };
    return cmocka_run_group_tests_name("refit", tests, NULL, NULL);
}
