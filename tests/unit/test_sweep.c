/* SPDX-License-Identifier: MIT
 *
 * The loops over observed cells against plain loops in long double, for every instruction set this machine has, both
 * precisions and many ranks; and the same bits for 1, 2 and 7 workers.
 *
 * Bounds. With u the unit roundoff of the arithmetic, a sum of n products that is made in any order is off by at most
 * (n + 2) u sum |terms| (Higham 2002, Accuracy and Stability of Numerical Algorithms, section 3.1), to first order.
 * In single precision the plain loops take the factors as rounded to float, as the sweeps do.
 */
#include "numeric/numeric.h"
#include "support_table.h"

#include <float.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

static const size_t ranks[] = {1,  2,  3,  4,  5,  6,  7,  8,  9,  10, 11, 12, 13, 14, 15, 16, 17, 18, 19, 20,  21, 22,
                               23, 24, 25, 26, 27, 28, 29, 30, 31, 32, 33, 34, 35, 36, 37, 38, 39, 40, 64, 100, 256};
static const size_t few_ranks[] = {1, 7, 16, 33};
static const char *const kernels[] = {"portable", "avx2", "avx512"};
#define COUNT(array) (sizeof(array) / sizeof *(array))

/* A table, its factors and all that sweeps write. */
struct shop {
    fescue_context *context;
    struct cells cells;
    size_t rank;
    double roundoff; /* of the store's precision */
    struct arena arena;
    struct matrix left, right, a, b, gradient, weights;
    double *residual_double;
    float *residual_single;
    void *residual;
    struct sweep sweep;
};

/* 80 x 60 with lines of all small lengths, some of them empty, and one full row. */
static void small_table(fescue_context *context, enum fescue_precision precision, struct cells *cells)
{
    struct triplet_list list = {.precision = precision};
    struct random_stream stream = random_open(7, RANDOM_TEST, 1);
    for (uint32_t i = 0; i < 80; i++)
        for (uint32_t j = 0; j < 60; j++)
            if (i == 40 || (i % 13 > 0 && random_uniform(&stream) < (double)(i % 13) / 20 && j % 11 > 0))
                assert_status(context, triplets_append(context, &list, i, j, random_normal(&stream)), FESCUE_OK);
    assert_status(context, cells_build(context, 80, 60, &list, cells), FESCUE_OK);
    triplets_free(context, &list);
}

static void large_table(fescue_context *context, enum fescue_precision precision, struct cells *cells)
{
    const struct sowing sowing = {
        .rows = 400, .columns = 300, .rank = 2, .share = 0.3, .noise = 1, .precision = precision, .seed = 3};
    sow_cells(context, &sowing, cells);
}

static void matrix_draw(struct matrix a, struct random_stream *stream)
{
    for (size_t i = 0; i < a.rows; i++)
        for (size_t j = 0; j < a.columns; j++)
            MATRIX_AT(a, i, j) = random_normal(stream);
}

static void shop_open(struct shop *shop, fescue_context *context, const struct cells *cells, size_t rank)
{
    struct random_stream stream = random_open(rank, RANDOM_TEST, 2);
    struct matrix *const tall[] = {&shop->left, &shop->a, &shop->gradient, &shop->weights};
    struct matrix *const wide[] = {&shop->right, &shop->b};
    *shop = (struct shop){.context = context, .cells = *cells, .rank = rank};
    shop->roundoff = cells->precision == FESCUE_SINGLE ? FLT_EPSILON / 2 : DBL_EPSILON / 2;
    for (size_t m = 0; m < COUNT(tall); m++)
        matrix_reserve(&shop->arena, cells->rows, rank);
    for (size_t m = 0; m < COUNT(wide); m++)
        matrix_reserve(&shop->arena, cells->columns, rank);
    arena_reserve(&shop->arena, cells->count, sizeof(double));
    arena_reserve(&shop->arena, cells->count, sizeof(float));
    assert_status(context, arena_open(context, &shop->arena), FESCUE_OK);
    for (size_t m = 0; m < COUNT(tall); m++)
        *tall[m] = matrix_carve(&shop->arena, cells->rows, rank);
    for (size_t m = 0; m < COUNT(wide); m++)
        *wide[m] = matrix_carve(&shop->arena, cells->columns, rank);
    shop->residual_double = arena_carve(&shop->arena, cells->count, sizeof(double));
    shop->residual_single = arena_carve(&shop->arena, cells->count, sizeof(float));
    shop->residual = cells->precision == FESCUE_SINGLE ? (void *)shop->residual_single : shop->residual_double;
    matrix_draw(shop->left, &stream);
    matrix_draw(shop->a, &stream);
    matrix_draw(shop->right, &stream);
    matrix_draw(shop->b, &stream);
    assert_status(context, sweep_create(context, cells, rank, &shop->sweep), FESCUE_OK);
}

