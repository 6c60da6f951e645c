/* SPDX-License-Identifier: MIT
 *
 * Recovery of a table without noise from few cells. With hardly more cells than unknowns, r(m+n-r), a local method ends
 * in the truth or in some other stationary point, and its start decides which (no hold-out helps: what it would hide is
 * needed). But success shows: a fit that meets more cells than it has unknowns to rounding is not there by chance. So
 * several starts are tried on all cells, each finished by Gauss-Newton steps without ridge, until one meets them:
 *
 *     evidence   what the evidence fit finds, its ridge a component fading with the noise
 *     grown      one component after the other from the residual, a few conjugate gradients after each
 *     spectral   truncated SVD of the trimmed, rescaled targets: good for equal singular values
 *
 * Each fails on tables where another does not. When none succeeds nothing is changed.
 *
 * Tried only where it may matter: few cells for the unknowns, a ridge that may be 0, and a table small enough that all
 * of it takes about a second. A met table may still have cells that no fit determines: those in lines with too few
 * cells; `basis` marks them.
 */
#include "job/job_internal.h"

#include <math.h>

/* With more cells than this many times the unknowns the ordinary fit does not fail. */
static const double scarce = 4;
/* cells x rank^2: about a second for all starts. */
static const double affordable = 3e7;
/* Iterations after each new component; more does not change what is recovered. */
enum { GROWN_ITERATIONS = 30, FINISH_ITERATIONS = 60, EVIDENCE_ROUNDS = 200 };

/* The rank that was asked for, of which a fit may have kept less, or the chosen one. */
static size_t rank_of(const struct final_request *request)
{
    const struct cells *cells = request->cells;
    size_t shorter = cells->rows < cells->columns ? cells->rows : cells->columns;
    size_t rank = request->options->rank == FESCUE_AUTO ? request->choice->rank : (size_t)request->options->rank;
    return rank < shorter ? rank : shorter;
}

bool final_exact_may_help(const struct final_request *request)
{
    const struct cells *cells = request->cells;
    double rank = (double)rank_of(request), count = (double)cells->count;
    double unknowns = rank * ((double)cells->rows + (double)cells->columns - rank);
    bool ridge_allows = request->options->ridge == (double)FESCUE_AUTO || request->options->ridge == 0;
    return rank > 0 && ridge_allows && !request->choice->noiseless && count > unknowns && count < scarce * unknowns &&
           count * rank * rank <= affordable;
}

/* ---- the starts, each a new point in the problem's units --------------------------------------------------------- */

static fescue_status start_grown(struct problem *problem, const struct final_request *request, struct low_rank *point)
{
    struct solve_limits limits = {
        .iterations = GROWN_ITERATIONS, .gradient = 1e-9, .change = 1e-2, .deadline = request->deadline};
    struct solve_result result = {0};
    fescue_status status;
    TRY(low_rank_create(problem->context, problem->target.rows, problem->target.columns, 0, point));
    while (point->rank < rank_of(request)) {
        TRY(start_grow(problem, (uint64_t)request->options->seed, point));
        TRY(solve_run(problem, solver_find("grassmann-cg"), &limits, point, &result));
    }
done:
    solve_result_free(problem->context, &result);
    return status;
}

static fescue_status start_evidence(struct problem *problem, const struct final_request *request,
                                    struct low_rank *point)
{
    struct evidence_result learnt = {0};
    struct evidence_request asked = {.offsets = FESCUE_OFFSETS_NONE,
                                     .rank = rank_of(request),
                                     .rank_most = rank_of(request),
                                     .seed = (uint64_t)request->options->seed,
                                     .rounds = EVIDENCE_ROUNDS,
                                     .change = 1e-6,
                                     .deadline = request->deadline};
    fescue_status status;
    TRY(evidence_learn(problem->context, &problem->target, &asked, &learnt));
    *point = learnt.model.low_rank;
    learnt.model.low_rank = (struct low_rank){0};
    while (point->rank < rank_of(request))
        TRY(start_grow(problem, (uint64_t)request->options->seed, point));
done:
    evidence_result_free(problem->context, &learnt);
    return status;
}

static fescue_status start_flat(struct problem *problem, const struct final_request *request, struct low_rank *point)
{
    return start_spectral(problem, rank_of(request), (uint64_t)request->options->seed, point);
}

static const struct {
    const char *name;
    fescue_status (*start)(struct problem *problem, const struct final_request *request, struct low_rank *point);
} starts[] = {{"learnt", start_evidence}, {"grown", start_grown}, {"spectral", start_flat}};

/* ---- all of them --------------------------------------------------------------------------------------------------
 */

/* One start, finished; its point goes to the fit when it is exact. */
static fescue_status start_try(struct problem *problem, const struct final_request *request, size_t which,
                               struct final_fit *fit, bool *found)
{
    struct solve_limits finish = {.iterations = FINISH_ITERATIONS, .gradient = 1e-13, .deadline = request->deadline};
    struct low_rank point = {0};
    struct solve_result result = {0};
    fescue_status status;
    TRY(starts[which].start(problem, request, &point));
    TRY(solve_run(problem, solver_find("grassmann-trust-region"), &finish, &point, &result));
    *found = result.stop == STOP_EXACT;
    if (*found) {
        for (size_t k = 0; k < point.rank; k++)
            point.spectrum[k] *= problem->scale;
        fit->is_exact = true;
        fit->scale = problem->scale;
        fit->start = starts[which].name;
        fit->model.low_rank = point;
        fit->result = result;
        point = (struct low_rank){0};
        result = (struct solve_result){0};
    }
done:
    low_rank_free(problem->context, &point);
    solve_result_free(problem->context, &result);
    return status;
}

fescue_status final_exact_run(fescue_context *context, const struct final_request *request, struct final_fit *fit,
                              bool *found)
{
    struct problem problem = {0};
    fescue_status status;
    *found = false;
    TRY(problem_create(context, request->cells, &fit->model.offsets, 0, &problem));
    for (size_t k = 0; k < sizeof starts / sizeof *starts && !*found; k++) {
        if (request->deadline > 0 && clock_wall() >= request->deadline)
            break;
        TRY(start_try(&problem, request, k, fit, found));
    }
done:
    problem_free(&problem);
    return status == FESCUE_STOPPED ? FESCUE_OK : status;
}
