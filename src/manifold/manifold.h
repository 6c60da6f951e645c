/* SPDX-License-Identifier: MIT
 *
 * Geometry: the Grassmann manifold of r-dimensional subspaces of R^m, the manifold of m x n matrices of rank r, and
 * what curvature costs a first-order method. Nothing here knows of tables or of observed cells.
 *
 * Workspace: an operation that needs room takes it from a `_work`, which its user reserves and carves in an arena
 * (reserve everything, open, carve in the same order). A work serves one operation at a time and keeps nothing between
 * them; it borrows the context for failures' sentences and for the team. Only the low_rank_ functions that make a new
 * point allocate. The bits of every result are the same for any number of workers.
 *
 * Status: FESCUE_OK, or FESCUE_DEFECT when LAPACK did not converge (numbers that are not finite went in); outputs are
 * then undefined. Shapes that do not fit together are asserted.
 */
#ifndef FESCUE_MANIFOLD_H
#define FESCUE_MANIFOLD_H

#include "numeric/numeric.h"

/* ---- a matrix of low rank --------------------------------------------------------------------------------------- */

/* left diag(spectrum) right': left (rows x rank) and right (columns x rank) orthonormal, spectrum >= 0, descending.
   Owns its memory. Rank 0 is the zero matrix. rank <= min(rows, columns). */
struct low_rank {
    size_t rows, columns, rank;
    struct matrix left, right;
    double *spectrum;
    struct arena arena;
};
fescue_status low_rank_create(fescue_context *context, size_t rows, size_t columns, size_t rank, struct low_rank *out);
fescue_status low_rank_copy(fescue_context *context, const struct low_rank *from, struct low_rank *out);
void low_rank_free(fescue_context *context, struct low_rank *point); /* NULL-safe, leaves rank 0 */
/* New point A B' from tall factors, rank numbers a row, rank <= rows and columns; borrows both. */
fescue_status low_rank_from_product(fescue_context *context, struct matrix a, struct matrix b, struct low_rank *out);
double low_rank_entry(const struct low_rank *point, size_t row, size_t column);

/* ---- Grassmann -------------------------------------------------------------------------------------------------- */

/* A point is a subspace, held as an orthonormal basis U (m x r, 1 <= r <= m); U and U O are the same point for every
   orthogonal O. A tangent vector at it is D (m x r) with U'D = 0, written in the same basis (at U O it is D O). The
   metric is tr(D'E). Facts that the step rules lean on:
     sectional curvature   between 0 and 2; between 0 and 1 when r = 1 or m - r = 1 (Wong 1968)
     injectivity radius    pi/2: a tangent shorter than that is the logarithm of its exponential
     cut locus             the points whose largest principal angle is pi/2; no distance exceeds pi/2 sqrt(min(r, m-r))
     strong convexity      balls of radius below pi/4 are strongly convex
   At r = m there is one point, and every tangent is zero. */

/* The geodesic t -> Exp_U(t D), D = P diag(s) Q': factors made once for any number of t. The s_k are its speeds in the
   planes spanned by column k of U Q and column k of P. */
struct grassmann_geodesic {
    struct matrix start; /* U, borrowed: must not change while the geodesic is used */
    struct matrix along; /* U Q, rows x rank */
    struct matrix rise;  /* P, rows x rank; a column whose speed is 0 may be anything */
    struct matrix turn;  /* Q, rank x rank */
    double *speed;       /* s, in no order */
};
void geodesic_reserve(struct arena *arena, size_t rows, size_t rank);
struct grassmann_geodesic geodesic_carve(struct arena *arena, size_t rows, size_t rank);

struct grassmann_work {
    fescue_context *context;
    size_t rows, rank;
    struct grassmann_geodesic geodesic;
    struct matrix tall, other;                /* rows x rank */
    struct matrix core, second_core, inverse; /* rank x rank */
    double *sine, *cosine;                    /* rank */
    double *dense, *sums;
};
void grassmann_reserve(struct arena *arena, size_t rows, size_t rank);
struct grassmann_work grassmann_carve(fescue_context *context, struct arena *arena, size_t rows, size_t rank);

/* <D, E> of two tangents at one point. O(m r). */
static inline double grassmann_inner(struct matrix d, struct matrix e)
{
    return matrix_dot(d, e);
}
/* z <- (I - U U') z, the orthogonal projection onto the tangents at `point`. With z a tangent at a nearby point whose
   basis is near in the same sense (any retraction below gives such) this is the transport by projection. O(m r^2). */
void grassmann_project(struct grassmann_work *work, struct matrix point, struct matrix z);

/* The geodesic that leaves `point` along `tangent`: one thin SVD, O(m r^2). */
fescue_status geodesic_aim(struct grassmann_work *work, struct matrix point, struct matrix tangent,
                           struct grassmann_geodesic *geodesic);
