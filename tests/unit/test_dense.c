/* SPDX-License-Identifier: MIT
 *
 * Dense algebra by identities: Q'Q = I, Q R = A, U diag(s) V' = A on random vectors, and the like. An error is measured
 * against eps times the size of what was worked on; the factors in front are those of Higham 2002, Accuracy and
 * Stability of Numerical Algorithms, chapters 19 and 20: a modest constant times lines^1/2 columns.
 */
#include "numeric/kernel_internal.h"
#include "support.h"

#include <float.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

struct shape {
    size_t lines, columns;
};
static const struct shape shapes[] = {{1, 1},   {2, 2},    {7, 3},    {16, 16},   {40, 13},    {100, 100}, {300, 33},
                                      {600, 7}, {1000, 1}, {2000, 8}, {9000, 16}, {40000, 24}, {1300, 257}};
#define COUNT(array) (sizeof(array) / sizeof *(array))

struct stand {
    fescue_context *context;
    struct arena arena;
    struct matrix a, copy, r, square, product;
    double *s, *work;
};

static void stand_open(struct stand *stand, fescue_context *context, struct shape shape)
{
    struct random_stream stream = random_open(shape.lines + 1000 * shape.columns, RANDOM_TEST, 1);
    size_t work = dense_work_size(shape.lines, shape.columns);
    *stand = (struct stand){.context = context};
    for (int m = 0; m < 2; m++)
        matrix_reserve(&stand->arena, shape.lines, shape.columns);
    for (int m = 0; m < 3; m++)
        matrix_reserve(&stand->arena, shape.columns, shape.columns);
    arena_reserve(&stand->arena, shape.columns, sizeof(double));
    arena_reserve(&stand->arena, work, sizeof(double));
    assert_status(context, arena_open(context, &stand->arena), FESCUE_OK);
    stand->a = matrix_carve(&stand->arena, shape.lines, shape.columns);
    stand->copy = matrix_carve(&stand->arena, shape.lines, shape.columns);
    stand->r = matrix_carve(&stand->arena, shape.columns, shape.columns);
    stand->square = matrix_carve(&stand->arena, shape.columns, shape.columns);
    stand->product = matrix_carve(&stand->arena, shape.columns, shape.columns);
    stand->s = arena_carve(&stand->arena, shape.columns, sizeof(double));
    stand->work = arena_carve(&stand->arena, work, sizeof(double));
    for (size_t i = 0; i < shape.lines; i++)
        for (size_t j = 0; j < shape.columns; j++)
            MATRIX_AT(stand->a, i, j) = random_normal(&stream);
    matrix_copy(stand->a, stand->copy);
}

static void stand_close(struct stand *stand)
{
    arena_close(stand->context, &stand->arena);
}

static double tolerance_of(const struct stand *stand)
{
    return 20 * DBL_EPSILON * sqrt((double)stand->a.rows) * (double)stand->a.columns;
}

static void padding_check(struct matrix a)
{
    for (size_t i = 0; i < a.rows; i++)
        for (size_t j = a.columns; j < a.stride; j++)
            assert_true(MATRIX_AT(a, i, j) == 0);
}

/* |a'a - I|, by plain loops: they share nothing with what is tested. */
static void orthonormal_check(struct matrix a, double tolerance)
{
    for (size_t j = 0; j < a.columns; j++)
        for (size_t c = j < 4 ? 0 : j - 4; c <= j; c++) {
            double sum = 0;
            for (size_t i = 0; i < a.rows; i++)
                sum += MATRIX_AT(a, i, j) * MATRIX_AT(a, i, c);
            assert_close(sum, j == c, tolerance);
        }
}

/* |q r - a| for a random vector: q (r x) = a x. */
static void product_check(struct matrix q, struct matrix r, struct matrix a, double tolerance)
{
    struct random_stream stream = random_open(9, RANDOM_TEST, 2);
    double x[600], y[600], norm = matrix_norm(a);
    for (size_t j = 0; j < a.columns; j++)
        x[j] = random_normal(&stream);
    for (size_t j = 0; j < a.columns; j++) {
        y[j] = 0;
        for (size_t c = 0; c < a.columns; c++)
            y[j] += MATRIX_AT(r, j, c) * x[c];
    }
    for (size_t i = 0; i < a.rows; i++) {
        double got = 0, want = 0;
        for (size_t j = 0; j < a.columns; j++) {
            got += MATRIX_AT(q, i, j) * y[j];
            want += MATRIX_AT(a, i, j) * x[j];
        }
        assert_close(got, want, tolerance * norm);
    }
}

