/* SPDX-License-Identifier: MIT
 *
 * The path over ranks, judged on the hidden cells.
 *
 * Rank r starts from the best fit at rank r - 1, to which the leading singular pair of its residual is appended
 * (start_grow): from a rank-grown start nearly every local method converges, while from the spectral one all fail when
 * the singular values differ much and cells are few. The opposite happens too: with equal singular values and few cells
 * growing can get stuck where the spectral start does not. So a rank that brings no gain is challenged by a fit from
 * the spectral start before it is believed.
 *
 * A larger rank takes over when it beats the chosen one by a standard error of the paired differences of squared errors
 * (over rank 0 two, unless the gain is plain, a tenth or more: that a table has low-rank structure at all asks for
 * firmer ground, and a strong ridge makes fits that differ from nothing so little that one error is passed by chance
 * too often). The path ends when no rank has been best for 3 + r/4 ranks, r the best so far.
 *
 * Cost: a few fits of at most 40 loose iterations a rank.
 */
#include "judge/choose_internal.h"

#include <math.h>

/* The relative gain below which a rank counts as bringing nothing. */
static const double gain_worth = 1e-4;

static bool is_larger_better(const struct chooser *chooser, const struct candidate *large,
                             const struct candidate *small)
{
    static const double over_less = 1, over_nothing = 2, plain_gain = 0.1;
    if (small->point.rank > 0)
        return candidate_beats(chooser, large, small, over_less);
    bool is_plain = large->errors.rmse < (1 - plain_gain) * small->errors.rmse;
    return candidate_beats(chooser, large, small, is_plain ? over_less : over_nothing);
}

/* The spectral start in the place of the candidate's point. */
static fescue_status start_afresh(struct chooser *chooser, size_t rank, struct candidate *candidate)
{
    fescue_status status = FESCUE_OK;
    TRY(chooser_take_up(chooser, candidate));
    low_rank_free(chooser->context, &candidate->point);
    TRY(start_spectral(&chooser->problem, rank, (uint64_t)chooser->options->seed, &candidate->point));
done:
    return status;
}

fescue_status path_challenge(struct chooser *chooser, const struct solve_limits *limits, struct candidate *candidate)
{
    fescue_status status = FESCUE_OK;
    struct candidate rival = {0};
    if (chooser_is_late(chooser))
        goto done;
    TRY(candidate_copy(chooser, candidate, &rival));
    TRY(start_afresh(chooser, candidate->point.rank, &rival));
    TRY(candidate_fit(chooser, candidate->ridge, limits, &rival));
    if (rival.errors.rmse < candidate->errors.rmse * (1 - gain_worth))
        candidate_swap(&rival, candidate);
done:
    candidate_free(chooser, &rival);
    return status;
}

fescue_status path_settle(struct chooser *chooser, const struct solve_limits *limits, bool at_once,
                          struct candidate *candidate)
{
    fescue_status status = FESCUE_OK;
    struct candidate trial = {0};
    bool gained = candidate->offsets.kind != FESCUE_OFFSETS_NONE && candidate->point.rank > 0;
    for (size_t round = 0; round < SETTLE_ROUNDS && gained && !chooser_is_late(chooser); round++) {
        TRY(candidate_copy(chooser, candidate, &trial));
        TRY(candidate_refit(chooser, limits, at_once, &trial));
        gained = trial.errors.rmse < candidate->errors.rmse * (1 - gain_worth);
        if (gained)
            candidate_swap(&trial, candidate);
    }
done:
    candidate_free(chooser, &trial);
    return status;
}

fescue_status path_try_exact(struct chooser *chooser, struct candidate *candidate)
{
    fescue_status status = FESCUE_OK;
    /* Errors above this share of the signal are noise, or too far from a solution to tell. */
    static const double suspicion = 0.1;
    bool ridge_allows = chooser->options->ridge == FESCUE_AUTO || chooser->options->ridge == 0;
    bool is_done = candidate->is_exact && !candidate->is_learnt; /* learning comes near, and stops there */
    struct candidate tight = {0};
    if (!ridge_allows || candidate->point.rank == 0 || is_done || chooser_is_late(chooser) ||
        candidate->errors.rmse > suspicion * chooser->scale)
        goto done;
    /* Without noise the objective falls by a factor an iteration until nothing is left of it; with noise it soon stops
       changing. So a loose limit on change ends the second case early and never the first. */
    struct solve_limits limits = {.iterations = (uint64_t)chooser->options->iterations,
                                  .gradient = 1e-13,
                                  .change = 1e-2,
                                  .deadline = chooser->deadline};
    TRY(candidate_copy(chooser, candidate, &tight));
    tight.rung = ridge_rungs() - 1;
    TRY(candidate_fit(chooser, 0, &limits, &tight));
    if (tight.is_exact)
        candidate_swap(&tight, candidate);
done:
    candidate_free(chooser, &tight);
    return status;
}

/* Few cells for the unknowns: where growing is most likely to get stuck, and a fit is cheap for the rank it has. */
static bool is_scarce(const struct chooser *chooser, size_t rank)
{
    static const double scarce = 4; /* at twice the cells of unknowns grown and spectral starts fail on different
                                       tables, at five times neither does */
    const struct cells *kept = chooser->kept;
    double unknowns = (double)rank * ((double)kept->rows + (double)kept->columns - (double)rank);
    return (double)kept->count < scarce * unknowns;
}

