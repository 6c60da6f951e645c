/* SPDX-License-Identifier: MIT
 *
 * A product A B' of tall factors as a point left diag(spectrum) right': QR of both, A = Qa Ra and B = Qb Rb, and the
 * SVD of the small Ra Rb'. O((m+n) r^2).
 */
#include "manifold/manifold.h"

#include <assert.h>

fescue_status low_rank_from_product(fescue_context *context, struct matrix a, struct matrix b, struct low_rank *out)
{
    size_t rank = a.columns;
    assert(b.columns == rank && rank <= a.rows && rank <= b.rows);
    struct arena arena = {0};
    fescue_status status = FESCUE_OK;
    *out = (struct low_rank){0};
    size_t work_a = dense_work_size(a.rows, rank), work_b = dense_work_size(b.rows, rank);
    size_t work_size = work_a > work_b ? work_a : work_b;
    matrix_reserve(&arena, a.rows, rank);
    matrix_reserve(&arena, b.rows, rank);
    for (int k = 0; k < 4; k++)
        matrix_reserve(&arena, rank, rank);
    arena_reserve(&arena, work_size, sizeof(double));
    TRY(arena_open(context, &arena));
    struct matrix qa = matrix_carve(&arena, a.rows, rank), qb = matrix_carve(&arena, b.rows, rank);
    struct matrix ra = matrix_carve(&arena, rank, rank), rb = matrix_carve(&arena, rank, rank);
    struct matrix core = matrix_carve(&arena, rank, rank), v = matrix_carve(&arena, rank, rank);
    double *work = arena_carve(&arena, work_size, sizeof(double));
    TRY(low_rank_create(context, a.rows, b.rows, rank, out));
    if (rank > 0) {
        matrix_copy(a, qa);
        matrix_copy(b, qb);
        TRY(dense_qr(context, qa, ra, work));
        TRY(dense_qr(context, qb, rb, work));
        matrix_multiply(1, ra, false, rb, true, 0, core);
        TRY(dense_svd(context, core, out->spectrum, v, work));
        tall_multiply(context, 1, qa, core, 0, out->left);
        tall_multiply(context, 1, qb, v, 0, out->right);
    }
done:
    if (status != FESCUE_OK)
        low_rank_free(context, out);
    arena_close(context, &arena);
    return status;
}
