/* SPDX-License-Identifier: MIT
 *
 * Which components live. Pruned ones fall towards 0 quadratically, in the end; on small tables one is dead below a
 * thousandth of the noise's standard deviation, and rounds are made until it is there.
 *
 * On large tables a round is felt, and long before that it can be told which way a component goes. Of an m x n table of
 * which N cells are seen, evenly and with noise of variance s2, a component of mean square c stands out from the noise
 * only above the edge
 *
 *     N c = s2 sqrt(mn)
 *
 * (Baik, Ben Arous, Peche 2005, Annals of Probability 33; Benaych-Georges, Nadakuditi 2012, Journal of Multivariate
 * Analysis 111, for rectangular matrices, here that of the seen cells over N/mn, whose noise has the variance
 * s2 mn/N), and what a variational posterior keeps is larger than that: 1.3 times for a square one (Nakajima, Tomioka,
 * Sugiyama, Babacan 2015, "Condition for perfect dimensionality recovery by variational Bayesian PCA", Journal of
 * Machine Learning Research 16). Cells are not seen evenly, and a component may live on a part of m' x n' lines, which
 * has an edge of its own, at s2 sqrt(m'n'). So its squares are counted over the seen cells, where it weighs most, and
 * it is dead below a tenth of the edge of the whole: when the rounds have settled it is still on its way to 0, or lives
 * on a hundredth of the table and less and takes a share sqrt(mn)/(10 N) of the noise with it, a thousandth.
 */
#include "solve/evidence_internal.h"

#include <math.h>

/* A pruned component: standard deviation in the table over that of the noise. */
#define COMPONENT_DEAD 1e-3
/* And on a large table: squares over the seen cells over those at the edge. */
#define COMPONENT_FADED 0.1

/* Sum over lines of their cells times the square of component k. */
static double seen_square(const struct half *half, struct matrix factor, size_t k)
{
    double sum = 0;
    for (size_t line = 0; line < half->lines; line++)
        sum += (double)(half->start[line + 1] - half->start[line]) * MATRIX_AT(factor, line, k) *
               MATRIX_AT(factor, line, k);
    return sum;
}

/* Up to the last one above the edge: they are sorted by their size over all cells. */
static size_t living_large(const struct cells *cells, const struct evidence_result *fit)
{
    const struct low_rank *point = &fit->model.low_rank;
    double edge = fit->noise * fit->noise * sqrt((double)cells->rows * (double)cells->columns);
    size_t count = point->rank;
    for (; count > 0; count--) {
        double left = seen_square(&cells->by_row, point->left, count - 1);
        double right = seen_square(&cells->by_column, point->right, count - 1);
        double size = point->spectrum[count - 1];
        if (size * size * left * right / (double)cells->count > COMPONENT_FADED * edge)
            break;
    }
    return count;
}

size_t evidence_living(const struct cells *cells, const struct evidence_result *fit)
{
    const struct low_rank *point = &fit->model.low_rank;
    double size = sqrt((double)point->rows * (double)point->columns);
    size_t count = 0;
    if (evidence_is_large(cells))
        return living_large(cells, fit);
    while (count < point->rank && point->spectrum[count] > COMPONENT_DEAD * fit->noise * size)
        count++;
    return count;
}

void evidence_trim(struct model *model, size_t rank)
{
    struct low_rank *point = &model->low_rank;
    if (rank >= point->rank)
        return;
    point->rank = rank;
    if (model->time.components > rank + 1) {
        model->time.steps_law[rank] = model->time.steps_law[model->time.components - 1];
        model->time.components = rank + 1;
    }
    for (size_t side = 0; side < 2; side++) {
        struct matrix a = side == 0 ? point->left : point->right;
        for (size_t i = 0; i < a.rows; i++)
            for (size_t k = rank; k < a.columns; k++)
                MATRIX_AT(a, i, k) = 0;
    }
    point->left = matrix_left(point->left, rank);
    point->right = matrix_left(point->right, rank);
}
