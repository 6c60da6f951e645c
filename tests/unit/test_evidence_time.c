/* SPDX-License-Identifier: MIT
 *
 * The evidence fit of tables whose rows or columns are times, on tables sown here: components and a residual of every
 * column that are AR(1), noise, holes at random and rows in which nothing was seen.
 */
#include "solve/solve.h"
#include "support_solve.h"

enum { STEPS = 240, SERIES = 16, RANK = 2, OUT_FROM = 100, OUT_TO = 104 };

/* truth: what is to be found, without noise. */
struct weather {
    double truth[STEPS][SERIES], value[STEPS][SERIES], sigma[SERIES];
    bool seen[STEPS][SERIES];
};

static double walk(struct random_stream *stream, double before, double correlation)
{
    return correlation * before + sqrt(1 - correlation * correlation) * random_normal(stream);
}

/* correlation of components and residuals from one step to the next; residual: their size beside components of size
   one; spread: the largest noise over the least. */
static void field_sow(struct weather *field, uint32_t seed, double correlation, double residual, double spread)
{
    struct random_stream stream = random_open(seed, RANDOM_TEST, 1);
    double right[SERIES][RANK], left[RANK], rest[SERIES];
    for (size_t j = 0; j < SERIES; j++) {
        for (size_t k = 0; k < RANK; k++)
            right[j][k] = random_normal(&stream);
        rest[j] = random_normal(&stream);
        field->sigma[j] = 0.4 / sqrt(spread) * pow(spread, (double)j / (SERIES - 1));
    }
    for (size_t k = 0; k < RANK; k++)
        left[k] = random_normal(&stream);
    for (size_t t = 0; t < STEPS; t++) {
        for (size_t k = 0; k < RANK; k++)
            left[k] = walk(&stream, left[k], correlation);
        for (size_t j = 0; j < SERIES; j++) {
            rest[j] = walk(&stream, rest[j], correlation);
            field->truth[t][j] = 3 + residual * rest[j];
            for (size_t k = 0; k < RANK; k++)
                field->truth[t][j] += left[k] * right[j][k];
            field->value[t][j] = field->truth[t][j] + field->sigma[j] * random_normal(&stream);
            field->seen[t][j] = random_uniform(&stream) < 0.6 && (t < OUT_FROM || t >= OUT_TO);
        }
    }
}

/* The table, its lines in the given order (NULL: that of time), times as rows or as columns; and its axis. */
static void field_lay(fescue_context *context, const struct weather *field, const uint32_t *order, bool by_rows,
                      struct cells *cells, struct time_axis *axis)
{
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    *axis = (struct time_axis){.along = by_rows ? TIME_ROWS : TIME_COLUMNS, .count = STEPS, .is_sorted = order == NULL};
    assert_status(context, TAKE(context, STEPS, &axis->at), FESCUE_OK);
    assert_status(context, TAKE(context, STEPS, &axis->order), FESCUE_OK);
    for (uint32_t t = 0; t < STEPS; t++) {
        uint32_t line = order != NULL ? order[t] : t;
        axis->at[line] = t;
        axis->order[t] = line;
        for (uint32_t j = 0; j < SERIES; j++)
            if (field->seen[t][j])
                assert_status(
                    context,
                    triplets_append(context, &list, by_rows ? line : j, by_rows ? j : line, field->value[t][j]),
                    FESCUE_OK);
    }
    assert_status(context, cells_build(context, by_rows ? STEPS : SERIES, by_rows ? SERIES : STEPS, &list, cells),
                  FESCUE_OK);
    triplets_free(context, &list);
}

static struct evidence_request request_of(const struct time_axis *axis)
{
    return (struct evidence_request){.offsets = FESCUE_OFFSETS_BOTH,
                                     .noise = EVIDENCE_NOISE_EQUAL,
                                     .rank = 6,
                                     .rank_most = 6,
                                     .seed = 1,
                                     .rounds = 60,
                                     .change = 1e-6,
                                     .time = axis};
}

static struct evidence_result learn(fescue_context *context, const struct cells *cells,
                                    const struct evidence_request *request)
{
    struct evidence_result fit;
    assert_status(context, evidence_learn(context, cells, request, &fit), FESCUE_OK);
    return fit;
}

/* RMSE against the truth over the unseen cells of steps from .. to-1, and gives the fit back. */
static double error_of(fescue_context *context, struct evidence_result *fit, const struct weather *field,
                       const uint32_t *order, size_t from, size_t to)
{
    double square = 0, count = 0;
    for (uint32_t t = (uint32_t)from; t < to; t++)
        for (uint32_t j = 0; j < SERIES; j++) {
            uint32_t line = order != NULL ? order[t] : t;
            bool by_rows = fit->model.rows == STEPS;
            double e = model_estimate(&fit->model, by_rows ? line : j, by_rows ? j : line) - field->truth[t][j];
            square += field->seen[t][j] ? 0 : e * e;
            count += !field->seen[t][j];
        }
    evidence_result_free(context, fit);
    return sqrt(square / count);
}

