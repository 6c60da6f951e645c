/* SPDX-License-Identifier: MIT
 *
 * What the pattern of observed cells can and cannot determine: connected blocks, and ranks.
 *
 * A cell of the table is of use at rank r when its row and its column both lie in the r-core (core). c_r, the number of
 * such cells, falls with r; a rank is worth trying while c_r is at least nine tenths of all cells and the r(m+n-r)
 * unknowns of rank r are no more than the cells (m rows and n columns that have any), and above the rank at which c_r
 * falls under half of them the data cannot decide.
 */
#include "judge/survey_internal.h"

enum { BLOCKS_NAMED = 3 };

struct block {
    uint64_t rows, columns, cells;
    uint32_t number;
};

/* ---- blocks ----------------------------------------------------------------------------------------------------- */

static void blocks_measure(const struct cells *cells, const uint32_t *row_block, const uint32_t *column_block,
                           struct block *block, uint32_t count)
{
    for (uint32_t b = 0; b < count; b++)
        block[b].number = b + 1;
    for (uint32_t i = 0; i < cells->rows; i++) {
        if (row_block[i] == 0)
            continue;
        block[row_block[i] - 1].rows++;
        block[row_block[i] - 1].cells += cells->by_row.start[i + 1] - cells->by_row.start[i];
    }
    for (uint32_t j = 0; j < cells->columns; j++)
        if (column_block[j] != 0)
            block[column_block[j] - 1].columns++;
}

/* The BLOCKS_NAMED largest come to the front, equals in the order of their rows. */
static void blocks_sort(struct block *block, uint32_t count)
{
    for (uint32_t k = 0; k < count && k < BLOCKS_NAMED; k++) {
        uint32_t largest = k;
        for (uint32_t b = k + 1; b < count; b++)
            largest = block[b].cells > block[largest].cells ? b : largest;
        struct block next = block[largest];
        for (uint32_t b = largest; b > k; b--)
            block[b] = block[b - 1];
        block[k] = next;
    }
}

static void blocks_tell(struct page *page, const struct block *block, uint32_t count)
{
    if (count == 1) {
        page_add(page, "The observed cells hang together in one block.\n");
        return;
    }
    page_add(page, "The observed cells fall into %u blocks that share no row or column:", count);
    for (uint32_t k = 0; k < count && k < BLOCKS_NAMED; k++) {
        page_add(page, "%s %llu by %llu (", k == 0 ? "" : ",", (unsigned long long)block[k].rows,
                 (unsigned long long)block[k].columns);
        page_count(page, block[k].cells, "cell)", "cells)");
    }
    if (count > BLOCKS_NAMED)
        page_add(page, " and %u more", count - BLOCKS_NAMED);
    page_add(page, ".\nA cell whose row and column lie in different blocks can only be filled from offsets.\n");
}

static void members_tell(const struct survey *survey, const struct labels *labels, const uint32_t *of, uint32_t lines,
                         uint32_t number)
{
    uint64_t found = 0;
    for (uint32_t line = 0; line < lines; line++) {
        if (of[line] != number)
            continue;
        if (found < NAMED_MOST)
            survey_label(survey, labels, line, found == 0 ? " " : ", ");
        found++;
    }
    if (found > NAMED_MOST)
        page_add(survey->page, " and %llu more", (unsigned long long)(found - NAMED_MOST));
}

/* The blocks beside the largest, by name. */
static void orphans_tell(const struct survey *survey, const struct block *block, uint32_t count,
                         const uint32_t *row_block, const uint32_t *column_block)
{
    const fescue_table *table = survey->table;
    for (uint32_t k = 1; k < count && k < BLOCKS_NAMED; k++) {
        page_add(survey->page, "Apart from the rest: %s", block[k].rows == 1 ? "row" : "rows");
        members_tell(survey, &table->row_labels, row_block, survey->cells->rows, block[k].number);
        page_add(survey->page, block[k].columns == 1 ? ", column" : ", columns");
        members_tell(survey, &table->column_labels, column_block, survey->cells->columns, block[k].number);
        page_add(survey->page, ".\n");
    }
}

