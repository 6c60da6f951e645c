/* SPDX-License-Identifier: MIT
 *
 * The workers: every block once, the same sums for any number of them, and what is promised to be safe from them.
 */
#include "support.h"

#include <pthread.h>
#include <signal.h>
#include <stdatomic.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>

enum { MOST_BLOCKS = 3000 };
static const size_t team_sizes[] = {1, 2, 3, 7, 16};
enum { TEAM_SIZES = sizeof team_sizes / sizeof team_sizes[0] };

struct tally {
    size_t workers;
    _Atomic unsigned times[MOST_BLOCKS];
    _Atomic unsigned strangers; /* worker numbers out of range */
};

static void block_tally(void *job, size_t block, size_t worker)
{
    struct tally *tally = job;
    atomic_fetch_add(&tally->times[block], 1);
    if (worker >= tally->workers)
        atomic_fetch_add(&tally->strangers, 1);
}

static void every_block_is_done_once(void **state)
{
    static const size_t block_counts[] = {0, 1, 2, 3, 7, 64, MOST_BLOCKS};
    static struct tally tally;
    fescue_context *context = bench_of(state)->context;
    for (size_t t = 0; t < TEAM_SIZES; t++) {
        assert_status(context, team_resize(context, team_sizes[t]), FESCUE_OK);
        assert_int_equal(team_workers(context), team_sizes[t]);
        for (size_t b = 0; b < sizeof block_counts / sizeof block_counts[0]; b++) {
            memset(&tally, 0, sizeof tally);
            tally.workers = team_sizes[t];
            team_run(context, block_counts[b], block_tally, &tally);
            for (size_t k = 0; k < MOST_BLOCKS; k++)
                assert_int_equal(tally.times[k], k < block_counts[b]);
            assert_int_equal(tally.strangers, 0);
        }
    }
}

/* Numbers of very different size, so that any other order of the sum would show in the last bits. */
enum { SUM_BLOCKS = 200, SUM_WIDTH = 3, SUM_TERMS = 50 };

static void block_sum(void *job, size_t block, size_t worker)
{
    double *partial = (double *)job + block * SUM_WIDTH;
    (void)worker;
    for (uint64_t k = 0; k < SUM_TERMS; k++)
        for (size_t w = 0; w < SUM_WIDTH; w++) {
            uint64_t place = (block * SUM_TERMS + k) * SUM_WIDTH + w;
            double x = random_uniform_at(31, RANDOM_TEST, 0, place) - 0.5;
            partial[w] += x * x * x * x * x * x * x;
        }
}

static void sums_have_the_same_bits_for_any_team(void **state)
{
    fescue_context *context = bench_of(state)->context;
    double first[SUM_WIDTH];
    for (size_t t = 0; t < TEAM_SIZES; t++) {
        double partial[SUM_BLOCKS * SUM_WIDTH] = {0}, sum[SUM_WIDTH], plain[SUM_WIDTH] = {0};
        assert_status(context, team_resize(context, team_sizes[t]), FESCUE_OK);
        team_run(context, SUM_BLOCKS, block_sum, partial);
        team_sum(context, partial, SUM_BLOCKS, SUM_WIDTH, sum);
        for (size_t k = 0; k < SUM_BLOCKS * SUM_WIDTH; k++)
            plain[k % SUM_WIDTH] += partial[k];
        assert_memory_equal(sum, plain, sizeof sum);
        if (t == 0)
            memcpy(first, sum, sizeof first);
        assert_memory_equal(sum, first, sizeof sum);
    }
    double none[SUM_WIDTH] = {1, 2, 3};
    team_sum(context, NULL, 0, SUM_WIDTH, none);
    assert_true(none[0] == 0 && none[1] == 0 && none[2] == 0);
}

/* Each of two blocks waits for the other to have begun: with one thread for both, the first would wait in vain. */
static void await_other(void *job, size_t block, size_t worker)
{
    _Atomic unsigned *begun = job;
    (void)block, (void)worker;
    atomic_fetch_add(begun, 1);
    double until = clock_wall() + 30;
    while (atomic_load(begun) % 2 != 0 && clock_wall() < until)
        usleep(50);
}

static void workers_work_at_the_same_time(void **state)
{
    fescue_context *context = bench_of(state)->context;
    _Atomic unsigned begun = 0;
    assert_status(context, team_resize(context, 2), FESCUE_OK);
    double start = clock_wall();
    team_run(context, 2, await_other, &begun);
    assert_int_equal(atomic_load(&begun), 2);
    assert_true(clock_wall() - start < 30); /* not a measure: whether the wait was in vain */
}

static void count_up(void *job, size_t block, size_t worker)
{
    (void)block, (void)worker;
    atomic_fetch_add((_Atomic unsigned *)job, 1);
}

/* Rounds back to back, and after a pause in which the workers fall asleep. */
static void rounds_follow_each_other(void **state)
{
    fescue_context *context = bench_of(state)->context;
    _Atomic unsigned done = 0;
    assert_status(context, team_resize(context, 4), FESCUE_OK);
    for (int round = 0; round < 3000; round++)
        team_run(context, 5, count_up, &done);
    assert_int_equal(atomic_load(&done), 15000);
    for (int round = 0; round < 20; round++) {
        usleep(1000);
        team_run(context, 5, count_up, &done);
    }
    assert_int_equal(atomic_load(&done), 15100);
}

static size_t threads_of_the_process(void)
{
    return folder_count("/proc/self/task");
}

