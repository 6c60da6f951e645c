/* SPDX-License-Identifier: MIT
 *
 * The counting allocator and the arena.
 */
#include "support.h"

#include <stdlib.h>
#include <string.h>

static bool is_zero(const void *block, size_t count)
{
    const unsigned char *byte = block;
    for (size_t k = 0; k < count; k++)
        if (byte[k] != 0)
            return false;
    return true;
}

static void blocks_are_aligned_and_zeroed(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (size_t size = 1; size < 300; size += 7) {
        char *block;
        assert_status(context, TAKE(context, size, &block), FESCUE_OK);
        assert_int_equal((uintptr_t)block % 64, 0);
        assert_true(is_zero(block, size));
        memset(block, 0xab, size); /* so that the next one gets a dirty block back from the system */
        GIVE(context, &block);
        assert_null(block);
        GIVE(context, &block);
    }
}

static void counts_are_what_was_asked_for(void **state)
{
    fescue_context *context = bench_of(state)->context;
    double *a;
    char *b;
    assert_status(context, TAKE(context, 100, &a), FESCUE_OK);
    assert_status(context, TAKE(context, 30, &b), FESCUE_OK);
    struct fescue_memory now = fescue_memory_usage(context);
    assert_int_equal(now.blocks, 2);
    assert_int_equal(now.bytes, 830);
    assert_int_equal(now.peak_bytes, 830);
    assert_int_equal(now.calls, 2);
    GIVE(context, &a);
    now = fescue_memory_usage(context);
    assert_int_equal(now.blocks, 1);
    assert_int_equal(now.bytes, 30);
    assert_int_equal(now.peak_bytes, 830);
    GIVE(context, &b);
    assert_no_leak(context);
}

static void nothing_is_a_null_pointer(void **state)
{
    fescue_context *context = bench_of(state)->context;
    double *none = (double *)(uintptr_t)8;
    assert_status(context, TAKE(context, 0, &none), FESCUE_OK);
    assert_null(none);
    assert_status(context, memory_take(context, SIZE_MAX, 0, &none), FESCUE_OK);
    assert_null(none);
    assert_int_equal(fescue_memory_usage(context).calls, 0);
}

static void sizes_that_overflow_are_refused(void **state)
{
    static const size_t counts[] = {SIZE_MAX, SIZE_MAX / 8, SIZE_MAX / 8 + 1, SIZE_MAX / 16, SIZE_MAX - 63};
    fescue_context *context = bench_of(state)->context;
    for (size_t k = 0; k < sizeof counts / sizeof counts[0]; k++) {
        double *block = (double *)(uintptr_t)8;
        assert_status(context, TAKE(context, counts[k], &block), FESCUE_NO_MEMORY);
        assert_null(block);
        char *text = (char *)(uintptr_t)8;
        assert_status(context, TAKE(context, SIZE_MAX - k, &text), FESCUE_NO_MEMORY);
        assert_null(text);
    }
    char *copy;
    assert_status(context, memory_copy_text(context, "", SIZE_MAX, &copy), FESCUE_NO_MEMORY);
    assert_no_leak(context);

    size_t product = 0;
    assert_true(size_product(SIZE_MAX / 3, 3, &product));
    assert_int_equal(product, SIZE_MAX / 3 * 3);
    assert_false(size_product(SIZE_MAX / 3 + 1, 3, &product));
    assert_true(size_product(0, SIZE_MAX, &product));
    assert_int_equal(product, 0);
}

static void a_refusal_of_the_system_is_told(void **state)
{
    fescue_context *context = bench_of(state)->context;
    double *block = (double *)(uintptr_t)8;
    fault_plan(FAULT_TAKE, 1, false, 0);
    assert_status(context, TAKE(context, 150000, &block), FESCUE_NO_MEMORY);
    assert_null(block);
    assert_string_equal(fescue_failure_text(context), "the system has no 1.2 MB of memory left");
    assert_no_leak(context);
    assert_status(context, TAKE(context, 150000, &block), FESCUE_OK);
    GIVE(context, &block);
}

