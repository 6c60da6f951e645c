/* SPDX-License-Identifier: MIT
 *
 * The evidence fit with near columns, and what tells one piece of its work from another.
 */
#include "solve/evidence_internal.h"
#include "support_solve.h"

enum { M = 40, N = 12 };

/* Columns on a line, the loadings a slow wave along it; the last two columns have no cells. */
static void line_sow(fescue_context *context, uint32_t pairs, struct cells *cells, struct nearness *near)
{
    struct random_stream random = random_open(6, RANDOM_TEST, 3);
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    for (uint32_t i = 0; i < M; i++) {
        double left = random_normal(&random);
        for (uint32_t j = 0; j < N; j++) {
            double value = left * (2 + sin(0.3 * j)) + 0.2 * random_normal(&random);
            if (j < N - 2 && random_uniform(&random) < 0.7)
                assert_status(context, triplets_append(context, &list, i, j, value), FESCUE_OK);
        }
    }
    assert_status(context, cells_build(context, M, N, &list, cells), FESCUE_OK);
    triplets_free(context, &list);
    *near = (struct nearness){.columns = N, .count = pairs};
    assert_status(context, TAKE(context, pairs, &near->high), FESCUE_OK);
    assert_status(context, TAKE(context, pairs, &near->low), FESCUE_OK);
    assert_status(context, TAKE(context, pairs, &near->strength), FESCUE_OK);
    for (uint32_t k = 0; k < pairs; k++) {
        near->low[k] = k;
        near->high[k] = k + 1;
        near->strength[k] = 0.5;
    }
}

static struct evidence_request request_of(const struct nearness *near)
{
    return (struct evidence_request){.offsets = FESCUE_OFFSETS_MEAN,
                                     .noise = EVIDENCE_NOISE_EQUAL,
                                     .rank = 2,
                                     .rank_most = 2,
                                     .seed = 1,
                                     .rounds = 30,
                                     .change = 1e-6,
                                     .near = near};
}

/* A column without cells has no loadings of its own; with near columns it has about those of the last that has cells,
   less with every step away. */
static void columns_without_cells_go_with_near_ones(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    struct nearness near;
    line_sow(context, N - 1, &cells, &near);
    struct evidence_request request = request_of(&near);
    struct evidence_result fit;
    assert_status(context, evidence_learn(context, &cells, &request, &fit), FESCUE_OK);
    assert_true(fit.model.near.is_there && fit.model.near.components > 0.1);
    assert_int_equal(fit.model.low_rank.rank, 1);
    struct matrix right = fit.model.low_rank.right;
    double last = MATRIX_AT(right, N - 3, 0), one = MATRIX_AT(right, N - 2, 0), two = MATRIX_AT(right, N - 1, 0);
    assert_in_range((int)(100 * one / last), 50, 99);
    assert_in_range((int)(100 * two / one), 50, 99);
    evidence_result_free(context, &fit);
    request.near = NULL;
    assert_status(context, evidence_learn(context, &cells, &request, &fit), FESCUE_OK);
    assert_close(MATRIX_AT(fit.model.low_rank.right, N - 2, 0), 0, 1e-12);
    assert_false(fit.model.near.is_there);
    evidence_result_free(context, &fit);
    cells_free(context, &cells);
    nearness_free(context, &near);
}

/* A finished piece of work is not taken for one with another clock, other weights or other near columns. */
static void pieces_of_work_are_told_apart(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    struct nearness near;
    line_sow(context, N - 1, &cells, &near);
    struct evidence_request request = request_of(NULL);
    double at[M], row[M] = {0}, column[N] = {0}, *weight = NULL;
    struct time_axis axis = {.along = TIME_ROWS, .count = M, .at = at};
    struct kalman_law law[N] = {{0}};
    double noise[N] = {0};
    struct model start = {.rows = M, .columns = N, .offsets = {.row = row, .column = column}};
    uint64_t digest[8];
    for (size_t t = 0; t < M; t++)
        at[t] = (double)t;
    digest[0] = evidence_digest(&cells, &request, &start);
    assert_int_equal(evidence_digest(&cells, &request, &start), digest[0]);
    request.time = &axis;
    digest[1] = evidence_digest(&cells, &request, &start);
    at[M - 1] += 0.5;
    digest[2] = evidence_digest(&cells, &request, &start);
    start.time = (struct time_part){.along = TIME_ROWS, .series = N, .law = law, .noise = noise};
    digest[3] = evidence_digest(&cells, &request, &start);
    law[3].variance = 1;
    digest[4] = evidence_digest(&cells, &request, &start);
    request.near = &near;
    digest[5] = evidence_digest(&cells, &request, &start);
    near.strength[2] *= 2;
    digest[6] = evidence_digest(&cells, &request, &start);
    assert_status(context, TAKE(context, cells.count, &weight), FESCUE_OK);
    for (uint64_t k = 0; k < cells.count; k++)
        weight[k] = 1 + (double)(k % 2);
    assert_status(context, cells_weigh(context, &cells, weight), FESCUE_OK);
    digest[7] = evidence_digest(&cells, &request, &start);
    for (size_t a = 0; a < 8; a++)
        for (size_t b = 0; b < a; b++)
            assert_true(digest[a] != digest[b]);
    GIVE(context, &weight);
    cells_free(context, &cells);
    nearness_free(context, &near);
}

static void failing_memory_leaks_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    struct nearness near;
    line_sow(context, N - 1, &cells, &near);
    struct evidence_request request = request_of(&near);
    request.rounds = 6;
    evidence_refuse_memory(context, &cells, &request);
    cells_free(context, &cells);
    nearness_free(context, &near);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(columns_without_cells_go_with_near_ones),
        BENCH_TEST(pieces_of_work_are_told_apart),
        BENCH_TEST(failing_memory_leaks_nothing),
    };
    return cmocka_run_group_tests_name("evidence_near", tests, NULL, NULL);
}
