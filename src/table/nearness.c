/* SPDX-License-Identifier: MIT
 *
 * Which columns are near which, from a file:
 *
 *     delimited text      two labels and a strength a record; a header, known by its third field, calls it "strength";
 *                         on a side without labels they are the numbers from 1
 *     Matrix Market       a symmetric coordinate matrix, a side for every column of the table; of a pattern every
 *                         strength is one
 *
 * Nearness goes both ways: a pair may come again the other way round, with the same strength. A strength is not
 * negative, and 0 says that two columns are not near. The pairs are sorted, so that nothing depends on their order in
 * the file, and strengths scaled so that the columns that are near any have a mean sum of one.
 */
#include "table/table_internal.h"

#include <math.h>
#include <stdlib.h>
#include <string.h>
#include <strings.h>

static const double strength_least = 1e-12, strength_most = 1e12;

struct pair {
    uint32_t high, low;
    double strength;
    uint64_t line;
};

struct near_reading {
    const fescue_table *table;
    struct stream *stream;
    struct label_index *index;
    struct pair *pair;
    uint64_t count, room;
    char name[2][16];
};

static fescue_status pair_add(struct near_reading *reading, uint32_t a, uint32_t b, double strength, uint64_t line)
{
    const struct labels *labels = &reading->table->column_labels;
    const char *label = label_text(labels, a, reading->name[0]), *fault = NULL;
    if (a == b)
        return BAD_LINE_AT(reading->stream, line, "column '%.*s' is near itself; two columns were expected",
                           QUOTE(label, label + strlen(label)));
    if (!isfinite(strength))
        fault = "is not finite";
    else if (strength < 0)
        fault = "is negative";
    else if (strength > 0 && (strength < strength_least || strength > strength_most))
        fault = "is out of range";
    if (fault != NULL)
        return BAD_LINE_AT(reading->stream, line, "the strength %g %s; 0, or a number from 1e-12 to 1e12, was expected",
                           strength, fault);
    if (reading->count == reading->room) {
        uint64_t room = 2 * reading->room + 64;
        fescue_status status = RESIZE(reading->table->context, room, &reading->pair);
        if (status != FESCUE_OK)
            return status;
        reading->room = room;
    }
    reading->pair[reading->count++] = (struct pair){a > b ? a : b, a > b ? b : a, strength, line};
    return FESCUE_OK;
}

/* ---- text ----------------------------------------------------------------------------------------------------------
 */

static fescue_status label_find(const struct near_reading *reading, const struct field *label, uint64_t line,
                                uint32_t *column)
{
    if (label_index_find(reading->index, label->text, (size_t)(label->end - label->text), column))
        return FESCUE_OK;
    return BAD_LINE_AT(reading->stream, line, "'%.*s' is no column of the table", QUOTE(label->text, label->end));
}

static bool is_title(const struct field *field)
{
    static const char title[] = "strength";
    size_t length = (size_t)(field->end - field->text);
    return length == sizeof title - 1 && strncasecmp(field->text, title, length) == 0;
}

static fescue_status record_take(struct near_reading *reading, const struct record *record, char separator)
{
    const struct field *field = record->field;
    uint32_t a, b;
    double strength;
    fescue_status status;
    TRY(label_find(reading, &field[0], record->line, &a));
    TRY(label_find(reading, &field[1], record->line, &b));
    if (!field_number(&field[2], separator == ';', &strength))
        TRY(BAD_LINE_AT(reading->stream, record->line, "the strength '%.*s' is not a number",
                        QUOTE(field[2].text, field[2].end)));
    TRY(pair_add(reading, a, b, strength, record->line));
done:
    return status;
}

static fescue_status text_read(struct near_reading *reading)
{
    struct record record = {0};
    struct delimited_kind form;
    fescue_status status;
    TRY(label_index_create(reading->table->context, &reading->table->column_labels, &reading->index));
    TRY(delimited_kind_find(reading->stream, FESCUE_FORMAT_WIDE, &form));
    for (bool is_first = true;; is_first = false) {
        TRY(record_read(reading->stream, form.separator, &record));
        if (record.count == 0)
            break;
        if (record.count != 3)
            TRY(BAD_LINE_AT(reading->stream, record.line,
                            "%zu fields were found, two columns and a strength were expected", record.count));
        if (!is_first || !is_title(&record.field[2]))
            TRY(record_take(reading, &record, form.separator));
    }
done:
    record_free(reading->table->context, &record);
    label_index_destroy(reading->table->context, &reading->index);
    return status;
}

/* ---- Matrix Market -------------------------------------------------------------------------------------------------
 */

enum { FIELDS_MOST = 5 };

