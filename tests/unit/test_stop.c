/* SPDX-License-Identifier: MIT
 *
 * The driver's rules, one by one, with a solver that plays a script instead of solving anything.
 */
#include "support_solve.h"

#include <float.h>

/* What the scripted solver says at iteration k; it "writes" a point whose spectrum is the iteration. */
struct script {
    size_t count;
    const double *objective, *gradient; /* by iteration, the last one again and again */
    double square;                      /* of the residual; negative: twice the objective */
    size_t stuck_at;                    /* the step from this iteration finds nothing; 0: never */
    size_t fails_at;                    /* the step from this iteration fails; 0: never */
    double naps;                        /* seconds an iteration */
};
static struct script script;
struct actor {
    size_t iteration;
};

static fescue_status actor_create(struct field *field, const struct low_rank *point, void **state)
{
    struct actor *actor;
    (void)point;
    fescue_status status = TAKE(field->problem->context, 1, &actor);
    *state = actor;
    return status;
}

static void actor_measure(const void *state, struct solve_measure *measure)
{
    size_t k = ((const struct actor *)state)->iteration;
    k = k < script.count ? k : script.count - 1;
    *measure = (struct solve_measure){.objective = script.objective[k],
                                      .gradient = script.gradient[k],
                                      .square = script.square < 0 ? 2 * script.objective[k] : script.square};
}

static fescue_status actor_step(void *state, bool *moved)
{
    struct actor *actor = state;
    for (double until = clock_wall() + script.naps; clock_wall() < until;)
        ;
    if (script.fails_at != 0 && actor->iteration == script.fails_at)
        return FESCUE_DEFECT;
    *moved = script.stuck_at == 0 || actor->iteration != script.stuck_at;
    actor->iteration++;
    return FESCUE_OK;
}

static fescue_status actor_write(void *state, struct low_rank *point)
{
    point->spectrum[0] = (double)((const struct actor *)state)->iteration;
    return FESCUE_OK;
}

static void actor_destroy(fescue_context *context, void **state)
{
    memory_give(context, state);
}

static const struct solver actor = {.name = "actor",
                                    .width = 1,
                                    .create = actor_create,
                                    .measure = actor_measure,
                                    .step = actor_step,
                                    .point_write = actor_write,
                                    .destroy = actor_destroy};

/* A fully seen 4 x 5 table of ones and minus ones: |T|^2 = 20, scale 1. The point starts at the zero matrix with
   spectrum -1 as a mark, so that its objective is 10. */
struct stage {
    struct plot plot;
    struct low_rank point;
    struct solve_limits limits;
    struct solve_result result;
};

static struct stage stage_set(fescue_context *context)
{
    double dense[20];
    struct stage stage = {.limits = {.iterations = 100, .gradient = 1e-9}};
    for (int k = 0; k < 20; k++)
        dense[k] = k % 3 == 0 ? 1 : -1;
    stage.plot = plot_dense(context, 4, 5, dense, 0);
    assert_status(context, low_rank_create(context, 4, 5, 1, &stage.point), FESCUE_OK);
    stage.point.spectrum[0] = -1;
    return stage;
}

static fescue_status stage_play(struct stage *stage)
{
    return solve_run(&stage->plot.problem, &actor, &stage->limits, &stage->point, &stage->result);
}

static void stage_clear(struct stage *stage)
{
    fescue_context *context = stage->plot.context;
    solve_result_free(context, &stage->result);
    low_rank_free(context, &stage->point);
    plot_free(&stage->plot);
}

/* Plays `script` and says how it ended. */
static void assert_ends(fescue_context *context, const struct solve_limits *limits, enum solve_stop stop,
                        uint64_t iterations)
{
    struct stage stage = stage_set(context);
    stage.limits = *limits;
    assert_status(context, stage_play(&stage), FESCUE_OK);
    assert_string_equal(solve_stop_word(stage.result.stop), solve_stop_word(stop));
    assert_int_equal(stage.result.iterations, iterations);
    assert_int_equal(stage.result.trace_count, iterations + 1);
    assert_string_equal(stage.result.solver, "actor");
    assert_close(stage.point.spectrum[0], (double)iterations, 0);
    stage_clear(&stage);
}

