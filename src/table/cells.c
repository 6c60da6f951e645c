/* SPDX-License-Identifier: MIT
 *
 * The observed cells both ways.
 *
 * The rows are placed first. Files are mostly sorted one way or the other, and then the rows are in order already: one
 * transposition gives the columns. Otherwise a second one, back again, sorts the rows; cells of the same place keep
 * the order of the input through all of it, so that the first and the last of them can be told.
 */
#include "table/table_internal.h"

#include <assert.h>
#include <math.h>

/* ---- cells that came more than once ----------------------------------------------------------------------------- */

static void value_store(const struct cells *cells, uint64_t k, double value)
{
    if (cells->precision == FESCUE_SINGLE)
        ((float *)cells->by_row.value)[k] = (float)value;
    else
        ((double *)cells->by_row.value)[k] = value;
}

/* The mean of the cells first .. last. Where a sum would overflow, parts of it do not. */
static double values_mean(const struct cells *cells, uint64_t first, uint64_t last)
{
    double count = (double)(last - first + 1), sum = 0, parts = 0;
    for (uint64_t k = first; k <= last; k++) {
        sum += cells_value(cells, &cells->by_row, k);
        parts += cells_value(cells, &cells->by_row, k) / count;
    }
    return isfinite(sum) ? sum / count : parts;
}

static double values_merge(const struct cells *cells, enum fescue_duplicates duplicates, uint64_t first, uint64_t last)
{
    if (first == last || duplicates == FESCUE_DUPLICATES_FIRST)
        return cells_value(cells, &cells->by_row, first);
    if (duplicates == FESCUE_DUPLICATES_LAST)
        return cells_value(cells, &cells->by_row, last);
    return values_mean(cells, first, last);
}

/* In sorted rows, cells of the same place lie side by side; they become one, and what follows moves up. */
static void rows_merge(struct cells *cells, enum fescue_duplicates duplicates)
{
    struct half *half = &cells->by_row;
    uint64_t at = 0, k = 0;
    for (uint32_t i = 0; i < half->lines; i++) {
        uint64_t end = half->start[i + 1];
        half->start[i] = at;
        while (k < end) {
            uint64_t last = k;
            while (last + 1 < end && half->across[last + 1] == half->across[k])
                last++;
            value_store(cells, at, values_merge(cells, duplicates, k, last));
            half->across[at++] = half->across[k];
            k = last + 1;
        }
    }
    half->start[half->lines] = at;
    cells->count = at;
}

/* ---- building --------------------------------------------------------------------------------------------------- */

fescue_status cells_finish(fescue_context *context, enum fescue_duplicates duplicates, bool is_ascending,
                           struct cells *cells, uint64_t *merged)
{
    fescue_status status;
    uint64_t count = cells->count;
    TRY(half_open(context, cells->columns, cells->rows, count, cells->precision, &cells->by_column));
    TRY(half_transpose(context, &cells->by_row, &cells->by_column, cells->precision));
    if (!is_ascending) {
        TRY(half_transpose(context, &cells->by_column, &cells->by_row, cells->precision));
        if (duplicates != FESCUE_DUPLICATES_REFUSE)
            rows_merge(cells, duplicates);
        if (cells->count != count)
            TRY(half_transpose(context, &cells->by_row, &cells->by_column, cells->precision));
    }
    *merged = count - cells->count;
    TRY(half_cut(context, &cells->by_row));
    TRY(half_cut(context, &cells->by_column));
done:
    return status;
}

fescue_status cells_build(fescue_context *context, uint32_t rows, uint32_t columns, const struct triplet_list *list,
                          struct cells *cells)
{
    fescue_status status;
    uint64_t merged;
    const struct cell_run run = {list->row, list->column, list->value, list->count, MIRROR_NONE};
    *cells = (struct cells){.rows = rows, .columns = columns, .count = list->count, .precision = list->precision};
    TRY(half_open(context, rows, columns, list->count, list->precision, &cells->by_row));
    TRY(half_sort(context, &run, 1, list->precision, &cells->by_row));
    bool is_ascending = half_is_ascending(context, &cells->by_row);
    TRY(cells_finish(context, FESCUE_DUPLICATES_REFUSE, is_ascending, cells, &merged));
    assert(is_ascending || half_is_ascending(context, &cells->by_row)); /* no cell twice, as the caller promised */
done:
    if (status != FESCUE_OK)
        cells_free(context, cells);
    return status;
}

/* ---- selecting -------------------------------------------------------------------------------------------------- */

struct selecting {
    const struct cells *from;
    const uint8_t *keep; /* of each cell by row */
    uint64_t *first;     /* of each block: how many are kept in it, then before it */
    struct half *to;
};

static void block_count(void *job, size_t block, size_t worker)
{
    const struct selecting *selecting = job;
    const struct half *half = &selecting->from->by_row;
    uint64_t count = 0;
    (void)worker;
    for (uint64_t k = half->start[half->block[block]]; k < half->start[half->block[block + 1]]; k++)
        count += selecting->keep[k] != 0;
    selecting->first[block] = count;
}

static void block_keep(void *job, size_t block, size_t worker)
{
    const struct selecting *selecting = job;
    const struct half *half = &selecting->from->by_row, *to = selecting->to;
    uint64_t at = selecting->first[block];
    (void)worker;
    for (uint32_t i = half->block[block]; i < half->block[block + 1]; i++) {
        to->start[i] = at;
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++) {
            if (!selecting->keep[k])
                continue;
            to->across[at] = half->across[k];
            if (selecting->from->precision == FESCUE_SINGLE)
                ((float *)to->value)[at] = ((const float *)half->value)[k];
            else
                ((double *)to->value)[at] = ((const double *)half->value)[k];
            at++;
        }
    }
}

