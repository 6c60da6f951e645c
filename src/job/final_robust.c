/* SPDX-License-Identifier: MIT
 *
 * After a fit with the absolute loss: wrong cells are set aside, and the others fitted by squares.
 *
 * The absolute loss finds the table in spite of wrong cells, at the price of 1.25 times the error that squares leave on
 * right ones (normal noise; subgradient.c). Once it has, the wrong ones show:
 *
 *     s = 1.4826 median |x - X|,     set aside: |x - X| > 5 s
 *
 * (1.4826 makes s the standard deviation of normal noise, of which 5 s sets aside one cell in two million), and what is
 * left goes to the evidence fit from where the first one ended, noise s^2; or, under a ridge that the user gave, to the
 * trust region. Estimates come within a few per cent of those of a table from which the wrong cells were deleted by
 * hand.
 *
 * A line of which more than half the cells would go keeps them: its cells differ in scale, and are not wrong. When
 * nothing is set aside the second fit is made all the same.
 */
#include "job/job_internal.h"

#include <math.h>

static const double to_deviation = 1.4826, far_off = 5, line_most = 0.5;
enum { ROUNDS = 100, ITERATIONS = 100 };
static const double settled = 1e-4, gradient = 1e-6;

struct robust {
    const struct cells *cells;
    const struct model *model;
    double *residual;             /* in row order */
    uint8_t *keep;                /* likewise */
    uint32_t *in_row, *in_column; /* how many of a line are to go */
    double deviation;
};

static void residuals_set(struct robust *robust)
{
    const struct half *half = &robust->cells->by_row;
    const struct model *model = robust->model;
    for (uint32_t i = 0; i < half->lines; i++)
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++) {
            uint32_t j = half->across[k];
            robust->residual[k] = offsets_at(&model->offsets, i, j) + low_rank_entry(&model->low_rank, i, j) -
                                  cells_value(robust->cells, half, k);
        }
}

static bool is_far(const struct robust *robust, uint64_t k)
{
    return fabs(robust->residual[k]) > far_off * robust->deviation;
}

static uint64_t line_cells(const struct half *half, uint32_t line)
{
    return half->start[line + 1] - half->start[line];
}

/* keep[] from the residuals and their deviation; how many are set aside. */
static uint64_t cells_mark(struct robust *robust)
{
    const struct half *rows = &robust->cells->by_row, *columns = &robust->cells->by_column;
    uint64_t aside = 0;
    for (uint32_t i = 0; i < rows->lines; i++)
        for (uint64_t k = rows->start[i]; k < rows->start[i + 1]; k++) {
            robust->in_row[i] += is_far(robust, k);
            robust->in_column[rows->across[k]] += is_far(robust, k);
        }
    for (uint32_t i = 0; i < rows->lines; i++)
        for (uint64_t k = rows->start[i]; k < rows->start[i + 1]; k++) {
            uint32_t j = rows->across[k];
            bool stays = robust->in_row[i] > line_most * (double)line_cells(rows, i) ||
                         robust->in_column[j] > line_most * (double)line_cells(columns, j);
            robust->keep[k] = stays || !is_far(robust, k);
            aside += !robust->keep[k];
        }
    return aside;
}

/* The kept cells, new and owned by the caller, and the deviation of the noise. */
static fescue_status cells_sort(fescue_context *context, const struct final_request *request, struct final_fit *fit,
                                struct cells *kept, double *deviation)
{
    const struct cells *cells = request->cells;
    struct robust robust = {.cells = cells, .model = &fit->model};
    fescue_status status;
    TRY(TAKE(context, cells->count, &robust.residual));
    TRY(TAKE(context, cells->count, &robust.keep));
    TRY(TAKE(context, cells->rows, &robust.in_row));
    TRY(TAKE(context, cells->columns, &robust.in_column));
    residuals_set(&robust);
    *deviation = robust.deviation = to_deviation * interval_halfwidth(robust.residual, cells->count, 0.5);
    residuals_set(&robust);
    fit->set_aside = cells_mark(&robust);
    TRY(cells_select(context, cells, robust.keep, kept));
done:
    GIVE(context, &robust.residual);
    GIVE(context, &robust.keep);
    GIVE(context, &robust.in_row);
    GIVE(context, &robust.in_column);
    return status;
}

static fescue_status fit_learnt(fescue_context *context, const struct final_request *request, const struct cells *kept,
                                double deviation, struct final_fit *fit)
{
    size_t rank = fit->model.low_rank.rank;
    struct evidence_result result = {0};
    struct evidence_request asked = {.offsets = request->choice->offsets,
                                     .rank = rank,
                                     .rank_most = rank,
                                     .noise_start = deviation * deviation,
                                     .seed = (uint64_t)request->options->seed,
                                     .rounds = ROUNDS,
                                     .change = settled,
                                     .deadline = request->deadline};
    fescue_status status = evidence_fit(context, kept, &asked, &fit->model, &result);
    if (status != FESCUE_OK)
        return status;
    result.model.bounds = fit->model.bounds;
    model_free(context, &fit->model);
    fit->model = result.model;
    result.model = (struct model){0};
    evidence_result_free(context, &result);
    return FESCUE_OK;
}

/* Under the ridge that was asked for, with the offsets that there are. */
static fescue_status fit_given(fescue_context *context, const struct final_request *request, const struct cells *kept,
                               struct final_fit *fit)
{
    struct solve_limits limits = {
        .iterations = ITERATIONS, .gradient = gradient, .change = settled, .deadline = request->deadline};
    struct low_rank *point = &fit->model.low_rank;
    struct problem problem = {0};
    struct solve_result result = {0};
    fescue_status status;
    TRY(problem_create(context, kept, &fit->model.offsets, request->choice->ridge, &problem));
    for (size_t k = 0; k < point->rank; k++)
        point->spectrum[k] /= problem.scale;
    status = solve_run(&problem, solver_find("grassmann-trust-region"), &limits, point, &result);
    for (size_t k = 0; k < point->rank; k++)
        point->spectrum[k] *= problem.scale;
done:
    solve_result_free(context, &result);
    problem_free(&problem);
    return status;
}

fescue_status final_robust_run(fescue_context *context, const struct final_request *request, struct final_fit *fit)
{
    struct cells kept = {0};
    double deviation = 0;
    fescue_status status;
    TRY(cells_sort(context, request, fit, &kept, &deviation));
    if (!(deviation > 0)) /* more than half of the cells are met: there is no noise to average out */
        fit->set_aside = 0;
    else if (request->options->ridge == (double)FESCUE_AUTO)
        TRY(fit_learnt(context, request, &kept, deviation, fit));
    else
        TRY(fit_given(context, request, &kept, fit));
done:
    cells_free(context, &kept);
    return status == FESCUE_STOPPED ? FESCUE_OK : status;
}
