/* SPDX-License-Identifier: MIT
 *
 * The rows of factors that are read for every cell, as the loops over cells see them.
 *
 * Alone, a worker reads doubles where they stand, and in single precision a copy, which is rounded before the sweep.
 *
 * With several workers such rows have just been written, each by one of them, into that one's own cache. Fetched from
 * there one at a time, where the cells happen to ask for them, they cost two workers 4 ns a line of 64 bytes, and
 * asking beforehand helps little; one after the other they cost half as much. So every worker takes a copy of its own
 * of all rows, in their order, before its first block, as long as they are no more than OWN_.. bytes; that is also
 * cheaper than to share rounded ones, which would have to be fetched just so. With 1e6 cells, rank 16 and single
 * precision two workers' iterations of conjugate gradients take 0.9 of the time. Copies are read only but for their
 * making, and nothing is won by keeping them apart as rooms are (team_room).
 *
 * Not so normal equations: so much is done with a row that fetching it hardly counts, and copies cost them 3 per cent.
 * More rows than OWN_.., of tables whose lines are too short for slabs, are copied once too.
 *
 * Copies hold the same numbers, whoever makes them.
 */
#include "numeric/sweep_internal.h"

#include <assert.h>
#include <string.h>
#include <unistd.h>

enum {
    FACTORS_MOST = 2,         /* whose rows an operation reads for every cell */
    OWN_SINGLE = 1 << 20,     /* bytes: rows of a slab of rank 16 */
    OWN_DOUBLE = 1 << 19,     /* these need not be copied at all */
    OWN_HEAD = 64,            /* bytes before them, a line of a cache */
    NEAR_ANYWHERE = 160 << 10 /* bytes, where a processor does not tell the size of its caches */
};

/* ---- room ---------------------------------------------------------------------------------------------------------
 */

static size_t number_size(const struct sweep *sweep)
{
    return sweep->precision == FESCUE_SINGLE ? sizeof(float) : sizeof(double);
}

/* Bytes of rows that stay in a core's own cache beside the cells that pass through it: 5/8 of it. */
static size_t near_most(void)
{
    long cache = 0;
#ifdef _SC_LEVEL2_CACHE_SIZE
    cache = sysconf(_SC_LEVEL2_CACHE_SIZE);
#endif
    return cache > 0 ? (size_t)cache / 8 * 5 : NEAR_ANYWHERE;
}

void sweep_rows_reserve(struct sweep *sweep, size_t lines)
{
    struct sweep_copies *copies = &sweep->copies;
    size_t numbers = FACTORS_MOST * lines * sweep_width(sweep, sweep->rank_most), bytes = numbers * number_size(sweep);
    copies->near_most = near_most();
    copies->shared_size = sweep->precision == FESCUE_SINGLE ? numbers : 0;
    size_t most = sweep->precision == FESCUE_SINGLE ? OWN_SINGLE : OWN_DOUBLE;
    copies->own_size = sweep->workers < 2 ? 0 : OWN_HEAD + (bytes < most ? bytes : most);
    arena_reserve(&sweep->arena, copies->shared_size, sizeof(float));
    arena_reserve(&sweep->arena, sweep->workers, copies->own_size);
}

void sweep_rows_carve(struct sweep *sweep)
{
    struct sweep_copies *copies = &sweep->copies;
    copies->shared = arena_carve(&sweep->arena, copies->shared_size, sizeof(float));
    copies->own = arena_carve(&sweep->arena, sweep->workers, copies->own_size);
}

/* ---- copying ------------------------------------------------------------------------------------------------------
 */

/* to <- from; the zeros behind a row go along. */
NUMERIC_VERSIONS static void rows_round(const double *from, size_t stride, size_t lines, size_t width, float *to)
{
    for (size_t i = 0; i < lines; i++)
        for (size_t j = 0; j < width; j++)
            to[i * width + j] = (float)from[i * stride + j];
}

static void rows_copy(const struct sweep *sweep, struct matrix from, size_t width, void *to)
{
    bool packed = from.stride == width;
    size_t lines = packed ? 1 : from.rows, numbers = packed ? from.rows * width : width;
    if (sweep->precision == FESCUE_SINGLE)
        rows_round(from.data, from.stride, lines, numbers, to);
    else
        for (size_t i = 0; i < lines; i++)
            memcpy((double *)to + i * numbers, from.data + i * from.stride, numbers * sizeof(double));
}

