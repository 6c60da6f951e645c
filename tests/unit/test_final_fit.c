/* SPDX-License-Identifier: MIT
 *
 * The fit on all cells: what it may and may not do with the point that choosing ended with.
 */
#include "job/job_internal.h"
#include "support_table.h"

#include <math.h>
#include <string.h>

static const struct sowing sowing = {.rows = 80, .columns = 50, .rank = 2, .share = 0.4, .noise = 0.1, .seed = 9};
static const double ridge = 0.01;

/* The fit and what it was asked. */
struct trial {
    fescue_context *context;
    struct cells cells;
    struct fescue_options options;
    struct choice choice;
    struct final_request request;
    struct final_fit fit;
};

enum start { START_ONE, START_OTHER, START_HUGE, START_ZERO, STARTS };

static void start_make(struct trial *trial, enum start start)
{
    static const double sizes[STARTS] = {[START_ONE] = 1, [START_OTHER] = 1, [START_HUGE] = 1e4, [START_ZERO] = 0};
    struct random_stream random = random_open(1, RANDOM_TEST, start);
    struct low_rank *point = &trial->choice.start;
    struct arena arena = {0};
    assert_status(trial->context, low_rank_create(trial->context, sowing.rows, sowing.columns, 2, point), FESCUE_OK);
    arena_reserve(&arena, dense_work_size(sowing.rows, 2), sizeof(double));
    assert_status(trial->context, arena_open(trial->context, &arena), FESCUE_OK);
    double *work = arena_carve(&arena, dense_work_size(sowing.rows, 2), sizeof(double));
    for (size_t i = 0; i < point->rows; i++)
        for (size_t k = 0; k < 2; k++)
            MATRIX_AT(point->left, i, k) = random_normal(&random);
    for (size_t j = 0; j < point->columns; j++)
        for (size_t k = 0; k < 2; k++)
            MATRIX_AT(point->right, j, k) = random_normal(&random);
    struct matrix none = {0};
    assert_status(trial->context, dense_qr(trial->context, point->left, none, work), FESCUE_OK);
    assert_status(trial->context, dense_qr(trial->context, point->right, none, work), FESCUE_OK);
    for (size_t k = 0; k < 2; k++)
        point->spectrum[k] = sizes[start] * 30;
    arena_close(trial->context, &arena);
}

static void trial_begin(void **state, fescue_context *context, enum start start, struct trial *trial)
{
    *trial = (struct trial){.context = context == NULL ? bench_of(state)->context : context};
    sow_cells(trial->context, &sowing, &trial->cells);
    fescue_options_standard(&trial->options);
    trial->choice = (struct choice){.offsets = FESCUE_OFFSETS_NONE, .rank = 2, .ridge = ridge};
    start_make(trial, start);
    trial->request = (struct final_request){.cells = &trial->cells,
                                            .options = &trial->options,
                                            .choice = &trial->choice,
                                            .solver = solver_find("fixed-rank-cg")};
}

static void trial_run(struct trial *trial)
{
    assert_status(trial->context, final_fit_run(trial->context, &trial->request, &trial->fit), FESCUE_OK);
}

static void trial_end(struct trial *trial)
{
    final_fit_free(trial->context, &trial->fit);
    choice_free(trial->context, &trial->choice);
    cells_free(trial->context, &trial->cells);
}

/* The objective of `point`, in the table's units, after the fit's own offsets: by the formula of model.h. */
static double objective_of(const struct trial *trial, const struct low_rank *point)
{
    const struct half *half = &trial->cells.by_row;
    const struct final_fit *fit = &trial->fit;
    double square = 0, size = 0;
    for (uint32_t i = 0; i < half->lines; i++)
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++) {
            double offset = offsets_at(&fit->model.offsets, i, half->across[k]);
            double away = low_rank_entry(point, i, half->across[k]) + offset - cells_value(&trial->cells, half, k);
            square += away * away;
        }
    for (size_t k = 0; k < point->rank; k++)
        size += point->spectrum[k] * point->spectrum[k];
    double density = (double)trial->cells.count / ((double)half->lines * half->length);
    return (0.5 * square + 0.5 * ridge * density * size) / (fit->scale * fit->scale);
}

/* From any start: never above its objective, and what is announced is what the model has. */
static void the_fit_is_no_worse_than_its_start(void **state)
{
    double lowest = INFINITY, highest = 0;
    for (enum start start = 0; start < STARTS; start++) {
        struct trial trial;
        trial_begin(state, NULL, start, &trial);
        trial_run(&trial);
        double before = objective_of(&trial, &trial.choice.start);
        double after = objective_of(&trial, &trial.fit.model.low_rank);
        assert_true(after <= before * (1 + 1e-12));
        assert_close(after, trial.fit.result.objective, 1e-10 * after);
        assert_true(solve_converged(trial.fit.result.stop));
        lowest = fmin(lowest, after);
        highest = fmax(highest, after);
        trial_end(&trial);
    }
    assert_true(highest <= 1.001 * lowest); /* all starts end in the same basin, to the limit on change */
}

/* One iteration brings a truncated SVD nearer than a random point; nothing comes nearer than the point of a whole fit.
 */
