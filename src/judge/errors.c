/* SPDX-License-Identifier: MIT
 *
 * How wrong a model is on cells it has not seen: root mean square and mean absolute error, in the table's units, of
 * estimates that are clamped to the bounds as the user will get them. Cells of weights w count w times, so that a
 * reading which is mostly noise does not drown the others; of pure noise it is then that of a reading of weight one.
 *
 * The store's blocks of rows are measured side by side; each leaves its three sums in its own place, and they are added
 * in block order, so the bits are the same for any number of threads. O(cells * rank).
 */
#include "judge/judge.h"

#include <math.h>

struct measuring {
    const struct cells *hidden;
    const struct model *model;
    double *residuals; /* or NULL */
    double *partial;   /* three a block: sums of squares, of sizes, of weights */
};

static void block_measure(void *job, size_t block, size_t worker)
{
    struct measuring *measuring = job;
    const struct half *half = &measuring->hidden->by_row;
    double square = 0, size = 0, weights = 0;
    (void)worker;
    for (uint32_t i = half->block[block]; i < half->block[block + 1]; i++) {
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++) {
            double estimate = model_estimate(measuring->model, i, half->across[k]);
            double residual = estimate - cells_value(measuring->hidden, half, k);
            double weight = half->weight != NULL ? (double)half->weight[k] : 1;
            square += weight * (residual * residual);
            size += weight * fabs(residual);
            weights += weight;
            if (measuring->residuals != NULL)
                measuring->residuals[k] = residual;
        }
    }
    measuring->partial[3 * block] = square;
    measuring->partial[3 * block + 1] = size;
    measuring->partial[3 * block + 2] = weights;
}

fescue_status errors_measure(fescue_context *context, const struct cells *hidden, const struct model *model,
                             double *residuals, struct errors *errors)
{
    fescue_status status = FESCUE_OK;
    struct measuring measuring = {.hidden = hidden, .model = model, .residuals = residuals, .partial = NULL};
    double sum[3] = {0};
    *errors = (struct errors){0};
    if (hidden->count == 0)
        goto done;
    TRY(TAKE(context, 3 * hidden->by_row.blocks, &measuring.partial));
    team_run(context, hidden->by_row.blocks, block_measure, &measuring);
    team_sum(context, measuring.partial, hidden->by_row.blocks, 3, sum);
    errors->count = hidden->count;
    errors->rmse = sqrt(sum[0] / sum[2]);
    errors->mae = sum[1] / sum[2];
done:
    GIVE(context, &measuring.partial);
    return status;
}
