/* SPDX-License-Identifier: MIT
 *
 * Errors of a model on hidden cells, against sums written out here.
 */
#include "judge/judge.h"
#include "support_table.h"

#include <math.h>

/* A model with every part different from zero: mean 2, row i 0.1 i, column j -0.2 j, and one component. */
struct fixture {
    struct model model;
    struct cells hidden;
};

static void fixture_create(fescue_context *context, const struct sowing *sowing, struct fixture *fixture)
{
    struct model *model = &fixture->model;
    *fixture = (struct fixture){.model = {.rows = sowing->rows,
                                          .columns = sowing->columns,
                                          .offsets = {.kind = FESCUE_OFFSETS_BOTH, .mean = 2},
                                          .bounds = {-INFINITY, INFINITY}}};
    assert_status(context, TAKE(context, sowing->rows, &model->offsets.row), FESCUE_OK);
    assert_status(context, TAKE(context, sowing->columns, &model->offsets.column), FESCUE_OK);
    assert_status(context, low_rank_create(context, sowing->rows, sowing->columns, 1, &model->low_rank), FESCUE_OK);
    model->low_rank.spectrum[0] = 3;
    for (uint32_t i = 0; i < sowing->rows; i++) {
        model->offsets.row[i] = 0.1 * i;
        MATRIX_AT(model->low_rank.left, i, 0) = sin(i + 1);
    }
    for (uint32_t j = 0; j < sowing->columns; j++) {
        model->offsets.column[j] = -0.2 * j;
        MATRIX_AT(model->low_rank.right, j, 0) = cos(j);
    }
    sow_cells(context, sowing, &fixture->hidden);
}

static void fixture_free(fescue_context *context, struct fixture *fixture)
{
    model_free(context, &fixture->model);
    cells_free(context, &fixture->hidden);
}

static double estimate_by_hand(uint32_t i, uint32_t j)
{
    return 2 + 0.1 * i - 0.2 * j + 3 * sin(i + 1) * cos(j);
}

static double clamped(double value, double low, double high)
{
    return value < low ? low : value > high ? high : value;
}

static void check_errors(fescue_context *context, const struct sowing *sowing, double low, double high)
{
    struct fixture fixture;
    struct errors errors;
    fixture_create(context, sowing, &fixture);
    fixture.model.bounds = (struct fescue_range){low, high};
    const struct half *half = &fixture.hidden.by_row;
    double *residuals = test_calloc(fixture.hidden.count, sizeof *residuals), square = 0, size = 0;
    assert_status(context, errors_measure(context, &fixture.hidden, &fixture.model, residuals, &errors), FESCUE_OK);
    assert_int_equal(errors.count, fixture.hidden.count);
    for (uint32_t i = 0; i < sowing->rows; i++)
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++) {
            double estimate = clamped(estimate_by_hand(i, half->across[k]), low, high);
            double error = estimate - cells_value(&fixture.hidden, half, k);
            assert_close(residuals[k], error, 1e-12);
            square += error * error;
            size += fabs(error);
        }
    assert_close(errors.rmse, sqrt(square / (double)errors.count), 1e-12);
    assert_close(errors.mae, size / (double)errors.count, 1e-12);
    test_free(residuals);
    fixture_free(context, &fixture);
}

static void sums_agree_with_those_written_out(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {.rows = 30, .columns = 25, .rank = 2, .share = 0.3, .seed = 1};
    check_errors(context, &sowing, -INFINITY, INFINITY);
    check_errors(context, &sowing, -1, 2.5);
    sowing.precision = FESCUE_SINGLE;
    check_errors(context, &sowing, -1, INFINITY);
}

