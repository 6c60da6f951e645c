/* SPDX-License-Identifier: MIT
 *
 * The offsets of what a low-rank part leaves.
 *
 * Offsets that are fitted first take in a part of the low-rank structure: the mean of the seen cells of a row holds the
 * mean of u_i . v_j over just those columns that were seen, about |u||v|/sqrt(n_i). The low-rank part then has to spend
 * up to two components on undoing that. Fitted again to y = x - U V' the effects are clean, their ridges fall with what
 * is left as noise, and the components are free for what they are for. Fitting one after the other is block descent on
 * the joint least-squares problem; a few rounds suffice where cells are not very few.
 *
 * refit_offsets solves for all effects at once (offsets_fit). refit_sweep, for the many fits that are only compared,
 * starts from the effects it is given and goes over rows and columns in turn,
 *
 *     a_i = sum_j (y_ij - m - b_j) / (n_i + R),    b_j = sum_i (y_ij - m - a_i) / (n_j + C),    m += mean residual,
 *
 * SWEEPS times: on patterns without structure each sweep leaves about (n_i^-1/2 + n_j^-1/2)^2 of the error. Its ridges
 * are one step of expectation and maximisation further than those given (Dempster, Laird, Rubin 1977; for effects see
 * Searle, Casella, McCulloch 1992, "Variance components", chapter 8): noise = sum of squares left / (N - p - q + 1),
 * R = noise / mean_i(a_i^2 + noise / (n_i + R)). Effects whose ridge is infinite (switched off, or not of the kind)
 * stay zero.
 *
 *     n, N    cells of a line, of the table     p, q    rows and columns with cells      R, C   ridges
 *
 * Cost: one pass over the cells both ways, O(cells * rank), then an offsets_fit, or 2 SWEEPS + 1 passes of O(cells).
 * Workspace: one more set of values. Parallel line by line, sums in block order: the bits do not depend on threads.
 */
#include "judge/judge_internal.h"

#include <assert.h>
#include <math.h>

/* ---- what is left ------------------------------------------------------------------------------------------------ */

struct leftover {
    const struct cells *cells;
    const struct half *half;
    const struct low_rank *point;
    void *value; /* y, in the half's order */
    bool by_row;
};

static void block_leave(void *job, size_t block, size_t worker)
{
    const struct leftover *left = job;
    const struct half *half = left->half;
    (void)worker;
    for (uint32_t line = half->block[block]; line < half->block[block + 1]; line++)
        for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++) {
            uint32_t across = half->across[k];
            double low_rank =
                left->by_row ? low_rank_entry(left->point, line, across) : low_rank_entry(left->point, across, line);
            double y = cells_value(left->cells, half, k) - low_rank;
            if (left->cells->precision == FESCUE_SINGLE)
                ((float *)left->value)[k] = (float)y;
            else
                ((double *)left->value)[k] = y;
        }
}

static fescue_status rest_create(fescue_context *context, const struct cells *cells, const struct low_rank *point,
                                 struct cells *rest)
{
    assert(point->rows == cells->rows && point->columns == cells->columns);
    struct leftover left = {.cells = cells, .half = &cells->by_row, .point = point, .by_row = true};
    fescue_status status = cells_alike(context, cells, cells->precision, rest);
    if (status != FESCUE_OK)
        return status;
    left.value = rest->by_row.value;
    team_run(context, left.half->blocks, block_leave, &left);
    left.half = &cells->by_column;
    left.by_row = false;
    left.value = rest->by_column.value;
    team_run(context, left.half->blocks, block_leave, &left);
    return FESCUE_OK;
}

fescue_status refit_offsets(fescue_context *context, const struct cells *cells, enum fescue_offsets kind,
                            const struct low_rank *point, struct offsets *offsets)
{
    fescue_status status = FESCUE_OK;
    struct cells rest = {0};
    if (point->rank == 0 || kind == FESCUE_OFFSETS_NONE)
        return offsets_fit(context, cells, kind, offsets);
    TRY(rest_create(context, cells, point, &rest));
    TRY(offsets_fit(context, &rest, kind, offsets));
done:
    cells_free(context, &rest);
    return status;
}

/* ---- sweeps -------------------------------------------------------------------------------------------------------
 */

enum { SWEEPS = 3 };
static const double ridge_least = 1e-8; /* as offsets_fit has it */

struct sweeping {
    fescue_context *context;
    const struct cells *rest;
    const struct half *half;
    double mean, ridge;
    double *effect;      /* of the half's lines */
    const double *other; /* of its positions */
    double partial[CELLS_MOST_BLOCKS];
};

static uint64_t line_cells(const struct half *half, uint32_t line)
{
    return half->start[line + 1] - half->start[line];
}

static double line_sum(const struct sweeping *sweeping, uint32_t line)
{
    const struct half *half = sweeping->half;
    double sum = 0;
    for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++)
        sum += cells_value(sweeping->rest, half, k) - sweeping->mean - sweeping->other[half->across[k]];
    return sum;
}

