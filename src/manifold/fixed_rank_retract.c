/* SPDX-License-Identifier: MIT
 *
 * Ways back onto the manifold of matrices of rank r, and the workspace of the manifold's operations.
 *
 *     X = U diag(s) V',  Z = U M V' + Up V' + U Vp'  (U'Up = 0, V'Vp = 0),  t a step length
 *
 * By metric projection (Vandereycken 2013, algorithm 6): X + t Z has at most rank 2r,
 *
 *     X + t Z = [U Up] C [V Vp]',     C = ( diag(s) + t M   t I )
 *                                         ( t I             0   )
 *
 * With QR factors [U Up] = Ql Rl and [V Vp] = Qr Rr, the SVD of Rl C Rr', of size 2r, gives that of X + t Z; its r
 * leading parts are the nearest matrix of rank r. Departures:
 *   - The QR runs over [U Up] whole, though U is orthonormal and orthogonal to Up already: where Up loses rank the
 *     factor of Up alone has columns that need not be orthogonal to U.
 *   - Where m < 2r the frame [U Up] is wider than tall; Ql = I and Rl = [U Up] then do without any factorisation.
 *
 * Orthographic (Absil, Malick 2012, section 4.2): Y = X + t Z + t^2 Up N^-1 Vp' with N = diag(s) + t M, the one matrix
 * of rank r near X whose difference to X + t Z is normal at X. With the SVD N = A diag(d) B'
 *
 *     Y = L diag(d) R',     L = U A + t Up B diag(1/d),     R = V B + t Vp A diag(1/d)
 *
 * and QR of L and of R and an SVD of size r restore the form. It does not exist where N is singular.
 *
 * Cost: metric 16 (m+n) r^2 flops and an SVD of size 2r, orthographic 8 (m+n) r^2 and two of size r. Serial.
 */
#include "manifold/manifold_internal.h"

#include <float.h>
#include <string.h>

static size_t least(size_t a, size_t b)
{
    return a < b ? a : b;
}

static size_t most(size_t a, size_t b)
{
    return a > b ? a : b;
}

/* Enough for QR of both frames and for the SVDs of the core. */
static size_t dense_room(size_t rows, size_t columns, size_t rank)
{
    return dense_work_size(most(most(rows, columns), 2 * rank), 2 * rank);
}

void fixed_rank_reserve(struct arena *arena, size_t rows, size_t columns, size_t rank)
{
    assert(rank >= 1 && rank <= rows && rank <= columns);
    size_t twice = 2 * rank;
    matrix_reserve(arena, rows, twice);
    matrix_reserve(arena, columns, twice);
    matrix_reserve(arena, least(rows, twice), twice);
    matrix_reserve(arena, least(columns, twice), twice);
    matrix_reserve(arena, twice, twice);
    matrix_reserve(arena, twice, twice);
    matrix_reserve(arena, twice, twice);
    matrix_reserve(arena, rank, rank);
    matrix_reserve(arena, rank, rank);
    arena_reserve(arena, twice, sizeof(double));
    arena_reserve(arena, dense_room(rows, columns, rank), sizeof(double));
}

struct fixed_rank_work fixed_rank_carve(fescue_context *context, struct arena *arena, size_t rows, size_t columns,
                                        size_t rank)
{
    struct fixed_rank_work work = {.context = context, .rows = rows, .columns = columns, .rank = rank};
    size_t twice = 2 * rank;
    work.tall_left = matrix_carve(arena, rows, twice);
    work.tall_right = matrix_carve(arena, columns, twice);
    work.triangle_left = matrix_carve(arena, least(rows, twice), twice);
    work.triangle_right = matrix_carve(arena, least(columns, twice), twice);
    work.core = matrix_carve(arena, twice, twice);
    work.core_right = matrix_carve(arena, twice, twice);
    work.product = matrix_carve(arena, twice, twice);
    work.small = matrix_carve(arena, rank, rank);
    work.small_right = matrix_carve(arena, rank, rank);
    work.spectrum = arena_carve(arena, twice, sizeof(double));
    work.dense = arena_carve(arena, dense_room(rows, columns, rank), sizeof(double));
    return work;
}