/* The shortest geodesic that is at `point` for t = 0 and at `target` for t = 1; on the cut locus one of the shortest.
   Its speeds are the principal angles between the two. Does not depend on the target's basis. */
fescue_status geodesic_join(struct grassmann_work *work, struct matrix point, struct matrix target,
                            struct grassmann_geodesic *geodesic);
/* to = Exp_U(t D), in the basis into which U is carried in parallel. `to` may be the start when it is used no more. */
void geodesic_point(struct grassmann_work *work, const struct grassmann_geodesic *geodesic, double t, struct matrix to);
/* d = the D of the geodesic, a tangent at its start. */
void geodesic_tangent(struct grassmann_work *work, const struct grassmann_geodesic *geodesic, struct matrix d);
/* k, a tangent at the start, becomes the parallel tangent at geodesic_point(t). */
void geodesic_transport(struct grassmann_work *work, const struct grassmann_geodesic *geodesic, double t,
                        struct matrix k);
/* to = the polar factor of U + t D: the point of the geodesic's planes at the angles atan(t s) in place of t s. */
void geodesic_polar(struct grassmann_work *work, const struct grassmann_geodesic *geodesic, double t, struct matrix to);

/* to = Exp_U(t D); `to` may be the point or the tangent. */
fescue_status grassmann_exp(struct grassmann_work *work, struct matrix point, struct matrix tangent, double t,
                            struct matrix to);
/* tangent = the D at `point` of geodesic_join: the shortest with Exp(D) = target. `tangent` may be the target. */
fescue_status grassmann_log(struct grassmann_work *work, struct matrix point, struct matrix target,
                            struct matrix tangent);
/* angles[r], ascending in [0, pi/2]; absolute error of rounding size for small and large angles alike. */
fescue_status grassmann_angles(struct grassmann_work *work, struct matrix a, struct matrix b, double *angles);
fescue_status grassmann_distance(struct grassmann_work *work, struct matrix a, struct matrix b, double *distance);

/* Retractions of U + t D; `to` may be the point or the tangent. Both agree with the exponential map up to O(t^3).
   By QR with positive diagonal (cheapest), so that `to` runs continuously from U; by the polar factor. */
fescue_status grassmann_retract_qr(struct grassmann_work *work, struct matrix point, struct matrix tangent, double t,
                                   struct matrix to);
fescue_status grassmann_retract_polar(struct grassmann_work *work, struct matrix point, struct matrix tangent, double t,
                                      struct matrix to);

/* Uniform point. Uniform tangent of norm 1 (0 where r = m). */
fescue_status grassmann_random_point(struct grassmann_work *work, struct random_stream *stream, struct matrix point);
void grassmann_random_tangent(struct grassmann_work *work, struct random_stream *stream, struct matrix point,
                              struct matrix tangent);

/* One step of a running mean along geodesics: mean <- Exp_mean(weight Log_mean(point)). With weights average_weight(t),
   t = 1, 2, ..., the points that came are weighed equally; weight 1 makes the mean the point. */
fescue_status grassmann_mean_step(struct grassmann_work *work, struct matrix point, double weight, struct matrix mean);

/* ---- matrices of rank r ------------------------------------------------------------------------------------------ */

/* The embedded manifold of m x n matrices of rank r >= 1 (Vandereycken 2013). A point is a low_rank X = U diag(s) V'.
   A tangent vector at it is Z = U M V' + Up V' + U Vp' with U'Up = 0 and V'Vp = 0; the metric is tr(Z'Z). */
struct fixed_rank_tangent {
    struct matrix middle; /* M, r x r */
    struct matrix left;   /* Up, m x r */
    struct matrix right;  /* Vp, n x r */
};
void fixed_rank_tangent_reserve(struct arena *arena, size_t rows, size_t columns, size_t rank);
struct fixed_rank_tangent fixed_rank_tangent_carve(struct arena *arena, size_t rows, size_t columns, size_t rank);

struct fixed_rank_work {
    fescue_context *context;
    size_t rows, columns, rank;
    struct matrix tall_left, tall_right;         /* rows x 2 rank, columns x 2 rank */
    struct matrix triangle_left, triangle_right; /* min(rows, 2 rank) x 2 rank and so on */
    struct matrix core, core_right, product;     /* 2 rank x 2 rank */
    struct matrix small, small_right;            /* rank x rank */
    struct matrix gram_left, gram_right;         /* 2 rank x 2 rank */
    double *spectrum;                            /* 2 rank */
    double *dense, *sums;
};
void fixed_rank_reserve(struct arena *arena, size_t rows, size_t columns, size_t rank);
struct fixed_rank_work fixed_rank_carve(fescue_context *context, struct arena *arena, size_t rows, size_t columns,
                                        size_t rank);