static const double falling[] = {9, 8, 7, 6, 5, 4, 3, 2, 1.5, 1.25, 1.2, 1.15, 1.1, 1.05, 1.0};

static void exact_is_sixteen_roundings(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct solve_limits limits = {.iterations = 14, .gradient = 1e-9};
    script = (struct script){
        .count = 15, .objective = falling, .gradient = (const double[]){1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1}};
    script.square = 20 * pow(15.9 * DBL_EPSILON, 2);
    assert_ends(context, &limits, STOP_EXACT, 0);
    script.square = 20 * pow(16.1 * DBL_EPSILON, 2);
    assert_ends(context, &limits, STOP_ITERATIONS, 14);
}

/* |T| = sqrt(20): a gradient of 1e-9 sqrt(20) is at the tolerance. */
static void the_gradient_is_relative_to_the_targets(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct solve_limits limits = {.iterations = 4, .gradient = 1e-9};
    const double above[] = {1, 1, 1.01e-9 * sqrt(20), 1.01e-9 * sqrt(20), 1.01e-9 * sqrt(20)};
    const double below[] = {1, 1, 0.99e-9 * sqrt(20), 1, 1};
    script = (struct script){.count = 5, .objective = falling, .gradient = above, .square = 1};
    assert_ends(context, &limits, STOP_ITERATIONS, 4);
    script.gradient = below;
    assert_ends(context, &limits, STOP_GRADIENT, 2);
    /* A residual as small as the gradient is one that is vanishing: no minimum yet. */
    script.square = 1e-18;
    assert_ends(context, &limits, STOP_ITERATIONS, 4);
}

static void no_tolerance_is_below_rounding(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct solve_limits limits = {.iterations = 2, .gradient = 0};
    script = (struct script){.count = 2, .objective = falling, .square = 1};
    script.gradient = (const double[]){1, 0.9 * DBL_EPSILON * sqrt(20)};
    assert_ends(context, &limits, STOP_GRADIENT, 1);
}

/* At iteration 10 + k the fall since k is compared. Here it is 1e-3 (1.001 - 1.000...) from iteration 11 on. */
static void change_looks_ten_iterations_back(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const double objective[] = {5, 1.001, 1.0009, 1.0008, 1.0007, 1.0006, 1.0005, 1.0004, 1.0003, 1.0002, 1.0001, 1};
    struct solve_limits limits = {.iterations = 12, .gradient = 1e-9, .change = 1.01e-3};
    script = (struct script){.count = 12, .objective = objective, .square = -1};
    script.gradient = (const double[]){1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1};
    assert_ends(context, &limits, STOP_CHANGE, 11);
    limits.change = 0.99e-3;
    assert_ends(context, &limits, STOP_CHANGE, 12); /* the script stands still after its end: 1.0009 - 1 */
    limits.change = 0;
    assert_ends(context, &limits, STOP_ITERATIONS, 12);
}

static void nothing_better_is_stalled(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct solve_limits limits = {.iterations = 100, .gradient = 1e-9};
    script = (struct script){.count = 5, .objective = falling, .square = 1, .stuck_at = 3};
    script.gradient = (const double[]){1, 1, 1, 1, 1};
    assert_ends(context, &limits, STOP_STALLED, 4);
    /* Standing still for twenty iterations without saying so. */
    script.stuck_at = 0;
    assert_ends(context, &limits, STOP_STALLED, 24);
    /* Stalled where the gradient has fallen far enough is converged. */
    script.square = 1e-20;
    script.gradient = (const double[]){1, 1, 1e-9, 1e-9, 1e-9};
    assert_ends(context, &limits, STOP_GRADIENT, 24);
}

