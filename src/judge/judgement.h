/* SPDX-License-Identifier: MIT
 *
 * The inside of a judgement: what a fit on part of the cells says of the rest.
 *
 *   relearn      the chosen model learnt again from other cells
 *   leverage     how far an estimate leans on few cells
 *   line_weights how precise a reading of an unseen cell would be
 *   standing     what the error of a cell depends on
 *   judged       a list of cells with that
 *   folds        hiding, learning again, collecting errors
 *   variance     the squared error as a function of leverage and distance
 *   tilt         scores whose shape changes with leverage
 *   announce     the error over the cells that are really missing, with its band
 *   judgement    all together, and the interval of a cell
 */
#ifndef FESCUE_JUDGE_JUDGEMENT_H
#define FESCUE_JUDGE_JUDGEMENT_H

#include "judge/tracks.h"

/* ---- learning again ---------------------------------------------------------------------------------------------- */

/* Variance of the noise from what a fit leaves of its own cells, with the numbers it has taken from them. */
fescue_status noise_measure(fescue_context *context, const struct cells *cells, const struct model *model,
                            double *noise);
/* What was learnt, and what shrinks it: noise is a variance in the table's units. */
struct relearnt {
    struct model model; /* owned */
    double noise;
    double lambda; /* of the ridge on the components, in cells; NAN: learnt, a ridge a component */
};
/* The chosen offsets, rank and ridge learnt from `cells`. is_warm: from the model of all cells, whatever it saw; else
   from nothing. */
fescue_status relearn(fescue_context *context, const struct cells *cells, const struct judge_request *request,
                      bool is_warm, struct relearnt *out);
/* The same two of the model of all cells. */
fescue_status relearn_all(fescue_context *context, const struct judge_request *request, double *noise, double *lambda);
void relearnt_free(fescue_context *context, struct relearnt *relearnt);

/* ---- weights ----------------------------------------------------------------------------------------------------- */

fescue_status line_weights_find(fescue_context *context, const struct cells *cells, struct line_weights *weights);
/* Of a reading in row and column; 1 where cells have no weights. */
double line_weights_at(const struct line_weights *weights, uint32_t row, uint32_t column);
void line_weights_free(fescue_context *context, struct line_weights *weights);

/* ---- judged cells ------------------------------------------------------------------------------------------------ */

/* What the error of a cell depends on. */
enum standing_mark {
    STANDING_ONE_SIDED = 1, /* its sensor was not seen before, or not after */
    STANDING_DARK = 2,      /* nothing was seen at its place */
    STANDING_SHAPED = 4     /* hidden in the shape of the holes; else scattered */
};
struct standing {
    float leverage, own; /* whole, and the part of the sensor's coefficients */
    float distance;      /* steps to the nearest seen cell of its sensor; 0 where nothing is known of any */
    float weight;        /* of its reading: its noise has the variance of one of weight one over this */
    unsigned marks;
};
/* Cells and how they stand; square is of the error, 0 where it is not known. */
struct judged {
    uint64_t count, capacity;
    uint32_t *row, *column;
    double *square;
    struct standing *at;
};
fescue_status judged_grow(fescue_context *context, uint64_t count, struct judged *judged);
void judged_free(fescue_context *context, struct judged *judged);
/* How a cell stands to the cells that leverage and tracks were made of, but for its weight; marks are added to. tracks
   may be NULL: no distance. */
struct judged_view {
    const struct leverage *leverage;
    const struct tracks *tracks;
    bool sensors_are_rows;
};
void standing_find(const struct judged_view *view, uint32_t row, uint32_t column, struct standing *standing);
/* The same of the cells from `from` on. */
void judged_measure(fescue_context *context, const struct judged_view *view, uint64_t from, struct judged *judged);
/* The unseen cells, or as many drawn at random where there are very many. */
fescue_status judged_missing(fescue_context *context, const struct cells *cells, const struct line_weights *weights,
                             uint64_t seed, struct judged *judged);

/* Hides, learns again and collects, fold by fold. */
fescue_status folds_run(fescue_context *context, const struct judge_request *request, struct judgement *judgement,
                        struct judged *pool);

/* ---- variance and error ------------------------------------------------------------------------------------------ */

fescue_status variance_fit(fescue_context *context, const struct judged *pool, bool has_distance, bool is_of_gaps,
                           struct variance *variance);
double variance_at(const struct variance *variance, const struct standing *at);
/* The scale of each sensor's errors, shrunk towards 1. */
fescue_status scales_fit(fescue_context *context, const struct judged *pool, const struct tracks *tracks,
                         struct judgement *judgement);

/* How the quantile of the scores changes with the noise's share of the variance, and takes it out of the scores
 * (tilt.c). */
fescue_status tilt_fit(fescue_context *context, const struct judged *pool, double *scores, struct judgement *judgement);
double tilt_at(const struct judgement *judgement, const struct standing *at);
/* The ceil((n+1) level)-th smallest of the scores; infinite when there are too few. */
double score_quantile(const double *scores, uint64_t count, double level);

/* pool: all hidden cells; speaking: those of them that V was fitted to. */
fescue_status announce(fescue_context *context, const struct judged *pool, const struct judged *speaking,
                       const struct judged *missing, const struct judge_request *request, struct judgement *judgement);

#endif
