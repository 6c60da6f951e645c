/* SPDX-License-Identifier: MIT
 *
 * What delimited text is: its separator and its shape, from the first 64 kB.
 *
 * Separator, of tab, semicolon and comma: one that is in the first record and cuts all records into equally many
 * fields, the last of which is a number or a hole in all but the first record. Where several do, the one that comes
 * first in this list, since a comma may also be a decimal sign. Where none does, the one that the first record has most
 * of; what is wrong is then found, with its line, when the text is read.
 *
 * Shape. Long text has three fields: row, column, value; or four, with a weight, which are long where the fourth is
 * called "weight" or "sd", or where there is no header and the second is text in every record. Other numbers of fields
 * are wide. Three fields may be either:
 *
 *     long   where the second field is text in every record after the first (no hole, no number): as wide text it would
 *            be refused at its first value
 *     else, what speaks for long text:   a first field that comes again (a wide table has every row once);
 *                                        "value" as the third field of the first record
 *           what speaks for wide text:   a blank corner; second fields that are holes; second fields with a decimal
 * sign (labels that are numbers seldom have one)
 *
 * If nothing speaks for either, or something for both (a wide table with one hour twice, say), the text is refused,
 * with the option that tells: guessing wrong would be found by nobody.
 */
#include "table/table_internal.h"

#include <string.h>
#include <strings.h>

enum { SAMPLE_SIZE = 1 << 16, SAMPLE_FIELDS = 4 };

/* Where we are in the sample, and the record that was met last. */
struct sample {
    const char *at, *end;
    bool is_whole; /* the text ends where the sample does */
    char separator;
    bool out_of_place;                 /* a quote was, in one of the records so far */
    size_t count;                      /* fields of the record */
    struct field field[SAMPLE_FIELDS]; /* the first of them, without quotes around them */
    struct field last;
};

/* Behind the closing quote of a field that begins with one; `end` when it is not closed. */
static const char *quoted_end(const char *text, const char *end)
{
    for (text++; text < end; text++)
        if (*text == '"' && (text + 1 == end || *++text != '"'))
            return text + (*text == '"');
    return end;
}

/* *out_of_place is set when a quote stands where none may be. */
static const char *field_end(const char *text, const char *end, char separator, bool *out_of_place)
{
    if (text < end && *text == '"')
        text = quoted_end(text, end);
    for (; text < end && *text != separator && *text != '\n'; text++)
        *out_of_place = *out_of_place || *text == '"';
    return text;
}

/* Without the carriage return before an end of line, and without quotes (those within stay doubled). */
static struct field field_bare(const char *text, const char *end)
{
    if (end > text && end[-1] == '\r')
        end--;
    if (end - text >= 2 && *text == '"' && end[-1] == '"')
        return (struct field){text + 1, end - 1};
    return (struct field){text, end};
}

/* The next record; false at the end. A record that the sample cuts off is left out, unless it is the first. */
static bool sample_record(struct sample *sample, bool is_first)
{
    const char *end = sample->end;
    while (sample->at < end &&
           (*sample->at == '\n' || (*sample->at == '\r' && end - sample->at > 1 && sample->at[1] == '\n')))
        sample->at++;
    if (sample->at == end)
        return false;
    sample->count = 0;
    for (;; sample->at++) {
        const char *stop = field_end(sample->at, end, sample->separator, &sample->out_of_place);
        sample->last = field_bare(sample->at, stop);
        if (sample->count < SAMPLE_FIELDS)
            sample->field[sample->count] = sample->last;
        sample->count++;
        sample->at = stop;
        if (stop == end || *stop == '\n')
            break;
    }
    return is_first || sample->is_whole || sample->at < end;
}

/* ---- separator -------------------------------------------------------------------------------------------------- */

/* How well a separator fits. */
enum fit {
    FIT_MISQUOTED, /* a quote is out of place */
    FIT_UNEVEN,    /* records differ in the number of fields, or there is one record alone */
    FIT_EVEN,
    FIT_NUMERIC /* and all but the first end in a number or a hole */
};

static enum fit separator_fit(struct sample sample, size_t *first_count)
{
    bool is_even = true, is_numeric = true;
    size_t others = 0;
    *first_count = sample_record(&sample, true) ? sample.count : 0;
    for (; sample_record(&sample, false); others++) {
        is_even = is_even && sample.count == *first_count;
        is_numeric = is_numeric && (is_hole(&sample.last) || is_number(&sample.last, sample.separator == ';'));
    }
    if (sample.out_of_place)
        return FIT_MISQUOTED;
    return others == 0 || !is_even ? FIT_UNEVEN : is_numeric ? FIT_NUMERIC : FIT_EVEN;
}

