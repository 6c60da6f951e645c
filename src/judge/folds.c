/* SPDX-License-Identifier: MIT
 *
 * Folds: part of the seen cells is hidden, the choice is learnt again from the rest, and the errors on what was hidden
 * are collected with what they depend on, as it was in that fold: leverage from the fold's own systems, distance to the
 * nearest cell that the fold still saw.
 *
 * Scattered folds come first, then folds in the shape of the holes. Left to the program, there are as many scattered
 * ones as bring `cells_wanted` errors together (the relative error of an RMSE over as many normal ones is one in a
 * hundred) and eight shaped ones, since stretches of one sensor count for little more than one cell each. Both are cut
 * where learning again takes long; where even a few are too many, the errors that choosing left have to do. A fold
 * learns from nothing (cold) where at least half of the shaped ones can: from the fit on all cells (warm) it is several
 * times quicker, but components that hang together over long gaps keep something of what is hidden.
 *
 * A large table has one scattered fold, or none that can be afforded, and the choice has learnt and been judged by one
 * already, from nothing: where its hold-out is handed in, that is the fold. The few fits among which it chose differ by
 * far more than the mean over so many hidden cells does by chance.
 *
 * The folds run one after another and their fits are parallel inside, so the bits do not depend on the number of
 * workers.
 */
#include "judge/judgement.h"

#include <math.h>

static const double cells_wanted = 5000;
enum { FOLDS_MOST = 5, SHAPED_MOST = 8, SHAPED_COLD = 4, COLD_ROUNDS = 100, WARM_ROUNDS = 25, START_SIZE = 23 };
/* Multiplications for all folds: some tens of seconds of one processor. */
static const double work_most = 6e10, cold_most = 4e10;
/* Following time takes about as much again for the series, and more for the steps. */
static const double time_work = 3;

/* Multiplications of one fold. */
static double fold_work(const struct judge_request *request, bool is_warm)
{
    const struct cells *cells = request->cells;
    bool is_learnt = request->choice->is_learnt;
    double size = is_learnt && !is_warm ? START_SIZE : (double)request->model->low_rank.rank + 3;
    double lines = (double)cells->rows + (double)cells->columns, rounds = is_warm ? WARM_ROUNDS : COLD_ROUNDS;
    double cell = is_learnt ? size * size : 4 * size;
    double follows = is_learnt && request->choice->learnt.time != NULL ? time_work : 1;
    return follows * rounds * ((double)cells->count * cell + (is_learnt ? lines * size * size * size / 2 : 0));
}

static void folds_plan(const struct judge_request *request, struct judgement *judgement)
{
    const struct fescue_options *options = request->options;
    bool is_auto = options->folds == FESCUE_AUTO, is_shaped = request->shape->shape != FESCUE_HOLDOUT_CELLS;
    double hidden = fmax(1, options->holdout * (double)request->cells->count);
    double scattered = is_auto ? fmin(FOLDS_MOST, ceil(cells_wanted / hidden)) : (double)options->folds;
    double shaped = !is_shaped ? 0 : is_auto ? SHAPED_MOST : (double)options->folds;
    double cold = floor(cold_most / fold_work(request, false));
    judgement->is_warm = scattered + (is_auto ? fmin(shaped, SHAPED_COLD) : shaped) > cold;
    if (is_auto && !judgement->is_warm)
        shaped = fmin(shaped, cold - scattered);
    double affordable = floor(work_most / fold_work(request, judgement->is_warm));
    if (is_auto && scattered + shaped > affordable) {
        scattered = fmin(scattered, fmax(affordable >= 1, floor(affordable / (is_shaped ? 3 : 1))));
        shaped = fmin(shaped, affordable - scattered);
    }
    judgement->scattered_folds = (uint32_t)scattered;
    judgement->shaped_folds = (uint32_t)fmax(0, shaped);
}

/* The hidden cells and their errors, at the end of the pool. */
static fescue_status hidden_collect(fescue_context *context, const struct cells *hidden, const struct model *model,
                                    unsigned marks, struct judged *pool)
{
    fescue_status status;
    double *residuals = NULL;
    struct errors errors;
    TRY(judged_grow(context, hidden->count, pool));
    TRY(TAKE(context, hidden->count, &residuals));
    TRY(errors_measure(context, hidden, model, residuals, &errors));
    for (uint32_t row = 0; row < hidden->rows; row++)
        for (uint64_t k = hidden->by_row.start[row]; k < hidden->by_row.start[row + 1]; k++) {
            pool->row[pool->count] = row;
            pool->column[pool->count] = hidden->by_row.across[k];
            pool->square[pool->count] = residuals[k] * residuals[k];
            float weight = hidden->by_row.weight != NULL ? hidden->by_row.weight[k] : 1;
            pool->at[pool->count++] = (struct standing){.weight = weight, .marks = marks};
        }
done:
    GIVE(context, &residuals);
    return status;
}

