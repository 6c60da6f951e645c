/* SPDX-License-Identifier: MIT
 *
 * A chunk of Matrix Market entries, read at one go and beside other chunks.
 *
 * Only plain entries are known here: the right number of fields, positions within the sides, a finite value. At
 * anything else, be it a comment, a blank line or a fault, the chunk is given up and read again line by line, when the
 * lines before it are known; so what is said of a fault, and where, is said in one place (matrix_market.c). What is
 * accepted here is accepted there, with the same value.
 *
 * Most lines are short: row, column and a value of not too many digits, each behind one blank. Where the processor has
 * the vectors for it these are taken at one go (short_line.h). Others are read field by field.
 *
 * Every line but the last of a file ends with a line feed, which is no digit and no blank: so no loop over those looks
 * for the end of the chunk. A chunk without one at its end is given up.
 */
#include "table/digits.h"

#if defined(__x86_64__)
#include "table/short_line.h"
#endif

#include <math.h>

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

static inline bool is_in_triangle(enum mirror mirror, uint32_t row, uint32_t column)
{
    return mirror == MIRROR_NONE || row > column || (row == column && mirror == MIRROR_SAME);
}

static inline bool coordinate_take(const struct market_form *form, struct rest *rest, struct pile_entry *entry)
{
    blanks_skip(rest);
    return place_take(rest, form->rows, &entry->row) && blanks_skip(rest) &&
           place_take(rest, form->columns, &entry->column) && blanks_skip(rest) && value_take(form, rest, entry) &&
           line_end_take(rest) && is_in_triangle(form->pile->mirror, entry->row, entry->column);
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

/* The value of a hole is nan until the places of the entries are known; no text is kept of it. */
static void hole_add(struct pile_block *block, enum fescue_precision precision)
{
    uint32_t k = block->count++;
    if (precision == FESCUE_SINGLE)
        ((float *)block->value)[k] = NAN;
    else
        ((double *)block->value)[k] = NAN;
}

static inline fescue_status entry_put(const struct market_form *form, struct pile_block *block,
                                      const struct pile_entry *entry)
{
    if (form->pile->keeps_texts)
        return pile_block_add(form->pile, block, entry);
    pile_block_put(form->pile, block, entry);
    return FESCUE_OK;
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
            TRY(entry_put(form, block, &entry));
    }
done:
    return status;
}

#if defined(__x86_64__)

/* Lines whose ends are looked for, and whose values are divided, at one go; and room for what values_make and
   line_feeds_find do beyond. */
enum { BATCH = 256, BATCH_ROOM = BATCH + 2 * WINDOW };
struct short_lines {
    uint32_t feed[BATCH_ROOM];
    size_t count, read; /* of the batch */
    size_t line;        /* where the next one begins */
    uint64_t halves[BATCH_ROOM];
    double power[BATCH_ROOM];
};

SHORT_LINE_VECTORS static void short_values_put(const struct short_lines *lines, size_t count,
                                                enum fescue_precision precision, void *to)
{
    size_t k = 0;
    for (; k + 4 <= count; k += 4) {
        const __m256d values = values_make(lines->halves + k, lines->power + k);
        if (precision == FESCUE_SINGLE)
            _mm_storeu_ps((float *)to + k, _mm256_cvtpd_ps(values));
        else
            _mm256_storeu_pd((double *)to + k, values);
    }
    double rest[4];
    _mm256_storeu_pd(rest, values_make(lines->halves + k, lines->power + k));
    for (size_t j = 0; k < count; k++, j++)
        if (precision == FESCUE_SINGLE)
            ((float *)to)[k] = (float)rest[j];
        else
            ((double *)to)[k] = rest[j];
}

/* What an entry has to keep to. */
struct short_limits {
    uint64_t rows, columns;
    uint32_t points_mask;
    enum mirror mirror;
};

static struct short_limits limits_of(const struct market_form *form)
{
    return (struct short_limits){form->rows, form->columns, form->is_integer ? 0 : UINT32_MAX, form->pile->mirror};
}

