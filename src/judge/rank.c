/* SPDX-License-Identifier: MIT
 *
 * Rank and ridge by cross-validation (Stone 1974, "Cross-validatory choice and assessment of statistical predictions").
 *
 * The observed cells are hidden in K folds (in the shape of the holes; scattered ones hide each cell once). For each
 * kind of offsets that competes all folds walk one path over ranks side by side: rank r starts from the best fit at
 * r - 1, to which the leading singular pair of its residual is appended; its ridge is searched on a ladder that does
 * not depend on units (choose_ridge), from the rung of the rank before, all folds at the same rung, as long as their
 * pooled error falls; a rank that brings nothing is challenged from the spectral start. The path ends when no rank has
 * been best for 3 + r/4 ranks, r the best so far, or when a fit without ridge meets the hidden cells of all folds.
 *
 *     e_k(r)   mean squared error over the hidden cells of fold k, at the best ridge of rank r
 *     b        the rank whose pooled error E(b) is least
 *     d_k(r)   e_k(r) - e_k(b), with mean d(r) and standard error s(r) = sd(d_k) / sqrt(K)
 *
 * The standard errors are those of paired differences: the noise of the hidden cells is in both terms, and falls out.
 * The smallest rank is chosen that is no worse than the best by more than one standard error, d(r) <= s(r), nor by more
 * than `loss_most` (Breiman, Friedman, Olshen, Stone 1984, "Classification and regression trees", section 3.4.3, with
 * paired differences); a loss below `loss_least` counts as none. Over rank 0 it takes two standard errors: that a table
 * has low-rank structure at all asks for firmer ground.
 *
 * Two kinds of offsets compete where they are left open, none and both ways; two-way effects count as one component
 * more, and the point with more components has to win by two standard errors. Offsets that explain nothing on their own
 * are not followed. The evidence fit, which learns rank and shrinkage from the kept cells alone, competes as one line.
 *
 * Where cells have weights, squared errors are weighted by them, and the fit at each rank is the evidence fit with so
 * many components at most, which learns its shrinkage: no other takes weights. With a time axis, interpolation in time
 * is one line more.
 *
 * Folds run in parallel (rank_fold); the sums over them are in their order. Cost: K times some three or four loose fits
 * a rank and kind.
 */
#include "judge/rank_internal.h"

#include <math.h>

enum { STANDARD_FOLDS = 5, LEAST_FOLDS = 2 };
static const double gain_worth = 1e-4;                     /* relative; below it another fit is not worth its time */
static const double loss_least = 0.005, loss_most = 0.015; /* of the RMSE */

struct cross {
    struct rank_folds folds;
    const struct ranking_request *request;
    size_t kinds, rank_most;
    bool is_late, is_ended, is_weighted;
};

static fescue_status stage_run(struct cross *cross, enum stage stage, size_t number)
{
    struct stage_request request = {.stage = stage, .kind = number, .rung = number};
    return rank_folds_run(&cross->folds, request);
}

static bool is_late(struct cross *cross)
{
    cross->is_late = cross->is_late || (cross->request->deadline > 0 && clock_wall() >= cross->request->deadline);
    return cross->is_late;
}

/* ---- points --------------------------------------------------------------------------------------------------------
 */

struct curve {
    struct ranking_point *point;
    uint64_t count, best;
};

static fescue_status point_make(const struct cross *cross, rank_fold_candidate *of, struct ranking_point *point)
{
    const struct rank_folds *folds = &cross->folds;
    const struct candidate *first = of(&folds->fold[0]);
    fescue_status status = TAKE(folds->context, folds->count, &point->fold);
    if (status != FESCUE_OK)
        return status;
    point->offsets = first->offsets.kind;
    point->rank = point->rank_least = point->rank_greatest = (uint32_t)first->point.rank;
    point->ridge = first->ridge;
    point->rmse = sqrt(rank_folds_error(folds, of));
    point->is_exact = true;
    for (uint32_t k = 0; k < folds->count; k++) {
        const struct candidate *candidate = of(&folds->fold[k]);
        uint32_t rank = (uint32_t)candidate->point.rank;
        point->fold[k] = candidate->errors.rmse * candidate->errors.rmse;
        point->is_exact = point->is_exact && candidate->is_exact;
        point->rank_least = rank < point->rank_least ? rank : point->rank_least;
        point->rank_greatest = rank > point->rank_greatest ? rank : point->rank_greatest;
    }
    return status;
}

