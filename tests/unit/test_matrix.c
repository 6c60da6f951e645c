/* SPDX-License-Identifier: MIT
 *
 * Views of matrices: one pass over them, sizes at the ends of the range, padding left alone.
 */
#include "numeric/numeric.h"
#include "support.h"

#include <float.h>
#include <math.h>
#include <string.h>

enum { ROWS = 37, COLUMNS = 11, STRIDE = 16 };

struct stand {
    struct arena arena;
    struct matrix a, b;
};

static void stand_open(void **state, struct stand *stand)
{
    fescue_context *context = bench_of(state)->context;
    struct random_stream stream = random_open(5, RANDOM_TEST, 1);
    *stand = (struct stand){0};
    matrix_reserve(&stand->arena, ROWS, COLUMNS);
    matrix_reserve(&stand->arena, ROWS, COLUMNS);
    assert_status(context, arena_open(context, &stand->arena), FESCUE_OK);
    stand->a = matrix_carve(&stand->arena, ROWS, COLUMNS);
    stand->b = matrix_carve(&stand->arena, ROWS, COLUMNS);
    for (size_t i = 0; i < ROWS; i++)
        for (size_t j = 0; j < COLUMNS; j++) {
            MATRIX_AT(stand->a, i, j) = random_normal(&stream);
            MATRIX_AT(stand->b, i, j) = random_normal(&stream);
        }
}

static void stand_close(void **state, struct stand *stand)
{
    arena_close(bench_of(state)->context, &stand->arena);
}

static void factors_are_padded_with_zeros(void **state)
{
    struct stand stand;
    stand_open(state, &stand);
    assert_int_equal(factor_stride(1), 8);
    assert_int_equal(factor_stride(8), 8);
    assert_int_equal(factor_stride(9), 16);
    assert_int_equal(stand.a.stride, STRIDE);
    assert_int_equal((uintptr_t)stand.a.data % 64, 0);
    matrix_add(2, stand.a, stand.b);
    matrix_scale(-3, stand.b);
    matrix_copy(stand.b, stand.a);
    for (size_t i = 0; i < ROWS; i++)
        for (size_t j = COLUMNS; j < STRIDE; j++)
            assert_true(MATRIX_AT(stand.a, i, j) == 0 && MATRIX_AT(stand.b, i, j) == 0);
    stand_close(state, &stand);
}

static void sums_are_those_of_plain_loops(void **state)
{
    struct stand stand;
    double dot = 0, size = 0;
    stand_open(state, &stand);
    for (size_t i = 0; i < ROWS; i++)
        for (size_t j = 0; j < COLUMNS; j++) {
            dot += MATRIX_AT(stand.a, i, j) * MATRIX_AT(stand.b, i, j);
            size += fabs(MATRIX_AT(stand.a, i, j) * MATRIX_AT(stand.b, i, j));
        }
    assert_close(matrix_dot(stand.a, stand.b), dot, ROWS * COLUMNS * DBL_EPSILON * size);
    assert_close(matrix_norm(stand.a), sqrt(matrix_dot(stand.a, stand.a)), 1e-14 * matrix_norm(stand.a));
    /* (a + 2 b).b - a.b = 2 b.b */
    double square = matrix_dot(stand.b, stand.b);
    matrix_add(2, stand.b, stand.a);
    assert_close(matrix_dot(stand.a, stand.b) - dot, 2 * square, 1e-12 * square);
    stand_close(state, &stand);
}

/* The same entries without gaps and with gaps full of rubbish. */
static void gaps_are_not_looked_at(void **state)
{
    struct stand stand;
    double tight[ROWS * COLUMNS];
    struct matrix without = {.data = tight, .rows = ROWS, .columns = COLUMNS, .stride = COLUMNS};
    stand_open(state, &stand);
    matrix_copy(stand.a, without);
    double norm = matrix_norm(stand.a);
    for (size_t i = 0; i < ROWS; i++)
        for (size_t j = COLUMNS; j < STRIDE; j++)
            MATRIX_AT(stand.a, i, j) = (double)NAN;
    assert_true(matrix_norm(stand.a) == norm);
    assert_close(matrix_norm(without), norm, 1e-14 * norm);
    matrix_copy(without, stand.a);
    matrix_zero(stand.a);
    assert_true(matrix_norm(stand.a) == 0 && isnan(MATRIX_AT(stand.a, 3, COLUMNS)));
    assert_int_equal(matrix_left(stand.b, 4).columns, 4);
    assert_true(matrix_norm(matrix_left(stand.b, 0)) == 0);
    stand_close(state, &stand);
}

static void norms_of_all_sizes(void **state)
{
    static const double sizes[] = {5e-324, 1e-310, 1e-200, 1e-150, 1, 1e150, 1e200, 1e307};
    struct stand stand;
    stand_open(state, &stand);
    double norm = matrix_norm(matrix_left(stand.a, 2));
    for (size_t s = 1; s < sizeof sizes / sizeof *sizes; s++) {
        matrix_copy(stand.a, stand.b);
        matrix_scale(sizes[s], stand.b);
        /* Below 1e-308 the entries themselves have lost digits. */
        double tolerance = sizes[s] < 1e-308 ? 1e-10 : 1e-13;
        assert_close(matrix_norm(matrix_left(stand.b, 2)) / sizes[s] / norm, 1, tolerance);
    }
    matrix_zero(stand.b);
    assert_true(matrix_norm(stand.b) == 0);
    MATRIX_AT(stand.b, 7, 3) = sizes[0];
    assert_true(matrix_norm(stand.b) == sizes[0]);
    stand_close(state, &stand);
}

static void what_is_not_finite_is_not_lost(void **state)
{
    struct stand stand;
    stand_open(state, &stand);
    MATRIX_AT(stand.a, 5, 5) = (double)INFINITY;
    assert_true(isinf(matrix_norm(stand.a)));
    MATRIX_AT(stand.a, 1, 1) = (double)NAN;
    assert_true(isnan(matrix_norm(stand.a)));
    MATRIX_AT(stand.a, 30, 5) = (double)INFINITY;
    MATRIX_AT(stand.a, 1, 1) = 1;
    MATRIX_AT(stand.a, 35, 1) = (double)NAN;
    assert_true(isnan(matrix_norm(stand.a)));
    stand_close(state, &stand);
}

static void columns_are_scaled(void **state)
{
    struct stand stand;
    double scale[COLUMNS];
    stand_open(state, &stand);
    for (size_t j = 0; j < COLUMNS; j++)
        scale[j] = (double)j - 3;
    matrix_copy(stand.a, stand.b);
    matrix_scale_columns(stand.b, scale);
    for (size_t i = 0; i < ROWS; i++)
        for (size_t j = 0; j < COLUMNS; j++)
            assert_true(MATRIX_AT(stand.b, i, j) == MATRIX_AT(stand.a, i, j) * scale[j]);
    stand_close(state, &stand);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(factors_are_padded_with_zeros),  BENCH_TEST(sums_are_those_of_plain_loops),
        BENCH_TEST(gaps_are_not_looked_at),         BENCH_TEST(norms_of_all_sizes),
        BENCH_TEST(what_is_not_finite_is_not_lost), BENCH_TEST(columns_are_scaled),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
