/* SPDX-License-Identifier: MIT
 *
 * What each observed value looked like in the input, so that it can be given back byte for byte.
 *
 * Most texts follow from the value: they are the shortest decimal that reads back as it, perhaps with zeros behind
 * ("12.50"). For these one byte is kept. Any other text ("+3", "1.0E2", seventeen digits of a value held in single
 * precision) is kept as it is, found by its rank among the odd ones.
 *
 * A text of at most 15 significant digits need not be tried out: no two such decimals read as the same double (C17
 * 5.2.4.2.2, DBL_DIG; 6 for float), so the shortest decimal of the value is this one, without the zeros at its end.
 */
#include "table/table_internal.h"

#include <assert.h>
#include <float.h>
#include <math.h>
#include <string.h>

enum { TEXT_SIZE = 32, RANK_STEP = 256 }; /* a rank is counted from the nearest multiple: 256 bytes are four lines */

struct texts {
    char decimal;
    uint8_t *code;    /* of each cell */
    uint64_t *before; /* odd texts before cell RANK_STEP * i */
    char **odd;       /* in the order of the cells */
    uint64_t odd_count;
    struct text_store *store;
};

/* ---- one text --------------------------------------------------------------------------------------------------- */

/* The text that a code other than TEXT_ODD stands for. 0 when it does not fit. */
static size_t text_make(double value, struct text_style style, enum text_code code, char text[TEXT_SIZE])
{
    size_t length = real_to_text(value, style.precision, text);
    char *point = memchr(text, '.', length);
    if (point != NULL)
        *point = style.decimal;
    if (code == TEXT_SHORTEST)
        return length;
    size_t has = point == NULL ? 0 : length - (size_t)(point + 1 - text);
    size_t wanted = (size_t)code - TEXT_DECIMALS;
    size_t added = (wanted > has ? wanted - has : 0) + (point == NULL);
    if (length + added >= TEXT_SIZE)
        return 0;
    memset(text + length, '0', added);
    if (point == NULL)
        text[length] = style.decimal;
    return length + added;
}

/* Digits of [-] whole [point decimals] in the plainest spelling: no leading zero but the one before a point. 0 when the
   text is something else. */
static size_t plain_digits(const char *text, size_t length, char decimal, size_t *decimals)
{
    const char *end = text + length;
    if (text < end && *text == '-')
        text++;
    const char *whole = text;
    while (text < end && *text >= '0' && *text <= '9')
        text++;
    size_t digits = (size_t)(text - whole);
    *decimals = 0;
    if (digits == 0 || (*whole == '0' && digits > 1))
        return 0;
    if (text == end)
        return digits;
    if (*text != decimal)
        return 0;
    *decimals = (size_t)(end - ++text);
    while (text < end && *text >= '0' && *text <= '9')
        text++;
    return text == end && *decimals > 0 ? digits + *decimals : 0;
}

enum text_code text_code_of(double value, struct text_style style, const char *text, size_t length)
{
    size_t decimals, digits = plain_digits(text, length, style.decimal, &decimals);
    size_t safe = style.precision == FESCUE_SINGLE ? FLT_DIG : DBL_DIG;
    enum text_code code = TEXT_SHORTEST;
    if (digits != 0 && decimals > 0 && decimals <= TEXT_MOST_DECIMALS)
        code = TEXT_DECIMALS + (enum text_code)decimals;
    /* real_to_text lays out smaller numbers with an exponent. */
    if (digits != 0 && digits <= safe && (value == 0 || fabs(value) >= 1e-4))
        return code;
    char made[TEXT_SIZE];
    size_t made_length = text_make(value, style, code, made);
    return made_length == length && memcmp(made, text, length) == 0 ? code : TEXT_ODD;
}

/* ---- odd ones --------------------------------------------------------------------------------------------------- */

fescue_status odd_texts_add(fescue_context *context, struct odd_texts *odd, const char *text, size_t length)
{
    fescue_status status = FESCUE_OK;
    if (odd->count == odd->capacity) {
        uint64_t capacity = odd->capacity < 64 ? 64 : odd->capacity + odd->capacity / 2;
        TRY(RESIZE(context, capacity, &odd->text));
        odd->capacity = capacity;
    }
    TRY(text_store_add(context, &odd->store, text, length, &odd->text[odd->count]));
    odd->count++;
done:
    return status;
}

void odd_texts_free(fescue_context *context, struct odd_texts *odd)
{
    GIVE(context, &odd->text);
    text_store_free(context, &odd->store);
    odd->count = odd->capacity = 0;
}

