/* SPDX-License-Identifier: MIT
 *
 * The summary of a fill: what a person wants to know, one matter a line.
 */
#include "job/job_internal.h"

#include <inttypes.h>
#include <math.h>
#include <stdio.h>
#include <string.h>

struct summary {
    const fescue_fill *fill;
    const struct run *run;
    struct text text;
};

enum { WORDS_SIZE = 48 };

/* "1 cell", "2 cells". */
static const char *count_words(uint64_t count, const char *noun, char text[WORDS_SIZE])
{
    snprintf(text, WORDS_SIZE, "%" PRIu64 " %s%s", count, noun, count == 1 ? "" : "s");
    return text;
}

static void table_lines(struct summary *summary)
{
    const fescue_table *table = summary->fill->table;
    const struct cells *cells = &table->cells;
    char share[32], rows[WORDS_SIZE], columns[WORDS_SIZE], seen[WORDS_SIZE];
    double all = (double)cells->rows * (double)cells->columns;
    real_to_words(100 * (double)cells->count / all, 3, share);
    text_add(&summary->text, "table      %s x %s, %s seen (%s %%)\n", count_words(cells->rows, "row", rows),
             count_words(cells->columns, "column", columns), count_words(cells->count, "cell", seen), share);
    if (table->duplicates > 0)
        text_add(&summary->text, "           merged: %s that came more than once\n",
                 count_words(table->duplicates, "cell", seen));
}

static void season_line(struct summary *summary)
{
    const struct season_plan *plan = &summary->fill->season_plan;
    const struct fescue_fill *fill = summary->fill;
    struct text *text = &summary->text;
    bool is_there = fill->fit.model.season.along != TIME_NONE;
    char period[32], with[32], without[32];
    if (plan->count == 0) {
        if (plan->is_auto)
            text_add(text, "season     none: %s\n",
                     fill->time.along == TIME_NONE ? "no side is known to be in time"
                                                   : "no day, week or year stands out");
        return;
    }
    text_add(text, "season     ");
    for (size_t k = 0; k < plan->count; k++) {
        double seconds = plan->period[k] * fill->time.step_seconds;
        text_add(text, "%s%s %s", k > 0 ? " and " : "",
                 real_to_words(isfinite(seconds) ? seconds / 3600 : plan->period[k], 6, period),
                 isfinite(seconds) ? "h" : "steps");
    }
    if (!plan->is_auto)
        text_add(text, " (as asked)\n");
    else
        text_add(text,
                 is_there ? ": RMSE %s on hidden cells with it, %s without\n"
                          : ", not taken: hidden cells are met no better with it (RMSE %s without)\n",
                 is_there ? real_to_words(fill->choice.errors.rmse, 4, with)
                          : real_to_words(plan->rmse_without, 4, without),
                 real_to_words(plan->rmse_without, 4, without));
}

static void weights_line(struct summary *summary)
{
    const struct table_weights *weights = &summary->fill->table->weights;
    struct text *text = &summary->text;
    const char *between = "";
    char least[32], most[32];
    if (weights->most == 0)
        return;
    text_add(text, "weights    of ");
    const char *const whose[] = {weights->of_cells ? "cells" : NULL, weights->rows != NULL ? "rows" : NULL,
                                 weights->columns != NULL ? "columns" : NULL};
    for (size_t k = 0; k < sizeof whose / sizeof whose[0]; k++) {
        if (whose[k] == NULL)
            continue;
        text_add(text, "%s%s", between, whose[k]);
        between = " and ";
    }
    text_add(text, ", from %s to %s of the mean; errors below count every cell once\n",
             real_to_words(weights->least, 3, least), real_to_words(weights->most, 3, most));
}

static void time_line(struct summary *summary)
{
    const struct time_axis *time = &summary->fill->time;
    char words[TIME_TEXT_SIZE];
    if (time->along != TIME_NONE)
        text_add(&summary->text, "time       %s\n", time_axis_text(time, words));
    else if (time->note[0] != '\0')
        text_add(&summary->text, "time       %s\n", time->note);
}

static const char *offsets_text(enum fescue_offsets offsets)
{
    switch (offsets) {
    case FESCUE_OFFSETS_BOTH:
        return "offsets of rows and columns";
    case FESCUE_OFFSETS_ROWS:
        return "offsets of rows";
    case FESCUE_OFFSETS_COLUMNS:
        return "offsets of columns";
    case FESCUE_OFFSETS_MEAN:
        return "the mean";
    case FESCUE_OFFSETS_NONE:
    case FESCUE_OFFSETS_AUTO:
        break;
    }
    return "no offsets";
}

