/* SPDX-License-Identifier: MIT
 *
 * Geodesics of the Grassmann manifold, and what is carried along them.
 *
 *     U        start, m x r, orthonormal
 *     D        tangent at U, U'D = 0;  thin SVD  D = P diag(s) Q'
 *     A = UQ   the basis of the start in which the geodesic is r plane rotations, column k by the angle t s_k
 *
 *     point       Exp_U(t D)   = (A cos(ts) + P sin(ts)) Q'                  (Edelman, Arias, Smith 1998, eq. 2.65)
 *     transport   K -> K(t)    = K + (P (cos(ts) - 1) - A sin(ts)) P'K        (same, eq. 2.68)
 *     polar       pf(U + t D)  = (A cos(a) + P sin(a)) Q',  a = atan(ts):  since (U + tD)'(U + tD) = Q (1 + t^2 s^2)
 * Q', the factor is (A + P ts) / sqrt(1 + t^2 s^2) Q'             (Absil, Mahony, Sepulchre 2008, ex. 4.1.3)
 *
 * Departures. The point is computed as U + (A (cos - 1) + P sin) Q' with cos(x) - 1 = -2 sin^2(x/2), which for short
 * steps moves U by what the step is and does not round U through Q Q'. Then one Newton step for the polar factor,
 * Y <- Y (3 I - Y'Y)/2, squares the departure from orthonormality, so that rounding does not add up over iterations.
 *
 * Columns of P whose speed is tiny are orthogonal to U only to rounding / s_k; sin and cos - 1 damp them by s_k, so
 * that neither point nor transport feel it.
 *
 * Cost: aim one thin SVD of m x r; point 6 m r^2 flops, transport 4 m r^2. Parallel over pieces of lines.
 */
#include "manifold/manifold_internal.h"

#include <math.h>

void geodesic_reserve(struct arena *arena, size_t rows, size_t rank)
{
    matrix_reserve(arena, rows, rank);
    matrix_reserve(arena, rows, rank);
    matrix_reserve(arena, rank, rank);
    arena_reserve(arena, rank, sizeof(double));
}

struct grassmann_geodesic geodesic_carve(struct arena *arena, size_t rows, size_t rank)
{
    struct grassmann_geodesic geodesic = {0};
    geodesic.along = matrix_carve(arena, rows, rank);
    geodesic.rise = matrix_carve(arena, rows, rank);
    geodesic.turn = matrix_carve(arena, rank, rank);
    geodesic.speed = arena_carve(arena, rank, sizeof(double));
    return geodesic;
}

fescue_status geodesic_aim(struct grassmann_work *work, struct matrix point, struct matrix tangent,
                           struct grassmann_geodesic *geodesic)
{
    fescue_status status;
    assert(is_shape(point, work->rows, work->rank) && is_shape(tangent, work->rows, work->rank));
    geodesic->start = point;
    tall_copy(work->context, tangent, NULL, geodesic->rise);
    TRY(dense_svd(work->context, geodesic->rise, geodesic->speed, geodesic->turn, work->dense));
    tall_multiply(work->context, 1, point, geodesic->turn, 0, geodesic->along);
done:
    return status;
}

/* tall = A diag(a) + P diag(p): every plane's own combination. Spoils other. */
static void planes_combine(struct grassmann_work *work, const struct grassmann_geodesic *geodesic, const double *a,
                           const double *p)
{
    tall_copy(work->context, geodesic->along, a, work->tall);
    tall_copy(work->context, geodesic->rise, p, work->other);
    tall_add(work->context, 1, work->other, 1, work->tall);
}

static void angle_split(double angle, double *sine, double *cosine_less_one)
{
    double half = sin(0.5 * angle);
    *sine = sin(angle);
    *cosine_less_one = -2 * half * half;
}

/* to = near (3 I - near'near) / 2. */
static void orthonormal_polish(struct grassmann_work *work, struct matrix near, struct matrix to)
{
    tall_cross(work->context, near, near, work->core, work->dense);
    matrix_scale(-0.5, work->core);
    for (size_t k = 0; k < work->rank; k++)
        MATRIX_AT(work->core, k, k) += 1.5;
    tall_multiply(work->context, 1, near, work->core, 0, to);
}

/* to = (A cos + P sin) Q' for the sines and cosines less one in the work. */
static void planes_rotate(struct grassmann_work *work, const struct grassmann_geodesic *geodesic, struct matrix to)
{
    assert(is_shape(to, work->rows, work->rank));
    planes_combine(work, geodesic, work->cosine, work->sine);
    tall_copy(work->context, geodesic->start, NULL, work->other);
    tall_multiply_transposed(work->context, 1, work->tall, geodesic->turn, 1, work->other);
    orthonormal_polish(work, work->other, to);
}

void geodesic_point(struct grassmann_work *work, const struct grassmann_geodesic *geodesic, double t, struct matrix to)
{
    for (size_t k = 0; k < work->rank; k++)
        angle_split(t * geodesic->speed[k], &work->sine[k], &work->cosine[k]);
    planes_rotate(work, geodesic, to);
}

void geodesic_polar(struct grassmann_work *work, const struct grassmann_geodesic *geodesic, double t, struct matrix to)
{
    for (size_t k = 0; k < work->rank; k++)
        angle_split(atan(t * geodesic->speed[k]), &work->sine[k], &work->cosine[k]);
    planes_rotate(work, geodesic, to);
}

void geodesic_tangent(struct grassmann_work *work, const struct grassmann_geodesic *geodesic, struct matrix d)
{
    tall_copy(work->context, geodesic->rise, geodesic->speed, work->tall);
    tall_multiply_transposed(work->context, 1, work->tall, geodesic->turn, 0, d);
}

void geodesic_transport(struct grassmann_work *work, const struct grassmann_geodesic *geodesic, double t,
                        struct matrix k)
{
    assert(is_shape(k, work->rows, work->rank));
    for (size_t i = 0; i < work->rank; i++)
        angle_split(-t * geodesic->speed[i], &work->sine[i], &work->cosine[i]);
    planes_combine(work, geodesic, work->sine, work->cosine);
    tall_cross(work->context, geodesic->rise, k, work->core, work->dense);
    tall_multiply(work->context, 1, work->tall, work->core, 1, k);
}

fescue_status grassmann_exp(struct grassmann_work *work, struct matrix point, struct matrix tangent, double t,
                            struct matrix to)
{
    fescue_status status = geodesic_aim(work, point, tangent, &work->geodesic);
    if (status == FESCUE_OK)
        geodesic_point(work, &work->geodesic, t, to);
    return status;
}

fescue_status grassmann_retract_polar(struct grassmann_work *work, struct matrix point, struct matrix tangent, double t,
                                      struct matrix to)
{
    fescue_status status = geodesic_aim(work, point, tangent, &work->geodesic);
    if (status == FESCUE_OK)
        geodesic_polar(work, &work->geodesic, t, to);
    return status;
}