/* ---- in the order of the cells ---------------------------------------------------------------------------------- */

/* Entries mostly come in the order of the cells: the one after the last is tried before a search. */
static uint64_t cell_find(const struct half *rows, uint32_t row, uint32_t column, uint64_t guess)
{
    uint64_t low = rows->start[row], high = rows->start[row + 1];
    if (guess >= low && guess < high && rows->across[guess] == column)
        return guess;
    while (high - low > 1) {
        uint64_t middle = low + (high - low) / 2;
        if (rows->across[middle] <= column)
            low = middle;
        else
            high = middle;
    }
    assert(rows->across[low] == column);
    return low;
}

/* What the cell's code becomes when an entry with `code` is met. */
static uint8_t code_merge(uint8_t held, uint8_t code, enum fescue_duplicates duplicates)
{
    if (held == TEXT_UNKNOWN || duplicates == FESCUE_DUPLICATES_LAST)
        return code;
    return duplicates == FESCUE_DUPLICATES_FIRST ? held : TEXT_SHORTEST; /* a mean never had a text */
}

/* A mirror image with the opposite sign has the same number of decimals; an odd text has none to offer. */
static uint8_t code_mirror(const struct pile *pile, uint8_t code)
{
    return code == TEXT_ODD && pile->mirror == MIRROR_NEGATED ? TEXT_SHORTEST : code;
}

/* The cells that entry k of a block became: one, or two when the file left out its mirror image. */
static int entry_cells(const struct pile *pile, const struct half *rows, const struct pile_block *block, uint32_t k,
                       uint64_t at[2])
{
    uint32_t row = block->row[k], column = block->column[k];
    at[0] = cell_find(rows, row, column, at[0] + 1);
    if (pile->mirror == MIRROR_NONE || row == column)
        return 1;
    at[1] = cell_find(rows, column, row, at[1] + 1);
    return 2;
}

static void codes_collect(const struct pile *pile, const struct half *rows, enum fescue_duplicates duplicates,
                          uint8_t *code)
{
    uint64_t at[2] = {0};
    for (const struct pile_block *block = pile->first; block != NULL; block = block->next)
        for (uint32_t k = 0; k < block->count; k++) {
            int cells = entry_cells(pile, rows, block, k, at);
            code[at[0]] = code_merge(code[at[0]], block->code[k], duplicates);
            if (cells == 2)
                code[at[1]] = code_merge(code[at[1]], code_mirror(pile, block->code[k]), duplicates);
        }
}

static uint64_t odd_rank(const struct texts *texts, uint64_t k)
{
    uint64_t rank = texts->before[k / RANK_STEP];
    for (uint64_t i = k / RANK_STEP * RANK_STEP; i < k; i++)
        rank += texts->code[i] == TEXT_ODD;
    return rank;
}

static void odd_place(struct texts *texts, uint64_t k, char *text, enum fescue_duplicates duplicates)
{
    if (texts->code[k] != TEXT_ODD)
        return;
    char **place = &texts->odd[odd_rank(texts, k)];
    if (*place == NULL || duplicates == FESCUE_DUPLICATES_LAST)
        *place = text;
}

static void odd_collect(const struct pile *pile, const struct half *rows, enum fescue_duplicates duplicates,
                        struct texts *texts)
{
    uint64_t at[2] = {0};
    for (const struct pile_block *block = pile->first; block != NULL; block = block->next)
        for (uint32_t k = 0, next = 0; k < block->count; k++) {
            if (block->code[k] != TEXT_ODD)
                continue;
            char *text = block->odd.text[next++];
            int cells = entry_cells(pile, rows, block, k, at);
            odd_place(texts, at[0], text, duplicates);
            if (cells == 2 && code_mirror(pile, TEXT_ODD) == TEXT_ODD)
                odd_place(texts, at[1], text, duplicates);
        }
}

static uint64_t odd_count(struct texts *texts, uint64_t cells)
{
    uint64_t count = 0;
    for (uint64_t k = 0; k < cells; k++) {
        if (k % RANK_STEP == 0)
            texts->before[k / RANK_STEP] = count;
        count += texts->code[k] == TEXT_ODD;
    }
    return count;
}

