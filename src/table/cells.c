/* SPDX-License-Identifier: MIT
 *
 * The observed cells both ways.
 *
 * The rows are placed first. Files are mostly sorted one way or the other, and then the rows are in order already: one
 * transposition gives the columns. Otherwise a second one, back again, sorts the rows.
 */
#include "table/table_internal.h"

#include <assert.h>

fescue_status cells_finish(fescue_context *context, struct cells *cells)
{
    fescue_status status;
    TRY(half_open(context, cells->columns, cells->rows, cells->count, cells->precision, &cells->by_column));
    half_transpose(&cells->by_row, &cells->by_column, cells->precision);
    if (!half_is_ascending(&cells->by_row))
        half_transpose(&cells->by_column, &cells->by_row, cells->precision);
    assert(half_is_ascending(&cells->by_row));
    /* Rows in any order make columns in order, since the rows are read one after the other. */
    assert(half_is_ascending(&cells->by_column));
    TRY(half_cut(context, &cells->by_row));
    TRY(half_cut(context, &cells->by_column));
done:
    return status;
}

fescue_status cells_build(fescue_context *context, uint32_t rows, uint32_t columns, const struct triplet_list *list,
                          struct cells *cells)
{
    fescue_status status;
    *cells = (struct cells){.rows = rows, .columns = columns, .count = list->count, .precision = list->precision};
    TRY(half_open(context, rows, columns, list->count, list->precision, &cells->by_row));
    half_count(&cells->by_row, list->row, list->count);
    half_begin(&cells->by_row);
    half_place(&cells->by_row, list->row, list->column, list->value, list->count, list->precision);
    half_end(&cells->by_row);
    TRY(cells_finish(context, cells));
done:
    if (status != FESCUE_OK)
        cells_free(context, cells);
    return status;
}

/* The kept cells of `from`, in row order. */
static void half_keep(const struct cells *from, const uint8_t *keep, struct half *to)
{
    const struct half *half = &from->by_row;
    uint64_t at = 0;
    for (uint32_t i = 0; i < half->lines; i++) {
        to->start[i] = at;
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++) {
            if (!keep[k])
                continue;
            to->across[at] = half->across[k];
            if (from->precision == FESCUE_SINGLE)
                ((float *)to->value)[at] = ((const float *)half->value)[k];
            else
                ((double *)to->value)[at] = ((const double *)half->value)[k];
            at++;
        }
    }
    to->start[half->lines] = at;
}

fescue_status cells_select(fescue_context *context, const struct cells *from, const uint8_t *keep, struct cells *cells)
{
    fescue_status status;
    *cells = (struct cells){.rows = from->rows, .columns = from->columns, .precision = from->precision};
    for (uint64_t k = 0; k < from->count; k++)
        cells->count += keep[k] != 0;
    TRY(half_open(context, from->rows, from->columns, cells->count, from->precision, &cells->by_row));
    half_keep(from, keep, &cells->by_row);
    TRY(cells_finish(context, cells));
done:
    if (status != FESCUE_OK)
        cells_free(context, cells);
    return status;
}

fescue_status cells_alike(fescue_context *context, const struct cells *from, struct cells *cells)
{
    fescue_status status;
    size_t size = from->precision == FESCUE_SINGLE ? sizeof(float) : sizeof(double);
    *cells = *from;
    cells->shares_pattern = true;
    cells->by_row.value = cells->by_column.value = NULL;
    TRY(memory_take(context, from->count, size, &cells->by_row.value));
    TRY(memory_take(context, from->count, size, &cells->by_column.value));
done:
    if (status != FESCUE_OK)
        cells_free(context, cells);
    return status;
}

void cells_free(fescue_context *context, struct cells *cells)
{
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