/* Of the squared errors of a over those of b: mean of the folds' differences and its standard error. */
static void points_compare(const struct cross *cross, const struct ranking_point *a, const struct ranking_point *b,
                           double *mean, double *error)
{
    double count = cross->folds.count, spread = 0;
    *mean = 0;
    for (uint32_t k = 0; k < cross->folds.count; k++)
        *mean += (a->fold[k] - b->fold[k]) / count;
    for (uint32_t k = 0; k < cross->folds.count; k++) {
        double away = a->fold[k] - b->fold[k] - *mean;
        spread += away * away;
    }
    *error = sqrt(spread / (count - 1) / count);
}

/* Whether b is better than a by more than so many standard errors, or by more than `loss_most`; a loss below
   `loss_least` counts as none. */
static bool is_worse(const struct cross *cross, const struct ranking_point *a, const struct ranking_point *b,
                     double errors)
{
    double mean, error;
    if (a->is_exact || b->is_exact)
        return b->is_exact && !a->is_exact;
    if (!isfinite(a->rmse) || a->rmse <= b->rmse * (1 + loss_least))
        return !isfinite(a->rmse);
    points_compare(cross, a, b, &mean, &error);
    return mean > errors * error || (errors <= 1 && a->rmse > b->rmse * (1 + loss_most));
}

static void curve_free(fescue_context *context, struct curve *curve)
{
    for (uint64_t k = 0; curve->point != NULL && k < curve->count; k++)
        GIVE(context, &curve->point[k].fold);
    GIVE(context, &curve->point);
}

/* ---- the path ------------------------------------------------------------------------------------------------------
 */

/* All folds under this rung; whether their pooled error gains, and then they stay there. */
static fescue_status rung_try(struct cross *cross, size_t rung, double *error, bool *gained)
{
    fescue_status status;
    TRY(stage_run(cross, STAGE_RUNG, rung));
    double trial = rank_folds_error(&cross->folds, rank_fold_trial);
    *gained = isfinite(trial) && !(trial >= *error * (1 - gain_worth) * (1 - gain_worth));
    if (*gained) {
        *error = trial;
        TRY(stage_run(cross, STAGE_TAKE, 0));
    }
done:
    return status;
}

/* Down the ladder while that gains; after a first gain none at all is tried; up when down did not gain. */
static fescue_status ridge_find(struct cross *cross, double *error)
{
    fescue_status status = FESCUE_OK;
    const struct candidate *current = &cross->folds.fold[0].current;
    size_t last = ridge_rungs() - 1, moves = 0;
    bool gained = true;
    while (gained && current->rung < last && !is_late(cross)) {
        TRY(rung_try(cross, current->rung + 1, error, &gained));
        if (gained && ++moves == 1 && current->rung < last) {
            bool none_gained;
            TRY(rung_try(cross, last, error, &none_gained));
        }
    }
    for (gained = moves == 0; gained && current->rung > 0 && !is_late(cross);)
        TRY(rung_try(cross, current->rung - 1, error, &gained));
done:
    return status;
}

/* The next rank of a path over offsets of kind number `kind`, at its best ridge. */
static fescue_status rank_next(struct cross *cross, size_t kind, const struct curve *curve)
{
    fescue_status status;
    double best_error = curve->point[curve->best].rmse * curve->point[curve->best].rmse;
    if (cross->is_weighted) {
        struct stage_request request = {.stage = STAGE_REACH, .kind = kind, .rung = curve->count};
        return rank_folds_run(&cross->folds, request);
    }
    TRY(stage_run(cross, STAGE_GROW, 0));
    double error = rank_folds_error(&cross->folds, rank_fold_current);
    TRY(ridge_find(cross, &error));
    if (!(error < best_error * (1 - gain_worth)) && !is_late(cross))
        TRY(stage_run(cross, STAGE_CHALLENGE, 0));
    TRY(stage_run(cross, STAGE_EXACT, 0));
done:
    return status;
}

static fescue_status curve_add(struct cross *cross, struct curve *curve)
{
    fescue_status status;
    struct ranking_point *point = &curve->point[curve->count];
    TRY(point_make(cross, rank_fold_current, point));
    point->rank = point->rank_least = point->rank_greatest = (uint32_t)curve->count++;
    const struct ranking_point *last = &curve->point[curve->count - 1], *best = &curve->point[curve->best];
    bool gains = last->rmse < best->rmse * (1 - gain_worth) || (last->is_exact && !best->is_exact);
    if (gains)
        curve->best = curve->count - 1;
done:
    return status;
}

static fescue_status path_follow(struct cross *cross, size_t kind, struct curve *curve)
{
    fescue_status status;
    TRY(TAKE(cross->folds.context, cross->rank_most + 1, &curve->point));
    TRY(stage_run(cross, STAGE_BEGIN, kind));
    TRY(curve_add(cross, curve));
    cross->is_ended = false;
    while (curve->count <= cross->rank_most && !cross->is_ended && !is_late(cross)) {
        TRY(rank_next(cross, kind, curve));
        TRY(curve_add(cross, curve));
        cross->is_ended =
            curve->point[curve->count - 1].is_exact || curve->count - 1 - curve->best >= 3 + curve->best / 4;
    }
done:
    return status;
}

