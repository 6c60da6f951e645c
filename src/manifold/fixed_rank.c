/* SPDX-License-Identifier: MIT
 *
 * The manifold of m x n matrices of rank r, embedded in R^(m x n): tangents, projection, transport. The ways back onto
 * the manifold are in fixed_rank_retract.c.
 *
 *     X = U diag(s) V'                       point
 *     Z = U M V' + Up V' + U Vp'             tangent; U'Up = 0, V'Vp = 0; the three terms are orthogonal, so
 *     <Z1, Z2> = <M1, M2> + <Up1, Up2> + <Vp1, Vp2>
 *     P_X(A) = U U'A V V' + (I - U U') A V V' + U U'A (I - V V')
 *            : M = U'A V,  Up = A V - U M,  Vp = A'U - V M'
 * (Vandereycken 2013, "Low-rank matrix completion by Riemannian optimization", eqs. 2.2 to 2.5, algorithms 1 and 5.)
 * The dimension is r (m + n - r), and Z and its three parts have exactly that many degrees of freedom.
 *
 * The projection needs A only through A V and A'U, which for a sparse A are two passes over its cells. As on the
 * Grassmann manifold the normal parts are orthogonalised twice, so that they are orthogonal to rounding of their own
 * size also when they are small beside M.
 *
 * Transport by projection onto the tangents at Y = W diag(.) T' needs the products of Z:
 *     Z T  = U (M (V'T) + Vp'T) + Up (V'T),      Z'W = V (M'(U'W) + Up'W) + Vp (U'W)
 * Since the projection is self-adjoint, the inner product of the transported Z and of a tangent N, Yp, Yv at Y is that
 * of both as matrices, <Z T, W N + Yp> + <Z'W, Yv>, which r x r products of the frames and normal parts tell.
 *
 * Cost: O((m+n) r^2), inner products at one point O((m+n) r). Parallel, both sides in the same rounds.
 */
#include "manifold/manifold_internal.h"

void fixed_rank_tangent_reserve(struct arena *arena, size_t rows, size_t columns, size_t rank)
{
    matrix_reserve(arena, rank, rank);
    matrix_reserve(arena, rows, rank);
    matrix_reserve(arena, columns, rank);
}

struct fixed_rank_tangent fixed_rank_tangent_carve(struct arena *arena, size_t rows, size_t columns, size_t rank)
{
    struct fixed_rank_tangent z;
    z.middle = matrix_carve(arena, rank, rank);
    z.left = matrix_carve(arena, rows, rank);
    z.right = matrix_carve(arena, columns, rank);
    return z;
}

static void middle_add(double alpha, struct matrix x, double beta, struct matrix y)
{
    for (size_t i = 0; i < y.rows; i++)
        for (size_t j = 0; j < y.columns; j++)
            MATRIX_AT(y, i, j) = alpha * MATRIX_AT(x, i, j) + (beta == 0 ? 0 : beta * MATRIX_AT(y, i, j));
}

void fixed_rank_add(const struct fixed_rank_work *work, double alpha, const struct fixed_rank_tangent *x, double beta,
                    struct fixed_rank_tangent *y)
{
    const struct tall_step sides[] = {
        {.to = y->left, .beta = beta, .terms = 1, .term = {{.alpha = alpha, .a = x->left}}},
        {.to = y->right, .beta = beta, .terms = 1, .term = {{.alpha = alpha, .a = x->right}}},
    };
    tall_run(work->context, sides, 2, NULL);
    middle_add(alpha, x->middle, beta, y->middle);
}

double fixed_rank_inner(const struct fixed_rank_work *work, const struct fixed_rank_tangent *x,
                        const struct fixed_rank_tangent *y)
{
    double left, right;
    const struct tall_step sides[] = {
        {.sums = 1, .sum = {{.a = x->left, .b = y->left, .dot = &left}}},
        {.sums = 1, .sum = {{.a = x->right, .b = y->right, .dot = &right}}},
    };
    tall_run(work->context, sides, 2, work->sums);
    return matrix_dot(x->middle, y->middle) + (left + right);
}

