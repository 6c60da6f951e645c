/* SPDX-License-Identifier: MIT
 *
 * Sums of second moments over the seen cells of one line, for fits that carry the uncertainty of both sides.
 *
 * Each position j of a half brings the second moment M_j = E[g_j g_j'] of d regressors g_j, one of which is the
 * constant 1. It is kept as a packed lower triangle, row by row (packed.c), so d(d+1)/2 numbers, padded to a multiple
 * of eight. Row `one` of the triangle, that of the constant, holds the mean E[g_j] itself: a position needs nothing but
 * its packed moment. For line i with seen positions j, values z_ij and a weight
 * c_j a position the gather gives
 *
 *     S = sum_j c_j M_j        t = sum_j c_j z_ij E[g_j]        q = sum_j c_j z_ij^2
 *
 * from which the posterior of the line, and the expected squared error of its cells, q - 2 h't + <E[hh'], S>, follow
 * without another pass over the cells.
 *
 * Cost: d(d+1)/2 + 2d additions and multiplications a cell; each M_j is read once, in order, four positions at a time
 * so that S is loaded and stored once for four. Elementwise sums in a fixed order: the bits do not depend on threads
 * or on the instruction set.
 */
#include "numeric/numeric.h"

#include <string.h>

NUMERIC_VERSIONS
static void add_four(double *restrict sum, const double *const from[4], const double weight[4], size_t count)
{
    const double *restrict a = from[0], *restrict b = from[1], *restrict c = from[2], *restrict d = from[3];
    double wa = weight[0], wb = weight[1], wc = weight[2], wd = weight[3];
    for (size_t k = 0; k < count; k++)
        sum[k] += (wa * a[k] + wb * b[k]) + (wc * c[k] + wd * d[k]);
}

/* t += z E[g]: the mean is row `one` of the triangle and, below its diagonal, the column of that number. */
static void add_target(double *restrict target, const double *restrict moment, double z, const struct moments *moments)
{
    size_t one = moments->one;
    const double *mean = moment + one * (one + 1) / 2;
    for (size_t k = 0; k <= one; k++)
        target[k] += z * mean[k];
    for (size_t k = one + 1; k < moments->regressors; k++)
        target[k] += z * moment[k * (k + 1) / 2 + one];
}

void moments_gather(const struct moments *moments, const struct half *half, enum fescue_precision precision,
                    size_t line, struct moments_sum *sum)
{
    size_t packed = packed_size(moments->regressors);
    memset(sum->second, 0, packed * sizeof *sum->second);
    memset(sum->target, 0, moments->regressors * sizeof *sum->target);
    sum->square = 0;
    uint64_t end = half->start[line + 1];
    for (uint64_t k = half->start[line]; k < end; k += 4) {
        const double *from[4];
        double weight[4];
        for (uint64_t f = 0; f < 4; f++) { /* past the end: a position already in cache, with weight 0 */
            uint32_t position = half->across[k + f < end ? k + f : k];
            from[f] = moments->data + position * moments->stride;
            weight[f] = k + f >= end ? 0 : moments->weight != NULL ? moments->weight[position] : 1;
        }
        add_four(sum->second, from, weight, packed);
        for (uint64_t f = 0; f < 4 && k + f < end; f++) {
            double z = precision == FESCUE_SINGLE ? (double)((const float *)half->value)[k + f]
                                                  : ((const double *)half->value)[k + f];
            add_target(sum->target, from[f], weight[f] * z, moments);
            sum->square += weight[f] * z * z;
        }
    }
}
