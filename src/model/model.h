/* SPDX-License-Identifier: MIT
 *
 * What is fitted: offsets, and the objective of the low-rank part.
 *
 *     estimate_ij = mean + row_i + column_j + (left diag(spectrum) right')_ij + time_ij
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
    double rounding; /* rms error that rounding leaves in a target: its epsilon, or that of the store times
                        rms(observed) / scale where that is more (offsets took most of the number away) */
};
fescue_status problem_create(fescue_context *context, const struct cells *cells, const struct offsets *offsets,
                             double ridge, struct problem *problem);
/* The same with targets in this precision; problem_create keeps that of the store. */
fescue_status problem_create_in(fescue_context *context, const struct cells *cells, const struct offsets *offsets,
                                double ridge, enum fescue_precision precision, struct problem *problem);
/* The scale of that problem alone. */
double problem_scale(fescue_context *context, const struct cells *cells, const struct offsets *offsets);
void problem_set_ridge(struct problem *problem, double ridge);
void problem_free(struct problem *problem);

/* What time adds to offsets and low-rank part (time_part.c). The lines along the axis are its steps, the lines across
   it its series: with times as rows, every column is one. A series has a residual that is AR(1) in time; known at the
   cells that were seen, it follows between them. The components and the effect of the steps may be AR(1) too, which is
   in their values already: their laws are here for the record, and for a fit that starts from this one. */
struct time_part {
    enum time_along along; /* TIME_NONE: there is none, and everything else is 0 */
    uint32_t steps, series;
    double *at;             /* of each step, in steps from the earliest */
    uint64_t *start;        /* series + 1 */
    double *time, *mean;    /* of the seen cells of each series, in the order of time: when, and the residual */
    struct kalman_law *law; /* of the residual of each series; variance in the table's units, squared */
    double *noise;          /* variance of each series, table units */
    size_t components;      /* of which laws are known, the effect being the last; 0: independent steps */
    struct kalman_law *steps_law;
};
fescue_status time_part_create(fescue_context *context, const struct time_axis *axis, uint32_t series, uint64_t count,
                               size_t components, struct time_part *part);
fescue_status time_part_copy(fescue_context *context, const struct time_part *from, struct time_part *to);
void time_part_free(fescue_context *context, struct time_part *part);
/* The residual at a cell: O(log seen). */
double time_part_at(const struct time_part *part, uint32_t row, uint32_t column);

/* Seasons: waves of known frequencies, of which every series has amplitudes of its own, drawn towards common ones
   (season.c). */
enum { SEASON_WAVES_MOST = 16 };
struct season {
    enum time_along along; /* TIME_NONE: there is none, and all else is 0 */
    uint32_t steps, series;
    size_t waves;
    double frequency[SEASON_WAVES_MOST]; /* cycles a step of the clock */
    double *wave;                        /* steps x 2 waves: cosine and sine of each */
    double *amplitude;                   /* series x 2 waves, table units */
};
/* Waves of these periods (in steps of the clock, at least two) and of their harmonics, on an axis that is not none.
   Null amplitudes. The caller owns *season. */
fescue_status season_create(fescue_context *context, const struct time_axis *axis, uint32_t series,
                            const double *period, size_t periods, struct season *season);
/* Another with the same waves, of null amplitudes. */
fescue_status season_alike(fescue_context *context, const struct season *from, struct season *season);
/* Learns the amplitudes from the seen cells. */
fescue_status season_fit(fescue_context *context, const struct cells *cells, struct season *season);
double season_at(const struct season *season, uint32_t row, uint32_t column); /* 0 where there is none */
/* New store of the same pattern without the season: cells_alike. */
fescue_status season_remove(fescue_context *context, const struct cells *cells, const struct season *season,
                            struct cells *rest);
void season_free(fescue_context *context, struct season *season);
/* Periods, in steps, among the candidates that stand out of the mean of all series, in their order, to the front of
   `period`; *found of them (season_find.c). */
fescue_status season_find(fescue_context *context, const struct cells *cells, const struct time_axis *axis,
                          double *period, size_t candidates, size_t *found);

/* How strongly columns that are near one another are drawn together: of a loading's precision, the share of its
   neighbours, strengths summing to one, over that of its own (0: not at all). */
struct near_part {
    bool is_there;
    double components, effect; /* of the components, in the mean by their size; of the columns' effects */
};

/* The whole of what was learnt, in the table's units (scale is already in the spectrum). */
struct model {
    uint32_t rows, columns;
    struct offsets offsets;
    struct low_rank low_rank;
    struct time_part time;
    struct season season;
    struct near_part near;
    struct fescue_range bounds;
};
double model_estimate(const struct model *model, uint32_t row, uint32_t column); /* clamped to bounds */
void model_free(fescue_context *context, struct model *model);

#endif
