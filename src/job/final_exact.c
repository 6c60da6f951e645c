/* SPDX-License-Identifier: MIT
 *
 * Recovery of a table without noise from few cells. With hardly more cells than unknowns, r(m+n-r), a local method ends
 * in the truth or in some other stationary point, and its start decides which (no hold-out helps: what it would hide is
 * needed). But success shows: a fit that meets more cells than it has unknowns to rounding is not there by chance. So
 * the portfolio of starts of solve_recover goes to work on all cells, without ridge. When none of them meets the cells
 * nothing is changed.
 *
 * Tried only where it may matter: few cells for the unknowns, no plain sign of noise, nothing that follows time
 * (readings have noise), a ridge that may be 0, and a table small enough that all of it takes seconds. A met table may
 * still have cells that no fit determines: those in lines with too few cells; `basis` marks them.
 */
#include "job/job_internal.h"

#include <math.h>

/* With more cells than this many times the unknowns the ordinary fit does not fail. */
static const double scarce = 4;
/* ... and with more than this many it is near enough to say whether there is noise: when its error on hidden cells is
   above this share of what offsets leave, there is. So it is where the hidden cells chose the rank: one that they chose
   in spite of such an error is there to lower noise. */
static const double telling = 1.75, noisy = 0.1;
/* cells x rank^2: up to some ten seconds for all starts. */
static const double affordable = 1e8;
/* Newton's steps square the error; what has not ended after these has lost its way. */
enum { ITERATIONS = 60 };
static const double rounding = 1e-13;
/* Of the spread: a residual that is rounding, multiplied by the condition of the table. */
static const double met = 1e-10;

/* The rank that was asked for, of which a fit may have kept less, or the chosen one. */
static size_t rank_of(const struct final_request *request)
{
    const struct cells *cells = request->cells;
    size_t shorter = cells->rows < cells->columns ? cells->rows : cells->columns;
    size_t rank = request->options->rank == FESCUE_AUTO ? request->choice->rank : (size_t)request->options->rank;
    return rank < shorter ? rank : shorter;
}

static bool is_noisy(const struct choice *choice)
{
    return choice->errors.count > 0 && choice->errors.rmse > noisy * choice->offsets_errors.rmse;
}

bool final_exact_may_help(const struct final_request *request)
{
    const struct cells *cells = request->cells;
    double rank = (double)rank_of(request), count = (double)cells->count;
    double unknowns = rank * ((double)cells->rows + (double)cells->columns - rank);
    bool ridge_allows = request->options->ridge == (double)FESCUE_AUTO || request->options->ridge == 0;
    bool has_time = request->choice->learnt.time != NULL || request->choice->kriged.time != NULL;
    bool is_told = request->options->rank == FESCUE_AUTO || count >= telling * unknowns;
    if ((is_told && is_noisy(request->choice)) || has_time)
        return false; /* readings in time leave more than rounding, as hidden ones said */
    return rank > 0 && ridge_allows && count > unknowns && count < scarce * unknowns &&
           count * rank * rank <= affordable;
}

fescue_status final_exact_run(fescue_context *context, const struct final_request *request, struct final_fit *fit,
                              bool *found)
{
    struct solve_limits limits = {.iterations = ITERATIONS, .gradient = rounding, .deadline = request->deadline};
    struct problem problem = {0};
    struct low_rank point = {0};
    struct solve_result result = {0};
    fescue_status status;
    *found = false;
    TRY(problem_create(context, request->cells, &fit->model.offsets, 0, &problem));
    TRY(solve_recover(&problem, rank_of(request), (uint64_t)request->options->seed, &limits, &point, &result));
    *found = result.stop == STOP_EXACT || result.rmse <= met;
    if (*found) {
        for (size_t k = 0; k < point.rank; k++)
            point.spectrum[k] *= problem.scale;
        fit->is_exact = true;
        fit->scale = problem.scale;
        fit->start = result.start;
        fit->model.low_rank = point;
        fit->result = result;
        point = (struct low_rank){0};
        result = (struct solve_result){0};
    }
done:
    low_rank_free(context, &point);
    solve_result_free(context, &result);
    problem_free(&problem);
    return status == FESCUE_STOPPED ? FESCUE_OK : status;
}