static const char *by_whom(bool is_auto)
{
    return is_auto ? "chosen" : "as asked";
}

/* What shrinks the components. */
static void ridge_words(struct summary *summary)
{
    const struct choice *choice = &summary->fill->choice;
    bool is_chosen = summary->fill->options.ridge == (double)FESCUE_AUTO;
    char ridge[32];
    if (summary->fill->fit.is_exact)
        text_add(&summary->text, ", no ridge (all seen cells are met to rounding)");
    else if (choice->is_learnt || (summary->fill->fit.is_robust && is_chosen))
        text_add(&summary->text, ", a ridge a component (learnt)");
    else
        text_add(&summary->text, ", ridge %s (%s)", real_to_words(choice->ridge, 3, ridge), by_whom(is_chosen));
}

/* A rank that was asked for and is not there. */
static void rank_line(struct summary *summary)
{
    const struct fescue_fill *fill = summary->fill;
    const struct cells *cells = &fill->table->cells;
    int64_t asked = fill->options.rank, shorter = cells->rows < cells->columns ? cells->rows : cells->columns;
    if (asked == FESCUE_AUTO || (int64_t)fill->fit.model.low_rank.rank >= asked)
        return;
    text_add(&summary->text, "           rank %" PRId64 " was asked for; %s\n", asked,
             fill->choice.is_learnt && asked <= shorter ? "the data do not support more components"
                                                        : "the table is too small for it");
}

static void model_lines(struct summary *summary)
{
    const struct fescue_options *options = &summary->fill->options;
    const struct choice *choice = &summary->fill->choice;
    struct text *text = &summary->text;
    char tried[WORDS_SIZE], hidden[WORDS_SIZE];
    size_t rank = summary->fill->fit.model.low_rank.rank;
    bool chooses_rank = options->rank == FESCUE_AUTO, is_learnt = choice->is_learnt && !summary->fill->fit.is_exact;
    text_add(text, "model      %s (%s), rank %zu (%s)", offsets_text(choice->offsets),
             by_whom(options->offsets == FESCUE_OFFSETS_AUTO), rank, by_whom(chooses_rank));
    if (rank > 0)
        ridge_words(summary);
    text_add(text, "\n");
    if (is_learnt && choice->learnt.noise != EVIDENCE_NOISE_EQUAL)
        text_add(text, "           noise of every %s learnt on its own: less error on hidden cells\n",
                 choice->learnt.noise == EVIDENCE_NOISE_COLUMNS ? "column" : "row");
    if (choice->path_count > 1 && choice->errors.count > 0)
        text_add(text, "           out of %s tried on %s\n", count_words(choice->path_count, "fit", tried),
                 count_words(choice->errors.count, "hidden cell", hidden));
    if (summary->fill->is_search_cut)
        text_add(text, "           WARNING: the time limit ended the search; allow more, or give a --rank\n");
    else if (rank == 0 && chooses_rank && choice->errors.count > 0)
        text_add(text, "           no usable low-rank structure: offsets alone predict hidden cells better\n");
    rank_line(summary);
}

static const char *alone_text(enum fescue_offsets offsets)
{
    if (offsets == FESCUE_OFFSETS_NONE)
        return "without the low-rank part";
    return offsets == FESCUE_OFFSETS_MEAN ? "the mean alone" : "offsets alone";
}

/* What was hidden, and why in this shape. */
static void shape_line(struct summary *summary)
{
    static const char *const shapes[] = {[FESCUE_HOLDOUT_AUTO] = "",
                                         [FESCUE_HOLDOUT_CELLS] = "scattered cells",
                                         [FESCUE_HOLDOUT_GAPS] = "scattered cells, and gaps like the table's own",
                                         [FESCUE_HOLDOUT_ROWS] = "all but a few cells of some rows",
                                         [FESCUE_HOLDOUT_COLUMNS] = "all but a few cells of some columns"};
    const struct hole_shape *shape = &summary->fill->shape;
    text_add(&summary->text, "           hidden were %s: %s\n", shapes[shape->shape],
             shape->why[0] != '\0' ? shape->why : "as asked");
}

