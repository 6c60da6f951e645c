/* SPDX-License-Identifier: MIT
 *
 * Rank r to r + 1: the step that lowers the objective fastest among matrices of rank one.
 *
 *     (u, s, v) = leading singular triplet of -R,      R = P(X - T), zero off the seen cells
 *     t = (<P(u v'), -R> - lambda <X, u v'>) / (|P(u v')|^2 + lambda)
 *     X <- X + t u v',   brought back to orthonormal form by QR of [U u] and [V v] and a small SVD
 *
 * (rank-one descent as in Shalev-Shwartz, Gonen, Shamir 2011, "Large-scale convex minimization with a low-rank
 * constraint", with the step exact). From rank 0, R = -T is the target itself and is not computed. When the residual is
 * zero so are t and the new singular value; u and v are then some unit vectors orthogonal to U and V.
 *
 * Cost: two passes for R both ways, some thirteen of width 8 for the triplet (krylov.c), one for t.
 */
#include "solve/solve_internal.h"

#include <assert.h>
#include <math.h>

/* Workspace and views for one growth; short and long as in krylov.c. */
struct growth {
    struct field field;
    struct arena arena;
    void *row_residual, *column_residual; /* R, or T with sign = -1 */
    double sign;                          /* values * sign = R */
    struct matrix left, right;            /* u, v: rows x 1, columns x 1 */
    double spectrum[1];
};

static fescue_status residual_both_ways(struct growth *growth, const struct low_rank *point)
{
    struct matrix scaled_left, scaled_right, none = {0};
    struct arena arena = {0};
    fescue_context *context = growth->field.problem->context;
    fescue_status status;
    double square;
    TRY(values_create(&growth->field, &growth->row_residual));
    TRY(values_create(&growth->field, &growth->column_residual));
    matrix_reserve(&arena, point->rows, point->rank);
    matrix_reserve(&arena, point->columns, point->rank);
    TRY(arena_open(context, &arena));
    scaled_left = matrix_carve(&arena, point->rows, point->rank);
    scaled_right = matrix_carve(&arena, point->columns, point->rank);
    tall_copy(context, point->left, point->spectrum, scaled_left);
    tall_copy(context, point->right, point->spectrum, scaled_right);
    sweep_residual(&growth->field.sweep, field_rows(&growth->field), scaled_left, point->right, none,
                   growth->row_residual, &square);
    sweep_residual(&growth->field.sweep, field_columns(&growth->field), scaled_right, point->left, none,
                   growth->column_residual, &square);
done:
    arena_close(context, &arena);
    return status;
}

/* u and v. */
static fescue_status leading_pair(struct growth *growth, uint64_t seed)
{
    const struct half *rows = field_rows(&growth->field), *columns = field_columns(&growth->field);
    const void *row_values = growth->row_residual != NULL ? growth->row_residual : rows->value;
    const void *column_values = growth->column_residual != NULL ? growth->column_residual : columns->value;
    bool rows_short = rows->lines <= columns->lines;
    struct sparse_operator sparse = {.sweep = &growth->field.sweep,
                                     .by_short = rows_short ? rows : columns,
                                     .by_long = rows_short ? columns : rows,
                                     .short_values = rows_short ? row_values : column_values,
                                     .long_values = rows_short ? column_values : row_values};
    return krylov_triplets(&sparse, 1, seed, rows_short ? growth->left : growth->right, growth->spectrum,
                           rows_short ? growth->right : growth->left);
}

/* <X, u v'> = sum_k s_k (U'u)_k (V'v)_k */
static double overlap(const struct growth *growth, const struct low_rank *point)
{
    double sum = 0;
    for (size_t k = 0; k < point->rank; k++) {
        double left = 0, right = 0;
        for (size_t i = 0; i < point->rows; i++)
            left += MATRIX_AT(point->left, i, k) * MATRIX_AT(growth->left, i, 0);
        for (size_t j = 0; j < point->columns; j++)
            right += MATRIX_AT(point->right, j, k) * MATRIX_AT(growth->right, j, 0);
        sum += point->spectrum[k] * left * right;
    }
    return sum;
}

/* t; may be negative. */
static double step_exact(struct growth *growth, const struct low_rank *point, struct matrix zero)
{
    const struct half *rows = field_rows(&growth->field);
    const void *values = growth->row_residual != NULL ? growth->row_residual : rows->value;
    double lambda = growth->field.problem->lambda, along, square;
    sweep_tangent(&growth->field.sweep, rows, growth->left, growth->right, growth->left, zero, values, &along, &square);
    double t = -(growth->sign * along + lambda * overlap(growth, point)) / (square + lambda);
    return isfinite(t) ? t : 0;
}