static void limits_are_kept(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct solve_limits limits = {.iterations = 0, .gradient = 1e-9};
    script = (struct script){.count = 15, .objective = falling, .square = 1};
    script.gradient = (const double[]){1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1};
    assert_ends(context, &limits, STOP_ITERATIONS, 0);
    limits.iterations = 7;
    assert_ends(context, &limits, STOP_ITERATIONS, 7);
    limits.iterations = UINT64_MAX; /* as many as there may be: no memory is taken for all of them */
    limits.deadline = 1e-9;         /* long past */
    assert_ends(context, &limits, STOP_TIME, 0);
}

static void the_deadline_ends_a_run_on_its_way(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct stage stage = stage_set(context);
    double objective[15];
    memcpy(objective, falling, sizeof objective);
    script = (struct script){.count = 15, .objective = objective, .square = 1, .naps = 0.02};
    script.gradient = (const double[]){1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1};
    stage.limits.deadline = clock_wall() + 0.05;
    assert_status(context, stage_play(&stage), FESCUE_OK);
    assert_int_equal(stage.result.stop, STOP_TIME);
    assert_true(stage.result.iterations >= 1 && stage.result.iterations <= 4);
    stage_clear(&stage);
}

/* Where the solver ends is worse than where it began, or not a number: the point stays as it came. */
static void nothing_worse_is_accepted(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const double worse[] = {9, 10.0001}, poisoned[] = {9, NAN}, gradient[] = {1, 1};
    const double *const scripts[] = {worse, poisoned};
    for (int k = 0; k < 2; k++) {
        struct stage stage = stage_set(context);
        script = (struct script){.count = 2, .objective = scripts[k], .gradient = gradient, .square = 1};
        stage.limits.iterations = 1;
        /* The mark of -1 is an objective of 1/2 |P(0)|^2 too: its sides are zero. */
        assert_status(context, stage_play(&stage), FESCUE_OK);
        assert_close(stage.point.spectrum[0], -1, 0);
        assert_close(stage.result.objective, 10, 1e-12);
        assert_close(stage.result.rmse, 1, 1e-12);
        stage_clear(&stage);
    }
}

static void a_failing_step_is_reported_and_the_point_valid(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct stage stage = stage_set(context);
    script = (struct script){.count = 15, .objective = falling, .square = 1, .fails_at = 3};
    script.gradient = (const double[]){1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1};
    assert_status(context, stage_play(&stage), FESCUE_DEFECT);
    assert_close(stage.point.spectrum[0], 3, 0);
    stage_clear(&stage);
}

static bool refuse_the_third(void *data, const char *stage, double share)
{
    (void)stage;
    (void)share;
    return ++*(int *)data < 3;
}

static void asked_to_stop_it_keeps_what_it_has(void **state)
{
    (void)state;
    int asked = 0;
    const struct fescue_hooks hooks = {.data = &asked, .progress = refuse_the_third};
    fescue_context *context;
    assert_int_equal(fescue_context_create(&hooks, &context), FESCUE_OK);
    struct stage stage = stage_set(context);
    script = (struct script){.count = 15, .objective = falling, .square = 1};
    script.gradient = (const double[]){1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1};
    assert_int_equal(stage_play(&stage), FESCUE_STOPPED);
    assert_int_equal(stage.result.stop, STOP_CANCELLED);
    assert_int_equal(stage.result.iterations, 2);
    assert_close(stage.point.spectrum[0], 2, 0);
    stage_clear(&stage);
    assert_no_leak(context);
    fescue_context_destroy(&context);
}

