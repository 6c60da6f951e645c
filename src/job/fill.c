/* SPDX-License-Identifier: MIT
 *
 * The main job:
 *
 *     table --> hold-out --> choice of offsets, rank, ridge --> fit on all cells --> what is determined --> files
 *
 * The error that is announced, and the half-width of the intervals, are those of the chosen model on cells that it did
 * not see; the estimates are those of the fit on all cells, which has seen more and is no worse.
 *
 * Limits: of a --time-limit choosing gets `choosing_share`, the fit on all cells the rest. Either ends with what it has
 * by then, and the summary says so. Only a job that is stopped before anything was fitted fails.
 */
#include "job/job_internal.h"

#include <assert.h>
#include <math.h>
#include <string.h>
#include <time.h>

/* Choosing fits many ranks, the fit on all cells one, from a point that is nearly there. */
static const double choosing_share = 0.7;

/* The solver by name, and who learns rank and ridge. For auto and evidence the solver, for where one is needed, is the
   first of the list, which solver.c orders by preference. */
static fescue_status solver_choose(fescue_context *context, const struct fescue_options *options,
                                   struct choose_request *request)
{
    size_t count;
    const struct fescue_option *option = fescue_option_table(&count);
    char name[128];
    while (strcmp(option->name, "solver") != 0)
        option++;
    fescue_option_text(option, options, name, sizeof name);
    bool is_auto = strcmp(name, "auto") == 0, learns = strcmp(name, "evidence") == 0;
    if (learns && options->ridge != (double)FESCUE_AUTO)
        return FAIL(context, FESCUE_USAGE, "--solver evidence learns the ridge itself: leave --ridge at auto");
    request->way = is_auto ? CHOOSE_AUTO : learns ? CHOOSE_LEARN : CHOOSE_PATH;
    request->solver = is_auto || learns ? solver_at(0) : solver_find(name);
    assert(request->solver != NULL);
    return FESCUE_OK;
}

/* Which shape the hold-outs have, and along which side: that of the clock; else, for gaps, the one whose holes come in
   runs. */
static fescue_status fill_shape(fescue_fill *fill, struct holdout_request *asked)
{
    const struct cells *cells = &fill->table->cells;
    const struct time_axis *time = &fill->time;
    enum fescue_holdout_shape shape = (enum fescue_holdout_shape)fill->options.holdout_shape;
    fescue_status status;
    fill->order = (struct line_order){time->along == TIME_COLUMNS, time->at, time->order};
    TRY(hole_shape_find(fill->context, cells, time->along == TIME_NONE ? NULL : &fill->order, &fill->shape));
    if (time->along == TIME_NONE)
        fill->order.along_columns = fill->shape.along_columns;
    if (shape != FESCUE_HOLDOUT_AUTO)
        fill->shape = (struct hole_shape){.shape = shape, .along_columns = fill->order.along_columns};
    *asked = (struct holdout_request){.shape = fill->shape.shape,
                                      .share = fill->options.holdout,
                                      .seed = (uint64_t)fill->options.seed,
                                      .is_pooled = true,
                                      .order = &fill->order};
done:
    return status;
}

/* Weights go into the evidence fit; the path of the other solvers takes all cells for alike. */
static fescue_status weights_consider(const fescue_table *table, const struct fescue_options *options,
                                      struct choose_request *request)
{
    if (table->cells.by_row.weight == NULL)
        return FESCUE_OK;
    if (request->way == CHOOSE_PATH || options->ridge != (double)FESCUE_AUTO)
        return FAIL(table->context, FESCUE_USAGE,
                    "weights are taken by the evidence fit alone: leave --solver and --ridge at auto");
    request->way = CHOOSE_LEARN;
    return FESCUE_OK;
}

/* Whether what a choice was made on also says how wrong it is: only where learning it once more is felt. */
static bool held_serves(const fescue_fill *fill)
{
    return choice_serves(&fill->choice, &fill->table->cells) && !fill->choice.own_holdout &&
           fill->season.along == TIME_NONE && fill->options.folds == (int64_t)FESCUE_AUTO &&
           fill->shape.shape == FESCUE_HOLDOUT_CELLS;
}

static fescue_status fill_choose(fescue_fill *fill, struct choose_request *request)
{
    const struct cells *cells = &fill->table->cells;
    struct fescue_options *options = &fill->options;
    struct holdout holdout = {0};
    fescue_status status;
    if (options->time_limit > 0)
        request->deadline = fill->wall + choosing_share * options->time_limit;
    struct holdout_request asked;
    TRY(fill_shape(fill, &asked));
    TRY(holdout_cut(fill->context, cells, &asked, &holdout));
    if (holdout.hidden.count > 0)
        table_rest(fill->table);
    if (fill->season_plan.count == 0 || fill->season_plan.is_auto)
        TRY(choose_run(fill->context, &holdout, request, &fill->choice));
    TRY(season_choose(fill, &holdout, request));
    fill->is_search_cut = request->deadline > 0 && clock_wall() >= request->deadline;
    fill->run.hidden = holdout.hidden.count > 0 ? holdout.hidden.count : fill->choice.errors.count;
    if (held_serves(fill)) {
        fill->held = holdout;
        holdout = (struct holdout){0};
    }
done:
    holdout_free(fill->context, &holdout);
    return status;
}