/* One side of normals_settle: normal = beta (normal - frame inside) + alpha y; dots = <normal, normal>, <y, normal>. */
static struct tall_step normal_settle(struct matrix normal, struct matrix frame, struct matrix inside,
                                      const struct fixed_rank_blend *blend, struct matrix y, double dots[2])
{
    struct tall_step step = {.to = normal,
                             .beta = blend->beta,
                             .terms = 1,
                             .term = {{.alpha = -blend->beta, .a = frame, .b = inside}},
                             .sums = 1,
                             .sum = {{.a = normal, .b = normal, .dot = &dots[0]}}};
    if (blend->y != NULL) {
        step.term[step.terms++] = (struct tall_term){.alpha = blend->alpha, .a = y};
        step.sum[step.sums++] = (struct tall_sum){.a = y, .b = normal, .dot = &dots[1]};
    }
    return step;
}

/* The second time: what the products of frame and normal part in the work's small matrices tell to be left within the
   frames goes, and the normal parts are orthogonal to them to rounding of their own size. The sum with a tangent is
   made in the same round, and size and along of the blend become those of the normal parts. */
static void normals_settle(struct fixed_rank_work *work, const struct low_rank *point, struct fixed_rank_tangent *z,
                           struct fixed_rank_blend *blend)
{
    const struct fixed_rank_tangent *y = blend->y != NULL ? blend->y : z;
    double left[2] = {0}, right[2] = {0};
    const struct tall_step sides[] = {
        normal_settle(z->left, point->left, work->small, blend, y->left, left),
        normal_settle(z->right, point->right, work->small_right, blend, y->right, right),
    };
    tall_run(work->context, sides, 2, work->sums);
    /* A square frame spans everything. */
    if (point->rows == point->rank) {
        matrix_zero(z->left);
        left[0] = left[1] = 0;
    }
    if (point->columns == point->rank) {
        matrix_zero(z->right);
        right[0] = right[1] = 0;
    }
    blend->size = left[0] + right[0];
    blend->along = left[1] + right[1];
}

double fixed_rank_project(struct fixed_rank_work *work, const struct low_rank *point, struct fixed_rank_tangent *z)
{
    struct fixed_rank_blend alone = {.beta = 1};
    struct matrix u = point->left, v = point->right, in_left = work->small, in_right = work->small_right;
    assert(is_shape(z->left, point->rows, point->rank) && is_shape(z->right, point->columns, point->rank));
    const struct tall_step inner[] = {
        {.sums = 1, .sum = {{.a = u, .b = z->left, .cross = z->middle}}},
        {.sums = 1, .sum = {{.a = v, .b = z->right, .cross = in_right}}}, /* M' once more */
    };
    tall_run(work->context, inner, 2, work->sums);
    const struct tall_step once[] = {
        {.to = z->left,
         .beta = 1,
         .terms = 1,
         .term = {{.alpha = -1, .a = u, .b = z->middle}},
         .sums = 1,
         .sum = {{.a = u, .b = z->left, .cross = in_left}}},
        {.to = z->right,
         .beta = 1,
         .terms = 1,
         .term = {{.alpha = -1, .a = v, .b = in_right}},
         .sums = 1,
         .sum = {{.a = v, .b = z->right, .cross = in_right}}},
    };
    tall_run(work->context, once, 2, work->sums);
    normals_settle(work, point, z, &alone);
    return alone.size;
}

void fixed_rank_pairs(const struct fixed_rank_work *work, const struct low_rank *point,
                      const struct fixed_rank_tangent *z, struct matrix a)
{
    const struct tall_step step = {
        .to = a, .terms = 2, .term = {{.alpha = 1, .a = z->left}, {.alpha = 1, .a = point->left, .b = z->middle}}};
    tall_run(work->context, &step, 1, NULL);
}

/* ---- two points ------------------------------------------------------------------------------------------------ */

/* What a tangent Z at one point looks like from another, W diag(.) T':  Z T = U k + Up v,  Z'W = V l + Vp u. */
struct view {
    struct matrix u, v; /* U'W, V'T */
    struct matrix k, l; /* M v + Vp'T, M'u + Up'W; before view_finish Vp'T and Up'W */
};

static struct view view_of(const struct fixed_rank_work *work)
{
    return (struct view){matrix_quarter(work->core, 0, 0), matrix_quarter(work->core, 0, 1),
                         matrix_quarter(work->core, 1, 0), matrix_quarter(work->core, 1, 1)};
}