/* The error over the unseen cells, and where the figure comes from. */
static void judged_lines(struct summary *summary)
{
    const struct judgement *judgement = &summary->fill->judgement;
    struct text *text = &summary->text;
    char rmse[32], mae[32], low[32], high[32], scattered[32], hidden[WORDS_SIZE], folds[WORDS_SIZE];
    text_add(text, "error      RMSE %s", real_to_words(judgement->rmse, 4, rmse));
    if (isfinite(judgement->rmse_low))
        text_add(text, " (%s to %s)", real_to_words(judgement->rmse_low, 4, low),
                 real_to_words(judgement->rmse_high, 4, high));
    text_add(text, ", MAE %s expected over the unseen cells\n", real_to_words(judgement->mae, 4, mae));
    text_add(text, "           from %s in %s%s\n", count_words(judgement->judged, "hidden cell", hidden),
             count_words(judgement->scattered_folds + judgement->shaped_folds, "fold", folds),
             judgement->is_cut ? " (the time limit left others out)" : "");
    shape_line(summary);
    if (judgement->shaped_folds > 0 && judgement->scattered_folds > 0)
        text_add(text, "           scattered cells alone would have said RMSE %s\n",
                 real_to_words(judgement->scattered_rmse, 4, scattered));
}

/* What time and unequal noise bought, on the same hidden cells. */
static void time_gain_line(struct summary *summary)
{
    const struct choice *choice = &summary->fill->choice;
    bool has_time = choice->learnt.time != NULL || choice->kriged.time != NULL,
         is_equal = choice->learnt.noise == EVIDENCE_NOISE_EQUAL;
    char plain[32], interpolation[32];
    if (choice->interpolation_errors.count == 0 || choice->plain_errors.count == 0)
        return;
    real_to_words(choice->plain_errors.rmse, 4, plain);
    real_to_words(choice->interpolation_errors.rmse, 4, interpolation);
    text_add(&summary->text, "           %s; low rank alone: RMSE %s, interpolation in time: %s%s\n",
             !has_time && is_equal         ? "time and unequal noise do not lower it"
             : !has_time                   ? "that is with unequal noise"
             : choice->kriged.time != NULL ? "that is with time, by kriging what the fit leaves"
             : is_equal                    ? "that is with time"
                                           : "that is with time and unequal noise",
             plain, interpolation,
             choice->interpolation_errors.rmse < choice->errors.rmse ? ", the least of them" : "");
}

static void error_lines(struct summary *summary)
{
    const struct choice *choice = &summary->fill->choice;
    const struct errors *errors = &choice->errors, *alone = &choice->offsets_errors;
    struct text *text = &summary->text;
    char rmse[32], mae[32], alone_rmse[32], hidden[WORDS_SIZE];
    if (errors->count == 0) {
        text_add(text, "error      not measured: no cells were hidden\n");
        return;
    }
    if (summary->fill->judgement.is_judged) {
        judged_lines(summary);
    } else {
        text_add(text, "error      RMSE %s, MAE %s on %s\n", real_to_words(errors->rmse, 4, rmse),
                 real_to_words(errors->mae, 4, mae), count_words(errors->count, "hidden cell", hidden));
        shape_line(summary);
    }
    if (choice->rank > 0)
        text_add(text, "           while choosing, on %s: RMSE %s, %s %s\n",
                 count_words(errors->count, "hidden cell", hidden), real_to_words(errors->rmse, 4, rmse),
                 alone_text(choice->offsets), real_to_words(alone->rmse, 4, alone_rmse));
    time_gain_line(summary);
    if (choice->noiseless)
        text_add(text, "           the hidden cells are met to rounding: the table is free of noise\n");
    if (summary->fill->fit.is_exact)
        text_add(text, "           of the fits that were tried; the one on all cells is exact, so this is too much\n");
    if (choice->own_holdout)
        text_add(text, "           no cells were to be kept hidden; a tenth was, for the choice alone\n");
}

static void interval_line(struct summary *summary)
{
    const struct judgement *judgement = &summary->fill->judgement;
    char level[32], halfwidth[32], low[32], high[32];
    real_to_words(100 * summary->fill->options.interval, 3, level);
    if (judgement->is_judged && isfinite(judgement->quantile))
        text_add(&summary->text,
                 "interval   of every cell its own, to hold %s %% of readings: +- %s, %s to %s for most\n", level,
                 real_to_words(judgement->halfwidth_median, 4, halfwidth),
                 real_to_words(judgement->halfwidth_low, 4, low), real_to_words(judgement->halfwidth_high, 4, high));
    else if (!judgement->is_judged && isfinite(judgement->halfwidth))
        text_add(&summary->text, "interval   estimate +- %s holds %s %% of such cells\n",
                 real_to_words(judgement->halfwidth, 4, halfwidth), level);
    else if (summary->fill->choice.errors.count > 0)
        text_add(&summary->text, "interval   none: too few hidden cells for %s %%\n", level);
    else
        text_add(&summary->text, "interval   none: no cells were hidden\n");
}