static void a_limit_holds(void **state)
{
    fescue_context *context = bench_of(state)->context;
    char *a, *b;
    memory_limit_set(context, 2000);
    assert_status(context, TAKE(context, 1200, &a), FESCUE_OK);
    assert_status(context, TAKE(context, 801, &b), FESCUE_NO_MEMORY);
    assert_string_equal(fescue_failure_text(context), "801 bytes more would pass the memory limit of 2 kB");
    assert_int_equal(fescue_memory_usage(context).bytes, 1200);
    assert_int_equal(fescue_memory_usage(context).peak_bytes, 1200);
    assert_status(context, TAKE(context, 800, &b), FESCUE_OK);
    memory_limit_set(context, 100); /* what is alive stays */
    GIVE(context, &a);
    assert_status(context, TAKE(context, 1, &a), FESCUE_NO_MEMORY);
    memory_limit_set(context, 0);
    assert_status(context, TAKE(context, 100000, &a), FESCUE_OK);
    GIVE(context, &a);
    GIVE(context, &b);
}

/* The sizes a message may name, as a person would write them. */
static void sizes_are_told_in_decimal_units(void **state)
{
    static const struct {
        size_t bytes;
        const char *words;
    } cases[] = {
        {1, "1 bytes "},
        {999, "999 bytes "},
        {1000, "1 kB "},
        {1049, "1 kB "},
        {1100, "1.1 kB "},
        {99999, "99.9 kB "},
        {123456, "123 kB "},
        {999999999, "999 MB "},
        {1500000000, "1.5 GB "},
        {7000000000000, "7 TB "},
        {12340000000000000, "12.3 PB "},
        {SIZE_MAX - 1000, "18.4 EB "},
    };
    fescue_context *context = bench_of(state)->context;
    memory_limit_set(context, 1);
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++) {
        char *kept, *block;
        memory_limit_set(context, 0);
        assert_status(context, TAKE(context, 1, &kept), FESCUE_OK);
        memory_limit_set(context, 1);
        fescue_failure_clear(context);
        assert_status(context, TAKE(context, cases[k].bytes, &block), FESCUE_NO_MEMORY);
        if (strncmp(fescue_failure_text(context), cases[k].words, strlen(cases[k].words)) != 0)
            fail_msg("\"%s\" does not begin with \"%s\"", fescue_failure_text(context), cases[k].words);
        GIVE(context, &kept);
    }
}

static void a_resized_block_keeps_its_head(void **state)
{
    fescue_context *context = bench_of(state)->context;
    uint32_t *block = NULL;
    assert_status(context, RESIZE(context, 10, &block), FESCUE_OK);
    for (uint32_t k = 0; k < 10; k++)
        block[k] = k + 1;
    assert_status(context, RESIZE(context, 1000, &block), FESCUE_OK);
    for (uint32_t k = 0; k < 10; k++)
        assert_int_equal(block[k], k + 1);
    assert_true(is_zero(block + 10, 990 * sizeof *block));
    assert_status(context, RESIZE(context, 4, &block), FESCUE_OK);
    assert_int_equal(block[3], 4);
    assert_int_equal(fescue_memory_usage(context).bytes, 16);

    uint32_t *same = block;
    assert_status(context, RESIZE(context, SIZE_MAX / 2, &block), FESCUE_NO_MEMORY);
    fault_plan(FAULT_TAKE, 1, false, 0);
    assert_status(context, RESIZE(context, 40, &block), FESCUE_NO_MEMORY);
    assert_ptr_equal(block, same);
    assert_int_equal(block[3], 4);
    assert_status(context, RESIZE(context, 0, &block), FESCUE_OK);
    assert_null(block);
    assert_no_leak(context);
}

static void a_smaller_block_is_never_refused(void **state)
{
    fescue_context *context = bench_of(state)->context;
    uint32_t *block = NULL;
    assert_status(context, RESIZE(context, 10, &block), FESCUE_OK);
    for (uint32_t k = 0; k < 10; k++)
        block[k] = k + 1;
    fault_plan(FAULT_TAKE, 1, false, 0);
    assert_status(context, RESIZE(context, 9, &block), FESCUE_OK);
    assert_true(fault_met());
    memory_limit_set(context, 50); /* no room for both for a moment */
    assert_status(context, RESIZE(context, 8, &block), FESCUE_OK);
    assert_string_equal(fescue_failure_text(context), "");
    for (uint32_t k = 0; k < 10; k++)
        assert_int_equal(block[k], k + 1);
    assert_int_equal(fescue_memory_usage(context).bytes, 40);
    assert_status(context, RESIZE(context, 2, &block), FESCUE_OK);
    assert_int_equal(fescue_memory_usage(context).bytes, 8);
    assert_int_equal(block[1], 2);
    GIVE(context, &block);
}

