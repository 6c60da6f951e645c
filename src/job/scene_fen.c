/* SPDX-License-Identifier: MIT
 *
 * The scene fen-levels: water levels in 48 dip wells of an invented fen, every hour for 60 days of spring, in
 * centimetres from the ground, one decimal. It rains now and then, the plants draw more and more, a sluice is opened
 * for some days in May. Loggers fail for hours to days, the radio of a whole zone fails now and then, six wells are
 * installed late.
 *
 * The level of well w at hour t, without measurement noise, is
 *
 *     h_tw = base_w + sum_k g_wk c_tk + z_tw
 *
 *   c_t1   season: a slow fall, steeper as the plants grow
 *   c_t2   rain in the open layer: rises with the rain, falls back with a time of 18 hours
 *   c_t3   rain in the peat: the same with 120 hours
 *   c_t4   the sluice: falls while it is open, comes back with a time of 60 hours
 *   c_t5   the daily draught of the plants
 *   g_wk   how strongly the well answers: by its zone, with a spread of its own
 *   z_tw   what the well does on its own: a first-order autoregression, 0.35 cm with a memory of 36 hours
 *
 * so it is a table of five components, effects of wells, and something smooth that no component holds. Measurement
 * noise is 0.15 cm. All figures are our own invention.
 */
#include "job/sow_internal.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

enum { HOURS = 60 * 24, ZONES = 4, WELLS_OF_ZONE = 12, WELLS = ZONES * WELLS_OF_ZONE, COMMON = 5, LATE_WELLS = 6 };
enum { FEN_RAIN = SOW_FEN, FEN_WELLS, FEN_OWN, FEN_NOISE, FEN_OUTAGES, FEN_RADIO, FEN_LATE };

static const double noise_size = 0.15;
static const double own_size = 0.35, own_memory = 36;

/* What a zone is like: depth of the water on the first day, and how its wells answer. */
static const struct zone {
    const char *name;
    double base, answer[COMMON];
} zones[ZONES] = {
    {"alder", -32, {1.3, 0.7, 0.8, 0.3, 1.6}},
    {"sedge", -9, {0.7, 0.9, 1.2, 0.4, 0.8}},
    {"reed", -4, {0.5, 0.6, 1.0, 1.2, 0.6}},
    {"meadow", -46, {1.5, 1.4, 0.6, 0.8, 0.9}},
};

struct fen {
    double common[HOURS][COMMON];
    double level[HOURS][WELLS]; /* without noise */
    bool seen[HOURS][WELLS];
};

/* ---- levels ----------------------------------------------------------------------------------------------------- */

/* A storm about every three days, 2 to 12 hours long, a centimetre or two of rise in all. */
static void rain_fall(const struct sowing *sowing, double rain[HOURS])
{
    struct random_stream stream = sow_stream(sowing, FEN_RAIN, 0);
    memset(rain, 0, HOURS * sizeof *rain);
    for (size_t t = 0; t < HOURS; t++) {
        if (random_uniform(&stream) >= 1. / 70)
            continue;
        size_t hours = 2 + random_below(&stream, 11);
        double rise = 1.1 * exp(0.6 * random_normal(&stream));
        for (size_t k = 0; k < hours && t + k < HOURS; k++)
            rain[t + k] += rise / (double)hours;
    }
}

static void common_make(const struct sowing *sowing, struct fen *fen)
{
    static const double turn = 6.283185307179586476925;
    static const size_t sluice_opened = 34 * 24 + 9, sluice_shut = 43 * 24 + 16;
    double rain[HOURS], open_layer = 0, peat = 0, sluice = 0;
    rain_fall(sowing, rain);
    for (size_t t = 0; t < HOURS; t++) {
        double share = (double)t / HOURS;
        bool is_open = t >= sluice_opened && t < sluice_shut;
        open_layer = open_layer * exp(-1. / 18) + rain[t];
        peat = peat * exp(-1. / 120) + rain[t];
        sluice += ((is_open ? -9 : 0) - sluice) / 60;
        fen->common[t][0] = -14 * share * (0.5 + share);
        fen->common[t][1] = open_layer;
        fen->common[t][2] = peat;
        fen->common[t][3] = sluice;
        /* Lowest in the early evening, when the plants have drunk all day. */
        fen->common[t][4] = 0.7 * (0.4 + share) * cos(turn * ((double)(t % 24) - 6) / 24);
    }
}

static void well_fill(const struct sowing *sowing, struct fen *fen, size_t well)
{
    struct random_stream stream = sow_stream(sowing, FEN_WELLS, (uint64_t)well << 32);
    struct random_stream own_stream = sow_stream(sowing, FEN_OWN, (uint64_t)well << 32);
    const struct zone *zone = &zones[well / WELLS_OF_ZONE];
    double base = zone->base + 5 * random_normal(&stream), answer[COMMON];
    for (size_t k = 0; k < COMMON; k++)
        answer[k] = zone->answer[k] * exp(0.3 * random_normal(&stream));
    const double keep = exp(-1 / own_memory), fresh = own_size * sqrt(1 - keep * keep);
    double own = own_size * random_normal(&own_stream);
    for (size_t t = 0; t < HOURS; t++) {
        double level = base + own;
        for (size_t k = 0; k < COMMON; k++)
            level += answer[k] * fen->common[t][k];
        fen->level[t][well] = level;
        own = keep * own + fresh * random_normal(&own_stream);
    }
}

