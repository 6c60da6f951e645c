/* SPDX-License-Identifier: MIT
 *
 * A time axis in one line, for people.
 */
#include "table/table_internal.h"

#include <assert.h>
#include <math.h>
#include <stdio.h>
#include <string.h>

static void step_text(double seconds, char *text, size_t size)
{
    static const struct {
        double seconds;
        const char *name;
    } units[] = {{86400, "d"}, {3600, "h"}, {60, "min"}};
    char number[32];
    for (size_t k = 0; k < sizeof units / sizeof units[0]; k++) {
        double count = seconds / units[k].seconds;
        if (count == floor(count)) {
            snprintf(text, size, "%.0f %s", count, units[k].name);
            return;
        }
    }
    /* A difference of decimal fractions, read in nanoseconds. */
    real_to_text(nearbyint(seconds * 1e9) / 1e9, FESCUE_DOUBLE, number);
    snprintf(text, size, "%s s", number);
}

static void part_add(char text[TIME_TEXT_SIZE], uint32_t count, const char *one, const char *many)
{
    size_t length = strlen(text);
    if (count > 0)
        snprintf(text + length, TIME_TEXT_SIZE - length, ", %" PRIu32 " %s", count, count == 1 ? one : many);
}

const char *time_axis_text(const struct time_axis *axis, char text[TIME_TEXT_SIZE])
{
    const char *noun = axis->along == TIME_ROWS ? "rows" : "columns";
    char step[64];
    text[0] = '\0';
    if (axis->along == TIME_NONE)
        return text;
    if (!axis->is_labels) {
        snprintf(text, TIME_TEXT_SIZE, "%s are taken for evenly spaced times", noun);
        return text;
    }
    if (isnan(axis->step_seconds)) {
        snprintf(text, TIME_TEXT_SIZE, "%s are times in numbers", noun);
    } else {
        step_text(axis->step_seconds, step, sizeof step);
        snprintf(text, TIME_TEXT_SIZE, "%s are times, step %s", noun, step);
    }
    part_add(text, axis->gaps, "gap in the clock", "gaps in the clock");
    part_add(text, axis->equal, "line at the time of another", "lines at the time of others");
    part_add(text, axis->set_back, "hour that came twice", "hours that came twice");
    if (!axis->is_sorted)
        strncat(text, ", not in order", TIME_TEXT_SIZE - strlen(text) - 1);
    return text;
}
