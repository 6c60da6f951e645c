/* SPDX-License-Identifier: MIT
 *
 * Weights of rows and of columns, from a file:
 *
 *     delimited text      label and weight a record; a header, known by its second field, which is no number, may call
 *                         the weight "weight" or "sd"; every line of the table has its weight once, in any order; on a
 *                         side without labels they are the numbers from 1
 *     Matrix Market       an array of one column or one row, in the order of the table
 */
#include "table/table_internal.h"

#include <math.h>
#include <string.h>

struct lines_reading {
    fescue_context *context;
    struct stream *stream;
    const struct labels *labels;
    const char *noun; /* "row" or "column" */
    double *weight;   /* labels->count; 0: not given yet */
};

/* ---- text ----------------------------------------------------------------------------------------------------------
 */

static fescue_status line_take(const struct lines_reading *reading, const struct label_index *index,
                               const struct record *record, enum weight_kind kind, char separator)
{
    const struct field *label = &record->field[0], *number = &record->field[1];
    uint32_t line;
    double weight;
    if (!label_index_find(index, label->text, (size_t)(label->end - label->text), &line))
        return BAD_LINE_AT(reading->stream, record->line, "'%.*s' is no %s of the table",
                           QUOTE(label->text, label->end), reading->noun);
    if (reading->weight[line] > 0)
        return BAD_LINE_AT(reading->stream, record->line, "the %s '%.*s' has its weight already", reading->noun,
                           QUOTE(label->text, label->end));
    const char *fault = weight_parse(kind, number, separator, &weight);
    if (fault != NULL)
        return BAD_LINE_AT(reading->stream, record->line, "the %s '%.*s' of %s '%.*s' %s",
                           kind == WEIGHT_DEVIATION ? "standard deviation" : "weight", QUOTE(number->text, number->end),
                           reading->noun, QUOTE(label->text, label->end), fault);
    reading->weight[line] = weight;
    return FESCUE_OK;
}

/* The first record: whether it is a header, and what it calls the weights. */
static fescue_status header_look(const struct lines_reading *reading, const struct record *record, char separator,
                                 bool *is_header, enum weight_kind *kind)
{
    const struct field *title = &record->field[1];
    *is_header = !is_number(title, separator == ';');
    *kind = *is_header ? weight_title_kind(title) : WEIGHT_PRECISION;
    if (*kind == WEIGHT_NONE)
        return BAD_LINE_AT(reading->stream, record->line,
                           "'%.*s' was found; a number, or the title 'weight' or 'sd', "
                           "was expected",
                           QUOTE(title->text, title->end));
    return FESCUE_OK;
}

static fescue_status text_read(const struct lines_reading *reading)
{
    struct record record = {0};
    struct label_index *index = NULL;
    struct delimited_kind form;
    enum weight_kind kind = WEIGHT_NONE;
    fescue_status status;
    TRY(label_index_create(reading->context, reading->labels, &index));
    TRY(delimited_kind_find(reading->stream, FESCUE_FORMAT_WIDE, &form));
    for (;;) {
        bool is_header = false;
        TRY(record_read(reading->stream, form.separator, &record));
        if (record.count == 0)
            break;
        if (record.count != 2)
            TRY(BAD_LINE_AT(reading->stream, record.line, "%zu fields were found, label and weight were expected",
                            record.count));
        if (kind == WEIGHT_NONE)
            TRY(header_look(reading, &record, form.separator, &is_header, &kind));
        if (!is_header)
            TRY(line_take(reading, index, &record, kind, form.separator));
    }
done:
    record_free(reading->context, &record);
    label_index_destroy(reading->context, &index);
    return status;
}

/* ---- Matrix Market -------------------------------------------------------------------------------------------------
 */

