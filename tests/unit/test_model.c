/* SPDX-License-Identifier: MIT
 *
 * Estimates: offsets, low-rank part and bounds together.
 */
#include "support_solve.h"

static struct model model_made(fescue_context *context)
{
    struct model model = {.rows = 3, .columns = 2, .bounds = {-INFINITY, INFINITY}};
    model.offsets = (struct offsets){.kind = FESCUE_OFFSETS_BOTH, .mean = 10};
    assert_status(context, TAKE(context, 3, &model.offsets.row), FESCUE_OK);
    assert_status(context, TAKE(context, 2, &model.offsets.column), FESCUE_OK);
    model.offsets.row[2] = 0.5;
    model.offsets.column[1] = -2;
    assert_status(context, low_rank_create(context, 3, 2, 1, &model.low_rank), FESCUE_OK);
    MATRIX_AT(model.low_rank.left, 2, 0) = 0.6;
    MATRIX_AT(model.low_rank.right, 1, 0) = 0.8;
    model.low_rank.spectrum[0] = 5;
    return model;
}

/* By hand: 10 + 0.5 - 2 + 0.6 * 5 * 0.8 = 10.9. */
static void an_estimate_is_the_sum_of_the_parts(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct model model = model_made(context);
    assert_close(model_estimate(&model, 2, 1), 10.9, 1e-14);
    assert_close(model_estimate(&model, 0, 0), 10, 0);
    assert_close(model_estimate(&model, 2, 0), 10.5, 0);
    model_free(context, &model);
}

static void an_estimate_stays_within_the_bounds(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct model model = model_made(context);
    model.bounds = (struct fescue_range){9, 10.2};
    assert_close(model_estimate(&model, 2, 1), 10.2, 0);
    assert_close(model_estimate(&model, 0, 1), 9, 0);
    assert_close(model_estimate(&model, 0, 0), 10, 0);
    model_free(context, &model);
}

static void rank_zero_is_offsets_alone(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct model model = model_made(context);
    low_rank_free(context, &model.low_rank);
    assert_status(context, low_rank_create(context, 3, 2, 0, &model.low_rank), FESCUE_OK);
    assert_close(model_estimate(&model, 2, 1), 8.5, 0);
    model_free(context, &model);
    model_free(context, &model);
    model_free(context, NULL);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(an_estimate_is_the_sum_of_the_parts),
        BENCH_TEST(an_estimate_stays_within_the_bounds),
        BENCH_TEST(rank_zero_is_offsets_alone),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