static fescue_status fill_fit(fescue_fill *fill, const struct solver *solver)
{
    struct final_request request = {
        .cells = fill->cells, .options = &fill->fitting, .choice = &fill->choice, .solver = solver};
    if (fill->options.time_limit > 0)
        request.deadline = fill->wall + fill->options.time_limit;
    return final_fit_run(fill->context, &request, &fill->fit);
}

static fescue_status fill_judge(fescue_fill *fill, const struct solver *solver)
{
    const struct final_fit *fit = &fill->fit;
    bool has_order = fill->time.along != TIME_NONE || fill->shape.shape == FESCUE_HOLDOUT_GAPS;
    double deviation = fit->result.rmse * fit->scale;
    struct judge_request request = {.cells = fill->cells,
                                    .season = fill->season.along != TIME_NONE ? &fill->season : NULL,
                                    .whole = &fill->table->cells,
                                    .options = &fill->fitting,
                                    .choice = &fill->choice,
                                    .solver = solver,
                                    .held = fill->held.hidden.count > 0 ? &fill->held : NULL,
                                    .model = &fit->model,
                                    .shape = &fill->shape,
                                    .order = has_order ? &fill->order : NULL,
                                    .noise = deviation * deviation,
                                    .is_exact = fit->is_exact || fill->choice.noiseless};
    if (fill->options.time_limit > 0)
        request.deadline = fill->wall + fill->options.time_limit;
    if (fit->result.stop == STOP_CANCELLED)
        request.deadline = fill->wall; /* no time is left */
    return judge_run(fill->context, &request, &fill->judgement);
}

static bool is_small(const struct cells *cells)
{
    return (uint64_t)cells->rows * cells->columns <= FESCUE_DENSE_MOST;
}

/* What writers see. */
static void run_view(fescue_fill *fill)
{
    struct run *run = &fill->run;
    unsigned write = fill->options.write;
    bool is_auto = write == (unsigned)FESCUE_AUTO, is_dense = is_small(&fill->table->cells);
    run->context = fill->context;
    run->table = fill->table;
    run->options = &fill->options;
    run->time = &fill->time;
    run->model = &fill->fit.model;
    run->choice = &fill->choice;
    run->fit = &fill->fit.result;
    run->start = fill->fit.start;
    run->scale = fill->fit.scale;
    run->determined = &fill->determined;
    run->judgement = &fill->judgement;
    run->near = &fill->near;
    run->shape = &fill->shape;
    run->is_search_cut = fill->is_search_cut;
    run->writes_filled = is_auto ? is_dense : (write & WRITE_FILLED) != 0;
    run->writes_cells = is_auto ? is_dense : (write & WRITE_CELLS) != 0;
    run->writes_factors = is_auto || (write & WRITE_FACTORS) != 0;
}

/* From here on its clocks are those of the whole job, earlier runs included. */
static fescue_status fill_checkpoint_open(fescue_fill *fill)
{
    double before, before_cpu;
    fescue_status status = checkpoint_open(fill->table, &fill->options);
    fill->options.checkpoint = NULL;
    before = memo_seconds_before(fill->context, &before_cpu);
    fill->wall -= before;
    fill->cpu -= before_cpu;
    return status;
}

static fescue_status fill_run(fescue_fill *fill)
{
    fescue_context *context = fill->context;
    fescue_status status;
    TRY(job_prepare(context, &fill->options));
    TRY(fill_checkpoint_open(fill));
    TRY(time_axis_find(context, fill->table, (enum fescue_time_axis)fill->options.time_axis, &fill->time));
    TRY(season_plan_make(fill, fill->options.season));
    struct choose_request request = {.options = &fill->options, .time = &fill->time};
    TRY(solver_choose(context, &fill->options, &request));
    TRY(weights_consider(fill->table, &fill->options, &request));
    TRY(near_take(fill, fill->near_text, &request));
    TRY(fill_choose(fill, &request));
    TRY(fill_fit(fill, request.solver));
    if (fill->held.hidden.count == 0)
        low_rank_free(context, &fill->choice.start);
    TRY(fill_judge(fill, request.solver));
    low_rank_free(context, &fill->choice.start);
    holdout_free(context, &fill->held);
    season_restore(fill);
    TRY(determined_create(context, &fill->table->cells, fill->fit.model.low_rank.rank, fill->fit.model.offsets.kind,
                          &fill->determined));
    if (fill->fit.model.time.components > 0)
        fill->determined.smooth = fill->fit.model.time.along;
    if (near_is_felt(&fill->fit.model.near))
        TRY(determined_take_near(context, &fill->near, &fill->determined));
    run_view(fill);
    run_count(&fill->run);
    TRY(fill_summarise(fill, false, &fill->text));
done:
    if (is_cancelled(context))
        memo_flush(context);
    return status;
}

