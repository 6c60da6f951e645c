/* SPDX-License-Identifier: MIT
 *
 * The half-width of an interval from residuals on cells that were hidden.
 *
 * When the n hidden residuals and the one of a new cell are exchangeable, the size of the new one is equally likely to
 * take each of the n + 1 ranks among them. So the k-th smallest size, k = ceil((n+1) level), holds the new one with
 * probability at least `level` (and at most level + 1/(n+1) without ties): split-conformal prediction (Vovk, Gammerman,
 * Shafer 2005, "Algorithmic Learning in a Random World", section 4.2; section number from memory). For k > n no finite
 * half-width keeps the promise.
 *
 * O(n), in place.
 */
#include "judge/judge_internal.h"

#include <math.h>

static double residual_at(const void *residuals, uint64_t k)
{
    return ((const double *)residuals)[k];
}

double interval_halfwidth(double *residuals, uint64_t count, double level)
{
    /* (n+1) level may come out a rounding above the whole number it is, and must not be rounded up for that. */
    static const double rounding = 1e-12;
    for (uint64_t k = 0; k < count; k++) {
        if (isnan(residuals[k]))
            return INFINITY; /* nothing can be promised, and a NaN has no place in an order */
        residuals[k] = fabs(residuals[k]);
    }
    double place = ceil((double)(count + 1) * level * (1 - rounding));
    if (place > (double)count)
        return INFINITY;
    return place < 1 ? 0 : order_pick(residual_at, residuals, count, (uint64_t)place - 1);
}
