/* SPDX-License-Identifier: MIT
 *
 * A list of cells with what their errors depend on: leverage, distance to the nearest seen cell of the same sensor,
 * whether that lies on one side only, whether anything at all was seen at their place. The list of the cells that are
 * missing, or a sample of them.
 *
 * Cells are measured in pieces of fixed size over the team, each piece writing its own places.
 */
#include "judge/judgement.h"

#include <math.h>

enum { PIECE = 4096 };
/* Above this many cells the unseen ones are sampled: a mean over as many has a relative error of a thousandth. */
static const double all_most = 1e6;
enum { SAMPLE = 200000 };

fescue_status judged_grow(fescue_context *context, uint64_t count, struct judged *judged)
{
    fescue_status status = FESCUE_OK;
    if (judged->count + count <= judged->capacity)
        return FESCUE_OK;
    uint64_t capacity = judged->count + count;
    TRY(RESIZE(context, capacity, &judged->row));
    TRY(RESIZE(context, capacity, &judged->column));
    TRY(RESIZE(context, capacity, &judged->square));
    TRY(RESIZE(context, capacity, &judged->leverage));
    TRY(RESIZE(context, capacity, &judged->distance));
    TRY(RESIZE(context, capacity, &judged->marks));
    judged->capacity = capacity;
done:
    return status;
}

void judged_free(fescue_context *context, struct judged *judged)
{
    GIVE(context, &judged->row);
    GIVE(context, &judged->column);
    GIVE(context, &judged->square);
    GIVE(context, &judged->leverage);
    GIVE(context, &judged->distance);
    GIVE(context, &judged->marks);
    judged->count = judged->capacity = 0;
}

struct measuring {
    const struct judged_view *view;
    struct judged *judged;
    uint64_t from;
};

/* Steps to the nearest place at which anything was seen; places without any cell are few, so a walk does. */
static void cell_measure(const struct judged_view *view, struct judged *judged, uint64_t k)
{
    uint32_t row = judged->row[k], column = judged->column[k];
    judged->leverage[k] = leverage_at(view->leverage, row, column);
    judged->distance[k] = 0;
    if (view->tracks == NULL)
        return;
    bool is_one_sided, by_column = view->tracks->along_columns;
    uint32_t sensor = by_column ? row : column, line = by_column ? column : row;
    const struct half *places = by_column ? &view->seen->by_column : &view->seen->by_row;
    judged->distance[k] = tracks_distance(view->tracks, sensor, view->tracks->placed[line], &is_one_sided);
    if (is_one_sided)
        judged->marks[k] |= JUDGED_ONE_SIDED;
    if (places->start[line] == places->start[line + 1])
        judged->marks[k] |= JUDGED_DARK;
}

static void piece_measure(void *job, size_t piece, size_t worker)
{
    struct measuring *measuring = job;
    uint64_t from = measuring->from + (uint64_t)piece * PIECE, to = from + PIECE;
    (void)worker;
    if (to > measuring->judged->count)
        to = measuring->judged->count;
    for (uint64_t k = from; k < to; k++)
        cell_measure(measuring->view, measuring->judged, k);
}

void judged_measure(fescue_context *context, const struct judged_view *view, uint64_t from, struct judged *judged)
{
    struct measuring measuring = {view, judged, from};
    uint64_t count = judged->count - from;
    team_run(context, (size_t)((count + PIECE - 1) / PIECE), piece_measure, &measuring);
}

static void missing_add(struct judged *judged, uint32_t row, uint32_t column)
{
    judged->row[judged->count] = row;
    judged->column[judged->count] = column;
    judged->square[judged->count] = 0;
    judged->marks[judged->count++] = 0;
}

static bool is_seen(const struct half *by_row, uint32_t row, uint32_t column)
{
    uint64_t low = by_row->start[row], high = by_row->start[row + 1];
    while (low < high) {
        uint64_t middle = low + (high - low) / 2;
        if (by_row->across[middle] == column)
            return true;
        if (by_row->across[middle] < column)
            low = middle + 1;
        else
            high = middle;
    }
    return false;
}

fescue_status judged_missing(fescue_context *context, const struct cells *cells, uint64_t seed, struct judged *judged)
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
                missing_add(judged, row, column);
        }
        return FESCUE_OK;
    }
    for (uint32_t row = 0; row < cells->rows; row++) {
        uint64_t next = half->start[row];
        for (uint32_t column = 0; column < cells->columns; column++) {
            if (next < half->start[row + 1] && half->across[next] == column)
                next++;
            else
                missing_add(judged, row, column);
        }
    }
    return FESCUE_OK;
}