static void shop_close(struct shop *shop)
{
    sweep_destroy(&shop->sweep);
    arena_close(shop->context, &shop->arena);
}

static double residual_at(const struct shop *shop, uint64_t k)
{
    return shop->cells.precision == FESCUE_SINGLE ? (double)shop->residual_single[k] : shop->residual_double[k];
}

/* Entry as the sweep sees it. */
static double seen(const struct shop *shop, struct matrix m, size_t i, size_t j)
{
    double entry = MATRIX_AT(m, i, j);
    return shop->cells.precision == FESCUE_SINGLE ? (double)(float)entry : entry;
}

/* l_i . r_j, and the sum of the sizes of its terms. */
static double product_at(const struct shop *shop, struct matrix l, size_t i, struct matrix r, size_t j, double *size)
{
    long double sum = 0;
    *size = 0;
    for (size_t c = 0; c < shop->rank; c++) {
        long double term = (long double)seen(shop, l, i, c) * (long double)seen(shop, r, j, c);
        sum += term;
        *size += fabs((double)term);
    }
    return (double)sum;
}

/* ---- what each operation should give ------------------------------------------------------------------------------
 */

/* A term meets the roundings of a chunk in the store's precision, some 36, and the rest in double. */
enum { ROUNDINGS = 40 };

/* product = R V, R as it stands in shop->residual */
static void product_check(const struct shop *shop, struct matrix product)
{
    const struct half *half = &shop->cells.by_row;
    for (uint32_t i = 0; i < half->lines; i++)
        for (size_t c = 0; c < product.stride; c++) {
            long double sum = 0;
            double size = 0;
            for (uint64_t k = half->start[i]; c < shop->rank && k < half->start[i + 1]; k++) {
                double r = residual_at(shop, k), v = seen(shop, shop->right, half->across[k], c);
                sum += (long double)r * (long double)v;
                size += fabs(r * v);
            }
            assert_close(MATRIX_AT(product, i, c), (double)sum,
                         ROUNDINGS * shop->roundoff * size * (1 + 1e-9) + 1e-13 * fabs((double)sum));
        }
}

static void residual_check(struct shop *shop)
{
    const struct half *half = &shop->cells.by_row;
    double square, want_square = 0, want_absolute = 0, got_square, got_absolute, slack = 0, absolute_slack = 0, size;
    sweep_residual(&shop->sweep, half, shop->left, shop->right, shop->gradient, shop->residual, &square);
    for (uint32_t i = 0; i < half->lines; i++)
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++) {
            double x = cells_value(&shop->cells, half, k);
            double want = product_at(shop, shop->left, i, shop->right, half->across[k], &size) - x;
            double bound = (double)(shop->rank + 3) * shop->roundoff * (size + fabs(x));
            assert_close(residual_at(shop, k), want, bound);
            want_square += want * want;
            want_absolute += fabs(want);
            slack += 2 * fabs(want) * bound + bound * bound;
            absolute_slack += bound;
        }
    double rounding = 1e-12; /* of sums in double over some 1e4 cells */
    assert_close(square, want_square, slack + rounding * want_square);
    sweep_errors(&shop->sweep, half, shop->left, shop->right, &got_square, &got_absolute);
    assert_close(got_square, want_square, slack + rounding * want_square);
    sweep_residual(&shop->sweep, half, shop->left, shop->right, (struct matrix){0}, NULL, &square);
    assert_true(memcmp(&got_square, &square, sizeof square) == 0);
    assert_close(got_absolute, want_absolute, absolute_slack + rounding * want_absolute);
    product_check(shop, shop->gradient);
}

/* The product with the residuals of residual_check is its gradient, by another road. */
static void multiply_check(struct shop *shop)
{
    sweep_multiply(&shop->sweep, &shop->cells.by_row, shop->residual, shop->right, shop->weights);
    product_check(shop, shop->weights);
}

