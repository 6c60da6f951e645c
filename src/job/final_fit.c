/* SPDX-License-Identifier: MIT
 *
 * The fit on all cells, with the offsets, rank and ridge that were chosen.
 *
 * The offsets are those of what `choice->start` leaves (refit_offsets), as they were while choosing: fitted to the bare
 * cells they would take in a part of the low-rank structure.
 *
 * The objective has many stationary points, and which one a local method ends in is decided by its start. Two starts
 * fail on different tables: a point grown rank by rank is lost where all singular values are equal and few cells are
 * seen, a truncated SVD of what was seen where they are unequal (Keshavan, Montanari, Oh 2010, is the latter). So both
 * are tried:
 *
 *     grown      the point that choosing ended with, which it grew on the cells that were not hidden
 *     spectral   truncated SVD of the trimmed, rescaled targets
 *
 * each improved until its gradient has fallen to `screen_gradient`, for at most `SCREEN_ITERATIONS`. The second takes
 * the place of the first when its objective is lower by more than `worth`, and the one that stays is taken on to the
 * tolerance asked for. A fit that meets the seen cells to rounding is not beaten: then the second start is left out. As
 * solve_run gives back no worse than what came in, the result is never above the objective of the point that choosing
 * ended with.
 *
 * A fit also ends when its objective changes by less than `settled_change` over ten iterations, and this is no saving
 * of time alone: where there is little or no ridge, ending then shrinks what the cells hardly determine, which
 * following a flat valley for hundreds of iterations would undo, for the worse. Choosing ends its fits by the same
 * rule, so the error on the hidden cells is the error of such a fit.
 *
 * A fit with the absolute loss is gone over by squares, without the cells that it shows to be wrong (final_robust.c).
 *
 * What the evidence fit learnt is learnt again, by the same request from the same kind of start, on all cells; of a
 * large table, from what the kept cells taught it, by a few rounds.
 *
 * Cost: at most twice one fit, and room for two points. What is parallel is so in the solvers.
 */
#include "job/job_internal.h"

#include <math.h>
#include <string.h>

/* Enough to tell one basin from another: at 1e-4 of the first gradient the objective of a convergent fit is known to
   about 1e-8 of its first value, far below the difference between two stationary points that matter. */
static const double screen_gradient = 1e-4;
enum { SCREEN_ITERATIONS = 100 };

/* The same as choosing has for the fit whose error it announces. */
static const double settled_change = 1e-5;

/* Below this the two have found the same basin, or equals. */
static const double worth = 1e-3;

struct candidate {
    const char *start;
    struct low_rank point;
    struct solve_result result;
};

static void candidate_free(fescue_context *context, struct candidate *candidate)
{
    low_rank_free(context, &candidate->point);
    solve_result_free(context, &candidate->result);
}

/* Joins the lines of a second run to those of the first: its first line is the point that the first ended with. */
static void trace_join(struct solve_result *result, uint64_t first)
{
    struct solve_step *trace = result->trace;
    if (first == 0 || result->trace_count <= first)
        return;
    uint32_t iteration = trace[first - 1].iteration;
    double seconds = trace[first - 1].seconds;
    result->trace_count--;
    memmove(trace + first, trace + first + 1, (result->trace_count - first) * sizeof *trace);
    for (uint64_t k = first; k < result->trace_count; k++) {
        trace[k].iteration += iteration;
        trace[k].seconds += seconds;
    }
}

/* Improves the candidate further. Being asked to stop is an outcome here: the point is as good as it is. */
static fescue_status candidate_improve(struct problem *problem, const struct final_request *request,
                                       const struct solve_limits *limits, struct candidate *candidate)
{
    struct solve_result *result = &candidate->result;
    uint64_t lines = result->trace_count, iterations = result->iterations;
    fescue_status status = solve_run(problem, request->solver, limits, &candidate->point, result);
    trace_join(result, lines);
    result->iterations += iterations;
    return status == FESCUE_STOPPED ? FESCUE_OK : status;
}

static bool is_cut_short(const struct candidate *candidate)
{
    return candidate->result.stop == STOP_TIME || candidate->result.stop == STOP_CANCELLED;
}

static fescue_status grown_create(struct problem *problem, const struct choice *choice, struct candidate *candidate)
{
    candidate->start = "grown";
    fescue_status status = low_rank_copy(problem->context, &choice->start, &candidate->point);
    for (size_t k = 0; status == FESCUE_OK && k < candidate->point.rank; k++)
        candidate->point.spectrum[k] /= problem->scale;
    return status;
}

/* The better of the two starts, improved as far as screening goes. */
static fescue_status candidate_choose(struct problem *problem, const struct final_request *request,
                                      struct candidate *best)
{
    struct candidate other = {.start = "spectral"};
    struct solve_limits screen = {
        .iterations = SCREEN_ITERATIONS, .change = settled_change, .deadline = request->deadline};
    fescue_status status;
    screen.gradient = fmax(screen_gradient, request->options->tolerance);
    if (request->options->iterations < SCREEN_ITERATIONS)
        screen.iterations = (uint64_t)request->options->iterations;
    TRY(grown_create(problem, request->choice, best));
    TRY(candidate_improve(problem, request, &screen, best));
    if (best->result.stop == STOP_EXACT || is_cut_short(best))
        return FESCUE_OK;
    status = start_spectral(problem, best->point.rank, (uint64_t)request->options->seed, &other.point);
    if (status == FESCUE_STOPPED) {
        best->result.stop = STOP_CANCELLED;
        return FESCUE_OK;
    }
    TRY(status);
    TRY(candidate_improve(problem, request, &screen, &other));
    if (other.result.objective < (1 - worth) * best->result.objective) {
        struct candidate swapped = *best;
        *best = other;
        other = swapped;
    }
done:
    candidate_free(problem->context, &other);
    return status;
}

