/* SPDX-License-Identifier: MIT
 *
 * Hiding a share of the observed cells before anything is estimated.
 *
 * Scattered: every cell (i, j) gets the number u_ij, uniform in [0, 1), drawn from the seed and from its position
 * i*columns + j and from nothing else: not from the order of the input, the number of threads or the cells around it.
 * It is hidden when u_ij < share. Fold f = 1, 2, ... draws from a stream of its own kind and shifts it,
 *
 *     u^f_ij = u_ij - ((f - 1) mod K) share    modulo 1,      K = the number of whole shares in 1,
 *
 * so that K folds hide different cells. The other shapes stand in holdout_gaps.c and holdout_lines.c.
 *
 * Then the lines that would have lost all their cells get one back:
 *
 *     rows first:     a row with cells that are all hidden keeps the one with the largest u (the leftmost of equals);
 *     columns second: likewise, the topmost of equals.
 *
 * Giving back never hides, so the second pass cannot empty a row again. Adding or dropping cells elsewhere changes the
 * fate of a scattered cell only through its own two lines. Places that were hidden whole, as the table's own are, stay
 * empty.
 *
 * Cost: one draw a cell, in blocks of rows over the team (each block writes its own cells' marks and nothing else), and
 * one pass that counts what the columns kept. Workspace: a byte a cell and nine a line.
 */
#include "judge/holdout_internal.h"

#include <assert.h>
#include <string.h>

struct draw {
    const struct cells *cells;
    double share, shift;
    uint64_t seed;
    enum random_purpose purpose;
    uint32_t which;
    uint8_t *keep;       /* by row order */
    const uint8_t *dark; /* rows that stay empty; NULL: none */
};

static double cell_draw(const struct draw *draw, uint32_t row, uint32_t column)
{
    uint64_t position = (uint64_t)row * draw->cells->columns + column;
    double u = random_uniform_at(draw->seed, draw->purpose, draw->which, position) - draw->shift;
    return u < 0 ? u + 1 : u;
}

static void rows_draw(void *job, size_t block, size_t worker)
{
    struct draw *draw = job;
    const struct half *half = &draw->cells->by_row;
    (void)worker;
    for (uint32_t row = half->block[block]; row < half->block[block + 1]; row++)
        for (uint64_t k = half->start[row]; k < half->start[row + 1]; k++)
            draw->keep[k] = cell_draw(draw, row, half->across[k]) >= draw->share;
}

static void row_keep_one(struct draw *draw, uint32_t row)
{
    const struct half *half = &draw->cells->by_row;
    uint64_t from = half->start[row], to = half->start[row + 1], best = from;
    double most = -1;
    for (uint64_t k = from; k < to; k++) {
        double u = cell_draw(draw, row, half->across[k]);
        if (draw->keep[k])
            return;
        if (u > most) {
            most = u;
            best = k;
        }
    }
    if (to > from && (draw->dark == NULL || !draw->dark[row]))
        draw->keep[best] = 1;
}

static void rows_keep_one(void *job, size_t block, size_t worker)
{
    struct draw *draw = job;
    const struct half *half = &draw->cells->by_row;
    (void)worker;
    for (uint32_t row = half->block[block]; row < half->block[block + 1]; row++)
        row_keep_one(draw, row);
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
    uint64_t k = half_find(&draw->cells->by_row, best, column);
    assert(draw->cells->by_row.across[k] == column);
    draw->keep[k] = 1;
}

/* No line that has cells is left without any. */
static fescue_status lines_keep_one(fescue_context *context, struct draw *draw, const uint8_t *dark_columns)
{
    fescue_status status = FESCUE_OK;
    const struct cells *cells = draw->cells;
    uint64_t *kept = NULL;
    team_run(context, cells->by_row.blocks, rows_keep_one, draw);
    TRY(TAKE(context, cells->columns, &kept));
    for (uint64_t k = 0; k < cells->count; k++)
        kept[cells->by_row.across[k]] += draw->keep[k];
    for (uint32_t j = 0; j < cells->columns; j++) {
        bool has_cells = cells->by_column.start[j + 1] > cells->by_column.start[j];
        if (has_cells && kept[j] == 0 && (dark_columns == NULL || !dark_columns[j]))
            column_keep_one(draw, j);
    }
done:
    GIVE(context, &kept);
    return status;
}

