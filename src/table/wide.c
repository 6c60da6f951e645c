/* SPDX-License-Identifier: MIT
 *
 * Wide text: the first record is a corner and the labels of the columns; every other one is the label of a row and its
 * values.
 */
#include "table/table_internal.h"

static size_t field_length(const struct field *field)
{
    return (size_t)(field->end - field->text);
}

/* A time may come twice: two looks at the same moment, or the hour that repeats where summer time ends. */
static bool is_time(const struct field *field)
{
    struct instant instant;
    return time_label_parse(field->text, field->end, &instant);
}

/* A new label; one that is there already is refused, unless it is a time. */
static fescue_status label_add(struct delimited *delimited, struct label_list *list, const struct field *field,
                               const char *what)
{
    fescue_status status;
    uint32_t position, known = list->labels.count;
    TRY(label_check(delimited, field, what));
    TRY(label_list_find_or_add(delimited->table->context, list, field->text, field_length(field), &position));
    if (position < known && is_time(field))
        TRY(label_list_add(delimited->table->context, list, field->text, field_length(field)));
    else if (position < known)
        status = BAD_LINE_AT(delimited->stream, delimited->record.line,
                             "the label '%.*s' of %s %" PRIu32 " is that of %s %" PRIu32
                             " already; every label was expected once",
                             QUOTE(field->text, field->end), what, known + 1, what, position + 1);
done:
    return status;
}

static fescue_status columns_read(struct delimited *delimited)
{
    fescue_status status;
    const struct record *record = &delimited->record;
    TRY(record_read(delimited->stream, delimited->separator, &delimited->record));
    if (record->count < 2) {
        status = BAD_LINE_AT(delimited->stream, record->line, "a corner and the labels of columns were expected");
        goto done;
    }
    TRY(title_keep(delimited, &record->field[0], &delimited->table->look.corner));
    for (size_t k = 1; k < record->count; k++)
        TRY(label_add(delimited, &delimited->columns, &record->field[k], "column"));
done:
    return status;
}

static fescue_status row_read(struct delimited *delimited)
{
    fescue_status status;
    const struct record *record = &delimited->record;
    uint32_t row = delimited->rows.labels.count;
    if (record->count != (size_t)delimited->columns.labels.count + 1) {
        status = BAD_LINE_AT(delimited->stream, record->line,
                             "%zu fields were found, %" PRIu64 " were expected, as in the first line", record->count,
                             (uint64_t)delimited->columns.labels.count + 1);
        goto done;
    }
    TRY(label_add(delimited, &delimited->rows, &record->field[0], "row"));
    pile_told_size(&delimited->pile, (uint64_t)row + 1, delimited->columns.labels.count);
    for (uint32_t k = 1; k < record->count; k++)
        TRY(delimited_cell(delimited, row, k - 1, &record->field[k]));
done:
    return status;
}

fescue_status wide_read(struct delimited *delimited)
{
    fescue_status status;
    delimited->pile.keeps_lines = false;
    TRY(columns_read(delimited));
    for (;;) {
        TRY(record_read(delimited->stream, delimited->separator, &delimited->record));
        if (delimited->record.count == 0)
            break;
        TRY(row_read(delimited));
    }
done:
    return status;
}
