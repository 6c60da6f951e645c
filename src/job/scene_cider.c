/* SPDX-License-Identifier: MIT
 *
 * The scene cider-panel: 900 panellists of an invented society scored 240 invented ciders from 0 to 10 in halves. Each
 * tasted a few, some ciders went round much more than others, and people chose a little by what they like.
 *
 * What panellist i would score cider j on the average is, cut to 0..10,
 *
 *     t_ij = 5.8 + a_i + b_j + sum_k w_k p_ik q_jk       a: 0.8, b: 0.7, three traits of taste of sizes 0.65, 0.45, 0.3
 *
 * and the score is t_ij with a mood of size 0.7, to the nearest half within 0..10. A panellist who tastes c ciders
 * takes c of them without putting back, with weights (place of j)^-0.6 exp(0.2 (t_ij - 5.8)): of independent
 * exponential waiting times with these rates the c shortest (Efraimidis, Spirakis 2006, "Weighted random sampling with
 * a reservoir"). All names are made of syllables; all figures are our own invention.
 */
#include "job/sow_internal.h"

#include <math.h>
#include <stdio.h>
#include <string.h>

enum { PANELLISTS = 900, CIDERS = 240, TRAITS = 3, MOST_TASTED = 60, FEWEST_TASTED = 4, NAME_SIZE = 32 };
enum { CIDER_PANELLISTS = SOW_CIDER, CIDER_CIDERS, CIDER_TASTING, CIDER_MOOD, CIDER_NAMES };

static const double middle = 5.8, severity = 0.8, quality = 0.7, trait_size[TRAITS] = {0.65, 0.45, 0.3};
static const double mood = 0.7;
static const double liking = 0.2; /* how much people choose by what they like */
static const double evenness = 0.6;
static const double tasted_log_mean = 2.54, tasted_log_spread = 0.5; /* about 14 a head, 6 % of all */

struct panel {
    double panellist[PANELLISTS][1 + TRAITS], cider[CIDERS][1 + TRAITS]; /* severity or quality, then traits */
    char panellist_name[PANELLISTS][NAME_SIZE], cider_name[CIDERS][NAME_SIZE];
    bool tasted[PANELLISTS][CIDERS];
};

/* ---- names ------------------------------------------------------------------------------------------------------ */

struct syllables { /* a name is "AB CD", each from its list: all combinations are different */
    const char *part[4][6];
    size_t count[4];
};

static const struct syllables of_panellists = {
    {{"Bra", "Cor", "Del", "Fin", "Hal", "Mir"},
     {"wen", "dric", "la", "nett", "sey"},
     {"Ask", "Tol", "Ven", "Quar", "Pell", "Mock"},
     {"mere", "vary", "strow", "ick", "andle"}},
    {6, 5, 6, 5},
};
static const struct syllables of_ciders = {
    {{"Tav", "Mor", "Quel", "Bris"},
     {"rick", "adow", "lan", "tock"},
     {"Rus", "Wim", "Gol", "Drey", "Kee"},
     {"sel", "fall", "den"}},
    {4, 4, 5, 3},
};

static void name_make(const struct syllables *syllables, size_t number, char name[NAME_SIZE])
{
    const char *part[4];
    for (size_t k = 0; k < 4; k++) {
        part[k] = syllables->part[k][number % syllables->count[k]];
        number /= syllables->count[k];
    }
    snprintf(name, NAME_SIZE, "%s%s %s%s", part[0], part[1], part[2], part[3]);
}

/* All names, each once, in a random order (Fisher and Yates). */
static void names_make(struct random_stream *stream, const struct syllables *syllables, size_t count,
                       char name[][NAME_SIZE])
{
    for (size_t k = 0; k < count; k++) {
        size_t place = random_below(stream, k + 1);
        memmove(name[k], name[place], NAME_SIZE);
        name_make(syllables, k, name[place]);
    }
}

/* ---- tasting ---------------------------------------------------------------------------------------------------- */

static double liked(const struct panel *panel, size_t i, size_t j)
{
    double sum = middle + panel->panellist[i][0] + panel->cider[j][0];
    for (size_t k = 0; k < TRAITS; k++)
        sum += trait_size[k] * panel->panellist[i][1 + k] * panel->cider[j][1 + k];
    return sum;
}

static double cut(double score)
{
    return fmin(10, fmax(0, score));
}

static void people_draw(const struct sowing *sowing, unsigned which, double size, size_t count,
                        double people[][1 + TRAITS])
{
    struct random_stream stream = sow_stream(sowing, which, 0);
    for (size_t i = 0; i < count; i++)
        for (size_t k = 0; k < 1 + TRAITS; k++)
            people[i][k] = (k == 0 ? size : 1) * random_normal(&stream);
}

