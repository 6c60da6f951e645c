/* SPDX-License-Identifier: MIT
 *
 * Between two points of the Grassmann manifold: the shortest geodesic, hence principal angles, distance, logarithm and
 * the running mean.
 *
 *     U, Y       the two bases, m x r
 *     U'Y = A diag(c) B'     SVD; c_k = cos(theta_k), descending
 *     H = (I - U U') Y B     its columns are orthogonal with norms sin(theta_k)
 *     D = P diag(theta) A',  P = the columns of H at norm 1:   Exp_U(D) spans what Y spans
 *
 * Rotating Y by B first (orthogonal Procrustes) makes the result independent of Y's basis and defined on the cut locus
 * too, where (U'Y)^-1 of the textbook formula does not exist (Zimmermann 2017; Bendokat, Zimmermann, Absil 2024,
 * algorithm 5.3).
 *
 * Accuracy (Bjorck, Golub 1973, section 3). A cosine near 1 says nothing about a small angle, and a sine near 1
 * nothing about one near pi/2; besides, where cosines cluster at 1 the vectors A are arbitrary within the cluster and
 * the columns of H are not orthogonal. So the columns are split at 45 degrees:
 *
 *     c_k^2 >= 1/2 (the first q)   H1 = P1 diag(sin theta) T' by a thin SVD, A1 <- A1 T, theta = asin
 *     c_k^2 <  1/2                 H2'H2 = 1 - c^2 >= 1/2 is diagonal to rounding: P2 by scaling, theta = acos c
 *
 * Departure: at most m - r angles differ from zero; where r > m - r those that must be zero are set to zero.
 *
 * Cost: O(m r^2), one SVD of r x r and one of m x q. Parallel over pieces of lines, but for large angles.
 */
#include "manifold/manifold_internal.h"

#include <math.h>

/* Singular values of U'Y at or above this are cosines of angles up to 45 degrees. */
static const double half_square = 0.5;

/* The angles up to 45 degrees, the first q columns, from their sines. */
static fescue_status small_angles_find(struct grassmann_work *work, size_t q, struct grassmann_geodesic *geodesic)
{
    fescue_status status;
    size_t dimension = work->rows - work->rank, large = work->rank - q;
    size_t nonzero = dimension > large ? dimension - large : 0;
    struct matrix turn = matrix_left(geodesic->turn, q), mixed = matrix_left(work->second_core, q);
    struct matrix mix = matrix_corner(work->core, q, q);
    TRY(dense_svd(work->context, matrix_left(geodesic->rise, q), work->sine, mix, work->dense));
    matrix_multiply(1, turn, false, mix, false, 0, mixed);
    matrix_copy(mixed, turn);
    for (size_t k = 0; k < q; k++)
        geodesic->speed[k] = k < nonzero ? asin(work->sine[k]) : 0;
done:
    return status;
}

/* The angles above 45 degrees, columns q and on, from their cosines. */
static void large_angles_find(const struct grassmann_work *work, size_t q, struct grassmann_geodesic *geodesic)
{
    struct matrix rise = geodesic->rise;
    for (size_t k = q; k < work->rank; k++) {
        double square = 0;
        for (size_t i = 0; i < work->rows; i++)
            square += MATRIX_AT(rise, i, k) * MATRIX_AT(rise, i, k);
        for (size_t i = 0; i < work->rows; i++)
            MATRIX_AT(rise, i, k) /= sqrt(square);
        geodesic->speed[k] = acos(work->cosine[k]);
    }
}

fescue_status geodesic_join(struct grassmann_work *work, struct matrix point, struct matrix target,
                            struct grassmann_geodesic *geodesic)
{
    fescue_status status;
    size_t q = 0;
    assert(is_shape(point, work->rows, work->rank) && is_shape(target, work->rows, work->rank));
    geodesic->start = point;
    tall_cross(work->context, point, target, geodesic->turn, work->dense);
    TRY(dense_svd(work->context, geodesic->turn, work->cosine, work->core, work->dense));
    tall_multiply(work->context, 1, target, work->core, 0, geodesic->rise);
    grassmann_project(work, point, geodesic->rise);
    while (q < work->rank && work->cosine[q] * work->cosine[q] >= half_square)
        q++;
    if (q > 0)
        TRY(small_angles_find(work, q, geodesic));
    large_angles_find(work, q, geodesic);
    tall_multiply(work->context, 1, point, geodesic->turn, 0, geodesic->along);
done:
    return status;
}

fescue_status grassmann_log(struct grassmann_work *work, struct matrix point, struct matrix target,
                            struct matrix tangent)
{
    fescue_status status = geodesic_join(work, point, target, &work->geodesic);
    if (status == FESCUE_OK)
        geodesic_tangent(work, &work->geodesic, tangent);
    return status;
}

static void sort_ascending(double *x, size_t count)
{
    for (size_t i = 1; i < count; i++) {
        double moving = x[i];
        size_t k = i;
        for (; k > 0 && x[k - 1] > moving; k--)
            x[k] = x[k - 1];
        x[k] = moving;
    }
}

fescue_status grassmann_angles(struct grassmann_work *work, struct matrix a, struct matrix b, double *angles)
{
    fescue_status status;
    TRY(geodesic_join(work, a, b, &work->geodesic));
    for (size_t k = 0; k < work->rank; k++)
        angles[k] = work->geodesic.speed[k];
    sort_ascending(angles, work->rank);
done:
    return status;
}

fescue_status grassmann_distance(struct grassmann_work *work, struct matrix a, struct matrix b, double *distance)
{
    fescue_status status;
    double square = 0;
    TRY(geodesic_join(work, a, b, &work->geodesic));
    for (size_t k = 0; k < work->rank; k++)
        square += work->geodesic.speed[k] * work->geodesic.speed[k];
    *distance = sqrt(square);
done:
    return status;
}

fescue_status grassmann_mean_step(struct grassmann_work *work, struct matrix point, double weight, struct matrix mean)
{
    fescue_status status = geodesic_join(work, mean, point, &work->geodesic);
    if (status == FESCUE_OK)
        geodesic_point(work, &work->geodesic, weight, mean);
    return status;
}
