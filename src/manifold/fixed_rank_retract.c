/* SPDX-License-Identifier: MIT
 *
 * Ways back onto the manifold of matrices of rank r, and the workspace of the manifold's operations.
 *
 *     X = U diag(s) V',  Z = U M V' + Up V' + U Vp'  (U'Up = 0, V'Vp = 0),  t a step length
 *
 * Orthographic (Absil, Malick 2012, "Projection-like retractions on matrix manifolds", section 4.2): Y = X + t Z + t^2
 * Up N^-1 Vp' with N = diag(s) + t M, the one matrix of rank r near X whose difference to X + t Z is normal at X. With
 * the SVD N = A diag(d) B'
 *
 *     Y = L diag(d) R',     L = [U Up] K,  K = ( A            )     R = [V Vp] ( B            )
 *                                              ( t B diag(1/d) )                ( t A diag(1/d) )
 *
 * With G = [U Up]'[U Up], L'L = K'G K; with Cholesky factors L'L = P'P and R'R = Q'Q and the SVD P diag(d) Q' = W
 * diag(s) T', Y = (L P^-1 W) diag(s) (R Q^-1 T)'. Neither L nor any Q of a QR is made: the lines are gone through for G
 * and for the result, 10 m r^2 flops. Nothing is lost by that where L'L is near I, and there it is done: d_r is not
 * zero, and no column of L leaves U by more than a slope of MOST_SLOPE. Both SVDs are of matrices near to diagonal
 * ones.
 *
 * By metric projection (Vandereycken 2013, algorithm 6) elsewhere, for long steps: X + t Z has at most rank 2r,
 *
 *     X + t Z = [U Up] C [V Vp]',     C = ( diag(s) + t M   t I )
 *                                         ( t I             0   )
 *
 * With QR factors [U Up] = Ql Rl and [V Vp] = Qr Rr, the SVD of Rl C Rr', of size 2r, gives that of X + t Z; its r
 * leading parts are the nearest matrix of rank r. Departures:
 *   - The QR runs over [U Up] whole, though U is orthonormal and orthogonal to Up already: where Up loses rank the
 *     factor of Up alone has columns that need not be orthogonal to U.
 *   - Where m < 2r the frame [U Up] is wider than tall; Ql = I and Rl = [U Up] then do without any factorisation.
 *   - Where [U Up] and [V Vp] are well conditioned and tall, as they nearly always are, R comes from G alone and Q is
 *     not made: the leading parts are A = [U Up] Rl^-1 (vectors), m x r, orthonormal to rounding times the condition
 *     squared, and the same again, a second time and r wide, mends that: Cholesky QR done twice (dense_qr.c) with only
 *     the half that is kept in its second part. 14 m r^2 flops in place of 36.
 *
 * Both agree with the exponential map to second order. Parallel over pieces of lines.
 */
#include "manifold/manifold_internal.h"

#include <float.h>
#include <string.h>

/* Of a column of L against U: 0.5 is an angle of 27 degrees. */
#define MOST_SLOPE 0.5

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
    work.gram_left = matrix_carve(arena, twice, twice);
    work.gram_right = matrix_carve(arena, twice, twice);
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
    struct matrix gram;           /* G, and then R^-1 where Q is not made */
};

static struct side left_side(const struct fixed_rank_work *work, const struct low_rank *point,
                             const struct fixed_rank_tangent *z)
{
    return (struct side){point->left, z->left, work->tall_left, work->triangle_left, work->gram_left};
}

