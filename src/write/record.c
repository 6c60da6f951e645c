/* SPDX-License-Identifier: MIT
 *
 * run.json: everything needed to repeat and to judge the run, and the seal of its directory: where it is, the run is
 * complete.
 *
 *   program, version, caution, instructions
 *   input     path, packed_from (of a pack: its source), crc32 and bytes (as on disk; of a pack: of its source), shape,
 *             rows, columns, observed, duplicates, checksums of the labels
 *   time      which side is in time, its step, gaps, equal times; or along none
 *   season    whether there is one, and its waves
 *   near      whether near columns are drawn together, how many pairs there are, how strongly, and the RMSE without
 *   weights   whether cells, rows, columns brought their own, and the range of the cells' (mean one)
 *   options   every option that bears on results, as the text that sets it
 *   choice    offsets, rank, ridge (null where the fit learns one a component: then the noise it assumes); hidden
 * cells, errors on them, of offsets alone too; the interval; the path tried fit       solver, start, stop, iterations,
 * objective, gradient, rmse model     rank, mean, ridges of the effects, spectrum, how an estimate is made of them
 *   unseen    cells by basis, cells left blank, lines whose basis rests on necessary conditions alone
 *   files     each with "written" or why it was left out
 *   timing    started, seconds, threads, bytes of memory at most: all that may differ when the run is repeated
 *
 * Keys keep the order in which they are set here. What is not finite becomes null. Jansson takes memory from malloc:
 * its allocator is one for the whole process and so not ours to replace. When it has none it gives NULL, which every
 * call of it here passes on, and which ends as FESCUE_NO_MEMORY.
 */
#include "write/write_internal.h"

#include <inttypes.h>
#include <math.h>
#include <stdio.h>
#include <string.h>
#include <time.h>
#include <zlib.h>

/* An object in the making; `failed` stays once there was no memory. */
struct record {
    fescue_context *context;
    json_t *object;
    bool failed;
};

/* ---- values ---------------------------------------------------------------------------------------------------------
 */

static struct record record_open(fescue_context *context)
{
    json_t *object = json_object();
    return (struct record){context, object, object == NULL};
}

/* Takes the value. */
static void value_set(struct record *record, const char *key, json_t *value)
{
    if (json_object_set_new(record->object, key, value) != 0)
        record->failed = true;
}

static void record_set(struct record *record, const char *key, struct record value)
{
    record->failed = record->failed || value.failed;
    value_set(record, key, value.object);
}

static void real_set(struct record *record, const char *key, double value)
{
    value_set(record, key, isfinite(value) ? json_real(value) : json_null());
}

/* Counts are below 2^63: they count what lies in memory, or cells of a table of at most 2^32 by 2^32, of which more
   than 2^63 cannot be told apart from "very many". */
static void count_set(struct record *record, const char *key, uint64_t value)
{
    value_set(record, key, json_integer(value > INT64_MAX ? INT64_MAX : (json_int_t)value));
}

/* JSON is UTF-8; a path may be any bytes. Bytes beyond ASCII become question marks in a text that is not UTF-8. */
static void text_set(struct record *record, const char *key, const char *text)
{
    char *plain = NULL;
    json_t *value = json_string(text);
    if (value == NULL && memory_copy_text(record->context, text, strlen(text), &plain) == FESCUE_OK) {
        for (char *byte = plain; *byte != '\0'; byte++)
            *byte = (unsigned char)*byte < 0x80 ? *byte : '?';
        value = json_string(plain);
    }
    GIVE(record->context, &plain);
    value_set(record, key, value);
}

/* Checksum of the labels, each with its NUL; of the number of lines alone where the side has none. */
static void labels_set(struct record *record, const char *key, const struct labels *labels, uint32_t lines)
{
    char text[16];
    uLong crc = crc32(0, (const Bytef *)&lines, sizeof lines);
    for (uint32_t k = 0; labels->text != NULL && k < labels->count; k++)
        crc = crc32(crc, (const Bytef *)labels->text[k], (uInt)strlen(labels->text[k]) + 1);
    snprintf(text, sizeof text, "%08lx", crc & 0xffffffffUL);
    text_set(record, key, text);
}

static double effects_rms(const double *effect, uint32_t count)
{
    double square = 0;
    for (uint32_t k = 0; k < count; k++)
        square += effect[k] * effect[k];
    return sqrt(square / count);
}

static void flag_set(struct record *record, const char *key, bool value)
{
    value_set(record, key, json_boolean(value));
}