enum { COPY_LINES = 512 }; /* lines of a piece for one worker: some microseconds */

struct copy_job {
    const struct sweep *sweep;
    struct matrix from[FACTORS_MOST];
    float *to[FACTORS_MOST];
    size_t first[FACTORS_MOST + 1]; /* of each factor's pieces */
    size_t width;
};

static void piece_copy(void *argument, size_t piece, size_t worker)
{
    const struct copy_job *job = argument;
    size_t f = 0;
    (void)worker;
    while (piece >= job->first[f + 1])
        f++;
    size_t line = (piece - job->first[f]) * COPY_LINES;
    rows_copy(job->sweep, matrix_lines(job->from[f], line, COPY_LINES), job->width, job->to[f] + line * job->width);
}

/* ---- what kernels see ---------------------------------------------------------------------------------------------
 */

static const struct matrix *factor_of(const struct sweep_job *job, size_t f)
{
    return f == 0 ? &job->right_of : &job->b_of;
}

static struct sweep_rows *rows_of(struct sweep_job *job, size_t f)
{
    return f == 0 ? &job->right : &job->b;
}

/* A copy for all workers, made in one round. */
static void rows_share(struct sweep_job *job, size_t lines, size_t factors)
{
    struct sweep *sweep = job->sweep;
    struct copy_job copy = {.sweep = sweep, .width = job->width};
    float *room = sweep->copies.shared;
    for (size_t f = 0; f < factors; f++) {
        copy.from[f] = matrix_lines(*factor_of(job, f), job->first, lines);
        copy.to[f] = room;
        copy.first[f + 1] = copy.first[f] + (lines + COPY_LINES - 1) / COPY_LINES;
        *rows_of(job, f) = (struct sweep_rows){.data = room, .stride = job->width};
        room += lines * job->width;
    }
    assert(room <= sweep->copies.shared + sweep->copies.shared_size);
    team_run(sweep->context, copy.first[factors], piece_copy, &copy);
}

static void rows_open(struct sweep_job *job, size_t first, size_t lines, bool own)
{
    struct sweep *sweep = job->sweep;
    struct sweep_copies *copies = &sweep->copies;
    size_t factors = 0;
    job->first = first;
    for (; factors < FACTORS_MOST && factor_of(job, factors)->data != NULL; factors++) {
        const struct matrix *factor = factor_of(job, factors);
        assert(factor->stride >= job->width);
        *rows_of(job, factors) = (struct sweep_rows){&MATRIX_AT(*factor, first, 0), factor->stride};
    }
    size_t bytes = factors * lines * job->width * number_size(sweep);
    job->near = bytes <= copies->near_most;
    job->own = own && OWN_HEAD + bytes <= copies->own_size;
    copies->openings++;
    if (!job->own && sweep->precision == FESCUE_SINGLE)
        rows_share(job, lines, factors);
}

void sweep_rows_open(struct sweep_job *job, size_t first, size_t lines)
{
    rows_open(job, first, lines, true);
}

void sweep_rows_open_shared(struct sweep_job *job)
{
    rows_open(job, 0, job->half->length, false);
}

void sweep_rows_take(struct sweep_job *job, size_t worker)
{
    const struct sweep *sweep = job->sweep;
    const struct sweep_copies *copies = &sweep->copies;
    if (!job->own)
        return;
    char *own = copies->own + worker * copies->own_size, *room = own + OWN_HEAD;
    uint64_t *opening = (uint64_t *)(void *)own;
    size_t lines = job->half->length;
    for (size_t f = 0; f < FACTORS_MOST && factor_of(job, f)->data != NULL; f++) {
        if (*opening != copies->openings)
            rows_copy(sweep, matrix_lines(*factor_of(job, f), job->first, lines), job->width, room);
        *rows_of(job, f) = (struct sweep_rows){.data = room, .stride = job->width};
        room += lines * job->width * number_size(sweep);
    }
    *opening = copies->openings;
}
