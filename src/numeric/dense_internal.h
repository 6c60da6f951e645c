/* SPDX-License-Identifier: MIT
 *
 * What the dense files share: sizes as LAPACK wants them, and OpenBLAS held at one thread.
 */
#ifndef FESCUE_NUMERIC_DENSE_INTERNAL_H
#define FESCUE_NUMERIC_DENSE_INTERNAL_H

#include "numeric/numeric.h"

#include <cblas.h>
#include <lapacke.h>

/* OpenBLAS has one thread from the first call on. Our own workers may call it side by side. */
void dense_threads_hold(void);

/* Sizes fit: a matrix dimension above 2^31 - 1 is a caller's mistake (tables have 32-bit indices and stay below). */
lapack_int dense_size(size_t size);

/* FESCUE_OK, or FESCUE_DEFECT naming the routine: `info` is what LAPACK returned. */
fescue_status dense_check(fescue_context *context, const char *routine, lapack_int info);

/* LAPACK likes blocks of 32 to 64 columns; more room than it asks for does no harm. */
enum { DENSE_BLOCK = 64 };

/* Tall matrices are worked on in pieces of lines by the team; the pieces depend on the shape alone. */
enum { DENSE_MOST_PIECES = 32 };
struct dense_pieces {
    size_t lines, count, each; /* the last piece may be shorter */
};
struct dense_pieces dense_pieces_of(size_t lines, size_t columns);
struct matrix dense_piece(struct matrix a, const struct dense_pieces *pieces, size_t which);

#endif
