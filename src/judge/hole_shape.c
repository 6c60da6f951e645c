/* SPDX-License-Identifier: MIT
 *
 * Which shape the holes have, so that what is hidden can be like them.
 *
 *   gaps      along an order of the lines, seen places come in far fewer stretches than chance makes (tracks.h): less
 *             than `broken` of the expected number, and five of its standard errors below it (about the square root of
 *             the expected number). Where a clock is known, only along it, and places without any cell are enough;
 *             else both ways, in the order the lines came in: that holes lie in runs along it says that the order
 *             means something.
 *   rows      thin rows, of at most max(2, a tenth of the median) cells, are a tenth of all rows and hold a quarter of
 *             the holes; columns likewise
 *   cells     else
 *
 * O(cells). Nothing is drawn.
 */
#include "judge/tracks.h"

#include <math.h>
#include <stdio.h>

static const double broken = 0.6, thin_lines = 0.1, thin_holes = 0.25;
enum { EXPECTED_LEAST = 20, MEDIAN_LEAST = 20 };

static bool is_broken(const struct tracks_runs *runs)
{
    double fewer = runs->expected - runs->runs;
    return runs->expected >= EXPECTED_LEAST && runs->runs < broken * runs->expected && fewer > 5 * sqrt(runs->expected);
}

static uint32_t empty_lines(const struct half *half)
{
    uint32_t empty = 0;
    for (uint32_t i = 0; i < half->lines; i++)
        empty += half->start[i] == half->start[i + 1];
    return empty;
}

static const char *places_word(bool along_columns)
{
    return along_columns ? "columns" : "rows";
}

static void runs_say(const struct tracks_runs *runs, bool along_columns, struct hole_shape *found)
{
    double length = runs->holes / fmax(1, runs->hole_runs);
    double by_chance = runs->holes / fmax(1, runs->expected); /* there are about as many holes as seen stretches */
    *found = (struct hole_shape){.shape = FESCUE_HOLDOUT_GAPS, .along_columns = along_columns};
    /* Whole numbers and tenths, whatever the locale. */
    snprintf(found->why, sizeof found->why, "holes are runs of %.0f %s on average, %.0f.%.0f by chance", length,
             places_word(along_columns), floor(by_chance), floor(10 * (by_chance - floor(by_chance))));
}

/* Whether holes lie in runs along an order; less is better in *share, the stretches over the expected ones. */
static void runs_judge(const struct tracks_runs *runs, bool along_columns, double *share, struct hole_shape *found)
{
    if (is_broken(runs) && runs->runs < *share * runs->expected) {
        *share = runs->runs / runs->expected;
        runs_say(runs, along_columns, found);
    }
}

static fescue_status along_try(fescue_context *context, const struct cells *cells, const struct line_order *order,
                               double *share, struct hole_shape *found)
{
    struct tracks tracks;
    fescue_status status = tracks_create(context, cells, order, &tracks);
    if (status != FESCUE_OK)
        return status;
    struct tracks_runs runs = tracks_count_runs(&tracks);
    tracks_free(context, &tracks);
    runs_judge(&runs, order->along_columns, share, found);
    return FESCUE_OK;
}

static double count_at(const void *half, uint64_t line)
{
    const struct half *side = half;
    return (double)(side->start[line + 1] - side->start[line]);
}

/* Whether thin lines are common on this side. */
static bool has_newcomers(const struct half *half, uint64_t cells, uint32_t *thin)
{
    double median = order_pick(count_at, half, half->lines, half->lines / 2), most = fmax(2, median / 10);
    double holes = (double)half->lines * half->length - (double)cells, held = 0;
    *thin = 0;
    for (uint32_t i = 0; i < half->lines; i++) {
        double count = count_at(half, i);
        bool is_thin = count > 0 && count <= most;
        *thin += is_thin;
        held += is_thin ? half->length - count : 0;
    }
    return median >= MEDIAN_LEAST && *thin >= thin_lines * half->lines && held >= thin_holes * holes;
}

static void newcomers_find(const struct cells *cells, struct hole_shape *found)
{
    uint32_t rows = 0, columns = 0;
    *found = (struct hole_shape){.shape = FESCUE_HOLDOUT_CELLS};
    snprintf(found->why, sizeof found->why, "holes lie about as chance would have them");
    if (has_newcomers(&cells->by_row, cells->count, &rows)) {
        found->shape = FESCUE_HOLDOUT_ROWS;
        snprintf(found->why, sizeof found->why, "%u of %u rows have hardly any cells", rows, cells->rows);
    } else if (has_newcomers(&cells->by_column, cells->count, &columns)) {
        found->shape = FESCUE_HOLDOUT_COLUMNS;
        snprintf(found->why, sizeof found->why, "%u of %u columns have hardly any cells", columns, cells->columns);
    }
}

fescue_status hole_shape_find(fescue_context *context, const struct cells *cells, const struct line_order *order,
                              struct hole_shape *found)
{
    fescue_status status = FESCUE_OK;
    double share = 1;
    if (cells->count == 0 || cells->count / cells->columns == cells->rows) {
        *found = (struct hole_shape){.shape = FESCUE_HOLDOUT_CELLS, .why = "there are no holes"};
        return FESCUE_OK;
    }
    newcomers_find(cells, found);
    if (order != NULL) {
        const struct half *places = order->along_columns ? &cells->by_column : &cells->by_row;
        uint32_t empty = empty_lines(places);
        if (empty > 0) {
            *found = (struct hole_shape){.shape = FESCUE_HOLDOUT_GAPS, .along_columns = order->along_columns};
            snprintf(found->why, sizeof found->why, "%u %s no cell at all", empty,
                     empty == 1 ? "time has" : "times have");
        }
        TRY(along_try(context, cells, order, &share, found));
        return FESCUE_OK;
    }
    struct tracks_runs along_rows = half_count_runs(&cells->by_column), along_columns = half_count_runs(&cells->by_row);
    runs_judge(&along_rows, false, &share, found);
    runs_judge(&along_columns, true, &share, found);
done:
    return status;
}
