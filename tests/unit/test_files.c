/* SPDX-License-Identifier: MIT
 *
 * Reading, and the table of system calls.
 */
#include "support.h"

#include <errno.h>
#include <fcntl.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/stat.h>
#include <unistd.h>

/* Reads to the end in pieces of `piece` bytes; returns how many there were. */
static size_t read_all(fescue_context *context, const char *path, size_t piece, char *bytes)
{
    int descriptor;
    size_t count = 0, got;
    assert_status(context, file_open_read(context, path, &descriptor), FESCUE_OK);
    do {
        assert_status(context, file_read(context, path, descriptor, bytes + count, piece, &got), FESCUE_OK);
        count += got;
    } while (got > 0);
    file_close(context, &descriptor);
    assert_int_equal(descriptor, -1);
    return count;
}

static void a_file_is_read_whole(void **state)
{
    const struct bench *bench = bench_of(state);
    char path[PATH_SIZE], bytes[64];
    file_put(path_in(bench->folder, "well", path), "a\0b\xff\n", 5);
    for (size_t piece = 1; piece <= 6; piece++) {
        assert_int_equal(read_all(bench->context, path, piece, bytes), 5);
        assert_memory_equal(bytes, "a\0b\xff\n", 5);
    }
}

static void interrupted_and_short_reads_go_on(void **state)
{
    static const enum fault_kind kinds[] = {FAULT_OPEN, FAULT_READ, FAULT_SHORT_READ};
    const struct bench *bench = bench_of(state);
    char path[PATH_SIZE], bytes[64];
    file_put_text(path_in(bench->folder, "well", path), "0123456789");
    for (size_t k = 0; k < sizeof kinds / sizeof kinds[0]; k++) {
        fault_plan(kinds[k], 1, false, EINTR);
        assert_int_equal(read_all(bench->context, path, 4, bytes), 10);
        assert_true(fault_met());
        assert_memory_equal(bytes, "0123456789", 10);
    }
}

static void a_missing_file_is_named(void **state)
{
    const struct bench *bench = bench_of(state);
    char path[PATH_SIZE], sentence[2 * PATH_SIZE];
    int descriptor = 5;
    path_in(bench->folder, "no-such-well", path);
    assert_status(bench->context, file_open_read(bench->context, path, &descriptor), FESCUE_NO_INPUT);
    assert_int_equal(descriptor, -1);
    snprintf(sentence, sizeof sentence, "%s: cannot be opened: No such file or directory", path);
    assert_string_equal(fescue_failure_text(bench->context), sentence);
    file_close(bench->context, &descriptor);
}

static void a_read_error_is_named(void **state)
{
    const struct bench *bench = bench_of(state);
    char path[PATH_SIZE], sentence[2 * PATH_SIZE], byte;
    int descriptor;
    size_t got = 9;
    file_put_text(path_in(bench->folder, "well", path), "0123456789");
    assert_status(bench->context, file_open_read(bench->context, path, &descriptor), FESCUE_OK);
    fault_plan(FAULT_READ, 1, false, EIO);
    assert_status(bench->context, file_read(bench->context, path, descriptor, &byte, 1, &got), FESCUE_NO_INPUT);
    assert_int_equal(got, 0);
    snprintf(sentence, sizeof sentence, "%s: cannot be read: Input/output error", path);
    assert_string_equal(fescue_failure_text(bench->context), sentence);
    file_close(bench->context, &descriptor);
}

static void a_directory_is_no_input(void **state)
{
    const struct bench *bench = bench_of(state);
    int descriptor;
    char byte;
    size_t got;
    assert_status(bench->context, file_open_read(bench->context, bench->folder, &descriptor), FESCUE_OK);
    assert_status(bench->context, file_read(bench->context, bench->folder, descriptor, &byte, 1, &got),
                  FESCUE_NO_INPUT);
    assert_non_null(strstr(fescue_failure_text(bench->context), "Is a directory"));
    file_close(bench->context, &descriptor);
}

static void a_dash_is_standard_input(void **state)
{
    const struct bench *bench = bench_of(state);
    char path[PATH_SIZE], bytes[64];
    file_put_text(path_in(bench->folder, "well", path), "from a pipe");
    int before = dup(STDIN_FILENO), file = open(path, O_RDONLY);
    assert_int_equal(dup2(file, STDIN_FILENO), STDIN_FILENO);
    close(file);
    assert_int_equal(read_all(bench->context, "-", sizeof bytes, bytes), 11);
    assert_memory_equal(bytes, "from a pipe", 11);
    assert_int_equal(lseek(STDIN_FILENO, 0, SEEK_CUR), 11); /* it is still open */

    size_t got;
    fault_plan(FAULT_READ, 1, false, EIO);
    assert_status(bench->context, file_read(bench->context, "-", STDIN_FILENO, bytes, 1, &got), FESCUE_NO_INPUT);
    assert_string_equal(fescue_failure_text(bench->context), "standard input: cannot be read: Input/output error");
    dup2(before, STDIN_FILENO);
    close(before);
}

/* A signal that asks to stop ends a wait; without being asked the wait goes on (above). */
static void a_cancelled_wait_ends(void **state)
{
    const struct bench *bench = bench_of(state);
    char path[PATH_SIZE], byte;
    int descriptor, none;
    size_t got = 9;
    file_put_text(path_in(bench->folder, "well", path), "0");
    assert_status(bench->context, file_open_read(bench->context, path, &descriptor), FESCUE_OK);
    fescue_context_cancel(bench->context);
    fault_plan(FAULT_READ, 1, true, EINTR);
    assert_status(bench->context, file_read(bench->context, path, descriptor, &byte, 1, &got), FESCUE_STOPPED);
    assert_int_equal(got, 0);
    fault_plan(FAULT_OPEN, 1, true, EINTR);
    assert_status(bench->context, file_open_read(bench->context, path, &none), FESCUE_STOPPED);
    assert_int_equal(none, -1);
    fault_clear();
    assert_status(bench->context, file_read(bench->context, path, descriptor, &byte, 1, &got), FESCUE_OK);
    assert_int_equal(got, 1); /* what does not wait is not disturbed */
    file_close(bench->context, &descriptor);
}

static void the_posix_calls_can_be_put_back(void **state)
{
    const struct bench *bench = bench_of(state);
    char path[PATH_SIZE], bytes[64];
    file_put_text(path_in(bench->folder, "well", path), "0123456789");
    file_calls_set(bench->context, NULL);
    fault_plan(FAULT_READ, 1, true, EIO);
    assert_int_equal(read_all(bench->context, path, 64, bytes), 10);
    assert_int_equal(fault_calls(FAULT_READ), 0);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(a_file_is_read_whole),    BENCH_TEST(interrupted_and_short_reads_go_on),
        BENCH_TEST(a_missing_file_is_named), BENCH_TEST(a_read_error_is_named),
        BENCH_TEST(a_directory_is_no_input), BENCH_TEST(a_dash_is_standard_input),
        BENCH_TEST(a_cancelled_wait_ends),   BENCH_TEST(the_posix_calls_can_be_put_back),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