/* The next line that is neither blank nor a comment, in fields split at blanks; one more than the most when there are
   more, none at the end. */
static fescue_status fields_next(struct near_reading *reading, struct field field[FIELDS_MOST], size_t *fields)
{
    struct line line;
    do {
        fescue_status status = stream_line(reading->stream, &line);
        *fields = 0;
        if (status != FESCUE_OK || line.text == NULL)
            return status;
        bool is_comment = line.text < line.end && *line.text == '%' && stream_line_number(reading->stream) > 1;
        for (const char *at = line.text; at < line.end && !is_comment;) {
            while (at < line.end && (*at == ' ' || *at == '\t'))
                at++;
            const char *begin = at;
            while (at < line.end && *at != ' ' && *at != '\t')
                at++;
            if (begin < at && ++*fields <= FIELDS_MOST)
                field[*fields - 1] = (struct field){.text = begin, .end = at};
        }
    } while (*fields == 0);
    return FESCUE_OK;
}

static bool field_is(const struct field *field, const char *word)
{
    size_t length = strlen(word);
    return (size_t)(field->end - field->text) == length && strncasecmp(field->text, word, length) == 0;
}

static fescue_status banner_read(struct near_reading *reading, bool *is_pattern)
{
    struct field field[FIELDS_MOST];
    size_t fields;
    fescue_status status;
    TRY(fields_next(reading, field, &fields));
    if (fields != FIELDS_MOST || !field_is(&field[1], "matrix") || !field_is(&field[2], "coordinate"))
        TRY(BAD_LINE(reading->stream, "'%%%%MatrixMarket matrix coordinate real symmetric' was expected"));
    *is_pattern = field_is(&field[3], "pattern");
    if (!*is_pattern && !field_is(&field[3], "real") && !field_is(&field[3], "double") &&
        !field_is(&field[3], "integer"))
        TRY(BAD_LINE(reading->stream, "'%.*s' was found, 'real', 'integer' or 'pattern' was expected",
                     QUOTE(field[3].text, field[3].end)));
    if (!field_is(&field[4], "symmetric"))
        TRY(BAD_LINE(reading->stream,
                     "'%.*s' was found, 'symmetric' was expected: a column is as near to another as that is to it",
                     QUOTE(field[4].text, field[4].end)));
done:
    return status;
}

/* A whole number from 1 to the most. */
static bool place_parse(const struct field *field, uint32_t most, uint32_t *place)
{
    double number;
    if (!field_number(field, false, &number) || !(number >= 1 && number <= most) || floor(number) != number)
        return false;
    *place = (uint32_t)number;
    return true;
}

static fescue_status sizes_read(struct near_reading *reading, uint64_t *entries)
{
    struct field field[FIELDS_MOST];
    size_t fields;
    uint32_t columns = reading->table->column_labels.count;
    double size[3];
    fescue_status status;
    TRY(fields_next(reading, field, &fields));
    bool good = fields == 3;
    for (size_t k = 0; k < 3 && good; k++)
        good = field_number(&field[k], false, &size[k]) && size[k] >= 0 && size[k] <= 1e15 && floor(size[k]) == size[k];
    if (!good)
        TRY(BAD_LINE(reading->stream, "the numbers of rows, columns and entries were expected"));
    if (size[0] != columns || size[1] != columns)
        TRY(BAD_LINE(reading->stream,
                     "%.0f by %.0f was found, %" PRIu32 " by %" PRIu32 " was expected: a side for every column",
                     size[0], size[1], columns, columns));
    *entries = (uint64_t)size[2];
done:
    return status;
}

static fescue_status entry_read(struct near_reading *reading, const struct field *field, size_t fields, bool is_pattern)
{
    uint32_t columns = reading->table->column_labels.count, place[2];
    double strength = 1;
    if (fields != (is_pattern ? 2 : 3))
        return BAD_LINE(reading->stream, "%zu fields were found, two columns%s were expected", fields,
                        is_pattern ? "" : " and a strength");
    for (size_t k = 0; k < 2; k++)
        if (!place_parse(&field[k], columns, &place[k]))
            return BAD_LINE(reading->stream, "'%.*s' was found, the number of a column, 1 to %" PRIu32 ", was expected",
                            QUOTE(field[k].text, field[k].end), columns);
    if (!is_pattern && !field_number(&field[2], false, &strength))
        return BAD_LINE(reading->stream, "the strength '%.*s' is not a number", QUOTE(field[2].text, field[2].end));
    return pair_add(reading, place[0] - 1, place[1] - 1, strength, stream_line_number(reading->stream));
}