static void teams_change_their_size(void **state)
{
    fescue_context *context = bench_of(state)->context;
    size_t before = threads_of_the_process();
    assert_int_equal(team_workers(context), 1);
    for (size_t k = 0; k < 40; k++) {
        size_t workers = 1 + (k * 5) % 9;
        _Atomic unsigned done = 0;
        assert_status(context, team_resize(context, workers), FESCUE_OK);
        if (k % 2 == 0) /* or the threads leave without having worked */
            team_run(context, 20, count_up, &done);
        assert_int_equal(atomic_load(&done), k % 2 == 0 ? 20 : 0);
    }
    assert_status(context, team_resize(context, 0), FESCUE_OK);
    assert_in_range(team_workers(context), 1, sysconf(_SC_NPROCESSORS_CONF));
    assert_status(context, team_resize(context, 1), FESCUE_OK);
    /* A joined thread may still be listed for a moment. */
    for (int k = 0; k < 1000 && threads_of_the_process() > before; k++)
        usleep(1000);
    assert_in_range(threads_of_the_process(), 1, before);
}

/* A stack larger than the address space: no thread can be started. */
static void threads_that_do_not_start_are_told(void **state)
{
    fescue_context *context = bench_of(state)->context;
    pthread_attr_t normal, huge;
    _Atomic unsigned done = 0;
    assert_status(context, team_resize(context, 3), FESCUE_OK);
    pthread_getattr_default_np(&normal);
    pthread_attr_init(&huge);
    assert_int_equal(pthread_attr_setstacksize(&huge, (size_t)1 << 62), 0);
    assert_int_equal(pthread_setattr_default_np(&huge), 0);
    fescue_status status = team_resize(context, 8);
    pthread_setattr_default_np(&normal);
    pthread_attr_destroy(&normal);
    pthread_attr_destroy(&huge);
    assert_status(context, status, FESCUE_NO_MEMORY);
    assert_non_null(strstr(fescue_failure_text(context), "of 8 threads only 1 could be started"));
    assert_int_equal(team_workers(context), 1);
    team_run(context, 20, count_up, &done);
    assert_int_equal(atomic_load(&done), 20);
    assert_status(context, team_resize(context, 2), FESCUE_OK);
}

static void note_mask(void *job, size_t block, size_t worker)
{
    _Atomic unsigned *open_to_signals = job;
    sigset_t mask;
    pthread_sigmask(SIG_SETMASK, NULL, &mask);
    if (worker != 0 && !sigismember(&mask, SIGINT))
        atomic_fetch_add(open_to_signals, 1);
    await_other(open_to_signals + 1, block, worker);
}

static void signals_stay_with_the_caller(void **state)
{
    fescue_context *context = bench_of(state)->context;
    _Atomic unsigned counts[2] = {0, 0};
    sigset_t mask;
    assert_status(context, team_resize(context, 2), FESCUE_OK);
    team_run(context, 2, note_mask, counts);
    assert_int_equal(atomic_load(&counts[0]), 0);
    pthread_sigmask(SIG_SETMASK, NULL, &mask);
    assert_false(sigismember(&mask, SIGINT));
}

static void fail_with_number(void *job, size_t block, size_t worker)
{
    (void)worker;
    FAIL((fescue_context *)job, FESCUE_BAD_DATA, "block %zu, and once more block %zu", block, block);
}

static void one_failure_of_many_is_kept_whole(void **state)
{
    fescue_context *context = bench_of(state)->context;
    assert_status(context, team_resize(context, 4), FESCUE_OK);
    for (int round = 0; round < 50; round++) {
        size_t first = MOST_BLOCKS, again = MOST_BLOCKS + 1;
        fescue_failure_clear(context);
        team_run(context, 40, fail_with_number, context);
        assert_int_equal(sscanf(fescue_failure_text(context), "block %zu, and once more block %zu", &first, &again), 2);
        assert_int_equal(first, again);
        assert_in_range(first, 0, 39);
    }
}

static void *life_of_a_context(void *result)
{
    double *sums = result;
    double partial[SUM_BLOCKS * SUM_WIDTH] = {0};
    fescue_context *context;
    if (fescue_context_create(NULL, &context) != FESCUE_OK)
        return NULL;
    if (team_resize(context, 3) == FESCUE_OK) {
        team_run(context, SUM_BLOCKS, block_sum, partial);
        team_sum(context, partial, SUM_BLOCKS, SUM_WIDTH, sums);
    }
    fescue_context_destroy(&context);
    return NULL;
}

static void contexts_are_independent(void **state)
{
    enum { CONTEXTS = 4 };
    pthread_t threads[CONTEXTS];
    double sums[CONTEXTS][SUM_WIDTH] = {{0}};
    (void)state;
    for (int k = 0; k < CONTEXTS; k++)
        assert_int_equal(pthread_create(&threads[k], NULL, life_of_a_context, sums[k]), 0);
    for (int k = 0; k < CONTEXTS; k++)
        pthread_join(threads[k], NULL);
    assert_true(sums[0][0] != 0);
    for (int k = 1; k < CONTEXTS; k++)
        assert_memory_equal(sums[k], sums[0], sizeof sums[0]);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(every_block_is_done_once),       BENCH_TEST(sums_have_the_same_bits_for_any_team),
        BENCH_TEST(workers_work_at_the_same_time),  BENCH_TEST(rounds_follow_each_other),
        BENCH_TEST(teams_change_their_size),        BENCH_TEST(threads_that_do_not_start_are_told),
        BENCH_TEST(signals_stay_with_the_caller),   BENCH_TEST(one_failure_of_many_is_kept_whole),
        cmocka_unit_test(contexts_are_independent),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
