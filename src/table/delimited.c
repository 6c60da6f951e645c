/* SPDX-License-Identifier: MIT
 *
 * Delimited text: what the wide and the long reader share.
 *
 * Decimal sign. Where the semicolon separates, a comma may be the decimal sign; which one it is the first value with a
 * sign shows, and the other one is refused from there on: "1.500" beside "1,5" is fifteen hundred to whoever wrote it.
 */
#include "table/table_internal.h"

#include <string.h>
#include <strings.h>

/* A number with a decimal comma is copied to be parsed; longer ones are not written by anybody. */
enum { COMMA_NUMBER_MOST = 400 };

static struct field field_trimmed(const struct field *field)
{
    struct field trimmed = *field;
    while (trimmed.text < trimmed.end && (*trimmed.text == ' ' || *trimmed.text == '\t'))
        trimmed.text++;
    while (trimmed.text < trimmed.end && (trimmed.end[-1] == ' ' || trimmed.end[-1] == '\t'))
        trimmed.end--;
    return trimmed;
}

bool is_hole(const struct field *field)
{
    struct field bare = field_trimmed(field);
    switch (bare.end - bare.text) {
    case 0:
        return true;
    case 2:
        return strncasecmp(bare.text, "NA", 2) == 0;
    case 3:
        return strncasecmp(bare.text, "NaN", 3) == 0;
    case 4:
        return strncasecmp(bare.text, "null", 4) == 0;
    default:
        return false;
    }
}

/* The text with its comma made a point, in `copy`, when it has just one and no point; else as it is. */
static struct field comma_replaced(struct field field, char copy[COMMA_NUMBER_MOST])
{
    size_t length = (size_t)(field.end - field.text);
    const char *comma = memchr(field.text, ',', length);
    if (comma == NULL || length > COMMA_NUMBER_MOST || memchr(field.text, '.', length) != NULL)
        return field;
    memcpy(copy, field.text, length);
    copy[comma - field.text] = '.';
    return (struct field){copy, copy + length};
}

bool field_number(const struct field *field, bool with_comma, double *value)
{
    char copy[COMMA_NUMBER_MOST];
    struct field bare = field_trimmed(field);
    if (with_comma)
        bare = comma_replaced(bare, copy);
    return number_parse(bare.text, bare.end, value);
}

bool is_number(const struct field *field, bool with_comma)
{
    double value;
    return field_number(field, with_comma, &value);
}

/* Learns the decimal sign from a number that has one, or refuses the other one. */
static fescue_status decimal_learn(struct delimited *delimited, const struct field *number)
{
    size_t length = (size_t)(number->end - number->text);
    char sign = memchr(number->text, ',', length) != NULL ? ',' : memchr(number->text, '.', length) != NULL ? '.' : 0;
    if (sign == 0 || sign == delimited->decimal)
        return FESCUE_OK;
    if (delimited->decimal != 0)
        return BAD_LINE_AT(delimited->stream, delimited->record.line,
                           "the value '%.*s' has a decimal %s, but line %" PRIu64 " has a decimal %s",
                           QUOTE(number->text, number->end), sign == ',' ? "comma" : "point", delimited->decimal_line,
                           sign == ',' ? "point" : "comma");
    delimited->decimal = sign;
    delimited->decimal_line = delimited->record.line;
    delimited->pile.decimal = sign;
    return FESCUE_OK;
}

static fescue_status value_refuse(const struct delimited *delimited, const struct field *field, const char *fault)
{
    if (delimited->separator != ';' && is_number(field, true) && !is_number(field, false))
        fault = "has a decimal comma, which is taken where the semicolon separates; a decimal point was expected";
    else if (!is_number(field, delimited->separator == ';'))
        fault = "is not a number; a number, or nothing, NA, NaN or null for a hole, was expected";
    return BAD_LINE_AT(delimited->stream, delimited->record.line, "the value '%.*s' %s", QUOTE(field->text, field->end),
                       fault);
}

fescue_status delimited_cell(struct delimited *delimited, uint32_t row, uint32_t column, const struct field *field)
{
    char copy[COMMA_NUMBER_MOST];
    struct field bare = field_trimmed(field), number = bare;
    struct pile_entry entry = {
        .row = row, .column = column, .line = delimited->record.line, .text = field->text, .end = field->end};
    if (delimited->separator == ';')
        number = comma_replaced(bare, copy);
    const char *fault = value_parse(number.text, number.end, delimited->reading->precision, &entry.value);
    if (fault != NULL)
        return is_hole(field) ? FESCUE_OK : value_refuse(delimited, &bare, fault);
    if (delimited->separator == ';') {
        fescue_status status = decimal_learn(delimited, &bare);
        if (status != FESCUE_OK)
            return status;
    }
    return pile_add(&delimited->pile, &entry);
}

/* ---- labels ----------------------------------------------------------------------------------------------------- */

fescue_status label_check(const struct delimited *delimited, const struct field *field, const char *what)
{
    if (field->text == field->end)
        return BAD_LINE_AT(delimited->stream, delimited->record.line, "the label of a %s is empty", what);
    const char *fault = utf8_fault(field->text, field->end);
    if (fault == NULL)
        return FESCUE_OK;
    return BAD_LINE_AT(delimited->stream, delimited->record.line,
                       "the label of a %s holds the byte 0x%02x, which is not UTF-8; the text can be converted, "
                       "for instance with iconv",
                       what, (unsigned)(unsigned char)*fault);
}

fescue_status title_keep(struct delimited *delimited, const struct field *field, char **title)
{
    fescue_status status;
    if (field->text < field->end)
        TRY(label_check(delimited, field, "header"));
    TRY(memory_copy_text(delimited->table->context, field->text, (size_t)(field->end - field->text), title));
done:
    return status;
}

/* ---- reading ---------------------------------------------------------------------------------------------------- */

static fescue_status wide_records_read(void *data)
{
    return wide_read(data);
}

fescue_status delimited_read(struct stream *stream, const struct table_reading *reading, fescue_table *table)
{
    fescue_status status;
    fescue_context *context = table->context;
    struct delimited_kind kind;
    struct delimited delimited = {.stream = stream, .reading = reading, .table = table};
    pile_open(context, reading, &delimited.pile);
    pile_open(context, &(const struct table_reading){.precision = FESCUE_DOUBLE}, &delimited.weights);
    delimited.weights.keeps_texts = delimited.weights.keeps_lines = false;
    TRY(delimited_kind_find(stream, reading->format, &kind));
    delimited.separator = kind.separator;
    delimited.shape = kind.shape;
    TRY(kind.shape == SHAPE_LONG ? long_read(&delimited) : stream_read(stream, wide_records_read, &delimited));
    table->look.shape = kind.shape;
    table->look.separator = kind.separator;
    table->look.decimal = delimited.pile.decimal;
    label_list_finish(context, &delimited.rows, &table->row_labels);
    label_list_finish(context, &delimited.columns, &table->column_labels);
    TRY(pile_build(&delimited.pile, stream, reading->duplicates, table));
    if (delimited.weight != WEIGHT_NONE)
        TRY(weights_build(&delimited, table));
done:
    record_free(context, &delimited.record);
    label_list_free(context, &delimited.rows);
    label_list_free(context, &delimited.columns);
    pile_free(&delimited.pile);
    pile_free(&delimited.weights);
    return status;
}