static double error_with(fescue_context *context, const struct weather *field, const uint32_t *order, bool by_rows,
                         bool has_time)
{
    struct cells cells;
    struct time_axis axis;
    field_lay(context, field, order, by_rows, &cells, &axis);
    struct evidence_request request = request_of(has_time ? &axis : NULL);
    struct evidence_result fit = learn(context, &cells, &request);
    double error = error_of(context, &fit, field, order, 0, STEPS);
    cells_free(context, &cells);
    time_axis_free(context, &axis);
    return error;
}

static void shuffle(uint32_t *order, uint32_t seed)
{
    struct random_stream stream = random_open(seed, RANDOM_TEST, 2);
    for (uint32_t t = 0; t < STEPS; t++)
        order[t] = t;
    for (uint32_t t = STEPS; t-- > 1;) {
        uint32_t other = (uint32_t)random_below(&stream, t + 1), kept = order[t];
        order[t] = order[other];
        order[other] = kept;
    }
}

static struct weather *field_new(uint32_t seed, double correlation, double residual, double spread)
{
    struct weather *field = calloc(1, sizeof *field);
    assert_non_null(field);
    field_sow(field, seed, correlation, residual, spread);
    return field;
}

static void time_lowers_the_error(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct weather *field = field_new(1, 0.9, 0.8, 1);
    double with = error_with(context, field, NULL, true, true), without = error_with(context, field, NULL, true, false);
    assert_true(with < 0.75 * without);
    free(field);
}

/* Rows in no order, and times along the columns, give the same error: the same posterior, reached in another order. */
static void lines_in_any_order_and_either_way(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct weather *field = field_new(2, 0.9, 0.5, 1);
    uint32_t order[STEPS];
    shuffle(order, 3);
    double plain = error_with(context, field, NULL, true, true);
    assert_close(error_with(context, field, order, true, true), plain, 1e-3 * plain);
    assert_close(error_with(context, field, NULL, false, true), plain, 0.02 * plain);
    assert_close(error_with(context, field, order, false, true), plain, 0.02 * plain);
    free(field);
}

/* Where nothing hangs together in time, the axis does no harm. */
static void time_without_meaning_loses_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct weather *field = field_new(4, 0, 0, 1);
    double with = error_with(context, field, NULL, true, true), without = error_with(context, field, NULL, true, false);
    assert_true(with < 1.01 * without);
    free(field);
}

/* Steps in which nothing was seen follow their neighbours. The sown components keep 0.9 of themselves from one step to
   the next, so that two steps from the next seen one about 1 - 0.9^4 = 0.35 of their variance is unknown, and the rest
   is known from both sides. */
static void steps_without_cells_follow_their_neighbours(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct weather *field = field_new(5, 0.97, 0.3, 1);
    struct cells cells;
    struct time_axis axis;
    field_lay(context, field, NULL, true, &cells, &axis);
    struct evidence_request request = request_of(&axis);
    struct evidence_result fit = learn(context, &cells, &request);
    assert_int_equal(fit.model.time.along, TIME_ROWS);
    assert_int_equal(fit.model.time.components, fit.model.low_rank.rank + 1);
    double with = error_of(context, &fit, field, NULL, OUT_FROM, OUT_TO);
    request.time = NULL;
    fit = learn(context, &cells, &request);
    assert_true(with < 0.5 * error_of(context, &fit, field, NULL, OUT_FROM, OUT_TO));
    cells_free(context, &cells);
    time_axis_free(context, &axis);
    free(field);
}

/* Noise from 0.3 to 3 times the middle: within 1.03 of the fit that is told it, by the weights of the cells. */
static void noise_of_series_is_learnt(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct weather *field = field_new(6, 0.8, 0.3, 10);
    struct cells cells;
    struct time_axis axis;
    double *weight;
    field_lay(context, field, NULL, true, &cells, &axis);
    struct evidence_request request = request_of(&axis);
    request.noise = EVIDENCE_NOISE_COLUMNS;
    struct evidence_result fit = learn(context, &cells, &request);
    double learnt = error_of(context, &fit, field, NULL, 0, STEPS);
    assert_status(context, TAKE(context, cells.count, &weight), FESCUE_OK);
    for (uint64_t k = 0; k < cells.count; k++)
        weight[k] = pow(field->sigma[cells.by_row.across[k]], -2);
    assert_status(context, cells_weigh(context, &cells, weight), FESCUE_OK);
    request.noise = EVIDENCE_NOISE_EQUAL;
    fit = learn(context, &cells, &request);
    assert_true(learnt < 1.03 * error_of(context, &fit, field, NULL, 0, STEPS));
    GIVE(context, &weight);
    cells_free(context, &cells);
    time_axis_free(context, &axis);
    free(field);
}