static void triangle_check(struct matrix r)
{
    for (size_t i = 0; i < r.rows; i++) {
        assert_true(MATRIX_AT(r, i, i) >= 0);
        for (size_t j = 0; j < i; j++)
            assert_true(MATRIX_AT(r, i, j) == 0);
    }
}

static void qr_check(struct stand *stand)
{
    assert_status(stand->context, dense_qr(stand->context, stand->a, stand->r, stand->work), FESCUE_OK);
    triangle_check(stand->r);
    orthonormal_check(stand->a, tolerance_of(stand));
    product_check(stand->a, stand->r, stand->copy, tolerance_of(stand));
    padding_check(stand->a);
    padding_check(stand->r);
}

static void qr_of_many_shapes(void **state)
{
    struct stand stand;
    for (size_t k = 0; k < COUNT(shapes); k++) {
        stand_open(&stand, bench_of(state)->context, shapes[k]);
        qr_check(&stand);
        stand_close(&stand);
    }
}

/* Columns that repeat, vanish, or nearly so; lengths that differ by 1e200. */
static void qr_of_deficient_matrices(void **state)
{
    static const struct shape many[] = {{20, 6}, {50, 9}, {5000, 9}, {20000, 16}};
    static const double nearly[] = {0, 1e-18, 1e-13, 1e-9, 1e-7, 1e-5, 1e-3};
    struct stand stand;
    for (size_t k = 0; k < COUNT(many); k++)
        for (size_t n = 0; n < COUNT(nearly); n++) {
            stand_open(&stand, bench_of(state)->context, many[k]);
            for (size_t i = 0; i < many[k].lines; i++) {
                double *row = &MATRIX_AT(stand.a, i, 0);
                row[2] = row[0] + nearly[n] * row[2];
                row[4] = nearly[n] * row[4];
                row[5] = row[1] - row[3] + nearly[n] * row[5];
            }
            matrix_copy(stand.a, stand.copy);
            qr_check(&stand);
            stand_close(&stand);
        }
}

/* Kahan 1966: an upper triangle s^i (1, -c, ..., -c), s^2 + c^2 = 1, with columns of length 1 and a diagonal that
   falls slowly, but a condition that grows as ((1 + c)/s)^k: its diagonal says too little. */
static void qr_of_kahans_triangle(void **state)
{
    static const struct shape shape = {3000, 64};
    static const double c[] = {0.1, 0.2, 0.25, 0.3, 0.33, 0.36, 0.4, 0.5};
    for (size_t n = 0; n < COUNT(c); n++) {
        struct stand stand;
        double s = sqrt(1 - c[n] * c[n]);
        stand_open(&stand, bench_of(state)->context, shape);
        assert_status(stand.context, dense_qr(stand.context, stand.copy, stand.r, stand.work), FESCUE_OK);
        for (size_t i = 0; i < shape.columns; i++)
            for (size_t j = 0; j < shape.columns; j++)
                MATRIX_AT(stand.square, i, j) = pow(s, (double)i) * (j == i ? 1 : j > i ? -c[n] : 0);
        matrix_multiply(1, stand.copy, false, stand.square, false, 0, stand.a);
        matrix_copy(stand.a, stand.copy);
        qr_check(&stand);
        stand_close(&stand);
    }
}

static void qr_of_extreme_sizes(void **state)
{
    static const double sizes[] = {0, 1e-300, 1e-150, 1e150, 1e300};
    static const struct shape shape = {6000, 5};
    struct stand stand;
    for (size_t n = 0; n < COUNT(sizes); n++) {
        stand_open(&stand, bench_of(state)->context, shape);
        matrix_scale(sizes[n], stand.a);
        matrix_copy(stand.a, stand.copy);
        qr_check(&stand);
        stand_close(&stand);
        const double scale[] = {1, 1e100, 1e-100, 1e-20, sizes[n]};
        stand_open(&stand, bench_of(state)->context, shape);
        matrix_scale_columns(stand.a, scale);
        assert_status(stand.context, dense_qr(stand.context, stand.a, stand.r, stand.work), FESCUE_OK);
        orthonormal_check(stand.a, tolerance_of(&stand));
        triangle_check(stand.r);
        stand_close(&stand);
    }
}

static void qr_without_r(void **state)
{
    struct stand stand;
    struct shape shape = {50, 6};
    stand_open(&stand, bench_of(state)->context, shape);
    assert_status(stand.context, dense_qr(stand.context, stand.a, (struct matrix){0}, stand.work), FESCUE_OK);
    orthonormal_check(stand.a, tolerance_of(&stand));
    stand_close(&stand);
}

