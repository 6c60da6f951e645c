/* SPDX-License-Identifier: MIT
 *
 * One direction of the store, made by counting.
 *
 *     start[i]    while counting: the cells of line i; while placing: where its next cell goes; at the end: its first
 *     across[k]   the position of cell k in its line
 *
 * Placing moves start[i] on to the first cell of line i + 1, so that the end is one shift by one place; no second array
 * of counters is needed. A transposition reads one direction in order and places every cell in the other: it sorts as
 * it goes, since positions come in ascending order (a radix sort of two digits, the row and the column; Knuth 1998, The
 * Art of Computer Programming 3, section 5.2.5). Cost O(cells + lines), memory nothing beyond the two halves.
 *
 * Blocks are cut so that cells + lines is about the same in each: a line costs something even when it is empty. The cut
 * depends on the table alone, so sums over blocks in block order do not depend on the number of workers.
 */
#include "table/table_internal.h"

#include <assert.h>
#include <string.h>

/* Below this much work a block is not worth handing to another worker: about 10 microseconds of a cheap loop. */
enum { LEAST_BLOCK_WORK = 4096 };

static size_t value_size(enum fescue_precision precision)
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
    TRY(memory_take(context, count, value_size(precision), &half->value));
done:
    if (status != FESCUE_OK)
        half_free(context, half);
    return status;
}

void half_count(struct half *half, const uint32_t *line, uint64_t count)
{
    for (uint64_t k = 0; k < count; k++) {
        assert(line[k] < half->lines);
        half->start[line[k]]++;
    }
}

void half_begin(struct half *half)
{
    uint64_t before = 0;
    for (size_t i = 0; i <= half->lines; i++) {
        uint64_t here = half->start[i];
        half->start[i] = before;
        before += here;
    }
}

void half_end(struct half *half)
{
    memmove(half->start + 1, half->start, half->lines * sizeof *half->start);
    half->start[0] = 0;
}

/* The loops below are compiled once for each size of a value, which is copied unseen. */
__attribute__((always_inline)) static inline void place(struct half *half, const uint32_t *line, const uint32_t *across,
                                                        const char *value, uint64_t count, size_t size)
{
    char *to = half->value;
    for (uint64_t k = 0; k < count; k++) {
        uint64_t at = half->start[line[k]]++;
        half->across[at] = across[k];
        memcpy(to + at * size, value + k * size, size);
    }
}

void half_place(struct half *half, const uint32_t *line, const uint32_t *across, const void *value, uint64_t count,
                enum fescue_precision precision)
{
    if (precision == FESCUE_SINGLE)
        place(half, line, across, value, count, sizeof(float));
    else
        place(half, line, across, value, count, sizeof(double));
}

__attribute__((always_inline)) static inline void transpose(const struct half *from, struct half *to, size_t size)
{
    const char *source = from->value;
    char *target = to->value;
    for (uint32_t i = 0; i < from->lines; i++)
        for (uint64_t k = from->start[i]; k < from->start[i + 1]; k++) {
            uint64_t at = to->start[from->across[k]]++;
            to->across[at] = i;
            memcpy(target + at * size, source + k * size, size);
        }
}

void half_transpose(const struct half *from, struct half *to, enum fescue_precision precision)
{
    assert(from->lines == to->length && from->length == to->lines);
    memset(to->start, 0, ((size_t)to->lines + 1) * sizeof *to->start);
    half_count(to, from->across, from->start[from->lines]);
    half_begin(to);
    if (precision == FESCUE_SINGLE)
        transpose(from, to, sizeof(float));
    else
        transpose(from, to, sizeof(double));
    half_end(to);
}

bool half_is_ascending(const struct half *half)
{
    for (uint32_t i = 0; i < half->lines; i++)
        for (uint64_t k = half->start[i] + 1; k < half->start[i + 1]; k++)
            if (half->across[k - 1] >= half->across[k])
                return false;
    return true;
}

fescue_status half_find_twice(fescue_context *context, const struct half *half, bool *twice, uint32_t *line,
                              uint32_t *across)
{
    *twice = false;
    if (half_is_ascending(half))
        return FESCUE_OK;
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

/* The first line from which on at least `work` lies behind: work before line i is start[i] + i, which ascends. */
static uint32_t line_at_work(const struct half *half, uint64_t work)
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
        uint32_t end = b == blocks ? half->lines : line_at_work(half, b * work / blocks);
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
    GIVE(context, &half->block);
    *half = (struct half){0};
}
