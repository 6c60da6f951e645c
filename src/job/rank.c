/* SPDX-License-Identifier: MIT
 *
 * fescue_rank_table: cross-validation of a table, and its text:
 *
 *     how it was done; a line a rank with its ridge, its error and a dot on a scale from the least to the greatest
 *     error, with the standard error of its difference from the best about it; what follows; a command that uses it
 */
#include "job/job_internal.h"

#include <assert.h>
#include <inttypes.h>
#include <math.h>
#include <stdio.h>
#include <string.h>

enum { CHART = 46 }; /* columns of the scale */

struct fescue_ranking {
    fescue_context *context; /* borrowed */
    const fescue_table *table;
    struct fescue_options options; /* a copy; its texts are dropped in the end */
    struct ranking ranking;
    char *text;
};

static const char *kind_word(enum fescue_offsets kind)
{
    static const char *const words[] = {"auto", "both", "rows", "columns", "mean", "none"};
    return words[kind];
}

/* ---- the chart -----------------------------------------------------------------------------------------------------
 */

struct scale {
    double low, high;
};

static struct scale scale_find(const struct ranking *ranking)
{
    struct scale scale = {INFINITY, -INFINITY};
    for (uint64_t k = 0; k < ranking->count; k++) {
        double rmse = ranking->point[k].rmse;
        scale.low = fmin(scale.low, rmse);
        scale.high = isfinite(rmse) ? fmax(scale.high, rmse) : scale.high;
    }
    const struct ranking_point *beside[] = {&ranking->learnt, &ranking->interpolation};
    for (size_t k = 0; k < sizeof beside / sizeof beside[0]; k++)
        if (beside[k]->fold != NULL && isfinite(beside[k]->rmse)) {
            scale.low = fmin(scale.low, beside[k]->rmse);
            scale.high = fmax(scale.high, beside[k]->rmse);
        }
    return scale;
}

static int scale_place(const struct scale *scale, double value)
{
    if (!(scale->high > scale->low))
        return 0;
    double place = (value - scale->low) / (scale->high - scale->low) * (CHART - 1);
    return (int)lround(fmin(CHART - 1, fmax(0, place)));
}

/* A dot at the error, dashes over a standard error of the difference on both sides. */
static void dot_draw(const struct scale *scale, const struct ranking_point *point, char mark, char line[CHART + 1])
{
    memset(line, ' ', CHART);
    line[CHART] = '\0';
    if (!isfinite(point->rmse))
        return;
    double error = point->rmse > 0 ? point->worse_error / (2 * point->rmse) : 0; /* of an RMSE, to first order */
    int from = scale_place(scale, point->rmse - error), to = scale_place(scale, point->rmse + error);
    for (int k = from; k <= to; k++)
        line[k] = '-';
    line[scale_place(scale, point->rmse)] = mark;
    for (int k = CHART; k > 0 && line[k - 1] == ' '; k--)
        line[k - 1] = '\0';
}

/* name NULL: the rank. */
static void point_line(struct text *text, const struct scale *scale, const struct ranking_point *point, char mark,
                       const char *name)
{
    char ridge[32] = "-", rmse[32], rank[32], line[CHART + 1];
    if (point->rank > 0 && isnan(point->ridge))
        snprintf(ridge, sizeof ridge, "learnt");
    else if (point->rank > 0)
        real_to_words(point->ridge, 3, ridge);
    snprintf(rank, sizeof rank, point->rank_greatest > point->rank_least ? "%u-%u" : "%u", point->rank_least,
             point->rank_greatest);
    dot_draw(scale, point, mark, line);
    text_add(text, "  %c%5s  %-7s %-11s |%s\n", mark == 'o' ? ' ' : mark, name != NULL ? name : rank, ridge,
             real_to_words(point->rmse, 5, rmse), line);
}

static void chart_add(struct text *text, const struct ranking *ranking)
{
    struct scale scale = scale_find(ranking);
    char low[32], high[32];
    real_to_words(scale.low, 4, low);
    real_to_words(scale.high, 4, high);
    text_add(text, "\n    rank  ridge   RMSE         %s%*s\n", low, CHART - (int)strlen(low), high);
    for (uint64_t k = 0; k < ranking->count; k++)
        point_line(text, &scale, &ranking->point[k], k == ranking->chosen ? '*' : 'o', NULL);
    if (ranking->learnt.fold != NULL)
        point_line(text, &scale, &ranking->learnt, 'o', NULL);
    if (ranking->interpolation.fold != NULL)
        point_line(text, &scale, &ranking->interpolation, 'o', "time");
    text_add(text, "\n");
}

