/* SPDX-License-Identifier: MIT
 *
 * The holes along the order of the lines, as small charts: how long they are, when, and how often together.
 *
 *     T places (in time, or as the lines came), S sensors (lines of the other side) with any cell; sensor s misses w_s
 *     places, place p is missed by m_p sensors.
 *
 * Lengths: a hole is a stretch of places that one sensor misses; classes 1, 2-3, 4-7, ... by doubling, apart from holes
 * before a sensor's first cell and behind its last one.
 *
 * Coincidence: pairs of sensors that miss a place together, over what they would if each missed its w_s places
 * anywhere:  sum_p m_p (m_p - 1)  over  sum_{s != t} w_s w_t / T.
 *
 * Shown where the order means something: the table has a time axis, or its holes come in runs (hole_shape).
 */
#include "judge/survey_internal.h"

#include <math.h>
#include <string.h>

enum { CLASSES = 33, FIRST = 32, LAST = 33, KINDS = 34, BAR = 40, WIDTH = 60 };

struct holes {
    uint64_t count[KINDS], cells[KINDS]; /* by class of length; before the first cell, behind the last */
    uint64_t missing, most_count;
};

static void hole_note(struct holes *holes, size_t kind, uint64_t length)
{
    if (length == 0)
        return;
    holes->count[kind]++;
    holes->cells[kind] += length;
    holes->missing += length;
}

static size_t class_of(uint64_t length)
{
    size_t class = 0;
    while (length > 1) {
        length /= 2;
        class ++;
    }
    return class < FIRST ? class : FIRST - 1;
}

static void holes_gather(const struct tracks *tracks, struct holes *holes)
{
    for (uint32_t s = 0; s < tracks->sensors; s++) {
        uint64_t from = tracks->start[s], to = tracks->start[s + 1];
        if (from == to)
            continue;
        hole_note(holes, FIRST, tracks->rank[from]);
        hole_note(holes, LAST, tracks->places - 1 - tracks->rank[to - 1]);
        for (uint64_t k = from + 1; k < to; k++) {
            uint64_t length = tracks->rank[k] - tracks->rank[k - 1] - 1;
            hole_note(holes, class_of(length), length);
        }
    }
    for (size_t kind = 0; kind < KINDS; kind++)
        holes->most_count = holes->cells[kind] > holes->most_count ? holes->cells[kind] : holes->most_count;
}

/* A bar of at most BAR signs; anything above nothing has one. */
static void bar_add(struct page *page, uint64_t value, uint64_t most)
{
    uint64_t signs = (uint64_t)llround((double)BAR * (double)value / (double)most);
    for (uint64_t k = 0; k < signs || (k == 0 && value > 0); k++)
        page_add(page, "#");
}

static void class_tell(const struct survey *survey, const struct holes *holes, size_t kind, const char *name)
{
    if (holes->count[kind] == 0)
        return;
    double share = 100 * (double)holes->cells[kind] / (double)holes->missing;
    page_add(survey->page, "    %-17s%9llu %5.3g %%  ", name, (unsigned long long)holes->count[kind], share);
    bar_add(survey->page, holes->cells[kind], holes->most_count);
    page_add(survey->page, "\n");
}

static void lengths_tell(const struct survey *survey, const struct holes *holes)
{
    char name[64];
    page_add(survey->page, "    length, in %-6s  holes  of the missing cells\n", survey->places_word);
    class_tell(survey, holes, FIRST, "before the first");
    for (size_t kind = 0; kind < FIRST; kind++) {
        unsigned long long low = 1ULL << kind, high = (2ULL << kind) - 1;
        snprintf(name, sizeof name, low == high ? "%llu" : "%llu-%llu", low, high);
        class_tell(survey, holes, kind, name);
    }
    class_tell(survey, holes, LAST, "behind the last");
}

/* ---- when ---------------------------------------------------------------------------------------------------------
 */

static double coincidence(const struct tracks *tracks, const uint32_t *missed)
{
    double pairs = 0, sum = 0, square = 0;
    for (uint32_t p = 0; p < tracks->places; p++)
        pairs += (double)missed[p] * ((double)missed[p] - 1);
    for (uint32_t s = 0; s < tracks->sensors; s++) {
        uint64_t seen = tracks->start[s + 1] - tracks->start[s];
        double misses = seen == 0 ? 0 : (double)(tracks->places - seen);
        sum += misses;
        square += misses * misses;
    }
    double expected = (sum * sum - square) / tracks->places;
    return expected > 0 ? pairs / expected : NAN;
}

static void label_add(const struct survey *survey, uint32_t place)
{
    char buffer[16];
    page_label(survey->page, label_text(survey->place_labels, survey->line_of[place], buffer));
}

/* One sign a stretch of places: how many of the sensors miss them. */
static void when_tell(const struct survey *survey, const uint32_t *missed, uint32_t sensors)
{
    static const char signs[] = " .:-=+*#%@";
    const struct tracks *tracks = &survey->tracks;
    uint32_t width = tracks->places < WIDTH ? tracks->places : WIDTH;
    char line[WIDTH + 1] = {0};
    for (uint32_t k = 0; k < width; k++) {
        uint64_t from = (uint64_t)tracks->places * k / width, to = (uint64_t)tracks->places * (k + 1) / width;
        double sum = 0;
        for (uint64_t p = from; p < to; p++)
            sum += missed[p];
        double share = sum / ((double)(to - from) * sensors);
        line[k] = sum == 0 ? ' ' : signs[share >= 1 ? 9 : 1 + (size_t)(share * 8.999)];
    }
    page_add(survey->page, "Missing from ");
    label_add(survey, 0);
    page_add(survey->page, " to ");
    label_add(survey, tracks->places - 1);
    page_add(survey->page, " (blank: nothing; . : - = + * # %% to @: all of the %s):\n    [%s]\n", survey->sensors_word,
             line);
}

fescue_status survey_holes(struct survey *survey)
{
    fescue_status status = FESCUE_OK;
    fescue_context *context = survey->table->context;
    const struct tracks *tracks = &survey->tracks;
    struct holes holes = {0};
    uint32_t *missed = NULL, sensors = 0;
    if (!survey->is_ordered)
        goto done;
    holes_gather(tracks, &holes);
    if (holes.missing == 0)
        goto done;
    TRY(TAKE(context, tracks->places, &missed));
    for (uint32_t s = 0; s < tracks->sensors; s++)
        sensors += tracks->start[s + 1] > tracks->start[s];
    for (uint32_t p = 0; p < tracks->places; p++)
        missed[p] = sensors;
    for (uint64_t k = 0; k < survey->cells->count; k++)
        missed[tracks->rank[k]]--;
    page_add(survey->page, "\nHoles of each %s along the %s:\n", survey->sensor_word, survey->places_word);
    lengths_tell(survey, &holes);
    when_tell(survey, missed, sensors);
    double together = coincidence(tracks, missed);
    if (survey->shape.shape == FESCUE_HOLDOUT_GAPS)
        page_add(survey->page, "What is hidden to measure the error will be shaped as gaps: %s.\n", survey->shape.why);
    if (isfinite(together))
        page_add(survey->page, "Two %s miss a cell together %.3g times as often as by chance.\n", survey->sensors_word,
                 together);
done:
    GIVE(context, &missed);
    return status;
}
