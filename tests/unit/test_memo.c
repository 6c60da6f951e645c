/* SPDX-License-Identifier: MIT
 *
 * The memo: what is kept comes back, what is not of this job never does, and nothing about the file fails a job.
 */
#include "support.h"

#include <errno.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>
#include <zlib.h>

static const char identity[] = "version=1\nrank=3\n";

/* Long enough that a few bytes are worth keeping. */
static struct memo_work work_of(fescue_context *context, uint64_t digest)
{
    struct memo_work work = memo_begin(context, digest);
    struct timespec rest = {.tv_nsec = 1000000};
    nanosleep(&rest, NULL);
    return work;
}

static void keep_text(fescue_context *context, uint64_t digest, const char *text)
{
    struct memo_work work = work_of(context, digest);
    char bytes[64];
    assert_false(work.recalls);
    snprintf(bytes, sizeof bytes, "%s", text);
    const struct memo_part parts[] = {{bytes, 3}, {bytes + 3, strlen(bytes) - 3}};
    memo_keep(&work, parts, 2);
}

static void recall_text(fescue_context *context, uint64_t digest, const char *text)
{
    struct memo_work work = memo_begin(context, digest);
    char bytes[64] = "";
    assert_true(work.recalls);
    assert_true(memo_get(&work, bytes, strlen(text)));
    assert_string_equal(bytes, text);
    assert_false(memo_get(&work, bytes, 1));
}

/* A memo with two finished pieces and one at hand. */
static const char *memo_make(struct bench *bench, char path[PATH_SIZE])
{
    char state[] = "half way";
    path_in(bench->folder, "job.checkpoint", path);
    assert_status(bench->context, memo_open(bench->context, path, identity, 0), FESCUE_OK);
    assert_false(memo_goes_on(bench->context));
    keep_text(bench->context, 11, "first");
    keep_text(bench->context, 12, "second");
    struct memo_work work = memo_begin(bench->context, 13);
    const struct memo_part part = {state, sizeof state};
    fescue_context_cancel(bench->context);
    memo_tell(&work, &part, 1);
    memo_flush(bench->context); /* does not write over the state */
    memo_close(bench->context);
    assert_true(file_exists(path));
    assert_int_equal(folder_count(bench->folder), 1);
    return path;
}

static void what_is_kept_comes_back(void **state)
{
    struct bench *bench = bench_of(state);
    char path[PATH_SIZE], text[16] = "", short_text[4];
    memo_make(bench, path);
    fescue_context *context = test_context_create();
    assert_status(context, memo_open(context, path, identity, 300), FESCUE_OK);
    assert_true(memo_goes_on(context));
    assert_string_equal(memo_note(context), "");
    recall_text(context, 11, "first");
    recall_text(context, 12, "second");
    struct memo_work work = memo_begin(context, 13);
    const struct memo_part part = {text, sizeof "half way"}, small = {short_text, sizeof short_text};
    bool resumed;
    assert_false(work.recalls);
    assert_status(context, memo_resume(&work, &part, 1, &resumed), FESCUE_OK);
    assert_true(resumed);
    assert_string_equal(text, "half way");
    assert_status(context, memo_resume(&work, &small, 1, &resumed), FESCUE_OK);
    assert_false(resumed);
    double cpu;
    assert_true(memo_seconds_before(context, &cpu) > 0);
    memo_remove(context);
    assert_false(file_exists(path));
    memo_close(context);
    assert_no_leak(context);
    fescue_context_destroy(&context);
}

static void another_sequence_is_not_used(void **state)
{
    struct bench *bench = bench_of(state);
    char path[PATH_SIZE], text[16];
    bool resumed;
    memo_make(bench, path);
    fescue_context *context = test_context_create();
    assert_status(context, memo_open(context, path, identity, 300), FESCUE_OK);
    recall_text(context, 11, "first");
    assert_false(memo_begin(context, 99).recalls);
    struct memo_work work = memo_begin(context, 13);
    const struct memo_part part = {text, sizeof "half way"};
    assert_status(context, memo_resume(&work, &part, 1, &resumed), FESCUE_OK);
    assert_false(resumed);
    fescue_context_destroy(&context);
}

static void refused(const char *path, const char *asked, const char *sentence)
{
    fescue_context *context = test_context_create();
    assert_status(context, memo_open(context, path, asked, 300), FESCUE_OK);
    assert_false(memo_goes_on(context));
    if (strstr(memo_note(context), sentence) == NULL)
        fail_msg("\"%s\" is not in \"%s\"", sentence, memo_note(context));
    assert_false(memo_begin(context, 11).recalls);
    assert_string_equal(fescue_failure_text(context), "");
    fescue_context_destroy(&context);
}