static void tangent_check(struct shop *shop)
{
    const struct half *half = &shop->cells.by_row;
    double zr, zz, want_zr = 0, want_zz = 0, slack_zr = 0, slack_zz = 0, size_a, size_b;
    sweep_tangent(&shop->sweep, half, shop->a, shop->right, shop->left, shop->b, shop->residual, &zr, &zz);
    for (uint32_t i = 0; i < half->lines; i++)
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++) {
            double z = product_at(shop, shop->a, i, shop->right, half->across[k], &size_a) +
                       product_at(shop, shop->left, i, shop->b, half->across[k], &size_b);
            double r = residual_at(shop, k);
            double bound = (double)(2 * shop->rank + 3) * shop->roundoff * (size_a + size_b);
            want_zr += z * r;
            want_zz += z * z;
            slack_zr += (bound + 1e-12 * fabs(z)) * fabs(r);
            slack_zz += 2 * fabs(z) * bound + bound * bound + 1e-12 * z * z;
        }
    assert_close(zr, want_zr, slack_zr);
    assert_close(zz, want_zz, slack_zz);
}

/* Ridge least squares: at the minimum  sum_j (w . p_j - x_j) p_j + ridge w = 0, up to rounding of its terms. And
   L L' = sum_j p_j p_j' + ridge, entry by entry. */
static void solve_check(struct shop *shop)
{
    const struct half *half = &shop->cells.by_row;
    size_t rank = shop->rank, size = packed_size(rank);
    double *ridge = calloc(rank, sizeof *ridge), *factors = calloc(half->lines * size, sizeof *factors), term;
    assert_true(ridge != NULL && factors != NULL);
    for (size_t c = 0; c < rank; c++)
        ridge[c] = 0.5 + (double)(c % 5);
    sweep_solve(&shop->sweep, half, shop->right, ridge, shop->weights, factors);
    for (uint32_t i = 0; i < half->lines; i++) {
        uint64_t first = half->start[i], end = half->start[i + 1];
        const double *factor = factors + i * size;
        for (size_t c = 0; c < rank; c++) {
            double rest = ridge[c] * MATRIX_AT(shop->weights, i, c), terms = fabs(rest);
            for (uint64_t k = first; k < end; k++) {
                double x = cells_value(&shop->cells, half, k), p = seen(shop, shop->right, half->across[k], c);
                double at = 0;
                for (size_t d = 0; d < rank; d++) {
                    term = MATRIX_AT(shop->weights, i, d) * seen(shop, shop->right, half->across[k], d);
                    at += term;
                    terms += fabs(term * p);
                }
                rest += (at - x) * p;
                terms += fabs(x * p);
            }
            assert_close(rest, 0, (double)(rank + 40) * 4 * shop->roundoff * terms);
            if (first == end)
                assert_true(MATRIX_AT(shop->weights, i, c) == 0);
            for (size_t d = 0; d <= c; d++) {
                double want = c == d ? ridge[c] : 0, got = 0, sum = want, sizes = 0;
                for (uint64_t k = first; k < end; k++) {
                    term = seen(shop, shop->right, half->across[k], c) * seen(shop, shop->right, half->across[k], d);
                    want += term;
                    sum += fabs(term);
                }
                for (size_t e = 0; e <= d; e++) {
                    term = factor[c * (c + 1) / 2 + e] * factor[d * (d + 1) / 2 + e];
                    got += term;
                    sizes += fabs(term);
                }
                assert_close(got, want, 40 * shop->roundoff * sum + (double)(rank + 40) * DBL_EPSILON * (sizes + sum));
            }
        }
    }
    free(ridge);
    free(factors);
}

static void all_check(fescue_context *context, const char *kernel, enum fescue_precision precision)
{
    struct cells cells;
    struct shop shop;
    assert_int_equal(setenv("FESCUE_KERNEL", kernel, 1), 0);
    small_table(context, precision, &cells);
    for (size_t r = 0; r < COUNT(ranks); r++) {
        shop_open(&shop, context, &cells, ranks[r]);
        if (strcmp(shop.sweep.kernel, kernel) == 0) {
            residual_check(&shop);
            multiply_check(&shop);
            tangent_check(&shop);
            if (ranks[r] <= 100 || strcmp(kernel, "portable") != 0)
                solve_check(&shop);
        }
        shop_close(&shop);
    }
    cells_free(context, &cells);
    unsetenv("FESCUE_KERNEL");
}

