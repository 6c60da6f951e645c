/* SPDX-License-Identifier: MIT
 *
 * Conjugate gradients over the subspace of the shorter side, the longer side in closed form (projection.c: f(U), R, W,
 * g). Conjugate gradients on the Grassmann manifold: Edelman, Arias, Smith 1998; with a preconditioner: Boumal, Absil
 * 2015, section 4.
 *
 *     symbol   name         shape
 *     U        basis        short x r
 *     D        direction    tangent at U, short x r, U'D = 0
 *     z        descent      g (W'W)^-1, the gradient in the metric <A, B> = tr(A W'W B')
 *
 * One iteration:
 *     1. D = -z + beta T(D_old), T the transport by projection, beta by Hestenes and Stiefel in that metric,
 *            beta = <z, g - g_old> / <T(D_old), g - g_old>,
 *        never negative; with plain inner products of U-space (z carries the metric). D = -z when D is no clear
 * descent.
 *     2. Step. With W held, f along U + tD is a parabola with slope <g, D> and curvature |P(D W')|^2. Letting W follow
 *        lowers the curvature by a factor that changes slowly from one iteration to the next; it is measured on the
 *        step taken before (the parabola through f(0), f'(0), f(t)) and used for the next, which saves the pass and the
 *        small solves that the exact Gauss-Newton curvature would take. A step that turns out to be off the parabola's
 *        minimum by more than a factor of two is taken again, at the minimum.
 *     3. Retraction by QR with positive diagonal; Armijo with backtracking (line.c).
 *
 * Departures: the remembered factor is ours. With lambda > 0 nothing changes: the ridge is on W alone.
 *
 * Cost an iteration: three passes (solve, residual with R W, tangent), and O(short r^2 + long r^2). Workspace: six
 * matrices of the shorter side, two of the longer. Parallel in the passes and in all that goes over the lines.
 */
#include "solve/solve_internal.h"

#include <math.h>

/* As in fixed_rank_cg.c. */
static const double least_cosine = 1e-3;
/* The remembered factor is held within these: letting W follow cannot raise the curvature by much, and a factor near 0
   comes from a step that was too long for a parabola. */
static const double least_factor = 0.05, most_factor = 2;

/* A first step that is off the parabola's minimum by more than this factor is taken again. */
static const double off_step = 2;

struct grassmann_cg {
    struct projection projection;
    struct arena arena;
    struct grassmann_work work;
    struct matrix basis, gradient;    /* where the line started: copies of the projection's */
    struct matrix descent, direction; /* z, D */
    struct matrix still;              /* long x rank, zero: W held */
    double *metric;                   /* packed factor of W'W */
    double factor;                    /* curvature of f over curvature with W held */
    double steepness;                 /* <z, g> */
    struct solve_measure measure;
    bool fresh; /* the direction is the negative of z */
};

static void direction_restart(struct grassmann_cg *cg)
{
    tall_add(cg->work.context, -1, cg->descent, 0, cg->direction);
    cg->fresh = true;
}

/* z, and the measure of where the projection stands. */
static void point_measure(struct grassmann_cg *cg, double step)
{
    struct projection *p = &cg->projection;
    if (projection_metric(p, cg->metric))
        tall_solve(cg->work.context, cg->metric, p->gradient, cg->descent);
    else
        matrix_zero(cg->descent);
    cg->steepness = tall_dot(cg->work.context, cg->descent, p->gradient);
    cg->measure = (struct solve_measure){
        .objective = p->objective, .square = p->square, .gradient = sqrt(fmax(cg->steepness, 0)), .step = step};
}

static void cg_destroy(fescue_context *context, void **state)
{
    struct grassmann_cg *cg = *state;
    arena_close(context, &cg->arena);
    memory_give(context, state);
}

