/* SPDX-License-Identifier: MIT
 *
 * Finding the minimum and not just one: several starting strategies, the best end of them.
 *
 * Which minimum of a low-rank problem is reached is decided by the start; from a good one every solver gets there. No
 * start is good for every table (recover_growth.c, recover_weighted.c, recover_ladder.c say what each is good for), so
 * they are tried in turn, the cheapest first, each finished by Newton steps (trust.c), until
 *
 *     one meets the seen cells to rounding, or all but: there is nothing better;
 *     or two end at the same objective, to a millionth: with noise that is the best sign of the minimum there is;
 *     or two have been tried where cells are not scarce, or all where they are, or the time is up.
 *
 * The lowest objective wins; the strategies differ in how they get there and are judged by the problem's own objective.
 * A finish that gains less than one per cent in ten iterations is cut short, and only the winner goes on to the
 * caller's limits. Meeting the seen cells does not prove that the unseen ones are right: where a row and a column with
 * as few cells as the rank meet, more than one table fits.
 */
#include "solve/recover_internal.h"

#include <math.h>

struct strategy {
    const char *name;
    recover_start *start;
    double weight;
    int steps;
};
/* The second of a kind differs from the first by enough to end elsewhere. */
static const struct strategy strategies[] = {
    {"growth", recover_growth, 0.01, 30},           {"weighted growth", recover_weighted, 4, 10},
    {"ridge ladder", recover_ladder, 0.9, 3},       {"lighter weighted growth", recover_weighted, 1, 6},
    {"patient growth", recover_growth, 0.001, 100}, {"slow ridge ladder", recover_ladder, 0.95, 3},
};
enum { STRATEGIES = sizeof strategies / sizeof *strategies, STRATEGIES_FIRST = 2 };
/* Cells over unknowns: with more, the first two strategies found every table without noise that was measured, and with
   noise, or more rank than the table has, the others take ten times as long to end no better. */
static const double scarce = 1.75;

/* A finish: superlinear when it is near, hopeless when it is not. Below 1e-13 a gradient is rounding. */
static const struct solve_limits finish = {.iterations = 60, .gradient = 1e-13, .change = 0.01};
static const double agreement = 1e-6;
/* No measured table leaves so little: the finish was on its way to rounding when its iterations ran out. */
static const double vanishing = 1e-8;

struct recovery {
    struct problem *problem;
    const struct solve_limits *limits;
    struct recover_request request;
    struct low_rank best, candidate; /* best: rank 0 without memory while there is none */
    bool has_best;
    struct solve_result ended;   /* of the best; its trace is not used */
    struct solve_result *result; /* of the last run; the trace of all */
    uint64_t iterations;         /* of all finishes */
};

fescue_status recover_pause(const struct recover_request *request, bool *late)
{
    *late = request->deadline > 0 && clock_wall() >= request->deadline;
    return progress_tell(request->problem->context, "fitting", -1);
}

/* The candidate, finished; it becomes the best when it is. *settled: no need to go on. */
static fescue_status candidate_judge(struct recovery *recovery, const char *name, bool *settled)
{
    struct solve_result *result = recovery->result;
    struct solve_limits limits = finish;
    fescue_context *context = recovery->problem->context;
    limits.deadline = recovery->limits->deadline;
    fescue_status status =
        solve_run(recovery->problem, &grassmann_trust_region_solver, &limits, &recovery->candidate, result);
    if (status != FESCUE_OK && status != FESCUE_STOPPED)
        return status;
    recovery->iterations += result->iterations;
    log_tell(context, "%s: rank %zu, rmse %.3g of the spread after %llu steps, ended as %s", name,
             recovery->candidate.rank, result->rmse, (unsigned long long)result->iterations,
             solve_stop_word(result->stop));
    double before = recovery->ended.objective;
    bool same = recovery->has_best && result->stop == STOP_GRADIENT && recovery->ended.stop == STOP_GRADIENT &&
                fabs(result->objective - before) <= agreement * before;
    *settled = same || result->rmse <= vanishing || result->stop == STOP_EXACT || result->stop == STOP_TIME;
    if (!recovery->has_best || result->objective < before) {
        struct low_rank worse = recovery->best;
        recovery->best = recovery->candidate;
        recovery->candidate = worse;
        recovery->ended = *result;
        recovery->ended.start = name;
        recovery->has_best = true;
    }
    low_rank_free(context, &recovery->candidate);
    return status;
}

/* How many strategies are worth their time. */
static size_t strategies_worth(const struct recovery *recovery)
{
    const struct cells *target = &recovery->problem->target;
    double rank = (double)recovery->request.rank;
    double unknowns = rank * ((double)target->rows + (double)target->columns - rank);
    return (double)target->count < scarce * unknowns ? STRATEGIES : STRATEGIES_FIRST;
}

static fescue_status strategies_try(struct recovery *recovery)
{
    fescue_status status = FESCUE_OK;
    bool settled = false;
    size_t most = strategies_worth(recovery);
    for (size_t k = 0; k < most && !settled; k++) {
        recovery->request.weight = strategies[k].weight;
        recovery->request.steps = strategies[k].steps;
        TRY(strategies[k].start(&recovery->request, &recovery->candidate));
        TRY(candidate_judge(recovery, strategies[k].name, &settled));
        if (recovery->request.rank == 0)
            break;
    }
done:
    return status;
}

/* What the caller asked for, from the best. */
static fescue_status best_finish(struct recovery *recovery)
{
    struct solve_result *result = recovery->result;
    enum solve_stop stop = recovery->ended.stop;
    if (stop == STOP_EXACT || (stop == STOP_GRADIENT && recovery->ended.gradient <= recovery->limits->gradient))
        return FESCUE_OK;
    fescue_status status =
        solve_run(recovery->problem, &grassmann_trust_region_solver, recovery->limits, &recovery->best, result);
    const char *start = recovery->ended.start;
    recovery->iterations += result->iterations;
    recovery->ended = *result;
    recovery->ended.start = start;
    return status;
}

fescue_status solve_recover(struct problem *problem, size_t rank, uint64_t seed, const struct solve_limits *limits,
                            struct low_rank *out, struct solve_result *result)
{
    struct recovery recovery = {
        .problem = problem,
        .limits = limits,
        .request = {.problem = problem, .rank = rank, .seed = seed, .deadline = limits->deadline},
        .result = result};
    fescue_status status = strategies_try(&recovery);
    if (status == FESCUE_OK)
        status = best_finish(&recovery);
    low_rank_free(problem->context, &recovery.candidate);
    if (status != FESCUE_OK && status != FESCUE_STOPPED)
        low_rank_free(problem->context, &recovery.best);
    else if (recovery.has_best) {
        struct solve_step *trace = result->trace;
        uint64_t trace_count = result->trace_count;
        *result = recovery.ended;
        result->trace = trace;
        result->trace_count = trace_count;
        result->iterations = recovery.iterations;
    }
    if (status == FESCUE_STOPPED)
        result->stop = STOP_CANCELLED;
    *out = recovery.best;
    return status;
}
