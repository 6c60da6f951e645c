/* SPDX-License-Identifier: MIT
 *
 * Conjugate gradients on the manifold of m x n matrices of rank r, embedded in all matrices (Vandereycken 2013,
 * "Low-rank matrix completion by Riemannian optimization", algorithm 1).
 *
 *     minimise  f(X) = 1/2 |R|^2 + lambda/2 |X|^2,      R = P(X - T),  X = U S V'
 *
 *     symbol     name               shape
 *     U, S, V    point              m x r, r, n x r
 *     R                             residual on the seen cells, made anew in every pass
 *     g          gradient           a tangent (M, Up, Vp): U M V' + Up V' + U Vp'
 *     D          direction          a tangent
 *     P          restriction to the seen cells
 *
 * One iteration:
 *     1. g = projection of R + lambda X onto the tangents at X, from the two products R V and R'U; lambda X = U (lambda
 *        S) V' is tangent, so it joins the middle part exactly.
 *     2. D = -g + beta T(D_old), T the transport by projection, beta by Polak and Ribiere, never negative (Nocedal,
 *        Wright 2006, section 5.2), which needs <g, T(g_old)> but not T(g_old).
 *        D = -g again when D is no clear descent.
 *     3. On the tangent the objective is a parabola, so the step there is exact:
 *            t = -<g, D> / (|P(D)|^2 + lambda |D|^2).
 *     4. X_new = a matrix of rank r near X + t D (fixed_rank_retract). Armijo with backtracking guards it (line.c).
 *
 * Departures: the paper scales by 2/3 and halves the step on refusal; here the parabola through the refused value is
 * used. The paper goes to the nearest matrix of rank r; here short steps go by the orthographic retraction, which
 * agrees with that to second order and needs no SVD of twice the rank. S enters the factor that is multiplied on, never
 * divided off, so singular values may be as small as they like, or zero, and both halves of the gradient have the
 * relative precision of R.
 *
 * Cost an iteration: three passes over the cells (tangent, residual with R V, residual with R'U), 4r flops a cell each,
 * and O((m+n) r^2). Workspace: four tangents, two points, two scaled factors; nothing a cell.
 *
 * Parallel in the passes and in all that goes over the lines; the same bits for any number of workers.
 */
#include "solve/solve_internal.h"

#include <math.h>

/* D is a clear descent when its angle to -g has a cosine of at least this; the usual safeguard of inexact CG. */
static const double least_cosine = 1e-3;

struct fixed_rank_cg {
    struct field *field;
    struct arena arena;
    struct low_rank point, trial;
    struct fixed_rank_work work;
    struct fixed_rank_tangent gradient, trial_gradient, direction, moved;
    struct matrix scaled_left, scaled_right; /* U S, V S; scaled_left also holds a factor of the direction */
    struct solve_measure measure, trial_measure;
    double slope, size; /* of the direction: <g, D> and <D, D> */
    bool fresh;         /* the direction is the negative gradient */
};

/* ---- memory --------------------------------------------------------------------------------------------------------
 */

static void cg_reserve(struct arena *arena, const struct low_rank *point)
{
    for (int k = 0; k < 4; k++)
        fixed_rank_tangent_reserve(arena, point->rows, point->columns, point->rank);
    fixed_rank_reserve(arena, point->rows, point->columns, point->rank);
    matrix_reserve(arena, point->rows, point->rank);
    matrix_reserve(arena, point->columns, point->rank);
}

static void cg_carve(struct fixed_rank_cg *cg, const struct low_rank *point)
{
    struct fixed_rank_tangent *const tangents[] = {&cg->gradient, &cg->trial_gradient, &cg->direction, &cg->moved};
    for (int k = 0; k < 4; k++)
        *tangents[k] = fixed_rank_tangent_carve(&cg->arena, point->rows, point->columns, point->rank);
    cg->work = fixed_rank_carve(cg->field->problem->context, &cg->arena, point->rows, point->columns, point->rank);
    cg->scaled_left = matrix_carve(&cg->arena, point->rows, point->rank);
    cg->scaled_right = matrix_carve(&cg->arena, point->columns, point->rank);
}

static void cg_destroy(fescue_context *context, void **state)
{
    struct fixed_rank_cg *cg = *state;
    arena_close(context, &cg->arena);
    low_rank_free(context, &cg->point);
    low_rank_free(context, &cg->trial);
    memory_give(context, state);
}

/* ---- the objective -------------------------------------------------------------------------------------------------
 */

