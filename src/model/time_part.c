/* SPDX-License-Identifier: MIT
 *
 * What time adds to an estimate: the AR(1) residual of a series, known where its cells were seen.
 *
 * The process is Markov: between two seen cells its mean follows from their means, of whatever certainty, and before
 * the first or behind the last it falls by the correlation a step (kalman_between). So the numbers at the seen cells
 * are all that is kept, O(cells), and an estimate costs a binary search and two powers; no table of steps x series is
 * held.
 */
#include "model/model.h"

#include <math.h>
#include <string.h>

fescue_status time_part_create(fescue_context *context, const struct time_axis *axis, uint32_t series, uint64_t count,
                               size_t components, struct time_part *part)
{
    fescue_status status = FESCUE_OK;
    *part = (struct time_part){.along = axis->along, .steps = axis->count, .series = series, .components = components};
    TRY(TAKE(context, axis->count, &part->at));
    TRY(TAKE(context, (size_t)series + 1, &part->start));
    TRY(TAKE(context, count, &part->time));
    TRY(TAKE(context, count, &part->mean));
    TRY(TAKE(context, series, &part->law));
    TRY(TAKE(context, series, &part->noise));
    TRY(TAKE(context, components, &part->steps_law));
    memcpy(part->at, axis->at, axis->count * sizeof *part->at);
done:
    if (status != FESCUE_OK)
        time_part_free(context, part);
    return status;
}

/* An array of no length may be NULL. */
static void part_copy(void *to, const void *from, size_t size)
{
    if (size > 0)
        memcpy(to, from, size);
}

fescue_status time_part_copy(fescue_context *context, const struct time_part *from, struct time_part *to)
{
    *to = (struct time_part){0};
    if (from->along == TIME_NONE)
        return FESCUE_OK;
    uint64_t count = from->start[from->series];
    struct time_axis axis = {.along = from->along, .count = from->steps, .at = from->at};
    fescue_status status = time_part_create(context, &axis, from->series, count, from->components, to);
    if (status != FESCUE_OK)
        return status;
    part_copy(to->start, from->start, ((size_t)from->series + 1) * sizeof *to->start);
    part_copy(to->time, from->time, count * sizeof *to->time);
    part_copy(to->mean, from->mean, count * sizeof *to->mean);
    part_copy(to->law, from->law, from->series * sizeof *to->law);
    part_copy(to->noise, from->noise, from->series * sizeof *to->noise);
    part_copy(to->steps_law, from->steps_law, from->components * sizeof *to->steps_law);
    return FESCUE_OK;
}

void time_part_free(fescue_context *context, struct time_part *part)
{
    GIVE(context, &part->at);
    GIVE(context, &part->start);
    GIVE(context, &part->time);
    GIVE(context, &part->mean);
    GIVE(context, &part->law);
    GIVE(context, &part->noise);
    GIVE(context, &part->steps_law);
    *part = (struct time_part){0};
}

/* The first seen cell of the series that is later than `when`. */
static uint64_t later_find(const struct time_part *part, uint32_t series, double when)
{
    uint64_t low = part->start[series], high = part->start[series + 1];
    while (low < high) {
        uint64_t middle = low + (high - low) / 2;
        if (part->time[middle] > when)
            high = middle;
        else
            low = middle + 1;
    }
    return low;
}

double time_part_at(const struct time_part *part, uint32_t row, uint32_t column)
{
    if (part->along == TIME_NONE)
        return 0;
    uint32_t series = part->along == TIME_ROWS ? column : row;
    double when = part->at[part->along == TIME_ROWS ? row : column];
    const struct kalman_law *law = &part->law[series];
    if (!(law->variance > 0))
        return 0;
    uint64_t later = later_find(part, series, when);
    bool has_before = later > part->start[series], has_after = later < part->start[series + 1];
    if (has_before && part->time[later - 1] == when)
        return part->mean[later - 1];
    if (has_before && has_after) {
        double step[2] = {when - part->time[later - 1], part->time[later] - when};
        return kalman_between(law, step, part->mean + later - 1);
    }
    if (has_before)
        return part->mean[later - 1] * pow(law->correlation, when - part->time[later - 1]);
    return has_after ? part->mean[later] * pow(law->correlation, part->time[later] - when) : 0;
}
