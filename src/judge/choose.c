/* SPDX-License-Identifier: MIT
 *
 * Which offsets, rank and ridge: fits on the kept cells, the hidden ones judge.
 *
 * For each kind of offsets that competes a path over ranks (choose_path), at each rank a short walk along a ladder of
 * ridges (choose_ridge). When the offsets are to be chosen, two kinds compete: none, and both (with mean). Two-way
 * effects count as one component more, since they have as many unknowns as one, and the fit with more components must
 * beat the other by two standard errors (candidate). A table that is U V' and nothing else thus keeps clear of offsets
 * that would leave components of their own behind, and a table of strong effects gets them. Offsets that explain
 * nothing of the hidden cells on their own are not followed any further.
 *
 * The winner is fitted again with finer limits; unless the table is large, it is challenged once more from the spectral
 * start and its ridge is checked again, because a loose fit is a shrunk one. The announced error is that of this fit.
 *
 * The hidden cells both choose and measure, so the announced error of the chosen fit is the least of several. They are
 * many against the few dozen fits that compete, and differences between near-best fits are far smaller than the error.
 *
 * Cost: some 3 loose fits a rank and kind. Everything is a function of the input and the seed.
 */
#include "judge/choose_internal.h"

#include <assert.h>
#include <math.h>

/* Groups of hidden cells: enough for a standard error of its own accuracy 1/sqrt(2G) = 2 %, few enough to keep one set
   a fit. */
enum { GROUPS_MOST = 1024 };

/* Share that is hidden for the choice when the user hides nothing. */
static const double own_share = 0.1;

bool chooser_is_late(const struct chooser *chooser)
{
    return chooser->deadline > 0 && clock_wall() >= chooser->deadline;
}

/* For comparing: the error on hidden cells settles long before the gradient does. */
struct solve_limits chooser_loose_limits(const struct chooser *chooser)
{
    uint64_t most = (uint64_t)chooser->options->iterations;
    return (struct solve_limits){
        .iterations = most < 40 ? most : 40, .gradient = 1e-4, .change = 3e-3, .deadline = chooser->deadline};
}

/* For announcing: the error to three or four digits. */
struct solve_limits chooser_fine_limits(const struct chooser *chooser)
{
    return (struct solve_limits){.iterations = (uint64_t)chooser->options->iterations,
                                 .gradient = chooser->options->tolerance,
                                 .change = 1e-5,
                                 .deadline = chooser->deadline};
}

bool chooser_is_large(const struct chooser *chooser, size_t rank)
{
    static const double large = 1e8; /* some seconds for all fits on the way to the rank, each of 40 iterations */
    return (double)chooser->kept->count * (double)rank * (double)rank > large;
}

size_t chooser_rank_most(const struct chooser *chooser)
{
    uint64_t rows = chooser->kept->rows, columns = chooser->kept->columns, rank = 0;
    uint64_t most = rows < columns ? rows : columns;
    while (rank < most && (rank + 1) * (rows + columns - rank - 1) <= chooser->kept->count)
        rank++;
    return (size_t)rank;
}

fescue_status chooser_take_up(struct chooser *chooser, const struct candidate *candidate)
{
    fescue_status status = FESCUE_OK;
    if (chooser->version == candidate->version) {
        chooser_take_scale(chooser, candidate);
        goto done;
    }
    if (chooser->version != 0)
        problem_free(&chooser->problem);
    chooser->version = 0;
    TRY(problem_create(chooser->context, chooser->kept, &candidate->offsets, 0, &chooser->problem));
    chooser->version = candidate->version;
    chooser_take_scale(chooser, candidate);
done:
    return status;
}

void chooser_take_scale(struct chooser *chooser, const struct candidate *candidate)
{
    if (chooser->version == candidate->version)
        chooser->scale = chooser->problem.scale;
    else if (chooser->scaled != candidate->version)
        chooser->scale = problem_scale(chooser->context, chooser->kept, &candidate->offsets);
    chooser->scaled = candidate->version;
}

fescue_status chooser_open(struct chooser *chooser)
{
    fescue_status status = FESCUE_OK;
    size_t rank_most = (size_t)(chooser->options->rank > chooser->options->rank_most ? chooser->options->rank
                                                                                     : chooser->options->rank_most);
    uint64_t hidden = chooser->hidden->count;
    chooser->groups = hidden < GROUPS_MOST ? (size_t)hidden : GROUPS_MOST;
    TRY(TAKE(chooser->context, hidden, &chooser->residuals));
    TRY(TAKE(chooser->context, rank_most, &chooser->spectrum));
done:
    return status;
}

