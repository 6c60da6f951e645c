/* SPDX-License-Identifier: MIT
 *
 * A list of cells with what their errors depend on: leverage and the sensor's part of it, distance to the nearest seen
 * cell of the same sensor, whether that lies on one side only, whether anything at all was seen at their place. The
 * list of the cells that are missing, or a sample of them.
 *
 * Cells are measured in pieces of fixed size over the team, each piece writing its own places.
 */
#include "judge/judgement.h"

#include <math.h>

enum { PIECE = 4096 };
/* Cells ahead of which the systems are asked for. */
enum { AHEAD = 4 };
/* Above this many cells the unseen ones are sampled: a mean over as many has a relative error of some thousandth. */
static const double all_most = 1e6;
enum { SAMPLE = 100000 };

fescue_status judged_grow(fescue_context *context, uint64_t count, struct judged *judged)
{
    fescue_status status = FESCUE_OK;
    if (judged->count + count <= judged->capacity)
        return FESCUE_OK;
    uint64_t capacity = judged->count + count;
    TRY(RESIZE(context, capacity, &judged->row));
    TRY(RESIZE(context, capacity, &judged->column));
    TRY(RESIZE(context, capacity, &judged->square));
    TRY(RESIZE(context, capacity, &judged->at));
    judged->capacity = capacity;
done:
    return status;
}

void judged_free(fescue_context *context, struct judged *judged)
{
    GIVE(context, &judged->row);
    GIVE(context, &judged->column);
    GIVE(context, &judged->square);
    GIVE(context, &judged->at);
    judged->count = judged->capacity = 0;
}

struct measuring {
    const struct judged_view *view;
    struct judged *judged;
    uint64_t from;
};

void standing_find(const struct judged_view *view, uint32_t row, uint32_t column, struct standing *standing)
{
    struct leverage_parts parts = leverage_parts_at(view->leverage, row, column);
    standing->leverage = (float)(parts.row + parts.column);
    standing->own = (float)(view->sensors_are_rows ? parts.row : parts.column);
    standing->distance = 0;
    if (view->tracks == NULL)
        return;
    bool is_one_sided;
    uint32_t sensor = view->sensors_are_rows ? row : column, line = view->sensors_are_rows ? column : row;
    uint32_t seen = view->sensors_are_rows ? view->leverage->column_count[line] : view->leverage->row_count[line];
    standing->distance = (float)tracks_distance(view->tracks, sensor, view->tracks->placed[line], &is_one_sided);
    standing->marks |= (is_one_sided ? STANDING_ONE_SIDED : 0u) | (seen == 0 ? STANDING_DARK : 0u);
}

static void piece_measure(void *job, size_t piece, size_t worker)
{
    struct measuring *measuring = job;
    uint64_t from = measuring->from + (uint64_t)piece * PIECE, to = from + PIECE;
    (void)worker;
    if (to > measuring->judged->count)
        to = measuring->judged->count;
    const struct judged *judged = measuring->judged;
    for (uint64_t k = from; k < to; k++) {
        if (k + AHEAD < to)
            leverage_prefetch(measuring->view->leverage, judged->row[k + AHEAD], judged->column[k + AHEAD]);
        standing_find(measuring->view, judged->row[k], judged->column[k], &judged->at[k]);
    }
}

void judged_measure(fescue_context *context, const struct judged_view *view, uint64_t from, struct judged *judged)
{
    struct measuring measuring = {view, judged, from};
    uint64_t count = judged->count - from;
    team_run(context, (size_t)((count + PIECE - 1) / PIECE), piece_measure, &measuring);
}

static void missing_add(const struct line_weights *weights, uint32_t row, uint32_t column, struct judged *judged)
{
    judged->row[judged->count] = row;
    judged->column[judged->count] = column;
    judged->square[judged->count] = 0;
    judged->at[judged->count++] = (struct standing){.weight = (float)line_weights_at(weights, row, column)};
}

static bool is_seen(const struct half *by_row, uint32_t row, uint32_t column)
{
    uint64_t k = half_find(by_row, row, column);
    return k < by_row->start[row + 1] && by_row->across[k] == column;
}

fescue_status judged_missing(fescue_context *context, const struct cells *cells, const struct line_weights *weights,
                             uint64_t seed, struct judged *judged)
{
    const struct half *half = &cells->by_row;
    double all = (double)cells->rows * (double)cells->columns, missing = all - (double)cells->count;
    bool is_sampled = all > all_most && missing > SAMPLE;
    fescue_status status = judged_grow(context, is_sampled ? SAMPLE : (uint64_t)missing, judged);
    if (status != FESCUE_OK)
        return status;
    if (is_sampled) {
        struct random_stream random = random_open(seed, RANDOM_FOLD, 0x80000000u);
        while (judged->count < SAMPLE) {
            uint32_t row = (uint32_t)random_below(&random, cells->rows);
            uint32_t column = (uint32_t)random_below(&random, cells->columns);
            if (!is_seen(half, row, column))
                missing_add(weights, row, column, judged);
        }
        return FESCUE_OK;
    }
    for (uint32_t row = 0; row < cells->rows; row++) {
        uint64_t next = half->start[row];
        for (uint32_t column = 0; column < cells->columns; column++) {
            if (next < half->start[row + 1] && half->across[next] == column)
                next++;
            else
                missing_add(weights, row, column, judged);
        }
    }
    return FESCUE_OK;
}
