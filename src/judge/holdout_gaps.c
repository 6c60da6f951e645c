/* SPDX-License-Identifier: MIT
 *
 * Hiding cells as holes lie that come in runs. Sensors are the lines of the side that is not in order, places those of
 * the other (tracks.h).
 *
 *   transplant   sensors in random order; each gets the holes of another one, drawn at random: what it was seen at and
 *                the other was not is hidden. For every second sensor the other's holes are moved along the order by a
 *                random number of places (round the end), so that holes also come where the table has none. Lengths and
 *                starts are thus the table's own, and coincidences too where nothing was moved.
 *   dark places  where the table has places at which nothing was seen at all, stretches of places are hidden whole, as
 *                long as the table's own, in proportion to the cells that are missing so.
 *
 * A sensor never loses more than `loses_most` of its cells: where the other's holes would take more, every one of its
 * runs is taken or left as a whole, with the chance that keeps to it. The same chance is lowered when few cells are
 * still to be hidden, so that a table of few sensors does not lose far more than its share.
 *
 * Which cells go depends on the seed, the fold and the pattern. Sequential; O(n) for a sensor of n seen cells.
 */
#include "judge/holdout_internal.h"

#include <math.h>
#include <string.h>

static const double loses_most = 0.7;
/* Of what is hidden, at most this share lies at dark places: most of the rest must stay comparable. */
static const double dark_most = 0.5;
/* A dark stretch longer than this share of all places is not made again. */
static const double stretch_most = 0.25;
enum { DONORS_TRIED = 8 };

struct gapping {
    fescue_context *context;
    const struct tracks *tracks;
    struct random_stream random;
    uint8_t *keep;
    uint8_t *dark;  /* by line */
    uint64_t *lost; /* by sensor */
    uint32_t *shuffled;
    uint32_t *stretch; /* lengths of the dark stretches */
    uint32_t stretches;
    uint64_t hidden, wanted;
};

static void cell_hide(struct gapping *gapping, uint32_t sensor, uint64_t at)
{
    uint8_t *mark = &gapping->keep[gapping->tracks->cell[at]];
    gapping->lost[sensor] += *mark;
    gapping->hidden += *mark;
    *mark = 0;
}

/* How many seen places of the donor lie before `place`. */
static uint64_t seen_before(const struct tracks *tracks, uint32_t donor, uint32_t place)
{
    uint64_t low = tracks->start[donor], high = tracks->start[donor + 1];
    while (low < high) {
        uint64_t middle = low + (high - low) / 2;
        if (tracks->rank[middle] < place)
            low = middle + 1;
        else
            high = middle;
    }
    return low;
}

/* A donor's holes, moved by `shift` places. */
struct graft {
    uint32_t sensor, donor, shift;
    uint64_t salt; /* decides which runs are taken */
    double chance;
};

/* Whether the donor was missing at the place of the sensor's cell `at`, in a run that is taken. Cells are asked for in
   order; *next is where the donor's first cell not before the place is, and begins with the donor's first. */
static bool is_grafted(const struct tracks *tracks, const struct graft *graft, uint64_t at, uint64_t *next)
{
    uint64_t place = (uint64_t)tracks->rank[at] + graft->shift, round = place >= tracks->places;
    uint64_t start = tracks->start[graft->donor], end = tracks->start[graft->donor + 1];
    place -= round * tracks->places;
    if (*next > start && tracks->rank[*next - 1] >= place)
        *next = start; /* round the end */
    while (*next < end && tracks->rank[*next] < place)
        ++*next;
    if (*next < end && tracks->rank[*next] == place)
        return false;
    return graft->chance >= 1 || random_uniform_at(graft->salt, RANDOM_FOLD, (uint32_t)round, *next) < graft->chance;
}

static uint64_t graft_count(const struct gapping *gapping, const struct graft *graft)
{
    const struct tracks *tracks = gapping->tracks;
    uint64_t count = 0, next = tracks->start[graft->donor];
    for (uint64_t at = tracks->start[graft->sensor]; at < tracks->start[graft->sensor + 1]; at++)
        count += gapping->keep[tracks->cell[at]] && is_grafted(tracks, graft, at, &next);
    return count;
}

static void sensor_graft(struct gapping *gapping, struct graft *graft)
{
    const struct tracks *tracks = gapping->tracks;
    uint64_t from = tracks->start[graft->sensor], to = tracks->start[graft->sensor + 1];
    double most = floor(loses_most * (double)(to - from)) - (double)gapping->lost[graft->sensor];
    uint64_t left = gapping->wanted - gapping->hidden, taken = 0, count = graft_count(gapping, graft);
    double room = fmin(most, 1.5 * (double)left);
    uint64_t next = tracks->start[graft->donor];
    graft->chance = count > 0 ? fmax(0, room) / (double)count : 0;
    for (uint64_t at = from; at < to && (double)taken < most; at++)
        if (gapping->keep[tracks->cell[at]] && is_grafted(tracks, graft, at, &next)) {
            cell_hide(gapping, graft->sensor, at);
            taken++;
        }
}