fescue_status survey_blocks(struct survey *survey)
{
    fescue_status status = FESCUE_OK;
    fescue_context *context = survey->table->context;
    const struct cells *cells = survey->cells;
    uint32_t *row_block = survey->row_block, *column_block = survey->column_block, count = 0;
    struct block *block = NULL;
    TRY(blocks_find(context, cells, survey->row_core, survey->column_core, 0, row_block, column_block, &count));
    TRY(TAKE(context, count, &block));
    blocks_measure(cells, row_block, column_block, block, count);
    blocks_sort(block, count);
    survey->main_block = block[0].number;
    blocks_tell(survey->page, block, count);
    orphans_tell(survey, block, count, row_block, column_block);
done:
    GIVE(context, &block);
    return status;
}

/* ---- ranks ------------------------------------------------------------------------------------------------------ */

struct ranks {
    uint32_t all, most, half; /* the largest ranks whose core holds all, nine tenths, half of the cells */
};

/* held[k]: cells that lie in the k-core, k = 0 .. highest. */
static void cores_count(const struct survey *survey, uint64_t *held, uint32_t highest)
{
    const struct half *half = &survey->cells->by_row;
    for (uint32_t i = 0; i < half->lines; i++) {
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++) {
            uint32_t column = survey->column_core[half->across[k]], row = survey->row_core[i];
            held[row < column ? row : column]++;
        }
    }
    for (uint32_t k = highest; k > 0; k--)
        held[k - 1] += held[k];
}

static struct ranks ranks_find(const uint64_t *held, uint32_t highest)
{
    struct ranks ranks = {0};
    for (uint32_t k = 1; k <= highest; k++) {
        ranks.all = held[k] == held[0] ? k : ranks.all;
        ranks.most = (double)held[k] >= 0.9 * (double)held[0] ? k : ranks.most;
        ranks.half = (double)held[k] >= 0.5 * (double)held[0] ? k : ranks.half;
    }
    return ranks;
}

static uint64_t lines_seen(const uint32_t *core, uint32_t lines)
{
    uint64_t seen = 0;
    for (uint32_t i = 0; i < lines; i++)
        seen += core[i] > 0;
    return seen;
}

/* The largest rank with no more unknowns than cells. */
static uint64_t unknowns_rank(const struct survey *survey)
{
    uint64_t rows = lines_seen(survey->row_core, survey->cells->rows), rank = 0;
    uint64_t columns = lines_seen(survey->column_core, survey->cells->columns);
    uint64_t most = rows < columns ? rows : columns;
    while (rank < most && (rank + 1) * (rows + columns - rank - 1) <= survey->cells->count)
        rank++;
    return rank;
}

static void ranks_tell(struct survey *survey, const struct ranks *ranks, uint64_t unknowns)
{
    struct page *page = survey->page;
    uint64_t decidable = ranks->half < unknowns ? ranks->half : unknowns;
    survey->rank_most = ranks->most < unknowns ? ranks->most : unknowns;
    page_add(page,
             "Rank r needs r cells in each row and column, which holds for all observed cells up to rank %u, for nine "
             "tenths of them up to rank %u, for half up to rank %u.\n",
             ranks->all, ranks->most, ranks->half);
    if (unknowns < ranks->half)
        page_add(page, "Above rank %llu there would be more unknowns than observed cells.\n",
                 (unsigned long long)unknowns);
    page_add(page, "The data cannot decide anything above rank %llu.\n", (unsigned long long)decidable);
}

static uint32_t core_highest(const uint32_t *core, uint32_t lines)
{
    uint32_t highest = 0;
    for (uint32_t i = 0; i < lines; i++)
        highest = core[i] > highest ? core[i] : highest;
    return highest;
}

fescue_status survey_ranks(struct survey *survey)
{
    fescue_status status = FESCUE_OK;
    fescue_context *context = survey->table->context;
    uint32_t highest = core_highest(survey->row_core, survey->cells->rows);
    uint64_t *held = NULL;
    TRY(TAKE(context, (size_t)highest + 1, &held));
    cores_count(survey, held, highest);
    struct ranks ranks = ranks_find(held, highest);
    ranks_tell(survey, &ranks, unknowns_rank(survey));
done:
    GIVE(context, &held);
    return status;
}
