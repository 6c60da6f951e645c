/* SPDX-License-Identifier: MIT
 *
 * The inside of cross-validation: the folds side by side, and what each of them does at a time.
 */
#ifndef FESCUE_RANK_INTERNAL_H
#define FESCUE_RANK_INTERNAL_H

#include "judge/choose_internal.h"

enum { RANK_KINDS = 2 };

/* One fold: cells that are hidden, cells that are kept, and the fits on them. It has a context of its own, with one
   worker, whose memory is the parent's. */
struct rank_fold {
    fescue_context *parent, *context;
    struct holdout holdout;
    struct chooser chooser;
    struct candidate alone[RANK_KINDS]; /* of each kind of offsets, rank 0 */
    struct candidate current, trial, learnt;
    struct errors interpolation; /* count 0: there is no time axis */
    fescue_status status;
};
struct rank_folds {
    fescue_context *context;
    struct rank_fold *fold;
    uint32_t count;
    uint64_t hidden;
};
fescue_status rank_folds_open(fescue_context *context, const struct cells *cells, const struct ranking_request *request,
                              const struct holdout_request *asked, struct rank_folds *folds);
void rank_folds_close(struct rank_folds *folds);

/* What all folds do next, side by side. */
enum stage {
    STAGE_ALONE,     /* offsets of kind `offsets`, as number `kind` */
    STAGE_BEGIN,     /* current = alone[kind] */
    STAGE_GROW,      /* current gets one rank more, its offsets settle */
    STAGE_RUNG,      /* trial = current under ridge `rung` */
    STAGE_TAKE,      /* current = trial */
    STAGE_CHALLENGE, /* current against the spectral start */
    STAGE_EXACT,     /* whether a tight fit of current meets the hidden cells to rounding */
    STAGE_REACH,     /* current = the evidence fit with `rung` components at most, on alone[kind] */
    STAGE_LEARN      /* learnt = the evidence fit, on the kinds before number `kind` */
};
struct stage_request {
    enum stage stage;
    size_t kind, rung;
    enum fescue_offsets offsets;
};
fescue_status rank_folds_run(struct rank_folds *folds, struct stage_request request);

/* Mean squared error over all hidden cells of one candidate of each fold. */
typedef const struct candidate *rank_fold_candidate(const struct rank_fold *fold);
const struct candidate *rank_fold_current(const struct rank_fold *fold);
const struct candidate *rank_fold_trial(const struct rank_fold *fold);
const struct candidate *rank_fold_learnt(const struct rank_fold *fold);
double rank_folds_error(const struct rank_folds *folds, rank_fold_candidate *of);

#endif
