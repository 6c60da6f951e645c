/* SPDX-License-Identifier: MIT
 *
 * One direction of the store: room for it, its blocks, where a cell is, and whether it is in order. sort.c fills it.
 *
 * Blocks are cut so that cells + lines is about the same in each: a line costs something even when it is empty. The cut
 * depends on the table alone, so sums over blocks in block order do not depend on the number of workers.
 */
#include "table/table_internal.h"

#include <stdatomic.h>

/* Below this much work a block is not worth handing to another worker: about 10 microseconds of a cheap loop. */
enum { LEAST_BLOCK_WORK = 4096 };

size_t cell_size(enum fescue_precision precision)
{
    return precision == FESCUE_SINGLE ? sizeof(float) : sizeof(double);
}

fescue_status half_open(fescue_context *context, uint32_t lines, uint32_t length, uint64_t count,
                        enum fescue_precision precision, struct half *half)
{
    fescue_status status;
    *half = (struct half){.lines = lines, .length = length};
    TRY(TAKE(context, (size_t)lines + 1, &half->start));
    TRY(TAKE(context, count, &half->across));
    TRY(memory_take(context, count, cell_size(precision), &half->value));
done:
    if (status != FESCUE_OK)
        half_free(context, half);
    return status;
}

uint64_t half_find(const struct half *half, uint32_t line, uint32_t position)
{
    uint64_t low = half->start[line], high = half->start[line + 1];
    while (low < high) {
        uint64_t middle = low + (high - low) / 2;
        if (half->across[middle] < position)
            low = middle + 1;
        else
            high = middle;
    }
    return low;
}

/* ---- order ------------------------------------------------------------------------------------------------------ */

struct order_check {
    const struct half *half;
    size_t pieces;
    atomic_bool is_broken;
};

static void order_check_piece(void *job, size_t piece, size_t worker)
{
    struct order_check *check = job;
    const struct half *half = check->half;
    uint32_t first = (uint32_t)((uint64_t)half->lines * piece / check->pieces);
    uint32_t end = (uint32_t)((uint64_t)half->lines * (piece + 1) / check->pieces);
    bool broken = false;
    (void)worker;
    for (uint32_t i = first; i < end && !broken; i++)
        for (uint64_t k = half->start[i] + 1; k < half->start[i + 1]; k++)
            broken |= half->across[k - 1] >= half->across[k];
    if (broken)
        atomic_store(&check->is_broken, true);
}

bool half_is_ascending(fescue_context *context, const struct half *half)
{
    enum { PIECES_A_WORKER = 8 }; /* lines differ in length */
    struct order_check check = {.half = half, .pieces = PIECES_A_WORKER * team_workers(context)};
    team_run(context, check.pieces, order_check_piece, &check);
    return !atomic_load(&check.is_broken);
}

fescue_status half_find_twice(fescue_context *context, const struct half *half, bool *twice, uint32_t *line,
                              uint32_t *across)
{
    *twice = false;
    uint32_t *seen; /* by position: the last line that had a cell there, from 1 */
    fescue_status status = TAKE(context, half->length, &seen);
    if (status != FESCUE_OK)
        return status;
    for (uint32_t i = 0; i < half->lines && !*twice; i++)
        for (uint64_t k = half->start[i]; k < half->start[i + 1] && !*twice; k++) {
            *twice = seen[half->across[k]] == i + 1;
            seen[half->across[k]] = i + 1;
            *line = i;
            *across = half->across[k];
        }
    GIVE(context, &seen);
    return FESCUE_OK;
}

uint32_t half_line_at_work(const struct half *half, uint64_t work)
{
    uint32_t low = 0, high = half->lines;
    while (low < high) {
        uint32_t middle = low + (high - low) / 2;
        if (half->start[middle] + middle < work)
            low = middle + 1;
        else
            high = middle;
    }
    return low;
}

fescue_status half_cut(fescue_context *context, struct half *half)
{
    uint64_t work = half->start[half->lines] + half->lines;
    uint64_t blocks = work / LEAST_BLOCK_WORK + 1;
    if (blocks > CELLS_MOST_BLOCKS)
        blocks = CELLS_MOST_BLOCKS;
    fescue_status status = TAKE(context, blocks + 1, &half->block);
    if (status != FESCUE_OK)
        return status;
    half->blocks = 0;
    for (uint64_t b = 1; b <= blocks; b++) {
        /* Both factors of b * work / blocks fit: blocks is at most 2^8, work below 2^56 for any memory there is. */
        uint32_t end = b == blocks ? half->lines : half_line_at_work(half, b * work / blocks);
        if (end > half->block[half->blocks]) /* a line longer than a block leaves the next ones empty: left out */
            half->block[++half->blocks] = end;
    }
    return FESCUE_OK;
}

void half_free(fescue_context *context, struct half *half)
{
    GIVE(context, &half->start);
    GIVE(context, &half->across);
    GIVE(context, &half->value);
    GIVE(context, &half->weight);
    GIVE(context, &half->block);
    *half = (struct half){0};
}