static void another_identity_is_refused_with_a_sentence(void **state)
{
    char path[PATH_SIZE];
    memo_make(bench_of(state), path);
    refused(path, "version=1\nrank=4\n", "it has rank=3, this one rank=4; starting over");
    refused(path, "version=2\nrank=3\n", "it has version=1, this one version=2; starting over");
    refused(path, "version=1\nrank=3\nridge=1\n", "it has other options; starting over");
}

/* Whole, by its checksum, and yet of another program or layout. */
static void another_layout_is_refused_with_a_sentence(void **state)
{
    char path[PATH_SIZE];
    size_t count;
    memo_make(bench_of(state), path);
    for (size_t at = 0; at < 16; at += 8) {
        char *bytes = file_get(path, &count);
        assert_non_null(bytes);
        bytes[at] = (char)(bytes[at] + 1);
        uint32_t crc = (uint32_t)crc32(crc32(0, NULL, 0), (const Bytef *)bytes, (uInt)(count - sizeof crc));
        memcpy(bytes + count - sizeof crc, &crc, sizeof crc);
        file_put(path, bytes, count);
        refused(path, identity, at == 0 ? "not a checkpoint" : "a checkpoint of another version of this program");
        bytes[at] = (char)(bytes[at] - 1);
        file_put(path, bytes, count);
        free(bytes);
    }
}

/* Every byte is covered: changed or cut off, the file is not believed. */
static void a_broken_file_is_refused(void **state)
{
    struct bench *bench = bench_of(state);
    char path[PATH_SIZE];
    size_t count;
    memo_make(bench, path);
    char *bytes = file_get(path, &count);
    assert_true(count > 100);
    for (size_t k = 0; k < 2 * count; k++) {
        bool is_cut = k >= count;
        bytes[k % count] = (char)(bytes[k % count] ^ (is_cut ? 0 : 0x10));
        file_put(path, bytes, is_cut ? k - count : count);
        bytes[k % count] = (char)(bytes[k % count] ^ (is_cut ? 0 : 0x10));
        fescue_context *context = test_context_create();
        assert_status(context, memo_open(context, path, identity, 300), FESCUE_OK);
        assert_false(memo_goes_on(context));
        assert_non_null(strstr(memo_note(context), "starting over"));
        assert_string_equal(fescue_failure_text(context), "");
        fescue_context_destroy(&context);
    }
    free(bytes);
}

static void a_disk_that_fails_fails_no_job(void **state)
{
    static const enum fault_kind kinds[] = {FAULT_OPEN, FAULT_WRITE, FAULT_SYNC, FAULT_RENAME};
    struct bench *bench = bench_of(state);
    char path[PATH_SIZE];
    fescue_context *context = bench->context;
    path_in(bench->folder, "job.checkpoint", path);
    for (size_t k = 0; k < sizeof kinds / sizeof *kinds; k++) {
        assert_status(context, memo_open(context, path, identity, 0), FESCUE_OK);
        fault_plan(kinds[k], 1, true, ENOSPC);
        keep_text(context, 11, "first");
        assert_true(fault_met());
        fault_clear();
        assert_string_equal(fescue_failure_text(context), "");
        assert_int_equal(folder_count(bench->folder), 0);
        memo_flush(context);
        assert_int_equal(folder_count(bench->folder), 1);
        memo_remove(context);
        memo_close(context);
    }
}

static void without_a_memo_nothing_happens(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct memo_work work = memo_begin(context, 1);
    char text[] = "x";
    const struct memo_part part = {text, 1};
    bool resumed;
    assert_false(work.recalls);
    memo_keep(&work, &part, 1);
    memo_tell(&work, &part, 1);
    assert_status(context, memo_resume(&work, &part, 1, &resumed), FESCUE_OK);
    assert_false(resumed);
    memo_flush(context);
    memo_remove(context);
    assert_string_equal(memo_note(context), "");
}

int main(void)
{
    const struct CMUnitTest tests[] = {BENCH_TEST(what_is_kept_comes_back),
                                       BENCH_TEST(another_sequence_is_not_used),
                                       BENCH_TEST(another_identity_is_refused_with_a_sentence),
                                       BENCH_TEST(another_layout_is_refused_with_a_sentence),
                                       BENCH_TEST(a_broken_file_is_refused),
                                       BENCH_TEST(a_disk_that_fails_fails_no_job),
                                       BENCH_TEST(without_a_memo_nothing_happens)};
    return cmocka_run_group_tests_name("memo", tests, NULL, NULL);
}