static const char *offsets_word(enum fescue_offsets offsets)
{
    static const char *const words[] = {
        [FESCUE_OFFSETS_AUTO] = "auto",       [FESCUE_OFFSETS_BOTH] = "both", [FESCUE_OFFSETS_ROWS] = "rows",
        [FESCUE_OFFSETS_COLUMNS] = "columns", [FESCUE_OFFSETS_MEAN] = "mean", [FESCUE_OFFSETS_NONE] = "none"};
    return words[offsets];
}

/* ---- the parts ------------------------------------------------------------------------------------------------------
 */

static struct record input_record(const struct run *run)
{
    static const char *const shapes[] = {[SHAPE_MM_COORDINATE] = "matrix-market coordinate",
                                         [SHAPE_MM_ARRAY] = "matrix-market array",
                                         [SHAPE_WIDE] = "wide",
                                         [SHAPE_LONG] = "long",
                                         [SHAPE_MEMORY] = "memory"};
    const fescue_table *table = run->table;
    struct record input = record_open(run->context);
    char crc[16];
    snprintf(crc, sizeof crc, "%08" PRIx32, table->input_crc32);
    text_set(&input, "path", table->path == NULL ? "" : table->path);
    if (table->packed_from != NULL)
        text_set(&input, "packed_from", table->packed_from);
    text_set(&input, "crc32", crc);
    count_set(&input, "bytes", table->input_bytes);
    text_set(&input, "shape", shapes[table->look.shape]);
    count_set(&input, "rows", table->cells.rows);
    count_set(&input, "columns", table->cells.columns);
    count_set(&input, "observed", table->cells.count);
    count_set(&input, "duplicates", table->duplicates);
    labels_set(&input, "row_labels_crc32", &table->row_labels, table->cells.rows);
    labels_set(&input, "column_labels_crc32", &table->column_labels, table->cells.columns);
    return input;
}

static struct record season_record(const struct run *run)
{
    const struct season *season = &run->model->season;
    struct record record = record_open(run->context), waves = {run->context, json_array(), false};
    for (size_t k = 0; k < season->waves; k++)
        if (json_array_append_new(waves.object, json_real(season->frequency[k])) != 0)
            waves.failed = true;
    flag_set(&record, "is_there", season->along != TIME_NONE);
    record_set(&record, "cycles_per_step", waves);
    return record;
}

static struct record weights_record(const struct run *run)
{
    const struct table_weights *weights = &run->table->weights;
    struct record record = record_open(run->context);
    flag_set(&record, "of_cells", weights->of_cells);
    flag_set(&record, "of_rows", weights->rows != NULL);
    flag_set(&record, "of_columns", weights->columns != NULL);
    real_set(&record, "least", weights->most > 0 ? weights->least : NAN);
    real_set(&record, "most", weights->most > 0 ? weights->most : NAN);
    return record;
}

static struct record near_record(const struct run *run)
{
    const struct near_part *near = &run->model->near;
    const struct errors *without = &run->choice->far_errors;
    struct record record = record_open(run->context);
    flag_set(&record, "is_there", near->is_there);
    count_set(&record, "pairs", run->near->count);
    real_set(&record, "components", near->is_there ? near->components : NAN);
    real_set(&record, "offsets", near->is_there ? near->effect : NAN);
    real_set(&record, "rmse_without", without->count > 0 ? without->rmse : NAN);
    return record;
}

static struct record time_record(const struct run *run)
{
    static const char *const sides[] = {[TIME_NONE] = "none", [TIME_ROWS] = "rows", [TIME_COLUMNS] = "columns"};
    const struct time_axis *time = run->time;
    struct record record = record_open(run->context);
    text_set(&record, "along", sides[time->along]);
    if (time->note[0] != '\0')
        text_set(&record, "note", time->note);
    if (time->along == TIME_NONE)
        return record;
    real_set(&record, "step_seconds", time->step_seconds);
    real_set(&record, "start_unix_seconds", time->start);
    count_set(&record, "gaps", time->gaps);
    count_set(&record, "equal_times", time->equal);
    count_set(&record, "clock_set_back", time->set_back);
    flag_set(&record, "in_order", time->is_sorted);
    flag_set(&record, "used", run->model->time.along != TIME_NONE);
    if (run->model->time.along != TIME_NONE)
        text_set(&record, "by", run->choice->is_learnt ? "evidence" : "kriging");
    return record;
}

/* Where results and checkpoints went and how many workers there were bears on no result. */
static bool is_no_matter(const char *name)
{
    static const char *const names[] = {"output", "threads", "checkpoint", "checkpoint-every"};
    for (size_t k = 0; k < sizeof names / sizeof *names; k++)
        if (strcmp(name, names[k]) == 0)
            return true;
    return false;
}

