/* SPDX-License-Identifier: MIT
 *
 * What surrounds the loops over observed cells: the choice of kernels, the workspace, the operations.
 *
 * A block is a piece of the half's lines, cut when the cells were stored; each has its own place for its sums, which
 * are added in block order. Which worker takes a block, and how many there are, leaves no trace in the bits. The
 * instruction set does: it decides how many numbers are summed side by side and whether products are rounded before
 * they are added (kernel_set.c).
 *
 * Workspace: sums of 256 blocks; copies of rows (sweep_rows.c); for each worker a line's normal equations twice and a
 * chunk of gathered rows.
 */
#include "numeric/kernel_internal.h"

#include <assert.h>
#include <float.h>
#include <string.h>

/* ---- workspace ----------------------------------------------------------------------------------------------------
 */

size_t sweep_width(const struct sweep *sweep, size_t rank)
{
    size_t lanes = sweep->kernels->lanes > 8 ? sweep->kernels->lanes : 8;
    return (rank + lanes - 1) / lanes * lanes;
}

/* Doubles from one worker's room to the next, each for: a chunk's rows (doubles also where they are floats), three
   squares, three vectors, a batch of small systems. */
static size_t worker_room(const struct sweep *sweep)
{
    size_t width = sweep_width(sweep, sweep->rank_most);
    size_t batch = sweep->rank_most < SWEEP_BATCH_RANK ? sweep->rank_most : SWEEP_BATCH_RANK;
    size_t numbers = (SWEEP_CHUNK + 3 * width + 3) * width + batch_size(packed_size(batch)) + batch_size(batch);
    return team_room(numbers, sizeof(double));
}

struct sweep_room sweep_room_of(const struct sweep *sweep, size_t worker)
{
    size_t width = sweep_width(sweep, sweep->rank_most);
    assert(worker < sweep->workers);
    double *at = sweep->room + worker * worker_room(sweep);
    struct sweep_room room = {.rows = at};
    room.gram = at + SWEEP_CHUNK * width;
    room.factor = room.gram + width * width;
    room.lower = room.factor + width * width;
    room.side = room.lower + width * width;
    room.solution = room.side + width;
    room.inverse = room.solution + width;
    room.systems = room.inverse + width;
    room.sides = room.systems +
                 batch_size(packed_size(sweep->rank_most < SWEEP_BATCH_RANK ? sweep->rank_most : SWEEP_BATCH_RANK));
    return room;
}

fescue_status sweep_create(fescue_context *context, const struct cells *cells, size_t rank_most, struct sweep *sweep)
{
    const struct kernel_set *set = kernel_set_choose();
    fescue_status status = FESCUE_OK;
    assert(rank_most <= 257);
    *sweep = (struct sweep){.context = context,
                            .precision = cells->precision,
                            .rank_most = rank_most,
                            .kernel = set->name,
                            .kernels = set->sweep[cells->precision],
                            .batch = set->batch,
                            .workers = team_workers(context)};
    arena_reserve(&sweep->arena, (size_t)CELLS_MOST_BLOCKS * SWEEP_SUMS, sizeof(double));
    sweep_rows_reserve(sweep, cells->rows > cells->columns ? cells->rows : cells->columns);
    arena_reserve(&sweep->arena, sweep->workers * worker_room(sweep), sizeof(double));
    TRY(arena_open(context, &sweep->arena));
    sweep->partial = arena_carve(&sweep->arena, (size_t)CELLS_MOST_BLOCKS * SWEEP_SUMS, sizeof(double));
    sweep_rows_carve(sweep);
    sweep->room = arena_carve(&sweep->arena, sweep->workers * worker_room(sweep), sizeof(double));
done:
    if (status != FESCUE_OK)
        sweep_destroy(sweep);
    return status;
}

void sweep_destroy(struct sweep *sweep)
{
    if (sweep == NULL)
        return;
    sweep_slabs_free(sweep);
    arena_close(sweep->context, &sweep->arena);
    *sweep = (struct sweep){0};
}

/* ---- running
 * ---------------------------------------------------------------------------------------------------------- */

struct block_run {
    const struct sweep_job *job;
    sweep_block *kernel;
    double *partial;
};

static void run_block(void *argument, size_t block, size_t worker)
{
    const struct block_run *run = argument;
    struct sweep_job job = *run->job;
    double *sums = run->partial + block * SWEEP_SUMS;
    sums[0] = sums[1] = 0;
    sweep_rows_take(&job, worker);
    run->kernel(&job, block, worker, sums);
}

void sweep_run(struct sweep_job *job, sweep_block *kernel, double sums[SWEEP_SUMS])
{
    struct sweep *sweep = job->sweep;
    struct block_run run = {.job = job, .kernel = kernel, .partial = sweep->partial};
    assert(job->half->blocks <= CELLS_MOST_BLOCKS);
    team_run(sweep->context, job->half->blocks, run_block, &run);
    team_sum(sweep->context, sweep->partial, job->half->blocks, SWEEP_SUMS, sums);
}

static struct sweep_job job_open(struct sweep *sweep, const struct half *half, struct matrix right)
{
    assert(right.columns <= sweep->rank_most && right.rows == half->length);
    return (struct sweep_job){.sweep = sweep,
                              .half = half,
                              .values = half->value,
                              .right_of = right,
                              .width = sweep_width(sweep, right.columns),
                              .rank = right.columns};
}

