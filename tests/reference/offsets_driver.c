/* SPDX-License-Identifier: MIT
 *
 * Lends offsets_fit to tests/reference/offsets.py:
 *
 *     offsets_driver both|rows|columns|mean|none [weighted] < table > offsets
 *
 * In: rows, columns, cells as 64-bit integers, then the row of every cell, its column (32-bit), its value (double), and
 * its weight (double) where there are some. Cells come in row order.
 * Out, doubles: mean, ridge of rows, ridge of columns, row effects, column effects. A failure prints its sentence to
 * standard error and ends with its status.
 */
#include "model/model.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

static void *numbers_get(size_t count, size_t size)
{
    void *block = calloc(count + 1, size);
    if (block == NULL || fread(block, size, count, stdin) != count)
        exit(1);
    return block;
}

static void doubles_put(const double *number, size_t count)
{
    if (fwrite(number, sizeof *number, count, stdout) != count)
        exit(1);
}

static enum fescue_offsets kind_of(const char *word)
{
    static const char *const words[] = {"auto", "both", "rows", "columns", "mean", "none"};
    for (int kind = FESCUE_OFFSETS_BOTH; kind <= FESCUE_OFFSETS_NONE; kind++)
        if (strcmp(words[kind], word) == 0)
            return (enum fescue_offsets)kind;
    exit(1);
}

int main(int count, char **argument)
{
    fescue_context *context;
    struct cells cells;
    struct offsets offsets;
    if (count < 2 || count > 3 || fescue_context_create(NULL, &context) != FESCUE_OK)
        return 1;
    uint64_t *size = numbers_get(3, sizeof *size);
    struct triplet_list list = {.count = size[2], .capacity = size[2], .precision = FESCUE_DOUBLE};
    list.row = numbers_get(size[2], sizeof *list.row);
    list.column = numbers_get(size[2], sizeof *list.column);
    list.value = numbers_get(size[2], sizeof(double));
    fescue_status status = cells_build(context, (uint32_t)size[0], (uint32_t)size[1], &list, &cells);
    if (status == FESCUE_OK && count == 3)
        status = cells_weigh(context, &cells, numbers_get(size[2], sizeof(double)));
    if (status == FESCUE_OK)
        status = offsets_fit(context, &cells, kind_of(argument[1]), &offsets);
    if (status != FESCUE_OK) {
        fprintf(stderr, "%s\n", fescue_failure_text(context));
        return fescue_status_exit_code(status);
    }
    doubles_put((const double[]){offsets.mean, offsets.row_ridge, offsets.column_ridge}, 3);
    doubles_put(offsets.row, size[0]);
    doubles_put(offsets.column, size[1]);
    offsets_free(context, &offsets);
    cells_free(context, &cells);
    free(list.row);
    free(list.column);
    free(list.value);
    free(size);
    fescue_context_destroy(&context);
    return fflush(stdout) == 0 ? 0 : 1;
}