static fescue_status market_read(struct near_reading *reading)
{
    struct field field[FIELDS_MOST];
    size_t fields;
    bool is_pattern;
    uint64_t entries, found = 0;
    fescue_status status;
    TRY(banner_read(reading, &is_pattern));
    TRY(sizes_read(reading, &entries));
    for (;; found++) {
        TRY(fields_next(reading, field, &fields));
        if (fields == 0)
            break;
        TRY(entry_read(reading, field, fields, is_pattern));
    }
    if (found != entries)
        TRY(BAD_LINE(reading->stream, "%" PRIu64 " entries were found, %" PRIu64 " were expected", found, entries));
done:
    return status;
}

/* ---- both ----------------------------------------------------------------------------------------------------------
 */

static int pair_compare(const void *one, const void *other)
{
    const struct pair *a = one, *b = other;
    if (a->high != b->high)
        return a->high < b->high ? -1 : 1;
    if (a->low != b->low)
        return a->low < b->low ? -1 : 1;
    return a->line < b->line ? -1 : a->line > b->line;
}

/* Sorted, each pair once, those of strength 0 left out. */
static fescue_status pairs_merge(struct near_reading *reading)
{
    struct pair *pair = reading->pair;
    uint64_t kept = 0;
    if (reading->count > 0)
        qsort(pair, reading->count, sizeof *pair, pair_compare);
    for (uint64_t k = 0; k < reading->count; k++) {
        if (k > 0 && pair[k].high == pair[k - 1].high && pair[k].low == pair[k - 1].low &&
            pair[k].strength != pair[k - 1].strength) {
            const struct labels *labels = &reading->table->column_labels;
            const char *high = label_text(labels, pair[k].high, reading->name[0]);
            const char *low = label_text(labels, pair[k].low, reading->name[1]);
            return BAD_LINE_AT(reading->stream, pair[k].line,
                               "'%.*s' and '%.*s' have strength %g, but %g on line %" PRIu64
                               ": nearness is the same both ways",
                               QUOTE(low, low + strlen(low)), QUOTE(high, high + strlen(high)), pair[k].strength,
                               pair[k - 1].strength, pair[k - 1].line);
        }
    }
    for (uint64_t k = 0; k < reading->count; k++) {
        struct pair one = pair[k]; /* the next may be written over it */
        bool is_again = kept > 0 && one.high == pair[kept - 1].high && one.low == pair[kept - 1].low;
        if (!is_again && one.strength > 0)
            pair[kept++] = one;
    }
    reading->count = kept;
    return FESCUE_OK;
}

static fescue_status nearness_make(const struct near_reading *reading, struct nearness *near)
{
    fescue_context *context = reading->table->context;
    uint8_t *has = NULL;
    double sum = 0, columns = 0;
    fescue_status status;
    *near = (struct nearness){.columns = reading->table->column_labels.count, .count = reading->count};
    TRY(TAKE(context, near->count, &near->high));
    TRY(TAKE(context, near->count, &near->low));
    TRY(TAKE(context, near->count, &near->strength));
    TRY(TAKE(context, near->columns, &has));
    for (uint64_t k = 0; k < near->count; k++) {
        const struct pair *pair = &reading->pair[k];
        near->high[k] = pair->high;
        near->low[k] = pair->low;
        sum += 2 * pair->strength;
        has[pair->high] = has[pair->low] = 1;
    }
    for (uint32_t j = 0; j < near->columns; j++)
        columns += has[j];
    for (uint64_t k = 0; k < near->count; k++)
        near->strength[k] = reading->pair[k].strength * columns / sum;
done:
    GIVE(context, &has);
    if (status != FESCUE_OK)
        nearness_free(context, near);
    return status;
}

fescue_status nearness_read(const fescue_table *table, const char *path, struct nearness *near)
{
    struct near_reading reading = {.table = table};
    const char *text;
    size_t length;
    fescue_status status;
    *near = (struct nearness){0};
    TRY(stream_open(table->context, path, &reading.stream));
    stream_peek(reading.stream, 32, &text, &length);
    TRY(is_matrix_market(text, length) ? market_read(&reading) : text_read(&reading));
    TRY(pairs_merge(&reading));
    if (reading.count == 0)
        TRY(FAIL(table->context, FESCUE_BAD_DATA, "%s: no two columns are near", stream_name(reading.stream)));
    TRY(nearness_make(&reading, near));
done:
    GIVE(table->context, &reading.pair);
    stream_close(&reading.stream);
    return status;
}

void nearness_free(fescue_context *context, struct nearness *near)
{
    GIVE(context, &near->high);
    GIVE(context, &near->low);
    GIVE(context, &near->strength);
    *near = (struct nearness){0};
}
