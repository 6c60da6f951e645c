/* SPDX-License-Identifier: MIT
 *
 * The chosen model learnt again from other cells.
 *
 * What the evidence fit chose is learnt by the same request: from nothing (cold), so that the cells that are left out
 * have no part in offsets, scale, components or their number; or, where that takes too long, from the model of all
 * cells (warm), whose components it then only has to move. Of a warm start the fit takes the columns' factors alone,
 * and its rounds forget them; what is left of the hidden cells after RELEARN_ROUNDS was measured at less than a
 * hundredth of the error.
 *
 * What a path of ranks and ridges chose starts from the components that choosing ended with: the objective's minimum
 * does not depend on where the fit came from. Offsets are fitted to what the components leave, twice.
 */
#include "judge/judgement.h"

#include <math.h>

enum { RELEARN_ROUNDS = 25, PATH_TURNS = 2 };
static const double settled = 3e-4, path_change = 1e-5;

/* Variance of the noise from what the fit leaves of its own cells, with the numbers it has taken from them. */
static fescue_status noise_measure(fescue_context *context, const struct cells *cells, const struct model *model,
                                   double *noise)
{
    static const double left_least = 0.2; /* a ridge takes fewer numbers than are counted */
    struct errors errors;
    double m = cells->rows, n = cells->columns, r = (double)model->low_rank.rank, count = (double)cells->count;
    enum fescue_offsets kind = model->offsets.kind;
    double taken = r * (m + n - r);
    taken += kind == FESCUE_OFFSETS_BOTH || kind == FESCUE_OFFSETS_ROWS ? m : 0;
    taken += kind == FESCUE_OFFSETS_BOTH || kind == FESCUE_OFFSETS_COLUMNS ? n : 0;
    fescue_status status = errors_measure(context, cells, model, NULL, &errors);
    *noise = errors.rmse * errors.rmse * count / fmax(count - taken, left_least * count);
    return status;
}

/* The evidence fit again; a rank of 0 has nothing but offsets. */
static fescue_status learnt_again(fescue_context *context, const struct cells *cells,
                                  const struct judge_request *request, bool is_warm, struct relearnt *out)
{
    struct evidence_request asked = request->choice->learnt;
    struct evidence_result result = {0};
    fescue_status status;
    asked.deadline = request->deadline;
    if (is_warm) {
        asked.rank = asked.rank_most = request->model->low_rank.rank;
        asked.noise_start = request->noise;
        asked.rounds = RELEARN_ROUNDS;
        asked.change = settled;
        TRY(evidence_fit(context, cells, &asked, request->model, &result));
        if (result.fit.stop == STOP_CANCELLED) {
            evidence_result_free(context, &result);
            return FESCUE_STOPPED;
        }
    } else {
        TRY(evidence_learn(context, cells, &asked, &result));
    }
    out->model = result.model;
    out->noise = result.noise * result.noise;
    out->lambda = NAN;
    solve_result_free(context, &result.fit);
done:
    return status;
}

static fescue_status point_improve(fescue_context *context, const struct cells *cells,
                                   const struct judge_request *request, struct relearnt *out)
{
    struct problem problem = {0};
    struct solve_result result = {0};
    struct low_rank *point = &out->model.low_rank;
    fescue_status status;
    struct solve_limits limits = {.iterations = (uint64_t)request->options->iterations,
                                  .gradient = request->options->tolerance,
                                  .change = path_change,
                                  .deadline = request->deadline};
    TRY(problem_create(context, cells, &out->model.offsets, request->choice->ridge, &problem));
    for (size_t k = 0; k < point->rank; k++)
        point->spectrum[k] /= problem.scale;
    TRY(solve_run(&problem, request->solver, &limits, point, &result));
    for (size_t k = 0; k < point->rank; k++)
        point->spectrum[k] *= problem.scale;
    out->lambda = problem.lambda;
done:
    problem_free(&problem);
    solve_result_free(context, &result);
    return status;
}

static fescue_status path_again(fescue_context *context, const struct cells *cells, const struct judge_request *request,
                                struct relearnt *out)
{
    fescue_status status;
    struct model *model = &out->model;
    struct offsets offsets = {0};
    *model = (struct model){.rows = cells->rows, .columns = cells->columns};
    TRY(low_rank_copy(context, &request->model->low_rank, &model->low_rank));
    for (int turn = 0; turn < (model->low_rank.rank > 0 ? PATH_TURNS : 1); turn++) {
        TRY(refit_offsets(context, cells, request->choice->offsets, &model->low_rank, &offsets));
        offsets_free(context, &model->offsets);
        model->offsets = offsets;
        if (model->low_rank.rank > 0)
            TRY(point_improve(context, cells, request, out));
    }
done:
    return status;
}

fescue_status relearn(fescue_context *context, const struct cells *cells, const struct judge_request *request,
                      bool is_warm, struct relearnt *out)
{
    fescue_status status;
    *out = (struct relearnt){.lambda = NAN};
    if (request->choice->is_learnt && (!is_warm || request->model->low_rank.rank > 0))
        TRY(learnt_again(context, cells, request, is_warm, out));
    else
        TRY(path_again(context, cells, request, out));
    out->model.bounds = request->options->bounds;
    if (out->noise <= 0)
        TRY(noise_measure(context, cells, &out->model, &out->noise));
done:
    if (status != FESCUE_OK)
        relearnt_free(context, out);
    return status;
}

fescue_status relearn_all(fescue_context *context, const struct judge_request *request, double *noise, double *lambda)
{
    const struct cells *cells = request->cells;
    double all = (double)cells->rows * (double)cells->columns;
    *lambda = request->choice->is_learnt ? NAN : request->choice->ridge * (double)cells->count / all;
    *noise = request->noise;
    return request->choice->is_learnt ? FESCUE_OK : noise_measure(context, cells, request->model, noise);
}

void relearnt_free(fescue_context *context, struct relearnt *relearnt)
{
    model_free(context, &relearnt->model);
}
