/* SPDX-License-Identifier: MIT
 *
 * Fits that were stopped go on: every solver of the list, asked to stop after every few steps and begun again in a
 * process's worth of new memory with another number of workers each time, ends with the bytes of one that was left
 * alone: its point, its trace, and why it ended.
 */
#include "support_solve.h"

#include <stdio.h>

static const struct sowing sowing = {.rows = 60, .columns = 40, .rank = 3, .share = 0.5, .noise = 0.3, .seed = 21};
/* More than the table has, so that no solver is done at once. */
enum { RANK = 5, STEPS_MOST = 60 };
static const struct solve_limits limits = {.iterations = STEPS_MOST, .gradient = 1e-12};

/* Asks to stop at the n-th step. */
struct stopper {
    fescue_context *context;
    int left;
};

static bool step_count(void *data, const char *stage, double share)
{
    struct stopper *stopper = data;
    (void)stage;
    (void)share;
    if (--stopper->left == 0)
        fescue_context_cancel(stopper->context);
    return true;
}

struct ending {
    struct low_rank point;
    struct solve_result result;
    fescue_status status;
};

/* One run in a context of its own; `memo` NULL: without one. */
static void run_once(const struct solver *solver, const char *memo, size_t workers, int steps, fescue_context *context,
                     struct stopper *stopper, struct ending *ending)
{
    struct plot plot;
    stopper->left = 0;
    assert_status(context, team_resize(context, workers), FESCUE_OK);
    plot = plot_sow(context, &sowing, 0.01);
    ending->point = random_point(context, 60, 40, RANK, 10);
    ending->result = (struct solve_result){0};
    if (memo != NULL)
        assert_status(context, memo_open(context, memo, "one job\n", 300), FESCUE_OK);
    stopper->left = steps;
    ending->status = solve_run(&plot.problem, solver, &limits, &ending->point, &ending->result);
    stopper->left = 0;
    memo_close(context);
    plot_free(&plot);
}

static fescue_context *stopper_context(struct stopper *stopper)
{
    struct fescue_hooks hooks = {.data = stopper, .progress = step_count};
    fescue_context *context = NULL;
    assert_int_equal(fescue_context_create(&hooks, &context), FESCUE_OK);
    stopper->context = context;
    return context;
}

static void same_numbers(struct matrix a, struct matrix b)
{
    for (size_t i = 0; i < a.rows; i++)
        assert_memory_equal(&MATRIX_AT(a, i, 0), &MATRIX_AT(b, i, 0), a.columns * sizeof(double));
}

static void same_ending(const struct ending *a, const struct ending *b)
{
    assert_int_equal(a->result.stop, b->result.stop);
    assert_int_equal(a->result.iterations, b->result.iterations);
    assert_true(a->result.objective == b->result.objective && a->result.gradient == b->result.gradient);
    assert_int_equal(a->result.trace_count, b->result.trace_count);
    for (uint64_t k = 0; k < a->result.trace_count; k++) {
        const struct solve_step *x = &a->result.trace[k], *y = &b->result.trace[k];
        assert_true(x->iteration == y->iteration && x->rank == y->rank);
        assert_true(x->objective == y->objective && x->rmse == y->rmse);
        assert_true(x->gradient == y->gradient && x->step == y->step);
        assert_true(k == 0 || y->seconds >= y[-1].seconds);
    }
    assert_memory_equal(a->point.spectrum, b->point.spectrum, RANK * sizeof(double));
    same_numbers(a->point.left, b->point.left);
    same_numbers(a->point.right, b->point.right);
}

/* Every `pace` steps a stop; how many stops. */
static int stopped_and_gone_on(const struct solver *solver, const char *memo, int pace, const struct ending *wanted)
{
    struct ending ending;
    int stops = 0;
    for (bool done = false; !done;) {
        struct stopper stopper = {0};
        fescue_context *context = stopper_context(&stopper);
        run_once(solver, memo, (size_t)(stops % 3) + 1, pace + 1, context, &stopper, &ending);
        done = ending.status == FESCUE_OK;
        if (done) {
            same_ending(wanted, &ending);
        } else {
            assert_int_equal(ending.status, FESCUE_STOPPED);
            assert_int_equal(ending.result.iterations, ++stops * pace); /* it went on, and did not begin anew */
        }
        low_rank_free(context, &ending.point);
        solve_result_free(context, &ending.result);
        fescue_context_destroy(&context);
        assert_true(stops <= STEPS_MOST);
    }
    return stops;
}

static void every_solver_goes_on_to_the_same_bytes(void **state)
{
    char memo[PATH_SIZE];
    path_in(bench_of(state)->folder, "fit.checkpoint", memo);
    for (size_t s = 0; solver_at(s) != NULL; s++) {
        struct stopper stopper = {0};
        struct ending whole;
        fescue_context *context = stopper_context(&stopper);
        run_once(solver_at(s), NULL, 1, 0, context, &stopper, &whole);
        assert_status(context, whole.status, FESCUE_OK);
        assert_true(whole.result.iterations > 4);
        static const int paces[] = {1, 6};
        for (size_t k = 0; k < sizeof paces / sizeof *paces; k++) {
            int stops = stopped_and_gone_on(solver_at(s), memo, paces[k], &whole);
            print_message("# %s: %d steps, %d stops\n", solver_name(solver_at(s)), (int)whole.result.iterations, stops);
            assert_true(stops > 0 || paces[k] > (int)whole.result.iterations);
            remove(memo);
        }
        low_rank_free(context, &whole.point);
        solve_result_free(context, &whole.result);
        fescue_context_destroy(&context);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {BENCH_TEST(every_solver_goes_on_to_the_same_bytes)};
    return cmocka_run_group_tests_name("run_resume", tests, NULL, NULL);
}
