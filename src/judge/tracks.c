/* SPDX-License-Identifier: MIT
 *
 * The table as tracks along an order of its rows or columns.
 *
 *     sensor s    a line of the side that is not in order
 *     place p     0 .. T-1 along the order; at[p] is when it is, in steps
 *     n_s         places at which sensor s was seen
 *
 * The tracks are filled place by place, so each comes out ascending whatever the order is: a counting sort, O(cells).
 * The distance of a cell to the nearest seen one of its sensor is a binary search, O(log n_s).
 *
 * Runs: n_s seen places of T, placed anywhere with equal probability, make n_s (T - n_s + 1) / T stretches in the mean
 * (Wald, Wolfowitz 1940, "On a test whether two samples are from the same population"). Many fewer than that means
 * that holes come in runs.
 */
#include "judge/tracks.h"

#include <math.h>

/* map[k] is where the k-th cell in column order stands in row order. */
static fescue_status map_create(fescue_context *context, const struct cells *cells, uint64_t **map)
{
    uint64_t *next = NULL;
    fescue_status status;
    TRY(TAKE(context, cells->count, map));
    TRY(TAKE(context, cells->columns, &next));
    for (uint32_t j = 0; j < cells->columns; j++)
        next[j] = cells->by_column.start[j];
    for (uint64_t k = 0; k < cells->count; k++)
        (*map)[next[cells->by_row.across[k]]++] = k;
done:
    GIVE(context, &next);
    return status;
}

static fescue_status tracks_take(fescue_context *context, const struct cells *cells, struct tracks *tracks)
{
    fescue_status status;
    TRY(TAKE(context, (size_t)tracks->sensors + 1, &tracks->start));
    TRY(TAKE(context, cells->count, &tracks->cell));
    TRY(TAKE(context, cells->count, &tracks->rank));
    TRY(TAKE(context, tracks->places, &tracks->at));
    TRY(TAKE(context, tracks->places, &tracks->placed));
done:
    return status;
}

/* Appends the cells of a line, which is place p, to the tracks; next[s] is where track s goes on. */
static void place_append(struct tracks *tracks, const struct half *half, uint32_t line, const uint64_t *map,
                         uint64_t *next)
{
    for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++) {
        uint64_t to = next[half->across[k]]++;
        tracks->rank[to] = tracks->placed[line];
        tracks->cell[to] = map == NULL ? k : map[k];
    }
}

fescue_status tracks_create(fescue_context *context, const struct cells *cells, const struct line_order *order,
                            struct tracks *tracks)
{
    fescue_status status = FESCUE_OK;
    uint64_t *map = NULL, *next = NULL;
    bool along_columns = order != NULL && order->along_columns;
    const struct half *places = along_columns ? &cells->by_column : &cells->by_row;
    const struct half *sensors = along_columns ? &cells->by_row : &cells->by_column;
    *tracks = (struct tracks){along_columns, sensors->lines, places->lines, NULL, NULL, NULL, NULL, NULL};
    TRY(tracks_take(context, cells, tracks));
    TRY(TAKE(context, tracks->sensors, &next));
    if (along_columns)
        TRY(map_create(context, cells, &map));
    for (uint32_t s = 0; s < tracks->sensors; s++)
        next[s] = tracks->start[s] = sensors->start[s];
    tracks->start[tracks->sensors] = cells->count;
    for (uint32_t place = 0; place < tracks->places; place++) {
        uint32_t line = order != NULL && order->order != NULL ? order->order[place] : place;
        tracks->placed[line] = place;
        tracks->at[place] = order != NULL && order->at != NULL ? order->at[line] : (double)place;
        place_append(tracks, places, line, map, next);
    }
done:
    GIVE(context, &next);
    GIVE(context, &map);
    if (status != FESCUE_OK)
        tracks_free(context, tracks);
    return status;
}

void tracks_free(fescue_context *context, struct tracks *tracks)
{
    GIVE(context, &tracks->start);
    GIVE(context, &tracks->cell);
    GIVE(context, &tracks->rank);
    GIVE(context, &tracks->at);
    GIVE(context, &tracks->placed);
}

double tracks_distance(const struct tracks *tracks, uint32_t sensor, uint32_t place, bool *is_one_sided)
{
    uint64_t first = tracks->start[sensor], end = tracks->start[sensor + 1], low = first, high = end;
    double distance = INFINITY, at = tracks->at[place];
    while (low < high) { /* the first seen place behind `place` */
        uint64_t middle = low + (high - low) / 2;
        if (tracks->rank[middle] <= place)
            low = middle + 1;
        else
            high = middle;
    }
    *is_one_sided = low == first || low == end;
    if (low > first)
        distance = at - tracks->at[tracks->rank[low - 1]];
    if (low < end)
        distance = fmin(distance, tracks->at[tracks->rank[low]] - at);
    return distance;
}

/* Of one sensor, whose places ascend. */
static void runs_add(const uint32_t *rank, uint64_t count, uint32_t length, struct tracks_runs *all)
{
    uint64_t runs = count > 0;
    double places = length, seen = (double)count;
    if (count == 0 || count == length)
        return;
    for (uint64_t k = 1; k < count; k++)
        runs += rank[k] != rank[k - 1] + 1;
    bool at_first = rank[0] == 0, at_last = rank[count - 1] + 1 == length;
    all->holes += places - seen;
    all->runs += (double)runs;
    all->expected += seen * (places - seen + 1) / places;
    all->hole_runs += (double)runs + 1 - at_first - at_last;
}

struct tracks_runs tracks_count_runs(const struct tracks *tracks)
{
    struct tracks_runs all = {0};
    for (uint32_t s = 0; s < tracks->sensors; s++)
        runs_add(tracks->rank + tracks->start[s], tracks->start[s + 1] - tracks->start[s], tracks->places, &all);
    return all;
}

struct tracks_runs half_count_runs(const struct half *sensors)
{
    struct tracks_runs all = {0};
    for (uint32_t s = 0; s < sensors->lines; s++)
        runs_add(sensors->across + sensors->start[s], sensors->start[s + 1] - sensors->start[s], sensors->length, &all);
    return all;
}
