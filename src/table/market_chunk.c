/* SPDX-License-Identifier: MIT
 *
 * A chunk of Matrix Market entries, read at one go and beside other chunks.
 *
 * Only plain entries are known here: the right number of fields, positions within the sides, a finite value. At
 * anything else, be it a comment, a blank line or a fault, the chunk is given up and read again line by line, when the
 * lines before it are known; so what is said of a fault, and where, is said in one place (matrix_market.c). What is
 * accepted here is accepted there, with the same value.
 *
 * Most lines are short: row, column and a value of few digits, each behind one blank. Where there is SSE2, such a line
 * is cut by the mask of its first 32 characters that are no digits; so the next line can begin before the numbers of
 * this one are made. Others are read field by field.
 *
 * Every line but the last of a file ends with a line feed, which is no digit and no blank: so no loop over those looks
 * for the end of the chunk. A chunk without one at its end is given up.
 */
#include "table/digits.h"

#include <math.h>
#ifdef __SSE2__
#include <emmintrin.h>
#endif

/* What is not read yet. */
struct rest {
    const char *at, *end;
};

/* The blanks before a field; whether there is one. */
static inline bool blanks_skip(struct rest *rest)
{
    const char *before = rest->at;
    while (*rest->at == ' ' || *rest->at == '\t')
        rest->at++;
    return rest->at > before;
}

/* A number from 1 to `most`, of at most ten digits, which say more than any side has. */
static inline bool place_take(struct rest *rest, uint64_t most, uint32_t *place)
{
    uint64_t number;
    unsigned count = eight_digits(rest->at, &number);
    rest->at += count;
    for (; count >= 8 && count <= 10 && is_digit(*rest->at); count++)
        number = number * 10 + (uint64_t)(*rest->at++ - '0');
    *place = (uint32_t)(number - 1);
    return number - 1 < most && count <= 10;
}

static inline bool line_end_take(struct rest *rest)
{
    blanks_skip(rest);
    if (*rest->at == '\r')
        rest->at++;
    return *rest->at++ == '\n';
}