static void cg_reserve(struct arena *arena, const struct field *field, size_t shorter, size_t longer, size_t rank)
{
    projection_reserve(arena, field, rank);
    grassmann_reserve(arena, shorter, rank);
    for (int k = 0; k < 4; k++)
        matrix_reserve(arena, shorter, rank);
    matrix_reserve(arena, longer, rank);
    arena_reserve(arena, packed_size(rank), sizeof(double));
}

static void cg_carve(struct grassmann_cg *cg, struct field *field, const struct low_rank *point)
{
    struct matrix *const of_short[] = {&cg->basis, &cg->gradient, &cg->descent, &cg->direction};
    projection_carve(&cg->arena, field, point, &cg->projection);
    const struct half *half = cg->projection.by_short;
    cg->work = grassmann_carve(field->problem->context, &cg->arena, half->lines, point->rank);
    for (int k = 0; k < 4; k++)
        *of_short[k] = matrix_carve(&cg->arena, half->lines, point->rank);
    cg->still = matrix_carve(&cg->arena, half->length, point->rank);
    cg->metric = arena_carve(&cg->arena, packed_size(point->rank), sizeof(double));
}

static fescue_status cg_create(struct field *field, const struct low_rank *point, void **state)
{
    fescue_context *context = field->problem->context;
    struct grassmann_cg *cg;
    size_t rows = point->rows, columns = point->columns;
    fescue_status status = TAKE(context, 1, &cg);
    if (status != FESCUE_OK)
        return status;
    *state = cg;
    cg_reserve(&cg->arena, field, rows <= columns ? rows : columns, rows <= columns ? columns : rows, point->rank);
    TRY(arena_open(context, &cg->arena));
    cg_carve(cg, field, point);
    TRY(sweep_arrange(&field->sweep, cg->projection.by_short));
    projection_evaluate(&cg->projection);
    point_measure(cg, 0);
    cg->factor = 1;
    direction_restart(cg);
done:
    if (status != FESCUE_OK)
        cg_destroy(context, state);
    return status;
}

/* The curvature that f showed over a step, unless rounding hides it. */
static void factor_learn(struct grassmann_cg *cg, const struct line *line, double t, double held)
{
    double bend = cg->projection.objective - line->objective - t * line->slope;
    double factor = 2 * bend / (t * t * held);
    if (fabs(t * line->slope) < 1e3 * line->slack || !(factor > 0))
        return;
    cg->factor = fmin(fmax(factor, least_factor), most_factor);
}

static fescue_status trial_evaluate(struct grassmann_cg *cg, const struct line *line, double t, double held)
{
    struct projection *p = &cg->projection;
    fescue_status status = grassmann_retract_qr(&cg->work, cg->basis, cg->direction, t, p->basis);
    if (status != FESCUE_OK)
        return status;
    projection_evaluate(p);
    factor_learn(cg, line, t, held);
    return FESCUE_OK;
}

/* Goes along the direction; *moved = false when nothing better was found, and the point is as before. */
static fescue_status line_follow(struct grassmann_cg *cg, bool *moved)
{
    struct projection *p = &cg->projection;
    double slope = tall_dot(cg->work.context, p->gradient, cg->direction), held;
    fescue_status status = FESCUE_OK;
    *moved = false;
    sweep_tangent(&p->field->sweep, p->by_short, cg->direction, p->weights, p->basis, cg->still, NULL, NULL, &held);
    if (!(slope < 0) || !(held > 0))
        return status;
    struct line line = line_start(p->field->problem, &cg->measure, slope);
    double t = -slope / (cg->factor * held);
    tall_copy(cg->work.context, p->basis, NULL, cg->basis);
    tall_copy(cg->work.context, p->gradient, NULL, cg->gradient);
    for (int trial = 0; trial < LINE_MOST_TRIALS && !*moved; trial++) {
        TRY(trial_evaluate(cg, &line, t, held));
        double better = -slope / (cg->factor * held);
        if (trial == 0 && !(better > t / off_step && better < t * off_step)) {
            t = better;
            TRY(trial_evaluate(cg, &line, t, held));
        }
        *moved = line_accepts(&line, t, p->objective);
        if (!*moved)
            t = line_shorten(&line, t, p->objective);
    }
    if (*moved)
        point_measure(cg, t);
done:
    if (!*moved) {
        tall_copy(cg->work.context, cg->basis, NULL, p->basis);
        projection_evaluate(p);
    }
    return status;
}

