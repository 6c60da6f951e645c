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
 *
 * Cost: O((m+n) r^2), inner products O((m+n) r). Parallel.
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

void fixed_rank_add(const struct fixed_rank_work *work, double alpha, const struct fixed_rank_tangent *x, double beta,
                    struct fixed_rank_tangent *y)
{
    tall_add(work->context, alpha, x->middle, beta, y->middle);
    tall_add(work->context, alpha, x->left, beta, y->left);
    tall_add(work->context, alpha, x->right, beta, y->right);
}

double fixed_rank_inner(const struct fixed_rank_work *work, const struct fixed_rank_tangent *x,
                        const struct fixed_rank_tangent *y)
{
    return matrix_dot(x->middle, y->middle) + tall_dot(work->context, x->left, y->left) +
           tall_dot(work->context, x->right, y->right);
}

/* within = frame'a; a <- (I - frame frame') a. */
static void normal_part(struct fixed_rank_work *work, struct matrix frame, struct matrix a, struct matrix within)
{
    tall_cross(work->context, frame, a, within, work->dense);
    if (frame.rows == frame.columns) { /* the frame spans everything */
        matrix_zero(a);
        return;
    }
    tall_multiply(work->context, -1, frame, within, 1, a);
    tall_cross(work->context, frame, a, work->small, work->dense);
    tall_multiply(work->context, -1, frame, work->small, 1, a);
}

void fixed_rank_project(struct fixed_rank_work *work, const struct low_rank *point, struct fixed_rank_tangent *z)
{
    assert(is_shape(z->left, point->rows, point->rank) && is_shape(z->right, point->columns, point->rank));
    normal_part(work, point->left, z->left, z->middle);
    normal_part(work, point->right, z->right, work->small_right); /* here the inner part is M' once more */
}

void fixed_rank_pairs(const struct fixed_rank_work *work, const struct low_rank *point,
                      const struct fixed_rank_tangent *z, struct matrix a)
{
    tall_copy(work->context, z->left, NULL, a);
    tall_multiply(work->context, 1, point->left, z->middle, 1, a);
}

/* product = frame (middle overlap + normal_other'new_other) + normal overlap,  overlap = frame_other'new_other: one
   side of a tangent times the new frame of the other side. transpose tells that middle is to be read as its transpose.
 */
struct tangent_side {
    struct matrix frame, normal;
};
static void tangent_times_frame(struct fixed_rank_work *work, struct tangent_side near, struct tangent_side far,
                                struct matrix middle, bool transpose, struct matrix far_frame, struct matrix product)
{
    tall_cross(work->context, far.frame, far_frame, work->small, work->dense);
    tall_cross(work->context, far.normal, far_frame, work->small_right, work->dense);
    matrix_multiply(1, middle, transpose, work->small, false, 1, work->small_right);
    tall_multiply(work->context, 1, near.frame, work->small_right, 0, product);
    tall_multiply(work->context, 1, near.normal, work->small, 1, product);
}

void fixed_rank_transport(struct fixed_rank_work *work, const struct low_rank *from, const struct fixed_rank_tangent *z,
                          const struct low_rank *to, struct fixed_rank_tangent *out)
{
    struct tangent_side left = {from->left, z->left}, right = {from->right, z->right};
    assert(out->left.data != z->left.data && out->right.data != z->right.data);
    tangent_times_frame(work, left, right, z->middle, false, to->right, out->left);
    tangent_times_frame(work, right, left, z->middle, true, to->left, out->right);
    fixed_rank_project(work, to, out);
}
