/* SPDX-License-Identifier: MIT
 *
 * One step of a Riemannian trust region on the Grassmann manifold (Absil, Baker, Gallivan 2007; for matrix completion
 * Boumal, Absil 2015), on the projected objective and its Hessian (projection.c, hessian.c).
 *
 *     minimise  m(eta) = <g, eta> + 1/2 <eta, H[eta]>   over tangents with |eta W'|_F <= radius
 *
 * by truncated conjugate gradients (Steihaug 1983; Toint 1981), preconditioned with the diagonal blocks of H
 * (hessian_blocks.c); the region is a ball in the metric of W'W, that is in how far the table moves. The papers take
 * one operator for both; here they differ, since a line with few cells has little curvature and yet moves the table as
 * much as any other: the length of eta is then no longer certain to grow from product to product, and the iteration
 * ends where it first leaves the ball. It also ends at negative curvature, after `inner_most` products, or when its
 * gradient, measured in the preconditioner, has fallen by the factor
 *
 *     min(accuracy, 10 r0 / |T|),    r0 the outer gradient, |T| its norm at the zero matrix
 *
 * (superlinear convergence: the fall asked for grows as the outer gradient shrinks). Then eta is retracted, f
 * evaluated, and with  rho = (f(0) - f(eta) + slack) / (m(0) - m(eta) + slack),  slack what rounding of f may hide
 * (line.c):
 *
 *     taken when rho > 0.05;  radius / 4 when rho < 0.25;  radius * 2 when rho > 0.75 at the boundary, at most 2 |W|
 *
 * First radius 0.1 |W|. A refused step is tried again with the smaller radius.
 *
 * The exact Hessian is used where it pays, on request: when |g| <= 1e-2 |R|, the residual is noise and not distance,
 * and what Gauss and Newton leave out decides how fast the end comes. Without noise g and R vanish together and so does
 * what is left out.
 */
#include "solve/solve_internal.h"

#include <math.h>

static const double taken_above = 0.05, bad_below = 0.25, good_above = 0.75;
static const double first_radius = 0.1, most_radius = 2; /* times |W| */
static const double noise_certain = 0.01, noise_likely = 0.05, slow_above = 0.25;
enum { REFUSALS_MOST = 15 }; /* 4^-15: the radius is then at rounding of the first one */

void trust_reserve(struct arena *arena, const struct field *field, size_t rank)
{
    const struct cells *target = &field->problem->target;
    size_t shorter = target->rows <= target->columns ? target->rows : target->columns;
    hessian_reserve(arena, field, rank);
    hessian_blocks_reserve(arena, field, shorter, rank);
    grassmann_reserve(arena, shorter, rank);
    for (int k = 0; k < 6; k++)
        matrix_reserve(arena, shorter, rank);
    arena_reserve(arena, packed_size(rank), sizeof(double));
    matrix_reserve(arena, rank, rank);
}

void trust_carve(struct arena *arena, struct projection *projection, struct trust *trust)
{
    size_t shorter = projection->by_short->lines, rank = projection->rank;
    *trust = (struct trust){.projection = projection};
    struct matrix *const of_short[] = {&trust->basis,   &trust->step,      &trust->slope,
                                       &trust->descent, &trust->direction, &trust->curved};
    hessian_carve(arena, projection, &trust->hessian);
    hessian_blocks_carve(arena, projection, &trust->blocks);
    trust->work = grassmann_carve(projection->field->problem->context, arena, shorter, rank);
    for (int k = 0; k < 6; k++)
        *of_short[k] = matrix_carve(arena, shorter, rank);
    trust->metric = arena_carve(arena, packed_size(rank), sizeof(double));
    trust->gram = matrix_carve(arena, rank, rank);
}

static void point_measure(struct trust *trust, double step)
{
    struct projection *p = trust->projection;
    double steepness = 0;
    if (projection_metric(p, trust->metric)) {
        tall_solve(trust->work.context, trust->metric, p->gradient, trust->descent);
        steepness = tall_dot(trust->work.context, trust->descent, p->gradient);
    }
    trust->measure = (struct solve_measure){
        .objective = p->objective, .square = p->square, .gradient = sqrt(fmax(steepness, 0)), .step = step};
}

static double weights_norm(const struct trust *trust)
{
    struct matrix weights = trust->projection->weights;
    return sqrt(tall_dot(trust->work.context, weights, weights));
}

void trust_widen(struct trust *trust)
{
    trust->radius = first_radius * weights_norm(trust);
}

void trust_start(struct trust *trust)
{
    projection_evaluate(trust->projection);
    point_measure(trust, 0);
    if (trust->radius == 0)
        trust_widen(trust);
}

size_t trust_keep(struct trust *trust, struct memo_part *parts)
{
    parts[0] = (struct memo_part){&trust->radius, sizeof trust->radius};
    parts[1] = (struct memo_part){&trust->slow, sizeof trust->slow};
    parts[2] = (struct memo_part){&trust->measure.step, sizeof trust->measure.step};
    return TRUST_PARTS;
}

void trust_resume(struct trust *trust)
{
    projection_evaluate(trust->projection);
    point_measure(trust, trust->measure.step);
}

