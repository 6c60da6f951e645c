/* SPDX-License-Identifier: MIT
 *
 * What somebody with a ruler would fill in: linear in time between the nearest seen cells of the series, the nearest
 * one before the first and behind the last. It is what a model of time has to beat.
 *
 * The seen cells of every series are laid out in the order of time, and a hidden cell finds its neighbours by binary
 * search: O((kept + hidden) log steps). Of cells seen at one time the last counts. Hidden cells are taken row by row,
 * in one thread.
 */
#include "judge/judge_internal.h"

#include <math.h>
#include <string.h>

struct track {
    uint64_t *start, *next; /* of each series */
    double *time, *value;   /* in the order of time */
    double mean;            /* where a series has none */
};

static void track_lay(const struct cells *kept, const struct time_axis *time, struct track *track)
{
    const struct half *steps = time->along == TIME_ROWS ? &kept->by_row : &kept->by_column;
    const struct half *series = time->along == TIME_ROWS ? &kept->by_column : &kept->by_row;
    memcpy(track->start, series->start, ((size_t)series->lines + 1) * sizeof *track->start);
    memcpy(track->next, series->start, series->lines * sizeof *track->next);
    for (uint32_t t = 0; t < time->count; t++) {
        uint32_t step = time->order[t];
        for (uint64_t k = steps->start[step]; k < steps->start[step + 1]; k++) {
            uint64_t at = track->next[steps->across[k]]++;
            track->time[at] = time->at[step];
            track->value[at] = cells_value(kept, steps, k);
            track->mean += track->value[at] / (double)kept->count;
        }
    }
}

static double track_at(const struct track *track, uint32_t series, double when)
{
    uint64_t first = track->start[series], end = track->start[series + 1], low = first, high = end;
    if (first == end)
        return track->mean;
    while (low < high) {
        uint64_t middle = low + (high - low) / 2;
        if (track->time[middle] > when)
            high = middle;
        else
            low = middle + 1;
    }
    if (low == first)
        return track->value[first];
    if (low == end || track->time[low - 1] == when)
        return track->value[low - 1];
    double share = (when - track->time[low - 1]) / (track->time[low] - track->time[low - 1]);
    return (1 - share) * track->value[low - 1] + share * track->value[low];
}

fescue_status interpolation_measure(fescue_context *context, const struct cells *kept, const struct cells *hidden,
                                    const struct time_axis *time, struct errors *errors)
{
    fescue_status status = FESCUE_OK;
    struct track track = {0};
    double weights = 0;
    size_t series = time->along == TIME_ROWS ? kept->columns : kept->rows;
    *errors = (struct errors){.count = hidden->count};
    TRY(TAKE(context, series + 1, &track.start));
    TRY(TAKE(context, series, &track.next));
    TRY(TAKE(context, kept->count, &track.time));
    TRY(TAKE(context, kept->count, &track.value));
    track_lay(kept, time, &track);
    for (uint32_t row = 0; row < hidden->rows; row++)
        for (uint64_t k = hidden->by_row.start[row]; k < hidden->by_row.start[row + 1]; k++) {
            uint32_t column = hidden->by_row.across[k];
            bool by_rows = time->along == TIME_ROWS;
            double guess = track_at(&track, by_rows ? column : row, time->at[by_rows ? row : column]);
            double away = guess - cells_value(hidden, &hidden->by_row, k);
            double weight = hidden->by_row.weight != NULL ? (double)hidden->by_row.weight[k] : 1;
            errors->rmse += weight * away * away;
            errors->mae += weight * fabs(away);
            weights += weight;
        }
    if (weights > 0) {
        errors->rmse = sqrt(errors->rmse / weights);
        errors->mae /= weights;
    }
done:
    GIVE(context, &track.start);
    GIVE(context, &track.next);
    GIVE(context, &track.time);
    GIVE(context, &track.value);
    return status;
}
