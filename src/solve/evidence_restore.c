/* SPDX-License-Identifier: MIT
 *
 * The start of a fit that goes on from what such a fit came to. That has left its posterior means alone, and these are
 * shrunk: taken for certain they would make a weak component's prior variance its mean square, which shrinks it once
 * more, and it fades. So prior and posterior variances are restored from the mean square of the means.
 *
 *     symbol    what it is, of one component
 *     y         prior variance of the columns over the noise, where that of the rows is 1
 *     a, b      cells of a row, of a column, on average
 *     s         mean square of the component over the table, over the noise
 *
 * Posteriors of lines that know of the others' second moments only have the variances
 *
 *     rows      1 / (1 + a y), means a y / (1 + a y)         columns   y / (1 + b y), means y * b y / (1 + b y)
 *
 * and the product of the means is s:  y^3 = s (y + 1/a) (y + 1/b), whose right side grows with less than the square of
 * y, so that cube roots of it lead to y, and each turn leaves at most two thirds of the error, in logarithms. A start
 * has the columns known and the rows of mean square 1: the columns' means grow by the root of 1 + 1/(a y).
 *
 * Cost: (r + 2)^2 / 2 a column.
 */
#include "solve/evidence_internal.h"

#include <math.h>

/* (2/3)^40 is 1e-7. */
enum { TURNS = 40 };

static double prior_find(double s, double a, double b)
{
    double y = s;
    for (int turn = 0; turn < TURNS; turn++)
        y = cbrt(s * (y + 1 / a) * (y + 1 / b));
    return y;
}

/* The moments of a column, whose means grow by `gain` and are uncertain by `spread`. */
static void moments_widen(double *moment, size_t rank, const double *gain, const double *spread)
{
    double *one = moment + packed_size(rank), *effect = moment + packed_size(rank + 1);
    for (size_t k = 0; k < rank; k++) {
        double *row = moment + packed_size(k);
        for (size_t l = 0; l <= k; l++)
            row[l] *= gain[k] * gain[l];
        row[k] += spread[k];
        one[k] *= gain[k];
        effect[k] *= gain[k];
    }
}

struct restoring {
    struct evidence_side *columns;
    size_t rank;
    const double *gain, *spread;
};

static void block_widen(void *job, size_t block, size_t worker)
{
    const struct restoring *restoring = job;
    const struct evidence_side *columns = restoring->columns;
    (void)worker;
    for (size_t j = columns->half->block[block]; j < columns->half->block[block + 1]; j++)
        moments_widen(columns->moments.data + j * columns->moments.stride, restoring->rank, restoring->gain,
                      restoring->spread);
}

void evidence_restore(struct evidence *evidence)
{
    const struct cells *cells = &evidence->problem->target;
    struct evidence_side *columns = &evidence->columns;
    size_t rank = evidence->rank;
    double a = (double)cells->count / cells->rows, b = (double)cells->count / cells->columns;
    double *gain = evidence->scratch, *spread = gain + rank;
    for (size_t k = 0; k < rank; k++) {
        double y = prior_find(columns->variance[k] / evidence->noise, a, b);
        gain[k] = y > 0 ? sqrt(1 + 1 / (a * y)) : 1;
        spread[k] = evidence->noise * y / (1 + b * y);
        columns->variance[k] = evidence->noise * y;
    }
    struct restoring restoring = {columns, rank, gain, spread};
    team_run(evidence->context, columns->half->blocks, block_widen, &restoring);
}
