/* SPDX-License-Identifier: MIT
 *
 * QR of a tall matrix, A = Q R, A of n lines and k columns, n >= k, R upper triangular with diag(R) >= 0.
 *
 * First way, Cholesky QR done twice (Yamamoto, Nakatsukasa, Yanagisawa, Fukaya 2015, "Roundoff error analysis of the
 * Cholesky QR2 algorithm", ETNA 44, algorithm 2):
 *     G = A'A = R1'R1,  Q1 = A R1^-1,      G2 = Q1'Q1 = R2'R2,  Q = Q1 R2^-1,  R = R2 R1
 * All work on A is in matrix products over pieces of lines that stay in the cache. Q is as orthonormal as Householder's
 * while cond(A) is below about 1e8, and both facts that this rests on are looked at: R1's diagonal (columns scaled to
 * length 1) may not fall below 1e-6, and G2 may not differ from I by more than 1e-2. Departure: where cond(R1), columns
 * scaled, is below 30 k, and always for R2, which is near I, A is multiplied by the inverse instead of solved with R: a
 * fifth of the time, and an error of eps cond(R1).
 *
 * Second way, Householder (LAPACK gelqf, orglq on the transpose, which is how LAPACK sees row-major lines): for what
 * the first refuses, for rank-deficient A above all, where Q must still be orthonormal, and for small A. When the first
 * way is left after its first pass, A has already become Q1, which is decomposed in its stead: R = R' R1.
 *
 * Cost: 6 n k^2 flops in products, against Householder's 4 n k^2 at a small share of their speed. Parallel: the pieces
 * of lines; G is the sum over pieces in their order, so that bits do not depend on threads.
 */
#include "numeric/dense_internal.h"
#include "numeric/kernel_internal.h"

#include <assert.h>
#include <float.h>
#include <math.h>
#include <string.h>

struct qr {
    fescue_context *context;
    struct matrix a;
    struct dense_pieces pieces;
    double *partial;  /* one k x k sum a piece */
    double *gram;     /* k x k; its Cholesky factor afterwards */
    double *triangle; /* k x k, R1 */
    double *inverse;  /* k x k, of the triangle to be divided by */
    double *room;     /* tau and LAPACK's workspace */
    enum { DIVIDE_NOT, DIVIDE_SOLVE, DIVIDE_MULTIPLY } divide;
    bool sum;                         /* make partial sums of A'A, after dividing */
    const struct tall_kernel *kernel; /* NULL: A is wider than it takes */
    double *factor;                   /* the inverse, as the kernel has it */
};

/* What a column must keep of its length: cond(A) is then far enough below 1e8, see above. */
static const double least_kept = 1e-6;
/* Lines that are divided and summed before the next are touched: 128 kB, in numbers. */
enum { CHUNK_NUMBERS = 16384 };

static struct matrix square_of(double *data, size_t k)
{
    return (struct matrix){data, k, k, k};
}

static void chunk_divide(const struct qr *qr, struct matrix a)
{
    lapack_int n = dense_size(a.rows), k = dense_size(a.columns), stride = dense_size(a.stride);
    if (qr->divide == DIVIDE_SOLVE)
        cblas_dtrsm(CblasRowMajor, CblasRight, CblasUpper, CblasNoTrans, CblasNonUnit, n, k, 1, qr->gram, k, a.data,
                    stride);
    else if (qr->divide == DIVIDE_MULTIPLY && qr->kernel != NULL)
        qr->kernel->multiply(a, qr->factor, 0, a);
    else if (qr->divide == DIVIDE_MULTIPLY)
        cblas_dtrmm(CblasRowMajor, CblasRight, CblasUpper, CblasNoTrans, CblasNonUnit, n, k, 1, qr->inverse, k, a.data,
                    stride);
}

static void chunk_sum(struct matrix a, double *sum)
{
    lapack_int n = dense_size(a.rows), k = dense_size(a.columns), stride = dense_size(a.stride);
    cblas_dsyrk(CblasRowMajor, CblasUpper, CblasTrans, k, n, 1, a.data, stride, 1, sum, k);
}

