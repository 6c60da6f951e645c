/* SPDX-License-Identifier: MIT
 *
 * Hiding a share of the observed cells before anything is estimated.
 *
 * Every cell (i, j) gets the number u_ij, uniform in [0, 1), drawn from the seed and from its position i*columns + j
 * and from nothing else: not from the order of the input, the number of threads or the cells around it. It is hidden
 * when u_ij < share. Then the lines that would have lost all their cells get one back:
 *
 *     rows first:     a row with cells that are all hidden keeps the one with the largest u (the leftmost of equals);
 *     columns second: likewise, the topmost of equals.
 *
 * Giving back never hides, so the second pass cannot empty a row again. Adding or dropping cells elsewhere changes the
 * fate of a cell only through its own two lines.
 *
 * Cost: one draw a cell, in blocks of rows over the team (each block writes its own cells' marks and nothing else), and
 * one pass that counts what the columns kept. Workspace: a byte a cell and eight a column.
 */
#include "judge/judge.h"

#include <assert.h>

struct draw {
    const struct cells *cells;
    double share;
    uint64_t seed;
    uint8_t *keep; /* by row order */
};

static double cell_draw(const struct draw *draw, uint32_t row, uint32_t column)
{
    uint64_t position = (uint64_t)row * draw->cells->columns + column;
    return random_uniform_at(draw->seed, RANDOM_HOLDOUT, 0, position);
}

static void row_draw(struct draw *draw, uint32_t row)
{
    const struct half *half = &draw->cells->by_row;
    uint64_t from = half->start[row], to = half->start[row + 1], best = from;
    bool any = false;
    double most = -1;
    for (uint64_t k = from; k < to; k++) {
        double u = cell_draw(draw, row, half->across[k]);
        draw->keep[k] = u >= draw->share;
        any |= draw->keep[k];
        if (u > most) {
            most = u;
            best = k;
        }
    }
    if (!any && to > from)
        draw->keep[best] = 1;
}

static void rows_draw(void *job, size_t block, size_t worker)
{
    struct draw *draw = job;
    const struct half *half = &draw->cells->by_row;
    (void)worker;
    for (uint32_t row = half->block[block]; row < half->block[block + 1]; row++)
        row_draw(draw, row);
}

/* Where cell (row, column), which is there, stands in row order. */
static uint64_t cell_find(const struct half *by_row, uint32_t row, uint32_t column)
{
    uint64_t low = by_row->start[row], high = by_row->start[row + 1];
    while (high - low > 1) {
        uint64_t middle = low + (high - low) / 2;
        if (by_row->across[middle] <= column)
            low = middle;
        else
            high = middle;
    }
    assert(by_row->across[low] == column);
    return low;
}

static void column_keep_one(struct draw *draw, uint32_t column)
{
    const struct half *half = &draw->cells->by_column;
    uint32_t best = 0;
    double most = -1;
    for (uint64_t k = half->start[column]; k < half->start[column + 1]; k++) {
        double u = cell_draw(draw, half->across[k], column);
        if (u > most) {
            most = u;
            best = half->across[k];
        }
    }
    draw->keep[cell_find(&draw->cells->by_row, best, column)] = 1;
}

static fescue_status columns_keep_one(fescue_context *context, struct draw *draw)
{
    fescue_status status = FESCUE_OK;
    const struct cells *cells = draw->cells;
    uint64_t *kept = NULL;
    TRY(TAKE(context, cells->columns, &kept));
    for (uint64_t k = 0; k < cells->count; k++)
        kept[cells->by_row.across[k]] += draw->keep[k];
    for (uint32_t j = 0; j < cells->columns; j++) {
        bool has_cells = cells->by_column.start[j + 1] > cells->by_column.start[j];
        if (has_cells && kept[j] == 0)
            column_keep_one(draw, j);
    }
done:
    GIVE(context, &kept);
    return status;
}

fescue_status holdout_split(fescue_context *context, const struct cells *cells, double share, uint64_t seed,
                            struct holdout *holdout)
{
    assert(share >= 0 && share <= 1);
    fescue_status status = FESCUE_OK;
    struct draw draw = {.cells = cells, .share = share, .seed = seed, .keep = NULL};
    *holdout = (struct holdout){0};
    TRY(TAKE(context, cells->count, &draw.keep));
    team_run(context, cells->by_row.blocks, rows_draw, &draw);
    TRY(columns_keep_one(context, &draw));
    TRY(cells_select(context, cells, draw.keep, &holdout->kept));
    for (uint64_t k = 0; k < cells->count; k++)
        draw.keep[k] = !draw.keep[k];
    TRY(cells_select(context, cells, draw.keep, &holdout->hidden));
done:
    GIVE(context, &draw.keep);
    if (status != FESCUE_OK)
        holdout_free(context, holdout);
    return status;
}

void holdout_free(fescue_context *context, struct holdout *holdout)
{
    cells_free(context, &holdout->kept);
    cells_free(context, &holdout->hidden);
}
