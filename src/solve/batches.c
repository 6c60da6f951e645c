/* SPDX-License-Identifier: MIT
 *
 * Batches of lines of the longer side: their order, their weights, and how a batch is shared out among workers.
 *
 *     weights   w_j = (U_j'U_j + ridge I)^-1 U_j't_j for every line j of the batch: one system of size r a line. A line
 *               is one block of work.
 *     bands     what follows changes lines of the shorter side, or sums over the batch for each of them. The shorter
 *               side is cut into bands, and whoever has a band goes through the batch line by line, taking from each
 *               the cells that lie in the band (across is ascending: two binary searches). So line i of the shorter
 *               side sees the batch in its order whatever the number of workers, and no sums have to be put together.
 *
 * The order of the lines is a permutation drawn anew for each pass, so that a table sorted by time or by kind is met
 * like any other. It depends on the number of the pass and of the lines, and on nothing else.
 *
 * Small batches are not worth waking anybody: the caller does them alone, the whole shorter side as one band.
 *
 * Cost: for the weights, cells r^2 and lines r^3 / 6 multiplications.
 */
#include "solve/stream_internal.h"

#include <assert.h>
#include <math.h>

enum {
    MOST_BANDS = 16, /* enough for the balance of a few workers; each costs two searches a line */
    ALONE_BELOW = 8, /* lines: some 10 microseconds of work, what waking the others takes */
};

static const double ridge_share = 1e-4;
/* H is lifted by this part of its mean: no step along a direction is longer than it is along a thousandth of the mean
   weight. */
static const double lift = 1e-6;

static const struct half *half_short(const struct field *field)
{
    const struct cells *target = &field->problem->target;
    return target->rows <= target->columns ? &target->by_row : &target->by_column;
}

static size_t room_a_worker(size_t rank)
{
    return team_room(packed_size(rank), sizeof(double));
}

void batches_reserve(struct arena *arena, const struct field *field, size_t rank, size_t width)
{
    arena_reserve(arena, half_short(field)->length, sizeof(uint32_t));
    matrix_reserve(arena, width, rank);
    arena_reserve(arena, team_workers(field->problem->context) * room_a_worker(rank), sizeof(double));
}

void batches_carve(struct arena *arena, struct field *field, size_t rank, size_t width, struct batches *batches)
{
    const struct cells *target = &field->problem->target;
    const struct half *half = half_short(field);
    *batches = (struct batches){.field = field,
                                .by_short = half,
                                .by_long = half == &target->by_row ? &target->by_column : &target->by_row,
                                .width = width,
                                .rank = rank};
    batches->order = arena_carve(arena, half->length, sizeof(uint32_t));
    batches->weights = matrix_carve(arena, width, rank);
    batches->room = arena_carve(arena, team_workers(field->problem->context) * room_a_worker(rank), sizeof(double));
}

/* Fisher and Yates. One seed for all runs: the order is no choice of the user's. */
void batches_shuffle(struct batches *batches, uint32_t pass)
{
    struct random_stream stream = random_open(1, RANDOM_BATCH, pass);
    uint32_t *order = batches->order, lines = batches->by_long->lines;
    for (uint32_t j = 0; j < lines; j++) {
        uint32_t k = (uint32_t)random_below(&stream, j + 1);
        order[j] = order[k];
        order[k] = j;
    }
    batches->next = batches->count = 0;
}

bool batches_next(struct batches *batches, size_t width)
{
    size_t left = batches->by_long->lines - batches->next, most = batches->by_short->blocks;
    assert(width > 0 && width <= batches->width);
    batches->count = left < width ? left : width;
    batches->next += batches->count;
    batches->bands = batches->count < ALONE_BELOW ? 1 : most < MOST_BANDS ? most : MOST_BANDS;
    return batches->count > 0;
}

/* ---- weights -------------------------------------------------------------------------------------------------------
 */