/* The kept cells of `from`, in row order. */
static fescue_status rows_keep(fescue_context *context, const struct cells *from, const uint8_t *keep,
                               struct cells *cells)
{
    const struct half *half = &from->by_row;
    struct selecting selecting = {.from = from, .keep = keep, .to = &cells->by_row};
    fescue_status status;
    TRY(TAKE(context, half->blocks, &selecting.first));
    team_run(context, half->blocks, block_count, &selecting);
    for (size_t block = 0; block < half->blocks; block++) {
        uint64_t count = selecting.first[block];
        selecting.first[block] = cells->count;
        cells->count += count;
    }
    TRY(half_open(context, from->rows, from->columns, cells->count, from->precision, &cells->by_row));
    team_run(context, half->blocks, block_keep, &selecting);
    cells->by_row.start[from->rows] = cells->count;
done:
    GIVE(context, &selecting.first);
    return status;
}

/* ---- weights --------------------------------------------------------------------------------------------------- */

/* The columns' weights from those of the rows. */
static fescue_status weights_transpose(fescue_context *context, struct cells *cells)
{
    const struct half *rows = &cells->by_row;
    struct half *columns = &cells->by_column;
    uint64_t *next;
    fescue_status status = TAKE(context, columns->lines, &next);
    if (status != FESCUE_OK)
        return status;
    for (uint32_t j = 0; j < columns->lines; j++)
        next[j] = columns->start[j];
    for (uint64_t k = 0; k < cells->count; k++)
        columns->weight[next[rows->across[k]]++] = rows->weight[k];
    GIVE(context, &next);
    return FESCUE_OK;
}

static fescue_status weights_open(fescue_context *context, struct cells *cells)
{
    fescue_status status = FESCUE_OK;
    assert(!cells->shares_pattern && !cells->shares_all);
    if (cells->by_row.weight == NULL)
        TRY(TAKE(context, cells->count, &cells->by_row.weight));
    if (cells->by_column.weight == NULL)
        TRY(TAKE(context, cells->count, &cells->by_column.weight));
done:
    return status;
}

fescue_status cells_weigh(fescue_context *context, struct cells *cells, const double *weight)
{
    fescue_status status = FESCUE_OK;
    if (weight == NULL) {
        GIVE(context, &cells->by_row.weight);
        GIVE(context, &cells->by_column.weight);
        return FESCUE_OK;
    }
    TRY(weights_open(context, cells));
    for (uint64_t k = 0; k < cells->count; k++)
        cells->by_row.weight[k] = (float)weight[k];
    TRY(weights_transpose(context, cells));
done:
    return status;
}

/* ---- parts of a store ------------------------------------------------------------------------------------------ */

static fescue_status weights_keep(fescue_context *context, const struct cells *from, const uint8_t *keep,
                                  struct cells *cells)
{
    fescue_status status;
    uint64_t at = 0;
    TRY(weights_open(context, cells));
    for (uint64_t k = 0; k < from->count; k++)
        if (keep[k])
            cells->by_row.weight[at++] = from->by_row.weight[k];
    TRY(weights_transpose(context, cells));
done:
    return status;
}

fescue_status cells_select(fescue_context *context, const struct cells *from, const uint8_t *keep, struct cells *cells)
{
    fescue_status status;
    uint64_t merged;
    *cells = (struct cells){.rows = from->rows, .columns = from->columns, .precision = from->precision};
    TRY(rows_keep(context, from, keep, cells));
    TRY(cells_finish(context, FESCUE_DUPLICATES_REFUSE, true, cells, &merged));
    if (from->by_row.weight != NULL)
        TRY(weights_keep(context, from, keep, cells));
done:
    if (status != FESCUE_OK)
        cells_free(context, cells);
    return status;
}

fescue_status cells_alike(fescue_context *context, const struct cells *from, enum fescue_precision precision,
                          struct cells *cells)
{
    fescue_status status;
    size_t size = precision == FESCUE_SINGLE ? sizeof(float) : sizeof(double);
    *cells = *from;
    cells->precision = precision;
    cells->shares_pattern = true;
    cells->shares_all = false;
    cells->by_row.value = cells->by_column.value = NULL;
    TRY(memory_take(context, from->count, size, &cells->by_row.value));
    TRY(memory_take(context, from->count, size, &cells->by_column.value));
done:
    if (status != FESCUE_OK)
        cells_free(context, cells);
    return status;
}

struct cells cells_share(const struct cells *from)
{
    struct cells cells = *from;
    cells.shares_all = true;
    return cells;
}

void cells_free(fescue_context *context, struct cells *cells)
{
    if (cells->shares_all) {
        *cells = (struct cells){0};
        return;
    }
    if (cells->shares_pattern) {
        GIVE(context, &cells->by_row.value);
        GIVE(context, &cells->by_column.value);
    } else {
        half_free(context, &cells->by_row);
        half_free(context, &cells->by_column);
    }
    *cells = (struct cells){0};
}

double cells_value(const struct cells *cells, const struct half *half, uint64_t k)
{
    assert(k < cells->count);
    return cells->precision == FESCUE_SINGLE ? (double)((const float *)half->value)[k]
                                             : ((const double *)half->value)[k];
}
