/* SPDX-License-Identifier: MIT
 *
 * Variable projection: the objective as a function of one subspace (Golub, Pereyra 1973; Boumal, Absil 2015).
 *
 *     f(U) = min over W of 1/2 |P(U W' - T)|^2 + 1/2 lambda |W|^2
 *
 *     symbol   name       shape
 *     U        basis      short x r, orthonormal; f depends on its span only
 *     W        weights    long x r
 *     R        residual   P(U W' - T), one number a seen cell, in the order of the shorter side
 *     g        gradient   (I - U U') R W, short x r; the part of df/dU through W vanishes because W is the minimiser
 *
 * Line j of the longer side: W_j = (U_j'U_j + lambda I)^-1 U_j't_j, U_j the rows of U that are seen in it. With lambda
 * = 0 a line with fewer seen cells than r has no single minimiser; the breakdown rule of packed_cholesky then picks one
 * of small norm. That moves neither f nor g, since the line's residual is zero for all of them.
 *
 * The shorter side carries the subspace because it is what all workers have to share; on equal sides the rows do.
 *
 * On the manifold of matrices of rank r with the Euclidean metric the gradient at X = U W' has the norm
 * sqrt(tr(g (W'W)^-1 g')): its other parts are zero. That is what solvers report, so that all measure alike, and the
 * metric in which tangents of the subspace are compared: a turn of a direction counts as much as it moves X.
 *
 * Cost of an evaluation: |seen| (r^2 + 3r) for the weights, long r^3/6 for the Cholesky factors, 4r |seen| for residual
 * and product, short r^2. Parallel in the two passes and in all that goes over the lines.
 */
#include "solve/solve_internal.h"

#include <string.h>

static const struct half *half_short(const struct field *field)
{
    const struct cells *target = &field->problem->target;
    return target->rows <= target->columns ? &target->by_row : &target->by_column;
}

void projection_reserve(struct arena *arena, const struct field *field, size_t rank)
{
    const struct half *half = half_short(field);
    matrix_reserve(arena, half->lines, rank);
    matrix_reserve(arena, half->lines, rank);
    matrix_reserve(arena, half->length, rank);
    matrix_reserve(arena, half->length, rank);
    matrix_reserve(arena, rank, rank);
    arena_reserve(arena, rank, sizeof(double));
    arena_reserve(arena, rank, sizeof(double));
    arena_reserve(arena, dense_work_size(half->length, rank), sizeof(double));
}

void projection_carve(struct arena *arena, struct field *field, const struct low_rank *point,
                      struct projection *projection)
{
    const struct cells *target = &field->problem->target;
    const struct half *half = half_short(field);
    bool rows_short = half == &target->by_row;
    size_t rank = point->rank;
    *projection = (struct projection){.field = field,
                                      .by_short = half,
                                      .by_long = rows_short ? &target->by_column : &target->by_row,
                                      .rows_short = rows_short,
                                      .rank = rank};
    projection->basis = matrix_carve(arena, half->lines, rank);
    projection->gradient = matrix_carve(arena, half->lines, rank);
    projection->weights = matrix_carve(arena, half->length, rank);
    projection->spare = matrix_carve(arena, half->length, rank);
    projection->core = matrix_carve(arena, rank, rank);
    projection->ridge = arena_carve(arena, rank, sizeof(double));
    projection->spectrum = arena_carve(arena, rank, sizeof(double));
    projection->dense = arena_carve(arena, dense_work_size(half->length, rank), sizeof(double));
    for (size_t k = 0; k < rank; k++)
        projection->ridge[k] = field->problem->lambda;
    matrix_copy(rows_short ? point->left : point->right, projection->basis);
}

void projection_evaluate(struct projection *p)
{
    fescue_context *context = p->field->problem->context;
    sweep_solve(&p->field->sweep, p->by_long, p->basis, p->ridge, p->weights, p->factors);
    sweep_residual(&p->field->sweep, p->by_short, p->basis, p->weights, p->gradient, p->residual, &p->square);
    p->objective = 0.5 * p->square + 0.5 * tall_square(context, p->weights, p->ridge);
    tall_cross(context, p->basis, p->gradient, p->core, p->dense);
    tall_multiply(context, -1, p->basis, p->core, 1, p->gradient);
}

/* W = Q S Z' gives X = (U Z) S Q'. */
fescue_status projection_write(struct projection *p, struct low_rank *point)
{
    struct matrix of_short = p->rows_short ? point->left : point->right;
    struct matrix of_long = p->rows_short ? point->right : point->left;
    fescue_context *context = p->field->problem->context;
    tall_copy(context, p->weights, NULL, p->spare);
    fescue_status status = dense_svd(context, p->spare, p->spectrum, p->core, p->dense);
    if (status != FESCUE_OK)
        return status;
    tall_multiply(context, 1, p->basis, p->core, 0, of_short);
    tall_copy(context, p->spare, NULL, of_long);
    memcpy(point->spectrum, p->spectrum, p->rank * sizeof *p->spectrum);
    return FESCUE_OK;
}

bool projection_metric(struct projection *p, double *factor)
{
    double trace = 0;
    tall_cross(p->field->problem->context, p->weights, p->weights, p->core, p->dense);
    for (size_t k = 0; k < p->rank; k++)
        trace += MATRIX_AT(p->core, k, k);
    if (!(trace > 0))
        return false;
    for (size_t i = 0; i < p->rank; i++)
        for (size_t j = 0; j <= i; j++)
            factor[packed_size(i) + j] = MATRIX_AT(p->core, i, j);
    packed_cholesky(factor, p->rank);
    return true;
}
