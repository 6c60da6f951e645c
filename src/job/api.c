/* SPDX-License-Identifier: MIT
 *
 * The public functions that are a few lines over the folders below: tables and surveys.
 */
#include "job/job_internal.h"

#include <assert.h>
#include <inttypes.h>

fescue_status job_prepare(fescue_context *context, const struct fescue_options *options)
{
    memory_limit_set(context, (uint64_t)options->memory_limit);
    return team_resize(context, options->threads == FESCUE_AUTO ? 0 : (size_t)options->threads);
}

/* ---- tables -------------------------------------------------------------------------------------------------------
 */

fescue_status fescue_table_read(fescue_context *context, const char *path, const struct fescue_options *options,
                                fescue_table **out)
{
    bool asks_for_filled = options->write != (unsigned)FESCUE_AUTO && (options->write & WRITE_FILLED) != 0;
    const struct table_reading reading = {.precision = (enum fescue_precision)options->precision,
                                          .duplicates = (enum fescue_duplicates)options->duplicates,
                                          .format = (enum fescue_format)options->format,
                                          .dense_most = asks_for_filled ? UINT64_MAX : 0};
    fescue_status status;
    *out = NULL;
    TRY(job_prepare(context, options));
    TRY(table_read(context, path, &reading, out));
    TRY(table_weigh(*out, options->row_weights, options->column_weights));
done:
    if (status != FESCUE_OK)
        table_destroy(out);
    return status;
}

fescue_status fescue_table_from_cells(fescue_context *context, uint32_t rows, uint32_t columns, uint64_t count,
                                      const uint32_t *row, const uint32_t *column, const double *value,
                                      const struct fescue_options *options, fescue_table **out)
{
    fescue_status status;
    *out = NULL;
    TRY(job_prepare(context, options));
    TRY(table_from_triplets(context, rows, columns, count, row, column, value,
                            (enum fescue_precision)options->precision, out));
    TRY(table_weigh(*out, options->row_weights, options->column_weights));
done:
    if (status != FESCUE_OK)
        table_destroy(out);
    return status;
}

fescue_status fescue_table_pack(const fescue_table *table, const char *path, char **text)
{
    fescue_status status;
    const struct cells *cells = &table->cells;
    struct text summary = {.context = table->context};
    *text = NULL;
    TRY(table_pack(table, path));
    text_add(&summary, "packed     %" PRIu32 " rows x %" PRIu32 " columns, %" PRIu64 " cells seen%s\n", cells->rows,
             cells->columns, cells->count, table->texts != NULL ? ", to the last digit" : "");
    TRY(text_finish(&summary, text));
done:
    return status;
}

void fescue_table_destroy(fescue_table **table)
{
    table_destroy(table);
}

/* ---- surveys ------------------------------------------------------------------------------------------------------
 */

struct fescue_survey {
    fescue_context *context; /* borrowed */
    char *text;
};

fescue_status fescue_survey_table(const fescue_table *table, const struct fescue_options *options, fescue_survey **out)
{
    struct time_axis time = {0};
    fescue_status status;
    *out = NULL;
    TRY(job_prepare(table->context, options));
    TRY(time_axis_find(table->context, table, (enum fescue_time_axis)options->time_axis, &time));
    TRY(TAKE(table->context, 1, out));
    (*out)->context = table->context;
    TRY(survey_text(table, &time, &(*out)->text));
done:
    time_axis_free(table->context, &time);
    if (status != FESCUE_OK)
        fescue_survey_destroy(out);
    return status;
}

const char *fescue_survey_text(const fescue_survey *survey)
{
    return survey->text;
}

void fescue_survey_destroy(fescue_survey **survey)
{
    if (*survey == NULL)
        return;
    fescue_context *context = (*survey)->context;
    GIVE(context, &(*survey)->text);
    GIVE(context, survey);
}
