/* SPDX-License-Identifier: MIT
 *
 * Weights: how precise each cell is relative to the others. A cell of weight w counts as w cells of weight one: its
 * noise variance is the table's over w. They come from a fourth field of long text and from files of rows and columns;
 * what a cell has is the product, scaled so that the mean over the seen cells is one, and kept in single precision
 * (nobody knows a precision to more than seven digits). A standard deviation is the weight 1/sd^2. Where all cells
 * weigh the same, there is nothing to know, and the cells have none: what is made of them is to the bit what it is
 * without.
 *
 * Weights lie within 1e-12 .. 1e12 when they are read, so that no product of three leaves double precision.
 */
#include "table/table_internal.h"

#include <math.h>
#include <string.h>
#include <strings.h>

static const double weight_least = 1e-12, weight_most = 1e12;
/* A cell that counts for less than this share of a mean one counts for nothing; it stays positive in a float. */
static const double weight_nothing = 1e-30;

enum weight_kind weight_title_kind(const struct field *title)
{
    static const struct {
        const char *title;
        enum weight_kind kind;
    } titles[] = {{"weight", WEIGHT_PRECISION}, {"weights", WEIGHT_PRECISION}, {"sd", WEIGHT_DEVIATION}};
    for (size_t k = 0; k < sizeof titles / sizeof titles[0]; k++) {
        size_t length = strlen(titles[k].title);
        if ((size_t)(title->end - title->text) == length && strncasecmp(title->text, titles[k].title, length) == 0)
            return titles[k].kind;
    }
    return WEIGHT_NONE;
}

const char *weight_of(enum weight_kind kind, double number, double *weight)
{
    if (!isfinite(number))
        return "is not finite; a positive number was expected";
    if (number <= 0)
        return "is not positive; a positive number was expected";
    *weight = kind == WEIGHT_DEVIATION ? 1 / number / number : number;
    if (*weight < weight_least || *weight > weight_most)
        return kind == WEIGHT_DEVIATION ? "is out of range; a number from 1e-6 to 1e6 was expected"
                                        : "is out of range; a number from 1e-12 to 1e12 was expected";
    return NULL;
}

const char *weight_parse(enum weight_kind kind, const struct field *field, char separator, double *weight)
{
    double number;
    if (!field_number(field, separator == ';', &number))
        return "is not a number; a positive number was expected";
    return weight_of(kind, number, weight);
}

/* ---- of cells ------------------------------------------------------------------------------------------------------
 */

fescue_status weight_add(struct delimited *delimited, uint32_t row, uint32_t column, const struct field *field)
{
    struct pile_entry entry = {.row = row, .column = column, .line = delimited->record.line};
    const char *fault = weight_parse(delimited->weight, field, delimited->separator, &entry.value);
    if (fault != NULL)
        return BAD_LINE_AT(delimited->stream, delimited->record.line, "the %s '%.*s' %s",
                           delimited->weight == WEIGHT_DEVIATION ? "standard deviation" : "weight",
                           QUOTE(field->text, field->end), fault);
    return pile_add(&delimited->weights, &entry);
}

fescue_status weights_set(fescue_table *table, double *weight)
{
    uint64_t count = table->cells.count;
    double sum = 0, least = INFINITY, most = 0;
    for (uint64_t k = 0; k < count; k++)
        sum += weight[k];
    for (uint64_t k = 0; k < count; k++) {
        weight[k] = fmax(weight[k] * ((double)count / sum), weight_nothing);
        least = fmin(least, weight[k]);
        most = fmax(most, weight[k]);
    }
    table->weights.least = least;
    table->weights.most = most;
    return cells_weigh(table->context, &table->cells, least < most ? weight : NULL);
}

/* A store of the weights with the pattern of the table; merged cells have their mean, or that of the cell taken. */
fescue_status weights_build(struct delimited *delimited, fescue_table *table)
{
    fescue_context *context = table->context;
    fescue_table beside = {.context = context};
    double *weight = NULL;
    fescue_status status;
    beside.row_labels.count = table->row_labels.count;
    beside.column_labels.count = table->column_labels.count;
    TRY(pile_build(&delimited->weights, delimited->stream, delimited->reading->duplicates, &beside));
    TRY(TAKE(context, table->cells.count, &weight));
    for (uint64_t k = 0; k < table->cells.count; k++)
        weight[k] = cells_value(&beside.cells, &beside.cells.by_row, k);
    TRY(weights_set(table, weight));
    table->weights.of_cells = true;
done:
    GIVE(context, &weight);
    cells_free(context, &beside.cells);
    return status;
}