/* Tangents as vectors. O((m+n) r). */
void fixed_rank_add(const struct fixed_rank_work *work, double alpha, const struct fixed_rank_tangent *x, double beta,
                    struct fixed_rank_tangent *y); /* y = alpha x + beta y; y is not read where beta is 0 */
double fixed_rank_inner(const struct fixed_rank_work *work, const struct fixed_rank_tangent *x,
                        const struct fixed_rank_tangent *y);

/* The orthogonal projection of an m x n matrix A onto the tangents at `point`, from two products of A that its owner
   makes: on entry z->left = A V (m x r) and z->right = A'U (n x r), z->middle anything; on return z is the projection.
   Returns |z->left|^2 + |z->right|^2. O((m+n) r^2). */
double fixed_rank_project(struct fixed_rank_work *work, const struct low_rank *point, struct fixed_rank_tangent *z);

/* The tangent as two pairs of factors, Z = A V' + U B': A (m x r, receives U M + Up); B is z->right itself. What
   sweep_tangent takes: (a, right, left, b) = (A, V, U, B). */
void fixed_rank_pairs(const struct fixed_rank_work *work, const struct low_rank *point,
                      const struct fixed_rank_tangent *z, struct matrix a);

/* Transport by projection: out (not z) = T(Z), the projection of Z, a tangent at `from`, onto the tangents at `to`; or,
   as a direction of conjugate gradients is made, a sum with a tangent there, and its products, in the same rounds.
   O((m+n) r^2). */
struct fixed_rank_blend { /* out = beta T(Z) + alpha Y */
    double beta, alpha;
    const struct fixed_rank_tangent *y; /* at `to`, not out; NULL: none */
    double size, along;                 /* given back: <out, out>, <Y, out> */
};
void fixed_rank_transport(struct fixed_rank_work *work, const struct low_rank *from, const struct fixed_rank_tangent *z,
                          const struct low_rank *to, struct fixed_rank_blend *blend, struct fixed_rank_tangent *out);

/* The inner product at `to` of y, a tangent there, and of the transport of z, a tangent at `from`: without making it.
   O((m+n) r^2). */
double fixed_rank_inner_apart(struct fixed_rank_work *work, const struct low_rank *from,
                              const struct fixed_rank_tangent *z, const struct low_rank *to,
                              const struct fixed_rank_tangent *y);

/* to = a matrix of rank r near X + t Z, which agrees with the exponential map up to O(t^3): the orthographic retraction
   where it is near enough, the metric projection elsewhere. `to`, of the same shape and rank, is not the point.
   O((m+n) r^2 + r^3). */
fescue_status fixed_rank_retract(struct fixed_rank_work *work, const struct low_rank *point,
                                 const struct fixed_rank_tangent *z, double t, struct low_rank *to);
/* to = a matrix of rank r nearest to X + t Z: the truncated SVD, exact. The new spectrum may hold zeros when X + t Z
   has a lower rank. */
fescue_status fixed_rank_retract_metric(struct fixed_rank_work *work, const struct low_rank *point,
                                        const struct fixed_rank_tangent *z, double t, struct low_rank *to);
/* to = X + t Z + t^2 Up (diag(s) + t M)^-1 Vp', the matrix of rank r that differs from X + t Z by a normal vector only
   (Absil, Malick 2012). Cheaper: no SVD of width 2r. *is_near = false, and `to` untouched, when diag(s) + t M is
   singular to rounding or what is sought is a long way off: a column of either frame would turn by more than 27
   degrees. */
fescue_status fixed_rank_retract_orthographic(struct fixed_rank_work *work, const struct low_rank *point,
                                              const struct fixed_rank_tangent *z, double t, struct low_rank *to,
                                              bool *is_near);

/* ---- curvature and step rules --------------------------------------------------------------------------------------
 */

/* What a lower bound `curvature` of the sectional curvature costs within distance `radius`: the squared-distance
   inequality of geodesic triangles pays the factor  zeta = x / tanh(x), x = sqrt(|curvature|) radius, for a negative
   bound and 1 for a nonnegative one (PMLR 49 (2016), 1617-1638). 1 at radius 0; near x when x is large. */
double curvature_zeta(double curvature, double radius);

/* Step lengths of first-order methods for geodesically convex functions (same source), t = 1, 2, ... */
double step_smooth(double smoothness); /* gradient Lipschitz with constant L: 1/L */
/* Subgradients and stochastic gradients no longer than G within diameter D: D / (G sqrt(zeta t)). */
double step_subgradient(double diameter, double gradient_most, double zeta, uint64_t t);
double step_strongly_convex(double strong_convexity, uint64_t t); /* mu: 2 / (mu (t+1)) */
double average_weight(uint64_t t);                                /* of the t-th iterate in the running mean: 1/t */

#endif
