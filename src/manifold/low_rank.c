/* SPDX-License-Identifier: MIT
 *
 * A matrix of low rank in the form of its singular value decomposition: one block of memory, three pieces.
 */
#include "manifold/manifold.h"

#include <assert.h>
#include <string.h>

fescue_status low_rank_create(fescue_context *context, size_t rows, size_t columns, size_t rank, struct low_rank *out)
{
    fescue_status status;
    assert(rank <= rows && rank <= columns);
    *out = (struct low_rank){.rows = rows, .columns = columns, .rank = rank};
    matrix_reserve(&out->arena, rows, rank);
    matrix_reserve(&out->arena, columns, rank);
    arena_reserve(&out->arena, rank, sizeof *out->spectrum);
    TRY(arena_open(context, &out->arena));
    out->left = matrix_carve(&out->arena, rows, rank);
    out->right = matrix_carve(&out->arena, columns, rank);
    out->spectrum = arena_carve(&out->arena, rank, sizeof *out->spectrum);
done:
    if (status != FESCUE_OK)
        low_rank_free(context, out);
    return status;
}

fescue_status low_rank_copy(fescue_context *context, const struct low_rank *from, struct low_rank *out)
{
    fescue_status status = low_rank_create(context, from->rows, from->columns, from->rank, out);
    if (status == FESCUE_OK && from->rank > 0) {
        matrix_copy(from->left, out->left);
        matrix_copy(from->right, out->right);
        memcpy(out->spectrum, from->spectrum, from->rank * sizeof *from->spectrum);
    }
    return status;
}

void low_rank_free(fescue_context *context, struct low_rank *point)
{
    if (point == NULL)
        return;
    arena_close(context, &point->arena);
    *point = (struct low_rank){0};
}

/* O(rank). */
double low_rank_entry(const struct low_rank *point, size_t row, size_t column)
{
    assert(row < point->rows && column < point->columns);
    double sum = 0;
    for (size_t k = 0; k < point->rank; k++)
        sum += MATRIX_AT(point->left, row, k) * point->spectrum[k] * MATRIX_AT(point->right, column, k);
    return sum;
}
