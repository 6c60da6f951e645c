/* SPDX-License-Identifier: MIT
 *
 * Sensors (lines of the side that is not in order) with a fault along the order: late starts, early ends, stuck ones.
 *
 * Late: the first cell of a sensor comes f places after the first place. That is odd when neither of two chances makes
 * it likely among S sensors: that the sensor misses f places in a row by itself, (1 - p)^f with p the share of places
 * it is seen at later on; and that f places in a row lie within a hole, by the holes between cells of all sensors,
 *
 *     sum over holes of max(0, length - f + 1) / (S (T - f + 1)).
 *
 * Both times S must be below `by_chance`, and f at least a twentieth of the places. An early end is the same backwards.
 *
 * Stuck: a sensor shows the same value at L or more of its cells one after the other. With q the share of neighbouring
 * cells in the whole table that are equal and N cells, chance makes N q^(L-1) such runs; rounded slow series, calm
 * spells and zeros make longer ones. So L must be beyond chance, at least STUCK_LEAST, and STUCK_TIMES the median over
 * sensors of their longest run.
 */
#include "judge/survey_internal.h"

#include <math.h>

enum { STUCK_LEAST = 12, STUCK_TIMES = 5 };
static const double by_chance = 0.02, late_share = 0.05;

/* ---- late and early ------------------------------------------------------------------------------------------------
 */

static uint64_t head_hole(const struct tracks *tracks, uint32_t s, bool at_end)
{
    uint64_t from = tracks->start[s], to = tracks->start[s + 1];
    return at_end ? tracks->places - 1 - tracks->rank[to - 1] : tracks->rank[from];
}

/* Expected number of sensors of which a hole between cells covers a given stretch of f places. */
static double covered_by_chance(const struct tracks *tracks, uint64_t f)
{
    double windows = 0;
    for (uint32_t s = 0; s < tracks->sensors; s++)
        for (uint64_t k = tracks->start[s] + 1; k < tracks->start[s + 1]; k++) {
            uint64_t length = tracks->rank[k] - tracks->rank[k - 1] - 1;
            windows += length >= f ? (double)(length - f + 1) : 0;
        }
    return windows / (double)(tracks->places - f + 1);
}

/* The shortest stretch that is odd by that; it falls as f grows. */
static uint64_t odd_least(const struct tracks *tracks)
{
    uint64_t low = 1, high = tracks->places;
    while (low < high) {
        uint64_t middle = low + (high - low) / 2;
        if (covered_by_chance(tracks, middle) <= by_chance)
            high = middle;
        else
            low = middle + 1;
    }
    double share = ceil(late_share * tracks->places);
    low = (double)low < share ? (uint64_t)share : low;
    return low < 3 ? 3 : low;
}

static bool is_odd_hole(const struct tracks *tracks, uint32_t s, uint64_t f, uint64_t least)
{
    double seen = (double)(tracks->start[s + 1] - tracks->start[s]), rest = (double)(tracks->places - f);
    return f >= least && tracks->sensors * pow(1 - fmin(1, seen / rest), (double)f) <= by_chance;
}

/* Sensors of a block apart are told with their block. */
static bool is_apart(const struct survey *survey, uint32_t s)
{
    const uint32_t *block = survey->tracks.along_columns ? survey->row_block : survey->column_block;
    return block[s] != survey->main_block;
}

/* Names the sensors whose first (or last) cell is oddly late (or early), and when that is. */
static void heads_tell(struct survey *survey, bool at_end, uint64_t least)
{
    const struct tracks *tracks = &survey->tracks;
    uint64_t found = 0, shown[ODD_MOST];
    for (uint32_t s = 0; s < tracks->sensors; s++) {
        if (is_apart(survey, s) || !is_odd_hole(tracks, s, head_hole(tracks, s, at_end), least))
            continue;
        if (found < ODD_MOST)
            shown[found] = s;
        found++;
    }
    if (found == 0)
        return;
    survey_notice(survey, found, survey->sensor_word, survey->sensors_word);
    page_add(survey->page, at_end ? (found == 1 ? " ends early: " : " end early: ")
                                  : (found == 1 ? " starts late: " : " start late: "));
    for (uint64_t k = 0; k < found && k < ODD_MOST; k++) {
        uint64_t s = shown[k], cell = at_end ? tracks->start[s + 1] - 1 : tracks->start[s];
        survey_label(survey, survey->sensor_labels, (uint32_t)s, k == 0 ? "" : ", ");
        survey_label(survey, survey->place_labels, survey->line_of[tracks->rank[cell]], at_end ? " (to " : " (from ");
        page_add(survey->page, ")");
    }
    survey_more(survey, found);
}

