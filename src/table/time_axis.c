/* SPDX-License-Identifier: MIT
 *
 * When the lines of one side were. Labels become seconds from the first one's (instants exactly, in 64-bit integers
 * until the difference is taken), plain numbers stay what they are, unlabelled lines are numbered. Then
 *
 *     order    the lines by time, equal times by their place in the file
 *     step     the lower median of the differences between neighbouring distinct times
 *     at       (time - earliest) / step
 *
 * so that a clock that is regular, but for gaps, has whole numbers. Labels with and without offset cannot be compared:
 * a side that has both has no times. Cost: O(count log count), and O(count) where lines come in order.
 */
#include "table/table_internal.h"

#include <assert.h>
#include <math.h>
#include <stdio.h>
#include <string.h>

enum {
    DISTINCT_LEAST = 3, /* two times have one step, of which nobody can say that it is the usual one */
    LABEL_SHOWN = 60    /* bytes of a label in a sentence: a line of it at most */
};
/* Steps that a gap is longer than: half a step off is a clock that is not quite regular. */
#define GAP_LEAST 1.5

struct side {
    fescue_context *context;
    const char *path;
    const struct labels *labels;
    uint32_t count;
    enum time_along along;
};

static const char *table_name(const fescue_table *table)
{
    if (table->path == NULL || table->path[0] == '\0')
        return "the table";
    return strcmp(table->path, "-") == 0 ? "standard input" : table->path;
}

static struct side side_of(const fescue_table *table, enum time_along along)
{
    bool is_rows = along == TIME_ROWS;
    return (struct side){.context = table->context,
                         .path = table_name(table),
                         .labels = is_rows ? &table->row_labels : &table->column_labels,
                         .count = is_rows ? table->cells.rows : table->cells.columns,
                         .along = along};
}

static const char *side_noun(const struct side *side)
{
    return side->along == TIME_ROWS ? "row" : "column";
}

/* ---- order ----------------------------------------------------------------------------------------------------------
 */

/* Merges the runs [from, middle) and [middle, to) of `order` into `out`; of equal values the left run's come first. */
static void runs_merge(const double *value, const uint32_t *order, const uint64_t bounds[3], uint32_t *out)
{
    uint64_t left = bounds[0], right = bounds[1];
    for (uint64_t k = bounds[0]; k < bounds[2]; k++) {
        bool is_left = right == bounds[2] || (left < bounds[1] && !(value[order[right]] < value[order[left]]));
        out[k] = order[is_left ? left++ : right++];
    }
}

/* order becomes the positions of value by size, equal ones as they come. */
static fescue_status order_sort(fescue_context *context, const double *value, uint32_t count, uint32_t *order)
{
    uint32_t *other = NULL;
    bool is_sorted = true;
    for (uint32_t k = 0; k < count; k++) {
        order[k] = k;
        is_sorted = is_sorted && (k == 0 || value[k - 1] <= value[k]);
    }
    if (is_sorted)
        return FESCUE_OK;
    fescue_status status = TAKE(context, count, &other);
    if (status != FESCUE_OK)
        return status;
    for (uint64_t run = 1; run < count; run *= 2) {
        for (uint64_t from = 0; from < count; from += 2 * run) {
            uint64_t middle = from + run < count ? from + run : count;
            uint64_t to = middle + run < count ? middle + run : count;
            runs_merge(value, order, (const uint64_t[]){from, middle, to}, other);
        }
        memcpy(order, other, count * sizeof *order);
    }
    GIVE(context, &other);
    return FESCUE_OK;
}

/* The lower median of the positive differences of neighbours in time; 0 when all times are equal. *distinct counts the
   times. */
static fescue_status step_find(fescue_context *context, const double *value, const struct time_axis *axis,
                               uint32_t *distinct, double *step)
{
    double *difference = NULL;
    uint32_t *order = NULL, differences = 0;
    fescue_status status;
    TRY(TAKE(context, axis->count, &difference));
    TRY(TAKE(context, axis->count, &order));
    for (uint32_t k = 1; k < axis->count; k++) {
        double d = value[axis->order[k]] - value[axis->order[k - 1]];
        if (d > 0)
            difference[differences++] = d;
    }
    *distinct = differences + (axis->count > 0);
    *step = 0;
    if (differences > 0) {
        TRY(order_sort(context, difference, differences, order));
        *step = difference[order[(differences - 1) / 2]];
    }
done:
    GIVE(context, &difference);
    GIVE(context, &order);
    return status;
}

static void axis_describe(struct time_axis *axis)
{
    axis->is_sorted = true;
    for (uint32_t k = 0; k < axis->count; k++) {
        axis->is_sorted = axis->is_sorted && axis->order[k] == k;
        if (k == 0)
            continue;
        double d = axis->at[axis->order[k]] - axis->at[axis->order[k - 1]];
        axis->gaps += d > GAP_LEAST;
        axis->equal += d <= 0;
    }
}