static bool is_of_work(const struct fixed_rank_work *work, const struct low_rank *point)
{
    return point->rows == work->rows && point->columns == work->columns && point->rank == work->rank;
}

/* The r x r corner of a = diag(s) + t M. */
static void moved_core(const struct low_rank *point, const struct fixed_rank_tangent *z, double t, struct matrix a)
{
    for (size_t i = 0; i < point->rank; i++) {
        for (size_t j = 0; j < point->rank; j++)
            MATRIX_AT(a, i, j) = t * MATRIX_AT(z->middle, i, j);
        MATRIX_AT(a, i, i) += point->spectrum[i];
    }
}

/* c = C of the metric projection, 2r x 2r. */
static void metric_core(const struct low_rank *point, const struct fixed_rank_tangent *z, double t, struct matrix c)
{
    matrix_zero(c);
    moved_core(point, z, t, c);
    for (size_t k = 0; k < point->rank; k++) {
        MATRIX_AT(c, k, point->rank + k) = t;
        MATRIX_AT(c, point->rank + k, k) = t;
    }
}

/* One side of X and Z, and the room for its factors. */
struct side {
    struct matrix frame, normal;  /* U and Up, or V and Vp */
    struct matrix tall, triangle; /* Q and R of what is factored */
};

static struct side left_side(const struct fixed_rank_work *work, const struct low_rank *point,
                             const struct fixed_rank_tangent *z)
{
    return (struct side){point->left, z->left, work->tall_left, work->triangle_left};
}

static struct side right_side(const struct fixed_rank_work *work, const struct low_rank *point,
                              const struct fixed_rank_tangent *z)
{
    return (struct side){point->right, z->right, work->tall_right, work->triangle_right};
}

/* ---- metric projection ------------------------------------------------------------------------------------------ */

static bool is_wide(struct matrix a)
{
    return a.columns > a.rows;
}

/* to = [frame normal]. */
static void pair_copy(fescue_context *context, const struct side *side, struct matrix to)
{
    struct matrix right = to;
    right.data += side->frame.columns;
    right.columns -= side->frame.columns;
    tall_copy(context, side->frame, NULL, matrix_left(to, side->frame.columns));
    tall_copy(context, side->normal, NULL, right);
}

/* [frame normal] = tall triangle; where that is wide, tall is the identity and left out. */
static fescue_status pair_factor(struct fixed_rank_work *work, const struct side *side)
{
    if (is_wide(side->tall)) {
        pair_copy(work->context, side, side->triangle);
        return FESCUE_OK;
    }
    pair_copy(work->context, side, side->tall);
    return dense_qr(work->context, side->tall, side->triangle, work->dense);
}

/* frame = tall times the leading columns of the core's singular vectors. */
static void pair_frame(fescue_context *context, const struct side *side, struct matrix vectors, struct matrix frame)
{
    struct matrix leading = matrix_left(vectors, frame.columns);
    if (is_wide(side->tall))
        matrix_copy(leading, frame);
    else
        tall_multiply(context, 1, side->tall, leading, 0, frame);
}

/* SVD of high C low', or of high C' low' when transposed, where high has at least as many rows as low. The singular
   values go to the work's spectrum, the vectors are views into the work. */
static fescue_status core_factor(struct fixed_rank_work *work, struct matrix high, struct matrix low, bool transpose,
                                 struct matrix *high_vectors, struct matrix *low_vectors)
{
    struct matrix product = matrix_corner(work->product, high.rows, work->core.columns);
    matrix_multiply(1, high, false, work->core, transpose, 0, product);
    *high_vectors = matrix_corner(work->core, high.rows, low.rows);
    *low_vectors = matrix_corner(work->core_right, low.rows, low.rows);
    matrix_multiply(1, product, false, low, true, 0, *high_vectors);
    return dense_svd(work->context, *high_vectors, work->spectrum, *low_vectors, work->dense);
}

