/* SPDX-License-Identifier: MIT
 *
 * What came of a run, from the record in its folder (run.json, read with Jansson): so that a night knows no more of a
 * run that it watched than of one whose watcher died. And the checksums by which a night knows inputs and records.
 */
#include "night/night_internal.h"

#include <inttypes.h>
#include <jansson.h>
#include <math.h>
#include <stdio.h>
#include <string.h>
#include <zlib.h>

enum { PIECE = 1 << 18, RECORD_MOST = 1 << 26 };

/* ---- checksums -----------------------------------------------------------------------------------------------------
 */

fescue_status file_sum(fescue_context *context, const char *path, char sum[WORD_SIZE], int64_t *bytes)
{
    unsigned char *piece = NULL;
    int descriptor = -1;
    uLong crc = crc32(0, NULL, 0);
    size_t got;
    fescue_status status;
    sum[0] = '\0';
    *bytes = 0;
    TRY(TAKE(context, PIECE, &piece));
    TRY(file_open_read(context, path, &descriptor));
    do {
        TRY(file_read(context, path, descriptor, piece, PIECE, &got));
        crc = crc32(crc, piece, (uInt)got);
        *bytes += (int64_t)got;
    } while (got > 0);
    snprintf(sum, WORD_SIZE, "%08lx", crc & 0xffffffffUL);
done:
    file_close(context, &descriptor);
    GIVE(context, &piece);
    return status;
}

/* ---- the record ----------------------------------------------------------------------------------------------------
 */

static fescue_status record_load(fescue_context *context, const char *path, json_t **record)
{
    char *bytes = NULL;
    int descriptor = -1;
    size_t used = 0, got = 0;
    fescue_status status;
    *record = NULL;
    TRY(file_open_read(context, path, &descriptor));
    do {
        TRY(RESIZE(context, used + PIECE, &bytes));
        TRY(file_read(context, path, descriptor, bytes + used, PIECE, &got));
        used += got;
    } while (got > 0 && used < RECORD_MOST);
    *record = json_loadb(bytes, used, 0, NULL);
done:
    file_close(context, &descriptor);
    GIVE(context, &bytes);
    return status;
}

static const json_t *member(const json_t *record, const char *part, const char *key)
{
    return json_object_get(json_object_get(record, part), key);
}

static double number_of(const json_t *object, const char *key)
{
    const json_t *value = json_object_get(object, key);
    return json_is_number(value) ? json_number_value(value) : NAN;
}

static double real_of(const json_t *record, const char *part, const char *key)
{
    return number_of(json_object_get(record, part), key);
}

static int64_t count_of(const json_t *record, const char *part, const char *key)
{
    return json_integer_value(member(record, part, key));
}

static void text_of(const json_t *record, const char *part, const char *key, char text[WORD_SIZE])
{
    const char *value = json_string_value(part == NULL ? json_object_get(record, key) : member(record, part, key));
    snprintf(text, WORD_SIZE, "%s", value == NULL ? "" : value);
}

static void options_of(const json_t *record, char text[OPTIONS_SIZE])
{
    size_t count, used = 0;
    const struct fescue_option *table = fescue_option_table(&count);
    text[0] = '\0';
    for (size_t k = 0; k < count; k++) {
        const char *value = json_string_value(member(record, "options", table[k].name));
        if (option_is_bearing(&table[k]) && value != NULL)
            option_line_add(text, &used, table[k].name, value);
    }
}

static void outcome_take(const json_t *record, struct outcome *outcome)
{
    char stop[WORD_SIZE];
    text_of(record, NULL, "version", outcome->version);
    text_of(record, "input", "crc32", outcome->input_sum);
    text_of(record, "choice", "offsets", outcome->offsets);
    text_of(record, "fit", "stop", stop);
    options_of(record, outcome->options);
    outcome->input_bytes = count_of(record, "input", "bytes");
    outcome->rows = count_of(record, "input", "rows");
    outcome->columns = count_of(record, "input", "columns");
    outcome->observed = count_of(record, "input", "observed");
    outcome->memory = count_of(record, "timing", "memory_most_bytes");
    outcome->wall = real_of(record, "timing", "seconds");
    outcome->cpu = real_of(record, "timing", "seconds_of_processors");
    outcome->is_cut = strcmp(stop, "time") == 0 || json_is_true(member(record, "choice", "cut_by_time_limit")) ||
                      json_is_true(member(record, "judgement", "cut"));
    outcome->by_rows = outcome->rows <= outcome->columns;
    text_of(record, "input", outcome->by_rows ? "row_labels_crc32" : "column_labels_crc32", outcome->labels);
    double *figure = outcome->figure, cells = (double)outcome->rows * (double)outcome->columns;
    /* What is announced: of the folds, or, where there were none, of choosing's own hidden cells. */
    const json_t *errors = json_object_get(record, "judgement");
    if (!json_is_number(json_object_get(errors, "rmse")))
        errors = member(record, "choice", "errors");
    figure[FIGURE_ERROR] = number_of(errors, "rmse");
    outcome->mae = number_of(errors, "mae");
    figure[FIGURE_MISSING] = cells > 0 ? 1 - (double)outcome->observed / cells : NAN;
    figure[FIGURE_RANK] = real_of(record, "model", "rank");
    figure[FIGURE_MEAN] = real_of(record, "model", "mean");
    figure[FIGURE_ROWS] = real_of(record, "model", "row_offsets_rms");
    figure[FIGURE_COLUMNS] = real_of(record, "model", "column_offsets_rms");
}

bool outcome_read(fescue_context *context, const char *directory, struct outcome *outcome)
{
    char *path = NULL;
    json_t *record = NULL;
    fescue_status status;
    *outcome = (struct outcome){.distance = NAN, .mae = NAN, .wall = NAN, .cpu = NAN};
    for (size_t k = 0; k < FIGURES; k++)
        outcome->figure[k] = NAN;
    TRY(text_join(context, &path, directory, "/run.json", NULL));
    TRY(record_load(context, path, &record));
    if (json_is_object(record))
        outcome_take(record, outcome);
done:
    GIVE(context, &path);
    if (status != FESCUE_OK)
        fescue_failure_clear(context);
    bool is_there = json_is_object(record);
    json_decref(record);
    return is_there;
}