static fescue_status axis_open(const struct side *side, struct time_axis *axis)
{
    fescue_status status;
    *axis = (struct time_axis){.along = side->along, .count = side->count, .step_seconds = NAN, .start = NAN};
    TRY(TAKE(side->context, side->count, &axis->at));
    TRY(TAKE(side->context, side->count, &axis->order));
done:
    return status;
}

/* at holds times in any unit: puts them in order and measures them in steps. *distinct as in step_find. */
static fescue_status axis_finish(const struct side *side, struct time_axis *axis, double *step, uint32_t *distinct)
{
    fescue_status status;
    TRY(order_sort(side->context, axis->at, axis->count, axis->order));
    TRY(step_find(side->context, axis->at, axis, distinct, step));
    double first = axis->count > 0 ? axis->at[axis->order[0]] : 0, usual = *step > 0 ? *step : 1;
    for (uint32_t k = 0; k < axis->count; k++)
        axis->at[k] = (axis->at[k] - first) / usual;
    axis_describe(axis);
done:
    return status;
}

/* ---- from labels ----------------------------------------------------------------------------------------------------
 */

static bool label_instant(const struct side *side, uint32_t line, struct instant *instant)
{
    const char *text = side->labels->text[line];
    return time_label_parse(text, text + strlen(text), instant);
}

static bool label_number(const struct side *side, uint32_t line, double *value)
{
    const char *text = side->labels->text[line];
    return number_parse(text, text + strlen(text), value) && isfinite(*value);
}

/* What labels are: the first that does not fit, or count. */
struct parsed {
    uint32_t times;          /* labels that are instants */
    uint32_t not_time;       /* the first that is none */
    uint32_t unlike;         /* the first that has an offset where line 0 has none, or the other way */
    struct instant *instant; /* owned */
};

static fescue_status labels_parse(const struct side *side, struct parsed *parsed)
{
    *parsed = (struct parsed){.not_time = side->count, .unlike = side->count};
    fescue_status status = TAKE(side->context, side->count, &parsed->instant);
    for (uint32_t k = 0; status == FESCUE_OK && k < side->count; k++) {
        struct instant *instant = &parsed->instant[k];
        if (label_instant(side, k, instant)) {
            parsed->times++;
            if (instant->has_offset != parsed->instant[0].has_offset && k < parsed->unlike)
                parsed->unlike = k;
        } else if (parsed->not_time == side->count) {
            parsed->not_time = k;
        }
    }
    return status;
}

static void instants_place(const struct instant *instant, struct time_axis *axis)
{
    for (uint32_t k = 0; k < axis->count; k++)
        axis->at[k] = (double)(instant[k].second - instant[0].second) + 1e-9 * (double)instant[k].nano;
}

static fescue_status axis_from_instants(const struct side *side, struct instant *instant, struct time_axis *axis,
                                        uint32_t *distinct)
{
    fescue_status status;
    uint32_t set_back = 0;
    TRY(axis_open(side, axis));
    instants_place(instant, axis);
    TRY(axis_finish(side, axis, &axis->step_seconds, distinct));
    if (!instant[0].has_offset && (axis->equal > 0 || !axis->is_sorted))
        set_back = time_clock_mend(instant, axis->count, axis->step_seconds);
    if (set_back > 0) {
        instants_place(instant, axis);
        axis->gaps = axis->equal = 0;
        TRY(axis_finish(side, axis, &axis->step_seconds, distinct));
    }
    const struct instant *first = &instant[axis->order[0]];
    axis->start = (double)first->second + 1e-9 * (double)first->nano;
    axis->set_back = set_back;
    axis->is_labels = true;
done:
    return status;
}

static fescue_status axis_from_numbers(const struct side *side, struct time_axis *axis, uint32_t *distinct)
{
    double step;
    fescue_status status;
    TRY(axis_open(side, axis));
    for (uint32_t k = 0; k < axis->count; k++)
        label_number(side, k, &axis->at[k]);
    TRY(axis_finish(side, axis, &step, distinct));
    axis->is_labels = true;
    for (uint32_t k = 0; k < axis->count; k++)
        if (!isfinite(axis->at[k]))
            TRY(FAIL(side->context, FESCUE_BAD_DATA, "%s: the numbers of the %ss are too far apart to be times",
                     side->path, side_noun(side)));
done:
    return status;
}

static fescue_status axis_from_nothing(const struct side *side, struct time_axis *axis)
{
    double step;
    uint32_t distinct;
    fescue_status status;
    TRY(axis_open(side, axis));
    for (uint32_t k = 0; k < axis->count; k++)
        axis->at[k] = k;
    TRY(axis_finish(side, axis, &step, &distinct));
done:
    return status;
}

/* ---- which side -----------------------------------------------------------------------------------------------------
 */

