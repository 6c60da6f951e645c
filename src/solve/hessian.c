/* SPDX-License-Identifier: MIT
 *
 * Second derivatives of the projected objective (projection.c: f(U), W, R, g): Gauss-Newton and exact. Variable
 * projection: Golub, Pereyra 1973; for matrix completion Boumal, Absil 2015.
 *
 * A tangent D at U moves the cells by s = P(D W'), and the weights follow, so that U'R + Lambda W' stays zero, Lambda
 * the diagonal of ridges:
 *
 *     dW_j = -G_j^-1 (U's + [D'R])_j,      G_j = U_j'U_j + Lambda, kept as Cholesky factors by the evaluation
 *     H[D] = (I - UU')((s + P(U dW')) W + [R dW]) + D Lambda W'W
 *
 * In brackets: what Gauss and Newton leave out. The last term is -D (U'RW), with U'R = -Lambda W' put in; for ridges
 * that differ it is symmetrised, D (Lambda W'W + W'W Lambda)/2, which is the same where the frame of U makes W'W
 * diagonal. Without the brackets H is positive semidefinite.
 *
 *     symbol        name      shape
 *     s             values    one number a seen cell
 *     U's, -dW      across, follow    long x r
 *     Lambda W'W    damping   r x r
 *
 * The passes are made of the sweeps there are: a half whose values are zeros gives s as a "residual"; one whose values
 * are s gives P(U (-dW)') - s, which is what the weights multiply, up to its sign.
 *
 * Cost of a product: five passes of 2r flops a cell, seven when exact, and long r^2. Workspace: two matrices of the
 * longer side and its factors, long r^2/2; four values a cell. Parallel in the passes, and line by line in the small
 * solves; the bits do not depend on the workers, since lines are independent.
 */
#include "solve/solve_internal.h"

void hessian_reserve(struct arena *arena, const struct field *field, size_t rank)
{
    const struct cells *target = &field->problem->target;
    size_t shorter = target->rows, longer = target->columns, factors;
    if (shorter > longer) {
        shorter = target->columns;
        longer = target->rows;
    }
    matrix_reserve(arena, longer, rank);
    matrix_reserve(arena, longer, rank);
    matrix_reserve(arena, shorter, rank);
    matrix_reserve(arena, rank, rank);
    for (int k = 0; k < 4; k++)
        values_reserve(arena, field);
    if (size_product(longer, packed_size(rank), &factors))
        arena_reserve(arena, factors, sizeof(double));
    else
        arena->overflow = true;
}

void hessian_carve(struct arena *arena, struct projection *projection, struct hessian *hessian)
{
    const struct field *field = projection->field;
    size_t shorter = projection->by_short->lines, longer = projection->by_long->lines, rank = projection->rank;
    *hessian = (struct hessian){.projection = projection};
    hessian->across = matrix_carve(arena, longer, rank);
    hessian->follow = matrix_carve(arena, longer, rank);
    hessian->product = matrix_carve(arena, shorter, rank);
    hessian->damping = matrix_carve(arena, rank, rank);
    hessian->values = values_carve(arena, field);
    hessian->zeros = values_carve(arena, field);
    hessian->long_residual = values_carve(arena, field);
    projection->residual = values_carve(arena, field);
    projection->factors = arena_carve(arena, longer * packed_size(rank), sizeof(double));
}

void hessian_start(struct hessian *hessian, bool exact)
{
    struct projection *p = hessian->projection;
    struct matrix none = {0};
    double square;
    hessian->exact = exact;
    tall_cross(p->field->problem->context, p->weights, p->weights, p->core, p->dense);
    for (size_t i = 0; i < p->rank; i++)
        for (size_t j = 0; j < p->rank; j++)
            MATRIX_AT(hessian->damping, i, j) = 0.5 * (p->ridge[i] + p->ridge[j]) * MATRIX_AT(p->core, i, j);
    if (exact)
        sweep_residual(&p->field->sweep, p->by_long, p->weights, p->basis, none, hessian->long_residual, &square);
}

struct follow_pass {
    struct hessian *hessian;
    const struct half *half;
};

static void follow_task(void *job, size_t block, size_t worker)
{
    struct follow_pass *pass = job;
    struct hessian *hessian = pass->hessian;
    size_t rank = hessian->projection->rank;
    (void)worker;
    for (uint32_t j = pass->half->block[block]; j < pass->half->block[block + 1]; j++) {
        double *line = &MATRIX_AT(hessian->follow, j, 0);
        for (size_t k = 0; k < rank; k++)
            line[k] = MATRIX_AT(hessian->across, j, k);
        if (pass->half->start[j] < pass->half->start[j + 1])
            packed_solve(hessian->projection->factors + j * packed_size(rank), rank, line);
        else
            for (size_t k = 0; k < rank; k++)
                line[k] = 0;
    }
}

/* follow = -dW. */
static void weights_follow(struct hessian *hessian, struct matrix d)
{
    struct projection *p = hessian->projection;
    struct sweep *sweep = &p->field->sweep;
    fescue_context *context = p->field->problem->context;
    struct half still = *p->by_long;
    struct follow_pass pass = {hessian, p->by_long};
    struct matrix none = {0};
    double square;
    still.value = hessian->zeros;
    sweep_residual(sweep, &still, p->weights, d, none, hessian->values, &square);
    sweep_multiply(sweep, p->by_long, hessian->values, p->basis, hessian->across);
    if (hessian->exact) {
        sweep_multiply(sweep, p->by_long, hessian->long_residual, d, hessian->follow);
        tall_add(context, 1, hessian->follow, 1, hessian->across);
    }
    team_run(context, p->by_long->blocks, follow_task, &pass);
}

void hessian_apply(struct hessian *hessian, struct matrix d, struct matrix product)
{
    struct projection *p = hessian->projection;
    struct sweep *sweep = &p->field->sweep;
    fescue_context *context = p->field->problem->context;
    struct half still = *p->by_short, moved = *p->by_short;
    struct matrix none = {0};
    double square;
    weights_follow(hessian, d);
    still.value = hessian->zeros;
    moved.value = hessian->values;
    sweep_residual(sweep, &still, d, p->weights, none, hessian->values, &square);
    /* In place: every cell is read before it is written. */
    sweep_residual(sweep, &moved, p->basis, hessian->follow, none, hessian->values, &square);
    sweep_multiply(sweep, p->by_short, hessian->values, p->weights, product);
    if (hessian->exact) {
        sweep_multiply(sweep, p->by_short, p->residual, hessian->follow, hessian->product);
        tall_add(context, 1, hessian->product, 1, product);
    }
    tall_cross(context, p->basis, product, p->core, p->dense);
    tall_multiply(context, -1, p->basis, p->core, 1, product);
    tall_multiply(context, 1, d, hessian->damping, -1, product);
}