static struct record options_record(const struct run *run)
{
    struct record options = record_open(run->context);
    size_t count;
    const struct fescue_option *table = fescue_option_table(&count);
    for (size_t k = 0; k < count; k++) {
        char text[128];
        const char *const *given = (const void *)((const char *)run->options + table[k].position);
        bool is_text = table[k].kind == FESCUE_KIND_TEXT; /* of any length; one that was not given has no value */
        if (is_no_matter(table[k].name) || (is_text && *given == NULL))
            continue;
        if (!is_text)
            fescue_option_text(&table[k], run->options, text, sizeof text);
        text_set(&options, table[k].name, is_text ? *given : text);
    }
    return options;
}

static struct record errors_record(const struct run *run, const struct errors *errors)
{
    struct record record = record_open(run->context);
    real_set(&record, "rmse", errors->count > 0 ? errors->rmse : NAN);
    real_set(&record, "mae", errors->count > 0 ? errors->mae : NAN);
    return record;
}

static struct record step_record(const struct run *run, const struct choose_step *step)
{
    struct record record = record_open(run->context);
    text_set(&record, "offsets", offsets_word(step->offsets));
    count_set(&record, "rank", step->rank);
    real_set(&record, "ridge", step->ridge);
    real_set(&record, "rmse", step->errors.count > 0 ? step->errors.rmse : NAN);
    real_set(&record, "mae", step->errors.count > 0 ? step->errors.mae : NAN);
    return record;
}

static struct record choice_record(const struct run *run)
{
    static const char *const noises[] = {[EVIDENCE_NOISE_EQUAL] = "equal",
                                         [EVIDENCE_NOISE_COLUMNS] = "of every column",
                                         [EVIDENCE_NOISE_ROWS] = "of every row"};
    const struct choice *choice = run->choice;
    struct record record = record_open(run->context), path = {run->context, json_array(), false};
    text_set(&record, "offsets", offsets_word(choice->offsets));
    count_set(&record, "rank", choice->rank);
    real_set(&record, "ridge", choice->ridge);
    flag_set(&record, "learnt", choice->is_learnt);
    if (choice->is_learnt)
        text_set(&record, "noise", noises[choice->learnt.noise]);
    count_set(&record, "hidden", run->hidden);
    count_set(&record, "judged", choice->errors.count);
    record_set(&record, "errors", errors_record(run, &choice->errors));
    record_set(&record, "errors_of_offsets_alone", errors_record(run, &choice->offsets_errors));
    if (choice->plain_errors.count > 0)
        record_set(&record, "errors_of_low_rank_alone", errors_record(run, &choice->plain_errors));
    if (choice->interpolation_errors.count > 0)
        record_set(&record, "errors_of_interpolation_in_time", errors_record(run, &choice->interpolation_errors));
    real_set(&record, "rmse_of_best_offsets_alone", choice->errors.count > 0 ? choice->offsets_only_rank0_rmse : NAN);
    flag_set(&record, "hidden_for_choice_only", choice->own_holdout);
    flag_set(&record, "noiseless", choice->noiseless);
    flag_set(&record, "cut_by_time_limit", run->is_search_cut);
    for (uint64_t k = 0; k < choice->path_count; k++) {
        struct record step = step_record(run, &choice->path[k]);
        path.failed = path.failed || step.failed;
        if (json_array_append_new(path.object, step.object) != 0)
            path.failed = true;
    }
    record_set(&record, "path", path);
    return record;
}

static struct record variance_record(const struct run *run)
{
    static const char *const terms[VARIANCE_TERMS] = {"constant",    "leverage",       "leverage_root", "distance_3",
                                                      "distance_30", "distance_300",   "one_sided",     "dark_3",
                                                      "dark_30",     "own_leverage_30"};
    const struct variance *variance = &run->judgement->variance;
    struct record record = record_open(run->context);
    for (size_t k = 0; k < VARIANCE_TERMS; k++)
        real_set(&record, terms[k], variance->weight[k]);
    real_set(&record, "least", variance->least);
    return record;
}