static struct draw draw_of(const struct cells *cells, const struct holdout_request *request, double share)
{
    struct draw draw = {.cells = cells, .share = share, .seed = request->seed, .purpose = RANDOM_HOLDOUT};
    uint32_t apart = share > 0 && share < 1 ? (uint32_t)(1 / share) : 1;
    if (request->fold > 0) {
        draw.purpose = RANDOM_FOLD;
        draw.which = (request->fold - 1) / apart;
        draw.shift = share * ((request->fold - 1) % apart);
    }
    return draw;
}

struct random_stream holdout_random(const struct holdout_request *request, uint32_t which)
{
    return random_open(request->seed, RANDOM_FOLD, 0x40000000u + 16 * request->fold + which);
}

void holdout_shuffle(struct random_stream *random, uint32_t *order, uint32_t count)
{
    for (uint32_t k = 0; k < count; k++)
        order[k] = k;
    for (uint32_t k = count; k > 1; k--) {
        uint32_t other = (uint32_t)random_below(random, k), kept = order[k - 1];
        order[k - 1] = order[other];
        order[other] = kept;
    }
}

static fescue_status marks_make(fescue_context *context, const struct cells *cells,
                                const struct holdout_request *request, struct draw *draw, uint8_t *dark)
{
    fescue_status status = FESCUE_OK;
    bool is_gaps = request->shape == FESCUE_HOLDOUT_GAPS, has_holes = cells->count / cells->columns < cells->rows;
    double scattered = request->shape == FESCUE_HOLDOUT_CELLS || (is_gaps && !has_holes) ? request->share
                       : is_gaps && request->is_pooled                                   ? request->share / 2
                                                                                         : 0;
    *draw = draw_of(cells, request, scattered);
    TRY(TAKE(context, cells->count, &draw->keep));
    team_run(context, cells->by_row.blocks, rows_draw, draw);
    if (is_gaps && has_holes)
        TRY(holdout_gaps(context, cells, request, request->share - scattered, draw->keep, dark));
    if (request->shape == FESCUE_HOLDOUT_ROWS || request->shape == FESCUE_HOLDOUT_COLUMNS)
        TRY(holdout_lines(context, cells, request, draw->keep));
    bool dark_columns = is_gaps && request->order != NULL && request->order->along_columns;
    draw->dark = is_gaps && !dark_columns ? dark : NULL;
    TRY(lines_keep_one(context, draw, dark_columns ? dark : NULL));
done:
    return status;
}

fescue_status holdout_cut(fescue_context *context, const struct cells *cells, const struct holdout_request *request,
                          struct holdout *holdout)
{
    assert(request->share >= 0 && request->share <= 1 && request->shape != FESCUE_HOLDOUT_AUTO);
    fescue_status status = FESCUE_OK;
    struct draw draw = {.keep = NULL};
    uint8_t *dark = NULL;
    *holdout = (struct holdout){0};
    TRY(TAKE(context, (size_t)cells->rows + cells->columns, &dark));
    if (request->share == 0) { /* all is kept, and need not be held twice */
        holdout->kept = cells_share(cells);
        TRY(TAKE(context, cells->count, &draw.keep));
    } else {
        TRY(marks_make(context, cells, request, &draw, dark));
        TRY(cells_select(context, cells, draw.keep, &holdout->kept));
        for (uint64_t k = 0; k < cells->count; k++)
            draw.keep[k] = !draw.keep[k];
    }
    TRY(cells_select(context, cells, draw.keep, &holdout->hidden));
done:
    GIVE(context, &draw.keep);
    GIVE(context, &dark);
    if (status != FESCUE_OK)
        holdout_free(context, holdout);
    return status;
}

fescue_status holdout_split(fescue_context *context, const struct cells *cells, double share, uint64_t seed,
                            struct holdout *holdout)
{
    struct holdout_request request = {.shape = FESCUE_HOLDOUT_CELLS, .share = share, .seed = seed};
    return holdout_cut(context, cells, &request, holdout);
}

void holdout_free(fescue_context *context, struct holdout *holdout)
{
    cells_free(context, &holdout->kept);
    cells_free(context, &holdout->hidden);
}