double *batch_room(const struct batches *batches, size_t worker)
{
    return batches->room + worker * room_a_worker(batches->rank);
}

void batch_lines_run(struct batches *batches, team_task *task, void *job)
{
    if (batches->count >= ALONE_BELOW)
        team_run(batches->field->problem->context, batches->count, task, job);
    else
        for (size_t k = 0; k < batches->count; k++)
            task(job, k, 0);
}

struct solve_job {
    struct batches *batches;
    struct matrix basis;
    double ridge;
};

static void line_solve(void *argument, size_t k, size_t worker)
{
    const struct solve_job *job = argument;
    const struct batches *b = job->batches;
    const struct cells *target = &b->field->problem->target;
    size_t rank = b->rank, line = batch_line(b, k);
    double *system = batch_room(b, worker), *w = &MATRIX_AT(b->weights, k, 0);
    for (size_t e = 0; e < packed_size(rank); e++)
        system[e] = 0;
    for (size_t p = 0; p < rank; p++) {
        system[packed_size(p) + p] = job->ridge;
        w[p] = 0;
    }
    for (uint64_t c = b->by_long->start[line]; c < b->by_long->start[line + 1]; c++) {
        const double *u = &MATRIX_AT(job->basis, b->by_long->across[c], 0);
        double x = cells_value(target, b->by_long, c), *at = system;
        for (size_t p = 0; p < rank; p++) {
            w[p] += u[p] * x;
            for (size_t q = 0; q <= p; q++)
                *at++ += u[p] * u[q];
        }
    }
    packed_cholesky(system, rank);
    packed_solve(system, rank, w);
}

void batch_solve(struct batches *batches, struct matrix basis, double ridge)
{
    struct solve_job job = {.batches = batches, .basis = basis, .ridge = ridge};
    batch_lines_run(batches, line_solve, &job);
}

double batch_ridge(const struct problem *problem)
{
    const struct cells *target = &problem->target;
    double share = (double)target->count / ((double)target->rows * (double)target->columns);
    return fmax(problem->lambda, ridge_share * share);
}

void moment_reserve(struct arena *arena, size_t rank)
{
    matrix_reserve(arena, rank, rank);
    arena_reserve(arena, packed_size(rank), sizeof(double));
}

void moment_carve(struct arena *arena, size_t rank, struct moment *moment)
{
    moment->second = matrix_carve(arena, rank, rank);
    moment->factor = arena_carve(arena, packed_size(rank), sizeof(double));
}

void moment_learn(struct moment *moment, struct matrix weights, double share)
{
    size_t rank = weights.columns;
    double trace = 0;
    matrix_multiply(share / (double)weights.rows, weights, true, weights, false, 1 - share, moment->second);
    for (size_t k = 0; k < rank; k++)
        trace += MATRIX_AT(moment->second, k, k);
    for (size_t p = 0; p < rank; p++)
        for (size_t q = 0; q <= p; q++)
            moment->factor[packed_size(p) + q] =
                MATRIX_AT(moment->second, p, q) + (p == q ? lift * trace / (double)rank : 0);
    packed_cholesky(moment->factor, rank);
}

/* ---- bands ---------------------------------------------------------------------------------------------------------
 */

void batch_bands_run(struct batches *batches, team_task *task, void *job)
{
    team_run(batches->field->problem->context, batches->bands, task, job);
}

struct line_range batch_band(const struct batches *b, size_t band)
{
    const struct half *half = b->by_short;
    return (struct line_range){half->block[band * half->blocks / b->bands],
                               half->block[(band + 1) * half->blocks / b->bands]};
}

struct cell_range batch_cells(const struct batches *b, size_t band, size_t k)
{
    struct line_range lines = batch_band(b, band);
    uint32_t line = batch_line(b, k);
    return (struct cell_range){.from = half_find(b->by_long, line, lines.first),
                               .to = half_find(b->by_long, line, lines.end)};
}