/* From a model with a time part a few rounds on other cells are as good as learning from nothing. */
static void a_fit_starts_from_another(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct weather *field = field_new(7, 0.9, 0.5, 1);
    struct cells cells, some;
    struct time_axis axis;
    field_lay(context, field, NULL, true, &cells, &axis);
    struct evidence_request request = request_of(&axis);
    struct evidence_result whole = learn(context, &cells, &request), again;
    time_axis_free(context, &axis);
    cells_free(context, &cells);
    for (size_t t = 0; t < STEPS; t += 5)
        field->seen[t][t % SERIES] = false;
    field_lay(context, field, NULL, true, &some, &axis);
    request.time = &axis;
    struct evidence_result cold = learn(context, &some, &request);
    request.rank = request.rank_most = whole.model.low_rank.rank;
    request.rounds = 10;
    assert_status(context, evidence_fit(context, &some, &request, &whole.model, &again), FESCUE_OK);
    double warm = error_of(context, &again, field, NULL, 0, STEPS);
    assert_close(warm, error_of(context, &cold, field, NULL, 0, STEPS), 0.02 * warm);
    evidence_result_free(context, &whole);
    cells_free(context, &some);
    time_axis_free(context, &axis);
    free(field);
}

static void same_bits_for_any_number_of_workers(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct weather *field = field_new(8, 0.9, 0.5, 4);
    struct cells cells;
    struct time_axis axis;
    uint32_t order[STEPS];
    shuffle(order, 9);
    field_lay(context, field, order, true, &cells, &axis);
    struct evidence_request request = request_of(&axis);
    struct evidence_result first = {0};
    request.noise = EVIDENCE_NOISE_COLUMNS;
    const size_t workers[] = {1, 2, 5};
    for (size_t w = 0; w < 3; w++) {
        assert_status(context, team_resize(context, workers[w]), FESCUE_OK);
        struct evidence_result fit = learn(context, &cells, &request);
        if (w == 0) {
            first = fit;
            continue;
        }
        assert_memory_equal(fit.model.offsets.row, first.model.offsets.row, STEPS * sizeof(double));
        assert_memory_equal(fit.model.time.mean, first.model.time.mean, cells.count * sizeof(double));
        assert_memory_equal(fit.model.time.law, first.model.time.law, SERIES * sizeof *first.model.time.law);
        evidence_result_free(context, &fit);
    }
    evidence_result_free(context, &first);
    cells_free(context, &cells);
    time_axis_free(context, &axis);
    free(field);
}

static uint64_t calls_for(fescue_context *context, const struct cells *cells, const struct evidence_result *from,
                          const struct time_axis *axis, uint64_t rounds)
{
    struct evidence_request request = request_of(axis);
    struct evidence_result fit;
    request.rank = from->model.low_rank.rank;
    request.rounds = rounds;
    uint64_t before = fescue_memory_usage(context).calls;
    assert_status(context, evidence_fit(context, cells, &request, &from->model, &fit), FESCUE_OK);
    uint64_t calls = fescue_memory_usage(context).calls - before;
    evidence_result_free(context, &fit);
    return calls;
}

static void rounds_allocate_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct weather *field = field_new(10, 0.9, 0.5, 1);
    struct cells cells;
    struct time_axis axis;
    field_lay(context, field, NULL, true, &cells, &axis);
    struct evidence_request request = request_of(&axis);
    struct evidence_result fit = learn(context, &cells, &request);
    assert_int_equal(calls_for(context, &cells, &fit, &axis, 2), calls_for(context, &cells, &fit, &axis, 8));
    evidence_result_free(context, &fit);
    cells_free(context, &cells);
    time_axis_free(context, &axis);
    free(field);
}

static void failing_memory_leaks_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct weather *field = field_new(11, 0.9, 0.5, 1);
    struct cells cells;
    struct time_axis axis;
    uint32_t order[STEPS];
    shuffle(order, 12);
    field_lay(context, field, order, true, &cells, &axis);
    struct evidence_request request = request_of(&axis);
    request.rank = request.rank_most = 2;
    request.rounds = 2;
    evidence_refuse_memory(context, &cells, &request);
    cells_free(context, &cells);
    time_axis_free(context, &axis);
    free(field);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(time_lowers_the_error),
        BENCH_TEST(lines_in_any_order_and_either_way),
        BENCH_TEST(time_without_meaning_loses_nothing),
        BENCH_TEST(steps_without_cells_follow_their_neighbours),
        BENCH_TEST(noise_of_series_is_learnt),
        BENCH_TEST(a_fit_starts_from_another),
        BENCH_TEST(same_bits_for_any_number_of_workers),
        BENCH_TEST(rounds_allocate_nothing),
        BENCH_TEST(failing_memory_leaks_nothing),
    };
    return cmocka_run_group_tests_name("evidence_time", tests, NULL, NULL);
}
