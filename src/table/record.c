/* SPDX-License-Identifier: MIT
 *
 * Records of delimited text, quoted as RFC 4180 says (section 2, rules 5 to 7):
 *
 *     a field that begins with a quote ends with one; within it a quote is written twice, and separators and ends of
 *     lines are part of it; a quote has no place in other fields
 *
 * A line without quotes is split where it lies. Any other is copied, with the lines that its quoted fields reach into,
 * and the quotes are taken out of the copy.
 */
#include "table/table_internal.h"

#include <string.h>

static fescue_status field_append(fescue_context *context, struct record *record, const char *text, const char *end)
{
    if (record->count == record->capacity) {
        size_t capacity = record->capacity < 16 ? 16 : record->capacity + record->capacity / 2;
        fescue_status status = RESIZE(context, capacity, &record->field);
        if (status != FESCUE_OK)
            return status;
        record->capacity = capacity;
    }
    record->field[record->count++] = (struct field){text, end};
    return FESCUE_OK;
}

static fescue_status plain_split(fescue_context *context, struct record *record, const char *text, const char *end,
                                 char separator)
{
    const char *start = text;
    for (; text < end; text++) {
        if (*text != separator)
            continue;
        fescue_status status = field_append(context, record, start, text);
        if (status != FESCUE_OK)
            return status;
        start = text + 1;
    }
    return field_append(context, record, start, end);
}

/* ---- records with quotes ---------------------------------------------------------------------------------------- */

/* Copies `count` bytes behind what is joined already. */
static fescue_status joined_append(fescue_context *context, struct record *record, const char *text, size_t count)
{
    size_t needed = record->joined_count + count;
    if (needed > record->joined_size) {
        size_t size = needed + needed / 2;
        fescue_status status = RESIZE(context, size, &record->joined);
        if (status != FESCUE_OK)
            return status;
        record->joined_size = size;
    }
    if (count > 0)
        memcpy(record->joined + record->joined_count, text, count);
    record->joined_count = needed;
    return FESCUE_OK;
}

/* Where a scan of a record stands. */
enum quoting {
    AT_START,      /* of a field */
    IN_PLAIN,      /* in a field without quotes */
    IN_QUOTES,     /* in a quoted field */
    BEHIND_QUOTE,  /* after its closing quote, or the first of two */
    OUT_OF_PLACE,  /* a quote where none may be */
    NOT_SEPARATED, /* something else than a separator behind a closing quote */
};

static enum quoting quoting_step(enum quoting state, char c, char separator)
{
    switch (state) {
    case AT_START:
        return c == '"' ? IN_QUOTES : c == separator ? AT_START : IN_PLAIN;
    case IN_PLAIN:
        return c == '"' ? OUT_OF_PLACE : c == separator ? AT_START : IN_PLAIN;
    case IN_QUOTES:
        return c == '"' ? BEHIND_QUOTE : IN_QUOTES;
    case BEHIND_QUOTE:
        return c == '"' ? IN_QUOTES : c == separator ? AT_START : NOT_SEPARATED;
    default:
        return state;
    }
}

static enum quoting quoting_scan(enum quoting state, const char *text, const char *end, char separator)
{
    while (text < end)
        state = quoting_step(state, *text++, separator);
    return state;
}

/* Joins the lines of the record that begins with `line`. */
static fescue_status lines_join(struct stream *stream, char separator, struct line *line, struct record *record)
{
    fescue_status status;
    fescue_context *context = stream_context(stream);
    enum quoting state = AT_START;
    record->joined_count = 0;
    for (;;) {
        TRY(joined_append(context, record, line->text, (size_t)(line->end - line->text)));
        state = quoting_scan(state, line->text, line->end, separator);
        if (state != IN_QUOTES)
            break;
        TRY(joined_append(context, record, line->end, line->terminator));
        TRY(stream_line(stream, line));
        if (line->text == NULL)
            return BAD_LINE_AT(stream, record->line, "a quote is opened here and never closed");
    }
    if (state == OUT_OF_PLACE)
        status = BAD_LINE(stream, "a quote was found inside a field that does not begin with one; a field with quotes "
                                  "in it is put in quotes, and each of its own is written twice");
    else if (state == NOT_SEPARATED)
        status = BAD_LINE(stream, "a closing quote is not followed by a separator");
done:
    return status;
}

/* Splits what was joined, which is known to be well quoted. Quotes are taken out in place. */
static fescue_status joined_split(fescue_context *context, struct record *record, char separator)
{
    char *from = record->joined, *end = from + record->joined_count, *to = from, *start = from;
    enum quoting state = AT_START;
    for (; from < end; from++) {
        enum quoting next = quoting_step(state, *from, separator);
        bool is_kept = next == IN_PLAIN || (next == IN_QUOTES && state != AT_START);
        if (next == AT_START) {
            fescue_status status = field_append(context, record, start, to);
            if (status != FESCUE_OK)
                return status;
            start = to;
        } else if (is_kept) {
            *to++ = *from;
        }
        state = next;
    }
    return field_append(context, record, start, to);
}

fescue_status record_read(struct stream *stream, char separator, struct record *record)
{
    fescue_status status;
    struct line line;
    record->count = 0;
    do {
        TRY(stream_line(stream, &line));
        if (line.text == NULL)
            return FESCUE_OK;
    } while (line.text == line.end);
    record->line = stream_line_number(stream);
    if (memchr(line.text, '"', (size_t)(line.end - line.text)) == NULL) {
        TRY(plain_split(stream_context(stream), record, line.text, line.end, separator));
    } else {
        TRY(lines_join(stream, separator, &line, record));
        TRY(joined_split(stream_context(stream), record, separator));
    }
done:
    return status;
}

void record_free(fescue_context *context, struct record *record)
{
    GIVE(context, &record->field);
    GIVE(context, &record->joined);
    *record = (struct record){0};
}
