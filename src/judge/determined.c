/* SPDX-License-Identifier: MIT
 *
 * On what the estimate of a cell rests.
 *
 * The low-rank part of cell (i, j) at rank r can be determined only when row i and column j both lie in the r-core of
 * the graph of observed cells and in the same connected block of that core (Singer, Cucuringu 2010, "Uniqueness of
 * low-rank matrix completion by rigidity theory"). The condition is necessary: no determined cell is lost. It is not
 * sufficient, so some cells called low-rank here may be free all the same.
 *
 * The r-core is asked for, not the (r+1)-core, with offsets too: offsets are shrunk estimates of their own, fitted
 * before the low-rank part and held fixed under it.
 *
 * At rank 0 there is no low-rank part, and no line is in a core. Cost: that of core_numbers, O(cells + lines).
 */
#include "judge/judge_internal.h"

#include <assert.h>

const char *basis_word(enum basis basis)
{
    static const char *const words[] = {"low-rank", "offsets", "mean"};
    assert((size_t)basis < sizeof words / sizeof words[0]);
    return words[basis];
}

static void support_count(const struct half *half, uint32_t *support)
{
    for (uint32_t i = 0; i < half->lines; i++)
        support[i] = (uint32_t)(half->start[i + 1] - half->start[i]);
}

static fescue_status core_blocks(fescue_context *context, const struct cells *cells, struct determined *determined)
{
    fescue_status status = FESCUE_OK;
    uint32_t *row_core = NULL, *column_core = NULL, blocks;
    TRY(TAKE(context, cells->rows, &row_core));
    TRY(TAKE(context, cells->columns, &column_core));
    TRY(core_numbers(context, cells, row_core, column_core));
    TRY(blocks_find(context, cells, row_core, column_core, (uint32_t)determined->rank, determined->row_block,
                    determined->column_block, &blocks));
done:
    GIVE(context, &row_core);
    GIVE(context, &column_core);
    return status;
}

fescue_status determined_create(fescue_context *context, const struct cells *cells, size_t rank,
                                enum fescue_offsets offsets, struct determined *determined)
{
    assert(offsets != FESCUE_OFFSETS_AUTO);
    fescue_status status = FESCUE_OK;
    *determined = (struct determined){.rows = cells->rows, .columns = cells->columns, .rank = rank, .offsets = offsets};
    TRY(TAKE(context, cells->rows, &determined->row_block));
    TRY(TAKE(context, cells->columns, &determined->column_block));
    TRY(TAKE(context, cells->rows, &determined->row_support));
    TRY(TAKE(context, cells->columns, &determined->column_support));
    support_count(&cells->by_row, determined->row_support);
    support_count(&cells->by_column, determined->column_support);
    if (rank > 0)
        TRY(core_blocks(context, cells, determined));
done:
    if (status != FESCUE_OK)
        determined_free(context, determined);
    return status;
}

static bool has_effect(const struct determined *determined, uint32_t row, uint32_t column)
{
    bool of_rows = determined->offsets == FESCUE_OFFSETS_BOTH || determined->offsets == FESCUE_OFFSETS_ROWS;
    bool of_columns = determined->offsets == FESCUE_OFFSETS_BOTH || determined->offsets == FESCUE_OFFSETS_COLUMNS;
    return (of_rows && determined->row_support[row] > 0) || (of_columns && determined->column_support[column] > 0);
}

enum basis determined_basis(const struct determined *determined, uint32_t row, uint32_t column)
{
    assert(row < determined->rows && column < determined->columns);
    uint32_t block = determined->row_block[row];
    if (block != 0 && block == determined->column_block[column])
        return BASIS_LOW_RANK;
    return has_effect(determined, row, column) ? BASIS_OFFSETS : BASIS_MEAN;
}

void determined_free(fescue_context *context, struct determined *determined)
{
    GIVE(context, &determined->row_block);
    GIVE(context, &determined->column_block);
    GIVE(context, &determined->row_support);
    GIVE(context, &determined->column_support);
}