static void qr_leaves_no_trace_of_workers(void **state)
{
    static const size_t workers[] = {1, 2, 7};
    static const struct shape shape = {60000, 12};
    fescue_context *context = bench_of(state)->context;
    struct stand stand;
    double first_q[8] = {0}, first_r[8] = {0}, first_s[8] = {0};
    for (size_t w = 0; w < COUNT(workers); w++) {
        assert_status(context, team_resize(context, workers[w]), FESCUE_OK);
        stand_open(&stand, context, shape);
        qr_check(&stand);
        if (w == 0) {
            memcpy(first_q, &MATRIX_AT(stand.a, 59999, 0), sizeof first_q);
            memcpy(first_r, &MATRIX_AT(stand.r, 0, 0), sizeof first_r);
        }
        assert_memory_equal(first_q, &MATRIX_AT(stand.a, 59999, 0), sizeof first_q);
        assert_memory_equal(first_r, &MATRIX_AT(stand.r, 0, 0), sizeof first_r);
        assert_status(context, dense_svd(context, stand.copy, stand.s, stand.r, stand.work), FESCUE_OK);
        if (w == 0)
            memcpy(first_s, &MATRIX_AT(stand.copy, 59999, 0), sizeof first_s);
        assert_memory_equal(first_s, &MATRIX_AT(stand.copy, 59999, 0), sizeof first_s);
        stand_close(&stand);
    }
}

typedef fescue_status decomposition(fescue_context *, struct matrix, double *, struct matrix, double *);

static void svd_check(struct stand *stand, decomposition *decompose)
{
    struct matrix v = stand->r;
    assert_status(stand->context, decompose(stand->context, stand->a, stand->s, v, stand->work), FESCUE_OK);
    orthonormal_check(stand->a, tolerance_of(stand));
    orthonormal_check(v, tolerance_of(stand));
    for (size_t j = 0; j < v.rows; j++) {
        assert_true(stand->s[j] >= 0 && (j == 0 || stand->s[j] <= stand->s[j - 1]));
        for (size_t c = 0; c < v.rows; c++)
            MATRIX_AT(stand->square, j, c) = stand->s[j] * MATRIX_AT(v, c, j);
    }
    product_check(stand->a, stand->square, stand->copy, tolerance_of(stand));
    padding_check(stand->a);
    padding_check(v);
}

static void svd_of_many_shapes(void **state)
{
    struct stand stand;
    for (size_t k = 0; k < COUNT(shapes); k++) {
        stand_open(&stand, bench_of(state)->context, shapes[k]);
        svd_check(&stand, dense_svd);
        stand_close(&stand);
        stand_open(&stand, bench_of(state)->context, shapes[k]);
        for (size_t i = 0; i < shapes[k].lines; i++) /* rank 1 */
            for (size_t j = 1; j < shapes[k].columns; j++)
                MATRIX_AT(stand.a, i, j) = MATRIX_AT(stand.a, i, 0) * (double)j;
        matrix_copy(stand.a, stand.copy);
        svd_check(&stand, dense_svd);
        if (shapes[k].columns > 1)
            assert_close(stand.s[1], 0, tolerance_of(&stand) * stand.s[0]);
        stand_close(&stand);
    }
}

/* By Jacobi's rotations as by a reduction, however far from a diagonal one the matrix is. */
static void svd_of_matrices_near_diagonal(void **state)
{
    static const double far[] = {0, 1e-15, 1e-9, 1e-2, 1};
    static const size_t sizes[] = {1, 2, 3, 8, 16, 33, 64, 100};
    for (size_t k = 0; k < COUNT(sizes) * COUNT(far); k++) {
        size_t size = sizes[k / COUNT(far)];
        struct stand stand;
        double jacobi[100];
        stand_open(&stand, bench_of(state)->context, (struct shape){size, size});
        matrix_scale(far[k % COUNT(far)], stand.a);
        for (size_t i = 0; i < size; i++)
            MATRIX_AT(stand.a, i, i) += 1 / (1 + (double)i);
        matrix_copy(stand.a, stand.copy);
        svd_check(&stand, dense_svd_near_diagonal);
        memcpy(jacobi, stand.s, size * sizeof *jacobi);
        matrix_copy(stand.copy, stand.a);
        svd_check(&stand, dense_svd);
        for (size_t j = 0; j < size; j++)
            assert_close(jacobi[j], stand.s[j], tolerance_of(&stand) * stand.s[0]);
        stand_close(&stand);
    }
}