static fescue_status array_take(const struct lines_reading *reading, const fescue_table *array)
{
    const struct cells *cells = &array->cells;
    const struct half *half = cells->columns == 1 ? &cells->by_column : &cells->by_row;
    uint64_t count = (uint64_t)cells->rows * cells->columns;
    if (array->look.shape != SHAPE_MM_ARRAY || (cells->rows != 1 && cells->columns != 1) ||
        count != reading->labels->count)
        return FAIL(reading->context, FESCUE_BAD_DATA,
                    "%s: %" PRIu32 " by %" PRIu32 " entries were found, an array of %" PRIu32 " weights was expected",
                    stream_name(reading->stream), cells->rows, cells->columns, reading->labels->count);
    for (uint64_t k = 0; k < half->start[1]; k++) {
        double number = cells_value(cells, half, k);
        const char *fault = weight_of(WEIGHT_PRECISION, number, &reading->weight[half->across[k]]);
        if (fault != NULL)
            return FAIL(reading->context, FESCUE_BAD_DATA, "%s: entry %" PRIu64 ", the weight of a %s, %s",
                        stream_name(reading->stream), (uint64_t)half->across[k] + 1, reading->noun, fault);
    }
    return FESCUE_OK;
}

static fescue_status array_read(const struct lines_reading *reading)
{
    const struct table_reading plain = {.precision = FESCUE_DOUBLE};
    fescue_table *array = NULL;
    fescue_status status;
    TRY(table_create(reading->context, stream_name(reading->stream), &array));
    TRY(matrix_market_read(reading->stream, &plain, array));
    TRY(array_take(reading, array));
done:
    table_destroy(&array);
    return status;
}

/* ---- both ----------------------------------------------------------------------------------------------------------
 */

static fescue_status all_given_check(const struct lines_reading *reading)
{
    char buffer[16];
    for (uint32_t line = 0; line < reading->labels->count; line++) {
        const char *label = label_text(reading->labels, line, buffer);
        if (!(reading->weight[line] > 0))
            return FAIL(reading->context, FESCUE_BAD_DATA, "%s: %s '%.*s' has no weight", stream_name(reading->stream),
                        reading->noun, QUOTE(label, label + strlen(label)));
    }
    return FESCUE_OK;
}

/* New weights of all lines; the caller frees them. */
static fescue_status lines_read(fescue_table *table, const char *path, bool is_rows, double **weight)
{
    struct lines_reading reading = {.context = table->context,
                                    .labels = is_rows ? &table->row_labels : &table->column_labels,
                                    .noun = is_rows ? "row" : "column"};
    const char *text;
    size_t length;
    fescue_status status;
    TRY(TAKE(table->context, reading.labels->count, weight));
    reading.weight = *weight;
    TRY(stream_open(table->context, path, &reading.stream));
    stream_peek(reading.stream, 32, &text, &length);
    TRY(is_matrix_market(text, length) ? array_read(&reading) : text_read(&reading));
    TRY(all_given_check(&reading));
done:
    stream_close(&reading.stream);
    return status;
}

/* Cells times rows times columns, any of which may be NULL for ones. */
static fescue_status weights_multiply(fescue_table *table, const double *row, const double *column)
{
    const struct half *half = &table->cells.by_row;
    double *weight = NULL;
    fescue_status status;
    TRY(TAKE(table->context, table->cells.count, &weight));
    for (uint32_t i = 0; i < half->lines; i++)
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++)
            weight[k] = (half->weight != NULL ? (double)half->weight[k] : 1) * (row != NULL ? row[i] : 1) *
                        (column != NULL ? column[half->across[k]] : 1);
    TRY(weights_set(table, weight));
done:
    GIVE(table->context, &weight);
    return status;
}

fescue_status table_weigh(fescue_table *table, const char *row_path, const char *column_path)
{
    double *row = NULL, *column = NULL;
    fescue_status status = FESCUE_OK;
    if (row_path == NULL && column_path == NULL)
        return FESCUE_OK;
    if (row_path != NULL) {
        TRY(lines_read(table, row_path, true, &row));
        TRY(memory_copy_text(table->context, row_path, strlen(row_path), &table->weights.rows));
    }
    if (column_path != NULL) {
        TRY(lines_read(table, column_path, false, &column));
        TRY(memory_copy_text(table->context, column_path, strlen(column_path), &table->weights.columns));
    }
    TRY(weights_multiply(table, row, column));
done:
    GIVE(table->context, &row);
    GIVE(table->context, &column);
    return status;
}
