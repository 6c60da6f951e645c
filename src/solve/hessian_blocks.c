/* SPDX-License-Identifier: MIT
 *
 * A preconditioner for the Hessian of the projected objective: its diagonal blocks, one a line of the shorter side.
 *
 * A turn d of row i of the basis alone moves the cells (i, j) seen in it by d.w_j, and the weights that follow take
 * back a share of it (hessian.c), so that of Gauss and Newton's part the block of row i is
 *
 *     B_i = sum over j seen in i of (1 - h_ij) w_j w_j' + D,      h_ij = u_i' G_j^-1 u_i in [0, 1]
 *
 * h_ij is the leverage of the cell in line j of the longer side: how far that line follows it. D, the damping by the
 * ridges, is the same for all rows. A table seen evenly has B_i = p W'W, up to the share p; with few cells rows differ
 * by orders of magnitude, above all where a row's cells lie in lines that can follow nearly all of it, and then the
 * blocks take several times fewer products than W'W to the same accuracy.
 *
 * The blocks are lifted by a small multiple of p W'W: what no cell of a row resists is not moved without bound.
 *
 *     z = P B^-1 g,  P = I - UU':  symmetric and positive on tangents, where P g = g.
 *
 * Cost: |seen| (3/2 r^2 + 2 r) and short r^3/6, once a step; short r^2 a use. Memory: short r^2/2. Lines are
 * independent: the bits do not depend on the workers.
 */
#include "solve/solve_internal.h"

#include <math.h>
#include <string.h>

/* Of p W'W: enough to bound a step, little beside what a well-seen row has. */
static const double lift = 0.01;

static size_t room_a_worker(size_t rank)
{
    return team_room(rank, sizeof(double));
}

void hessian_blocks_reserve(struct arena *arena, const struct field *field, size_t shorter, size_t rank)
{
    size_t factors;
    arena_reserve(arena, team_workers(field->problem->context) * room_a_worker(rank), sizeof(double));
    matrix_reserve(arena, rank, rank);
    if (size_product(shorter, packed_size(rank), &factors))
        arena_reserve(arena, factors, sizeof(double));
    else
        arena->overflow = true;
}

void hessian_blocks_carve(struct arena *arena, struct projection *projection, struct hessian_blocks *blocks)
{
    size_t rank = projection->rank;
    *blocks = (struct hessian_blocks){.projection = projection};
    blocks->scratch =
        arena_carve(arena, team_workers(projection->field->problem->context) * room_a_worker(rank), sizeof(double));
    blocks->core = matrix_carve(arena, rank, rank);
    blocks->factors = arena_carve(arena, projection->by_short->lines * packed_size(rank), sizeof(double));
}

/* factor <- B_i in packed form, to be factored. */
static void block_sum(const struct hessian_blocks *blocks, uint32_t i, size_t worker, double *block)
{
    struct projection *p = blocks->projection;
    const struct half *half = p->by_short;
    size_t rank = p->rank;
    const double *u = &MATRIX_AT(p->basis, i, 0);
    double *solved = blocks->scratch + worker * room_a_worker(rank);
    for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++) {
        uint32_t j = half->across[k];
        const double *w = &MATRIX_AT(p->weights, j, 0);
        double leverage = 0;
        for (size_t a = 0; a < rank; a++)
            solved[a] = u[a];
        packed_solve(p->factors + j * packed_size(rank), rank, solved);
        for (size_t a = 0; a < rank; a++)
            leverage += u[a] * solved[a];
        double stays = fmax(1 - leverage, 0);
        for (size_t a = 0; a < rank; a++)
            for (size_t b = 0; b <= a; b++)
                block[packed_size(a) + b] += stays * w[a] * w[b];
    }
}

static void blocks_task(void *job, size_t at, size_t worker)
{
    struct hessian_blocks *blocks = job;
    const struct half *half = blocks->projection->by_short;
    size_t rank = blocks->projection->rank, size = packed_size(rank);
    for (uint32_t i = half->block[at]; i < half->block[at + 1]; i++) {
        double *block = blocks->factors + i * size;
        for (size_t a = 0; a < rank; a++)
            for (size_t b = 0; b <= a; b++)
                block[packed_size(a) + b] = MATRIX_AT(blocks->core, a, b);
        block_sum(blocks, i, worker, block);
        packed_cholesky(block, rank);
    }
}

void hessian_blocks_start(struct hessian_blocks *blocks, struct matrix damping)
{
    struct projection *p = blocks->projection;
    const struct cells *target = &p->field->problem->target;
    double density = (double)target->count / ((double)target->rows * (double)target->columns);
    tall_cross(p->field->problem->context, p->weights, p->weights, blocks->core, p->dense);
    matrix_scale(lift * density, blocks->core);
    matrix_add(1, damping, blocks->core);
    team_run(p->field->problem->context, p->by_short->blocks, blocks_task, blocks);
}

struct solve_pass {
    const struct hessian_blocks *blocks;
    struct matrix g, z;
};

static void solve_task(void *job, size_t at, size_t worker)
{
    const struct solve_pass *pass = job;
    const struct half *half = pass->blocks->projection->by_short;
    size_t rank = pass->z.columns;
    (void)worker;
    for (uint32_t i = half->block[at]; i < half->block[at + 1]; i++) {
        double *line = &MATRIX_AT(pass->z, i, 0);
        memcpy(line, &MATRIX_AT(pass->g, i, 0), rank * sizeof *line);
        packed_solve(pass->blocks->factors + i * packed_size(rank), rank, line);
    }
}

void hessian_blocks_precondition(struct hessian_blocks *blocks, struct matrix g, struct matrix z)
{
    struct projection *p = blocks->projection;
    struct solve_pass pass = {blocks, g, z};
    fescue_context *context = p->field->problem->context;
    team_run(context, p->by_short->blocks, solve_task, &pass);
    tall_cross(context, p->basis, z, p->core, p->dense);
    tall_multiply(context, -1, p->basis, p->core, 1, z);
}
