/* SPDX-License-Identifier: MIT
 *
 * How wrong a fill is: folds, the variance of an error, the announced error, the interval of a cell.
 *
 * The interval of cell (i, j) is estimate +- q sqrt(V_ij) s, where V is the fitted variance at the cell's own leverage
 * and distance in the fit on all cells, s the scale of its sensor, and q the ceil((n+1) level)-th smallest of the n
 * scores |e| / (sqrt(V) s) of the hidden cells, each from a fit that did not see it: cross-conformal prediction with a
 * variance-scaled score (Vovk 2015, "Cross-conformal predictors"; Lei, G'Sell, Rinaldo, Tibshirani, Wasserman 2018,
 * "Distribution-free predictive inference for regression", for the scaling). No shape of the errors is assumed; where
 * it changes with leverage, q does (tilt.c). Where cells have weights, V of each has noise over its own weight in it,
 * and an unseen reading is taken to be as precise as those of its row and column (line_weights.c).
 *
 * Where no folds were run (the fit is exact, nothing was hidden, it would take too long) the error and one half-width
 * for all cells are those that choosing found on its own hidden cells.
 */
#include "judge/judgement.h"

#include <math.h>

const double judge_levels[JUDGE_LEVELS] = {0.5, 0.8, 0.9, 0.95};

static fescue_status scores_rank(fescue_context *context, const struct judged *pool, struct judgement *judgement)
{
    fescue_status status;
    double *scores = NULL;
    TRY(TAKE(context, pool->count, &scores));
    for (uint64_t c = 0; c < pool->count; c++) {
        uint32_t sensor = judgement->sensors_are_rows ? pool->row[c] : pool->column[c];
        double v = variance_at(&judgement->variance, &pool->at[c]);
        scores[c] = v > 0 ? sqrt(pool->square[c] / v) / judgement->scale[sensor] : 0;
    }
    for (size_t l = 0; l < JUDGE_LEVELS; l++)
        judgement->level_quantiles[l] = score_quantile(scores, pool->count, judge_levels[l]);
    TRY(tilt_fit(context, pool, scores, judgement));
    judgement->quantile = score_quantile(scores, pool->count, judgement->level);
done:
    GIVE(context, &scores);
    return status;
}

/* Without folds. */
static void choice_take(const struct judge_request *request, struct judgement *judgement)
{
    const struct choice *choice = request->choice;
    judgement->halfwidth = choice->halfwidth;
    judgement->judged = choice->errors.count;
    if (choice->errors.count == 0)
        return;
    judgement->rmse = choice->errors.rmse;
    judgement->mae = choice->errors.mae;
}

static double width_at(const void *widths, uint64_t k)
{
    return ((const double *)widths)[k];
}

/* How wide intervals are over the unseen cells. */
static fescue_status halfwidths_rank(fescue_context *context, const struct judged *cells, struct judgement *judgement)
{
    fescue_status status;
    double *widths = NULL;
    TRY(TAKE(context, cells->count, &widths));
    for (uint64_t c = 0; c < cells->count; c++) {
        uint32_t sensor = judgement->sensors_are_rows ? cells->row[c] : cells->column[c];
        double v = variance_at(&judgement->variance, &cells->at[c]);
        widths[c] = judgement->quantile * tilt_at(judgement, &cells->at[c]) * sqrt(v) * judgement->scale[sensor];
    }
    judgement->halfwidth_low = order_pick(width_at, widths, cells->count, cells->count / 10);
    judgement->halfwidth_median = order_pick(width_at, widths, cells->count, cells->count / 2);
    judgement->halfwidth_high = order_pick(width_at, widths, cells->count, cells->count - 1 - cells->count / 10);
done:
    GIVE(context, &widths);
    return status;
}

/* Where holes are gaps, those of the hidden cells that lay in gaps; scattered ones come first. */
static struct judged speaking_find(const struct judge_request *request, const struct judged *pool)
{
    enum { ENOUGH = 1000 };
    uint64_t first = 0;
    while (first < pool->count && !(pool->at[first].marks & STANDING_SHAPED))
        first++;
    if (request->shape->shape != FESCUE_HOLDOUT_GAPS || pool->count - first < ENOUGH)
        first = 0;
    return (struct judged){.count = pool->count - first,
                           .row = pool->row + first,
                           .column = pool->column + first,
                           .square = pool->square + first,
                           .at = pool->at + first};
}

