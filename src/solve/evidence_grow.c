/* SPDX-License-Identifier: MIT
 *
 * The evidence fit from nothing: which components there are. The variational rounds only lose components, and one that
 * starts badly aligned may be lost although the data support it. So:
 *
 *   1  offsets by ridge least squares; the trimmed spectral start gives all components asked for at once
 *   2  rounds until the estimates settle; what the data do not support is pruned
 *   3  the leading pair of the residual joins as one more component, rounds again: while it lives, go on
 *   4  rounds to the final tolerance
 *
 * A component lives while its standard deviation in the table is above a thousandth of the noise's: pruned ones fall
 * towards 0 quadratically, living ones do not come near that. Growth by the residual's leading pair is what made nearly
 * every local method converge from few cells; the ridge per component, learnt from the data, is in the spirit of
 * MacKay 1992, "Bayesian interpolation".
 */
#include "solve/evidence_internal.h"

#include <math.h>

/* A pruned component: standard deviation in the table over that of the noise. */
#define COMPONENT_DEAD 1e-3
/* Rounds between two growths, and the tolerance at which they end earlier. */
#define GROW_ROUNDS 10
#define GROW_CHANGE 1e-3

/* How many components live. */
static size_t living(const struct evidence_result *fit)
{
    const struct low_rank *point = &fit->model.low_rank;
    double size = sqrt((double)point->rows * (double)point->columns);
    size_t count = 0;
    while (count < point->rank && point->spectrum[count] > COMPONENT_DEAD * fit->noise * size)
        count++;
    return count;
}

/* *model loses its components behind the first `rank`. */
static void model_trim(struct model *model, size_t rank)
{
    struct low_rank *point = &model->low_rank;
    if (rank >= point->rank)
        return;
    point->rank = rank;
    for (size_t side = 0; side < 2; side++) {
        struct matrix a = side == 0 ? point->left : point->right;
        for (size_t i = 0; i < a.rows; i++)
            for (size_t k = rank; k < a.columns; k++)
                MATRIX_AT(a, i, k) = 0;
    }
    point->left = matrix_left(point->left, rank);
    point->right = matrix_left(point->right, rank);
}

/* Adds components to *model, of which the offsets stand: the spectral start's `rank` when it has none yet, else one. */
static fescue_status model_grow(fescue_context *context, const struct cells *cells,
                                const struct evidence_request *request, struct model *model)
{
    struct problem problem = {0};
    struct low_rank *point = &model->low_rank;
    fescue_status status;
    TRY(problem_create(context, cells, &model->offsets, 0, &problem));
    if (point->rank == 0) {
        low_rank_free(context, point);
        TRY(start_spectral(&problem, request->rank, request->seed, point));
    } else {
        for (size_t k = 0; k < point->rank; k++)
            point->spectrum[k] /= problem.scale;
        TRY(start_grow(&problem, request->seed + point->rank, point));
    }
    for (size_t k = 0; k < point->rank; k++)
        point->spectrum[k] *= problem.scale;
done:
    problem_free(&problem);
    return status;
}

/* Replaces *fit by a fit that starts from its model. */
static fescue_status refit(fescue_context *context, const struct cells *cells, const struct evidence_request *request,
                           struct evidence_result *fit)
{
    struct evidence_result next = {0};
    fescue_status status = evidence_fit(context, cells, request, &fit->model, &next);
    if (status != FESCUE_OK)
        return status;
    evidence_result_free(context, fit);
    *fit = next;
    return FESCUE_OK;
}

fescue_status evidence_learn(fescue_context *context, const struct cells *cells, const struct evidence_request *request,
                             struct evidence_result *out)
{
    struct evidence_request loose = *request;
    size_t shorter = cells->rows < cells->columns ? cells->rows : cells->columns, alive = 0;
    fescue_status status;
    *out = (struct evidence_result){.model = {.rows = cells->rows, .columns = cells->columns}};
    out->model.bounds = (struct fescue_range){-INFINITY, INFINITY};
    loose.rounds = GROW_ROUNDS;
    loose.change = GROW_CHANGE;
    TRY(offsets_fit(context, cells, request->offsets, &out->model.offsets));
    TRY(low_rank_create(context, cells->rows, cells->columns, 0, &out->model.low_rank));
    for (;;) {
        TRY(model_grow(context, cells, &loose, &out->model));
        loose.rank = out->model.low_rank.rank;
        TRY(refit(context, cells, &loose, out));
        size_t now = living(out);
        model_trim(&out->model, now > 0 ? now : 1);
        if (now <= alive || now >= shorter)
            break;
        alive = now;
        loose.noise_start = out->noise * out->noise;
    }
    loose = *request;
    loose.rank = out->model.low_rank.rank;
    loose.noise_start = out->noise * out->noise;
    TRY(refit(context, cells, &loose, out));
    model_trim(&out->model, living(out));
done:
    if (status != FESCUE_OK)
        evidence_result_free(context, out);
    return status;
}