static struct record interval_record(const struct run *run)
{
    const struct judgement *judgement = run->judgement;
    struct record record = record_open(run->context), quantiles = record_open(run->context);
    char level[32];
    real_set(&record, "level", judgement->level);
    real_set(&record, "quantile", judgement->is_judged ? judgement->quantile : NAN);
    real_set(&record, "tilt", judgement->tilt);
    real_set(&record, "tilt_centre", judgement->tilt_centre);
    for (size_t k = 0; k < JUDGE_LEVELS; k++) {
        real_to_text(judge_levels[k], FESCUE_DOUBLE, level);
        real_set(&quantiles, level, judgement->is_judged ? judgement->level_quantiles[k] : NAN);
    }
    record_set(&record, "quantiles", quantiles);
    real_set(&record, "halfwidth", judgement->is_judged ? NAN : judgement->halfwidth);
    real_set(&record, "halfwidth_low", judgement->halfwidth_low);
    real_set(&record, "halfwidth_median", judgement->halfwidth_median);
    real_set(&record, "halfwidth_high", judgement->halfwidth_high);
    return record;
}

static struct record judgement_record(const struct run *run)
{
    static const char *const shapes[] = {[FESCUE_HOLDOUT_AUTO] = "auto",
                                         [FESCUE_HOLDOUT_CELLS] = "cells",
                                         [FESCUE_HOLDOUT_GAPS] = "gaps",
                                         [FESCUE_HOLDOUT_ROWS] = "rows",
                                         [FESCUE_HOLDOUT_COLUMNS] = "columns"};
    const struct judgement *judgement = run->judgement;
    struct record record = record_open(run->context);
    text_set(&record, "holdout_shape", shapes[run->shape->shape]);
    text_set(&record, "why", run->shape->why[0] != '\0' ? run->shape->why : "as asked");
    count_set(&record, "scattered_folds", judgement->scattered_folds);
    count_set(&record, "shaped_folds", judgement->shaped_folds);
    flag_set(&record, "warm", judgement->is_warm);
    flag_set(&record, "cut", judgement->is_cut);
    count_set(&record, "judged", judgement->judged);
    real_set(&record, "rmse", judgement->rmse);
    real_set(&record, "rmse_low", judgement->rmse_low);
    real_set(&record, "rmse_high", judgement->rmse_high);
    real_set(&record, "mae", judgement->mae);
    real_set(&record, "rmse_scattered", judgement->scattered_rmse);
    real_set(&record, "rmse_shaped", judgement->shaped_rmse);
    real_set(&record, "rmse_by_leverage", judgement->by_leverage);
    real_set(&record, "rmse_by_distance", judgement->by_distance);
    real_set(&record, "rmse_by_variance", judgement->by_variance);
    record_set(&record, "interval", interval_record(run));
    record_set(&record, "variance", variance_record(run));
    return record;
}

static struct record fit_record(const struct run *run)
{
    const struct solve_result *fit = run->fit;
    struct record record = record_open(run->context);
    text_set(&record, "solver", fit->solver == NULL ? "none" : fit->solver);
    text_set(&record, "start", run->start);
    text_set(&record, "stop", solve_stop_word(fit->stop));
    text_set(&record, "stop_means", solve_stop_text(fit->stop));
    flag_set(&record, "converged", solve_converged(fit->stop));
    count_set(&record, "iterations", fit->iterations);
    real_set(&record, "objective", fit->objective);
    real_set(&record, "gradient", fit->gradient);
    real_set(&record, "scale", run->scale);
    real_set(&record, "rmse_seen", fit->rmse * run->scale);
    return record;
}

static struct record model_record(const struct run *run)
{
    const struct model *model = run->model;
    struct record record = record_open(run->context), spectrum = {run->context, json_array(), false};
    count_set(&record, "rank", model->low_rank.rank);
    real_set(&record, "mean", model->offsets.mean);
    real_set(&record, "row_offsets_rms", effects_rms(model->offsets.row, model->rows));
    real_set(&record, "column_offsets_rms", effects_rms(model->offsets.column, model->columns));
    real_set(&record, "row_ridge", model->offsets.row_ridge);
    real_set(&record, "column_ridge", model->offsets.column_ridge);
    for (size_t k = 0; k < model->low_rank.rank; k++)
        if (json_array_append_new(spectrum.object, json_real(model->low_rank.spectrum[k])) != 0)
            spectrum.failed = true;
    record_set(&record, "spectrum", spectrum);
    text_set(
        &record, "formula",
        model->season.along != TIME_NONE
            ? "mean + row offset + column offset + left diag(spectrum) right' + season + residual in time, if any, "
              "then bounds"
        : model->time.along != TIME_NONE
            ? "mean + row offset + column offset + left diag(spectrum) right' + residual in time, then bounds"
            : "mean + row offset + column offset + left diag(spectrum) right', then bounds; where the "
              "ridge is 0, cells whose basis is not low-rank are without the product");
    return record;
}

