/* SPDX-License-Identifier: MIT
 *
 * Long text: row label, column label, value, and a weight or standard deviation of the cell where the first record has
 * four fields; one cell a record. The first record is a header when its third field is neither a number nor a hole.
 * Rows and columns are numbered as they come first. A record whose value is a hole says that there are such a row and
 * such a column, and nothing of the cell.
 *
 * Chunks of plain records are read by all workers (long_chunk.c); any other chunk is read here, record by record, and
 * so is all of a text with weights.
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

/* The first record, which may be a header. */
static fescue_status first_read(struct delimited *delimited)
{
    fescue_status status;
    const struct record *record = &delimited->record;
    TRY(record_read(delimited->stream, delimited->separator, &delimited->record));
    if (record->count == 0)
        return FESCUE_OK;
    bool is_header =
        record->count >= 3 && !is_hole(&record->field[2]) && !is_number(&record->field[2], delimited->separator == ';');
    if (record->count == 4)
        delimited->weight = WEIGHT_PRECISION; /* unless a header says otherwise */
    TRY(is_header ? header_read(delimited) : cell_read(delimited));
done:
    return status;
}

/* The records that begin in this chunk. */
static fescue_status chunk_records_read(struct delimited *delimited)
{
    fescue_status status;
    const uint64_t number = stream_chunk_number(delimited->stream);
    do {
        TRY(record_read(delimited->stream, delimited->separator, &delimited->record));
        if (delimited->record.count == 0)
            return FESCUE_OK;
        TRY(cell_read(delimited));
    } while (stream_chunk_number(delimited->stream) == number && !stream_chunk_is_read(delimited->stream));
done:
    return status;
}

/* All that is left, on one worker. */
static fescue_status records_read(void *data)
{
    fescue_status status = FESCUE_OK;
    struct delimited *delimited = data;
    while (status == FESCUE_OK && stream_chunk_number(delimited->stream) != UINT64_MAX)
        status = chunk_records_read(delimited);
    return status;
}

fescue_status long_read(struct delimited *delimited)
{
    fescue_status status;
    struct long_chunks chunks = {0};
    TRY(first_read(delimited));
    if (delimited->weight != WEIGHT_NONE)
        return stream_read(delimited->stream, records_read, delimited);
    TRY(long_chunks_open(delimited, &chunks));
    while (stream_chunk_number(delimited->stream) != UINT64_MAX) {
        TRY(long_chunks_read(&chunks));
        if (stream_chunk_number(delimited->stream) != UINT64_MAX)
            TRY(chunk_records_read(delimited));
    }
done:
    long_chunks_close(&chunks);
    return status;
}