static const struct sweep_kernel *job_kernel(const struct sweep_job *job)
{
    const struct sweep_kernel *kernel = job->sweep->kernels;
    return job->width <= 8 && kernel->narrow != NULL ? kernel->narrow : kernel;
}

void sweep_residual(struct sweep *sweep, const struct half *half, struct matrix left, struct matrix right,
                    struct matrix gradient, void *residual, double *square)
{
    struct sweep_job job = job_open(sweep, half, right);
    double sums[SWEEP_SUMS];
    assert(left.rows == half->lines && left.columns == right.columns);
    job.left = left;
    job.product = gradient;
    job.residual = residual;
    sweep_slabs_run(&job, sweep->kernels->residual, sums);
    *square = sums[0];
}

void sweep_errors(struct sweep *sweep, const struct half *half, struct matrix left, struct matrix right, double *square,
                  double *absolute)
{
    struct sweep_job job = job_open(sweep, half, right);
    double sums[SWEEP_SUMS];
    assert(left.rows == half->lines && left.columns == right.columns);
    job.left = left;
    sweep_slabs_run(&job, sweep->kernels->residual, sums);
    *square = sums[0];
    *absolute = sums[1];
}

void sweep_multiply(struct sweep *sweep, const struct half *half, const void *values, struct matrix right,
                    struct matrix product)
{
    struct sweep_job job = job_open(sweep, half, right);
    double sums[SWEEP_SUMS];
    assert(product.rows == half->lines && product.columns == right.columns);
    job.values = values;
    job.product = product;
    sweep_slabs_run(&job, job_kernel(&job)->multiply, sums);
}

void sweep_tangent(struct sweep *sweep, const struct half *half, struct matrix a, struct matrix right,
                   struct matrix left, struct matrix b, const void *residual, double *zr, double *zz)
{
    struct sweep_job job = job_open(sweep, half, right);
    double sums[SWEEP_SUMS];
    assert(left.rows == half->lines && a.rows == half->lines && b.rows == half->length);
    job.left = left;
    job.a = a;
    job.b_of = b;
    if (residual != NULL) /* or what is summed with the half's own values is not handed on */
        job.values = residual;
    sweep_slabs_run(&job, job_kernel(&job)->tangent, sums);
    if (residual != NULL)
        *zr = sums[0];
    *zz = sums[1];
}

void sweep_solve(struct sweep *sweep, const struct half *half, struct matrix right, const double *ridge,
                 struct matrix weights, double *factors)
{
    struct sweep_job job = job_open(sweep, half, right);
    double sums[SWEEP_SUMS];
    assert(weights.rows == half->lines && weights.columns == right.columns);
    job.product = weights;
    job.ridge = ridge;
    job.factors = factors;
    sweep_rows_open_shared(&job);
    sweep_run(&job, sweep->kernels->solve, sums);
}

void sweep_line_store(const struct sweep_job *job, const struct sweep_room *room, uint32_t line)
{
    size_t rank = job->rank;
    memcpy(&MATRIX_AT(job->product, line, 0), room->solution, rank * sizeof *room->solution);
    if (job->factors == NULL)
        return;
    double *packed = job->factors + line * packed_size(rank);
    for (size_t i = 0; i < rank; i++)
        memcpy(packed + packed_size(i), room->lower + i * job->width, (i + 1) * sizeof *packed);
}

/* The factor's diagonal is the other way up in a batch. */
void sweep_lane_store(const struct sweep_job *job, const struct sweep_room *room, uint32_t line, size_t lane)
{
    double *weight = &MATRIX_AT(job->product, line, 0);
    for (size_t j = 0; j < job->rank; j++)
        weight[j] = room->sides[j * BATCH_LANES + lane];
    if (job->factors == NULL)
        return;
    double *packed = job->factors + line * packed_size(job->rank);
    for (size_t at = 0; at < packed_size(job->rank); at++)
        packed[at] = room->systems[at * BATCH_LANES + lane];
    for (size_t i = 0; i < job->rank; i++)
        packed[packed_size(i) + i] = 1 / packed[packed_size(i) + i];
}

void sweep_line_solve(const struct sweep_job *job, const struct sweep_room *room, uint32_t line)
{
    size_t rank = job->rank;
    double *packed = room->factor, *weight = &MATRIX_AT(job->product, line, 0);
    bool empty = job->half->start[line] == job->half->start[line + 1];
    for (size_t i = 0; i < rank; i++)
        for (size_t j = 0; j <= i; j++)
            packed[i * (i + 1) / 2 + j] = room->gram[j * job->width + i];
    /* Single precision leaves rounding of some eps trace in G, which is to be covered; in double, packed_cholesky does.
     */
    double share = job->sweep->precision == FESCUE_SINGLE ? (double)rank * FLT_EPSILON : 1e-14;
    if (empty)
        packed_cholesky(packed, job->factors != NULL ? rank : 0);
    else
        packed_cholesky_lifted(packed, rank, share);
    if (!empty)
        packed_solve(packed, rank, room->side);
    for (size_t j = 0; j < rank; j++)
        weight[j] = empty ? 0 : room->side[j];
    if (job->factors != NULL)
        memcpy(job->factors + line * packed_size(rank), packed, packed_size(rank) * sizeof *packed);
}