fescue_status texts_create(struct pile *pile, const struct cells *cells, enum fescue_duplicates duplicates,
                           struct texts **out)
{
    fescue_status status;
    fescue_context *context = pile->context;
    struct texts *texts = NULL;
    *out = NULL;
    TRY(TAKE(context, 1, &texts));
    texts->decimal = pile->decimal;
    TRY(TAKE(context, cells->count, &texts->code));
    TRY(TAKE(context, cells->count / RANK_STEP + 1, &texts->before));
    memset(texts->code, TEXT_UNKNOWN, cells->count);
    codes_collect(pile, &cells->by_row, duplicates, texts->code);
    texts->odd_count = odd_count(texts, cells->count);
    TRY(TAKE(context, texts->odd_count, &texts->odd));
    if (texts->odd_count > 0)
        odd_collect(pile, &cells->by_row, duplicates, texts);
    for (struct pile_block *block = pile->first; block != NULL; block = block->next)
        text_store_join(&texts->store, &block->odd.store);
    *out = texts;
    texts = NULL;
done:
    texts_free(context, &texts);
    return status;
}

/* ---- taken apart, for the packed file --------------------------------------------------------------------------- */

void texts_take_apart(const struct texts *texts, struct texts_parts *parts)
{
    *parts = (struct texts_parts){
        .code = texts->code, .odd = texts->odd, .odd_count = texts->odd_count, .decimal = texts->decimal};
}

/* A text of a number: blanks around it and a decimal comma are what value_parse would not take. */
static bool odd_text_is(const char *text, double value, enum fescue_precision precision, char decimal)
{
    enum { MOST = 400 }; /* longer ones are not written by anybody, and not looked at */
    char copy[MOST];
    size_t length = strlen(text);
    double read;
    while (length > 0 && (text[length - 1] == ' ' || text[length - 1] == '\t'))
        length--;
    for (; length > 0 && (*text == ' ' || *text == '\t'); text++)
        length--;
    if (length > MOST)
        return strspn(text, "+-.,0123456789eE") == length;
    memcpy(copy, text, length);
    char *comma = decimal == ',' ? memchr(copy, ',', length) : NULL;
    if (comma != NULL)
        *comma = '.';
    if (value_parse(copy, copy + length, precision, &read) != NULL)
        return false;
    return precision == FESCUE_SINGLE ? (float)read == (float)value : read == value;
}

bool texts_are_sound(const struct texts_parts *parts, const struct cells *cells)
{
    uint64_t next = 0;
    for (uint64_t k = 0; k < cells->count; k++) {
        uint8_t code = parts->code[k];
        if (code == TEXT_ODD &&
            !odd_text_is(parts->odd[next++], cells_value(cells, &cells->by_row, k), cells->precision, parts->decimal))
            return false;
        if (code != TEXT_ODD && code > TEXT_DECIMALS + TEXT_MOST_DECIMALS)
            return false;
    }
    return true;
}

fescue_status texts_assemble(fescue_context *context, const struct texts_parts *parts, uint64_t cells,
                             struct texts **out)
{
    fescue_status status;
    struct texts *texts = NULL;
    TRY(TAKE(context, 1, &texts));
    texts->decimal = parts->decimal;
    texts->code = parts->code;
    TRY(TAKE(context, cells / RANK_STEP + 1, &texts->before));
    texts->odd_count = odd_count(texts, cells);
    TRY(TAKE(context, texts->odd_count, &texts->odd));
    if (texts->odd_count > 0)
        memcpy(texts->odd, parts->odd, texts->odd_count * sizeof *texts->odd);
    *out = texts;
    texts = NULL;
done:
    texts_forget_codes(texts);
    texts_free(context, &texts);
    return status;
}

void texts_forget_codes(struct texts *texts)
{
    if (texts != NULL)
        texts->code = NULL;
}

/* ---- asked for -------------------------------------------------------------------------------------------------- */

const char *texts_of(const struct texts *texts, const struct cells *cells, uint64_t k, char buffer[32], size_t *length)
{
    assert(k < cells->count);
    if (texts->code[k] == TEXT_ODD) {
        const char *text = texts->odd[odd_rank(texts, k)];
        *length = strlen(text);
        return text;
    }
    const struct text_style style = {cells->precision, texts->decimal};
    *length = text_make(cells_value(cells, &cells->by_row, k), style, texts->code[k], buffer);
    return buffer;
}

void texts_free(fescue_context *context, struct texts **texts)
{
    if (*texts == NULL)
        return;
    GIVE(context, &(*texts)->code);
    GIVE(context, &(*texts)->before);
    GIVE(context, &(*texts)->odd);
    text_store_free(context, &(*texts)->store);
    GIVE(context, texts);
}
