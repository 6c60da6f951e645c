/* SPDX-License-Identifier: MIT
 *
 * A half once more, cut into slabs of positions, for sweeps that read far more rows than fit into a near cache.
 *
 * The columns of a table of 100 000 rows read, in rank 16, here and there in 13 MB of right rows. Such reads come from
 * memory, two lines of 64 bytes each, and cost several times what is done with them. The slabs
 *
 *     positions 0 .. P-1 of all lines, line by line; then P .. 2P-1 of all lines; ...          P about SLAB_..
 *
 * are halves of their own, with the same lines and blocks and positions from 0 on, and are gone through one after
 * another: the rows of a slab come from memory once (and are copied then, in single precision) and are then near for
 * every line, and for every worker, as all are at the same slab. What a line has come to is read again and added to
 * (sweep_job.more).
 *
 * Positions in two bytes each gain 3 to 5 per cent in rank 8 and single precision where the cells lie in a shared
 * cache, and nothing where they come from memory; they are not worth a second kind of loops.
 *
 * Going through the cells of the half itself in that order, with a cursor for each line, needs no second copy, but does
 * not pay: cells are read more often than rows, and would then be read in pieces of some hundred bytes.
 *
 * Cost: positions and values once more (12 or 8 bytes a cell) and a number for each line and slab; making it costs
 * about what two sweeps cost. The order of additions is that of the slabs, whose bounds depend on the table and on how
 * wide rows are, and sums over blocks are added slab by slab: the bits do not depend on the number of workers.
 */
#include "numeric/sweep_internal.h"

#include <string.h>

/* Positions of a slab, all of which are of one size but the last. Rows of 32 bytes are to stay in a core's own cache
   (458 KB); wider ones do not, and a few cores share what they take, 2 MB in rank 16. Shorter slabs are nearer, but a
   line's part of them is shorter too; below some 16 cells its beginning and end cost more than is won. */
enum { SLAB_NARROW = 14 << 10, SLAB_WIDE = 16 << 10, NARROW_BYTES = 32, STRETCH_LEAST = 16 };

struct arranging {
    const struct half *half;
    struct sweep_slabs *slabs;
    size_t size; /* bytes of a value */
};

/* Counts a block's cells, by line and slab. */
static void block_count(void *argument, size_t block, size_t worker)
{
    const struct arranging *arranging = argument;
    const struct half *half = arranging->half;
    const struct sweep_slabs *slabs = arranging->slabs;
    (void)worker;
    for (uint32_t line = half->block[block]; line < half->block[block + 1]; line++)
        for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++)
            slabs->start[half->across[k] / slabs->positions * half->lines + line]++;
}

static void block_copy(void *argument, size_t block, size_t worker)
{
    const struct arranging *arranging = argument;
    const struct half *half = arranging->half;
    struct sweep_slabs *slabs = arranging->slabs;
    size_t size = arranging->size;
    (void)worker;
    for (uint32_t line = half->block[block]; line < half->block[block + 1]; line++) {
        uint64_t k = half->start[line];
        for (size_t slab = 0; slab < slabs->count; slab++) {
            const uint64_t *start = slabs->start + slab * half->lines + line;
            uint64_t count = start[1] - start[0];
            for (uint64_t at = 0; at < count; at++)
                slabs->across[start[0] + at] = half->across[k + at] - (uint32_t)slab * slabs->positions;
            memcpy((char *)slabs->value + start[0] * size, (const char *)half->value + k * size, count * size);
            k += count;
        }
    }
}

/* Numbers of cells become places. */
static void starts_sum(uint64_t *start, size_t count)
{
    uint64_t sum = 0;
    for (size_t at = 0; at <= count; at++) {
        uint64_t cells = start[at];
        start[at] = sum;
        sum += cells;
    }
}

/* Rounded up. */
static size_t length_shared(size_t length, size_t parts)
{
    return (length + parts - 1) / parts;
}

fescue_status sweep_arrange(struct sweep *sweep, const struct half *half)
{
    fescue_context *context = sweep->context;
    struct sweep_slabs *slabs;
    size_t size = sweep->precision == FESCUE_SINGLE ? sizeof(float) : sizeof(double), length = half->length;
    size_t about = sweep_width(sweep, sweep->rank_most) * size <= NARROW_BYTES ? SLAB_NARROW : SLAB_WIDE;
    if (length < 2 * about || sweep->slabs != NULL)
        return FESCUE_OK;
    size_t positions = length_shared(length, (length + about / 2) / about);
    size_t count = length_shared(length, positions), all = count * half->lines;
    uint64_t cells = half->start[half->lines];
    if (cells < (uint64_t)all * STRETCH_LEAST)
        return FESCUE_OK;
    fescue_status status = TAKE(context, 1, &slabs);
    if (status != FESCUE_OK)
        return status;
    sweep->slabs = slabs;
    slabs->of = half->start;
    slabs->of_value = half->value;
    struct arranging arranging = {half, slabs, size};
    TRY(TAKE(context, count, &slabs->half));
    TRY(TAKE(context, all + 1, &slabs->start));
    TRY(TAKE(context, cells, &slabs->across));
    TRY(memory_take(context, cells, arranging.size, &slabs->value));
    slabs->count = count;
    slabs->positions = (uint32_t)positions;
    team_run(context, half->blocks, block_count, &arranging);
    starts_sum(slabs->start, all);
    team_run(context, half->blocks, block_copy, &arranging);
    for (size_t slab = 0; slab < count; slab++) {
        uint32_t first = (uint32_t)slab * slabs->positions, left = half->length - first;
        slabs->half[slab] = *half;
        slabs->half[slab].length = left < slabs->positions ? left : slabs->positions;
        slabs->half[slab].start = slabs->start + slab * half->lines;
        slabs->half[slab].across = slabs->across;
        slabs->half[slab].value = slabs->value;
        slabs->half[slab].weight = NULL;
    }
done:
    if (status != FESCUE_OK)
        sweep_slabs_free(sweep);
    return status;
}

void sweep_slabs_free(struct sweep *sweep)
{
    struct sweep_slabs *slabs = sweep->slabs;
    if (slabs == NULL)
        return;
    GIVE(sweep->context, &slabs->value);
    GIVE(sweep->context, &slabs->across);
    GIVE(sweep->context, &slabs->start);
    GIVE(sweep->context, &slabs->half);
    GIVE(sweep->context, &sweep->slabs);
}

void sweep_slabs_run(struct sweep_job *job, sweep_block *kernel, double sums[SWEEP_SUMS])
{
    const struct sweep_slabs *slabs = job->sweep->slabs;
    bool fits = slabs != NULL && job->half->start == slabs->of && job->values == slabs->of_value;
    if (!fits || job->residual != NULL) {
        sweep_rows_open(job, 0, job->half->length);
        sweep_run(job, kernel, sums);
        return;
    }
    sums[0] = sums[1] = 0;
    for (size_t slab = 0; slab < slabs->count; slab++) {
        double part[SWEEP_SUMS];
        job->half = &slabs->half[slab];
        job->values = slabs->value;
        job->more = slab > 0;
        sweep_rows_open(job, slab * slabs->positions, job->half->length);
        sweep_run(job, kernel, part);
        for (size_t k = 0; k < SWEEP_SUMS; k++)
            sums[k] += part[k];
    }
}
