/* SPDX-License-Identifier: MIT
 *
 * The context: made and taken apart, its callbacks, cancelling, clocks.
 */
#include "support.h"

#include <signal.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

/* What the callbacks below were told. */
struct told {
    char stage[32], sentence[1200];
    double share;
    int logs;
    bool go_on;
};

static bool progress_note(void *data, const char *stage, double share)
{
    struct told *told = data;
    snprintf(told->stage, sizeof told->stage, "%s", stage);
    told->share = share;
    return told->go_on;
}

static void log_note(void *data, const char *sentence)
{
    struct told *told = data;
    snprintf(told->sentence, sizeof told->sentence, "%s", sentence);
    told->logs++;
}

static fescue_context *listening_context(struct told *told)
{
    const struct fescue_hooks hooks = {.data = told, .progress = progress_note, .log = log_note};
    fescue_context *context;
    assert_int_equal(fescue_context_create(&hooks, &context), FESCUE_OK);
    return context;
}

static void a_context_without_hooks_works(void **state)
{
    (void)state;
    fescue_context *context;
    assert_int_equal(fescue_context_create(NULL, &context), FESCUE_OK);
    assert_int_equal(team_workers(context), 1); /* no thread before one is asked for */
    assert_int_equal(progress_tell(context, "reading", 0.5), FESCUE_OK);
    log_tell(context, "nobody listens");
    double *numbers;
    assert_int_equal(TAKE(context, 3, &numbers), FESCUE_OK);
    GIVE(context, &numbers);
    fescue_context_destroy(&context);
    assert_null(context);
    fescue_context_destroy(&context);
}

static void without_memory_there_is_no_context(void **state)
{
    (void)state;
    fescue_context *context = (fescue_context *)(uintptr_t)8;
    fault_plan(FAULT_TAKE, 1, false, 0);
    assert_int_equal(test_context_try(&context), FESCUE_NO_MEMORY);
    fault_clear();
    assert_null(context);
    assert_int_equal(test_blocks_alive(), 0);
}

static void progress_and_log_reach_the_callbacks(void **state)
{
    (void)state;
    struct told told = {.go_on = true};
    fescue_context *context = listening_context(&told);
    assert_int_equal(progress_tell(context, "fitting", 0.25), FESCUE_OK);
    assert_string_equal(told.stage, "fitting");
    assert_close(told.share, 0.25, 0);
    log_tell(context, "rank %d\nof %s", 4, "many");
    assert_string_equal(told.sentence, "rank 4?of many");
    char long_text[4000];
    memset(long_text, 'y', sizeof long_text - 1);
    long_text[sizeof long_text - 1] = '\0';
    log_tell(context, "%s", long_text);
    assert_int_equal(told.logs, 2);
    assert_int_equal(strlen(told.sentence), 1023);
    assert_string_equal(told.sentence + 1020, "...");
    fescue_context_destroy(&context);
}

static void a_callback_can_stop(void **state)
{
    (void)state;
    struct told told = {.go_on = false};
    fescue_context *context = listening_context(&told);
    assert_int_equal(progress_tell(context, "fitting", -1), FESCUE_STOPPED);
    assert_non_null(strstr(fescue_failure_text(context), "fitting"));
    assert_false(is_cancelled(context));
    fescue_context_destroy(&context);
}

static fescue_context *cancelled_by_signal;

static void cancel_from_handler(int number)
{
    (void)number;
    fescue_context_cancel(cancelled_by_signal);
}

static void a_signal_handler_can_cancel(void **state)
{
    struct bench *bench = bench_of(state);
    cancelled_by_signal = bench->context;
    struct sigaction action = {.sa_handler = cancel_from_handler}, before;
    sigaction(SIGUSR1, &action, &before);
    assert_false(is_cancelled(bench->context));
    raise(SIGUSR1);
    sigaction(SIGUSR1, &before, NULL);
    assert_true(is_cancelled(bench->context));
    assert_int_equal(progress_tell(bench->context, "fitting", 0), FESCUE_STOPPED);
    fescue_failure_clear(bench->context);
    assert_int_equal(progress_tell(bench->context, "fitting", 0), FESCUE_OK);
}

static void clocks_go_forward(void **state)
{
    (void)state;
    double wall = clock_wall(), cpu = clock_cpu();
    volatile double sum = 0;
    while (clock_cpu() - cpu < 0.002)
        sum += 1;
    assert_true(clock_wall() > wall);
    assert_true(sum > 0);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(a_context_without_hooks_works),
        cmocka_unit_test(without_memory_there_is_no_context),
        cmocka_unit_test(progress_and_log_reach_the_callbacks),
        cmocka_unit_test(a_callback_can_stop),
        BENCH_TEST(a_signal_handler_can_cancel),
        cmocka_unit_test(clocks_go_forward),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