/* Effects of a block of lines; leaves the sum of residuals under them. */
static void block_sweep(void *job, size_t block, size_t worker)
{
    struct sweeping *sweeping = job;
    const struct half *half = sweeping->half;
    double left = 0;
    (void)worker;
    for (uint32_t line = half->block[block]; line < half->block[block + 1]; line++) {
        double count = (double)line_cells(half, line), sum = line_sum(sweeping, line);
        sweeping->effect[line] = count > 0 ? sum / (count + sweeping->ridge) : 0;
        left += sum - count * sweeping->effect[line];
    }
    sweeping->partial[block] = left;
}

static void block_square(void *job, size_t block, size_t worker)
{
    struct sweeping *sweeping = job;
    const struct half *half = sweeping->half;
    double square = 0;
    (void)worker;
    for (uint32_t line = half->block[block]; line < half->block[block + 1]; line++)
        for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++) {
            double residual = cells_value(sweeping->rest, half, k) - sweeping->mean - sweeping->effect[line] -
                              sweeping->other[half->across[k]];
            square += residual * residual;
        }
    sweeping->partial[block] = square;
}

static double sweeping_sum(struct sweeping *sweeping, team_task *task)
{
    double sum = 0;
    team_run(sweeping->context, sweeping->half->blocks, task, sweeping);
    team_sum(sweeping->context, sweeping->partial, sweeping->half->blocks, 1, &sum);
    return sum;
}

static void side_take(struct sweeping *sweeping, struct offsets *offsets, bool by_row)
{
    sweeping->half = by_row ? &sweeping->rest->by_row : &sweeping->rest->by_column;
    sweeping->mean = offsets->mean;
    sweeping->effect = by_row ? offsets->row : offsets->column;
    sweeping->other = by_row ? offsets->column : offsets->row;
    sweeping->ridge = by_row ? offsets->row_ridge : offsets->column_ridge;
}

/* Moves the mean of a side's effects into the mean of all: no estimate changes. */
static void side_centre(const struct half *half, double *effect, double *mean)
{
    double sum = 0, lines = 0;
    for (uint32_t i = 0; i < half->lines; i++) {
        sum += effect[i];
        lines += line_cells(half, i) > 0;
    }
    for (uint32_t i = 0; i < half->lines && lines > 0; i++)
        effect[i] -= line_cells(half, i) > 0 ? sum / lines : 0;
    *mean += lines > 0 ? sum / lines : 0;
}

static double side_ridge(const struct half *half, const double *effect, double ridge, double noise)
{
    double square = 0, lines = 0;
    if (!isfinite(ridge))
        return ridge;
    for (uint32_t i = 0; i < half->lines; i++) {
        double count = (double)line_cells(half, i);
        square += count > 0 ? effect[i] * effect[i] + noise / (count + ridge) : 0;
        lines += count > 0;
    }
    return square > 0 ? fmax(noise * lines / square, ridge_least) : ridge;
}

static void ridges_renew(struct sweeping *sweeping, struct offsets *offsets)
{
    const struct half *rows = &sweeping->rest->by_row, *columns = &sweeping->rest->by_column;
    double freedom = (double)sweeping->rest->count + 1;
    for (uint32_t i = 0; i < rows->lines; i++)
        freedom -= line_cells(rows, i) > 0;
    for (uint32_t j = 0; j < columns->lines; j++)
        freedom -= line_cells(columns, j) > 0;
    if (freedom <= 0)
        return;
    side_take(sweeping, offsets, true);
    double noise = sweeping_sum(sweeping, block_square) / freedom;
    offsets->row_ridge = side_ridge(rows, offsets->row, offsets->row_ridge, noise);
    offsets->column_ridge = side_ridge(columns, offsets->column, offsets->column_ridge, noise);
}

fescue_status refit_sweep(fescue_context *context, const struct cells *cells, const struct low_rank *point,
                          struct offsets *offsets)
{
    fescue_status status = FESCUE_OK;
    struct cells rest = {0};
    struct sweeping sweeping = {.context = context, .rest = &rest};
    if (offsets->kind == FESCUE_OFFSETS_NONE || cells->count == 0)
        return FESCUE_OK;
    TRY(rest_create(context, cells, point, &rest));
    for (int sweep = 0; sweep < SWEEPS; sweep++) {
        side_take(&sweeping, offsets, true);
        (void)sweeping_sum(&sweeping, block_sweep);
        side_take(&sweeping, offsets, false);
        offsets->mean += sweeping_sum(&sweeping, block_sweep) / (double)cells->count;
    }
    ridges_renew(&sweeping, offsets);
    side_centre(&rest.by_row, offsets->row, &offsets->mean);
    side_centre(&rest.by_column, offsets->column, &offsets->mean);
done:
    cells_free(context, &rest);
    return status;
}