/* The smallest rank that is no worse than the best. */
static uint64_t curve_choose(const struct cross *cross, const struct curve *curve)
{
    const struct ranking_point *best = &curve->point[curve->best];
    uint64_t chosen = 0;
    while (chosen < curve->best && is_worse(cross, &curve->point[chosen], best, chosen == 0 ? 2 : 1))
        chosen++;
    return chosen;
}

/* ---- the kinds of offsets ------------------------------------------------------------------------------------------
 */

static fescue_status kinds_open(struct cross *cross)
{
    fescue_status status = FESCUE_OK;
    static const enum fescue_offsets rivals[RANK_KINDS] = {FESCUE_OFFSETS_BOTH, FESCUE_OFFSETS_NONE};
    enum fescue_offsets given = (enum fescue_offsets)cross->request->options->offsets;
    cross->kinds = given == FESCUE_OFFSETS_AUTO ? RANK_KINDS : 1;
    for (size_t kind = 0; kind < cross->kinds; kind++) {
        struct stage_request request = {
            .stage = STAGE_ALONE, .kind = kind, .offsets = cross->kinds == 1 ? given : rivals[kind]};
        TRY(rank_folds_run(&cross->folds, request));
    }
done:
    return status;
}

static size_t components(const struct ranking_point *point)
{
    return point->rank + (point->offsets == FESCUE_OFFSETS_BOTH);
}

/* Whether `next`, without offsets, takes the place of `now`, with them. Rank 0 without offsets says 0 everywhere, which
   nobody takes for an answer. */
static bool takes_place(const struct cross *cross, const struct ranking_point *next, const struct ranking_point *now)
{
    if (next->rank == 0)
        return false;
    if (components(next) < components(now))
        return !is_worse(cross, next, now, 2);
    return is_worse(cross, now, next, 2);
}

static void curve_hand_over(struct curve *curve, uint64_t chosen, struct ranking *ranking)
{
    ranking->point = curve->point;
    ranking->count = curve->count;
    ranking->best = curve->best;
    ranking->chosen = chosen;
    *curve = (struct curve){0};
}

/* The other kind's point, which is told in one line. */
static void rival_keep(struct curve *curve, uint64_t chosen, struct ranking *ranking)
{
    ranking->rival = curve->point[chosen];
    curve->point[chosen].fold = NULL;
}

static fescue_status kinds_compete(struct cross *cross, struct ranking *ranking)
{
    fescue_status status;
    fescue_context *context = cross->folds.context;
    struct curve curve = {0}, other = {0};
    TRY(path_follow(cross, 0, &curve));
    uint64_t chosen = curve_choose(cross, &curve), rival = 0;
    ranking->is_ended = cross->is_ended;
    if (cross->kinds > 1 && !is_late(cross)) {
        TRY(path_follow(cross, 1, &other));
        rival = curve_choose(cross, &other);
        if (takes_place(cross, &other.point[rival], &curve.point[chosen])) {
            struct curve kept = curve;
            uint64_t place = chosen;
            curve = other;
            other = kept;
            chosen = rival;
            rival = place;
            ranking->is_ended = cross->is_ended;
        }
        rival_keep(&other, rival, ranking);
    }
    curve_hand_over(&curve, chosen, ranking);
done:
    curve_free(context, &curve);
    curve_free(context, &other);
    return status;
}

/* ---- the whole -----------------------------------------------------------------------------------------------------
 */

static fescue_status learnt_add(struct cross *cross, struct ranking *ranking)
{
    fescue_status status = FESCUE_OK;
    if (is_late(cross) || cross->rank_most == 0 || !evidence_is_meant(&cross->folds.fold[0].chooser))
        goto done;
    TRY(stage_run(cross, STAGE_LEARN, cross->kinds));
    TRY(point_make(cross, rank_fold_learnt, &ranking->learnt));
done:
    return status;
}

static fescue_status interpolation_add(struct cross *cross, struct ranking *ranking)
{
    fescue_status status = FESCUE_OK;
    const struct rank_folds *folds = &cross->folds;
    struct ranking_point *point = &ranking->interpolation;
    double sum = 0;
    if (folds->fold[0].interpolation.count == 0)
        goto done;
    TRY(TAKE(folds->context, folds->count, &point->fold));
    for (uint32_t k = 0; k < folds->count; k++) {
        const struct errors *errors = &folds->fold[k].interpolation;
        point->fold[k] = errors->rmse * errors->rmse;
        sum += point->fold[k] * (double)errors->count;
    }
    point->offsets = FESCUE_OFFSETS_NONE;
    point->rmse = sqrt(sum / (double)folds->hidden);
done:
    return status;
}

