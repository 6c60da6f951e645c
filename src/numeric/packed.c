/* SPDX-License-Identifier: MIT
 *
 * Small symmetric positive definite systems, packed: row i of the lower triangle is a[i(i+1)/2 .. i(i+1)/2 + i].
 *
 *     A = L L':   L_ij = (A_ij - sum_{l<j} L_il L_jl) / L_jj,    L_jj = sqrt(A_jj - sum_{l<j} L_jl^2)
 *
 * Row by row, so that both factors of a sum lie in one piece. Breakdown is a pivot below k eps A_jj: all digits of it
 * are rounding. Then 1e-14 trace/k goes on the diagonal, ten times as much on each further breakdown. A matrix that is
 * all zero becomes I (the answer to a zero right-hand side stays zero); one that is not finite becomes not a number.
 */
#include "numeric/numeric.h"

#include <assert.h>
#include <float.h>
#include <math.h>

enum { PACKED_MOST = 1024 }; /* far above the largest rank: the diagonals are kept on the stack */
enum { PARTS = 4 };          /* sums in flight */

static double *packed_row(double *a, size_t i)
{
    return a + i * (i + 1) / 2;
}

static double row_dot(const double *a, const double *b, size_t length)
{
    double part[PARTS] = {0};
    size_t l = 0;
    for (; l + PARTS <= length; l += PARTS)
        for (size_t p = 0; p < PARTS; p++)
            part[p] += a[l + p] * b[l + p];
    for (size_t p = 0; l + p < length; p++)
        part[p] += a[l + p] * b[l + p];
    return (part[0] + part[2]) + (part[1] + part[3]);
}

/* Rows from..k-1 of A become rows of L; returns the first row whose pivot broke down (its row is then half done), or
   k. */
static size_t rows_factor(double *a, size_t k)
{
    for (size_t i = 0; i < k; i++) {
        double *row = packed_row(a, i);
        double least = (double)k * DBL_EPSILON * row[i];
        for (size_t j = 0; j < i; j++) {
            const double *other = packed_row(a, j);
            row[j] = (row[j] - row_dot(row, other, j)) / other[j];
        }
        double pivot = row[i] - row_dot(row, row, i);
        if (!(pivot > least))
            return i;
        row[i] = sqrt(pivot);
    }
    return k;
}

/* A from rows 0..broken-1 of L, whole, and row `broken`, whose diagonal is still A's. */
static void rows_restore(double *a, size_t broken)
{
    for (size_t i = broken + 1; i-- > 0;) {
        double *row = packed_row(a, i);
        if (i < broken)
            row[i] = row_dot(row, row, i + 1);
        for (size_t j = i; j-- > 0;)
            row[j] = row_dot(row, packed_row(a, j), j + 1);
    }
}

static void diagonal_fill(double *a, size_t k, double value)
{
    for (size_t i = 0; i < k; i++)
        packed_row(a, i)[i] = value;
}

/* The factor of A + lift I, ten times the lift on each breakdown; a lift of 0 is followed by 1e-14 trace/k. */
static void factor_from(double *a, size_t k, double lift)
{
    double diagonal[PACKED_MOST], trace = 0;
    assert(k <= PACKED_MOST);
    for (size_t i = 0; i < k; i++) {
        diagonal[i] = packed_row(a, i)[i];
        trace += diagonal[i];
    }
    if (!(trace > 0) || !isfinite(trace)) {
        diagonal_fill(a, k, trace == 0 ? 1 : (double)NAN);
        return;
    }
    while (isfinite(lift)) {
        for (size_t i = 0; i < k; i++)
            packed_row(a, i)[i] = diagonal[i] + lift;
        size_t broken = rows_factor(a, k);
        if (broken == k)
            return;
        rows_restore(a, broken);
        lift = lift == 0 ? 1e-14 * trace / (double)k : 10 * lift;
    }
    diagonal_fill(a, k, (double)NAN);
}

void packed_cholesky(double *a, size_t k)
{
    factor_from(a, k, 0);
}

void packed_cholesky_lifted(double *a, size_t k, double share)
{
    double trace = 0;
    for (size_t i = 0; i < k; i++)
        trace += packed_row(a, i)[i];
    factor_from(a, k, share * trace / (double)k);
}

void packed_solve(const double *factor, size_t k, double *b)
{
    for (size_t i = 0; i < k; i++) {
        const double *row = factor + i * (i + 1) / 2;
        b[i] = (b[i] - row_dot(row, b, i)) / row[i];
    }
    for (size_t i = k; i-- > 0;) {
        const double *row = factor + i * (i + 1) / 2;
        b[i] /= row[i];
        for (size_t j = 0; j < i; j++)
            b[j] -= row[j] * b[i];
    }
}