static void append_column(struct matrix from, struct matrix column, double sign, struct matrix to)
{
    matrix_copy(from, matrix_left(to, from.columns));
    for (size_t i = 0; i < to.rows; i++)
        MATRIX_AT(to, i, from.columns) = sign * MATRIX_AT(column, i, 0);
}

/* grown = X + t u v' in orthonormal form: with [U u] = Q A, [V v] = P B, it is Q (A diag(s, |t|) B') P'. */
static fescue_status join(struct growth *growth, const struct low_rank *point, double t, struct low_rank *grown)
{
    fescue_context *context = growth->field.problem->context;
    size_t r = grown->rank, longer = grown->rows > grown->columns ? grown->rows : grown->columns;
    struct matrix core[4], left, right;
    struct arena arena = {0};
    fescue_status status;
    for (int k = 0; k < 4; k++)
        matrix_reserve(&arena, r, r);
    matrix_reserve(&arena, grown->rows, r);
    matrix_reserve(&arena, grown->columns, r);
    arena_reserve(&arena, dense_work_size(longer, r), sizeof(double));
    TRY(arena_open(context, &arena));
    for (int k = 0; k < 4; k++)
        core[k] = matrix_carve(&arena, r, r);
    left = matrix_carve(&arena, grown->rows, r);
    right = matrix_carve(&arena, grown->columns, r);
    double *work = arena_carve(&arena, dense_work_size(longer, r), sizeof(double));
    append_column(point->left, growth->left, t < 0 ? -1 : 1, left);
    append_column(point->right, growth->right, 1, right);
    TRY(dense_qr(context, left, core[0], work));
    TRY(dense_qr(context, right, core[1], work));
    for (size_t k = 0; k < r; k++)
        grown->spectrum[k] = k < point->rank ? point->spectrum[k] : fabs(t);
    matrix_scale_columns(core[0], grown->spectrum);
    matrix_multiply(1, core[0], false, core[1], true, 0, core[2]);
    TRY(dense_svd(context, core[2], grown->spectrum, core[3], work));
    tall_multiply(context, 1, left, core[2], 0, grown->left);
    tall_multiply(context, 1, right, core[3], 0, grown->right);
done:
    arena_close(context, &arena);
    return status;
}

static fescue_status growth_open(struct growth *growth, struct problem *problem, const struct low_rank *point,
                                 struct matrix *zero)
{
    fescue_status status;
    size_t width = krylov_width(1, point->rows <= point->columns ? point->rows : point->columns);
    width = width > point->rank ? width : point->rank;
    growth->field.problem = problem;
    TRY(sweep_create(problem->context, &problem->target, width, &growth->field.sweep));
    matrix_reserve(&growth->arena, point->rows, 1);
    matrix_reserve(&growth->arena, point->columns, 1);
    matrix_reserve(&growth->arena, point->columns, 1);
    TRY(arena_open(problem->context, &growth->arena));
    growth->left = matrix_carve(&growth->arena, point->rows, 1);
    growth->right = matrix_carve(&growth->arena, point->columns, 1);
    *zero = matrix_carve(&growth->arena, point->columns, 1);
    growth->sign = point->rank == 0 ? -1 : 1;
    if (point->rank > 0)
        TRY(residual_both_ways(growth, point));
done:
    return status;
}

fescue_status start_grow(struct problem *problem, uint64_t seed, struct low_rank *point)
{
    fescue_context *context = problem->context;
    struct growth growth = {0};
    struct low_rank grown = {0};
    struct matrix zero;
    fescue_status status;
    assert(point->rank < point->rows && point->rank < point->columns);
    TRY(low_rank_create(context, point->rows, point->columns, point->rank + 1, &grown));
    TRY(growth_open(&growth, problem, point, &zero));
    TRY(leading_pair(&growth, seed));
    TRY(join(&growth, point, step_exact(&growth, point, zero), &grown));
    low_rank_free(context, point);
    *point = grown;
    grown = (struct low_rank){0};
done:
    low_rank_free(context, &grown);
    memory_give(context, &growth.row_residual);
    memory_give(context, &growth.column_residual);
    arena_close(context, &growth.arena);
    sweep_destroy(&growth.field.sweep);
    return status;
}