static void differences_find(const struct cross *cross, struct ranking *ranking)
{
    const struct ranking_point *best = &ranking->point[ranking->best];
    struct ranking_point *beside[] = {&ranking->learnt, &ranking->rival, &ranking->interpolation};
    for (uint64_t k = 0; k < ranking->count; k++)
        points_compare(cross, &ranking->point[k], best, &ranking->point[k].worse, &ranking->point[k].worse_error);
    for (size_t k = 0; k < sizeof beside / sizeof beside[0]; k++)
        if (beside[k]->fold != NULL)
            points_compare(cross, beside[k], best, &beside[k]->worse, &beside[k]->worse_error);
}

static fescue_status folds_plan(struct cross *cross, fescue_context *context, const struct cells *cells,
                                struct ranking *ranking)
{
    fescue_status status;
    const struct ranking_request *request = cross->request;
    const struct fescue_options *options = request->options;
    const struct time_axis *time = request->time;
    bool has_clock = time != NULL && time->along != TIME_NONE;
    struct line_order order = {.along_columns = has_clock && time->along == TIME_COLUMNS};
    if (has_clock) {
        order.at = time->at;
        order.order = time->order;
    }
    enum fescue_holdout_shape shape = (enum fescue_holdout_shape)options->holdout_shape;
    TRY(hole_shape_find(context, cells, has_clock ? &order : NULL, &ranking->shape));
    if (!has_clock)
        order.along_columns = ranking->shape.along_columns;
    if (shape != FESCUE_HOLDOUT_AUTO)
        ranking->shape = (struct hole_shape){.shape = shape, .along_columns = order.along_columns};
    cross->folds.count = ranking->folds;
    struct holdout_request asked = {.shape = ranking->shape.shape,
                                    .share = 1. / ranking->folds,
                                    .seed = (uint64_t)options->seed,
                                    .is_pooled = true,
                                    .order = &order};
    TRY(rank_folds_open(context, cells, request, &asked, &cross->folds));
    ranking->hidden = cross->folds.hidden;
    cross->rank_most = (size_t)options->rank_most;
    for (uint32_t k = 0; k < ranking->folds; k++) {
        size_t most = chooser_rank_most(&cross->folds.fold[k].chooser);
        cross->rank_most = most < cross->rank_most ? most : cross->rank_most;
    }
done:
    return status;
}

fescue_status ranking_run(fescue_context *context, const struct cells *cells, const struct ranking_request *request,
                          struct ranking *ranking)
{
    fescue_status status = FESCUE_OK;
    int64_t folds = request->options->folds == FESCUE_AUTO ? STANDARD_FOLDS : request->options->folds;
    struct cross cross = {
        .request = request, .folds = {.context = context}, .is_weighted = cells->by_row.weight != NULL};
    *ranking = (struct ranking){.folds = (uint32_t)folds, .is_weighted = cross.is_weighted};
    if (folds < LEAST_FOLDS)
        return FAIL(context, FESCUE_USAGE, "--folds: found %lld, but cross-validation needs at least %d",
                    (long long)folds, LEAST_FOLDS);
    TRY(folds_plan(&cross, context, cells, ranking));
    if (cross.folds.hidden < (uint64_t)folds)
        status = FAIL(context, FESCUE_BAD_DATA, "the table has too few cells for %lld folds", (long long)folds);
    TRY(status);
    TRY(kinds_open(&cross));
    TRY(kinds_compete(&cross, ranking));
    TRY(learnt_add(&cross, ranking));
    TRY(interpolation_add(&cross, ranking));
    differences_find(&cross, ranking);
    ranking->has_structure = ranking->chosen > 0;
    ranking->is_learnt_better =
        ranking->learnt.fold != NULL && is_worse(&cross, &ranking->point[ranking->chosen], &ranking->learnt, 2);
    ranking->is_cut = cross.is_late;
done:
    rank_folds_close(&cross.folds);
    if (status != FESCUE_OK)
        ranking_free(context, ranking);
    return status;
}

void ranking_free(fescue_context *context, struct ranking *ranking)
{
    struct curve curve = {.point = ranking->point, .count = ranking->count};
    curve_free(context, &curve);
    ranking->point = NULL;
    GIVE(context, &ranking->learnt.fold);
    GIVE(context, &ranking->rival.fold);
    GIVE(context, &ranking->interpolation.fold);
}