static fescue_status low_rank_fit(struct problem *problem, const struct final_request *request, struct candidate *best)
{
    struct solve_limits limits = {.iterations = (uint64_t)request->options->iterations,
                                  .gradient = request->options->tolerance,
                                  .change = settled_change,
                                  .deadline = request->deadline};
    fescue_status status;
    if (request->choice->rank == 0) {
        best->start = "none";
        TRY(low_rank_create(problem->context, problem->target.rows, problem->target.columns, 0, &best->point));
        return candidate_improve(problem, request, &limits, best);
    }
    TRY(candidate_choose(problem, request, best));
    if (best->result.stop == STOP_EXACT || is_cut_short(best) || best->result.iterations >= limits.iterations)
        return FESCUE_OK;
    limits.iterations -= best->result.iterations;
    TRY(candidate_improve(problem, request, &limits, best));
done:
    return status;
}

/* Asked to stop before all cells had their say: what was learnt from the kept ones is there. */
static fescue_status stopped_take(fescue_context *context, const struct final_request *request, struct final_fit *fit)
{
    fit->scale = 1;
    fit->result = (struct solve_result){.solver = "evidence", .stop = STOP_CANCELLED};
    return low_rank_copy(context, &request->choice->start, &fit->model.low_rank);
}

/* On a large table, from what was learnt from the kept cells. */
static fescue_status learnt_further(fescue_context *context, const struct final_request *request,
                                    const struct final_fit *fit, struct evidence_result *result)
{
    const struct choice *choice = request->choice;
    struct evidence_request asked = choice->learnt;
    const struct model start = {.rows = request->cells->rows,
                                .columns = request->cells->columns,
                                .offsets = fit->model.offsets,
                                .low_rank = choice->start};
    asked.deadline = request->deadline;
    asked.rank = choice->start.rank;
    asked.is_shrunk = true;
    asked.noise_start = choice->noise;
    fescue_status status = evidence_fit(context, request->cells, &asked, &start, result);
    return status == FESCUE_OK && result->fit.stop == STOP_CANCELLED ? FESCUE_STOPPED : status;
}

/* The evidence fit on all cells: the same procedure as the one that was judged. */
static fescue_status learnt_run(fescue_context *context, const struct final_request *request, struct final_fit *fit)
{
    const struct choice *choice = request->choice;
    struct evidence_result result = {0};
    struct evidence_request asked = choice->learnt;
    asked.deadline = request->deadline;
    bool is_further = choice_serves(choice, request->cells) && choice->noise > 0;
    fit->start = is_further ? "grown" : "spectral";
    fescue_status status = is_further ? learnt_further(context, request, fit, &result)
                                      : evidence_learn(context, request->cells, &asked, &result);
    if (status == FESCUE_STOPPED)
        return stopped_take(context, request, fit);
    if (status != FESCUE_OK)
        return status;
    result.model.bounds = fit->model.bounds;
    model_free(context, &fit->model);
    fit->model = result.model;
    fit->result = result.fit;
    fit->scale = result.scale;
    return FESCUE_OK;
}

fescue_status final_fit_run(fescue_context *context, const struct final_request *request, struct final_fit *fit)
{
    struct problem problem = {0};
    struct candidate best = {0};
    struct model *model = &fit->model;
    fescue_status status;
    *fit = (struct final_fit){.model = {.rows = request->cells->rows, .columns = request->cells->columns}};
    model->bounds = request->options->bounds;
    TRY(refit_offsets(context, request->cells, request->choice->offsets, &request->choice->start, &model->offsets));
    if (final_exact_may_help(request)) {
        bool found;
        TRY(final_exact_run(context, request, fit, &found));
        if (found)
            return FESCUE_OK;
    }
    if (request->choice->is_learnt) {
        TRY(learnt_run(context, request, fit));
        return FESCUE_OK;
    }
    TRY(problem_create(context, request->cells, &model->offsets, request->choice->ridge, &problem));
    TRY(low_rank_fit(&problem, request, &best));
    fit->scale = problem.scale;
    fit->start = best.start;
    for (size_t k = 0; k < best.point.rank; k++)
        best.point.spectrum[k] *= problem.scale;
    model->low_rank = best.point;
    fit->result = best.result;
    bool is_whole = !is_cut_short(&best);
    best = (struct candidate){0};
    fit->is_robust = is_whole && model->low_rank.rank > 0 && solver_is_robust(request->solver);
    if (fit->is_robust)
        TRY(final_robust_run(context, request, fit));
    if (request->choice->kriged.time != NULL && is_whole)
        TRY(krige_run(context, request->cells, model, &request->choice->kriged, &model->time));
done:
    candidate_free(context, &best);
    problem_free(&problem);
    if (status != FESCUE_OK)
        final_fit_free(context, fit);
    return status;
}

void final_fit_free(fescue_context *context, struct final_fit *fit)
{
    model_free(context, &fit->model);
    solve_result_free(context, &fit->result);
}