/* Objective and the half R V of the gradient at the trial point. One pass. */
static void trial_evaluate(struct fixed_rank_cg *cg)
{
    struct low_rank *x = &cg->trial;
    struct solve_measure *measure = &cg->trial_measure;
    double size = 0;
    tall_copy(cg->work.context, x->left, x->spectrum, cg->scaled_left);
    sweep_residual(&cg->field->sweep, field_rows(cg->field), cg->scaled_left, x->right, cg->trial_gradient.left, NULL,
                   &measure->square);
    for (size_t k = 0; k < x->rank; k++)
        size += x->spectrum[k] * x->spectrum[k];
    measure->objective = 0.5 * measure->square + 0.5 * cg->field->problem->lambda * size;
}

/* The other half R'U and the projection. One pass. */
static void trial_differentiate(struct fixed_rank_cg *cg)
{
    struct low_rank *x = &cg->trial;
    struct fixed_rank_tangent *g = &cg->trial_gradient;
    double square;
    tall_copy(cg->work.context, x->right, x->spectrum, cg->scaled_right);
    sweep_residual(&cg->field->sweep, field_columns(cg->field), cg->scaled_right, x->left, g->right, NULL, &square);
    double normal = fixed_rank_project(&cg->work, x, g);
    for (size_t k = 0; k < x->rank; k++)
        MATRIX_AT(g->middle, k, k) += cg->field->problem->lambda * x->spectrum[k];
    cg->trial_measure.gradient = sqrt(matrix_dot(g->middle, g->middle) + normal);
}

/* The trial becomes the point; what was the point is overwritten by the next trial. */
static void trial_accept(struct fixed_rank_cg *cg)
{
    struct low_rank point = cg->point;
    struct fixed_rank_tangent gradient = cg->gradient;
    cg->point = cg->trial;
    cg->trial = point;
    cg->gradient = cg->trial_gradient;
    cg->trial_gradient = gradient;
    cg->measure = cg->trial_measure;
}

static void direction_restart(struct fixed_rank_cg *cg)
{
    fixed_rank_add(&cg->work, -1, &cg->gradient, 0, &cg->direction);
    cg->size = cg->measure.gradient * cg->measure.gradient;
    cg->slope = -cg->size;
    cg->fresh = true;
}

static fescue_status cg_create(struct field *field, const struct low_rank *point, void **state)
{
    fescue_context *context = field->problem->context;
    struct fixed_rank_cg *cg;
    fescue_status status = TAKE(context, 1, &cg);
    if (status != FESCUE_OK)
        return status;
    *state = cg;
    cg->field = field;
    TRY(sweep_arrange(&field->sweep, field_columns(field)));
    TRY(low_rank_copy(context, point, &cg->trial));
    TRY(low_rank_create(context, point->rows, point->columns, point->rank, &cg->point));
    cg_reserve(&cg->arena, point);
    TRY(arena_open(context, &cg->arena));
    cg_carve(cg, point);
    trial_evaluate(cg);
    trial_differentiate(cg);
    trial_accept(cg);
    direction_restart(cg);
done:
    if (status != FESCUE_OK)
        cg_destroy(context, state);
    return status;
}

/* ---- one iteration -------------------------------------------------------------------------------------------------
 */

/* Curvature of the objective along the direction, on the tangent. One pass. */
static double direction_curvature(struct fixed_rank_cg *cg)
{
    const struct low_rank *x = &cg->point;
    const struct fixed_rank_tangent *d = &cg->direction;
    double curvature;
    fixed_rank_pairs(&cg->work, x, d, cg->scaled_left);
    sweep_tangent(&cg->field->sweep, field_rows(cg->field), cg->scaled_left, x->right, x->left, d->right, NULL, NULL,
                  &curvature);
    return curvature + cg->field->problem->lambda * cg->size;
}

/* The direction for this iteration, carried over from the point before (which cg->trial still holds; its gradient is in
   trial_gradient) or the gradient alone. */