/* Where singular values are zero their vectors are there all the same. */
static void svd_of_a_deficient_square(void **state)
{
    static const double scale[] = {3, 0, -0.5, 0, 2};
    static const double sorted[] = {3, 2, 0.5, 0, 0};
    struct stand stand;
    stand_open(&stand, bench_of(state)->context, (struct shape){5, 5});
    matrix_zero(stand.a);
    for (size_t j = 0; j < 5; j++)
        MATRIX_AT(stand.a, j, j) = scale[j];
    matrix_copy(stand.a, stand.copy);
    svd_check(&stand, dense_svd_near_diagonal);
    for (size_t j = 0; j < 5; j++)
        assert_close(stand.s[j], sorted[j], 1e-15);
    stand_close(&stand);
}

/* A matrix whose singular values are known: columns of I, scaled. */
static void svd_of_a_diagonal(void **state)
{
    static const double scale[] = {3, -7, 0.5, 0, 2};
    static const double sorted[] = {7, 3, 2, 0.5, 0};
    struct stand stand;
    struct shape shape = {12, 5};
    stand_open(&stand, bench_of(state)->context, shape);
    matrix_zero(stand.a);
    for (size_t j = 0; j < 5; j++)
        MATRIX_AT(stand.a, 2 * j + 1, j) = scale[j];
    assert_status(stand.context, dense_svd(stand.context, stand.a, stand.s, stand.r, stand.work), FESCUE_OK);
    for (size_t j = 0; j < 5; j++)
        assert_close(stand.s[j], sorted[j], 1e-14);
    orthonormal_check(stand.a, 1e-14);
    stand_close(&stand);
}

/* A q = q diag(w), from the upper triangle alone. */
static void eigen_of_many_sizes(void **state)
{
    static const size_t sizes[] = {1, 2, 3, 8, 17, 64, 130, 257};
    struct stand stand;
    for (size_t k = 0; k < COUNT(sizes); k++) {
        size_t size = sizes[k];
        stand_open(&stand, bench_of(state)->context, (struct shape){size, size});
        for (size_t i = 0; i < size; i++)
            for (size_t j = 0; j < size; j++) {
                MATRIX_AT(stand.copy, i, j) = MATRIX_AT(stand.a, i < j ? i : j, i < j ? j : i);
                if (j < i)
                    MATRIX_AT(stand.a, i, j) = (double)NAN;
            }
        assert_status(stand.context, dense_eigen(stand.context, stand.a, stand.s, stand.work), FESCUE_OK);
        orthonormal_check(stand.a, tolerance_of(&stand));
        for (size_t j = 0; j < size; j++) {
            assert_true(j == 0 || stand.s[j] >= stand.s[j - 1]);
            for (size_t c = 0; c < size; c++)
                MATRIX_AT(stand.square, j, c) = stand.s[j] * MATRIX_AT(stand.a, c, j);
        }
        product_check(stand.a, stand.square, stand.copy, tolerance_of(&stand));
        stand_close(&stand);
    }
}

/* The eigenvalues of the second difference (diagonal 2, neighbours -1) are 2 - 2 cos(k pi / (n+1)): a textbook fact
   (Strang 2007, Computational Science and Engineering, section 1.5; quoted from memory). */
static void eigenvalues_of_the_second_difference(void **state)
{
    enum { SIZE = 40 };
    struct stand stand;
    stand_open(&stand, bench_of(state)->context, (struct shape){SIZE, SIZE});
    matrix_zero(stand.a);
    for (size_t i = 0; i < SIZE; i++) {
        MATRIX_AT(stand.a, i, i) = 2;
        if (i > 0)
            MATRIX_AT(stand.a, i - 1, i) = -1;
    }
    assert_status(stand.context, dense_eigen(stand.context, stand.a, stand.s, stand.work), FESCUE_OK);
    for (size_t k = 0; k < SIZE; k++)
        assert_close(stand.s[k], 2 - 2 * cos((double)(k + 1) * acos(-1.0) / (SIZE + 1)), 1e-13);
    stand_close(&stand);
}

