/* SPDX-License-Identifier: MIT
 *
 * A table from a file: what it is shows in its first bytes, and the reader of that kind takes it from there.
 */
#include "table/table_internal.h"

static fescue_status text_read(struct stream *stream, const struct table_reading *reading, bool is_market,
                               fescue_table *table)
{
    fescue_status status;
    if (is_market && (reading->format == FESCUE_FORMAT_WIDE || reading->format == FESCUE_FORMAT_LONG))
        return BAD_LINE_AT(stream, UINT64_C(1), "a Matrix Market file was found, but --format asks for delimited text");
    if (is_market || reading->format == FESCUE_FORMAT_MATRIX_MARKET)
        TRY(matrix_market_read(stream, reading, table));
    else
        TRY(delimited_read(stream, reading, table));
    source_told(stream_source(stream), &table->input_crc32, &table->input_bytes);
done:
    return status;
}

static fescue_status kind_read(struct stream *stream, const struct table_reading *reading, fescue_table *table)
{
    enum { ENOUGH = 32 }; /* more than the first words of any kind have */
    const char *text;
    size_t length;
    stream_peek(stream, ENOUGH, &text, &length);
    if (length == 0)
        return FAIL(table->context, FESCUE_BAD_DATA, "%s: the input is empty, a table was expected",
                    stream_name(stream));
    if (!is_pack(text, length))
        return text_read(stream, reading, is_matrix_market(text, length), table);
    if (reading->format == FESCUE_FORMAT_AUTO)
        return pack_read(stream, reading, table);
    return FAIL(table->context, FESCUE_BAD_DATA, "%s: a packed table was found, but --format asks for a text",
                stream_name(stream));
}

fescue_status table_read(fescue_context *context, const char *path, const struct table_reading *reading,
                         fescue_table **out)
{
    fescue_status status;
    fescue_table *table = NULL;
    struct stream *stream = NULL;
    *out = NULL;
    TRY(table_create(context, path, &table));
    TRY(stream_open(context, path, &stream));
    TRY(kind_read(stream, reading, table));
    *out = table;
    table = NULL;
done:
    stream_close(&stream);
    table_destroy(&table);
    return status;
}