/* A short value; leaves the rest where it was when it is none. */
static inline bool short_value_take(struct rest *rest, double *value)
{
    const char *end = short_value_read(rest->at, '.', value);
    if (end == NULL || *end > ' ' || *end < 0)
        return false;
    rest->at = end;
    return true;
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
    if (!short_value_take(rest, &entry->value)) {
        const char *end = number_read(rest->at, rest->end, &entry->value);
        if (end == NULL || !isfinite(entry->value) ||
            (form->pile->precision == FESCUE_SINGLE && !isfinite((float)entry->value)))
            return false;
        rest->at = end;
    }
    entry->end = rest->at;
    return !form->is_integer || is_integer_text(entry->text, entry->end);
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

#ifdef __SSE2__

enum { WINDOW = 32 };

/* The characters of the window that are no digits, the first in the lowest bit. */
static inline uint32_t others_find(const char *at)
{
    const __m128i zero = _mm_set1_epi8('0'), nine = _mm_set1_epi8(9);
    __m128i low = _mm_sub_epi8(_mm_loadu_si128((const __m128i *)(const void *)at), zero);
    __m128i high = _mm_sub_epi8(_mm_loadu_si128((const __m128i *)(const void *)(at + WINDOW / 2)), zero);
    low = _mm_cmpeq_epi8(_mm_min_epu8(low, nine), low);
    high = _mm_cmpeq_epi8(_mm_min_epu8(high, nine), high);
    return ~((uint32_t)_mm_movemask_epi8(low) | (uint32_t)_mm_movemask_epi8(high) << WINDOW / 2);
}

/* A short line, "row column [-]digits[.digits]" with less than eight digits each and one blank between; at anything
   else false, and the rest stays where it was. Bits above those of the window are set, so that the mask is never empty.
   Nothing branches on a sign or a point, which no processor could foresee. */
static inline bool short_line_take(const struct market_form *form, struct rest *rest, struct pile_entry *entry)
{
    const char *at = rest->at;
    if (rest->end - at < WINDOW)
        return false;
    const uint64_t beyond = UINT64_C(15) << WINDOW;
    uint64_t others = others_find(at) | beyond;
    const unsigned row_end = (unsigned)__builtin_ctzll(others);
    others &= others - 1;
    const unsigned column_end = (unsigned)__builtin_ctzll(others), column = row_end + 1;
    others &= others - 1;
    const bool negative = at[column_end + 1] == '-';
    others &= (others - 1) | ((uint64_t)negative - 1);
    const unsigned value = column_end + 1 + negative, whole_end = (unsigned)__builtin_ctzll(others);
    const bool has_point = at[whole_end] == '.';
    others &= (others - 1) | ((uint64_t)has_point - 1);
    const unsigned end = (unsigned)__builtin_ctzll(others), fraction = whole_end + has_point;
    const unsigned decimals = end - fraction;
    if (at[row_end] != ' ' || at[column_end] != ' ' || at[end] != '\n' || end >= WINDOW || row_end - 1 > 6 ||
        column_end - column - 1 > 6 || whole_end - value - 1 > 6 || decimals > 7 || (has_point && form->is_integer))
        return false;
    entry->row = (uint32_t)digits_number(digits_load(at), row_end) - 1;
    entry->column = (uint32_t)digits_number(digits_load(at + column), column_end - column) - 1;
    uint64_t whole = digits_number(digits_load(at + value), whole_end - value);
    uint64_t part = digits_number(digits_load(at + fraction), decimals);
    double size = ((double)whole * digits_power[decimals] + (double)part) / digits_power[decimals];
    entry->value = negative ? -size : size;
    entry->text = at + column_end + 1;
    entry->end = at + end;
    bool is_ours = entry->row < form->rows && entry->column < form->columns && is_in_triangle(form, entry);
    rest->at += is_ours ? end + 1 : 0;
    return is_ours;
}

#else

static inline bool short_line_take(const struct market_form *form, struct rest *rest, struct pile_entry *entry)
{
    (void)form, (void)rest, (void)entry;
    return false;
}

#endif

/* A value, or a hole: nan. */
static inline bool array_take(const struct market_form *form, struct rest *rest, struct pile_entry *entry,
                              bool *is_hole)
{
    blanks_skip(rest);
    size_t held = (size_t)(rest->end - rest->at), sign = *rest->at == '-' || *rest->at == '+';
    *is_hole = held > 3 + sign && is_nan_text(rest->at, rest->at + 3 + sign);
    if (*is_hole)
        rest->at += 3 + sign;
    else if (!value_take(form, rest, entry))
        return false;
    return line_end_take(rest);
}

static size_t lines_count(const char *text, const char *end)
{
    size_t lines = 0;
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
        *is_plain = form->is_array ? array_take(form, &rest, &entry, &is_hole)
                                   : short_line_take(form, &rest, &entry) || coordinate_take(form, &rest, &entry);
        if (is_hole)
            hole_add(block, form->pile->precision);
        else if (*is_plain && form->pile->keeps_texts)
            TRY(pile_block_add(form->pile, block, &entry));
        else if (*is_plain)
            pile_block_put(form->pile, block, &entry);
    }
done:
    return status;
}

fescue_status market_parse(const struct market_form *form, size_t worker, const struct chunk *chunk,
                           struct pile_block **block)
{
    fescue_status status = FESCUE_OK;
    const struct rest rest = {chunk->text + chunk->at, chunk->text + chunk->end};
    size_t lines = lines_count(rest.at, rest.end);
    bool is_plain = false;
    *block = NULL;
    if (rest.at == rest.end || rest.end[-1] != '\n' || lines > UINT32_MAX)
        return FESCUE_OK;
    TRY(pile_block_create(form->pile, &form->room[worker], (uint32_t)lines, block));
    TRY(lines_parse(form, rest, *block, &is_plain));
done:
    if (status != FESCUE_OK || !is_plain)
        pile_block_free(form->pile->context, block);
    return status;
}