/* ---- sentences -----------------------------------------------------------------------------------------------------
 */

static const char *percent(double share, char text[32])
{
    return real_to_words(100 * share, 2, text);
}

static void head_add(struct text *text, const struct fescue_ranking *all)
{
    static const char *const shapes[] = {"", "scattered cells", "gaps like the holes", "cells of new rows",
                                         "cells of new columns"};
    const struct ranking *ranking = &all->ranking;
    const struct cells *cells = &all->table->cells;
    text_add(text, "%u rows by %u columns, %" PRIu64 " cells observed; %u folds hide %s.\n", cells->rows,
             cells->columns, cells->count, ranking->folds, shapes[ranking->shape.shape]);
    text_add(text, "Offsets: %s.\n", kind_word(ranking->point[0].offsets));
    if (ranking->is_weighted)
        text_add(text, "Weighted: each rank is the evidence fit with so many components at most.\n");
}

static void choice_add(struct text *text, const struct ranking *ranking)
{
    const struct ranking_point *chosen = &ranking->point[ranking->chosen], *none = &ranking->point[0];
    const struct ranking_point *best = &ranking->point[ranking->best];
    char gain[32], rmse[32], loss[32];
    if (!ranking->has_structure) {
        text_add(text, "Rank 0, the offsets alone, is not beaten: the table has no usable low-rank structure.\n");
        if (ranking->best > 0 && best->rmse < none->rmse)
            text_add(text,
                     "The best, rank %u, gains %s %%, which is no more than chance or not worth its components.\n",
                     best->rank, percent(1 - best->rmse / none->rmse, gain));
        return;
    }
    text_add(text, "Rank %u: RMSE %s on hidden cells, %s %% below offsets alone.\n", chosen->rank,
             real_to_words(chosen->rmse, 4, rmse), percent(1 - chosen->rmse / none->rmse, gain));
    if (chosen->is_exact)
        text_add(text, "It meets the hidden cells to rounding: the table is of this rank, without noise.\n");
    else if (ranking->chosen != ranking->best)
        text_add(text,
                 "Rank %u has the least error, %s %% less, which is within a standard error or next to nothing.\n",
                 best->rank, percent(1 - best->rmse / chosen->rmse, loss));
}

static void learnt_add(struct text *text, const struct ranking *ranking)
{
    const struct ranking_point *learnt = &ranking->learnt, *chosen = &ranking->point[ranking->chosen];
    char share[32];
    if (learnt->fold == NULL || chosen->is_exact || !isfinite(learnt->rmse))
        return;
    double ratio = learnt->rmse / chosen->rmse;
    text_add(text, "The evidence fit, which learns rank and shrinkage itself, comes to %s %% %s error than that.\n",
             percent(fabs(ratio - 1), share), ratio < 1 ? "less" : "more");
}

static void interpolation_add(struct text *text, const struct ranking *ranking)
{
    const struct ranking_point *rival = &ranking->interpolation, *chosen = &ranking->point[ranking->chosen];
    char share[32];
    if (rival->fold == NULL || chosen->is_exact)
        return;
    double ratio = rival->rmse / chosen->rmse;
    text_add(text, "Plain interpolation in time comes to %s %% %s error than %s.\n", percent(fabs(ratio - 1), share),
             ratio < 1 ? "less" : "more", ranking->has_structure ? "the rank" : "the offsets");
}

static void rival_add(struct text *text, const struct ranking *ranking)
{
    const struct ranking_point *rival = &ranking->rival;
    char rmse[32];
    if (rival->fold != NULL)
        text_add(text, "With offsets %s it would be rank %u, RMSE %s.\n", kind_word(rival->offsets), rival->rank,
                 real_to_words(rival->rmse, 4, rmse));
}

static void end_add(struct text *text, const struct fescue_ranking *all)
{
    const struct ranking *ranking = &all->ranking;
    if (ranking->is_cut)
        text_add(text, "The time limit ended the search.\n");
    else if (!ranking->is_ended && ranking->best + 1 == ranking->count && ranking->count > 1)
        text_add(text, "The error still falls at the largest rank that was tried; --rank-most allows more.\n");
}