static void direction_choose(struct fixed_rank_cg *cg, double old_gradient)
{
    double new_gradient = cg->measure.gradient;
    double turned = fixed_rank_inner_apart(&cg->work, &cg->trial, &cg->trial_gradient, &cg->point, &cg->gradient);
    double beta = (new_gradient * new_gradient - turned) / (old_gradient * old_gradient);
    if (!(beta > 0)) {
        direction_restart(cg);
        return;
    }
    struct fixed_rank_tangent old = cg->direction;
    struct fixed_rank_blend blend = {.beta = beta, .alpha = -1, .y = &cg->gradient};
    fixed_rank_transport(&cg->work, &cg->trial, &old, &cg->point, &blend, &cg->moved);
    cg->direction = cg->moved;
    cg->moved = old;
    cg->slope = blend.along;
    cg->size = blend.size;
    cg->fresh = false;
    if (!(-cg->slope > least_cosine * new_gradient * sqrt(cg->size)))
        direction_restart(cg);
}

/* Goes along the direction; *moved = false when nothing better was found, and the point is as before. */
static fescue_status line_follow(struct fixed_rank_cg *cg, bool *moved)
{
    fescue_status status = FESCUE_OK;
    *moved = false;
    double curvature = direction_curvature(cg);
    if (!(cg->slope < 0) || !(curvature > 0))
        return status;
    struct line line = line_start(cg->field->problem, &cg->measure, cg->slope);
    double t = -cg->slope / curvature;
    for (int trial = 0; trial < LINE_MOST_TRIALS; trial++) {
        TRY(fixed_rank_retract(&cg->work, &cg->point, &cg->direction, t, &cg->trial));
        trial_evaluate(cg);
        if (line_accepts(&line, t, cg->trial_measure.objective)) {
            cg->trial_measure.step = t;
            *moved = true;
            break;
        }
        t = line_shorten(&line, t, cg->trial_measure.objective);
    }
done:
    return status;
}

static fescue_status cg_step(void *state, bool *moved)
{
    struct fixed_rank_cg *cg = state;
    fescue_status status;
    TRY(line_follow(cg, moved));
    if (!*moved && !cg->fresh) {
        direction_restart(cg);
        TRY(line_follow(cg, moved));
    }
    if (!*moved)
        goto done;
    trial_differentiate(cg);
    double old_gradient = cg->measure.gradient;
    trial_accept(cg);
    direction_choose(cg, old_gradient);
done:
    return status;
}

static void cg_measure(const void *state, struct solve_measure *measure)
{
    *measure = ((const struct fixed_rank_cg *)state)->measure;
}

static size_t cg_keep(void *state, struct memo_part parts[SOLVER_PARTS])
{
    struct fixed_rank_cg *cg = state;
    parts[0] = matrix_part(cg->point.left);
    parts[1] = matrix_part(cg->point.right);
    parts[2] = (struct memo_part){cg->point.spectrum, cg->point.rank * sizeof *cg->point.spectrum};
    parts[3] = matrix_part(cg->direction.left);
    parts[4] = matrix_part(cg->direction.middle);
    parts[5] = matrix_part(cg->direction.right);
    parts[6] = (struct memo_part){&cg->measure.step, sizeof cg->measure.step};
    parts[7] = (struct memo_part){&cg->fresh, sizeof cg->fresh};
    return 8;
}

/* Residual and gradient are those of the point. */
static void cg_resume(void *state)
{
    struct fixed_rank_cg *cg = state;
    matrix_copy(cg->point.left, cg->trial.left);
    matrix_copy(cg->point.right, cg->trial.right);
    for (size_t k = 0; k < cg->point.rank; k++)
        cg->trial.spectrum[k] = cg->point.spectrum[k];
    cg->trial_measure.step = cg->measure.step;
    trial_evaluate(cg);
    trial_differentiate(cg);
    trial_accept(cg);
    if (cg->fresh) {
        direction_restart(cg);
        return;
    }
    cg->slope = fixed_rank_inner(&cg->work, &cg->gradient, &cg->direction);
    cg->size = fixed_rank_inner(&cg->work, &cg->direction, &cg->direction);
}

static fescue_status cg_point_write(void *state, struct low_rank *point)
{
    const struct fixed_rank_cg *cg = state;
    matrix_copy(cg->point.left, point->left);
    matrix_copy(cg->point.right, point->right);
    for (size_t k = 0; k < point->rank; k++)
        point->spectrum[k] = cg->point.spectrum[k];
    return FESCUE_OK;
}

const struct solver fixed_rank_cg_solver = {
    .name = "fixed-rank-cg",
    .summary = "conjugate gradients on the manifold of matrices of fixed rank, with the exact step on the tangent",
    .width = 1,
    .create = cg_create,
    .measure = cg_measure,
    .step = cg_step,
    .keep = cg_keep,
    .resume = cg_resume,
    .point_write = cg_point_write,
    .destroy = cg_destroy,
};
