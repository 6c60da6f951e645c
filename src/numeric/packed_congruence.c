/* SPDX-License-Identifier: MIT
 *
 * M <- T M T' for a small symmetric M kept as its packed lower triangle: two products of k x k matrices on unpacked
 * rows, four terms of a sum at a time so that a row of the result is loaded and stored once for four. Elementwise sums
 * in a fixed order: the bits do not depend on the instruction set. 4 k^3 operations.
 */
#include "numeric/numeric.h"

#include <string.h>

/* c = a b, all k x k with the given stride, a multiple of 8; what stands behind column k in b stands so in c. */
NUMERIC_VERSIONS
static void square_multiply(const double *restrict a, const double *restrict b, double *restrict c, size_t k,
                            size_t stride)
{
    for (size_t i = 0; i < k; i++) {
        double *restrict row = c + i * stride;
        const double *restrict x = a + i * stride;
        size_t p = 0;
        for (size_t j = 0; j < stride; j++)
            row[j] = 0;
        for (; p + 4 <= k; p += 4) {
            const double *restrict y = b + p * stride;
            double x0 = x[p], x1 = x[p + 1], x2 = x[p + 2], x3 = x[p + 3];
            for (size_t j = 0; j < stride; j++)
                row[j] += (x0 * y[j] + x1 * y[stride + j]) + (x2 * y[2 * stride + j] + x3 * y[3 * stride + j]);
        }
        for (; p < k; p++)
            for (size_t j = 0; j < stride; j++)
                row[j] += x[p] * b[p * stride + j];
    }
}

size_t packed_congruence_work(size_t k)
{
    return 2 * k * factor_stride(k);
}

void packed_congruence(double *moment, size_t k, struct matrix map, struct matrix transposed, double *work)
{
    size_t stride = factor_stride(k);
    double *full = work, *half = work + k * stride;
    memset(full, 0, k * stride * sizeof *full);
    for (size_t i = 0, at = 0; i < k; i++)
        for (size_t j = 0; j <= i; j++, at++)
            full[i * stride + j] = full[j * stride + i] = moment[at];
    square_multiply(map.data, full, half, k, stride);
    square_multiply(half, transposed.data, full, k, stride);
    for (size_t i = 0; i < k; i++)
        memcpy(moment + packed_size(i), full + i * stride, (i + 1) * sizeof *full);
}
