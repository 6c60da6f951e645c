/* SPDX-License-Identifier: MIT
 *
 * Locks: one holder, also within a process; what a dead one left is taken over.
 */
#include "support.h"

#include <errno.h>
#include <signal.h>
#include <stdio.h>
#include <string.h>
#include <sys/wait.h>
#include <unistd.h>

static void one_holds_at_a_time(void **state)
{
    struct bench *bench = bench_of(state);
    fescue_context *context = bench->context;
    struct lock first = {0}, second = {0};
    char path[PATH_SIZE], who[64];
    path_in(bench->folder, "lock", path);
    assert_status(context, lock_take(context, path, "the plan", 0, &first), FESCUE_OK);
    assert_status(context, lock_take(context, path, "the plan", 0, &second), FESCUE_CANNOT_CREATE);
    snprintf(who, sizeof who, "the plan: process %ld is at work on it", (long)getpid());
    assert_non_null(strstr(fescue_failure_text(context), who));
    fescue_failure_clear(context);
    lock_give(context, &second);
    assert_true(file_exists(path));
    lock_give(context, &first);
    assert_false(file_exists(path));
    assert_status(context, lock_take(context, path, "the plan", 0, &second), FESCUE_OK);
    lock_give(context, &second);
    lock_give(context, &second);
}

static void what_a_dead_process_left_is_taken_over(void **state)
{
    struct bench *bench = bench_of(state);
    struct lock lock = {0};
    char path[PATH_SIZE];
    int ready[2];
    path_in(bench->folder, "lock", path);
    assert_int_equal(pipe(ready), 0);
    pid_t child = fork();
    if (child == 0) {
        fescue_status status = lock_take(bench->context, path, "it", 0, &lock);
        if (write(ready[1], &status, sizeof status) > 0)
            pause();
        _exit(1);
    }
    fescue_status status = FESCUE_DEFECT;
    assert_int_equal(read(ready[0], &status, sizeof status), sizeof status);
    assert_int_equal(status, FESCUE_OK);
    assert_status(bench->context, lock_take(bench->context, path, "it", 0.2, &lock), FESCUE_CANNOT_CREATE);
    fescue_failure_clear(bench->context);
    kill(child, SIGKILL);
    waitpid(child, NULL, 0);
    assert_true(file_exists(path));
    assert_status(bench->context, lock_take(bench->context, path, "it", 0, &lock), FESCUE_OK);
    lock_give(bench->context, &lock);
    close(ready[0]);
    close(ready[1]);
}

static void a_place_that_is_none_is_told(void **state)
{
    struct bench *bench = bench_of(state);
    struct lock lock = {0};
    char path[PATH_SIZE];
    path_in(bench->folder, "nowhere/lock", path);
    assert_status(bench->context, lock_take(bench->context, path, "it", 0, &lock), FESCUE_CANNOT_CREATE);
    assert_non_null(strstr(fescue_failure_text(bench->context), "cannot be created"));
}

/* Hidden files of processes that are no more go; others stay. */
static void what_the_dead_left_is_swept(void **state)
{
    struct bench *bench = bench_of(state);
    char path[PATH_SIZE], name[128];
    pid_t child = fork();
    if (child == 0)
        _exit(0);
    snprintf(name, sizeof name, ".filled.csv.%ld.part", (long)child);
    file_put_text(path_in(bench->folder, name, path), "half");
    snprintf(name, sizeof name, ".cells.csv.%ld.part", (long)getpid());
    file_put_text(path_in(bench->folder, name, path), "ours");
    file_put_text(path_in(bench->folder, ".mine.part", path), "no number");
    file_put_text(path_in(bench->folder, "filled.csv.1.part", path), "not hidden");
    siginfo_t ended;
    assert_int_equal(waitid(P_PID, (id_t)child, &ended, WEXITED | WNOWAIT), 0); /* dead, and not yet looked at */
    assert_status(bench->context, output_sweep(bench->context, bench->folder), FESCUE_OK);
    assert_int_equal(folder_count(bench->folder), 3);
    waitpid(child, NULL, 0);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(one_holds_at_a_time), BENCH_TEST(what_a_dead_process_left_is_taken_over),
        BENCH_TEST(a_place_that_is_none_is_told), BENCH_TEST(what_the_dead_left_is_swept)};
    return cmocka_run_group_tests_name("lock", tests, NULL, NULL);
}
