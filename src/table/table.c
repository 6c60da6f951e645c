/* SPDX-License-Identifier: MIT
 *
 * Tables: from numbers in memory, and their end.
 */
#include "table/table_internal.h"

#include <math.h>
#include <string.h>

fescue_status table_create(fescue_context *context, const char *path, fescue_table **out)
{
    fescue_status status;
    fescue_table *table = NULL;
    TRY(TAKE(context, 1, &table));
    table->context = context;
    TRY(memory_copy_text(context, path, strlen(path), &table->path));
    *out = table;
done:
    if (status != FESCUE_OK)
        table_destroy(&table);
    return status;
}

void table_destroy(fescue_table **out)
{
    fescue_table *table = *out;
    if (table == NULL)
        return;
    fescue_context *context = table->context;
    pack_release(table);
    GIVE(context, &table->path);
    GIVE(context, &table->packed_from);
    GIVE(context, &table->look.corner);
    GIVE(context, &table->look.row_title);
    GIVE(context, &table->look.column_title);
    GIVE(context, &table->look.value_title);
    GIVE(context, &table->weights.rows);
    GIVE(context, &table->weights.columns);
    labels_free(context, &table->row_labels);
    labels_free(context, &table->column_labels);
    cells_free(context, &table->cells);
    texts_free(context, &table->texts);
    GIVE(context, out);
}

/* The cells of one call, as the caller gave them. */
struct given_cells {
    uint32_t rows, columns;
    uint64_t count;
    const uint32_t *row, *column;
    const double *value;
};

static fescue_status given_check(fescue_context *context, const struct given_cells *given,
                                 enum fescue_precision precision)
{
    if (given->rows > TABLE_MOST_LINES || given->columns > TABLE_MOST_LINES)
        return FAIL(context, FESCUE_BAD_DATA, "more than %" PRIu32 " rows or columns are not possible",
                    TABLE_MOST_LINES);
    if (given->count == 0)
        return FAIL(context, FESCUE_BAD_DATA, "the table has no observed cell");
    for (uint64_t k = 0; k < given->count; k++) {
        if (given->row[k] >= given->rows)
            return FAIL(context, FESCUE_BAD_DATA, "cell %" PRIu64 ": row %" PRIu32 " is outside 0..%" PRId64, k,
                        given->row[k], (int64_t)given->rows - 1);
        if (given->column[k] >= given->columns)
            return FAIL(context, FESCUE_BAD_DATA, "cell %" PRIu64 ": column %" PRIu32 " is outside 0..%" PRId64, k,
                        given->column[k], (int64_t)given->columns - 1);
        if (!isfinite(given->value[k]))
            return FAIL(context, FESCUE_BAD_DATA, "cell %" PRIu64 ": the value is not finite", k);
        if (precision == FESCUE_SINGLE && !isfinite((float)given->value[k]))
            return FAIL(context, FESCUE_BAD_DATA, "cell %" PRIu64 ": %g is too large for single precision", k,
                        given->value[k]);
    }
    return FESCUE_OK;
}

static fescue_status given_place(fescue_context *context, const struct given_cells *given, struct cells *cells)
{
    fescue_status status;
    float *single = NULL;
    struct cell_run run = {given->row, given->column, given->value, given->count, MIRROR_NONE};
    TRY(half_open(context, given->rows, given->columns, given->count, cells->precision, &cells->by_row));
    if (cells->precision == FESCUE_SINGLE) {
        TRY(TAKE(context, given->count, &single));
        for (uint64_t k = 0; k < given->count; k++)
            single[k] = (float)given->value[k];
        run.value = single;
    }
    TRY(half_sort(context, &run, 1, cells->precision, &cells->by_row));
done:
    GIVE(context, &single);
    return status;
}

fescue_status table_from_triplets(fescue_context *context, uint32_t rows, uint32_t columns, uint64_t count,
                                  const uint32_t *row, const uint32_t *column, const double *value,
                                  enum fescue_precision precision, fescue_table **out)
{
    fescue_status status;
    const struct given_cells given = {rows, columns, count, row, column, value};
    fescue_table *table = NULL;
    uint32_t twice_row, twice_column;
    *out = NULL;
    TRY(given_check(context, &given, precision));
    TRY(table_create(context, "", &table));
    table->look.shape = SHAPE_MEMORY;
    table->row_labels.count = rows;
    table->column_labels.count = columns;
    table->cells = (struct cells){.rows = rows, .columns = columns, .count = count, .precision = precision};
    TRY(given_place(context, &given, &table->cells));
    bool is_ascending = half_is_ascending(context, &table->cells.by_row), twice = false;
    if (!is_ascending)
        TRY(half_find_twice(context, &table->cells.by_row, &twice, &twice_row, &twice_column));
    if (twice) {
        status = FAIL(context, FESCUE_BAD_DATA, "the cell of row %" PRIu32 " and column %" PRIu32 " is given twice",
                      twice_row, twice_column);
        goto done;
    }
    TRY(cells_finish(context, FESCUE_DUPLICATES_REFUSE, is_ascending, &table->cells, &table->duplicates));
    *out = table;
    table = NULL;
done:
    table_destroy(&table);
    return status;
}