static void products_of_all_kinds(void **state)
{
    enum { M = 9, N = 7, K = 5 };
    struct random_stream stream = random_open(11, RANDOM_TEST, 3);
    double data[3][16 * 16];
    (void)state;
    for (int kind = 0; kind < 4; kind++) {
        bool ta = kind & 1, tb = kind & 2;
        struct matrix a = {data[0], ta ? K : M, ta ? M : K, 16}, b = {data[1], tb ? N : K, tb ? K : N, 16};
        struct matrix c = {data[2], M, N, 16};
        double want[M][N];
        for (size_t i = 0; i < 3 * 256; i++)
            data[i / 256][i % 256] = random_normal(&stream);
        for (size_t i = 0; i < M; i++)
            for (size_t j = 0; j < N; j++) {
                want[i][j] = 0.5 * MATRIX_AT(c, i, j);
                for (size_t l = 0; l < K; l++)
                    want[i][j] += -2 * (ta ? MATRIX_AT(a, l, i) : MATRIX_AT(a, i, l)) *
                                  (tb ? MATRIX_AT(b, j, l) : MATRIX_AT(b, l, j));
            }
        matrix_multiply(-2, a, ta, b, tb, 0.5, c);
        for (size_t i = 0; i < M; i++)
            for (size_t j = 0; j < N; j++)
                assert_close(MATRIX_AT(c, i, j), want[i][j], 1e-13);
    }
    /* No inner dimension: c = beta c; beta 0 clears whatever was there. */
    struct matrix none = {data[0], 3, 0, 8}, empty = {data[1], 0, 2, 8}, c = {data[2], 3, 2, 8};
    MATRIX_AT(c, 1, 1) = (double)NAN;
    matrix_multiply(1, none, false, empty, false, 0, c);
    assert_true(MATRIX_AT(c, 1, 1) == 0 && MATRIX_AT(c, 2, 0) == 0);
}

/* Lines that are worked on piece by piece: (a'b) x = a'(b x), and (a m) x = a (m x). */
static void products_of_tall_matrices(void **state)
{
    static const struct shape many[] = {{5000, 5}, {20000, 16}, {3000, 64}, {2000, 70}};
    for (size_t k = 0; k < COUNT(many); k++) {
        struct stand stand;
        size_t columns = many[k].columns;
        double x[70], want;
        stand_open(&stand, bench_of(state)->context, many[k]);
        for (size_t j = 0; j < columns; j++)
            x[j] = 1 + (double)(j % 3);
        matrix_scale(0.5, stand.copy);
        matrix_multiply(2, stand.a, true, stand.copy, false, 0, stand.product);
        for (size_t j = 0; j < columns; j++) {
            double got = 0, sum = 0, size = 0;
            for (size_t c = 0; c < columns; c++)
                got += MATRIX_AT(stand.product, j, c) * x[c];
            for (size_t i = 0; i < many[k].lines; i++) {
                want = 0;
                for (size_t c = 0; c < columns; c++)
                    want += 2 * MATRIX_AT(stand.copy, i, c) * x[c];
                sum += MATRIX_AT(stand.a, i, j) * want;
                size += fabs(MATRIX_AT(stand.a, i, j) * want);
            }
            assert_close(got, sum, 1e-13 * size);
        }
        matrix_multiply(1, stand.a, false, stand.product, false, -1, stand.copy);
        for (size_t i = 0; i < many[k].lines; i += 37) {
            want = -0.5 * MATRIX_AT(stand.a, i, 0);
            for (size_t c = 0; c < columns; c++)
                want += MATRIX_AT(stand.a, i, c) * MATRIX_AT(stand.product, c, 0);
            assert_close(MATRIX_AT(stand.copy, i, 0), want, 1e-10 * (1 + fabs(want)));
        }
        stand_close(&stand);
    }
}

/* ---- kernels on narrow matrices -----------------------------------------------------------------------------------
 */

static const char *const kernels[] = {"portable", "avx2", "avx512"}; /* those the processor lacks are not taken */

/* A block of its own that ends with the last number; all that stands beside the columns is not a number. */
static struct matrix narrow_draw(struct random_stream *stream, size_t lines, size_t columns, size_t beside)
{
    size_t stride = columns + beside, size = lines == 0 ? 0 : (lines - 1) * stride + columns;
    struct matrix a = {malloc((size + 1) * sizeof(double)), lines, columns, stride};
    assert_non_null(a.data);
    for (size_t at = 0; at < size; at++)
        a.data[at] = at % stride < columns ? random_normal(stream) : (double)NAN;
    return a;
}