static fescue_status pool_judge(fescue_context *context, const struct judge_request *request, const struct judged *pool,
                                struct judgement *judgement)
{
    fescue_status status;
    struct judged missing = {0}, speaking = speaking_find(request, pool);
    bool is_of_gaps = judgement->tracks != NULL && request->shape->shape == FESCUE_HOLDOUT_GAPS &&
                      (speaking.at[0].marks & STANDING_SHAPED);
    double noise, lambda;
    TRY(relearn_all(context, request, &noise, &lambda));
    TRY(leverage_create(context, request->cells, request->model, noise, lambda, &judgement->leverage));
    TRY(variance_fit(context, &speaking, judgement->tracks != NULL, is_of_gaps, &judgement->variance));
    TRY(scales_fit(context, pool, judgement->tracks, judgement));
    TRY(scores_rank(context, &speaking, judgement));
    TRY(line_weights_find(context, request->cells, &judgement->weights));
    TRY(judged_missing(context, request->cells, &judgement->weights, (uint64_t)request->options->seed, &missing));
    struct judged_view view = {&judgement->leverage, judgement->tracks, judgement->sensors_are_rows};
    judged_measure(context, &view, 0, &missing);
    /* With nothing missing the hidden cells speak for themselves. */
    TRY(announce(context, pool, &speaking, missing.count > 0 ? &missing : pool, request, judgement));
    judgement->is_judged = true;
    judgement->judged = pool->count;
    TRY(halfwidths_rank(context, missing.count > 0 ? &missing : pool, judgement));
done:
    judged_free(context, &missing);
    return status;
}

fescue_status judge_run(fescue_context *context, const struct judge_request *request, struct judgement *judgement)
{
    enum { POOL_LEAST = 20 };
    fescue_status status = FESCUE_OK;
    struct judged pool = {0};
    const struct cells *cells = request->cells;
    *judgement = (struct judgement){.rmse = NAN, .mae = NAN, .rmse_low = NAN, .rmse_high = NAN};
    judgement->scattered_rmse = judgement->shaped_rmse = NAN;
    judgement->by_leverage = judgement->by_distance = judgement->by_variance = NAN;
    judgement->halfwidth = judgement->halfwidth_low = judgement->halfwidth_median = judgement->halfwidth_high = NAN;
    judgement->level = request->options->interval;
    judgement->missing = (uint64_t)cells->rows * cells->columns - cells->count;
    judgement->sensors_are_rows = request->order != NULL ? request->order->along_columns : cells->rows < cells->columns;
    choice_take(request, judgement);
    if (request->options->holdout <= 0 || request->options->folds == 0 || request->is_exact || cells->count == 0)
        return FESCUE_OK;
    if (request->order != NULL) {
        TRY(TAKE(context, 1, &judgement->tracks));
        TRY(tracks_create(context, cells, request->order, judgement->tracks));
    }
    TRY(folds_run(context, request, judgement, &pool));
    if (pool.count >= POOL_LEAST)
        TRY(pool_judge(context, request, &pool, judgement));
done:
    judged_free(context, &pool);
    if (status != FESCUE_OK)
        judgement_free(context, judgement);
    return status;
}

void judgement_free(fescue_context *context, struct judgement *judgement)
{
    leverage_free(context, &judgement->leverage);
    if (judgement->tracks != NULL)
        tracks_free(context, judgement->tracks);
    GIVE(context, &judgement->tracks);
    GIVE(context, &judgement->scale);
    line_weights_free(context, &judgement->weights);
}

double judgement_halfwidth(const struct judgement *judgement, uint32_t row, uint32_t column)
{
    if (!judgement->is_judged)
        return judgement->halfwidth;
    const struct judged_view view = {&judgement->leverage, judgement->tracks, judgement->sensors_are_rows};
    struct standing at = {.weight = (float)line_weights_at(&judgement->weights, row, column)};
    standing_find(&view, row, column, &at);
    return judgement->quantile * tilt_at(judgement, &at) * sqrt(variance_at(&judgement->variance, &at)) *
           judgement->scale[judgement->sensors_are_rows ? row : column];
}
