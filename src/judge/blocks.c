/* SPDX-License-Identifier: MIT
 *
 * Connected blocks of the graph of observed cells: what one block holds says nothing about the low-rank part of a cell
 * whose row lies in one block and whose column in another, since each block's factors may be turned on their own.
 *
 * A search from each row that has no block yet, over a queue of lines (rows first, then columns, in one numbering).
 * One thread; O(cells + lines).
 */
#include "judge/judge_internal.h"

struct search {
    const struct cells *cells;
    const uint32_t *row_core, *column_core;
    uint32_t k;
    uint32_t *row_block, *column_block;
    uint64_t *queue, begin, end;
};

static void row_reach(struct search *search, uint32_t row, uint32_t block)
{
    if (search->row_block[row] != 0 || search->row_core[row] < search->k)
        return;
    search->row_block[row] = block;
    search->queue[search->end++] = row;
}

static void column_reach(struct search *search, uint32_t column, uint32_t block)
{
    if (search->column_block[column] != 0 || search->column_core[column] < search->k)
        return;
    search->column_block[column] = block;
    search->queue[search->end++] = (uint64_t)search->cells->rows + column;
}

static void block_search(struct search *search, uint32_t row, uint32_t block)
{
    const struct cells *cells = search->cells;
    search->begin = search->end = 0;
    row_reach(search, row, block);
    while (search->begin < search->end) {
        uint64_t line = search->queue[search->begin++];
        bool is_row = line < cells->rows;
        const struct half *half = is_row ? &cells->by_row : &cells->by_column;
        line -= is_row ? 0 : cells->rows;
        for (uint64_t c = half->start[line]; c < half->start[line + 1]; c++) {
            if (is_row)
                column_reach(search, half->across[c], block);
            else
                row_reach(search, half->across[c], block);
        }
    }
}

fescue_status blocks_find(fescue_context *context, const struct cells *cells, const uint32_t *row_core,
                          const uint32_t *column_core, uint32_t k, uint32_t *row_block, uint32_t *column_block,
                          uint32_t *blocks)
{
    fescue_status status = FESCUE_OK;
    struct search search = {.cells = cells,
                            .row_core = row_core,
                            .column_core = column_core,
                            .k = k,
                            .row_block = row_block,
                            .column_block = column_block};
    *blocks = 0;
    TRY(TAKE(context, (size_t)cells->rows + cells->columns, &search.queue));
    for (uint32_t i = 0; i < cells->rows; i++)
        row_block[i] = 0;
    for (uint32_t j = 0; j < cells->columns; j++)
        column_block[j] = 0;
    for (uint32_t i = 0; i < cells->rows; i++) {
        bool has_cells = cells->by_row.start[i + 1] > cells->by_row.start[i];
        if (has_cells && row_block[i] == 0 && row_core[i] >= k)
            block_search(&search, i, ++*blocks);
    }
done:
    GIVE(context, &search.queue);
    return status;
}
