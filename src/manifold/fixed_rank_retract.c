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
 *   - Where [U Up] and [V Vp] are well conditioned and tall, as they nearly always are, R comes from the products
 *     [U Up]'[U Up] alone and Q is not made: the leading parts are A = [U Up] Rl^-1 (vectors), m x r, orthonormal to
 *     rounding times the condition squared, and the same again, a second time and r wide, mends that: Cholesky QR done
 *     twice (dense_qr.c) with only the half that is kept in its second part. 14 m r^2 flops in place of 36.
 *
 * Orthographic (Absil, Malick 2012, section 4.2): Y = X + t Z + t^2 Up N^-1 Vp' with N = diag(s) + t M, the one matrix
 * of rank r near X whose difference to X + t Z is normal at X. With the SVD N = A diag(d) B'
 *
 *     Y = L diag(d) R',     L = U A + t Up B diag(1/d),     R = V B + t Vp A diag(1/d)
 *
 * and QR of L and of R and an SVD of size r restore the form. It does not exist where N is singular.
 *
 * Cost: metric 14 or 36 (m+n) r^2 flops and SVDs of size 2r and r, orthographic 8 (m+n) r^2 and two of size r. Parallel
 * over pieces of lines.
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

/* Enough for four sums on either side. */
static size_t sums_room(size_t rows, size_t columns, size_t rank)
{
    return tall_run_size(rows, rank, 4) + tall_run_size(columns, rank, 4);
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
    matrix_reserve(arena, twice, twice);
    matrix_reserve(arena, twice, twice);
    arena_reserve(arena, twice, sizeof(double));
    arena_reserve(arena, dense_room(rows, columns, rank), sizeof(double));
    arena_reserve(arena, sums_room(rows, columns, rank), sizeof(double));
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
    work.inverse_left = matrix_carve(arena, twice, twice);
    work.inverse_right = matrix_carve(arena, twice, twice);
    work.spectrum = arena_carve(arena, twice, sizeof(double));
    work.dense = arena_carve(arena, dense_room(rows, columns, rank), sizeof(double));
    work.sums = arena_carve(arena, sums_room(rows, columns, rank), sizeof(double));
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
    struct matrix inverse;        /* R^-1, where Q is not made */
};

static struct side left_side(const struct fixed_rank_work *work, const struct low_rank *point,
                             const struct fixed_rank_tangent *z)
{
    return (struct side){point->left, z->left, work->tall_left, work->triangle_left, work->inverse_left};
}

static struct side right_side(const struct fixed_rank_work *work, const struct low_rank *point,
                              const struct fixed_rank_tangent *z)
{
    return (struct side){point->right, z->right, work->tall_right, work->triangle_right, work->inverse_right};
}

/* ---- metric projection, by QR ----------------------------------------------------------------------------------- */

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

/* ---- without Q ------------------------------------------------------------------------------------------------- */

static struct tall_step pair_gram(const struct side *side)
{
    struct matrix gram = side->triangle, f = side->frame, n = side->normal;
    return (struct tall_step){.sums = 3,
                              .sum = {{.a = f, .b = f, .cross = matrix_quarter(gram, 0, 0)},
                                      {.a = f, .b = n, .cross = matrix_quarter(gram, 0, 1)},
                                      {.a = n, .b = n, .cross = matrix_quarter(gram, 1, 1)}}};
}

/* The triangles of both sides and their inverses from sums of products; false where [frame normal] is near to losing
   rank, or small. */
static bool pairs_sum(struct fixed_rank_work *work, const struct side *left, const struct side *right)
{
    const struct tall_step grams[] = {pair_gram(left), pair_gram(right)};
    size_t least_lines = DENSE_GRAM_LINES * 2 * work->rank;
    if (work->rows < least_lines || work->columns < least_lines)
        return false;
    tall_run(work->context, grams, 2, work->sums);
    return dense_gram_triangle(left->triangle, left->inverse, work->spectrum) &&
           dense_gram_triangle(right->triangle, right->inverse, work->spectrum);
}

