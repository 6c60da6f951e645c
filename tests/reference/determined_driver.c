/* SPDX-License-Identifier: MIT
 *
 * Lends determined_create to tests/reference/determined.py:
 *
 *     determined_driver THREADS < masks > bases
 *
 * In, again and again until the end: rows, columns, rank, kind of offsets (its place among auto, both, rows, columns,
 * mean, none) as 32-bit integers, then rows x columns bytes, 1 for a seen cell. Out for each mask: rows x columns
 * bytes, the basis of each cell (0: low-rank), then the number of cells that are low-rank by count, 64-bit.
 */
#include "judge/judge.h"

#include <stdio.h>
#include <stdlib.h>

static void mask_answer(fescue_context *context, const uint32_t *head, const uint8_t *mask)
{
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    struct cells cells;
    struct determined determined;
    for (uint32_t i = 0; i < head[0]; i++)
        for (uint32_t j = 0; j < head[1]; j++)
            if (mask[(size_t)i * head[1] + j] && triplets_append(context, &list, i, j, 1) != FESCUE_OK)
                exit(1);
    if (cells_build(context, head[0], head[1], &list, &cells) != FESCUE_OK ||
        determined_create(context, &cells, head[2], (enum fescue_offsets)head[3], &determined) != FESCUE_OK) {
        fprintf(stderr, "%s\n", fescue_failure_text(context));
        exit(1);
    }
    for (uint32_t i = 0; i < head[0]; i++)
        for (uint32_t j = 0; j < head[1]; j++)
            putchar((int)determined_basis(&determined, i, j));
    fwrite(&determined.low_rank, sizeof determined.low_rank, 1, stdout);
    triplets_free(context, &list);
    determined_free(context, &determined);
    cells_free(context, &cells);
}

int main(int count, char **argument)
{
    fescue_context *context;
    uint32_t head[4];
    if (count != 2 || fescue_context_create(NULL, &context) != FESCUE_OK ||
        team_resize(context, (size_t)atoi(argument[1])) != FESCUE_OK)
        return 1;
    while (fread(head, sizeof head, 1, stdin) == 1) {
        size_t size = (size_t)head[0] * head[1];
        uint8_t *mask = malloc(size + 1);
        if (mask == NULL || fread(mask, 1, size, stdin) != size)
            return 1;
        mask_answer(context, head, mask);
        free(mask);
    }
    fescue_context_destroy(&context);
    return 0;
}