static size_t shortest(const double wait[CIDERS])
{
    size_t best = 0;
    for (size_t j = 1; j < CIDERS; j++)
        if (wait[j] < wait[best])
            best = j;
    return best;
}

static void panellist_taste(const struct sowing *sowing, struct panel *panel, size_t i)
{
    struct random_stream stream = sow_stream(sowing, CIDER_TASTING, (uint64_t)i << 32);
    double wait[CIDERS], wanted = round(exp(tasted_log_mean + tasted_log_spread * random_normal(&stream)));
    size_t count = (size_t)fmin(MOST_TASTED, fmax(FEWEST_TASTED, wanted));
    for (size_t j = 0; j < CIDERS; j++) {
        double rate = pow((double)j + 1, -evenness) * exp(liking * (liked(panel, i, j) - middle));
        wait[j] = -log1p(-random_uniform(&stream)) / rate;
    }
    for (size_t k = 0; k < count; k++) {
        size_t j = shortest(wait);
        panel->tasted[i][j] = true;
        wait[j] = INFINITY;
    }
}

static void panel_make(const struct sowing *sowing, struct panel *panel)
{
    struct random_stream names = sow_stream(sowing, CIDER_NAMES, 0);
    names_make(&names, &of_panellists, PANELLISTS, panel->panellist_name);
    names_make(&names, &of_ciders, CIDERS, panel->cider_name);
    people_draw(sowing, CIDER_PANELLISTS, severity, PANELLISTS, panel->panellist);
    people_draw(sowing, CIDER_CIDERS, quality, CIDERS, panel->cider);
    for (size_t i = 0; i < PANELLISTS; i++)
        panellist_taste(sowing, panel, i);
}

/* ---- files ------------------------------------------------------------------------------------------------------ */

static void scores_put(const struct sowing *sowing, const struct panel *panel, size_t i, struct sink *sink)
{
    struct random_stream stream = sow_stream(sowing, CIDER_MOOD, (uint64_t)i << 32);
    for (size_t j = 0; j < CIDERS; j++) {
        if (!panel->tasted[i][j])
            continue;
        double score = cut(round(2 * (liked(panel, i, j) + mood * random_normal(&stream))) / 2);
        sink_text(sink, panel->panellist_name[i]);
        sink_text(sink, ",");
        sink_text(sink, panel->cider_name[j]);
        sink_text(sink, ",");
        sink_fixed(sink, score, 1);
        sink_text(sink, "\n");
    }
}

static void truth_heading_put(const struct panel *panel, struct sink *sink)
{
    sink_text(sink, "panellist");
    for (size_t j = 0; j < CIDERS; j++) {
        sink_text(sink, ",");
        sink_text(sink, panel->cider_name[j]);
    }
    sink_text(sink, "\n");
}

static void truth_put(const struct panel *panel, size_t i, struct sink *sink)
{
    sink_text(sink, panel->panellist_name[i]);
    for (size_t j = 0; j < CIDERS; j++) {
        sink_text(sink, ",");
        sink_fixed(sink, cut(liked(panel, i, j)), 2);
    }
    sink_text(sink, "\n");
}

static fescue_status panel_write(struct sowing *sowing, const struct panel *panel, bool as_seen, const char *name)
{
    struct sink sink;
    fescue_status status = sink_open(sowing, name, &sink);
    if (status == FESCUE_OK && as_seen)
        sink_text(&sink, "panellist,cider,score\n");
    else if (status == FESCUE_OK)
        truth_heading_put(panel, &sink);
    for (size_t i = 0; i < PANELLISTS && status == FESCUE_OK; i++) {
        if (as_seen)
            scores_put(sowing, panel, i, &sink);
        else
            truth_put(panel, i, &sink);
        status = progress_tell(sowing->context, "writing the table", (double)i / PANELLISTS);
    }
    fescue_status closed = sink_close(&sink);
    return status != FESCUE_OK ? status : closed;
}

fescue_status sow_cider(struct sowing *sowing)
{
    fescue_status status;
    struct panel *panel = NULL;
    TRY(TAKE(sowing->context, 1, &panel));
    panel_make(sowing, panel);
    for (size_t i = 0; i < PANELLISTS; i++)
        for (size_t j = 0; j < CIDERS; j++)
            sowing->observed += panel->tasted[i][j];
    sowing->rows = PANELLISTS;
    sowing->columns = CIDERS;
    sowing->table = "table.csv";
    sowing->truth = "truth.csv";
    sowing->noise = mood;
    TRY(panel_write(sowing, panel, true, sowing->table));
    TRY(panel_write(sowing, panel, false, sowing->truth));
done:
    GIVE(sowing->context, &panel);
    return status;
}