fescue_status fixed_rank_retract(struct fixed_rank_work *work, const struct low_rank *point,
                                 const struct fixed_rank_tangent *z, double t, struct low_rank *to)
{
    fescue_status status;
    struct side left = left_side(work, point, z), right = right_side(work, point, z);
    struct matrix left_vectors, right_vectors;
    assert(is_of_work(work, point) && is_of_work(work, to));
    TRY(pair_factor(work, &left));
    TRY(pair_factor(work, &right));
    metric_core(point, z, t, work->core);
    if (left.triangle.rows >= right.triangle.rows)
        TRY(core_factor(work, left.triangle, right.triangle, false, &left_vectors, &right_vectors));
    else
        TRY(core_factor(work, right.triangle, left.triangle, true, &right_vectors, &left_vectors));
    pair_frame(work->context, &left, left_vectors, to->left);
    pair_frame(work->context, &right, right_vectors, to->right);
    memcpy(to->spectrum, work->spectrum, work->rank * sizeof *to->spectrum);
done:
    return status;
}

/* ---- orthographic ------------------------------------------------------------------------------------------------ */

/* tall triangle = frame own + t normal other diag(1/d), d the work's spectrum. */
static fescue_status graph_factor(struct fixed_rank_work *work, const struct side *side, struct matrix own,
                                  struct matrix other, double t)
{
    struct matrix tall = side->tall;
    tall_multiply(work->context, t, side->normal, other, 0, tall);
    for (size_t i = 0; i < tall.rows; i++)
        for (size_t k = 0; k < tall.columns; k++)
            MATRIX_AT(tall, i, k) /= work->spectrum[k];
    tall_multiply(work->context, 1, side->frame, own, 1, tall);
    return dense_qr(work->context, tall, side->triangle, work->dense);
}

/* to = L diag(d) R' with L and R from both sides, A and B in the work's small matrices. */
static fescue_status graph_meet(struct fixed_rank_work *work, const struct side *left, const struct side *right,
                                double t, struct low_rank *to)
{
    fescue_status status;
    struct matrix a = work->small, b = work->small_right;
    TRY(graph_factor(work, left, a, b, t));
    TRY(graph_factor(work, right, b, a, t));
    matrix_scale_columns(left->triangle, work->spectrum);
    matrix_multiply(1, left->triangle, false, right->triangle, true, 0, a);
    TRY(dense_svd(work->context, a, to->spectrum, b, work->dense));
    tall_multiply(work->context, 1, left->tall, a, 0, to->left);
    tall_multiply(work->context, 1, right->tall, b, 0, to->right);
done:
    return status;
}

fescue_status fixed_rank_retract_orthographic(struct fixed_rank_work *work, const struct low_rank *point,
                                              const struct fixed_rank_tangent *z, double t, struct low_rank *to,
                                              bool *defined)
{
    fescue_status status;
    size_t rank = work->rank;
    struct side left = left_side(work, point, z), right = right_side(work, point, z);
    assert(is_of_work(work, point) && is_of_work(work, to));
    left.tall = matrix_left(left.tall, rank);
    right.tall = matrix_left(right.tall, rank);
    left.triangle = matrix_corner(work->core, rank, rank);
    right.triangle = matrix_corner(work->core_right, rank, rank);
    moved_core(point, z, t, work->small);
    TRY(dense_svd(work->context, work->small, work->spectrum, work->small_right, work->dense));
    *defined = work->spectrum[rank - 1] > (double)rank * DBL_EPSILON * work->spectrum[0];
    if (*defined)
        TRY(graph_meet(work, &left, &right, t, to));
done:
    return status;
}
