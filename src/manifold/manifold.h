/* SPDX-License-Identifier: MIT
 *
 * Geometry: the Grassmann manifold of r-dimensional subspaces of R^m, and the manifold of m x n matrices of rank r.
 * Nothing here knows of tables or of observed cells.
 */
#ifndef FESCUE_MANIFOLD_H
#define FESCUE_MANIFOLD_H

#include "numeric/numeric.h"

/* A matrix of low rank, left diag(spectrum) right': left (rows x rank) and right (columns x rank) orthonormal,
   spectrum >= 0, descending. Owns its memory. Rank 0 is the zero matrix. */
struct low_rank {
    size_t rows, columns, rank;
    struct matrix left, right;
    double *spectrum;
    struct arena arena;
};
fescue_status low_rank_create(fescue_context *context, size_t rows, size_t columns, size_t rank, struct low_rank *out);
fescue_status low_rank_copy(fescue_context *context, const struct low_rank *from, struct low_rank *out);
void low_rank_free(fescue_context *context, struct low_rank *point); /* NULL-safe, leaves rank 0 */
double low_rank_entry(const struct low_rank *point, size_t row, size_t column);

#endif
