/* SPDX-License-Identifier: MIT
 *
 * A chunk of Matrix Market entries, read at one go and beside other chunks.
 *
 * Only plain entries are known here: the right number of fields, positions within the sides, a finite value. At
 * anything else, be it a comment, a blank line or a fault, the chunk is given up and read again line by line, when the
 * lines before it are known; so what is said of a fault, and where, is said in one place (matrix_market.c). What is
 * accepted here is accepted there, with the same value.
 *
 * Digits are read eight at a time (Lemire 2021, "Number parsing at a gigabyte per second", section 7): a word of eight
 * characters less eight times '0' has a byte above 9 where the digits end; shifted so that the last digit is the last
 * byte, three multiplications add pairs of digits, pairs of pairs and the two halves. A value of less than eight digits
 * on either side of its point is then one division away (way 1 of number.c); others go there.
 *
 * Every line but the last of a file ends with a line feed, which is no digit and no blank: so no loop over those looks
 * for the end of the chunk. A chunk without one at its end is given up.
 */
#include "table/table_internal.h"

#include <endian.h>
#include <math.h>
#include <string.h>

_Static_assert(CHUNK_SLACK >= sizeof(uint64_t), "eight characters can be read from any place of a chunk");

/* What is not read yet. */
struct rest {
    const char *at, *end;
};

static inline bool is_digit(char c)
{
    return (unsigned char)(c - '0') < 10;
}

/* The blanks before a field; whether there is one. */
static inline bool blanks_skip(struct rest *rest)
{
    const char *before = rest->at;
    while (*rest->at == ' ' || *rest->at == '\t')
        rest->at++;
    return rest->at > before;
}

/* Reads the digits at `at`, at most eight of them, and returns how many there are. */
static inline unsigned eight_digits(const char *at, uint64_t *number)
{
    static const uint64_t ones = 0x0101010101010101;
    uint64_t word;
    memcpy(&word, at, sizeof word);
    word = le64toh(word) ^ ones * '0';
    uint64_t beyond = ((word + ones * (0x80 - 10)) | word) & ones * 0x80; /* right up to the first that is no digit */
    unsigned count = beyond == 0 ? 8 : (unsigned)__builtin_ctzll(beyond) / 8;
    *number = 0;
    if (count == 0)
        return 0;
    word <<= 8 * (8 - count);
    word = word * (1 + (10 << 8)) >> 8;
    word = (word & 0x00ff00ff00ff00ff) * (1 + (UINT64_C(100) << 16)) >> 16;
    *number = (word & 0x0000ffff0000ffff) * (1 + (UINT64_C(10000) << 32)) >> 32;
    return count;
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
    static const double power[] = {1e0, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7};
    const char *at = rest->at;
    bool negative = *at == '-';
    uint64_t whole, fraction = 0;
    at += negative;
    unsigned digits = eight_digits(at, &whole), decimals = 0;
    at += digits;
    if (*at == '.') {
        decimals = eight_digits(++at, &fraction);
        at += decimals;
    }
    if (digits == 0 || digits == 8 || decimals == 8 || *at > ' ' || *at < 0) /* longer, an exponent, no number */
        return false;
    double size = ((double)whole * power[decimals] + (double)fraction) / power[decimals];
    *value = negative ? -size : size;
    rest->at = at;
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
        *is_plain = form->is_array ? array_take(form, &rest, &entry, &is_hole) : coordinate_take(form, &rest, &entry);
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

fescue_status market_parse(const struct market_form *form, const struct chunk *chunk, struct pile_block **block)
{
    fescue_status status = FESCUE_OK;
    const struct rest rest = {chunk->text + chunk->at, chunk->text + chunk->end};
    size_t lines = lines_count(rest.at, rest.end);
    bool is_plain = false;
    *block = NULL;
    if (rest.at == rest.end || rest.end[-1] != '\n' || lines > UINT32_MAX)
        return FESCUE_OK;
    TRY(pile_block_create(form->pile, (uint32_t)lines, block));
    TRY(lines_parse(form, rest, *block, &is_plain));
done:
    if (status != FESCUE_OK || !is_plain)
        pile_block_free(form->pile->context, block);
    return status;
}
