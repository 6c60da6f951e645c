/* SPDX-License-Identifier: MIT
 *
 * Thin SVD of a tall matrix and the eigenvectors of a small symmetric one.
 *
 *     A = Q R (dense_qr),   R = W diag(s) V' (LAPACK gesvd),   U = Q W
 *
 * LAPACK sees the row-major k x k array of R as R', whose SVD is R' = V diag(s) W': its left vectors are our v, its
 * right ones, transposed as it returns them, are W in row-major order. U = Q W is made in place, 64 lines at a time, by
 * the team; every line is a product of its own, so that bits do not depend on threads. Cost 6 n k^2 + O(k^3).
 *
 * A square matrix near to a diagonal one by one-sided Jacobi (LAPACK gesvj; Drmac, Veselic 2008, "New fast and accurate
 * Jacobi SVD algorithm", SIAM J. Matrix Anal. Appl. 29): two or three sweeps of rotations in place of a reduction to
 * bidiagonal form, which costs the same for every matrix.
 */
#include "numeric/dense_internal.h"

#include <assert.h>
#include <math.h>
#include <string.h>

struct turn {
    struct matrix a;
    struct dense_pieces pieces;
    const double *turn; /* k x k */
    double *room;       /* DENSE_BLOCK lines a piece */
};

static void piece_turn(void *job, size_t piece, size_t worker)
{
    struct turn *turn = job;
    struct matrix a = dense_piece(turn->a, &turn->pieces, piece);
    size_t k = a.columns;
    struct matrix copy = {.data = turn->room + piece * DENSE_BLOCK * k, .columns = k, .stride = k};
    struct matrix part = a;
    (void)worker;
    for (size_t first = 0; first < a.rows; first += DENSE_BLOCK) {
        part.data = &MATRIX_AT(a, first, 0);
        part.rows = a.rows - first < DENSE_BLOCK ? a.rows - first : DENSE_BLOCK;
        copy.rows = part.rows;
        matrix_copy(part, copy);
        cblas_dgemm(CblasRowMajor, CblasNoTrans, CblasNoTrans, dense_size(part.rows), dense_size(k), dense_size(k), 1,
                    copy.data, dense_size(k), turn->turn, dense_size(k), 0, part.data, dense_size(part.stride));
    }
}

/* to_ij = from_ji, both k x k, `from` without gaps. */
static void square_transpose(const double *from, struct matrix to)
{
    for (size_t i = 0; i < to.rows; i++)
        for (size_t j = 0; j < to.columns; j++)
            MATRIX_AT(to, i, j) = from[j * to.rows + i];
}

/* LAPACK's iterations need not end on numbers that are not finite: -4 is its own word for such an argument. Of the k x
   k numbers those on and above the diagonal count, or all. */
static lapack_int finite_check(const double *x, size_t k, bool all)
{
    for (size_t i = 0; i < k; i++)
        for (size_t j = all ? 0 : i; j < k; j++)
            if (!isfinite(x[i * k + j]))
                return -4;
    return 0;
}

fescue_status dense_svd(fescue_context *context, struct matrix a, double *s, struct matrix v, double *work)
{
    size_t k = a.columns;
    lapack_int size = dense_size(k);
    struct turn turn = {.a = a, .pieces = dense_pieces_of(a.rows, k)};
    fescue_status status = FESCUE_OK;
    assert(a.rows >= k && v.rows == k && v.columns == k);
    if (k == 0)
        return FESCUE_OK;
    TRY(dense_qr(context, a, v, work));
    double *triangle = work, *left = triangle + k * k, *right = left + k * k, *room = right + k * k;
    for (size_t i = 0; i < k; i++)
        memcpy(triangle + i * k, &MATRIX_AT(v, i, 0), k * sizeof *triangle);
    TRY(dense_check(context, "gesvd", finite_check(triangle, k, false)));
    TRY(dense_check(context, "gesvd",
                    LAPACKE_dgesvd_work(LAPACK_COL_MAJOR, 'A', 'A', size, size, triangle, size, s, left, size, right,
                                        size, room, size * (2 * DENSE_BLOCK + 3))));
    square_transpose(left, v);
    turn.turn = right;
    turn.room = room;
    team_run(context, turn.pieces.count, piece_turn, &turn);
done:
    return status;
}

/* The array of a is A' to LAPACK, whose SVD gives our v as its left vectors and our u as its right ones. */
fescue_status dense_svd_near_diagonal(fescue_context *context, struct matrix a, double *s, struct matrix v,
                                      double *work)
{
    size_t k = a.columns;
    lapack_int size = dense_size(k);
    double *square = work, *other = square + k * k, *room = other + k * k;
    size_t room_size = 2 * k < 6 ? 6 : 2 * k;
    fescue_status status = FESCUE_OK;
    assert(a.rows == k && v.rows == k && v.columns == k);
    dense_threads_hold();
    for (size_t i = 0; i < k; i++)
        memcpy(square + i * k, &MATRIX_AT(a, i, 0), k * sizeof *square);
    TRY(dense_check(context, "gesvj", finite_check(square, k, true)));
    TRY(dense_check(context, "gesvj",
                    LAPACKE_dgesvj_work(LAPACK_COL_MAJOR, 'G', 'U', 'V', size, size, square, size, s, 0, other, size,
                                        room, dense_size(room_size))));
    double scale = room[0], rank = room[1];
    if (rank < (double)k) /* gesvj leaves out the vectors of zeros */
        return dense_svd(context, a, s, v, work);
    for (size_t i = 0; i < k; i++)
        s[i] *= scale;
    square_transpose(square, v);
    square_transpose(other, a);
done:
    return status;
}

fescue_status dense_eigen(fescue_context *context, struct matrix a, double *w, double *work)
{
    size_t k = a.columns;
    lapack_int size = dense_size(k);
    double *square = work, *room = square + k * k;
    size_t room_size = 1 + 6 * k + 2 * k * k;
    lapack_int *integers = (lapack_int *)(void *)(room + room_size);
    fescue_status status = FESCUE_OK;
    assert(a.rows == k);
    if (k == 0)
        return FESCUE_OK;
    dense_threads_hold();
    for (size_t i = 0; i < k; i++)
        memcpy(square + i * k, &MATRIX_AT(a, i, 0), k * sizeof *square);
    TRY(dense_check(context, "syevd", finite_check(square, k, false)));
    /* Our upper triangle is the lower one of what LAPACK sees. */
    TRY(dense_check(context, "syevd",
                    LAPACKE_dsyevd_work(LAPACK_COL_MAJOR, 'V', 'L', size, square, size, w, room, dense_size(room_size),
                                        integers, 3 + 5 * size)));
    square_transpose(square, a);
done:
    return status;
}