void chooser_close(struct chooser *chooser)
{
    if (chooser->version != 0)
        problem_free(&chooser->problem);
    GIVE(chooser->context, &chooser->residuals);
    GIVE(chooser->context, &chooser->spectrum);
    GIVE(chooser->context, &chooser->path);
}

/* ---- the kinds of offsets --------------------------------------------------------------------------------------- */

struct kind {
    struct candidate alone; /* rank 0 */
    bool competes;
};
enum { KINDS_MOST = 2 };

static fescue_status kinds_open(struct chooser *chooser, struct kind *kinds, size_t *count)
{
    fescue_status status = FESCUE_OK;
    static const enum fescue_offsets rivals[KINDS_MOST] = {FESCUE_OFFSETS_NONE, FESCUE_OFFSETS_BOTH};
    enum fescue_offsets given = (enum fescue_offsets)chooser->options->offsets;
    if (given == FESCUE_OFFSETS_AUTO && chooser->hidden->count == 0)
        given = FESCUE_OFFSETS_BOTH; /* nothing judges: the shrunk effects do the least harm */
    *count = given == FESCUE_OFFSETS_AUTO ? KINDS_MOST : 1;
    for (size_t k = 0; k < *count; k++) {
        struct kind *kind = &kinds[k];
        TRY(candidate_create(chooser, *count == 1 ? given : rivals[k], &kind->alone));
        kind->competes = k == 0 || candidate_beats(chooser, &kind->alone, &kinds[0].alone, 1);
    }
done:
    return status;
}

static void kinds_close(struct chooser *chooser, struct kind *kinds)
{
    for (size_t k = 0; k < KINDS_MOST; k++)
        candidate_free(chooser, &kinds[k].alone);
}

static fescue_status kind_follow(struct chooser *chooser, const struct kind *kind, size_t rank_most,
                                 struct candidate *candidate)
{
    if (chooser->options->rank == FESCUE_AUTO)
        return path_walk(chooser, &kind->alone, rank_most, candidate);
    return path_climb(chooser, &kind->alone, rank_most, candidate);
}

static size_t rank_limit(const struct chooser *chooser)
{
    const struct cells *kept = chooser->kept;
    size_t shorter = kept->rows < kept->columns ? kept->rows : kept->columns;
    if (chooser->options->rank != FESCUE_AUTO) {
        size_t given = (size_t)chooser->options->rank;
        return given < shorter ? given : shorter;
    }
    if (chooser->hidden->count == 0)
        return 0; /* nothing judges */
    size_t asked = (size_t)chooser->options->rank_most, most = chooser_rank_most(chooser);
    return asked < most ? asked : most;
}

static fescue_status kinds_learn(struct chooser *chooser, const struct kind *kinds, size_t count,
                                 struct candidate *winner, size_t *best)
{
    const struct candidate *alone[KINDS_MOST] = {0};
    size_t competing = 0;
    for (size_t k = 0; k < count; k++)
        if (kinds[k].competes)
            alone[competing++] = &kinds[k].alone; /* the first always does */
    return evidence_compete(chooser, alone, competing, winner, best);
}

/* *winner and the kind it belongs to. */
static fescue_status kinds_compete(struct chooser *chooser, struct kind *kinds, size_t count, struct candidate *winner,
                                   size_t *best)
{
    fescue_status status = FESCUE_OK;
    struct candidate candidate = {0};
    size_t most = rank_limit(chooser);
    *best = 0;
    TRY(kind_follow(chooser, &kinds[0], most, winner));
    for (size_t k = 1; k < count; k++) {
        if (!kinds[k].competes || chooser_is_late(chooser))
            continue;
        candidate_free(chooser, &candidate);
        TRY(kind_follow(chooser, &kinds[k], most, &candidate));
        if (candidate_succeeds(chooser, &candidate, winner)) {
            candidate_swap(winner, &candidate);
            *best = k;
        }
    }
done:
    candidate_free(chooser, &candidate);
    return status;
}

