/* SPDX-License-Identifier: MIT
 *
 * Ridge alternation: the longer side given the shorter one, the shorter one given the longer (Zhou, Wilkinson,
 * Schreiber, Pan 2008, LNCS 5034, 337-348, section 3; with an orthonormal frame for the side that is held: Hastie,
 * Mazumder, Lee, Zadeh 2015, JMLR 16, 3367-3402, section 2).
 *
 *     minimise  f(X) = 1/2 |P(X - T)|^2 + lambda/2 |X|^2
 *
 *     symbol   name      shape
 *     U        basis     short x r, orthonormal
 *     W        weights   long x r,  X = U W'
 *     Q        frame     long x r, orthonormal
 *     V                  short x r, X = V Q'
 *
 * One iteration:
 *     1. Q from W = Q B by QR.
 *     2. V_i = (Q_i'Q_i + lambda I)^-1 Q_i't_i for every line i of the shorter side, Q_i the rows of Q seen in it.
 *     3. U from V = U C by QR.
 *     4. W_j = (U_j'U_j + lambda I)^-1 U_j't_j for every line j of the longer side; then residual and
 *        gradient (projection.c).
 *
 * A frame with orthonormal columns has |V Q'| = |V|, so that 2 and 4 minimise f itself, each over a linear space that X
 * lies in: f falls from step to step whatever the table is, and there is no step length to find. Where f falls no more,
 * X is stationary in both spaces, hence on the manifold of matrices of rank r.
 *
 * Departures: the first paper puts the ridge on both factors, weighted by the cells of a line; here it is that of the
 * other solvers, on X, so that all end in the same minimum.
 *
 * The error falls by a factor a sweep, which is near 0 where every direction is seen well, and near 1 where a part of
 * the table hardly hangs together with the rest: on tables with many cells a line three or four sweeps are enough, on
 * those with few the conjugate gradients and the trust region leave it behind. Extrapolating the sweeps (Winlaw, Hynes,
 * Caterini, De Sterck 2015) was left out: it has a pass to pay and three or four sweeps to save on.
 *
 * Cost an iteration: |seen| (2 r^2 + 7r), (m + n) (r^3/6 + 2 r^2). Workspace: four matrices of the shorter side, two of
 * the longer. Parallel in the passes only, which give the same bits for any number of workers.
 */
#include "solve/solve_internal.h"

#include <math.h>

struct alternating {
    struct projection projection; /* its spare matrix holds Q while a step lasts */
    struct arena arena;
    struct matrix basis, turned; /* U as it was; g (W'W)^-1 */
    struct matrix metric;        /* (W'W)^-1 */
    double *factor, *inverse;    /* of W'W, packed */
    struct solve_measure measure;
};

/* tr(g (W'W)^-1 g'), by one product of the whole of g. */
static double steepness_of(struct alternating *at)
{
    struct projection *p = &at->projection;
    if (!projection_metric(p, at->factor))
        return 0;
    packed_inverse(at->factor, p->rank, at->inverse);
    for (size_t i = 0; i < p->rank; i++)
        for (size_t j = 0; j <= i; j++)
            MATRIX_AT(at->metric, i, j) = MATRIX_AT(at->metric, j, i) = at->inverse[packed_size(i) + j];
    tall_multiply(p->field->problem->context, 1, p->gradient, at->metric, 0, at->turned);
    return tall_dot(p->field->problem->context, at->turned, p->gradient);
}

static void point_measure(struct alternating *at, double step)
{
    const struct projection *p = &at->projection;
    at->measure = (struct solve_measure){
        .objective = p->objective, .square = p->square, .gradient = sqrt(fmax(steepness_of(at), 0)), .step = step};
}

static void alternating_destroy(fescue_context *context, void **state)
{
    struct alternating *at = *state;
    arena_close(context, &at->arena);
    memory_give(context, state);
}

static fescue_status alternating_create(struct field *field, const struct low_rank *point, void **state)
{
    fescue_context *context = field->problem->context;
    struct alternating *at;
    size_t rank = point->rank, shorter = point->rows <= point->columns ? point->rows : point->columns;
    fescue_status status = TAKE(context, 1, &at);
    if (status != FESCUE_OK)
        return status;
    *state = at;
    projection_reserve(&at->arena, field, rank);
    matrix_reserve(&at->arena, shorter, rank);
    matrix_reserve(&at->arena, shorter, rank);
    matrix_reserve(&at->arena, rank, rank);
    arena_reserve(&at->arena, packed_size(rank), sizeof(double));
    arena_reserve(&at->arena, packed_size(rank), sizeof(double));
    TRY(arena_open(context, &at->arena));
    projection_carve(&at->arena, field, point, &at->projection);
    TRY(sweep_arrange(&field->sweep, at->projection.by_short));
    at->basis = matrix_carve(&at->arena, shorter, rank);
    at->turned = matrix_carve(&at->arena, shorter, rank);
    at->metric = matrix_carve(&at->arena, rank, rank);
    at->factor = arena_carve(&at->arena, packed_size(rank), sizeof(double));
    at->inverse = arena_carve(&at->arena, packed_size(rank), sizeof(double));
    projection_evaluate(&at->projection);
    point_measure(at, 0);
done:
    if (status != FESCUE_OK)
        alternating_destroy(context, state);
    return status;
}

/* Steps 1 to 4, from the projection's weights to its basis and weights. */
static fescue_status sides_solve(struct projection *p)
{
    fescue_context *context = p->field->problem->context;
    struct matrix none = {0}, frame = p->spare;
    fescue_status status;
    tall_copy(context, p->weights, NULL, frame);
    TRY(dense_qr(context, frame, none, p->dense));
    sweep_solve(&p->field->sweep, p->by_short, frame, p->ridge, p->basis, NULL);
    TRY(dense_qr(context, p->basis, none, p->dense));
    projection_evaluate(p);
done:
    return status;
}

static fescue_status alternating_step(void *state, bool *moved)
{
    struct alternating *at = state;
    struct projection *p = &at->projection;
    struct line line = line_start(p->field->problem, &at->measure, 0);
    tall_copy(p->field->problem->context, p->basis, NULL, at->basis);
    fescue_status status = sides_solve(p);
    *moved = status == FESCUE_OK && line_accepts(&line, 1, p->objective);
    if (*moved) {
        point_measure(at, 1);
    } else {
        tall_copy(p->field->problem->context, at->basis, NULL, p->basis);
        projection_evaluate(p);
    }
    return status;
}

static void alternating_measure(const void *state, struct solve_measure *measure)
{
    *measure = ((const struct alternating *)state)->measure;
}

static size_t alternating_keep(void *state, struct memo_part parts[SOLVER_PARTS])
{
    struct alternating *at = state;
    parts[0] = matrix_part(at->projection.basis);
    parts[1] = (struct memo_part){&at->measure.step, sizeof at->measure.step};
    return 2;
}

static void alternating_resume(void *state)
{
    struct alternating *at = state;
    projection_evaluate(&at->projection);
    point_measure(at, at->measure.step);
}

static fescue_status alternating_point_write(void *state, struct low_rank *point)
{
    return projection_write(&((struct alternating *)state)->projection, point);
}

const struct solver alternating_solver = {
    .name = "alternating",
    .summary = "ridge alternation: each side in closed form given the other, in turns",
    .width = 1,
    .create = alternating_create,
    .measure = alternating_measure,
    .step = alternating_step,
    .keep = alternating_keep,
    .resume = alternating_resume,
    .point_write = alternating_point_write,
    .destroy = alternating_destroy,
};