static void narrow_cross_check(struct random_stream *stream, size_t lines, size_t p, size_t q, size_t beside)
{
    double sum[TALL_MOST * TALL_MOST] = {0};
    struct matrix a = narrow_draw(stream, lines, p, beside), b = narrow_draw(stream, lines, q, beside);
    sum[0] = 3;
    kernel_set_choose()->tall->cross(a, b, sum);
    for (size_t i = 0; i < p; i++)
        for (size_t j = 0; j < q; j++) {
            double want = i + j == 0 ? 3 : 0, size = want;
            for (size_t l = 0; l < lines; l++) {
                want += MATRIX_AT(a, l, i) * MATRIX_AT(b, l, j);
                size += fabs(MATRIX_AT(a, l, i) * MATRIX_AT(b, l, j));
            }
            assert_close(sum[i * TALL_MOST + j], want, DBL_EPSILON * (double)(lines + 1) * size);
        }
    free(a.data);
    free(b.data);
}

/* Into a block of its own, and in the place of a where the shape allows. */
static void narrow_multiply_check(struct random_stream *stream, size_t lines, size_t p, size_t q, double beta)
{
    size_t beside = (p + q) % 3;
    double factor[TALL_MOST * TALL_MOST] = {0};
    struct matrix a = narrow_draw(stream, lines, p, beside), c = narrow_draw(stream, lines, q, beside), was;
    was = narrow_draw(stream, lines, q, beside);
    matrix_copy(c, was);
    for (size_t i = 0; i < p; i++)
        for (size_t j = 0; j < q; j++)
            factor[i * TALL_MOST + j] = random_normal(stream);
    if (beta == 0)
        MATRIX_AT(c, lines - 1, q - 1) = (double)NAN; /* not looked at */
    kernel_set_choose()->tall->multiply(a, factor, beta, c);
    for (size_t l = 0; l < lines; l++)
        for (size_t j = 0; j < q; j++) {
            double want = beta == 0 ? 0 : beta * MATRIX_AT(was, l, j), size = fabs(want);
            for (size_t i = 0; i < p; i++) {
                want += MATRIX_AT(a, l, i) * factor[i * TALL_MOST + j];
                size += fabs(MATRIX_AT(a, l, i) * factor[i * TALL_MOST + j]);
            }
            assert_close(MATRIX_AT(c, l, j), want, DBL_EPSILON * (double)(p + 1) * size);
        }
    for (size_t at = 0; at + 1 < (lines - 1) * c.stride + q; at++)
        assert_true(at % c.stride < q || isnan(c.data[at]));
    if (p == q && beta == 0) {
        kernel_set_choose()->tall->multiply(a, factor, 0, a);
        for (size_t l = 0; l < lines; l++)
            assert_memory_equal(&MATRIX_AT(a, l, 0), &MATRIX_AT(c, l, 0), q * sizeof(double));
    }
    free(a.data);
    free(c.data);
    free(was.data);
}

static void narrow_products_are_those_of_plain_loops(void **state)
{
    static const size_t lines[] = {1, 2, 7, 8, 9, 23, 135, 300}, columns[] = {1, 2, 5, 8, 9, 16, 23, 33, 64};
    struct random_stream stream = random_open(12, RANDOM_TEST, 0);
    (void)state;
    for (size_t n = 0; n < COUNT(kernels); n++) {
        setenv("FESCUE_KERNEL", kernels[n], 1);
        for (size_t k = 0; k < COUNT(lines); k++)
            for (size_t p = 0; p < COUNT(columns); p++)
                for (size_t q = 0; q < COUNT(columns); q++) {
                    narrow_cross_check(&stream, lines[k], columns[p], columns[q], (k + p) % 3);
                    narrow_multiply_check(&stream, lines[k], columns[p], columns[q], (double)((k + q) % 3) - 1);
                }
    }
    unsetenv("FESCUE_KERNEL");
}