/* ---- holes ------------------------------------------------------------------------------------------------------ */

static void hours_lose(struct fen *fen, size_t well, double from, double hours)
{
    for (double t = from; t < from + hours && t < HOURS; t++)
        fen->seen[(size_t)t][well] = false;
}

/* A logger works for 13 days on the average and then fails for 16 hours at the median, seldom for a week. */
static void logger_fail(const struct sowing *sowing, struct fen *fen, size_t well)
{
    struct random_stream stream = sow_stream(sowing, FEN_OUTAGES, (uint64_t)well << 32);
    double t = 0;
    for (;;) {
        t += floor(-13 * 24 * log1p(-random_uniform(&stream)));
        if (t >= HOURS)
            return;
        double hours = ceil(16 * exp(1.1 * random_normal(&stream)));
        hours_lose(fen, well, t, hours);
        t += hours;
    }
}

/* Twice in the time the radio of a zone fails for one to three days, and all its wells are silent. */
static void radio_fail(const struct sowing *sowing, struct fen *fen, size_t zone)
{
    struct random_stream stream = sow_stream(sowing, FEN_RADIO, (uint64_t)zone << 32);
    for (size_t k = 0; k < 2; k++) {
        double from = (double)random_below(&stream, HOURS), hours = 24 + (double)random_below(&stream, 49);
        for (size_t w = 0; w < WELLS_OF_ZONE; w++)
            hours_lose(fen, zone * WELLS_OF_ZONE + w, from, hours);
    }
}

/* Six wells, no two the same, come between the 10th and the 35th day. */
static void late_wells_choose(const struct sowing *sowing, struct fen *fen)
{
    struct random_stream stream = sow_stream(sowing, FEN_LATE, 0);
    size_t each = WELLS / LATE_WELLS;
    for (size_t k = 0; k < LATE_WELLS; k++) {
        size_t well = k * each + random_below(&stream, each);
        hours_lose(fen, well, 0, (double)(10 * 24 + random_below(&stream, 25 * 24)));
    }
}

static void fen_make(const struct sowing *sowing, struct fen *fen)
{
    common_make(sowing, fen);
    memset(fen->seen, true, sizeof fen->seen);
    for (size_t well = 0; well < WELLS; well++) {
        well_fill(sowing, fen, well);
        logger_fail(sowing, fen, well);
    }
    for (size_t zone = 0; zone < ZONES; zone++)
        radio_fail(sowing, fen, zone);
    late_wells_choose(sowing, fen);
}

/* ---- files ------------------------------------------------------------------------------------------------------ */

static void heading_write(struct sink *sink)
{
    char name[32];
    sink_text(sink, "time");
    for (size_t well = 0; well < WELLS; well++) {
        snprintf(name, sizeof name, ",%s-%02zu", zones[well / WELLS_OF_ZONE].name, well % WELLS_OF_ZONE + 1);
        sink_text(sink, name);
    }
    sink_text(sink, "\n");
}

/* From the first of April on, which has 30 days. */
static void time_write(struct sink *sink, size_t t)
{
    char time[32];
    size_t day = t / 24;
    snprintf(time, sizeof time, "2024-%02zu-%02zuT%02zu:00", 4 + day / 30, day % 30 + 1, t % 24);
    sink_text(sink, time);
}

static fescue_status levels_write(struct sowing *sowing, const struct fen *fen, bool as_seen, const char *name)
{
    struct sink sink;
    fescue_status status = sink_open(sowing, name, &sink);
    struct random_stream stream = sow_stream(sowing, FEN_NOISE, 0);
    if (status == FESCUE_OK)
        heading_write(&sink);
    for (size_t t = 0; t < HOURS && status == FESCUE_OK; t++) {
        time_write(&sink, t);
        for (size_t well = 0; well < WELLS; well++) {
            double noise = as_seen ? noise_size * random_normal(&stream) : 0;
            sink_text(&sink, ",");
            if (!as_seen || fen->seen[t][well])
                sink_fixed(&sink, fen->level[t][well] + noise, as_seen ? 1 : 2);
        }
        sink_text(&sink, "\n");
        status = progress_tell(sowing->context, "writing the table", (double)t / HOURS);
    }
    fescue_status closed = sink_close(&sink);
    return status != FESCUE_OK ? status : closed;
}

fescue_status sow_fen(struct sowing *sowing)
{
    fescue_status status;
    struct fen *fen = NULL;
    TRY(TAKE(sowing->context, 1, &fen));
    fen_make(sowing, fen);
    for (size_t t = 0; t < HOURS; t++)
        for (size_t well = 0; well < WELLS; well++)
            sowing->observed += fen->seen[t][well];
    sowing->rows = HOURS;
    sowing->columns = WELLS;
    sowing->table = "table.csv";
    sowing->truth = "truth.csv";
    sowing->noise = noise_size;
    TRY(levels_write(sowing, fen, true, sowing->table));
    TRY(levels_write(sowing, fen, false, sowing->truth));
done:
    GIVE(sowing->context, &fen);
    return status;
}