static struct record unseen_record(const struct run *run)
{
    struct record record = record_open(run->context);
    count_set(&record, "cells",
              run->filled[BASIS_LOW_RANK] + run->filled[BASIS_SMOOTH] + run->filled[BASIS_OFFSETS] +
                  run->filled[BASIS_MEAN]);
    for (enum basis basis = BASIS_LOW_RANK; basis <= BASIS_MEAN; basis++)
        count_set(&record, basis_word(basis), run->filled[basis]);
    count_set(&record, "left_blank", run->blank);
    count_set(&record, "unchecked_lines", run->determined->unchecked);
    return record;
}

static struct record files_record(const struct run *run)
{
    struct record record = record_open(run->context);
    const char *filled = run_why_left_out(run, run->writes_filled), *cells = run_why_left_out(run, run->writes_cells);
    const char *factors = run_why_left_out(run, run->writes_factors);
    const char *low_rank = run->model->low_rank.rank == 0 ? "the rank is 0" : NULL;
    const char *time = run->model->time.along == TIME_NONE ? "the model follows nothing in time" : NULL;
    const char *season = run->model->season.along == TIME_NONE ? "the model has no season" : NULL;
    const struct {
        const char *name, *why;
    } files[] = {{filled_name(run->table), filled},
                 {"cells.csv", cells},
                 {"row-offsets.mtx", factors},
                 {"column-offsets.mtx", factors},
                 {"left.mtx", factors != NULL ? factors : low_rank},
                 {"spectrum.mtx", factors != NULL ? factors : low_rank},
                 {"right.mtx", factors != NULL ? factors : low_rank},
                 {"season-waves.mtx", factors != NULL ? factors : season},
                 {"season.mtx", factors != NULL ? factors : season},
                 {"time-part.csv", factors != NULL ? factors : time},
                 {"trace.csv", NULL}};
    for (size_t k = 0; k < sizeof files / sizeof files[0]; k++) {
        char text[256];
        snprintf(text, sizeof text, "left out: %s", files[k].why == NULL ? "" : files[k].why);
        text_set(&record, files[k].name, files[k].why == NULL ? "written" : text);
    }
    return record;
}

static struct record timing_record(const struct run *run)
{
    struct record record = record_open(run->context);
    time_t started = (time_t)run->started;
    struct tm parts;
    char text[32] = "";
    if (gmtime_r(&started, &parts) != NULL)
        strftime(text, sizeof text, "%Y-%m-%dT%H:%M:%SZ", &parts);
    text_set(&record, "started", text);
    real_set(&record, "seconds", run->seconds_wall);
    real_set(&record, "seconds_of_processors", run->seconds_cpu);
    count_set(&record, "threads", team_workers(run->context));
    count_set(&record, "memory_most_bytes", fescue_memory_usage(run->context).peak_bytes);
    return record;
}

/* ---- the whole ------------------------------------------------------------------------------------------------------
 */

/* What the last bits depend on beside input, options and version. */
static struct record instructions_record(const struct run *run)
{
    struct record record = record_open(run->context);
    text_set(&record, "loops", kernel_name());
    text_set(&record, "products", openblas_kernels());
    return record;
}

static struct record run_record(const struct run *run)
{
    struct record record = record_open(run->context);
    text_set(&record, "program", "fescue");
    text_set(&record, "version", FESCUE_VERSION);
    text_set(&record, "caution", run_caution);
    record_set(&record, "instructions", instructions_record(run));
    record_set(&record, "input", input_record(run));
    record_set(&record, "time", time_record(run));
    record_set(&record, "season", season_record(run));
    record_set(&record, "weights", weights_record(run));
    record_set(&record, "near", near_record(run));
    record_set(&record, "options", options_record(run));
    record_set(&record, "choice", choice_record(run));
    record_set(&record, "judgement", judgement_record(run));
    record_set(&record, "fit", fit_record(run));
    record_set(&record, "model", model_record(run));
    record_set(&record, "unseen", unseen_record(run));
    record_set(&record, "files", files_record(run));
    record_set(&record, "timing", timing_record(run));
    return record;
}

fescue_status write_record(const struct run *run, struct output *output)
{
    struct outfile *file;
    struct record record = {0};
    fescue_status status;
    TRY(output_add(output, "run.json", &file));
    record = run_record(run);
    bool good = !record.failed && json_put(file, record.object);
    TRY(outfile_status(file));
    if (!good)
        TRY(FAIL(run->context, FESCUE_NO_MEMORY, "the system has no memory left for the record of the run"));
done:
    json_decref(record.object);
    return status;
}
