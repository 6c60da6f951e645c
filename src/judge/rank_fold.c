/* SPDX-License-Identifier: MIT
 *
 * The folds of a cross-validation, side by side.
 *
 * The parts of the choice (candidate, choose_ridge, choose_path, choose_evidence) fit and judge on one hold-out, with
 * the team of their context. Here every fold has a context of its own with one worker, and the parent's team takes the
 * folds as its blocks: what a fold computes depends on its own cells alone, and not on who computes it, or when. A
 * fold's memory comes from the parent by hooks, so that it is counted and limited there; memory_take is safe from any
 * worker. To stop the parent stops the folds.
 *
 * Stages are short (one fit), and decisions between them are made by the caller from all folds together, so that ridge
 * and end of the path are common to all of them.
 */
#include "judge/rank_internal.h"

#include <math.h>

/* ---- a context within a context ------------------------------------------------------------------------------------
 */

static void *child_take(void *data, size_t size)
{
    void *block = NULL;
    memory_take(data, size, 1, &block);
    return block;
}

static void child_give(void *data, void *block)
{
    memory_give(data, &block);
}

static bool child_goes_on(void *data, const char *stage, double share)
{
    (void)stage;
    (void)share;
    return !is_cancelled(data);
}

static fescue_status child_create(fescue_context *parent, fescue_context **child)
{
    const struct fescue_hooks hooks = {
        .data = parent, .take = child_take, .give = child_give, .progress = child_goes_on};
    fescue_status status = fescue_context_create(&hooks, child);
    if (status != FESCUE_OK)
        return FAIL(parent, status, "%s", fescue_status_text(status));
    return team_resize(*child, 1);
}

/* ---- folds ---------------------------------------------------------------------------------------------------------
 */

static fescue_status fold_open(struct rank_folds *folds, const struct cells *cells,
                               const struct ranking_request *request, struct holdout_request asked, uint32_t number)
{
    fescue_status status;
    struct rank_fold *fold = &folds->fold[number];
    fold->parent = folds->context;
    TRY(child_create(folds->context, &fold->context));
    asked.fold = number + 1;
    TRY(holdout_cut(folds->context, cells, &asked, &fold->holdout));
    bool has_clock = request->time != NULL && request->time->along != TIME_NONE;
    fold->chooser = (struct chooser){.context = fold->context,
                                     .options = request->options,
                                     .solver = solver_at(0),
                                     .time = has_clock ? request->time : NULL,
                                     .learns = cells->by_row.weight != NULL ? CHOOSE_LEARN : CHOOSE_AUTO,
                                     .deadline = request->deadline,
                                     .kept = &fold->holdout.kept,
                                     .hidden = &fold->holdout.hidden};
    TRY(chooser_open(&fold->chooser));
    if (has_clock)
        TRY(interpolation_measure(fold->context, &fold->holdout.kept, &fold->holdout.hidden, request->time,
                                  &fold->interpolation));
    folds->hidden += fold->holdout.hidden.count;
done:
    return status;
}

fescue_status rank_folds_open(fescue_context *context, const struct cells *cells, const struct ranking_request *request,
                              const struct holdout_request *asked, struct rank_folds *folds)
{
    fescue_status status;
    uint32_t count = folds->count;
    *folds = (struct rank_folds){.context = context, .count = count};
    TRY(TAKE(context, count, &folds->fold));
    for (uint32_t k = 0; k < count; k++)
        TRY(fold_open(folds, cells, request, *asked, k));
done:
    return status;
}

static void fold_close(struct rank_fold *fold)
{
    if (fold->context == NULL)
        return;
    for (size_t k = 0; k < RANK_KINDS; k++)
        candidate_free(&fold->chooser, &fold->alone[k]);
    candidate_free(&fold->chooser, &fold->current);
    candidate_free(&fold->chooser, &fold->trial);
    candidate_free(&fold->chooser, &fold->learnt);
    chooser_close(&fold->chooser);
    holdout_free(fold->parent, &fold->holdout);
    fescue_context_destroy(&fold->context);
}

void rank_folds_close(struct rank_folds *folds)
{
    for (uint32_t k = 0; folds->fold != NULL && k < folds->count; k++)
        fold_close(&folds->fold[k]);
    GIVE(folds->context, &folds->fold);
}

/* ---- stages --------------------------------------------------------------------------------------------------------
 */