/* A model of rank 0 without offsets says 0 everywhere, which nobody takes for an answer. It is left over when nothing
   beats it: the hidden cells are too few to tell, or the time is up. The mean and shrunk effects do better, or no harm.
 */
static fescue_status winner_ground(struct chooser *chooser, const struct kind *kinds, size_t count,
                                   struct candidate *winner, size_t *best)
{
    if (count < KINDS_MOST || winner->point.rank > 0 || winner->offsets.kind != FESCUE_OFFSETS_NONE)
        return FESCUE_OK;
    *best = KINDS_MOST - 1;
    return candidate_copy(chooser, &kinds[*best].alone, winner);
}

/* ---- the whole -------------------------------------------------------------------------------------------------- */

static fescue_status winner_finish(struct chooser *chooser, struct candidate *winner)
{
    fescue_status status = FESCUE_OK;
    struct solve_limits fine = chooser_fine_limits(chooser), loose = chooser_loose_limits(chooser);
    bool is_judged = chooser->hidden->count > 0, is_large = chooser_is_large(chooser, winner->point.rank);
    if (winner->point.rank > 0 && !winner->is_exact && !winner->is_learnt && is_judged) {
        if (!is_large)
            TRY(path_challenge(chooser, &loose, winner));
        TRY(candidate_fit(chooser, ridge_of(chooser, winner), &fine, winner));
        TRY(path_settle(chooser, &fine, true, winner));
        if (!is_large)
            TRY(ridge_search(chooser, &fine, winner));
        TRY(path_try_exact(chooser, winner));
    }
    TRY(candidate_measure(chooser, winner)); /* the residuals are the winner's again */
done:
    return status;
}

/* One half-width for all cells, of readings of weight one. */
static double halfwidth_find(struct chooser *chooser)
{
    const float *weight = chooser->hidden->by_row.weight;
    for (uint64_t k = 0; weight != NULL && k < chooser->hidden->count; k++)
        chooser->residuals[k] *= sqrt((double)weight[k]);
    return interval_halfwidth(chooser->residuals, chooser->hidden->count, chooser->options->interval);
}

/* A winner of the path follows time by kriging what it leaves, unless the hidden cells are met worse. */
static fescue_status winner_krige(struct chooser *chooser, struct candidate *winner)
{
    fescue_status status = FESCUE_OK;
    struct candidate own = {0};
    struct krige_request request = {chooser->time, winner->point.rank == 0 ? 0 : winner->ridge};
    if (chooser->time == NULL || winner->is_learnt || winner->is_exact || chooser->hidden->count == 0)
        return FESCUE_OK;
    chooser->plain_errors = winner->errors;
    TRY(candidate_copy(chooser, winner, &own));
    chooser_take_scale(chooser, winner);
    struct model model = {.rows = chooser->kept->rows,
                          .columns = chooser->kept->columns,
                          .offsets = winner->offsets,
                          .low_rank = candidate_point(chooser, winner),
                          .bounds = {-INFINITY, INFINITY}};
    TRY(krige_run(chooser->context, chooser->kept, &model, &request, &own.time));
    TRY(candidate_measure(chooser, &own));
    TRY(candidate_note(chooser, &own));
    if (!candidate_beats(chooser, winner, &own, 1))
        candidate_swap(winner, &own);
    TRY(candidate_measure(chooser, winner));
done:
    candidate_free(chooser, &own);
    return status;
}

