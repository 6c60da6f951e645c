/* SPDX-License-Identifier: MIT
 *
 * Hiding newcomers: all but a few cells of some rows (or columns), as if these lines had just joined.
 *
 * How few is taken from the table: the thin lines are those with at most max(3, a tenth of the median) cells, and a
 * chosen line keeps as many as a thin line drawn at random has; where there are no thin lines, one to five. Lines are
 * taken in random order until the share is hidden, passing over those that would keep more than half of their cells.
 * Which of its cells a line keeps is drawn too. Sequential, O(cells + lines).
 */
#include "judge/holdout_internal.h"

#include <math.h>

static uint64_t line_cells(const struct half *half, uint32_t line)
{
    return half->start[line + 1] - half->start[line];
}

static double count_at(const void *half, uint64_t line)
{
    return (double)line_cells(half, (uint32_t)line);
}

/* Lines with cells, but at most `most` of them, into thin; returns how many. */
static uint32_t thin_find(const struct half *half, double most, uint32_t *thin)
{
    uint32_t count = 0;
    for (uint32_t i = 0; i < half->lines; i++)
        if (line_cells(half, i) > 0 && (double)line_cells(half, i) <= most)
            thin[count++] = i;
    return count;
}

/* Hides cells of a line until `few` are left, each of the line's cells as likely as any other to stay. */
static uint64_t line_hide(const struct tracks *tracks, uint32_t line, uint64_t few, struct random_stream *random,
                          uint8_t *keep)
{
    uint64_t left = tracks->start[line + 1] - tracks->start[line], hidden = 0;
    for (uint64_t at = tracks->start[line]; at < tracks->start[line + 1]; at++, left--) {
        if (random_below(random, left) < few) {
            few--;
            continue;
        }
        keep[tracks->cell[at]] = 0;
        hidden++;
    }
    return hidden;
}

fescue_status holdout_lines(fescue_context *context, const struct cells *cells, const struct holdout_request *request,
                            uint8_t *keep)
{
    enum { FEW = 5, THIN = 3 };
    fescue_status status;
    bool is_rows = request->shape == FESCUE_HOLDOUT_ROWS;
    struct line_order across = {.along_columns = is_rows};
    const struct half *half = is_rows ? &cells->by_row : &cells->by_column;
    struct tracks tracks = {0};
    uint32_t *thin = NULL, *order = NULL;
    struct random_stream random = holdout_random(request, 1);
    uint64_t wanted = (uint64_t)(request->share * (double)cells->count), hidden = 0;
    TRY(tracks_create(context, cells, &across, &tracks));
    TRY(TAKE(context, half->lines, &thin));
    TRY(TAKE(context, half->lines, &order));
    holdout_shuffle(&random, order, half->lines);
    double median = order_pick(count_at, half, half->lines, half->lines / 2);
    uint32_t count = thin_find(half, fmax(THIN, median / 10), thin);
    for (uint32_t k = 0; k < half->lines && hidden < wanted; k++) {
        uint64_t few =
            count > 0 ? line_cells(half, thin[random_below(&random, count)]) : 1 + random_below(&random, FEW);
        if (2 * few < line_cells(half, order[k]))
            hidden += line_hide(&tracks, order[k], few, &random, keep);
    }
done:
    GIVE(context, &thin);
    GIVE(context, &order);
    tracks_free(context, &tracks);
    return status;
}