static void sweeps_agree_with_plain_loops_in_double(void **state)
{
    for (size_t k = 0; k < COUNT(kernels); k++)
        all_check(bench_of(state)->context, kernels[k], FESCUE_DOUBLE);
}

static void sweeps_agree_with_plain_loops_in_single(void **state)
{
    for (size_t k = 0; k < COUNT(kernels); k++)
        all_check(bench_of(state)->context, kernels[k], FESCUE_SINGLE);
}

/* ---- bits ---------------------------------------------------------------------------------------------------------
 */

static uint64_t digest(uint64_t before, const void *bytes, size_t count)
{
    const unsigned char *byte = bytes;
    for (size_t k = 0; k < count; k++)
        before = (before ^ byte[k]) * 0x100000001b3u; /* FNV-1a */
    return before;
}

/* Of everything that all operations write, in both directions. */
static uint64_t shop_digest(struct shop *shop)
{
    double number[7];
    uint64_t all = 0xcbf29ce484222325u;
    const struct half *row = &shop->cells.by_row, *column = &shop->cells.by_column;
    size_t tall = shop->gradient.rows * shop->gradient.stride * sizeof(double);
    size_t wide = shop->b.rows * shop->b.stride * sizeof(double);
    size_t value = shop->cells.precision == FESCUE_SINGLE ? sizeof(float) : sizeof(double);
    sweep_residual(&shop->sweep, row, shop->left, shop->right, shop->gradient, shop->residual, &number[0]);
    sweep_tangent(&shop->sweep, row, shop->a, shop->right, shop->left, shop->b, shop->residual, &number[1], &number[2]);
    sweep_errors(&shop->sweep, column, shop->right, shop->left, &number[3], &number[4]);
    sweep_solve(&shop->sweep, row, shop->right, NULL, shop->weights, NULL);
    all = digest(all, number, 5 * sizeof *number);
    all = digest(all, shop->gradient.data, tall);
    all = digest(all, shop->weights.data, tall);
    all = digest(all, shop->residual, shop->cells.count * value);
    sweep_multiply(&shop->sweep, column, column->value, shop->left, shop->b);
    return digest(all, shop->b.data, wide);
}

static void workers_leave_no_trace(void **state)
{
    static const size_t workers[] = {1, 2, 7};
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    struct shop shop;
    for (int precision = FESCUE_DOUBLE; precision <= FESCUE_SINGLE; precision++) {
        large_table(context, (enum fescue_precision)precision, &cells);
        assert_true(cells.by_row.blocks >= 5);
        for (size_t k = 0; k < COUNT(kernels); k++)
            for (size_t r = 0; r < COUNT(few_ranks); r++) {
                uint64_t first = 0;
                setenv("FESCUE_KERNEL", kernels[k], 1);
                for (size_t w = 0; w < COUNT(workers); w++) {
                    assert_status(context, team_resize(context, workers[w]), FESCUE_OK);
                    shop_open(&shop, context, &cells, few_ranks[r]);
                    uint64_t bits = shop_digest(&shop);
                    first = w == 0 ? bits : first;
                    assert_true(bits == first);
                    shop_close(&shop);
                }
            }
        cells_free(context, &cells);
    }
    unsetenv("FESCUE_KERNEL");
}

/* ---- slabs --------------------------------------------------------------------------------------------------------
 */

/* 60 001 x 40: four slabs, the last one shorter; some columns end in the second, and one is empty. */
static void long_table(fescue_context *context, enum fescue_precision precision, struct cells *cells)
{
    struct triplet_list list = {.precision = precision};
    struct random_stream stream = random_open(7, RANDOM_TEST, 5);
    for (uint32_t i = 0; i < 60001; i++)
        for (uint32_t j = 0; j < 40; j++)
            if (j != 11 && (j != 12 || i < 20000) && random_uniform(&stream) < (j == 13 ? 0.05 : 0.005))
                assert_status(context, triplets_append(context, &list, i, j, random_normal(&stream)), FESCUE_OK);
    assert_status(context, cells_build(context, 60001, 40, &list, cells), FESCUE_OK);
    triplets_free(context, &list);
}