/* tall = [frame normal] R^-1 vectors, and of that the products. */
static struct tall_step pair_turn(const struct side *side, struct matrix tall, struct matrix turn, struct matrix gram)
{
    size_t rank = turn.columns;
    return (struct tall_step){.to = tall,
                              .terms = 2,
                              .term = {{1, side->frame, matrix_lines(turn, 0, rank), false},
                                       {1, side->normal, matrix_lines(turn, rank, rank), false}},
                              .sums = 1,
                              .sum = {{.a = tall, .b = tall, .cross = gram}}};
}

/* to = nearly orthonormal frames A and B with diag(spectrum) between them, orthonormalised: with R'R = A'A and S'S =
   B'B the SVD of R diag(spectrum) S' is what turns A R^-1 and B S^-1. */
static fescue_status frames_settle(struct fixed_rank_work *work, struct matrix a, struct matrix b, struct low_rank *to)
{
    fescue_status status;
    size_t rank = work->rank;
    struct matrix r = work->small, s = work->small_right, core = matrix_quarter(work->core, 0, 0),
                  core_right = matrix_quarter(work->core_right, 0, 0), turn = matrix_quarter(work->product, 0, 0),
                  turn_right = matrix_quarter(work->product, 1, 1), inverse = matrix_quarter(work->inverse_left, 0, 0),
                  inverse_right = matrix_quarter(work->inverse_right, 0, 0);
    if (!dense_gram_triangle(r, inverse, work->spectrum + rank) ||
        !dense_gram_triangle(s, inverse_right, work->spectrum + rank))
        return FAIL(work->context, FESCUE_DEFECT, "frames that were orthonormal but for rounding are so no more");
    matrix_copy(r, core);
    matrix_scale_columns(core, work->spectrum);
    matrix_multiply(1, core, false, s, true, 0, turn);
    matrix_copy(turn, core);
    TRY(dense_svd(work->context, core, to->spectrum, core_right, work->dense));
    matrix_multiply(1, inverse, false, core, false, 0, turn);
    matrix_multiply(1, inverse_right, false, core_right, false, 0, turn_right);
    const struct tall_step last[] = {
        {.to = to->left, .terms = 1, .term = {{1, a, turn, false}}},
        {.to = to->right, .terms = 1, .term = {{1, b, turn_right, false}}},
    };
    tall_run(work->context, last, 2, NULL);
done:
    return status;
}

/* to = the frames times the leading vectors, where pairs_sum has made the triangles. */
static fescue_status pairs_turn(struct fixed_rank_work *work, const struct side *left, const struct side *right,
                                struct matrix left_vectors, struct matrix right_vectors, struct low_rank *to)
{
    size_t rank = work->rank;
    struct matrix turn = matrix_columns(work->product, 0, rank), turn_right = matrix_columns(work->product, rank, rank),
                  a = matrix_left(left->tall, rank), b = matrix_left(right->tall, rank);
    matrix_multiply(1, left->inverse, false, matrix_left(left_vectors, rank), false, 0, turn);
    matrix_multiply(1, right->inverse, false, matrix_left(right_vectors, rank), false, 0, turn_right);
    const struct tall_step turns[] = {pair_turn(left, a, turn, work->small),
                                      pair_turn(right, b, turn_right, work->small_right)};
    tall_run(work->context, turns, 2, work->sums);
    return frames_settle(work, a, b, to);
}

/* ---- either way ------------------------------------------------------------------------------------------------ */

fescue_status fixed_rank_retract(struct fixed_rank_work *work, const struct low_rank *point,
                                 const struct fixed_rank_tangent *z, double t, struct low_rank *to)
{
    fescue_status status;
    struct side left = left_side(work, point, z), right = right_side(work, point, z);
    struct matrix left_vectors, right_vectors;
    assert(is_of_work(work, point) && is_of_work(work, to));
    bool summed = pairs_sum(work, &left, &right);
    if (!summed) {
        TRY(pair_factor(work, &left));
        TRY(pair_factor(work, &right));
    }
    metric_core(point, z, t, work->core);
    if (left.triangle.rows >= right.triangle.rows)
        TRY(core_factor(work, left.triangle, right.triangle, false, &left_vectors, &right_vectors));
    else
        TRY(core_factor(work, right.triangle, left.triangle, true, &right_vectors, &left_vectors));
    if (summed)
        return pairs_turn(work, &left, &right, left_vectors, right_vectors, to);
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
