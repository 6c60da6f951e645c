/* SPDX-License-Identifier: MIT
 *
 * The chosen model learnt again from other cells.
 *
 * What the evidence fit chose is learnt by the same request: from nothing (cold), so that the cells that are left out
 * have no part in offsets, scale, components or their number; or, where that takes too long, from the model of all
 * cells (warm), whose components it then only has to move. Of a warm start the fit takes the columns' factors and
 * effects alone, and a column that lost a long stretch would remember it there: so they are first solved again from the
 * cells that are left, given the rows' (the systems of leverage.c), which a hidden cell has moved as one of its row's
 * cells only.
 *
 * What a path of ranks and ridges chose starts from the components that choosing ended with: the objective's minimum
 * does not depend on where the fit came from. Offsets are fitted to what the components leave, twice.
 */
#include "judge/judgement.h"

#include <math.h>
#include <string.h>

enum { RELEARN_ROUNDS = 30, PATH_TURNS = 2 };
static const double settled = 3e-4, path_change = 1e-5;

/* Variance of the noise from what the fit leaves of its own cells, with the numbers it has taken from them. */
fescue_status noise_measure(fescue_context *context, const struct cells *cells, const struct model *model,
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

/* Factors and effect of column j, solved again from its cells. room: size numbers. */
static void column_solve(const struct leverage *leverage, const struct cells *cells, uint32_t j, double *room,
                         struct model *start)
{
    size_t size = leverage->size, rank = size - 1;
    struct low_rank *point = &start->low_rank;
    const struct half *half = &cells->by_column;
    const double *inverse = leverage->column_inverse + (size_t)j * packed_size(size);
    memset(room, 0, size * sizeof *room);
    for (uint64_t k = half->start[j]; k < half->start[j + 1]; k++) {
        uint32_t i = half->across[k];
        double rest = cells_value(cells, half, k) - start->offsets.mean - start->offsets.row[i];
        rest *= half->weight != NULL ? (double)half->weight[k] : 1;
        for (size_t l = 0; l < rank; l++)
            room[l] += rest * MATRIX_AT(point->left, i, l);
        room[rank] += leverage->has_columns ? rest : 0;
    }
    for (size_t k = 0; k < size; k++) {
        double sum = 0;
        for (size_t l = 0; l < size; l++)
            sum += (l <= k ? inverse[packed_size(k) + l] : inverse[packed_size(l) + k]) * room[l];
        if (k < rank)
            MATRIX_AT(point->right, j, k) = point->spectrum[k] > 0 ? sum / point->spectrum[k] : 0;
        else if (leverage->has_columns)
            start->offsets.column[j] = sum;
    }
}

/* The model of all cells as a start that has forgotten the columns' hidden cells; its time part is borrowed. */
static fescue_status start_create(fescue_context *context, const struct cells *cells,
                                  const struct judge_request *request, struct model *start)
{
    fescue_status status;
    const struct model *model = request->model;
    struct leverage leverage = {0};
    double *room = NULL;
    *start = (struct model){.rows = model->rows,
                            .columns = model->columns,
                            .time = model->time,
                            .near = model->near,
                            .bounds = model->bounds};
    TRY(offsets_copy(context, model->rows, model->columns, &model->offsets, &start->offsets));
    TRY(low_rank_copy(context, &model->low_rank, &start->low_rank));
    TRY(leverage_create(context, cells, model, request->noise, NAN, &leverage));
    TRY(TAKE(context, leverage.size, &room));
    for (uint32_t j = 0; j < model->columns && leverage.column_inverse != NULL; j++)
        column_solve(&leverage, cells, j, room, start);
done:
    GIVE(context, &room);
    leverage_free(context, &leverage);
    return status;
}

/* The evidence fit again; a rank of 0 has nothing but offsets. */
static fescue_status learnt_again(fescue_context *context, const struct cells *cells,
                                  const struct judge_request *request, bool is_warm, struct relearnt *out)
{
    struct evidence_request asked = request->choice->learnt;
    struct evidence_result result = {0};
    struct model start = {0};
    fescue_status status;
    asked.deadline = request->deadline;
    if (is_warm) {
        asked.rank = asked.rank_most = request->model->low_rank.rank;
        asked.noise_start = request->noise;
        asked.rounds = RELEARN_ROUNDS;
        asked.change = settled;
        TRY(start_create(context, cells, request, &start));
        TRY(evidence_fit(context, cells, &asked, &start, &result));
        if (result.fit.stop == STOP_CANCELLED) {
            evidence_result_free(context, &result);
            TRY(FESCUE_STOPPED);
        }
    } else {
        TRY(evidence_learn(context, cells, &asked, &result));
    }
    out->model = result.model;
    out->noise = result.noise * result.noise;
    out->lambda = NAN;
    solve_result_free(context, &result.fit);
done:
    offsets_free(context, &start.offsets);
    low_rank_free(context, &start.low_rank);
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
    if (request->choice->kriged.time != NULL)
        TRY(krige_run(context, cells, model, &request->choice->kriged, &model->time));
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