/* Column j of R'U in long double, and the sums of the sizes of its terms. */
static void column_gradient(const struct shop *shop, uint32_t j, size_t c, long double *sum, double *size)
{
    const struct half *half = &shop->cells.by_column;
    double terms;
    *sum = 0;
    *size = 0;
    for (uint64_t k = half->start[j]; k < half->start[j + 1]; k++) {
        double x = cells_value(&shop->cells, half, k), u = seen(shop, shop->left, half->across[k], c);
        double r = product_at(shop, shop->right, j, shop->left, half->across[k], &terms) - x;
        *sum += (long double)r * (long double)u;
        *size += (terms + fabs(x)) * fabs(u);
    }
}

static void slabs_check(struct shop *shop)
{
    const struct half *half = &shop->cells.by_column;
    double square, slabs_square, absolute, zz, slabs_zz;
    struct matrix product = shop->b;
    sweep_tangent(&shop->sweep, half, shop->right, shop->left, shop->right, shop->left, NULL, NULL, &zz);
    sweep_residual(&shop->sweep, half, shop->right, shop->left, product, NULL, &square);
    assert_null(shop->sweep.slabs);
    assert_status(shop->context, sweep_arrange(&shop->sweep, half), FESCUE_OK);
    assert_non_null(shop->sweep.slabs);
    sweep_residual(&shop->sweep, half, shop->right, shop->left, product, NULL, &slabs_square);
    assert_close(slabs_square, square, (1e-13 + ROUNDINGS * shop->roundoff) * square);
    sweep_tangent(&shop->sweep, half, shop->right, shop->left, shop->right, shop->left, NULL, NULL, &slabs_zz);
    assert_close(slabs_zz, zz, (1e-13 + ROUNDINGS * shop->roundoff) * zz);
    sweep_errors(&shop->sweep, half, shop->right, shop->left, &square, &absolute);
    assert_close(square, slabs_square, (1e-13 + ROUNDINGS * shop->roundoff) * square);
    for (uint32_t j = 0; j < half->lines; j++)
        for (size_t c = 0; c < product.stride; c++) {
            long double want = 0;
            double size = 0;
            if (c < shop->rank)
                column_gradient(shop, j, c, &want, &size);
            assert_close(MATRIX_AT(product, j, c), (double)want,
                         (double)(shop->rank + 3 + ROUNDINGS) * shop->roundoff * size);
        }
    /* with the values as they stand in the half: the residual of factors that are zero, but for its sign */
    matrix_zero(shop->right);
    sweep_residual(&shop->sweep, half, shop->right, shop->left, shop->gradient, NULL, &square);
    sweep_multiply(&shop->sweep, half, half->value, shop->left, product);
    for (uint32_t j = 0; j < half->lines; j++)
        for (size_t c = 0; c < product.stride; c++) {
            long double sum = 0;
            double size = 0;
            if (c < shop->rank)
                column_gradient(shop, j, c, &sum, &size);
            assert_close(MATRIX_AT(product, j, c), (double)-sum, ROUNDINGS * shop->roundoff * size);
            assert_close(MATRIX_AT(shop->gradient, j, c), (double)sum, ROUNDINGS * shop->roundoff * size);
        }
}

static void slabs_agree_with_plain_loops(void **state)
{
    static const size_t some_ranks[] = {1, 5, 8, 11, 16, 33};
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    struct shop shop;
    for (int precision = FESCUE_DOUBLE; precision <= FESCUE_SINGLE; precision++) {
        long_table(context, (enum fescue_precision)precision, &cells);
        for (size_t k = 0; k < COUNT(kernels); k++)
            for (size_t r = 0; r < COUNT(some_ranks); r++) {
                setenv("FESCUE_KERNEL", kernels[k], 1);
                shop_open(&shop, context, &cells, some_ranks[r]);
                shop.gradient.rows = cells.columns;
                slabs_check(&shop);
                shop_close(&shop);
            }
        cells_free(context, &cells);
    }
    unsetenv("FESCUE_KERNEL");
}