/* ---- stuck ---------------------------------------------------------------------------------------------------------
 */

struct run {
    uint64_t from, length; /* cell of the tracks */
};

static double track_value(const struct survey *survey, uint64_t k)
{
    return cells_value(survey->cells, &survey->cells->by_row, survey->tracks.cell[k]);
}

/* The longest run of equal values of a sensor; *equal: neighbouring cells that are equal. */
static struct run run_longest(const struct survey *survey, uint32_t s, uint64_t *equal)
{
    const struct tracks *tracks = &survey->tracks;
    struct run run = {.from = tracks->start[s], .length = 0}, best = run;
    for (uint64_t k = tracks->start[s]; k < tracks->start[s + 1]; k++) {
        bool goes_on = k > tracks->start[s] && track_value(survey, k) == track_value(survey, k - 1);
        *equal += goes_on;
        run = goes_on ? (struct run){run.from, run.length + 1} : (struct run){k, 1};
        best = run.length > best.length ? run : best;
    }
    return best;
}

static double run_length_at(const void *data, uint64_t k)
{
    return (double)((const struct run *)data)[k].length;
}

/* Whether all cells of the sensor are in the run: then it is constant, which is told elsewhere. */
static bool is_all(const struct tracks *tracks, uint32_t s, const struct run *run)
{
    return run->length == tracks->start[s + 1] - tracks->start[s];
}

static void stuck_tell(struct survey *survey, uint32_t s, const struct run *run, bool is_first)
{
    const struct tracks *tracks = &survey->tracks;
    survey_label(survey, survey->sensor_labels, s, is_first ? "" : ", ");
    survey_label(survey, survey->place_labels, survey->line_of[tracks->rank[run->from]], " (from ");
    survey_label(survey, survey->place_labels, survey->line_of[tracks->rank[run->from + run->length - 1]], " to ");
    page_add(survey->page, ", %llu times %.6g)", (unsigned long long)run->length, track_value(survey, run->from));
}

static fescue_status stuck_find(struct survey *survey)
{
    fescue_status status = FESCUE_OK;
    fescue_context *context = survey->table->context;
    const struct tracks *tracks = &survey->tracks;
    struct run *run = NULL;
    uint64_t equal = 0, found = 0, told = 0;
    TRY(TAKE(context, tracks->sensors, &run));
    for (uint32_t s = 0; s < tracks->sensors; s++)
        run[s] = run_longest(survey, s, &equal);
    double cells = (double)survey->cells->count, share = ((double)equal + 1) / cells;
    double chance = share < 1 ? 1 + log(cells / by_chance) / -log(share) : INFINITY;
    double median = order_pick(run_length_at, run, tracks->sensors, tracks->sensors / 2);
    double least = fmax(fmax(STUCK_LEAST, chance), STUCK_TIMES * median);
    for (uint32_t s = 0; s < tracks->sensors; s++)
        found += (double)run[s].length >= least && !is_all(tracks, s, &run[s]);
    if (found == 0)
        goto done;
    survey_notice(survey, found, survey->sensor_word, survey->sensors_word);
    page_add(survey->page, found == 1 ? " is stuck at one value: " : " are stuck at one value: ");
    for (uint32_t s = 0; s < tracks->sensors && told < ODD_MOST; s++)
        if ((double)run[s].length >= least && !is_all(tracks, s, &run[s]))
            stuck_tell(survey, s, &run[s], told++ == 0);
    survey_more(survey, found);
done:
    GIVE(context, &run);
    return status;
}

fescue_status survey_series(struct survey *survey)
{
    uint64_t least = odd_least(&survey->tracks);
    heads_tell(survey, false, least);
    heads_tell(survey, true, least);
    return stuck_find(survey);
}