/* Bytes of a label that a sentence shows; no character is cut in two. */
static int label_shown(const char *label)
{
    size_t length = strlen(label);
    if (length > LABEL_SHOWN)
        for (length = LABEL_SHOWN; length > 0 && ((unsigned char)label[length] & 0xc0) == 0x80;)
            length--;
    return (int)length;
}

/* Why labels most of which are times make no axis. */
static void note_write(const struct side *side, const struct parsed *parsed, struct time_axis *axis)
{
    bool is_unlike = parsed->not_time == side->count;
    uint32_t line = is_unlike ? parsed->unlike : parsed->not_time;
    const char *label = side->labels->text[line], *noun = side_noun(side);
    snprintf(axis->note, sizeof axis->note, "%ss are not taken for times: '%.*s' (%s %" PRIu32 ") %s", noun,
             label_shown(label), label, noun, line + 1,
             !is_unlike                         ? "is none"
             : parsed->instant[line].has_offset ? "has an offset from UTC, those before it have none"
                                                : "has no offset from UTC, those before it have one");
    for (char *at = axis->note; *at != '\0'; at++)
        if ((unsigned char)*at < ' ' || *at == 0x7f)
            *at = '?';
    log_tell(side->context, "%s", axis->note);
}

/* Labels that are all times; else nothing, and a note where at least half of them are. */
static fescue_status side_try(const struct side *side, struct time_axis *axis)
{
    struct parsed parsed = {0};
    uint32_t distinct;
    fescue_status status = FESCUE_OK;
    if (side->labels->text == NULL || side->count < DISTINCT_LEAST)
        return FESCUE_OK;
    TRY(labels_parse(side, &parsed));
    if (parsed.not_time == side->count && parsed.unlike == side->count) {
        TRY(axis_from_instants(side, parsed.instant, axis, &distinct));
        if (distinct < DISTINCT_LEAST)
            time_axis_free(side->context, axis);
    } else if (2 * (uint64_t)parsed.times >= side->count && axis->note[0] == '\0') {
        note_write(side, &parsed, axis);
    }
done:
    GIVE(side->context, &parsed.instant);
    return status;
}

static fescue_status label_refuse(const struct side *side, uint32_t line, const char *what)
{
    const char *label = side->labels->text[line], *noun = side_noun(side);
    return FAIL(side->context, FESCUE_BAD_DATA, "%s: --time-axis %ss: the label '%.*s' of %s %" PRIu32 " %s",
                side->path, noun, label_shown(label), label, noun, line + 1, what);
}

/* All labels are plain numbers; else *line is the first that is none. */
static bool are_numbers(const struct side *side, uint32_t *line)
{
    double value;
    for (*line = 0; *line < side->count; ++*line)
        if (!label_number(side, *line, &value))
            return false;
    return true;
}

static fescue_status labels_take(const struct side *side, struct time_axis *axis)
{
    struct parsed parsed = {0};
    uint32_t distinct = 0, not_number;
    fescue_status status;
    TRY(labels_parse(side, &parsed));
    if (parsed.not_time == side->count && parsed.unlike < side->count)
        TRY(label_refuse(side, parsed.unlike,
                         parsed.instant[parsed.unlike].has_offset
                             ? "has an offset from UTC, those before it have none"
                             : "has no offset from UTC, those before it have one"));
    if (parsed.not_time == side->count)
        TRY(axis_from_instants(side, parsed.instant, axis, &distinct));
    else if (are_numbers(side, &not_number))
        TRY(axis_from_numbers(side, axis, &distinct));
    else
        TRY(label_refuse(side, not_number > 0 ? not_number : parsed.not_time,
                         "is neither a time as ISO 8601 writes it nor a number"));
    if (distinct < 2)
        TRY(FAIL(side->context, FESCUE_BAD_DATA, "%s: --time-axis %ss: all labels are the same time", side->path,
                 side_noun(side)));
done:
    GIVE(side->context, &parsed.instant);
    return status;
}

fescue_status time_axis_find(fescue_context *context, const fescue_table *table, enum fescue_time_axis wanted,
                             struct time_axis *out)
{
    struct side rows = side_of(table, TIME_ROWS), columns = side_of(table, TIME_COLUMNS);
    const struct side *side = wanted == FESCUE_TIME_COLUMNS ? &columns : &rows;
    fescue_status status = FESCUE_OK;
    *out = (struct time_axis){.along = TIME_NONE};
    if (wanted == FESCUE_TIME_AUTO) {
        TRY(side_try(&rows, out));
        if (out->along == TIME_NONE)
            TRY(side_try(&columns, out));
    } else if (wanted != FESCUE_TIME_NONE) {
        TRY(side->labels->text != NULL ? labels_take(side, out) : axis_from_nothing(side, out));
    }
done:
    if (status != FESCUE_OK)
        time_axis_free(context, out);
    return status;
}

void time_axis_free(fescue_context *context, struct time_axis *axis)
{
    GIVE(context, &axis->at);
    GIVE(context, &axis->order);
    *axis = (struct time_axis){.along = TIME_NONE};
}