static fescue_status separator_find(const struct stream *stream, struct sample sample, char *separator)
{
    static const char separators[] = {'\t', ';', ','};
    enum fit best = FIT_MISQUOTED;
    size_t most = 0;
    for (size_t k = 0; k < sizeof separators; k++) {
        size_t count;
        sample.separator = separators[k];
        enum fit fit = separator_fit(sample, &count);
        if (count < 2 || (most > 0 && (fit < best || (fit == best && (fit >= FIT_EVEN || count <= most)))))
            continue;
        best = fit;
        most = count;
        *separator = separators[k];
    }
    if (most > 0)
        return FESCUE_OK;
    return BAD_LINE_AT(stream, UINT64_C(1),
                       "no comma, semicolon or tab was found, fields separated by one of them "
                       "were expected");
}

/* ---- shape ------------------------------------------------------------------------------------------------------ */

/* What speaks for one shape or the other. */
struct evidence {
    bool corner_blank, value_titled;                                     /* in the first record */
    bool second_is_value, second_is_hole, second_has_point, first_again; /* in any other */
    size_t records;                                                      /* the others */
};

static bool field_is(const struct field *field, const char *word)
{
    size_t length = strlen(word);
    return (size_t)(field->end - field->text) == length && strncasecmp(field->text, word, length) == 0;
}

static bool has_point(const struct field *field)
{
    size_t length = (size_t)(field->end - field->text);
    return memchr(field->text, '.', length) != NULL || memchr(field->text, ',', length) != NULL;
}

/* Looks at the records behind the first that have as many fields as it, three or four. */
static fescue_status evidence_collect(fescue_context *context, struct sample *sample, struct evidence *evidence)
{
    fescue_status status = FESCUE_OK;
    struct label_list seen = {0};
    size_t count = sample->count;
    while (sample_record(sample, false)) {
        const struct field *first = &sample->field[0], *second = &sample->field[1];
        if (sample->count != count)
            continue;
        evidence->records++;
        uint32_t position, known = seen.labels.count;
        TRY(label_list_find_or_add(context, &seen, first->text, (size_t)(first->end - first->text), &position));
        evidence->first_again = evidence->first_again || position < known;
        bool number = is_number(second, sample->separator == ';');
        evidence->second_is_hole = evidence->second_is_hole || is_hole(second);
        evidence->second_is_value = evidence->second_is_value || number || is_hole(second);
        evidence->second_has_point = evidence->second_has_point || (number && has_point(second));
    }
done:
    label_list_free(context, &seen);
    return status;
}

static fescue_status shape_weigh(const struct stream *stream, const struct evidence *evidence, enum table_shape *shape)
{
    bool for_long = evidence->first_again || evidence->value_titled;
    bool for_wide = evidence->corner_blank || evidence->second_is_hole || evidence->second_has_point;
    if (evidence->records > 0 && !evidence->second_is_value)
        *shape = SHAPE_LONG;
    else if (for_long != for_wide)
        *shape = for_long ? SHAPE_LONG : SHAPE_WIDE;
    else
        return BAD_LINE_AT(stream, UINT64_C(1),
                           "three columns may be a wide table of two columns or a long one of row, "
                           "column and value; --format wide or --format long says which it is");
    return FESCUE_OK;
}

/* Four fields: whether the first record says so, or is a cell like all others. */
static bool has_weights(const struct sample *first, const struct evidence *evidence)
{
    bool with_comma = first->separator == ';';
    bool is_cell = is_number(&first->field[2], with_comma) && is_number(&first->field[3], with_comma) &&
                   !is_number(&first->field[1], with_comma) && !is_hole(&first->field[1]);
    return weight_title_kind(&first->field[3]) != WEIGHT_NONE ||
           (is_cell && evidence->records > 0 && !evidence->second_is_value);
}

static fescue_status shape_find(const struct stream *stream, struct sample sample, enum table_shape *shape)
{
    struct evidence evidence = {0};
    sample_record(&sample, true);
    const struct sample first = sample;
    *shape = SHAPE_WIDE;
    if (sample.count != 3 && sample.count != 4)
        return FESCUE_OK;
    evidence.corner_blank = field_is(&sample.field[0], "");
    evidence.value_titled = field_is(&sample.field[2], "value");
    fescue_status status = evidence_collect(stream_context(stream), &sample, &evidence);
    if (status != FESCUE_OK)
        return status;
    if (first.count == 3)
        return shape_weigh(stream, &evidence, shape);
    if (has_weights(&first, &evidence))
        *shape = SHAPE_LONG;
    return FESCUE_OK;
}

fescue_status delimited_kind_find(struct stream *stream, enum fescue_format format, struct delimited_kind *kind)
{
    fescue_status status;
    size_t length;
    struct sample sample = {0};
    stream_peek(stream, SAMPLE_SIZE, &sample.at, &length);
    sample.end = sample.at + length;
    sample.is_whole = length < SAMPLE_SIZE;
    TRY(separator_find(stream, sample, &kind->separator));
    sample.separator = kind->separator;
    if (format == FESCUE_FORMAT_AUTO)
        TRY(shape_find(stream, sample, &kind->shape));
    else
        kind->shape = format == FESCUE_FORMAT_LONG ? SHAPE_LONG : SHAPE_WIDE;
done:
    return status;
}