/* One sensor gets another one's holes. */
static void sensor_hide(struct gapping *gapping, uint32_t sensor, bool moves)
{
    const struct tracks *tracks = gapping->tracks;
    struct graft graft = {.sensor = sensor, .chance = 1};
    for (int tried = 0; tried < DONORS_TRIED; tried++) {
        graft.donor = (uint32_t)random_below(&gapping->random, tracks->sensors);
        graft.shift = moves ? (uint32_t)random_below(&gapping->random, tracks->places) : 0;
        graft.salt = random_bits(&gapping->random);
        if (graft.donor == sensor || graft_count(gapping, &graft) == 0)
            continue;
        sensor_graft(gapping, &graft);
        return;
    }
}

static void transplant(struct gapping *gapping)
{
    enum { ROUNDS = 4 }; /* of all sensors: more only take from what was taken from */
    for (int round = 0; round < ROUNDS && gapping->hidden < gapping->wanted; round++) {
        holdout_shuffle(&gapping->random, gapping->shuffled, gapping->tracks->sensors);
        for (uint32_t k = 0; k < gapping->tracks->sensors && gapping->hidden < gapping->wanted; k++)
            sensor_hide(gapping, gapping->shuffled[k], k % 2 == 1);
    }
}

/* ---- dark places ------------------------------------------------------------------------------------------------- */

/* Lengths of the stretches of places without any cell; returns how many places that are. */
static uint64_t stretches_find(struct gapping *gapping, const uint8_t *lit)
{
    uint32_t places = gapping->tracks->places, length = 0;
    uint64_t dark = 0;
    for (uint32_t p = 0; p <= places; p++) {
        bool is_dark = p < places && !lit[p];
        dark += is_dark;
        length += is_dark;
        if (!is_dark && length > 0) {
            if (length <= stretch_most * (double)places)
                gapping->stretch[gapping->stretches++] = length;
            length = 0;
        }
    }
    return dark;
}

/* Hides what lies at the places from `from` on, for `length` places. */
static void stretch_hide(struct gapping *gapping, uint32_t from, uint32_t length, const uint32_t *line)
{
    const struct tracks *tracks = gapping->tracks;
    for (uint32_t p = from; p < from + length; p++)
        gapping->dark[line[p]] = 1;
    for (uint32_t s = 0; s < tracks->sensors; s++)
        for (uint64_t at = seen_before(tracks, s, from); at < tracks->start[s + 1]; at++) {
            if (tracks->rank[at] >= from + length)
                break;
            cell_hide(gapping, s, at);
        }
}

static fescue_status dark_hide(struct gapping *gapping)
{
    fescue_status status;
    const struct tracks *tracks = gapping->tracks;
    uint8_t *lit = NULL;
    uint32_t *line = NULL;
    uint64_t whole = gapping->wanted, cells = tracks->start[tracks->sensors];
    TRY(TAKE(gapping->context, tracks->places, &lit));
    TRY(TAKE(gapping->context, tracks->places, &line));
    TRY(TAKE(gapping->context, tracks->places, &gapping->stretch));
    for (uint64_t at = 0; at < cells; at++)
        lit[tracks->rank[at]] = 1;
    for (uint32_t i = 0; i < tracks->places; i++)
        line[tracks->placed[i]] = i;
    double missing = (double)tracks->places * tracks->sensors - (double)cells;
    double dark = (double)stretches_find(gapping, lit) * tracks->sensors;
    gapping->wanted = (uint64_t)(fmin(dark_most, dark / missing) * (double)whole);
    for (uint32_t tries = 0; gapping->stretches > 0 && gapping->hidden < gapping->wanted && tries < tracks->places;
         tries++) {
        uint32_t length = gapping->stretch[random_below(&gapping->random, gapping->stretches)];
        stretch_hide(gapping, (uint32_t)random_below(&gapping->random, tracks->places - length + 1), length, line);
    }
    gapping->wanted = whole;
done:
    GIVE(gapping->context, &lit);
    GIVE(gapping->context, &line);
    return status;
}

fescue_status holdout_gaps(fescue_context *context, const struct cells *cells, const struct holdout_request *request,
                           double share, uint8_t *keep, uint8_t *dark)
{
    fescue_status status;
    struct tracks tracks = {0};
    struct gapping gapping = {.context = context, .tracks = &tracks, .keep = keep, .dark = dark};
    gapping.random = holdout_random(request, 0);
    gapping.wanted = (uint64_t)(share * (double)cells->count);
    TRY(tracks_create(context, cells, request->order, &tracks));
    TRY(TAKE(context, tracks.sensors, &gapping.lost));
    TRY(TAKE(context, tracks.sensors, &gapping.shuffled));
    for (uint32_t s = 0; s < tracks.sensors; s++)
        for (uint64_t at = tracks.start[s]; at < tracks.start[s + 1]; at++)
            gapping.lost[s] += !keep[tracks.cell[at]];
    TRY(dark_hide(&gapping));
    transplant(&gapping);
done:
    GIVE(context, &gapping.lost);
    GIVE(context, &gapping.shuffled);
    GIVE(context, &gapping.stretch);
    tracks_free(context, &tracks);
    return status;
}