static void piece_pass(void *job, size_t piece, size_t worker)
{
    struct qr *qr = job;
    struct matrix a = dense_piece(qr->a, &qr->pieces, piece);
    size_t k = a.columns, lines = CHUNK_NUMBERS / k + 1;
    double *sum = qr->partial + piece * k * k, room[TALL_MOST * TALL_MOST];
    (void)worker;
    memset(sum, 0, k * k * sizeof *sum);
    if (qr->kernel != NULL)
        memset(room, 0, tall_lines(k) * TALL_MOST * sizeof *room);
    for (size_t first = 0; first < a.rows; first += lines) {
        struct matrix chunk = matrix_lines(a, first, lines);
        chunk_divide(qr, chunk);
        if (qr->sum && qr->kernel != NULL)
            qr->kernel->cross(chunk, chunk, room);
        else if (qr->sum)
            chunk_sum(chunk, sum);
    }
    if (qr->kernel != NULL)
        matrix_copy((struct matrix){room, k, k, TALL_MOST}, (struct matrix){sum, k, k, k});
}

static void lines_pass(struct qr *qr)
{
    team_run(qr->context, qr->pieces.count, piece_pass, qr);
}

static void partials_add(struct qr *qr)
{
    size_t k = qr->a.columns;
    team_sum(qr->context, qr->partial, qr->pieces.count, k * k, qr->gram);
}

/* gram = R'R in its upper triangle (lower zeroed), its columns' lengths in length[k]; false when some column keeps less
   than `least` of its length after what the columns before it explain. */
static bool gram_factor(struct matrix gram, double least, double *length)
{
    size_t k = gram.columns;
    for (size_t j = 0; j < k; j++) {
        length[j] = sqrt(MATRIX_AT(gram, j, j));
        /* Squares that went under or over have lost their digits. */
        if (!(length[j] > 1e-130 && length[j] < 1e130))
            return false;
    }
    if (LAPACKE_dpotrf_work(LAPACK_COL_MAJOR, 'L', dense_size(k), gram.data, dense_size(gram.stride)) != 0)
        return false;
    for (size_t j = 0; j < k; j++) {
        if (!(MATRIX_AT(gram, j, j) >= least * length[j]))
            return false;
        memset(&MATRIX_AT(gram, j, 0), 0, j * sizeof *gram.data);
    }
    return true;
}

/* inverse = triangle^-1, both upper triangles. */
static void triangle_invert(struct matrix triangle, struct matrix inverse)
{
    matrix_copy(triangle, inverse);
    LAPACKE_dtrtri_work(LAPACK_COL_MAJOR, 'L', 'N', dense_size(inverse.columns), inverse.data,
                        dense_size(inverse.stride));
}

/* Frobenius, of the triangle whose inverse this is, with its columns scaled to length 1. */
static double triangle_condition(struct matrix inverse, const double *length)
{
    size_t k = inverse.columns;
    double square = 0;
    for (size_t i = 0; i < k; i++)
        for (size_t j = i; j < k; j++)
            square += pow(length[i] * MATRIX_AT(inverse, i, j), 2);
    return sqrt((double)k * square);
}

/* Whether multiplying by the inverse costs no more than a digit or two. */
static bool is_near(struct matrix inverse, const double *length)
{
    return triangle_condition(inverse, length) < 30 * (double)inverse.columns;
}

bool dense_gram_triangle(struct matrix gram, struct matrix inverse, double *work)
{
    dense_threads_hold();
    if (!gram_factor(gram, least_kept, work))
        return false;
    triangle_invert(gram, inverse);
    return is_near(inverse, work);
}

static double identity_distance(const double *g, size_t k)
{
    double most = 0;
    for (size_t i = 0; i < k; i++)
        for (size_t j = i; j < k; j++) {
            double distance = fabs(g[i * k + j] - (i == j));
            if (!(distance <= most))
                most = distance;
        }
    return most * (double)k;
}

/* r <- r R1 for the upper triangular R1 of the first pass. */
static void triangle_join(const struct qr *qr, struct matrix r)
{
    size_t k = qr->a.columns;
    cblas_dtrmm(CblasRowMajor, CblasRight, CblasUpper, CblasNoTrans, CblasNonUnit, dense_size(k), dense_size(k), 1,
                qr->triangle, dense_size(k), r.data, dense_size(r.stride));
}

static void triangle_out(const double *g, struct matrix r)
{
    if (r.data == NULL)
        return;
    for (size_t i = 0; i < r.rows; i++)
        memcpy(&MATRIX_AT(r, i, 0), g + i * r.columns, r.columns * sizeof *g);
}

