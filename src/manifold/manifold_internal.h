/* SPDX-License-Identifier: MIT
 *
 * Small views that the files of this folder share.
 */
#ifndef FESCUE_MANIFOLD_INTERNAL_H
#define FESCUE_MANIFOLD_INTERNAL_H

#include "manifold/manifold.h"

#include <assert.h>

static inline bool is_shape(struct matrix a, size_t rows, size_t columns)
{
    return a.rows == rows && a.columns == columns;
}

/* The first rows and columns of a, same data. */
static inline struct matrix matrix_corner(struct matrix a, size_t rows, size_t columns)
{
    assert(rows <= a.rows && columns <= a.columns);
    return (struct matrix){.data = a.data, .rows = rows, .columns = columns, .stride = a.stride};
}

/* Quarter (i, j) of a, same data; rows and columns even. */
static inline struct matrix matrix_quarter(struct matrix a, size_t i, size_t j)
{
    size_t rows = a.rows / 2, columns = a.columns / 2;
    return matrix_columns(matrix_lines(a, i * rows, rows), j * columns, columns);
}

#endif