/* Rows of a slab in rank 5 are few enough for a copy of each worker's own; those of rank 40 are not. */
static void workers_leave_no_trace_in_slabs(void **state)
{
    static const size_t workers[] = {1, 2, 7}, slab_ranks[] = {5, 40};
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    struct shop shop;
    for (int precision = FESCUE_DOUBLE; precision <= FESCUE_SINGLE; precision++) {
        long_table(context, (enum fescue_precision)precision, &cells);
        for (size_t r = 0; r < COUNT(slab_ranks); r++) {
            uint64_t first = 0;
            for (size_t w = 0; w < COUNT(workers); w++) {
                double square;
                assert_status(context, team_resize(context, workers[w]), FESCUE_OK);
                shop_open(&shop, context, &cells, slab_ranks[r]);
                assert_status(context, sweep_arrange(&shop.sweep, &cells.by_column), FESCUE_OK);
                sweep_residual(&shop.sweep, &cells.by_column, shop.right, shop.left, shop.b, NULL, &square);
                uint64_t bits = digest(digest(0, &square, sizeof square), shop.b.data,
                                       cells.columns * shop.b.stride * sizeof(double));
                first = w == 0 ? bits : first;
                assert_true(bits == first);
                shop_close(&shop);
            }
        }
        cells_free(context, &cells);
    }
}

static void slabs_need_memory(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    struct sweep sweep;
    long_table(context, FESCUE_SINGLE, &cells);
    for (uint64_t take = 1; take <= 5; take++) {
        assert_status(context, sweep_create(context, &cells, 4, &sweep), FESCUE_OK);
        fault_plan(FAULT_TAKE, take, false, 0);
        assert_status(context, sweep_arrange(&sweep, &cells.by_column), FESCUE_NO_MEMORY);
        fault_clear();
        fescue_failure_clear(context);
        assert_null(sweep.slabs);
        sweep_destroy(&sweep);
    }
    cells_free(context, &cells);
    assert_no_leak(context);
}

/* ---- corners ------------------------------------------------------------------------------------------------------
 */

static void rank_0_leaves_the_values(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    struct shop shop;
    double square, absolute, want = 0;
    small_table(context, FESCUE_DOUBLE, &cells);
    shop_open(&shop, context, &cells, 0);
    for (uint64_t k = 0; k < cells.count; k++)
        want += cells_value(&cells, &cells.by_row, k) * cells_value(&cells, &cells.by_row, k);
    sweep_errors(&shop.sweep, &cells.by_row, shop.left, shop.right, &square, &absolute);
    assert_close(square, want, 1e-12 * want);
    shop_close(&shop);
    cells_free(context, &cells);
}

static void no_cells_give_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct triplet_list none = {.precision = FESCUE_SINGLE};
    struct cells cells;
    struct shop shop;
    double square = 1, zr = 1, zz = 1;
    assert_status(context, cells_build(context, 5, 4, &none, &cells), FESCUE_OK);
    shop_open(&shop, context, &cells, 3);
    matrix_copy(shop.left, shop.gradient);
    matrix_copy(shop.left, shop.weights);
    sweep_residual(&shop.sweep, &cells.by_row, shop.left, shop.right, shop.gradient, NULL, &square);
    sweep_tangent(&shop.sweep, &cells.by_row, shop.a, shop.right, shop.left, shop.b, shop.residual, &zr, &zz);
    sweep_solve(&shop.sweep, &cells.by_row, shop.right, NULL, shop.weights, NULL);
    assert_true(square == 0 && zr == 0 && zz == 0);
    assert_true(matrix_norm(shop.gradient) == 0 && matrix_norm(shop.weights) == 0);
    shop_close(&shop);
    cells_free(context, &cells);
}