/* What the team makes is what one worker makes, to the bit, and what plain products make, to rounding. */
static void tall_products_by_the_team(void **state)
{
    fescue_context *context = bench_of(state)->context;
    static const double scale[] = {2, 3, 0, -1, 5, 1, 1, 0.5};
    struct stand stand[3];
    double dot[3], square[3], lines[20003], factor[8 * 9 / 2] = {0};
    for (size_t i = 0; i < 20003; i++)
        lines[i] = 1 + (double)(i % 7);
    for (size_t i = 0; i < 8; i++)
        for (size_t j = 0; j <= i; j++)
            factor[packed_size(i) + j] = i == j ? 1 + (double)i : 0.25 * (double)(i + 2 * j) - 1;
    for (size_t s = 0; s < 3; s++) {
        stand_open(&stand[s], context, (struct shape){20003, 8});
        struct matrix a = stand[s].a, b = stand[s].copy;
        assert_status(context, team_resize(context, s == 1 ? 3 : 1), FESCUE_OK);
        if (s < 2) {
            tall_cross(context, a, b, stand[s].product, stand[s].work);
            tall_multiply(context, 1e-3, a, stand[s].product, -1, b);
            tall_add(context, -2, a, 3, b);
            dot[s] = tall_dot(context, a, b);
            square[s] = tall_square(context, a, lines);
            tall_multiply_transposed(context, 1e-3, a, stand[s].product, 2, b);
            tall_scale_lines(context, b, lines, a);
            tall_solve(context, factor, a, b);
            tall_copy(context, b, scale, a);
            tall_add(context, 1, a, 0, b);
        } else {
            matrix_multiply(1, a, true, b, false, 0, stand[s].product);
            matrix_multiply(1e-3, a, false, stand[s].product, false, -1, b);
            matrix_scale(3, b);
            matrix_add(-2, a, b);
            dot[s] = matrix_dot(a, b);
            square[s] = 0;
            for (size_t i = 0; i < 20003; i++)
                for (size_t j = 0; j < 8; j++)
                    square[s] += lines[j] * MATRIX_AT(a, i, j) * MATRIX_AT(a, i, j);
            matrix_multiply(1e-3, a, false, stand[s].product, true, 2, b);
            for (size_t i = 0; i < 20003; i++) {
                for (size_t j = 0; j < 8; j++)
                    MATRIX_AT(b, i, j) *= lines[i];
                packed_solve(factor, 8, &MATRIX_AT(b, i, 0));
            }
            matrix_scale_columns(b, scale);
        }
    }
    assert_true(dot[0] == dot[1]);
    assert_close(dot[0], dot[2], 1e-11 * 20003 * 20);
    assert_true(square[0] == square[1]);
    assert_close(square[0], square[2], 1e-11 * square[2]);
    for (size_t i = 0; i < 20003; i++)
        for (size_t j = 0; j < 8; j++) {
            double one = MATRIX_AT(stand[0].copy, i, j), plain = MATRIX_AT(stand[2].copy, i, j);
            assert_true(one == MATRIX_AT(stand[1].copy, i, j) && one == MATRIX_AT(stand[0].a, i, j));
            assert_close(one, plain, 1e-12 * (1 + fabs(plain)));
        }
    assert_status(context, team_resize(context, 1), FESCUE_OK);
    for (size_t s = 0; s < 3; s++)
        stand_close(&stand[s]);
}

/* Two steps of unequal length in one round, with all that a step can do, are what plain products make one after the
   other, and do not depend on the workers. */
