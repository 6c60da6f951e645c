/* SPDX-License-Identifier: MIT
 *
 * Lends the reader to tests/reference/read_matrix_market.py:
 *
 *     read_matrix_market_driver TABLE > cells
 *
 * The number of rows, of columns and of cells, then all rows, all columns, all values of the cells in row order, the
 * machine's 64-bit integers and doubles. A failure prints its sentence to standard error and ends with its status.
 */
#include "table/table.h"

#include <stdio.h>
#include <stdlib.h>

static void count_put(uint64_t count)
{
    if (fwrite(&count, sizeof count, 1, stdout) != 1)
        exit(1);
}

static void cells_put(const struct cells *cells)
{
    const struct half *rows = &cells->by_row;
    count_put(cells->rows);
    count_put(cells->columns);
    count_put(cells->count);
    for (uint32_t i = 0; i < cells->rows; i++)
        for (uint64_t k = rows->start[i]; k < rows->start[i + 1]; k++)
            count_put(i);
    for (uint64_t k = 0; k < cells->count; k++)
        count_put(rows->across[k]);
    if (fwrite(rows->value, sizeof(double), cells->count, stdout) != cells->count)
        exit(1);
}

int main(int count, char **arguments)
{
    const struct table_reading reading = {0};
    fescue_context *context;
    fescue_table *table;
    if (count != 2 || fescue_context_create(NULL, &context) != FESCUE_OK)
        return 1;
    fescue_status status = table_read(context, arguments[1], &reading, &table);
    if (status == FESCUE_OK)
        cells_put(&table->cells);
    else
        fprintf(stderr, "%s\n", fescue_failure_text(context));
    table_destroy(&table);
    fescue_context_destroy(&context);
    return fescue_status_exit_code(status);
}