static void a_second_run_goes_on_with_the_trace(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct stage stage = stage_set(context);
    script = (struct script){.count = 15, .objective = falling, .square = 1};
    script.gradient = (const double[]){1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1, 1};
    stage.limits.iterations = 3;
    assert_status(context, stage_play(&stage), FESCUE_OK);
    assert_status(context, stage_play(&stage), FESCUE_OK);
    assert_int_equal(stage.result.trace_count, 8);
    assert_int_equal(stage.result.iterations, 3);
    for (uint32_t k = 0; k < 8; k++) {
        assert_int_equal(stage.result.trace[k].iteration, k % 4);
        assert_int_equal(stage.result.trace[k].rank, 1);
        assert_close(stage.result.trace[k].objective, falling[k % 4], 0);
        assert_close(stage.result.trace[k].rmse, sqrt(1.0 / 20), 1e-15);
        assert_close(stage.result.trace[k].gradient, 1 / sqrt(20), 1e-15);
    }
    stage_clear(&stage);
}

/* Longer than what is reserved at once. */
static void a_long_trace_is_whole(void **state)
{
    fescue_context *context = bench_of(state)->context;
    enum { LONG = 70000 };
    double *objective = malloc(LONG * sizeof *objective), *gradient = malloc(LONG * sizeof *gradient);
    struct stage stage = stage_set(context);
    for (int k = 0; k < LONG; k++) {
        objective[k] = 9 - 1e-4 * k;
        gradient[k] = 1;
    }
    script = (struct script){.count = LONG, .objective = objective, .gradient = gradient, .square = 1};
    stage.limits.iterations = LONG - 1;
    assert_status(context, stage_play(&stage), FESCUE_OK);
    assert_int_equal(stage.result.trace_count, LONG);
    for (uint32_t k = 0; k < LONG; k++)
        assert_true(stage.result.trace[k].iteration == k && stage.result.trace[k].objective == objective[k]);
    stage_clear(&stage);
    free(objective);
    free(gradient);
}

static void every_reason_has_words_of_its_own(void **state)
{
    (void)state;
    const enum solve_stop all[] = {STOP_GRADIENT,   STOP_EXACT, STOP_CHANGE,   STOP_STALLED,
                                   STOP_ITERATIONS, STOP_TIME,  STOP_CANCELLED};
    for (size_t k = 0; k < sizeof all / sizeof *all; k++) {
        assert_true(strlen(solve_stop_text(all[k])) > strlen(solve_stop_word(all[k])));
        for (size_t l = 0; l < k; l++)
            assert_string_not_equal(solve_stop_word(all[k]), solve_stop_word(all[l]));
        assert_int_equal(solve_converged(all[k]), k < 3);
    }
}

static void solvers_are_found_by_name(void **state)
{
    (void)state;
    for (size_t k = 0; solver_at(k) != NULL; k++) {
        assert_ptr_equal(solver_find(solver_name(solver_at(k))), solver_at(k));
        assert_true(strlen(solver_summary(solver_at(k))) > 20);
    }
    assert_non_null(solver_find("fixed-rank-cg"));
    assert_non_null(solver_find("grassmann-cg"));
    assert_null(solver_find("grassmann"));
    assert_null(solver_find(""));
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(exact_is_sixteen_roundings),
        BENCH_TEST(the_gradient_is_relative_to_the_targets),
        BENCH_TEST(no_tolerance_is_below_rounding),
        BENCH_TEST(change_looks_ten_iterations_back),
        BENCH_TEST(nothing_better_is_stalled),
        BENCH_TEST(limits_are_kept),
        BENCH_TEST(the_deadline_ends_a_run_on_its_way),
        BENCH_TEST(nothing_worse_is_accepted),
        BENCH_TEST(a_failing_step_is_reported_and_the_point_valid),
        BENCH_TEST(asked_to_stop_it_keeps_what_it_has),
        BENCH_TEST(a_second_run_goes_on_with_the_trace),
        BENCH_TEST(a_long_trace_is_whole),
        BENCH_TEST(every_reason_has_words_of_its_own),
        BENCH_TEST(solvers_are_found_by_name),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