static void the_lower_start_is_taken(void **state)
{
    struct trial trial, again;
    trial_begin(state, NULL, START_OTHER, &trial);
    trial.options.iterations = 1;
    trial_run(&trial);
    assert_string_equal(trial.fit.start, "spectral");
    final_fit_free(trial.context, &trial.fit);
    trial.options.iterations = 1000;
    trial_run(&trial);
    trial_begin(state, NULL, START_OTHER, &again);
    low_rank_free(again.context, &again.choice.start);
    assert_status(again.context, low_rank_copy(again.context, &trial.fit.model.low_rank, &again.choice.start),
                  FESCUE_OK);
    again.options.iterations = 1;
    trial_run(&again);
    assert_string_equal(again.fit.start, "grown");
    trial_end(&again);
    trial_end(&trial);
}

/* Screening and the rest are one run to whoever reads the trace. */
static void the_trace_counts_through(void **state)
{
    struct trial trial;
    trial_begin(state, NULL, START_ONE, &trial);
    trial_run(&trial);
    const struct solve_result *result = &trial.fit.result;
    assert_int_equal(result->trace_count, result->iterations + 1);
    for (uint64_t k = 0; k < result->trace_count; k++) {
        assert_int_equal(result->trace[k].iteration, k);
        assert_int_equal(result->trace[k].rank, 2);
        assert_true(k == 0 || result->trace[k].seconds >= result->trace[k - 1].seconds);
    }
    assert_close(result->trace[result->trace_count - 1].objective, result->objective, 0);
    trial_end(&trial);
}

static void iterations_are_limited_in_sum(void **state)
{
    static const int64_t most[] = {1, 3, 7};
    for (size_t k = 0; k < sizeof most / sizeof most[0]; k++) {
        struct trial trial;
        trial_begin(state, NULL, START_OTHER, &trial);
        trial.options.iterations = most[k];
        trial_run(&trial);
        assert_true(trial.fit.result.iterations <= (uint64_t)most[k]);
        assert_int_equal(trial.fit.result.stop, STOP_ITERATIONS);
        trial_end(&trial);
    }
}

/* No time left: the point that came is the point that is given back. */
static void a_passed_deadline_keeps_the_start(void **state)
{
    struct trial trial;
    trial_begin(state, NULL, START_OTHER, &trial);
    trial.request.deadline = clock_wall() - 1;
    trial_run(&trial);
    assert_int_equal(trial.fit.result.stop, STOP_TIME);
    assert_string_equal(trial.fit.start, "grown");
    assert_true(objective_of(&trial, &trial.fit.model.low_rank) <=
                objective_of(&trial, &trial.choice.start) * (1 + 1e-12));
    trial_end(&trial);
}

static void rank_0_is_offsets_alone(void **state)
{
    struct trial trial;
    trial_begin(state, NULL, START_ONE, &trial);
    low_rank_free(trial.context, &trial.choice.start);
    trial.choice.rank = 0;
    trial.choice.offsets = FESCUE_OFFSETS_BOTH;
    trial.options.bounds = (struct fescue_range){-1, 1};
    trial_run(&trial);
    assert_string_equal(trial.fit.start, "none");
    assert_int_equal(trial.fit.model.low_rank.rank, 0);
    double offset = offsets_at(&trial.fit.model.offsets, 3, 4);
    assert_close(model_estimate(&trial.fit.model, 3, 4), fmin(fmax(offset, -1), 1), 0);
    trial_end(&trial);
}

struct patience {
    uint64_t calls, most;
};

static bool patience_ends(void *data, const char *stage, double share)
{
    struct patience *patience = data;
    (void)stage, (void)share;
    return ++patience->calls < patience->most;
}

/* Asked to stop at every question in turn: always a model, never worse than the start, and the stop is named. */
static void being_asked_to_stop_is_an_outcome(void **state)
{
    struct patience patience = {.most = 1};
    const struct fescue_hooks hooks = {.data = &patience, .progress = patience_ends};
    fescue_context *context = NULL;
    uint64_t cut = 0;
    assert_int_equal(fescue_context_create(&hooks, &context), FESCUE_OK);
    for (bool whole = false; !whole; patience.most++) {
        struct trial trial;
        patience.calls = 0;
        trial_begin(state, context, START_OTHER, &trial);
        trial_run(&trial);
        whole = patience.calls < patience.most;
        assert_int_equal(trial.fit.result.stop == STOP_CANCELLED, !whole);
        assert_true(objective_of(&trial, &trial.fit.model.low_rank) <=
                    objective_of(&trial, &trial.choice.start) * (1 + 1e-12));
        cut += !whole;
        trial_end(&trial);
        fescue_failure_clear(context);
    }
    assert_true(cut > 10);
    assert_no_leak(context);
    fescue_context_destroy(&context);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(the_fit_is_no_worse_than_its_start), BENCH_TEST(the_lower_start_is_taken),
        BENCH_TEST(the_trace_counts_through),           BENCH_TEST(iterations_are_limited_in_sum),
        BENCH_TEST(a_passed_deadline_keeps_the_start),  BENCH_TEST(rank_0_is_offsets_alone),
        BENCH_TEST(being_asked_to_stop_is_an_outcome),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
