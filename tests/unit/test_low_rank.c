/* SPDX-License-Identifier: MIT
 *
 * The matrix of low rank: shapes, ownership, entries.
 */
#include "support_geometry.h"

#include <errno.h>

/* Entry (i, k) of the left factor is 1 + i + 10 k, of the right one 2 + j - k; the spectrum 3, 2, 1. */
static void numbers_fill(struct low_rank *point)
{
    for (size_t k = 0; k < point->rank; k++) {
        for (size_t i = 0; i < point->rows; i++)
            MATRIX_AT(point->left, i, k) = 1 + (double)i + 10 * (double)k;
        for (size_t j = 0; j < point->columns; j++)
            MATRIX_AT(point->right, j, k) = 2 + (double)j - (double)k;
        point->spectrum[k] = (double)(point->rank - k);
    }
}

static void a_new_one_is_zero(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct low_rank point;
    assert_status(context, low_rank_create(context, 6, 4, 3, &point), FESCUE_OK);
    assert_true(point.rows == 6 && point.columns == 4 && point.rank == 3);
    assert_true(point.left.rows == 6 && point.left.columns == 3 && point.left.stride == factor_stride(3));
    assert_true(point.right.rows == 4 && point.right.columns == 3);
    for (size_t i = 0; i < 6; i++)
        for (size_t j = 0; j < 4; j++)
            assert_close(low_rank_entry(&point, i, j), 0, 0);
    low_rank_free(context, &point);
    assert_int_equal(point.rank, 0);
    assert_null(point.left.data);
    low_rank_free(context, &point);
    low_rank_free(context, NULL);
}

/* Worked by hand from the formula of the fill: entry (4, 2) = 3 (5)(4) + 2 (15)(3) + 1 (25)(2) = 200. */
static void an_entry_is_the_sum_over_components(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct low_rank point;
    assert_status(context, low_rank_create(context, 6, 4, 3, &point), FESCUE_OK);
    numbers_fill(&point);
    assert_close(low_rank_entry(&point, 4, 2), 200, 0);
    low_rank_free(context, &point);
}

static void a_copy_stands_alone(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct low_rank point, copy;
    assert_status(context, low_rank_create(context, 9, 11, 9, &point), FESCUE_OK);
    numbers_fill(&point);
    double entry = low_rank_entry(&point, 8, 10);
    assert_status(context, low_rank_copy(context, &point, &copy), FESCUE_OK);
    low_rank_free(context, &point);
    assert_true(copy.rows == 9 && copy.columns == 11 && copy.rank == 9);
    assert_close(low_rank_entry(&copy, 8, 10), entry, 0);
    low_rank_free(context, &copy);
}

static void rank_zero_is_the_zero_matrix(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct low_rank point, copy;
    assert_status(context, low_rank_create(context, 3, 2, 0, &point), FESCUE_OK);
    assert_close(low_rank_entry(&point, 2, 1), 0, 0);
    assert_status(context, low_rank_copy(context, &point, &copy), FESCUE_OK);
    assert_true(copy.rows == 3 && copy.columns == 2 && copy.rank == 0);
    low_rank_free(context, &copy);
    low_rank_free(context, &point);
}

/* A B' from plain sums, whether the factors are independent or one column repeats another. */
static void a_product_becomes_a_point(void **state)
{
    struct ground ground = ground_open(state);
    for (int kind = 0; kind < 2; kind++) {
        struct matrix a = normals(&ground, 11, 3), b = normals(&ground, 5, 3);
        for (size_t i = 0; i < a.rows && kind == 1; i++)
            MATRIX_AT(a, i, 2) = MATRIX_AT(a, i, 0);
        struct matrix product = times(&ground, a, false, b, true);
        struct low_rank point;
        assert_status(ground.context, low_rank_from_product(ground.context, a, b, &point), FESCUE_OK);
        assert_true(orthonormality(point.left) <= rounding(a) && orthonormality(point.right) <= rounding(b));
        assert_true(point.spectrum[0] >= point.spectrum[1] && point.spectrum[1] >= point.spectrum[2]);
        if (kind == 1)
            assert_close(point.spectrum[2], 0, rounding(a) * point.spectrum[0]);
        for (size_t i = 0; i < a.rows; i++)
            for (size_t j = 0; j < b.rows; j++)
                assert_close(low_rank_entry(&point, i, j), MATRIX_AT(product, i, j), rounding(a) * point.spectrum[0]);
        low_rank_free(ground.context, &point);
    }
    ground_close(&ground);
}

static fescue_status copy_again(fescue_context *context, const struct low_rank *point, struct low_rank *out)
{
    return low_rank_copy(context, point, out);
}
static fescue_status multiply_again(fescue_context *context, const struct low_rank *point, struct low_rank *out)
{
    return low_rank_from_product(context, point->left, point->right, out);
}

/* Every allocation fails in turn: a status, nothing alive but the original, and a rank of 0. */
static void no_memory_leaves_nothing(void **state)
{
    static fescue_status (*const makers[])(fescue_context *, const struct low_rank *,
                                           struct low_rank *) = {copy_again, multiply_again};
    fescue_context *context = bench_of(state)->context;
    struct low_rank point, made;
    assert_status(context, low_rank_create(context, 5, 4, 2, &point), FESCUE_OK);
    numbers_fill(&point);
    uint64_t before = fescue_memory_usage(context).blocks;
    for (size_t k = 0; k < sizeof makers / sizeof makers[0]; k++) {
        fescue_status status = FESCUE_NO_MEMORY;
        for (uint64_t nth = 1; status != FESCUE_OK; nth++) {
            fault_plan(FAULT_TAKE, nth, false, ENOMEM);
            status = makers[k](context, &point, &made);
            assert_int_equal(status, fault_met() ? FESCUE_NO_MEMORY : FESCUE_OK);
            assert_int_equal(made.rank, fault_met() ? 0 : 2);
            assert_int_equal(fescue_memory_usage(context).blocks, before + (fault_met() ? 0 : 1));
            assert_true(fault_met() || nth > 1);
            fault_clear();
        }
        low_rank_free(context, &made);
    }
    low_rank_free(context, &point);
}

/* A size that no machine has is refused, not wrapped around. */
static void absurd_sizes_are_refused(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct low_rank point;
    assert_int_equal(low_rank_create(context, SIZE_MAX / 2, SIZE_MAX / 2, 40, &point), FESCUE_NO_MEMORY);
    assert_int_equal(point.rank, 0);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(a_new_one_is_zero),
        BENCH_TEST(an_entry_is_the_sum_over_components),
        BENCH_TEST(a_product_becomes_a_point),
        BENCH_TEST(a_copy_stands_alone),
        BENCH_TEST(rank_zero_is_the_zero_matrix),
        BENCH_TEST(no_memory_leaves_nothing),
        BENCH_TEST(absurd_sizes_are_refused),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