static void steps_check(fescue_context *context, size_t columns)
{
    enum { WORKERS = 2 };
    static const size_t lines[TALL_STEPS] = {9000, 2500};
    struct stand own[WORKERS][TALL_STEPS], plain[TALL_STEPS];
    double dot[WORKERS][TALL_STEPS], *work[WORKERS];
    size_t size = tall_run_size(lines[0], columns, 3) + tall_run_size(lines[1], columns, 3);
    for (int w = 0; w < WORKERS; w++) {
        struct tall_step step[TALL_STEPS];
        for (size_t s = 0; s < TALL_STEPS; s++) {
            struct stand *at = &own[w][s];
            stand_open(at, context, (struct shape){lines[s], columns});
            matrix_multiply(0.1, at->a, true, at->copy, false, 0, at->r);
            MATRIX_AT(at->r, 0, columns - 1) = 7; /* no longer symmetric */
            step[s] = (struct tall_step){
                .to = at->copy,
                .beta = -0.5,
                .terms = 3,
                .term = {{1e-3, at->a, at->r, false}, {2, at->a, {0}, false}, {2e-3, at->a, at->r, true}},
                .sums = 3,
                .sum = {{.a = at->a, .b = at->copy, .cross = at->product},
                        {.a = at->copy, .b = at->copy, .cross = at->square},
                        {.a = at->a, .b = at->copy, .dot = &dot[w][s]}},
            };
        }
        assert_status(context, TAKE(context, size, &work[w]), FESCUE_OK);
        assert_status(context, team_resize(context, w == 0 ? 1 : 3), FESCUE_OK);
        tall_run(context, step, TALL_STEPS, work[w]);
    }
    assert_status(context, team_resize(context, 1), FESCUE_OK);
    for (size_t s = 0; s < TALL_STEPS; s++) {
        struct stand *one = &own[0][s], *three = &own[1][s];
        double largest = 0;
        stand_open(&plain[s], context, (struct shape){lines[s], columns});
        matrix_multiply(1e-3, plain[s].a, false, one->r, false, -0.5, plain[s].copy);
        matrix_add(2, plain[s].a, plain[s].copy);
        matrix_multiply(2e-3, plain[s].a, false, one->r, true, 1, plain[s].copy);
        for (size_t i = 0; i < lines[s]; i++)
            for (size_t j = 0; j < columns; j++)
                largest = fmax(largest, fabs(MATRIX_AT(plain[s].copy, i, j)));
        for (size_t i = 0; i < lines[s]; i++)
            for (size_t j = 0; j < columns; j++) {
                assert_true(MATRIX_AT(one->copy, i, j) == MATRIX_AT(three->copy, i, j));
                assert_close(MATRIX_AT(one->copy, i, j), MATRIX_AT(plain[s].copy, i, j), 1e-12 * largest);
            }
        matrix_multiply(1, plain[s].a, true, plain[s].copy, false, 0, plain[s].product);
        matrix_multiply(1, plain[s].copy, true, plain[s].copy, false, 0, plain[s].square);
        for (size_t i = 0; i < columns; i++)
            for (size_t j = 0; j < columns; j++) {
                double rounding = 1e-12 * (double)lines[s] * largest;
                assert_true(MATRIX_AT(one->product, i, j) == MATRIX_AT(three->product, i, j) &&
                            MATRIX_AT(one->square, i, j) == MATRIX_AT(three->square, i, j));
                assert_close(MATRIX_AT(one->product, i, j), MATRIX_AT(plain[s].product, i, j), 4 * rounding);
                assert_close(MATRIX_AT(one->square, i, j), MATRIX_AT(plain[s].square, i, j), rounding * largest);
            }
        assert_true(dot[0][s] == dot[1][s]);
        assert_close(dot[0][s], matrix_dot(plain[s].a, plain[s].copy), 1e-12 * (double)(lines[s] * columns) * largest);
        stand_close(one);
        stand_close(three);
        stand_close(&plain[s]);
    }
    for (int w = 0; w < WORKERS; w++)
        GIVE(context, &work[w]);
}
static void steps_in_one_round(void **state)
{
    static const size_t columns[] = {1, 5, 16, 64, 70};
    for (size_t k = 0; k < COUNT(columns); k++)
        steps_check(bench_of(state)->context, columns[k]);
}

static void what_is_not_finite_is_refused(void **state)
{
    struct stand stand;
    struct shape shape = {30, 4};
    stand_open(&stand, bench_of(state)->context, shape);
    MATRIX_AT(stand.a, 3, 2) = (double)NAN;
    assert_status(stand.context, dense_svd(stand.context, stand.a, stand.s, stand.r, stand.work), FESCUE_DEFECT);
    assert_non_null(strstr(fescue_failure_text(stand.context), "not all finite"));
    fescue_failure_clear(stand.context);
    matrix_zero(stand.square);
    MATRIX_AT(stand.square, 2, 1) = (double)NAN;
    assert_status(stand.context, dense_svd_near_diagonal(stand.context, stand.square, stand.s, stand.r, stand.work),
                  FESCUE_DEFECT);
    fescue_failure_clear(stand.context);
    matrix_zero(stand.square);
    MATRIX_AT(stand.square, 1, 2) = (double)INFINITY;
    assert_status(stand.context, dense_eigen(stand.context, stand.square, stand.s, stand.work), FESCUE_DEFECT);
    fescue_failure_clear(stand.context);
    stand_close(&stand);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(qr_of_many_shapes),
        BENCH_TEST(qr_of_deficient_matrices),
        BENCH_TEST(qr_of_kahans_triangle),
        BENCH_TEST(qr_of_extreme_sizes),
        BENCH_TEST(qr_without_r),
        BENCH_TEST(qr_leaves_no_trace_of_workers),
        BENCH_TEST(svd_of_many_shapes),
        BENCH_TEST(svd_of_matrices_near_diagonal),
        BENCH_TEST(svd_of_a_deficient_square),
        BENCH_TEST(svd_of_a_diagonal),
        BENCH_TEST(eigen_of_many_sizes),
        BENCH_TEST(eigenvalues_of_the_second_difference),
        BENCH_TEST(products_of_all_kinds),
        BENCH_TEST(products_of_tall_matrices),
        BENCH_TEST(narrow_products_are_those_of_plain_loops),
        BENCH_TEST(tall_products_by_the_team),
        BENCH_TEST(steps_in_one_round),
        BENCH_TEST(what_is_not_finite_is_refused),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