SHORT_LINE_VECTORS static inline bool short_line_take(const struct short_limits *limits, const char *at, size_t length,
                                                      struct short_line *cut)
{
    return short_line_cut(at, length, limits->points_mask, cut) && cut->row < limits->rows &&
           cut->column < limits->columns && is_in_triangle(limits->mirror, cut->row, cut->column);
}

/* Takes lines of the batch up to the first that is not short. */
SHORT_LINE_VECTORS static void short_lines_put(const struct market_form *form, const char *text,
                                               struct short_lines *lines, struct pile_block *block)
{
    const struct short_limits limits = limits_of(form);
    uint32_t *row = block->row + block->count, *column = block->column + block->count;
    size_t count = 0, line = lines->line;
    for (size_t k = lines->read; k < lines->count; count++, line = lines->feed[k++] + 1) {
        struct short_line cut;
        if (!short_line_take(&limits, text + line, lines->feed[k] - line, &cut))
            break;
        row[count] = cut.row;
        column[count] = cut.column;
        lines->halves[count] = cut.halves;
        lines->power[count] = cut.power;
    }
    short_values_put(lines, count, form->pile->precision,
                     (char *)block->value + block->count * cell_size(form->pile->precision));
    block->count += (uint32_t)count;
    lines->read += count;
    lines->line = line;
}

/* The next line of the batch, if it is short, with the text of its value. */
SHORT_LINE_VECTORS static bool short_entry_take(const struct market_form *form, const char *text,
                                                const struct short_lines *lines, struct pile_entry *entry)
{
    const struct short_limits limits = limits_of(form);
    const char *at = text + lines->line, *end = text + lines->feed[lines->read];
    struct short_line cut;
    if (!short_line_take(&limits, at, (size_t)(end - at), &cut))
        return false;
    *entry = (struct pile_entry){
        .row = cut.row, .column = cut.column, .value = value_make(&cut), .text = at + cut.text, .end = end};
    return true;
}

/* As lines_parse. A line that is not short is read field by field, which does not go beyond a line feed. */
static fescue_status short_lines_parse(const struct market_form *form, const struct rest rest, struct pile_block *block,
                                       bool *is_plain)
{
    fescue_status status = FESCUE_OK;
    const size_t end = (size_t)(rest.end - rest.at);
    struct short_lines lines;
    size_t looked = 0;
    pthread_once(&shuffles_once, shuffles_compute);
    lines.count = lines.read = lines.line = 0;
    *is_plain = true;
    while (*is_plain && (lines.read < lines.count || looked < end)) {
        struct rest line = {rest.at + lines.line, rest.end};
        struct pile_entry entry;
        if (lines.read < lines.count) {
            *is_plain = (form->pile->keeps_texts && short_entry_take(form, rest.at, &lines, &entry)) ||
                        coordinate_take(form, &line, &entry);
            if (*is_plain)
                TRY(entry_put(form, block, &entry));
            lines.line = lines.feed[lines.read++] + 1;
        } else {
            lines.count = line_feeds_find(rest.at, &looked, end, BATCH, lines.feed);
            lines.read = 0;
        }
        if (!form->pile->keeps_texts)
            short_lines_put(form, rest.at, &lines, block);
    }
done:
    return status;
}

#endif

static fescue_status entries_parse(const struct market_form *form, struct rest rest, struct pile_block *block,
                                   bool *is_plain)
{
#if defined(__x86_64__)
    if (!form->is_array && form->vectors >= VECTORS_AVX2 && rest.end - rest.at <= UINT32_MAX)
        return short_lines_parse(form, rest, block, is_plain);
#endif
    return lines_parse(form, rest, block, is_plain);
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
    TRY(entries_parse(form, rest, *block, &is_plain));
    (*block)->ascends = is_plain && !form->is_array && pile_block_ascends(*block);
done:
    if (status != FESCUE_OK || !is_plain)
        pile_block_free(form->pile->context, block);
    return status;
}