/* 3 hidden cells with errors 1, -2 and 2: rmse sqrt(9/3), mae 5/3. */
static void a_worked_example(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    struct offsets offsets = {.kind = FESCUE_OFFSETS_MEAN, .mean = 10, .row = (double[2]){0}, .column = (double[2]){0}};
    struct model model = {.rows = 2, .columns = 2, .offsets = offsets, .bounds = {-INFINITY, INFINITY}};
    struct cells hidden;
    struct errors errors;
    assert_status(context, triplets_append(context, &list, 0, 0, 9), FESCUE_OK);
    assert_status(context, triplets_append(context, &list, 0, 1, 12), FESCUE_OK);
    assert_status(context, triplets_append(context, &list, 1, 1, 8), FESCUE_OK);
    assert_status(context, cells_build(context, 2, 2, &list, &hidden), FESCUE_OK);
    assert_status(context, low_rank_create(context, 2, 2, 0, &model.low_rank), FESCUE_OK);
    assert_status(context, errors_measure(context, &hidden, &model, NULL, &errors), FESCUE_OK);
    assert_int_equal(errors.count, 3);
    assert_close(errors.rmse, sqrt(3.0), 1e-15);
    assert_close(errors.mae, 5.0 / 3, 1e-15);
    low_rank_free(context, &model.low_rank);
    cells_free(context, &hidden);
    triplets_free(context, &list);
}

static void nothing_hidden_has_no_error(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {.rows = 3, .columns = 4, .rank = 1, .share = -1, .seed = 1};
    struct fixture fixture;
    struct errors errors = {7, 7, 7};
    fixture_create(context, &sowing, &fixture);
    assert_status(context, errors_measure(context, &fixture.hidden, &fixture.model, NULL, &errors), FESCUE_OK);
    assert_true(errors.count == 0 && errors.rmse == 0 && errors.mae == 0);
    fixture_free(context, &fixture);
}

static void a_number_that_is_none_poisons_the_error(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {.rows = 30, .columns = 25, .rank = 2, .share = 0.3, .seed = 1};
    struct fixture fixture;
    struct errors errors;
    fixture_create(context, &sowing, &fixture);
    fixture.model.low_rank.spectrum[0] = NAN;
    assert_status(context, errors_measure(context, &fixture.hidden, &fixture.model, NULL, &errors), FESCUE_OK);
    assert_true(isnan(errors.rmse) && isnan(errors.mae));
    fixture_free(context, &fixture);
}

static void threads_do_not_change_a_bit(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {.rows = 500, .columns = 300, .rank = 2, .share = 0.3, .seed = 2};
    static const size_t workers[] = {1, 2, 7};
    struct fixture fixture;
    struct errors errors[3];
    fixture_create(context, &sowing, &fixture);
    for (int w = 0; w < 3; w++) {
        assert_status(context, team_resize(context, workers[w]), FESCUE_OK);
        assert_status(context, errors_measure(context, &fixture.hidden, &fixture.model, NULL, &errors[w]), FESCUE_OK);
    }
    assert_memory_equal(&errors[0], &errors[1], sizeof errors[0]);
    assert_memory_equal(&errors[0], &errors[2], sizeof errors[0]);
    fixture_free(context, &fixture);
}

static void a_lack_of_memory_leaks_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {.rows = 30, .columns = 25, .rank = 2, .share = 0.3, .seed = 1};
    struct fixture fixture;
    struct errors errors;
    fixture_create(context, &sowing, &fixture);
    uint64_t alive = fescue_memory_usage(context).blocks;
    fault_plan(FAULT_TAKE, 1, false, 0);
    assert_status(context, errors_measure(context, &fixture.hidden, &fixture.model, NULL, &errors), FESCUE_NO_MEMORY);
    fault_clear();
    assert_int_equal(fescue_memory_usage(context).blocks, alive);
    fixture_free(context, &fixture);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(sums_agree_with_those_written_out), BENCH_TEST(a_worked_example),
        BENCH_TEST(nothing_hidden_has_no_error),       BENCH_TEST(a_number_that_is_none_poisons_the_error),
        BENCH_TEST(threads_do_not_change_a_bit),       BENCH_TEST(a_lack_of_memory_leaks_nothing),
    };
    return cmocka_run_group_tests_name("errors", tests, NULL, NULL);
}
