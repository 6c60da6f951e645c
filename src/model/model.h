/* SPDX-License-Identifier: MIT
 *
 * What is fitted: offsets, and the objective of the low-rank part.
 *
 *     estimate_ij = mean + row_i + column_j + (left diag(spectrum) right')_ij
 */
#ifndef FESCUE_MODEL_H
#define FESCUE_MODEL_H

#include "manifold/manifold.h"

/* Effects in the table's units; row and column always have one entry a line (zeros where the kind has none).
   A line without observed cells has effect 0. */
struct offsets {
    enum fescue_offsets kind; /* never AUTO */
    double mean, *row, *column;
    double row_ridge, column_ridge; /* in observations: an effect seen n times is shrunk by n/(n + ridge) */
};
/* min over mean, a, b of sum (x_ij - mean - a_i - b_j)^2 + row_ridge |a|^2 + column_ridge |b|^2 on the observed cells,
   as one sparse symmetric system. The ridges are the ratios of variances (noise over effect), estimated by moments
   from the data (Henderson's method 3; Searle, Casella, McCulloch 1992). */
fescue_status offsets_fit(fescue_context *context, const struct cells *cells, enum fescue_offsets kind,
                          struct offsets *offsets);
fescue_status offsets_copy(fescue_context *context, uint32_t rows, uint32_t columns, const struct offsets *from,
                           struct offsets *to);
void offsets_free(fescue_context *context, struct offsets *offsets);
static inline double offsets_at(const struct offsets *offsets, uint32_t row, uint32_t column)
{
    return offsets->mean + offsets->row[row] + offsets->column[column];
}

/* The low-rank problem that is left: target = (observed - offsets) / scale, scale = rms of the observed minus offsets
   (1 when that is 0), so that solvers work on numbers of size one whatever the units. The objective at X of rank r is
       f(X) = 1/2 sum over seen (X_ij - t_ij)^2 + 1/2 lambda |X|_F^2,      lambda = ridge * density
   where density = seen / (rows*columns): with every cell equally likely seen, ridge L shrinks by 1/(1+L). */
struct problem {
    fescue_context *context;
    struct cells target; /* shares the pattern of the cells it was made from, which must outlive it */
    double scale, ridge, lambda;
    double norm;     /* of the targets, sqrt(sum t^2): sqrt(count), or 0 when all are 0 */
    double rounding; /* rms error that rounding leaves in a target: epsilon of the store, times rms(observed) / scale
                        where that is above one (offsets took most of the number away) */
};
fescue_status problem_create(fescue_context *context, const struct cells *cells, const struct offsets *offsets,
                             double ridge, struct problem *problem);
void problem_set_ridge(struct problem *problem, double ridge);
void problem_free(struct problem *problem);

/* The whole of what was learnt, in the table's units (scale is already in the spectrum). */
struct model {
    uint32_t rows, columns;
    struct offsets offsets;
    struct low_rank low_rank;
    struct fescue_range bounds;
};
double model_estimate(const struct model *model, uint32_t row, uint32_t column); /* clamped to bounds */
void model_free(fescue_context *context, struct model *model);

#endif