static void a_copied_text_ends_in_nul(void **state)
{
    fescue_context *context = bench_of(state)->context;
    char *copy;
    assert_status(context, memory_copy_text(context, "sedge and reed", 5, &copy), FESCUE_OK);
    assert_string_equal(copy, "sedge");
    GIVE(context, &copy);
    assert_status(context, memory_copy_text(context, NULL, 0, &copy), FESCUE_OK);
    assert_string_equal(copy, "");
    GIVE(context, &copy);
}

static void an_arena_is_one_block_of_aligned_pieces(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct arena arena = {0};
    for (size_t k = 0; k < 9; k++)
        arena_reserve(&arena, k, 13);
    assert_status(context, arena_open(context, &arena), FESCUE_OK);
    assert_int_equal(fescue_memory_usage(context).calls, 1);
    char *end = NULL;
    for (size_t k = 0; k < 9; k++) {
        char *piece = arena_carve(&arena, k, 13);
        assert_non_null(piece);
        assert_int_equal((uintptr_t)piece % 64, 0);
        assert_true(piece >= end && is_zero(piece, k * 13));
        memset(piece, 0xcd, k * 13);
        end = piece + k * 13;
    }
    arena_close(context, &arena);
    arena_close(context, &arena);
    arena_close(context, NULL);
    assert_no_leak(context);
}

static void an_empty_arena_opens(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct arena arena = {0};
    arena_reserve(&arena, 0, 8);
    assert_status(context, arena_open(context, &arena), FESCUE_OK);
    assert_non_null(arena_carve(&arena, 0, 8));
    arena_close(context, &arena);
}

static void an_arena_too_large_is_refused(void **state)
{
    static const struct {
        size_t count, size;
    } cases[] = {{SIZE_MAX, 8}, {SIZE_MAX, 1}, {SIZE_MAX - 100, 1}, {SIZE_MAX / 16, 15}};
    fescue_context *context = bench_of(state)->context;
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++) {
        struct arena arena = {0};
        arena_reserve(&arena, cases[k].count, cases[k].size);
        arena_reserve(&arena, cases[k].count, cases[k].size);
        assert_status(context, arena_open(context, &arena), FESCUE_NO_MEMORY);
        arena_close(context, &arena);
    }
}

static void a_failed_arena_can_be_closed(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct arena arena = {0};
    arena_reserve(&arena, 10, 8);
    fault_plan(FAULT_TAKE, 1, false, 0);
    assert_status(context, arena_open(context, &arena), FESCUE_NO_MEMORY);
    arena_close(context, &arena);
    assert_no_leak(context);
}

/* One block is taken and given back by each of many tasks at once: the counters end where they began. */
static void one_taken(void *job, size_t block, size_t worker)
{
    fescue_context *context = job;
    char *bytes;
    (void)worker;
    if (TAKE(context, block + 1, &bytes) == FESCUE_OK)
        GIVE(context, &bytes);
}

static void counters_are_safe_from_workers(void **state)
{
    fescue_context *context = bench_of(state)->context;
    assert_status(context, team_resize(context, 4), FESCUE_OK);
    team_run(context, 2000, one_taken, context);
    struct fescue_memory now = fescue_memory_usage(context);
    assert_int_equal(now.calls, 2000);
    assert_in_range(now.peak_bytes, 2000, 4 * 2000);
    assert_no_leak(context);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(blocks_are_aligned_and_zeroed),
        BENCH_TEST(counts_are_what_was_asked_for),
        BENCH_TEST(nothing_is_a_null_pointer),
        BENCH_TEST(sizes_that_overflow_are_refused),
        BENCH_TEST(a_refusal_of_the_system_is_told),
        BENCH_TEST(a_limit_holds),
        BENCH_TEST(sizes_are_told_in_decimal_units),
        BENCH_TEST(a_resized_block_keeps_its_head),
        BENCH_TEST(a_smaller_block_is_never_refused),
        BENCH_TEST(a_copied_text_ends_in_nul),
        BENCH_TEST(an_arena_is_one_block_of_aligned_pieces),
        BENCH_TEST(an_empty_arena_opens),
        BENCH_TEST(an_arena_too_large_is_refused),
        BENCH_TEST(a_failed_arena_can_be_closed),
        BENCH_TEST(counters_are_safe_from_workers),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
