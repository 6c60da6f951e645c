/* SPDX-License-Identifier: MIT
 *
 * Long text: row label, column label, value, and a weight or standard deviation of the cell where the first record has
 * four fields; one cell a record. The first record is a header when its third field is neither a number nor a hole.
 * Rows and columns are numbered as they come first. A record whose value is a hole says that there are such a row and
 * such a column, and nothing of the cell.
 */
#include "table/table_internal.h"

static size_t field_length(const struct field *field)
{
    return (size_t)(field->end - field->text);
}

static fescue_status count_check(const struct delimited *delimited)
{
    const struct record *record = &delimited->record;
    bool has_weights = delimited->weight != WEIGHT_NONE;
    if (record->count == (has_weights ? 4 : 3))
        return FESCUE_OK;
    return BAD_LINE_AT(delimited->stream, record->line, "%zu fields were found, row, column%s were expected",
                       record->count, has_weights ? ", value and weight" : " and value");
}

static fescue_status position_find(struct delimited *delimited, struct label_list *list, const struct field *field,
                                   const char *what, uint32_t *position)
{
    fescue_status status;
    uint32_t known = list->labels.count;
    TRY(label_list_find_or_add(delimited->table->context, list, field->text, field_length(field), position));
    if (*position == known)
        TRY(label_check(delimited, field, what));
done:
    return status;
}

static fescue_status cell_read(struct delimited *delimited)
{
    fescue_status status;
    const struct field *field = delimited->record.field;
    uint32_t row, column;
    TRY(count_check(delimited));
    TRY(position_find(delimited, &delimited->rows, &field[0], "row", &row));
    TRY(position_find(delimited, &delimited->columns, &field[1], "column", &column));
    pile_told_size(&delimited->pile, delimited->rows.labels.count, delimited->columns.labels.count);
    uint64_t before = delimited->pile.count;
    TRY(delimited_cell(delimited, row, column, &field[2]));
    if (delimited->weight != WEIGHT_NONE && delimited->pile.count > before)
        TRY(weight_add(delimited, row, column, &field[3]));
done:
    return status;
}

static fescue_status header_read(struct delimited *delimited)
{
    fescue_status status;
    const struct field *field = delimited->record.field;
    struct table_look *look = &delimited->table->look;
    if (delimited->record.count == 4 && (delimited->weight = weight_title_kind(&field[3])) == WEIGHT_NONE)
        TRY(BAD_LINE_AT(delimited->stream, delimited->record.line,
                        "the fourth column is called '%.*s'; 'weight' or 'sd' was expected",
                        QUOTE(field[3].text, field[3].end)));
    TRY(count_check(delimited));
    TRY(title_keep(delimited, &field[0], &look->row_title));
    TRY(title_keep(delimited, &field[1], &look->column_title));
    TRY(title_keep(delimited, &field[2], &look->value_title));
done:
    return status;
}

fescue_status long_read(struct delimited *delimited)
{
    fescue_status status;
    const struct record *record = &delimited->record;
    for (bool is_first = true;; is_first = false) {
        TRY(record_read(delimited->stream, delimited->separator, &delimited->record));
        if (record->count == 0)
            break;
        bool is_header = is_first && record->count >= 3 && !is_hole(&record->field[2]) &&
                         !is_number(&record->field[2], delimited->separator == ';');
        if (is_first && record->count == 4)
            delimited->weight = WEIGHT_PRECISION; /* unless a header says otherwise */
        TRY(is_header ? header_read(delimited) : cell_read(delimited));
    }
done:
    return status;
}
