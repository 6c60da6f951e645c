/* SPDX-License-Identifier: MIT
 *
 * The spectral start: what a truncated singular value decomposition can tell (Keshavan, Montanari, Oh 2010, "Matrix
 * completion from a few entries", sections 1.2 and 1.3).
 *
 * With every cell seen with the same chance p, the matrix that holds T on the seen cells and 0 elsewhere has the mean
 * p T: its leading singular spaces estimate those of T. A line of the shorter side that is seen far more often than
 * others would take a leading direction for itself, so one with more than twice the average number of seen cells counts
 * as
 *
 *     scale = 2 average / its number.
 *
 * Departures: the paper throws surplus cells away, which would make the start depend on a draw; scaling keeps them all,
 * and brings the line's expectation back to that of the others. The longer side is not trimmed: a line of it that is
 * seen whole is a vector of the very space that is looked for. And the singular values are not those of the sparse
 * matrix over p, which hold noise of the pattern: with U the leading space of the shorter side,
 *
 *     W_j = argmin |U_j w - t_j|^2 + mu p |w|^2   for every line j of the longer side,      X = tau U W',
 *
 * a ridge fit that trusts lines with few cells less, and tau the exact step length, tau = <P(UW'), T> / (|P(UW')|^2 +
 * lambda |W|^2), which undoes the shrinkage: a table seen whole starts at its truncated singular value decomposition.
 * tau needs no pass of its own, since W solves its equations:  <P(UW'), T> = |P(UW')|^2 + mu p |W|^2 and hence
 * |P(UW')|^2 = |T|^2 - |R|^2 - 2 mu p |W|^2.
 *
 * Cost: about thirteen passes over the cells (krylov.c) and two (projection.c).
 */
#include "solve/solve_internal.h"

/* mu. One makes a line seen at the average density shrink to a half. */
static const double start_ridge = 1;

static void trim(const struct half *half, double *scale)
{
    double average = (double)half->start[half->lines] / half->lines;
    for (uint32_t i = 0; i < half->lines; i++) {
        double cells = (double)(half->start[i + 1] - half->start[i]);
        scale[i] = cells > 2 * average ? 2 * average / cells : 1;
    }
}

/* Leading triplets of the trimmed target, into out. */
static fescue_status leading_spaces(struct field *field, uint64_t seed, struct low_rank *out)
{
    fescue_context *context = field->problem->context;
    const struct half *rows = field_rows(field), *columns = field_columns(field);
    bool rows_short = rows->lines <= columns->lines;
    struct sparse_operator sparse = {
        .sweep = &field->sweep, .by_short = rows_short ? rows : columns, .by_long = rows_short ? columns : rows};
    double *scale;
    fescue_status status = TAKE(context, sparse.by_short->lines, &scale);
    if (status != FESCUE_OK)
        return status;
    TRY(sweep_arrange(&field->sweep, sparse.by_short));
    trim(sparse.by_short, scale);
    sparse.short_scale = scale;
    sparse.short_values = sparse.by_short->value;
    sparse.long_values = sparse.by_long->value;
    TRY(krylov_triplets(&sparse, out->rank, seed, rows_short ? out->left : out->right, out->spectrum,
                        rows_short ? out->right : out->left));
done:
    GIVE(context, &scale);
    return status;
}

/* The other side by ridge regression, and tau. */
static fescue_status other_side_fit(struct field *field, struct low_rank *point)
{
    struct problem *problem = field->problem;
    const struct cells *target = &problem->target;
    double density = (double)target->count / ((double)target->rows * (double)target->columns);
    struct projection projection;
    struct arena arena = {0};
    fescue_status status;
    projection_reserve(&arena, field, point->rank);
    TRY(arena_open(problem->context, &arena));
    projection_carve(&arena, field, point, &projection);
    for (size_t k = 0; k < point->rank; k++)
        projection.ridge[k] = start_ridge * density;
    projection_evaluate(&projection);
    double size = tall_dot(problem->context, projection.weights, projection.weights), norm = problem->norm;
    double seen = norm * norm - projection.square - 2 * start_ridge * density * size;
    TRY(projection_write(&projection, point));
    if (seen > 0)
        for (size_t k = 0; k < point->rank; k++)
            point->spectrum[k] *= (seen + start_ridge * density * size) / (seen + problem->lambda * size);
done:
    arena_close(problem->context, &arena);
    return status;
}

fescue_status start_spectral(struct problem *problem, size_t rank, uint64_t seed, struct low_rank *out)
{
    struct field field = {.problem = problem};
    const struct cells *target = &problem->target;
    size_t shorter = target->rows <= target->columns ? target->rows : target->columns;
    fescue_status status = low_rank_create(problem->context, target->rows, target->columns, rank, out);
    if (status != FESCUE_OK || rank == 0)
        return status;
    TRY(sweep_create(problem->context, target, krylov_width(rank, shorter), &field.sweep));
    TRY(leading_spaces(&field, seed, out));
    TRY(other_side_fit(&field, out));
done:
    sweep_destroy(&field.sweep);
    if (status != FESCUE_OK)
        low_rank_free(problem->context, out);
    return status;
}