static struct solve_limits fold_limits(const struct rank_fold *fold, size_t rank)
{
    struct solve_limits limits = chooser_loose_limits(&fold->chooser);
    if (chooser_is_large(&fold->chooser, rank) && limits.iterations > 12)
        limits.iterations = 12;
    return limits;
}

static fescue_status fold_grow(struct rank_fold *fold)
{
    fescue_status status;
    struct solve_limits limits = fold_limits(fold, fold->current.point.rank + 1);
    TRY(path_grow(&fold->chooser, &limits, &fold->current));
    TRY(path_settle(&fold->chooser, &limits, false, &fold->current));
done:
    return status;
}

static fescue_status fold_rung(struct rank_fold *fold, size_t rung)
{
    fescue_status status;
    struct solve_limits limits = fold_limits(fold, fold->current.point.rank);
    TRY(candidate_copy(&fold->chooser, &fold->current, &fold->trial));
    fold->trial.rung = rung;
    TRY(candidate_fit(&fold->chooser, ridge_rung(rung), &limits, &fold->trial));
done:
    return status;
}

static fescue_status fold_learn(struct rank_fold *fold, size_t kinds)
{
    const struct candidate *alone[RANK_KINDS] = {0};
    size_t best;
    for (size_t k = 0; k < kinds; k++)
        alone[k] = &fold->alone[k];
    return evidence_compete(&fold->chooser, alone, kinds, &fold->learnt, &best);
}

static fescue_status fold_stage(struct rank_fold *fold, const struct stage_request *request)
{
    struct solve_limits limits = fold_limits(fold, fold->current.point.rank);
    switch (request->stage) {
    case STAGE_ALONE:
        return candidate_create(&fold->chooser, request->offsets, &fold->alone[request->kind]);
    case STAGE_BEGIN:
        return candidate_copy(&fold->chooser, &fold->alone[request->kind], &fold->current);
    case STAGE_GROW:
        return fold_grow(fold);
    case STAGE_RUNG:
        return fold_rung(fold, request->rung);
    case STAGE_TAKE:
        candidate_swap(&fold->current, &fold->trial);
        return FESCUE_OK;
    case STAGE_CHALLENGE:
        return path_challenge(&fold->chooser, &limits, &fold->current);
    case STAGE_EXACT:
        return path_try_exact(&fold->chooser, &fold->current);
    case STAGE_REACH:
        return evidence_reach(&fold->chooser, &fold->alone[request->kind], request->rung, &fold->current);
    case STAGE_LEARN:
        return fold_learn(fold, request->kind);
    }
    return FESCUE_DEFECT;
}

struct stage_job {
    struct rank_folds *folds;
    struct stage_request request;
};

static void folds_stage(void *data, size_t block, size_t worker)
{
    struct stage_job *job = data;
    struct rank_fold *fold = &job->folds->fold[block];
    (void)worker;
    fold->status = fold_stage(fold, &job->request);
}

fescue_status rank_folds_run(struct rank_folds *folds, struct stage_request request)
{
    fescue_status status;
    struct stage_job job = {folds, request};
    TRY(progress_tell(folds->context, "cross-validating", -1));
    team_run(folds->context, folds->count, folds_stage, &job);
    for (uint32_t k = 0; k < folds->count; k++) {
        const struct rank_fold *fold = &folds->fold[k];
        const char *sentence = fescue_failure_text(fold->context);
        if (fold->status != FESCUE_OK)
            return FAIL(folds->context, fold->status, "%s",
                        sentence[0] != '\0' ? sentence : fescue_status_text(fold->status));
    }
done:
    return status;
}

/* ---- errors --------------------------------------------------------------------------------------------------------
 */

const struct candidate *rank_fold_current(const struct rank_fold *fold)
{
    return &fold->current;
}

const struct candidate *rank_fold_trial(const struct rank_fold *fold)
{
    return &fold->trial;
}

const struct candidate *rank_fold_learnt(const struct rank_fold *fold)
{
    return &fold->learnt;
}

double rank_folds_error(const struct rank_folds *folds, rank_fold_candidate *of)
{
    double sum = 0;
    for (uint32_t k = 0; k < folds->count; k++) {
        const struct candidate *candidate = of(&folds->fold[k]);
        sum += candidate->errors.rmse * candidate->errors.rmse * (double)candidate->errors.count;
    }
    return folds->hidden > 0 ? sum / (double)folds->hidden : NAN;
}
