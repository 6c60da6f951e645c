/* SPDX-License-Identifier: MIT
 *
 * The inverse of a small symmetric positive definite matrix from its packed Cholesky factor: first row i of L^-1 as
 * -(1/L_ii) sum_k L_ik (row k of L^-1), then (L^-1)' L^-1 as a sum of outer products of its rows, in place. Both loops
 * run along packed rows. k^3/3 multiplications.
 */
#include "numeric/numeric.h"

#include <assert.h>
#include <string.h>

NUMERIC_VERSIONS
void packed_inverse(const double *factor, size_t k, double *inverse)
{
    double row[PACKED_INVERSE_MOST];
    assert(k <= PACKED_INVERSE_MOST);
    for (size_t i = 0; i < k; i++) {
        const double *l = factor + packed_size(i);
        double *out = inverse + packed_size(i), pivot = 1 / l[i];
        for (size_t j = 0; j < i; j++)
            out[j] = 0;
        for (size_t p = 0; p < i; p++) {
            const double *above = inverse + packed_size(p);
            double scale = -pivot * l[p];
            for (size_t j = 0; j <= p; j++)
                out[j] += scale * above[j];
        }
        out[i] = pivot;
    }
    for (size_t p = 0; p < k; p++) {
        memcpy(row, inverse + packed_size(p), (p + 1) * sizeof *row);
        memset(inverse + packed_size(p), 0, (p + 1) * sizeof *row);
        for (size_t i = 0; i <= p; i++)
            for (size_t j = 0; j <= i; j++)
                inverse[packed_size(i) + j] += row[i] * row[j];
    }
}