/* The path as a shell takes it, or what it stands for, which is left to the user. */
static void path_add(struct text *text, const char *path, const char *word)
{
    static const char plain[] = "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789_./-+:,=@%";
    if (path[0] != '\0' && strspn(path, plain) == strlen(path))
        text_add(text, "%s", path);
    else
        text_add(text, "%s", word);
}

static void weights_add(struct text *text, const char *option, const char *path)
{
    if (path == NULL)
        return;
    text_add(text, " %s ", option);
    path_add(text, path, "FILE");
}

static void command_add(struct text *text, const struct fescue_ranking *all)
{
    const struct ranking_point *chosen = &all->ranking.point[all->ranking.chosen];
    char ridge[32];
    if (all->table->path == NULL)
        return;
    text_add(text, all->ranking.is_learnt_better
                       ? "\nTo fill with the evidence fit, which needs no rank:\n    fescue fill "
                       : "\nTo fill with it:\n    fescue fill ");
    path_add(text, all->table->path, "TABLE");
    if (strcmp(all->table->path, "-") == 0)
        text_add(text, " -o filled");
    if (!all->ranking.is_learnt_better)
        text_add(text, " --offsets %s --rank %u", kind_word(chosen->offsets), chosen->rank);
    if (!all->ranking.is_learnt_better && chosen->rank > 0 && !isnan(chosen->ridge))
        text_add(text, " --ridge %s", chosen->is_exact ? "0" : real_to_words(chosen->ridge, 15, ridge));
    weights_add(text, "--row-weights", all->options.row_weights);
    weights_add(text, "--column-weights", all->options.column_weights);
    text_add(text, "\n");
}

static fescue_status ranking_text_make(struct fescue_ranking *all)
{
    struct text text = {.context = all->context};
    head_add(&text, all);
    chart_add(&text, &all->ranking);
    choice_add(&text, &all->ranking);
    learnt_add(&text, &all->ranking);
    interpolation_add(&text, &all->ranking);
    rival_add(&text, &all->ranking);
    end_add(&text, all);
    command_add(&text, all);
    return text_finish(&text, &all->text);
}

/* ---- the job -------------------------------------------------------------------------------------------------------
 */

static fescue_status ranking_make(struct fescue_ranking *all)
{
    fescue_status status;
    struct time_axis time = {0};
    double started = clock_wall();
    TRY(job_prepare(all->context, &all->options));
    TRY(time_axis_find(all->context, all->table, (enum fescue_time_axis)all->options.time_axis, &time));
    struct ranking_request request = {.options = &all->options, .time = &time};
    if (all->options.time_limit > 0)
        request.deadline = started + all->options.time_limit;
    TRY(ranking_run(all->context, &all->table->cells, &request, &all->ranking));
    TRY(ranking_text_make(all));
done:
    time_axis_free(all->context, &time);
    return status;
}

fescue_status fescue_rank_table(const fescue_table *table, const struct fescue_options *options, fescue_ranking **out)
{
    fescue_ranking *all = NULL;
    fescue_status status = TAKE(table->context, 1, &all);
    *out = NULL;
    if (status != FESCUE_OK)
        return status;
    all->context = table->context;
    all->table = table;
    all->options = *options;
    all->options.output = NULL;
    status = ranking_make(all);
    all->options.row_weights = all->options.column_weights = NULL;
    if (status != FESCUE_OK)
        fescue_ranking_destroy(&all);
    *out = all;
    return status;
}

const char *fescue_ranking_text(const fescue_ranking *ranking)
{
    return ranking->text;
}

uint32_t fescue_ranking_rank(const fescue_ranking *ranking)
{
    return ranking->ranking.point[ranking->ranking.chosen].rank;
}

fescue_status fescue_ranking_write(const fescue_ranking *ranking, const char *directory)
{
    struct output *output = NULL;
    fescue_status status;
    TRY(output_open(ranking->context, directory, "rank.csv", &output));
    TRY(write_ranking(&ranking->ranking, output));
    TRY(output_publish(&output));
done:
    output_abandon(&output);
    return status;
}

void fescue_ranking_destroy(fescue_ranking **ranking)
{
    if (*ranking == NULL)
        return;
    fescue_context *context = (*ranking)->context;
    ranking_free(context, &(*ranking)->ranking);
    GIVE(context, &(*ranking)->text);
    GIVE(context, ranking);
}