/* <a, b> in the metric: the inner product of a W' and b W'. */
static double metric_dot(struct trust *trust, struct matrix a, struct matrix b)
{
    tall_cross(trust->work.context, a, b, trust->projection->core, trust->work.dense);
    return matrix_dot(trust->projection->core, trust->gram);
}

/* Inner products of the inner iteration, in the metric. */
struct inner {
    double length, along, step; /* <d, d>, <eta, d>, <eta, eta> */
    double fall;                /* g.z, z the descent that g gives */
};

/* How far along d the boundary is. */
static double boundary(const struct inner *inner, double radius)
{
    double room = radius * radius - inner->step;
    double root = sqrt(fmax(inner->along * inner->along + inner->length * room, 0));
    return (root - inner->along) / inner->length;
}

/* Moves eta by t d, and the slope with it. */
static void step_extend(struct trust *trust, double t)
{
    tall_add(trust->work.context, t, trust->direction, 1, trust->step);
    tall_add(trust->work.context, t, trust->curved, 1, trust->slope);
}

/* eta and g + H eta; true when eta lies on the boundary. */
static bool model_minimise(struct trust *trust, const struct trust_rules *rules)
{
    struct projection *p = trust->projection;
    double norm = p->field->problem->norm, gradient = trust->measure.gradient;
    struct inner inner = {0};
    matrix_zero(trust->step);
    tall_copy(trust->work.context, p->gradient, NULL, trust->slope);
    hessian_blocks_precondition(&trust->blocks, trust->slope, trust->descent);
    inner.fall = tall_dot(trust->work.context, trust->slope, trust->descent);
    double share = fmin(rules->accuracy, norm > 0 ? 10 * gradient / norm : 1), enough = inner.fall * share * share;
    tall_add(trust->work.context, -1, trust->descent, 0, trust->direction);
    inner.length = metric_dot(trust, trust->direction, trust->direction);
    for (unsigned k = 0; k < rules->inner_most; k++) {
        hessian_apply(&trust->hessian, trust->direction, trust->curved);
        double bend = tall_dot(trust->work.context, trust->direction, trust->curved), t = inner.fall / bend;
        double reach = inner.step + 2 * t * inner.along + t * t * inner.length;
        if (!(bend > 0) || !(reach < trust->radius * trust->radius)) {
            step_extend(trust, boundary(&inner, trust->radius));
            return true;
        }
        step_extend(trust, t);
        inner.step = reach;
        hessian_blocks_precondition(&trust->blocks, trust->slope, trust->descent);
        double fall = tall_dot(trust->work.context, trust->slope, trust->descent), beta = fall / inner.fall;
        if (!(fall > enough))
            break;
        tall_add(trust->work.context, -1, trust->descent, beta, trust->direction);
        inner.along = metric_dot(trust, trust->step, trust->direction);
        inner.length = metric_dot(trust, trust->direction, trust->direction);
        inner.fall = fall;
    }
    return false;
}

/* Retracts, evaluates and judges; false: refused, and the projection stands at eta all the same. */
static fescue_status step_judge(struct trust *trust, bool at_boundary, bool *taken)
{
    struct projection *p = trust->projection;
    struct line line = line_start(p->field->problem, &trust->measure, 0);
    double promised = -0.5 * (tall_dot(trust->work.context, trust->step, trust->slope) +
                              tall_dot(trust->work.context, trust->step, p->gradient));
    fescue_status status = grassmann_retract_qr(&trust->work, trust->basis, trust->step, 1, p->basis);
    if (status != FESCUE_OK)
        return status;
    projection_evaluate(p);
    double rho = (line.objective - p->objective + line.slack) / (promised + line.slack);
    *taken = rho > taken_above;
    if (!(rho >= bad_below))
        trust->radius /= 4;
    else if (rho > good_above && at_boundary)
        trust->radius *= 2;
    return FESCUE_OK;
}

/* What all trials from one point share. */
static void inner_start(struct trust *trust)
{
    struct projection *p = trust->projection;
    tall_cross(p->field->problem->context, p->weights, p->weights, trust->gram, p->dense);
    hessian_blocks_start(&trust->blocks, trust->hessian.damping);
}

fescue_status trust_step(struct trust *trust, const struct trust_rules *rules, bool *moved)
{
    struct projection *p = trust->projection;
    fescue_status status = FESCUE_OK;
    *moved = false;
    if (!(trust->measure.gradient > 0))
        return status;
    double gradient = trust->measure.gradient;
    bool at_boundary = false;
    bool noise = gradient <= (trust->slow ? noise_likely : noise_certain) * sqrt(trust->measure.square);
    tall_copy(trust->work.context, p->basis, NULL, trust->basis);
    for (int trial = 0; trial < REFUSALS_MOST && !*moved; trial++) {
        hessian_start(&trust->hessian, rules->exact && noise);
        if (trial == 0)
            inner_start(trust);
        at_boundary = model_minimise(trust, rules);
        TRY(step_judge(trust, at_boundary, moved));
        if (!*moved) {
            tall_copy(trust->work.context, trust->basis, NULL, p->basis);
            projection_evaluate(p);
        }
    }
    trust->radius = fmin(trust->radius, most_radius * weights_norm(trust));
    if (*moved) {
        point_measure(trust, sqrt(tall_dot(trust->work.context, trust->step, trust->step)));
        trust->slow |= !at_boundary && trust->measure.gradient > slow_above * gradient;
    }
done:
    return status;
}
