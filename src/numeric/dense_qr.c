/* SPDX-License-Identifier: MIT
 *
 * QR of a tall matrix, A = Q R, A of n lines and k columns, n >= k, R upper triangular with diag(R) >= 0.
 *
 * First way, Cholesky QR done twice (Yamamoto, Nakatsukasa, Yanagisawa, Fukaya 2015, "Roundoff error analysis of the
 * Cholesky QR2 algorithm", ETNA 44, algorithm 2):
 *     G = A'A = R1'R1,  Q1 = A R1^-1,      G2 = Q1'Q1 = R2'R2,  Q = Q1 R2^-1,  R = R2 R1
 * Three passes over A, each a matrix product, so that it runs at the speed of gemm on pieces of lines. Q is as
 * orthonormal as Householder's while cond(A) is below about 1e8, and both facts that this rests on are looked at:
 * R1's diagonal (columns scaled to length 1) may not fall below 1e-6, and G2 may not differ from I by more than 1e-2.
 *
 * Second way, Householder (LAPACK gelqf, orglq on the transpose, which is how LAPACK sees row-major lines): for what
 * the first refuses, for rank-deficient A above all, where Q must still be orthonormal, and for small A. When the first
 * way is left after its first pass, A has already become Q1, which is decomposed in its stead: R = R' R1.
 *
 * Cost: 4 n k^2 flops against Householder's 4 n k^2 at a small share of gemm's speed. Parallel: the pieces of lines;
 * G is the sum over pieces in their order, so that bits do not depend on threads.
 */
#include "numeric/dense_internal.h"

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
    double *room;     /* tau and LAPACK's workspace */
};

/* Below this many lines a column the copies and sums of the first way cost what they save. */
enum { LINES_A_COLUMN = 4 };

static void piece_gram(void *job, size_t piece, size_t worker)
{
    struct qr *qr = job;
    struct matrix a = dense_piece(qr->a, &qr->pieces, piece);
    size_t k = a.columns;
    (void)worker;
    cblas_dsyrk(CblasRowMajor, CblasUpper, CblasTrans, dense_size(k), dense_size(a.rows), 1, a.data,
                dense_size(a.stride), 0, qr->partial + piece * k * k, dense_size(k));
}

static void piece_divide(void *job, size_t piece, size_t worker)
{
    struct qr *qr = job;
    struct matrix a = dense_piece(qr->a, &qr->pieces, piece);
    (void)worker;
    cblas_dtrsm(CblasRowMajor, CblasRight, CblasUpper, CblasNoTrans, CblasNonUnit, dense_size(a.rows),
                dense_size(a.columns), 1, qr->gram, dense_size(a.columns), a.data, dense_size(a.stride));
}

static void gram_make(struct qr *qr)
{
    size_t k = qr->a.columns;
    team_run(qr->context, qr->pieces.count, piece_gram, qr);
    team_sum(qr->context, qr->partial, qr->pieces.count, k * k, qr->gram);
}

/* gram = R'R in its upper triangle (lower zeroed); false when some column keeps less than `least` of its length after
   what the columns before it explain. */
static bool gram_factor(struct qr *qr, double least)
{
    size_t k = qr->a.columns;
    double *g = qr->gram, *length = qr->room;
    for (size_t j = 0; j < k; j++) {
        length[j] = sqrt(g[j * k + j]);
        /* Squares that went under or over have lost their digits. */
        if (!(length[j] > 1e-130 && length[j] < 1e130))
            return false;
    }
    if (LAPACKE_dpotrf_work(LAPACK_COL_MAJOR, 'L', dense_size(k), g, dense_size(k)) != 0)
        return false;
    for (size_t j = 0; j < k; j++) {
        if (!(g[j * k + j] >= least * length[j]))
            return false;
        memset(g + j * k, 0, j * sizeof *g);
    }
    return true;
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

/* *passes = how many triangles were divided out of a: 0, 1 (R1 in triangle) or 2 (R2 in gram as well). */
static void cholesky_twice(struct qr *qr, int *passes)
{
    size_t k = qr->a.columns;
    *passes = 0;
    gram_make(qr);
    /* 1e-6: cond(A) is then far enough below 1e8, see above. */
    if (!gram_factor(qr, 1e-6))
        return;
    memcpy(qr->triangle, qr->gram, k * k * sizeof *qr->gram);
    team_run(qr->context, qr->pieces.count, piece_divide, qr);
    *passes = 1;
    gram_make(qr);
    if (!(identity_distance(qr->gram, k) < 1e-2) || !gram_factor(qr, 0.5))
        return;
    team_run(qr->context, qr->pieces.count, piece_divide, qr);
    *passes = 2;
}

fescue_status dense_qr(fescue_context *context, struct matrix a, struct matrix r, double *work)
{
    size_t k = a.columns;
    struct qr qr = {.context = context, .a = a, .pieces = dense_pieces_of(a.rows, k)};
    fescue_status status = FESCUE_OK;
    int passes = 0;
    assert(a.rows >= k && (r.data == NULL || (r.rows == k && r.columns == k)));
    if (k == 0)
        return FESCUE_OK;
    dense_threads_hold();
    qr.gram = work;
    qr.triangle = qr.gram + (k + 1) * k;
    qr.room = qr.triangle + k * k;
    qr.partial = qr.room + (DENSE_BLOCK + 1) * k;
    if (a.rows >= LINES_A_COLUMN * k)
        cholesky_twice(&qr, &passes);
    if (passes < 2)
        TRY(householder(&qr));
    triangle_out(qr.gram, r);
    if (passes > 0 && r.data != NULL)
        triangle_join(&qr, r);
done:
    return status;
}
