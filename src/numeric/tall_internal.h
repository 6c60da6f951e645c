/* SPDX-License-Identifier: MIT
 *
 * Between the products of tall matrices (tall_step.c) and their kernels (tall_kernel.h, included once for each
 * instruction set).
 */
#ifndef FESCUE_NUMERIC_TALL_INTERNAL_H
#define FESCUE_NUMERIC_TALL_INTERNAL_H

#include "numeric/numeric.h"

enum { TALL_MOST = 64 }; /* columns of what the kernels take */
/* Lines of a'b that the kernels write to: whole tiles. */
static inline size_t tall_lines(size_t columns)
{
    return (columns + 7) / 8 * 8;
}

struct tall_kernel {
    /* sum += a'b, tall_lines(a.columns) lines of TALL_MOST numbers, factor_stride(b.columns) of which count */
    void (*cross)(struct matrix a, struct matrix b, double *sum);
    /* c = a factor + beta c; factor in lines of TALL_MOST numbers, 0 from its last column to factor_stride(c.columns).
       c may be a. */
    void (*multiply)(struct matrix a, const double *factor, double beta, struct matrix c);
};

extern const struct tall_kernel tall_portable;
#if defined(__x86_64__)
extern const struct tall_kernel tall_avx2, tall_avx512;
#endif

#endif