/* The next direction, from the one that was followed. */
static void direction_choose(struct grassmann_cg *cg)
{
    struct projection *p = &cg->projection;
    struct matrix d = cg->direction;
    double old, turned, turned_old, descent, square;
    grassmann_project(&cg->work, p->basis, d);
    const struct tall_step before = {.sums = 3,
                                     .sum = {{.a = cg->descent, .b = cg->gradient, .dot = &old},
                                             {.a = d, .b = p->gradient, .dot = &turned},
                                             {.a = d, .b = cg->gradient, .dot = &turned_old}}};
    tall_run(cg->work.context, &before, 1, cg->work.sums);
    double beta = (cg->steepness - old) / (turned - turned_old);
    if (!(beta > 0) || !isfinite(beta)) {
        direction_restart(cg);
        return;
    }
    cg->fresh = false;
    /* Lengths in the metric: |D| is that of D W', |z| is the square root of the steepness. */
    const struct tall_step next[] = {
        {.to = d,
         .beta = beta,
         .terms = 1,
         .term = {{.alpha = -1, .a = cg->descent}},
         .sums = 1,
         .sum = {{.a = d, .b = p->gradient, .dot = &descent}}},
        {.sums = 1, .sum = {{.a = p->weights, .b = p->weights, .cross = p->core}}},
    };
    tall_run(cg->work.context, next, 2, p->dense);
    const struct tall_step length = {.to = cg->gradient,
                                     .terms = 1,
                                     .term = {{1, d, p->core, false}},
                                     .sums = 1,
                                     .sum = {{.a = d, .b = cg->gradient, .dot = &square}}};
    tall_run(cg->work.context, &length, 1, cg->work.sums);
    if (!(-descent > least_cosine * cg->measure.gradient * sqrt(fmax(square, 0))))
        direction_restart(cg);
}

static fescue_status cg_step(void *state, bool *moved)
{
    struct grassmann_cg *cg = state;
    fescue_status status;
    TRY(line_follow(cg, moved));
    if (!*moved && !cg->fresh) {
        direction_restart(cg);
        TRY(line_follow(cg, moved));
    }
    if (*moved)
        direction_choose(cg);
done:
    return status;
}

static void cg_measure(const void *state, struct solve_measure *measure)
{
    *measure = ((const struct grassmann_cg *)state)->measure;
}

static size_t cg_keep(void *state, struct memo_part parts[SOLVER_PARTS])
{
    struct grassmann_cg *cg = state;
    parts[0] = matrix_part(cg->projection.basis);
    parts[1] = matrix_part(cg->direction);
    parts[2] = (struct memo_part){&cg->factor, sizeof cg->factor};
    parts[3] = (struct memo_part){&cg->measure.step, sizeof cg->measure.step};
    parts[4] = (struct memo_part){&cg->fresh, sizeof cg->fresh};
    return 5;
}

static void cg_resume(void *state)
{
    struct grassmann_cg *cg = state;
    projection_evaluate(&cg->projection);
    point_measure(cg, cg->measure.step);
}

static fescue_status cg_point_write(void *state, struct low_rank *point)
{
    return projection_write(&((struct grassmann_cg *)state)->projection, point);
}

const struct solver grassmann_cg_solver = {
    .name = "grassmann-cg",
    .summary = "conjugate gradients over the subspace of the shorter side, the longer side in closed form",
    .width = 1,
    .create = cg_create,
    .measure = cg_measure,
    .step = cg_step,
    .keep = cg_keep,
    .resume = cg_resume,
    .point_write = cg_point_write,
    .destroy = cg_destroy,
};