/* What a season leaves of a fold, learnt from the cells that the fold keeps: the hidden ones have no part in it. New in
 *rest, which shares the pattern of *holdout. */
static fescue_status season_again(fescue_context *context, const struct season *of_all, const struct holdout *holdout,
                                  struct holdout *rest)
{
    fescue_status status;
    struct season season = {0};
    TRY(season_alike(context, of_all, &season));
    TRY(season_fit(context, &holdout->kept, &season));
    TRY(season_remove(context, &holdout->kept, &season, &rest->kept));
    TRY(season_remove(context, &holdout->hidden, &season, &rest->hidden));
done:
    season_free(context, &season);
    return status;
}

static fescue_status fold_judge(fescue_context *context, const struct judge_request *request,
                                const struct holdout_request *asked, struct judgement *judgement, struct judged *pool)
{
    fescue_status status;
    struct holdout holdout = {0}, rest = {0}, *fold = &holdout;
    struct relearnt learnt = {0};
    struct leverage leverage = {0};
    struct tracks tracks = {0};
    uint64_t from = pool->count;
    unsigned marks = asked->shape == FESCUE_HOLDOUT_CELLS ? 0 : STANDING_SHAPED;
    TRY(holdout_cut(context, request->season != NULL ? request->whole : request->cells, asked, &holdout));
    if (request->season != NULL) {
        TRY(season_again(context, request->season, &holdout, &rest));
        fold = &rest;
    }
    TRY(relearn(context, &fold->kept, request, judgement->is_warm, &learnt));
    TRY(leverage_create(context, &fold->kept, &learnt.model, learnt.noise, learnt.lambda, &leverage));
    struct judged_view view = {&leverage, NULL, judgement->sensors_are_rows};
    if (judgement->tracks != NULL) {
        TRY(tracks_create(context, &fold->kept, request->order, &tracks));
        view.tracks = &tracks;
    }
    TRY(hidden_collect(context, &fold->hidden, &learnt.model, marks, pool));
    judged_measure(context, &view, from, pool);
done:
    tracks_free(context, &tracks);
    leverage_free(context, &leverage);
    relearnt_free(context, &learnt);
    holdout_free(context, &rest);
    holdout_free(context, &holdout);
    return status;
}

/* The fit that choosing ended with, on the cells that it was judged by. */
static fescue_status held_judge(fescue_context *context, const struct judge_request *request,
                                const struct judgement *judgement, struct judged *pool)
{
    fescue_status status;
    const struct holdout *held = request->held;
    const struct choice *choice = request->choice;
    struct leverage leverage = {0};
    struct model model = {.rows = held->kept.rows,
                          .columns = held->kept.columns,
                          .offsets = choice->beside,
                          .low_rank = choice->start,
                          .bounds = request->options->bounds};
    const struct judged_view view = {&leverage, NULL, judgement->sensors_are_rows};
    TRY(leverage_create(context, &held->kept, &model, choice->noise, NAN, &leverage));
    TRY(hidden_collect(context, &held->hidden, &model, 0, pool));
    judged_measure(context, &view, 0, pool);
done:
    leverage_free(context, &leverage);
    return status;
}

fescue_status folds_run(fescue_context *context, const struct judge_request *request, struct judgement *judgement,
                        struct judged *pool)
{
    fescue_status status = FESCUE_OK;
    uint32_t scattered, all;
    folds_plan(request, judgement);
    scattered = judgement->scattered_folds;
    all = scattered + judgement->shaped_folds;
    judgement->scattered_folds = judgement->shaped_folds = 0;
    if (request->held != NULL && scattered <= 1 && all == scattered && judgement->tracks == NULL) {
        judgement->scattered_folds = 1;
        judgement->is_warm = false;
        return held_judge(context, request, judgement, pool);
    }
    for (uint32_t f = 0; f < all && status == FESCUE_OK; f++) {
        bool is_scattered = f < scattered;
        struct holdout_request asked = {.shape = is_scattered ? FESCUE_HOLDOUT_CELLS : request->shape->shape,
                                        .share = request->options->holdout,
                                        .seed = (uint64_t)request->options->seed,
                                        .fold = f + 1,
                                        .order = request->order};
        judgement->is_cut = request->deadline > 0 && clock_wall() >= request->deadline;
        if (judgement->is_cut)
            break;
        status = progress_tell(context, "judging", (double)f / all);
        if (status == FESCUE_OK)
            status = fold_judge(context, request, &asked, judgement, pool);
        judgement->scattered_folds += status == FESCUE_OK && is_scattered;
        judgement->shaped_folds += status == FESCUE_OK && !is_scattered;
    }
    if (status == FESCUE_STOPPED) {
        judgement->is_cut = true;
        return FESCUE_OK;
    }
    return status;
}
