/* SPDX-License-Identifier: MIT
 *
 * Least absolute deviations for lines of the longer side, by iteratively reweighted least squares (Schlossmacher 1973).
 *
 *     minimise  sum over the cells of line j of |U_i w - t_i|  +  ridge/2 |w|^2
 *
 * One round: c_i = e / max(|r_i|, e) with the residuals r of the w there is, then
 *
 *     w <- (sum c_i U_i'U_i + e ridge I)^-1 sum c_i U_i' t_i.
 *
 * For e > 0 that goes down the sum in which residuals below e count as r^2 / (2 e) + e/2 (Huber 1964), step by step
 * (Weiszfeld's argument: the weighted sum of squares touches it from above at the present w). The factor e keeps the
 * weights in (0, 1] however small the residuals are. A line with fewer cells than r and no ridge gets what the
 * breakdown rule of packed_cholesky picks.
 *
 * Cost a round: cells (r^2 / 2 + 2 r), r^3 / 6 a line. Parallel over lines, each with its own place for all it yields.
 */
#include "solve/stream_internal.h"

#include <assert.h>
#include <math.h>

struct fit_job {
    struct batches *batches;
    const struct absolute_fit *fit;
};

static double residual_at(const struct batches *b, struct matrix basis, const double *w, uint64_t c)
{
    const double *u = &MATRIX_AT(basis, b->by_long->across[c], 0);
    double residual = -cells_value(&b->field->problem->target, b->by_long, c);
    for (size_t k = 0; k < b->rank; k++)
        residual += u[k] * w[k];
    return residual;
}

/* system += c U_i'U_i, side += c U_i' x */
static void cell_gather(const double *u, double x, double c, double *system, double *side, size_t rank)
{
    for (size_t p = 0; p < rank; p++) {
        double part = c * u[p];
        side[p] += part * x;
        for (size_t q = 0; q <= p; q++)
            *system++ += part * u[q];
    }
}

static void line_round(const struct fit_job *job, uint32_t line, double *system, double *w)
{
    const struct batches *b = job->batches;
    const struct absolute_fit *fit = job->fit;
    double side[PACKED_INVERSE_MOST] = {0};
    size_t rank = b->rank;
    for (size_t e = 0; e < packed_size(rank); e++)
        system[e] = 0;
    for (size_t k = 0; k < rank; k++)
        system[packed_size(k) + k] = fit->least * fit->ridge;
    for (uint64_t c = b->by_long->start[line]; c < b->by_long->start[line + 1]; c++) {
        double share = fit->least / fmax(fabs(residual_at(b, fit->basis, w, c)), fit->least);
        cell_gather(&MATRIX_AT(fit->basis, b->by_long->across[c], 0),
                    cells_value(&b->field->problem->target, b->by_long, c), share, system, side, rank);
    }
    packed_cholesky(system, rank);
    packed_solve(system, rank, side);
    for (size_t k = 0; k < rank; k++)
        w[k] = side[k];
}

static void line_fit(void *argument, size_t k, size_t worker)
{
    const struct fit_job *job = argument;
    const struct batches *b = job->batches;
    const struct absolute_fit *fit = job->fit;
    uint32_t line = batch_line(b, k);
    double *w = &MATRIX_AT(fit->weights, line, 0), *sums = fit->sums + (size_t)line * 2;
    for (unsigned round = 0; round < fit->rounds; round++)
        line_round(job, line, batch_room(b, worker), w);
    sums[0] = sums[1] = 0;
    for (uint64_t c = b->by_long->start[line]; c < b->by_long->start[line + 1]; c++) {
        double residual = residual_at(b, fit->basis, w, c);
        sums[0] += fabs(residual);
        sums[1] += residual * residual;
    }
    for (size_t l = 0; l < b->rank; l++)
        MATRIX_AT(b->weights, k, l) = w[l];
}

void batch_fit_absolute(struct batches *batches, const struct absolute_fit *fit)
{
    struct fit_job job = {.batches = batches, .fit = fit};
    assert(batches->rank <= PACKED_INVERSE_MOST && (fit->rounds == 0 || fit->least > 0));
    batch_lines_run(batches, line_fit, &job);
}
