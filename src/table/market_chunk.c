/* SPDX-License-Identifier: MIT
 *
 * A chunk of Matrix Market entries, read at one go and beside other chunks.
 *
 * Only plain entries are known here: the right number of fields, positions within the sides, a finite value. At
 * anything else, be it a comment, a blank line or a fault, the chunk is given up and read again line by line, when the
 * lines before it are known; so what is said of a fault, and where, is said in one place (matrix_market.c). What is
 * accepted here is accepted there, with the same value.
 */
#include "table/table_internal.h"

#include <math.h>
#include <string.h>

/* What is not read yet. */
struct rest {
    const char *at, *end;
};

/* The blanks before a field; whether there is one. */
static inline bool blanks_skip(struct rest *rest)
{
    const char *before = rest->at;
    while (rest->at < rest->end && (*rest->at == ' ' || *rest->at == '\t'))
        rest->at++;
    return rest->at > before;
}

/* A number from 1 to `most`, of at most ten digits, which say more than any side has. */
static inline bool place_take(struct rest *rest, uint64_t most, uint32_t *place)
{
    enum { MOST_DIGITS = 10 };
    const char *first = rest->at;
    uint64_t number = 0;
    for (; rest->at < rest->end && (unsigned char)(*rest->at - '0') <= 9; rest->at++)
        number = number * 10 + (uint64_t)(*rest->at - '0');
    *place = (uint32_t)(number - 1);
    return rest->at - first <= MOST_DIGITS && number >= 1 && number <= most;
}

static inline bool line_end_take(struct rest *rest)
{
    blanks_skip(rest);
    if (rest->at < rest->end && *rest->at == '\r')
        rest->at++;
    if (rest->at == rest->end)
        return true;
    return *rest->at++ == '\n';
}

/* Integers are promised by a header that says so. */
static bool is_integer_text(const char *text, const char *end)
{
    return memchr(text, '.', (size_t)(end - text)) == NULL && memchr(text, 'e', (size_t)(end - text)) == NULL &&
           memchr(text, 'E', (size_t)(end - text)) == NULL;
}

static inline bool value_take(const struct market_form *form, struct rest *rest, struct pile_entry *entry)
{
    entry->text = rest->at;
    entry->end = number_read(rest->at, rest->end, &entry->value);
    if (entry->end == NULL)
        return false;
    rest->at = entry->end;
    if (form->is_integer && !is_integer_text(entry->text, entry->end))
        return false;
    return isfinite(entry->value) && (form->pile->precision == FESCUE_DOUBLE || isfinite((float)entry->value));
}

static inline bool is_in_triangle(const struct market_form *form, const struct pile_entry *entry)
{
    return form->pile->mirror == MIRROR_NONE || entry->row > entry->column ||
           (entry->row == entry->column && form->pile->mirror == MIRROR_SAME);
}

static inline bool coordinate_take(const struct market_form *form, struct rest *rest, struct pile_entry *entry)
{
    blanks_skip(rest);
    return place_take(rest, form->rows, &entry->row) && blanks_skip(rest) &&
           place_take(rest, form->columns, &entry->column) && blanks_skip(rest) && value_take(form, rest, entry) &&
           line_end_take(rest) && is_in_triangle(form, entry);
}

/* A value, or a hole: nan. */
static inline bool array_take(const struct market_form *form, struct rest *rest, struct pile_entry *entry,
                              bool *is_hole)
{
    blanks_skip(rest);
    size_t held = (size_t)(rest->end - rest->at), sign = held > 0 && (*rest->at == '-' || *rest->at == '+');
    *is_hole = held >= 3 + sign && is_nan_text(rest->at, rest->at + 3 + sign);
    if (*is_hole)
        rest->at += 3 + sign;
    else if (!value_take(form, rest, entry))
        return false;
    return line_end_take(rest);
}

static size_t lines_count(const char *text, const char *end)
{
    size_t lines = 1;
    for (; text < end; text++)
        lines += *text == '\n';
    return lines;
}

/* The value of a hole is nan until the places of the entries are known; no text is kept of it. */
static void hole_add(struct pile_block *block, enum fescue_precision precision)
{
    uint32_t k = block->count++;
    if (precision == FESCUE_SINGLE)
        ((float *)block->value)[k] = NAN;
    else
        ((double *)block->value)[k] = NAN;
}

/* Whether all lines were plain. */
static fescue_status lines_parse(const struct market_form *form, struct rest rest, struct pile_block *block,
                                 bool *is_plain)
{
    fescue_status status = FESCUE_OK;
    struct pile_entry entry = {0};
    *is_plain = true;
    while (rest.at < rest.end && *is_plain) {
        bool is_hole = false;
        *is_plain = form->is_array ? array_take(form, &rest, &entry, &is_hole) : coordinate_take(form, &rest, &entry);
        if (is_hole)
            hole_add(block, form->pile->precision);
        else if (*is_plain)
            TRY(pile_block_add(form->pile, block, &entry));
    }
done:
    return status;
}

fescue_status market_parse(const struct market_form *form, const struct chunk *chunk, struct pile_block **block)
{
    fescue_status status = FESCUE_OK;
    const struct rest rest = {chunk->text + chunk->at, chunk->text + chunk->end};
    size_t lines = lines_count(rest.at, rest.end);
    bool is_plain = false;
    *block = NULL;
    if (rest.at == rest.end || lines > UINT32_MAX)
        return FESCUE_OK;
    TRY(pile_block_create(form->pile, (uint32_t)lines, block));
    TRY(lines_parse(form, rest, *block, &is_plain));
done:
    if (status != FESCUE_OK || !is_plain)
        pile_block_free(form->pile->context, block);
    return status;
}