static const char *advice(enum solve_stop stop)
{
    switch (stop) {
    case STOP_ITERATIONS:
        return "more --iterations may end it";
    case STOP_TIME:
        return "allow more time, or give a --rank";
    case STOP_CANCELLED:
        return "run it again to its end before the results are used";
    default:
        return "its error on hidden cells was measured all the same";
    }
}

static void fit_lines(struct summary *summary)
{
    const struct solve_result *result = &summary->fill->fit.result;
    struct text *text = &summary->text;
    char iterations[WORDS_SIZE], aside[WORDS_SIZE];
    if (summary->fill->fit.model.low_rank.rank == 0)
        return;
    text_add(text, "fit        %s on all cells, %s: %s\n", result->solver,
             count_words(result->iterations, "iteration", iterations), solve_stop_text(result->stop));
    if (summary->fill->fit.is_robust)
        text_add(text, "           then by squares, %s set aside as more than 5 standard deviations off\n",
                 count_words(summary->fill->fit.set_aside, "cell", aside));
    if (!solve_converged(result->stop))
        text_add(text, "           WARNING: the fit did not converge; %s\n", advice(result->stop));
}

static void filled_lines(struct summary *summary)
{
    const struct run *run = summary->run;
    struct text *text = &summary->text;
    char filled[WORDS_SIZE];
    uint64_t low_rank = run->filled[BASIS_LOW_RANK], offsets = run->filled[BASIS_OFFSETS];
    uint64_t smooth = run->filled[BASIS_SMOOTH], mean = run->filled[BASIS_MEAN];
    uint64_t less = smooth + offsets + mean, all = low_rank + less;
    if (all == 0) {
        text_add(text, "filled     nothing: every cell was seen\n");
        return;
    }
    text_add(text,
             "filled     %s; by what the data determine: low-rank %" PRIu64 ", smooth %" PRIu64 ", offsets %" PRIu64
             ", mean %" PRIu64 "\n",
             count_words(all - run->blank, "cell", filled), low_rank, smooth, offsets, mean);
    if (run->determined->unchecked > 0)
        text_add(text,
                 "           of %" PRIu64 " rows and columns only the necessary conditions were checked: too large\n",
                 run->determined->unchecked);
    if (run->blank > 0)
        text_add(text, "           left blank: %" PRIu64 " that the data do not determine (--strict)\n", run->blank);
    else if (run->model->low_rank.rank > 0 && less > 0 && !run->options->strict)
        text_add(text, "           do not rely on the %" PRIu64 " that are not low-rank; --strict leaves them blank\n",
                 less);
}

static void left_out_line(struct summary *summary, const char *name, const char *why)
{
    if (why != NULL)
        text_add(&summary->text, "           not %s: %s\n", name, why);
}

static void files_lines(struct summary *summary)
{
    const struct run *run = summary->run;
    const char *name = filled_name(run->table);
    text_add(&summary->text, "written    %s%s%s%strace.csv, run.json\n", run->writes_filled ? name : "",
             run->writes_filled ? ", " : "", run->writes_cells ? "cells.csv, " : "",
             run->writes_factors ? "factors, " : "");
    left_out_line(summary, name, run_why_left_out(run, run->writes_filled));
    left_out_line(summary, "cells.csv", run_why_left_out(run, run->writes_cells));
    left_out_line(summary, "the factors", run_why_left_out(run, run->writes_factors));
}

fescue_status fill_summarise(const fescue_fill *fill, bool is_written, char **text)
{
    struct summary summary = {.fill = fill, .run = &fill->run, .text = {.context = fill->context}};
    table_lines(&summary);
    time_line(&summary);
    season_line(&summary);
    weights_line(&summary);
    near_line(fill, &summary.text);
    model_lines(&summary);
    error_lines(&summary);
    interval_line(&summary);
    fit_lines(&summary);
    filled_lines(&summary);
    if (memo_note(fill->context)[0] != '\0')
        text_add(&summary.text, "checkpoint %s\n", memo_note(fill->context));
    if (is_written)
        files_lines(&summary);
    words_wrap(&summary.text, run_caution);
    return text_finish(&summary.text, text);
}