static struct side right_side(const struct fixed_rank_work *work, const struct low_rank *point,
                              const struct fixed_rank_tangent *z)
{
    return (struct side){point->right, z->right, work->tall_right, work->triangle_right, work->gram_right};
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

/* ---- from products ---------------------------------------------------------------------------------------------- */

static struct tall_step pair_products(const struct side *side)
{
    struct matrix gram = side->gram, f = side->frame, n = side->normal;
    return (struct tall_step){.sums = 3,
                              .sum = {{.a = f, .b = f, .cross = matrix_quarter(gram, 0, 0)},
                                      {.a = f, .b = n, .cross = matrix_quarter(gram, 0, 1)},
                                      {.a = n, .b = n, .cross = matrix_quarter(gram, 1, 1)}}};
}

/* G of both sides. */
static void pairs_sum(struct fixed_rank_work *work, const struct side *left, const struct side *right)
{
    const struct tall_step products[] = {pair_products(left), pair_products(right)};
    tall_run(work->context, products, 2, work->sums);
    for (size_t i = work->rank; i < 2 * work->rank; i++)
        for (size_t j = 0; j < work->rank; j++) {
            MATRIX_AT(left->gram, i, j) = MATRIX_AT(left->gram, j, i);
            MATRIX_AT(right->gram, i, j) = MATRIX_AT(right->gram, j, i);
        }
}

/* For nearly orthonormal frames A and B with diag(spectrum) between them, A'A in small and B'B in small_right: with
   Cholesky factors R'R = A'A and S'S = B'B, the SVD of R diag(spectrum) S' is what turns A R^-1 and B S^-1. What turns
   A and B takes the place of their products. */
static fescue_status frames_turn(struct fixed_rank_work *work, double *spectrum)
{
    fescue_status status;
    struct matrix r = work->small, s = work->small_right, core = matrix_quarter(work->core, 0, 0),
                  scaled = matrix_quarter(work->core, 1, 1), core_right = matrix_quarter(work->core_right, 0, 0),
                  inverse = matrix_quarter(work->gram_left, 0, 0),
                  inverse_right = matrix_quarter(work->gram_right, 0, 0);
    if (!dense_gram_triangle(r, inverse, work->spectrum + work->rank) ||
        !dense_gram_triangle(s, inverse_right, work->spectrum + work->rank))
        return FAIL(work->context, FESCUE_DEFECT, "frames that were orthonormal but for rounding are so no more");
    matrix_copy(r, scaled);
    matrix_scale_columns(scaled, work->spectrum);
    matrix_multiply(1, scaled, false, s, true, 0, core);
    TRY(dense_svd_near_diagonal(work->context, core, spectrum, core_right, work->dense));
    matrix_multiply(1, inverse, false, core, false, 0, r);
    matrix_multiply(1, inverse_right, false, core_right, false, 0, s);
done:
    return status;
}

/* The two halves of 2r lines, as they go with a frame and its normal. */
static struct tall_step pair_turn(const struct side *side, struct matrix turn, struct matrix to)
{
    size_t rank = turn.columns;
    return (struct tall_step){.to = to,
                              .terms = 2,
                              .term = {{1, side->frame, matrix_lines(turn, 0, rank), false},
                                       {1, side->normal, matrix_lines(turn, rank, rank), false}}};
}

/* ---- metric projection, without Q -------------------------------------------------------------------------------- */

/* The triangles of both sides and their inverses, where G has been summed; false where [frame normal] is near to losing
   rank, or small. */
static bool pairs_triangle(struct fixed_rank_work *work, const struct side *left, const struct side *right)
{
    size_t least_lines = DENSE_GRAM_LINES * 2 * work->rank;
    if (work->rows < least_lines || work->columns < least_lines)
        return false;
    matrix_copy(left->gram, left->triangle);
    matrix_copy(right->gram, right->triangle);
    return dense_gram_triangle(left->triangle, left->gram, work->spectrum) &&
           dense_gram_triangle(right->triangle, right->gram, work->spectrum);
}

/* tall = [frame normal] R^-1 vectors, and of that the products. */
static struct tall_step leading_turn(const struct side *side, struct matrix turn, struct matrix tall,
                                     struct matrix gram)
{
    struct tall_step step = pair_turn(side, turn, tall);
    step.sums = 1;
    step.sum[0] = (struct tall_sum){.a = tall, .b = tall, .cross = gram};
    return step;
}

/* to = the frames times the leading vectors, where pairs_triangle has made the triangles. */
static fescue_status pairs_turn(struct fixed_rank_work *work, const struct side *left, const struct side *right,
                                struct matrix left_vectors, struct matrix right_vectors, struct low_rank *to)
{
    fescue_status status;
    size_t rank = work->rank;
    struct matrix turn = matrix_columns(work->product, 0, rank), turn_right = matrix_columns(work->product, rank, rank),
                  a = matrix_left(left->tall, rank), b = matrix_left(right->tall, rank);
    matrix_multiply(1, left->gram, false, matrix_left(left_vectors, rank), false, 0, turn);
    matrix_multiply(1, right->gram, false, matrix_left(right_vectors, rank), false, 0, turn_right);
    const struct tall_step turns[] = {leading_turn(left, turn, a, work->small),
                                      leading_turn(right, turn_right, b, work->small_right)};
    tall_run(work->context, turns, 2, work->sums);
    TRY(frames_turn(work, to->spectrum));
    const struct tall_step last[] = {
        {.to = to->left, .terms = 1, .term = {{1, a, work->small, false}}},
        {.to = to->right, .terms = 1, .term = {{1, b, work->small_right, false}}},
    };
    tall_run(work->context, last, 2, NULL);
done:
    return status;
}

static fescue_status metric_project(struct fixed_rank_work *work, const struct low_rank *point,
                                    const struct fixed_rank_tangent *z, double t, struct low_rank *to)
{
    fescue_status status;
    struct side left = left_side(work, point, z), right = right_side(work, point, z);
    struct matrix left_vectors, right_vectors;
    bool has_triangles = pairs_triangle(work, &left, &right);
    if (!has_triangles) {
        TRY(pair_factor(work, &left));
        TRY(pair_factor(work, &right));
    }
    metric_core(point, z, t, work->core);
    if (left.triangle.rows >= right.triangle.rows)
        TRY(core_factor(work, left.triangle, right.triangle, false, &left_vectors, &right_vectors));
    else
        TRY(core_factor(work, right.triangle, left.triangle, true, &right_vectors, &left_vectors));
    if (has_triangles)
        return pairs_turn(work, &left, &right, left_vectors, right_vectors, to);
    pair_frame(work->context, &left, left_vectors, to->left);
    pair_frame(work->context, &right, right_vectors, to->right);
    memcpy(to->spectrum, work->spectrum, work->rank * sizeof *to->spectrum);
done:
    return status;
}

/* ---- orthographic ------------------------------------------------------------------------------------------------ */

/* k = K of the orthographic retraction, of either side: A and B are `own` and `other`. */
static void graph_turn(const double *spectrum, struct matrix own, struct matrix other, double t, struct matrix k)
{
    size_t rank = own.columns;
    for (size_t i = 0; i < rank; i++)
        for (size_t j = 0; j < rank; j++) {
            MATRIX_AT(k, i, j) = MATRIX_AT(own, i, j);
            MATRIX_AT(k, rank + i, j) = t * MATRIX_AT(other, i, j) / spectrum[j];
        }
}

/* products = K'G K; whether no column of [frame normal] K leaves the frame by more than the slope. */
static bool graph_sum(struct matrix gram, struct matrix k, struct matrix room, struct matrix products)
{
    matrix_multiply(1, gram, false, k, false, 0, room);
    matrix_multiply(1, k, true, room, false, 0, products);
    for (size_t j = 0; j < products.columns; j++)
        if (!(MATRIX_AT(products, j, j) <= 1 + MOST_SLOPE * MOST_SLOPE))
            return false;
    return true;
}

static fescue_status orthographic_meet(struct fixed_rank_work *work, const struct low_rank *point,
                                       const struct fixed_rank_tangent *z, double t, struct low_rank *to, bool *is_near)
{
    fescue_status status;
    size_t rank = work->rank;
    struct side left = left_side(work, point, z), right = right_side(work, point, z);
    struct matrix a = work->small, b = work->small_right, k = matrix_columns(work->product, 0, rank),
                  k_right = matrix_columns(work->product, rank, rank), turn = matrix_columns(work->core, 0, rank),
                  turn_right = matrix_columns(work->core, rank, rank);
    moved_core(point, z, t, a);
    TRY(dense_svd_near_diagonal(work->context, a, work->spectrum, b, work->dense));
    *is_near = work->spectrum[rank - 1] > (double)rank * DBL_EPSILON * work->spectrum[0];
    if (!*is_near)
        goto done;
    graph_turn(work->spectrum, a, b, t, k);
    graph_turn(work->spectrum, b, a, t, k_right);
    *is_near = graph_sum(left.gram, k, turn, a) && graph_sum(right.gram, k_right, turn_right, b);
    if (!*is_near)
        goto done;
    TRY(frames_turn(work, to->spectrum));
    matrix_multiply(1, k, false, a, false, 0, turn);
    matrix_multiply(1, k_right, false, b, false, 0, turn_right);
    const struct tall_step last[] = {pair_turn(&left, turn, to->left), pair_turn(&right, turn_right, to->right)};
    tall_run(work->context, last, 2, NULL);
done:
    return status;
}

/* ---- either way -------------------------------------------------------------------------------------------------- */

static void products_make(struct fixed_rank_work *work, const struct low_rank *point,
                          const struct fixed_rank_tangent *z)
{
    struct side left = left_side(work, point, z), right = right_side(work, point, z);
    pairs_sum(work, &left, &right);
}

fescue_status fixed_rank_retract(struct fixed_rank_work *work, const struct low_rank *point,
                                 const struct fixed_rank_tangent *z, double t, struct low_rank *to)
{
    fescue_status status;
    bool is_near;
    assert(is_of_work(work, point) && is_of_work(work, to));
    products_make(work, point, z);
    TRY(orthographic_meet(work, point, z, t, to, &is_near));
    if (!is_near)
        TRY(metric_project(work, point, z, t, to));
done:
    return status;
}

fescue_status fixed_rank_retract_metric(struct fixed_rank_work *work, const struct low_rank *point,
                                        const struct fixed_rank_tangent *z, double t, struct low_rank *to)
{
    assert(is_of_work(work, point) && is_of_work(work, to));
    products_make(work, point, z);
    return metric_project(work, point, z, t, to);
}

fescue_status fixed_rank_retract_orthographic(struct fixed_rank_work *work, const struct low_rank *point,
                                              const struct fixed_rank_tangent *z, double t, struct low_rank *to,
                                              bool *is_near)
{
    assert(is_of_work(work, point) && is_of_work(work, to));
    products_make(work, point, z);
    return orthographic_meet(work, point, z, t, to, is_near);
}