/* Factors inside wider ones: what lies beyond the next multiple of 8 is neither read nor written. */
static void views_of_wider_factors(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    struct shop wide, narrow;
    for (int precision = FESCUE_DOUBLE; precision <= FESCUE_SINGLE; precision++)
        for (size_t k = 0; k < COUNT(kernels); k++) {
            double square[2];
            setenv("FESCUE_KERNEL", kernels[k], 1);
            small_table(context, (enum fescue_precision)precision, &cells);
            shop_open(&wide, context, &cells, 24);
            shop_open(&narrow, context, &cells, 8);
            matrix_copy(matrix_left(wide.left, 8), narrow.left);
            matrix_copy(matrix_left(wide.right, 8), narrow.right);
            matrix_copy(wide.left, wide.gradient);
            sweep_residual(&wide.sweep, &cells.by_row, matrix_left(wide.left, 8), matrix_left(wide.right, 8),
                           matrix_left(wide.gradient, 8), NULL, &square[0]);
            sweep_residual(&narrow.sweep, &cells.by_row, narrow.left, narrow.right, narrow.gradient, NULL, &square[1]);
            assert_memory_equal(&square[0], &square[1], sizeof *square);
            for (size_t i = 0; i < cells.rows; i++) {
                assert_memory_equal(&MATRIX_AT(wide.gradient, i, 0), &MATRIX_AT(narrow.gradient, i, 0),
                                    8 * sizeof(double));
                assert_memory_equal(&MATRIX_AT(wide.gradient, i, 8), &MATRIX_AT(wide.left, i, 8), 16 * sizeof(double));
            }
            shop_close(&wide);
            shop_close(&narrow);
            cells_free(context, &cells);
        }
    unsetenv("FESCUE_KERNEL");
}

/* Fewer cells than unknowns and no ridge: finite weights, not large, that meet the cells. */
static void lines_with_few_cells_are_met(void **state)
{
    static const size_t many[] = {10, 16, 64};
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    struct shop shop;
    double square;
    for (int precision = FESCUE_DOUBLE; precision <= FESCUE_SINGLE; precision++)
        for (size_t k = 0; k < COUNT(kernels); k++)
            for (size_t r = 0; r < COUNT(many); r++) {
                setenv("FESCUE_KERNEL", kernels[k], 1);
                small_table(context, (enum fescue_precision)precision, &cells);
                shop_open(&shop, context, &cells, many[r]);
                sweep_solve(&shop.sweep, &cells.by_row, shop.right, NULL, shop.weights, NULL);
                sweep_residual(&shop.sweep, &cells.by_row, shop.weights, shop.right, shop.gradient, shop.residual,
                               &square);
                /* The lift against eigenvalues of size one, and rounding in the directions that only it holds. */
                double tolerance = precision == FESCUE_SINGLE ? 1e-2 : 1e-7;
                for (uint32_t i = 0; i < cells.rows; i++)
                    for (uint64_t c = cells.by_row.start[i]; c < cells.by_row.start[i + 1]; c++)
                        if (cells.by_row.start[i + 1] - cells.by_row.start[i] < many[r])
                            assert_close(residual_at(&shop, c), 0, tolerance);
                assert_close(matrix_norm(shop.weights), 0, 10 * sqrt((double)(cells.rows * many[r])));
                shop_close(&shop);
                cells_free(context, &cells);
            }
    unsetenv("FESCUE_KERNEL");
}

static void a_nan_poisons(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    struct shop shop;
    double square, absolute;
    small_table(context, FESCUE_DOUBLE, &cells);
    shop_open(&shop, context, &cells, 5);
    MATRIX_AT(shop.right, 3, 2) = (double)NAN;
    sweep_residual(&shop.sweep, &cells.by_row, shop.left, shop.right, shop.gradient, NULL, &square);
    assert_true(isnan(square));
    sweep_errors(&shop.sweep, &cells.by_row, shop.left, shop.right, &square, &absolute);
    assert_true(isnan(absolute));
    shop_close(&shop);
    cells_free(context, &cells);
}

static void memory_that_is_refused(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    struct sweep sweep;
    small_table(context, FESCUE_SINGLE, &cells);
    fault_plan(FAULT_TAKE, 1, false, 0);
    assert_status(context, sweep_create(context, &cells, 16, &sweep), FESCUE_NO_MEMORY);
    fault_clear();
    fescue_failure_clear(context);
    cells_free(context, &cells);
    assert_no_leak(context);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(sweeps_agree_with_plain_loops_in_double),
        BENCH_TEST(sweeps_agree_with_plain_loops_in_single),
        BENCH_TEST(workers_leave_no_trace),
        BENCH_TEST(slabs_agree_with_plain_loops),
        BENCH_TEST(workers_leave_no_trace_in_slabs),
        BENCH_TEST(slabs_need_memory),
        BENCH_TEST(rank_0_leaves_the_values),
        BENCH_TEST(no_cells_give_nothing),
        BENCH_TEST(views_of_wider_factors),
        BENCH_TEST(lines_with_few_cells_are_met),
        BENCH_TEST(a_nan_poisons),
        BENCH_TEST(memory_that_is_refused),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