static void signs_mend(struct matrix a, double *triangle)
{
    size_t k = a.columns;
    double *sign = triangle + k * k; /* one row more */
    for (size_t j = 0; j < k; j++) {
        sign[j] = triangle[j * k + j] < 0 ? -1 : 1;
        for (size_t c = j; c < k; c++)
            triangle[j * k + c] *= sign[j];
    }
    matrix_scale_columns(a, sign);
}

static fescue_status householder(struct qr *qr)
{
    struct matrix a = qr->a;
    lapack_int k = dense_size(a.columns), n = dense_size(a.rows), stride = dense_size(a.stride);
    double *tau = qr->room, *room = tau + a.columns, *triangle = qr->gram;
    lapack_int size = k * DENSE_BLOCK;
    fescue_status status = FESCUE_OK;
    TRY(dense_check(qr->context, "gelqf",
                    LAPACKE_dgelqf_work(LAPACK_COL_MAJOR, k, n, a.data, stride, tau, room, size)));
    for (size_t i = 0; i < a.columns; i++)
        for (size_t j = 0; j < a.columns; j++)
            triangle[i * a.columns + j] = j < i ? 0 : MATRIX_AT(a, i, j);
    TRY(dense_check(qr->context, "orglq",
                    LAPACKE_dorglq_work(LAPACK_COL_MAJOR, k, n, k, a.data, stride, tau, room, size)));
    signs_mend(a, triangle);
done:
    return status;
}

static void divide_by_inverse(struct qr *qr)
{
    size_t k = qr->a.columns;
    triangle_invert(square_of(qr->gram, k), square_of(qr->inverse, k));
    if (qr->kernel == NULL)
        return;
    memset(qr->factor, 0, k * TALL_MOST * sizeof *qr->factor);
    matrix_copy(square_of(qr->inverse, k), (struct matrix){qr->factor, k, k, TALL_MOST});
}

/* *passes = how many triangles were divided out of a: 0, 1 (R1 in triangle) or 2 (R2 in gram as well). */
static void cholesky_twice(struct qr *qr, int *passes)
{
    size_t k = qr->a.columns;
    *passes = 0;
    qr->divide = DIVIDE_NOT;
    qr->sum = true;
    lines_pass(qr);
    partials_add(qr);
    if (!gram_factor(square_of(qr->gram, k), least_kept, qr->room))
        return;
    memcpy(qr->triangle, qr->gram, k * k * sizeof *qr->gram);
    divide_by_inverse(qr);
    qr->divide = is_near(square_of(qr->inverse, k), qr->room) ? DIVIDE_MULTIPLY : DIVIDE_SOLVE;
    lines_pass(qr);
    partials_add(qr);
    *passes = 1;
    if (!(identity_distance(qr->gram, k) < 1e-2) || !gram_factor(square_of(qr->gram, k), 0.5, qr->room))
        return;
    divide_by_inverse(qr);
    qr->divide = DIVIDE_MULTIPLY;
    qr->sum = false;
    lines_pass(qr);
    *passes = 2;
}

fescue_status dense_qr(fescue_context *context, struct matrix a, struct matrix r, double *work)
{
    size_t k = a.columns;
    struct qr qr = {.context = context, .a = a, .pieces = dense_pieces_of(a.rows, k)};
    fescue_status status = FESCUE_OK;
    double factor[TALL_MOST * TALL_MOST];
    int passes = 0;
    assert(a.rows >= k && (r.data == NULL || (r.rows == k && r.columns == k)));
    if (k == 0)
        return FESCUE_OK;
    dense_threads_hold();
    qr.gram = work;
    qr.triangle = qr.gram + (k + 1) * k;
    qr.inverse = qr.triangle + k * k;
    qr.room = qr.inverse + k * k;
    qr.partial = qr.room + (DENSE_BLOCK + 1) * k;
    qr.factor = factor;
    qr.kernel = k <= TALL_MOST ? kernel_set_choose()->tall : NULL;
    if (a.rows >= DENSE_GRAM_LINES * k)
        cholesky_twice(&qr, &passes);
    if (passes < 2)
        TRY(householder(&qr));
    triangle_out(qr.gram, r);
    if (passes > 0 && r.data != NULL)
        triangle_join(&qr, r);
done:
    return status;
}
