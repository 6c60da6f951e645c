/* SPDX-License-Identifier: MIT
 *
 * Clocks on the wall that were set back. Where summer time ends, an hour comes twice: labels without offset repeat or
 * step back by up to an hour, once a year and in the small hours. Lines of the file are in order of time there, so the
 * labels of summer, an hour fast, are moved back by an hour, from the jump forward in spring on:
 *
 *     a step from line k-1 to k is a set-back when it is within [-1 h, 0] and line k lies between 23:00 and 02:59
 *     the jump of its spring is a step of an hour more than the usual one or longer, 175 to 245 days before it: best
 *     the first in the small hours of a Sunday, else the first; where there is none, all earlier lines are moved
 *
 * Of steps longer than an hour none is a set-back: every line still comes later than the one before it then.
 *
 * Summer lasts 182 days (south-east Australia) to 238 (North America), 189 to 217 elsewhere, hence the bounds. Labels
 * that do not rise for any other reason, or twice within 100 days, are no work of the calendar: nothing is moved then,
 * and they are equal times or come in no order. A spring whose autumn is not in the table keeps its gap of an hour.
 */
#include "table/table_internal.h"

enum { HOUR = 3600, DAY = 86400, APART_DAYS = 100, SUMMER_LEAST_DAYS = 175, SUMMER_MOST_DAYS = 245 };

static double step_before(const struct instant *instants, uint32_t k)
{
    const struct instant *a = &instants[k - 1], *b = &instants[k];
    return (double)(b->second - a->second) + 1e-9 * (double)(b->nano - a->nano);
}

static int64_t second_of_day(const struct instant *instant)
{
    int64_t second = instant->second % DAY;
    return second < 0 ? second + DAY : second;
}

/* 1970-01-01 was a Thursday. */
static bool is_sunday(const struct instant *instant)
{
    int64_t days = (instant->second - second_of_day(instant)) / DAY;
    return ((days + 4) % 7 + 7) % 7 == 0;
}

static bool is_set_back(const struct instant *instants, uint32_t k)
{
    int64_t second = second_of_day(&instants[k]);
    return step_before(instants, k) >= -HOUR && (second < 3 * HOUR || second >= 23 * HOUR);
}

/* Whether all lines that do not rise are set-backs, far enough apart; how many there are. */
static bool set_backs_count(const struct instant *instants, uint32_t count, uint32_t *found)
{
    uint32_t last = 0;
    *found = 0;
    for (uint32_t k = 1; k < count; k++) {
        if (step_before(instants, k) > 0)
            continue;
        if (!is_set_back(instants, k))
            return false;
        if (*found > 0 && instants[k].second - instants[last].second < (int64_t)APART_DAYS * DAY)
            return false;
        last = k;
        ++*found;
    }
    return true;
}

/* The first line of the summer that ends before line `back`; 0 when its beginning is not seen. */
static uint32_t summer_find(const struct instant *instants, uint32_t from, uint32_t back, double step)
{
    uint32_t first = 0;
    for (uint32_t k = from + 1; k < back; k++) {
        int64_t length = instants[back].second - instants[k].second;
        if (step_before(instants, k) < step + HOUR || length < (int64_t)SUMMER_LEAST_DAYS * DAY ||
            length > (int64_t)SUMMER_MOST_DAYS * DAY)
            continue;
        if (is_sunday(&instants[k]) && second_of_day(&instants[k]) <= 3 * HOUR)
            return k;
        if (first == 0)
            first = k;
    }
    return first;
}

uint32_t time_clock_mend(struct instant *instants, uint32_t count, double step)
{
    uint32_t found, last = 0;
    if (!(step > 0 && step <= HOUR) || !set_backs_count(instants, count, &found))
        return 0;
    for (uint32_t k = 1; k < count; k++) {
        if (step_before(instants, k) > 0)
            continue;
        for (uint32_t line = summer_find(instants, last, k, step); line < k; line++)
            instants[line].second -= HOUR;
        last = k;
    }
    return found;
}