/* middle = W'Z T = u'k + (Up'W)'v, unless NULL. */
static void view_finish(const struct fixed_rank_tangent *z, const struct view *view, struct matrix *middle)
{
    matrix_multiply(1, z->middle, false, view->v, false, 1, view->k);
    if (middle != NULL) {
        matrix_multiply(1, view->u, true, view->k, false, 0, *middle);
        matrix_multiply(1, view->l, true, view->v, false, 1, *middle);
    }
    matrix_multiply(1, z->middle, true, view->u, false, 1, view->l);
}

void fixed_rank_transport(struct fixed_rank_work *work, const struct low_rank *from, const struct fixed_rank_tangent *z,
                          const struct low_rank *to, struct fixed_rank_blend *blend, struct fixed_rank_tangent *out)
{
    struct fixed_rank_blend alone = {.beta = 1}, *sum = blend != NULL ? blend : &alone;
    struct view view = view_of(work);
    assert(out->left.data != z->left.data && out->right.data != z->right.data);
    const struct tall_step look[] = {
        {.sums = 2,
         .sum = {{.a = from->left, .b = to->left, .cross = view.u}, {.a = z->left, .b = to->left, .cross = view.l}}},
        {.sums = 2,
         .sum = {{.a = from->right, .b = to->right, .cross = view.v},
                 {.a = z->right, .b = to->right, .cross = view.k}}},
    };
    tall_run(work->context, look, 2, work->sums);
    view_finish(z, &view, &out->middle);
    const struct tall_step once[] = {
        {.to = out->left,
         .terms = 3,
         .term = {{1, from->left, view.k, false}, {1, z->left, view.v, false}, {-1, to->left, out->middle, false}},
         .sums = 1,
         .sum = {{.a = to->left, .b = out->left, .cross = work->small}}},
        {.to = out->right,
         .terms = 3,
         .term = {{1, from->right, view.l, false}, {1, z->right, view.u, false}, {-1, to->right, out->middle, true}},
         .sums = 1,
         .sum = {{.a = to->right, .b = out->right, .cross = work->small_right}}},
    };
    tall_run(work->context, once, 2, work->sums);
    normals_settle(work, to, out, sum);
    if (sum->y != NULL) {
        middle_add(sum->alpha, sum->y->middle, sum->beta, out->middle);
        sum->along += matrix_dot(sum->y->middle, out->middle);
    } else
        matrix_scale(sum->beta, out->middle);
    sum->size += matrix_dot(out->middle, out->middle);
}

double fixed_rank_inner_apart(struct fixed_rank_work *work, const struct low_rank *from,
                              const struct fixed_rank_tangent *z, const struct low_rank *to,
                              const struct fixed_rank_tangent *y)
{
    struct view view = view_of(work);
    struct matrix frame_left = matrix_quarter(work->core_right, 0, 0), /* U'Yp */
        normal_left = matrix_quarter(work->core_right, 0, 1),          /* Up'Yp */
        frame_right = matrix_quarter(work->core_right, 1, 0),          /* V'Yv */
        normal_right = matrix_quarter(work->core_right, 1, 1);         /* Vp'Yv */
    const struct tall_step look[] = {
        {.sums = 4,
         .sum = {{.a = from->left, .b = to->left, .cross = view.u},
                 {.a = z->left, .b = to->left, .cross = view.l},
                 {.a = from->left, .b = y->left, .cross = frame_left},
                 {.a = z->left, .b = y->left, .cross = normal_left}}},
        {.sums = 4,
         .sum = {{.a = from->right, .b = to->right, .cross = view.v},
                 {.a = z->right, .b = to->right, .cross = view.k},
                 {.a = from->right, .b = y->right, .cross = frame_right},
                 {.a = z->right, .b = y->right, .cross = normal_right}}},
    };
    tall_run(work->context, look, 2, work->sums);
    /* U'(W N + Yp) and Up'(W N + Yp), N the middle of Y */
    matrix_multiply(1, view.u, false, y->middle, false, 1, frame_left);
    matrix_multiply(1, view.l, false, y->middle, false, 1, normal_left);
    view_finish(z, &view, NULL);
    return matrix_dot(view.k, frame_left) + matrix_dot(view.v, normal_left) + matrix_dot(view.l, frame_right) +
           matrix_dot(view.u, normal_right);
}