static fescue_status choice_fill(struct chooser *chooser, struct kind *kinds, size_t best, struct candidate *winner,
                                 struct choice *choice)
{
    fescue_status status = FESCUE_OK;
    bool is_judged = chooser->hidden->count > 0;
    choice->offsets = winner->offsets.kind;
    choice->rank = (uint32_t)winner->point.rank;
    choice->ridge = winner->point.rank == 0 ? 0 : winner->ridge;
    choice->is_learnt = winner->is_learnt;
    if (winner->is_learnt)
        choice->learnt = evidence_request_of(chooser, winner);
    choice->errors = is_judged ? winner->errors : (struct errors){0};
    choice->offsets_errors = is_judged ? kinds[best].alone.errors : (struct errors){0};
    choice->offsets_only_rank0_rmse = choice->offsets_errors.rmse;
    for (size_t k = 0; k < KINDS_MOST; k++) {
        bool is_there = kinds[k].alone.square != NULL && is_judged;
        if (is_there && kinds[k].alone.errors.rmse < choice->offsets_only_rank0_rmse)
            choice->offsets_only_rank0_rmse = kinds[k].alone.errors.rmse;
    }
    bool is_kriged = !winner->is_learnt && winner->time.along != TIME_NONE;
    if (is_kriged)
        choice->kriged = (struct krige_request){chooser->time, choice->ridge};
    if (is_judged && (winner->is_learnt || is_kriged))
        choice->plain_errors = chooser->plain_errors;
    if (is_judged && winner->is_learnt)
        choice->far_errors = chooser->far_errors;
    if (is_judged && chooser->time != NULL)
        TRY(interpolation_measure(chooser->context, chooser->kept, chooser->hidden, chooser->time,
                                  &choice->interpolation_errors));
    choice->noiseless = winner->is_exact;
    choice->halfwidth = is_judged ? halfwidth_find(chooser) : NAN;
    if (winner->is_learnt) {
        choice->noise = winner->variance;
        TRY(offsets_copy(chooser->context, chooser->kept->rows, chooser->kept->columns, &winner->offsets,
                         &choice->beside));
    }
    chooser_take_scale(chooser, winner);
    TRY(low_rank_copy(chooser->context, &winner->point, &choice->start));
    for (size_t k = 0; k < choice->start.rank; k++)
        choice->start.spectrum[k] *= chooser->scale;
    TRY(RESIZE(chooser->context, chooser->path_count, &chooser->path));
    choice->path = chooser->path;
    choice->path_count = chooser->path_count;
    chooser->path = NULL;
done:
    return status;
}

static fescue_status choose_on(fescue_context *context, const struct holdout *holdout,
                               const struct choose_request *request, struct choice *choice)
{
    fescue_status status = FESCUE_OK;
    struct chooser chooser = {.context = context,
                              .options = request->options,
                              .solver = request->solver,
                              .time = request->time != NULL && request->time->along != TIME_NONE ? request->time : NULL,
                              .near = request->near,
                              .learns = request->way,
                              .deadline = request->deadline,
                              .kept = &holdout->kept,
                              .hidden = &holdout->hidden};
    struct kind kinds[KINDS_MOST] = {0};
    struct candidate winner = {0};
    size_t count = 0, best = 0;
    TRY(chooser_open(&chooser));
    TRY(kinds_open(&chooser, kinds, &count));
    if (evidence_is_meant(&chooser))
        TRY(kinds_learn(&chooser, kinds, count, &winner, &best));
    else
        TRY(kinds_compete(&chooser, kinds, count, &winner, &best));
    TRY(winner_ground(&chooser, kinds, count, &winner, &best));
    TRY(winner_finish(&chooser, &winner));
    TRY(winner_krige(&chooser, &winner));
    TRY(choice_fill(&chooser, kinds, best, &winner, choice));
done:
    candidate_free(&chooser, &winner);
    kinds_close(&chooser, kinds);
    chooser_close(&chooser);
    return status;
}

fescue_status choose_run(fescue_context *context, const struct holdout *holdout, const struct choose_request *request,
                         struct choice *choice)
{
    fescue_status status = FESCUE_OK;
    const struct fescue_options *options = request->options;
    struct holdout own = {0};
    bool is_open =
        options->rank == FESCUE_AUTO || options->ridge == FESCUE_AUTO || options->offsets == FESCUE_OFFSETS_AUTO;
    *choice = (struct choice){.own_holdout = is_open && holdout->hidden.count == 0};
    if (choice->own_holdout)
        TRY(holdout_split(context, &holdout->kept, own_share, (uint64_t)options->seed, &own));
    TRY(choose_on(context, choice->own_holdout ? &own : holdout, request, choice));
done:
    holdout_free(context, &own);
    if (status != FESCUE_OK)
        choice_free(context, choice);
    return status;
}

bool choice_serves(const struct choice *choice, const struct cells *cells)
{
    return evidence_is_large(cells) && choice->is_learnt && choice->rank > 0 && choice->learnt.time == NULL &&
           choice->learnt.near == NULL;
}

void choice_free(fescue_context *context, struct choice *choice)
{
    GIVE(context, &choice->path);
    low_rank_free(context, &choice->start);
    offsets_free(context, &choice->beside);
    choice->path_count = 0;
}