/* One rank more than the candidate has, under the ridge it has. */
fescue_status path_grow(struct chooser *chooser, const struct solve_limits *limits, struct candidate *candidate)
{
    fescue_status status = FESCUE_OK;
    double ridge = ridge_of(chooser, candidate);
    TRY(chooser_take_up(chooser, candidate));
    problem_set_ridge(&chooser->problem, ridge);
    TRY(start_grow(&chooser->problem, (uint64_t)chooser->options->seed, &candidate->point));
    TRY(candidate_fit(chooser, ridge, limits, candidate));
done:
    return status;
}

/* Grown, its offsets settled, its ridge found, and challenged where growing may have got stuck. In a large table fits
   are shorter, and a rank that brings nothing is believed when cells are not scarce. */
static fescue_status rank_step(struct chooser *chooser, double best_rmse, struct candidate *candidate)
{
    fescue_status status = FESCUE_OK;
    struct solve_limits limits = chooser_loose_limits(chooser);
    bool is_large = chooser_is_large(chooser, candidate->point.rank + 1);
    if (is_large && limits.iterations > 12)
        limits.iterations = 12;
    TRY(path_grow(chooser, &limits, candidate));
    TRY(path_settle(chooser, &limits, false, candidate));
    TRY(ridge_search(chooser, &limits, candidate));
    bool is_suspect = candidate->errors.rmse >= best_rmse * (1 - gain_worth) && !is_large;
    if (is_suspect || is_scarce(chooser, candidate->point.rank))
        TRY(path_challenge(chooser, &limits, candidate));
    TRY(path_try_exact(chooser, candidate));
done:
    return status;
}

fescue_status path_walk(struct chooser *chooser, const struct candidate *alone, size_t rank_most,
                        struct candidate *chosen)
{
    fescue_status status = FESCUE_OK;
    struct candidate current = {0};
    double best_rmse = alone->errors.rmse;
    size_t best_rank = 0;
    TRY(candidate_copy(chooser, alone, chosen));
    TRY(candidate_copy(chooser, alone, &current));
    for (size_t rank = 1; rank <= rank_most && !chosen->is_exact && !chooser_is_late(chooser); rank++) {
        TRY(rank_step(chooser, best_rmse, &current));
        if (current.is_exact || is_larger_better(chooser, &current, chosen))
            TRY(candidate_copy(chooser, &current, chosen));
        if (current.errors.rmse < best_rmse * (1 - gain_worth)) {
            best_rmse = current.errors.rmse;
            best_rank = rank;
        }
        if (rank - best_rank >= 3 + best_rank / 4)
            break;
    }
done:
    candidate_free(chooser, &current);
    return status;
}

/* From the spectral start a fit has further to go than from the rank below: with the loose limit it would end while
   offsets beside it still do a part of its work. */
static const double fresh_change = 1e-4;

/* To a given rank of a large table: where cells abound the spectral start leads there at once. Where they are scarce,
   rank by rank with few iterations, which lay a component down for the fits after it to go on from, and a ridge that is
   only let down. */
static fescue_status climb_briefly(struct chooser *chooser, size_t rank, struct candidate *candidate)
{
    fescue_status status = FESCUE_OK;
    struct solve_limits loose = chooser_loose_limits(chooser), brief = loose;
    brief.iterations = brief.iterations < 5 ? brief.iterations : 5;
    if (!is_scarce(chooser, rank)) {
        loose.change = fresh_change;
        TRY(start_afresh(chooser, rank, candidate));
        candidate->ridge = ridge_of(chooser, candidate);
    }
    while (candidate->point.rank < rank) {
        TRY(path_grow(chooser, &brief, candidate));
        TRY(ridge_lower(chooser, &brief, candidate));
    }
    TRY(candidate_fit(chooser, candidate->ridge, &loose, candidate));
    TRY(path_settle(chooser, &loose, false, candidate));
    TRY(ridge_search(chooser, &loose, candidate));
done:
    return status;
}

static fescue_status climb(struct chooser *chooser, size_t rank, struct candidate *candidate)
{
    fescue_status status = FESCUE_OK;
    struct solve_limits limits = chooser_loose_limits(chooser);
    while (candidate->point.rank < rank) {
        TRY(path_grow(chooser, &limits, candidate));
        TRY(path_settle(chooser, &limits, false, candidate));
        TRY(ridge_search(chooser, &limits, candidate));
    }
done:
    return status;
}

fescue_status path_climb(struct chooser *chooser, const struct candidate *alone, size_t rank, struct candidate *chosen)
{
    fescue_status status = FESCUE_OK;
    struct solve_limits limits = chooser_loose_limits(chooser);
    TRY(candidate_copy(chooser, alone, chosen));
    if (rank == 0)
        goto done;
    TRY(chooser_is_large(chooser, rank) ? climb_briefly(chooser, rank, chosen) : climb(chooser, rank, chosen));
    if (is_scarce(chooser, rank))
        TRY(path_challenge(chooser, &limits, chosen));
    TRY(path_try_exact(chooser, chosen));
done:
    return status;
}