fescue_status fescue_fill_table(const fescue_table *table, const struct fescue_options *options, fescue_fill **out)
{
    fescue_fill *fill = NULL;
    fescue_status status = TAKE(table->context, 1, &fill);
    *out = NULL;
    if (status != FESCUE_OK)
        return status;
    fill->context = table->context;
    fill->table = table;
    fill->options = *options;
    fill->options.output = NULL;
    fill->options.row_weights = table->weights.rows; /* what the table was read with */
    fill->options.column_weights = table->weights.columns;
    fill->fitting = fill->options;
    fill->cells = &table->cells;
    fill->wall = clock_wall();
    fill->cpu = clock_cpu();
    fill->run.started = (double)time(NULL);
    const char *season = options->season != NULL ? options->season : "none";
    status = memory_copy_text(fill->context, season, strlen(season), &fill->season_text);
    fill->options.season = fill->fitting.season = fill->season_text;
    if (status == FESCUE_OK && options->near_columns != NULL)
        status =
            memory_copy_text(fill->context, options->near_columns, strlen(options->near_columns), &fill->near_text);
    fill->options.near_columns = fill->fitting.near_columns = fill->near_text;
    if (status == FESCUE_OK)
        status = fill_run(fill);
    if (status != FESCUE_OK)
        fescue_fill_destroy(&fill);
    *out = fill;
    return status;
}

double fescue_fill_estimate(const fescue_fill *fill, uint32_t row, uint32_t column)
{
    assert(row < fill->table->cells.rows && column < fill->table->cells.columns);
    return run_estimate(&fill->run, row, column);
}

/* ---- files --------------------------------------------------------------------------------------------------------
 */

/* Asks whether to go on; a job that was asked to stop before, and has something to write all the same, writes it. */
static fescue_status writing_tell(const fescue_fill *fill)
{
    if (fill->fit.result.stop == STOP_CANCELLED)
        return FESCUE_OK;
    return progress_tell(fill->context, "writing", -1);
}

/* Results of an older run in the same place that this one does not have must not lie beside its record. */
static fescue_status names_retire(struct output *output)
{
    static const char *const names[] = {"filled.mtx",   "filled.csv",       "filled.tsv",      "cells.csv",
                                        "left.mtx",     "right.mtx",        "row-offsets.mtx", "column-offsets.mtx",
                                        "spectrum.mtx", "season-waves.mtx", "season.mtx",      "time-part.csv",
                                        "trace.csv"};
    fescue_status status = FESCUE_OK;
    for (size_t k = 0; k < sizeof names / sizeof names[0] && status == FESCUE_OK; k++)
        status = output_retire(output, names[k]);
    return status;
}

static fescue_status results_add(const fescue_fill *fill, struct output *output)
{
    const struct run *run = &fill->run;
    fescue_status status;
    TRY(writing_tell(fill));
    if (run->writes_filled)
        TRY(write_filled(run, output));
    TRY(writing_tell(fill));
    if (run->writes_cells)
        TRY(write_cells(run, output));
    TRY(writing_tell(fill));
    if (run->writes_factors)
        TRY(write_factors(run, output));
    if (run->writes_factors)
        TRY(write_time_part(run, output));
    TRY(write_trace(run, output));
    TRY(names_retire(output));
done:
    return status;
}

fescue_status fescue_fill_write(fescue_fill *fill, const char *directory)
{
    struct output *output = NULL;
    char *text = NULL;
    fescue_status status;
    TRY(output_open(fill->context, directory, "run.json", &output));
    TRY(results_add(fill, output));
    TRY(fill_summarise(fill, true, &text));
    fill->run.seconds_wall = clock_wall() - fill->wall;
    fill->run.seconds_cpu = clock_cpu() - fill->cpu;
    TRY(write_record(&fill->run, output));
    TRY(output_publish(&output));
    memo_remove(fill->context);
    GIVE(fill->context, &fill->text);
    fill->text = text;
    text = NULL;
done:
    GIVE(fill->context, &text);
    output_abandon(&output);
    if (status != FESCUE_OK)
        memo_flush(fill->context); /* the fits need not be done again */
    return status;
}

const char *fescue_fill_text(const fescue_fill *fill)
{
    return fill->text;
}

void fescue_fill_destroy(fescue_fill **pointer)
{
    fescue_fill *fill = *pointer;
    if (fill == NULL)
        return;
    fescue_context *context = fill->context;
    memo_close(context);
    determined_free(context, &fill->determined);
    judgement_free(context, &fill->judgement);
    final_fit_free(context, &fill->fit);
    choice_free(context, &fill->choice);
    holdout_free(context, &fill->held);
    time_axis_free(context, &fill->time);
    season_free(context, &fill->season);
    cells_free(context, &fill->rest);
    nearness_free(context, &fill->near);
    GIVE(context, &fill->season_text);
    GIVE(context, &fill->near_text);
    GIVE(context, &fill->text);
    GIVE(context, pointer);
}
