/* SPDX-License-Identifier: MIT
 *
 * Matrix Market: Boisvert, Pozo, Remington 1996, "The Matrix Market exchange formats: initial design", NISTIR 5935.
 *
 *     %%MatrixMarket matrix coordinate|array  real|double|integer  general|symmetric|skew-symmetric
 *     % comments, blank lines
 *     rows columns entries           (array: rows columns)
 *     row column value               one entry a line, from 1 (array: one value a line, column by column)
 *
 * A symmetric file holds the lower triangle (with skew symmetry without its diagonal), the rest is its mirror image. In
 * the array form a value that reads nan is a hole; in the coordinate form a hole is an entry that is not there.
 *
 * Chunks of entries are parsed by all workers (market_chunk.c) and taken in their order; a chunk that holds anything
 * but plain entries is read here, line by line.
 *
 * What the header promises is checked against what comes, and never believed before: nothing is allocated by it but the
 * offsets of the lines, and these only when the file held entries enough to make so many lines plausible.
 */
#include "table/table_internal.h"

#include <math.h>
#include <string.h>
#include <strings.h>

/* Lines that a header may promise without entries to show for it (their offsets take 32 MB), and how many more each
   entry makes plausible. */
enum { FREE_LINES = 1 << 22, LINES_AN_ENTRY = 64 };

struct token {
    const char *text, *end;
};

/* Where the value of the array form that is read next belongs. */
struct array_place {
    uint64_t row, column;
};

struct market {
    struct stream *stream;
    struct pile pile;
    struct market_form form;
    uint64_t entries, read;  /* promised by the header; read so far */
    struct array_place next; /* array form */
    struct chunk *chunk;     /* whose lines are read; NULL: of the header */
    struct line line;
    struct token field[8]; /* of the line, as many as there are */
    int fields;            /* one more than the array holds when there are more */
};

enum { MOST_FIELDS = sizeof((struct market *)0)->field / sizeof(struct token) };

static bool is_blank(char c)
{
    return c == ' ' || c == '\t';
}

/* Splits the line at blanks. */
static inline void fields_split(struct market *market)
{
    const char *at = market->line.text, *end = market->line.end;
    market->fields = 0;
    for (;;) {
        while (at < end && is_blank(*at))
            at++;
        if (at == end)
            return;
        if (market->fields++ == MOST_FIELDS)
            return;
        struct token *token = &market->field[market->fields - 1];
        token->text = at;
        while (at < end && !is_blank(*at))
            at++;
        token->end = at;
    }
}

/* The next line that says something: neither blank nor a comment. fields is 0 at the end of the chunk, or file. */
static fescue_status line_next(struct market *market)
{
    do {
        fescue_status status = market->chunk != NULL ? chunk_line(market->stream, market->chunk, &market->line)
                                                     : stream_line(market->stream, &market->line);
        if (status != FESCUE_OK)
            return status;
        market->fields = 0;
        if (market->line.text == NULL)
            return FESCUE_OK;
        if (market->line.text == market->line.end || *market->line.text != '%')
            fields_split(market);
    } while (market->fields == 0);
    return FESCUE_OK;
}

/* Digits alone, below 10^19. */
static inline bool count_parse(const struct token *token, uint64_t *count)
{
    enum { MOST_DIGITS = 19 };
    if (token->end - token->text > MOST_DIGITS)
        return false;
    *count = 0;
    for (const char *c = token->text; c < token->end; c++) {
        if ((unsigned char)(*c - '0') > 9)
            return false;
        *count = *count * 10 + (uint64_t)(*c - '0');
    }
    return true;
}

/* ---- header ----------------------------------------------------------------------------------------------------- */

static const char banner[] = "%%MatrixMarket";

bool is_matrix_market(const char *text, size_t length)
{
    return length >= sizeof banner - 1 && strncasecmp(text, banner, sizeof banner - 1) == 0;
}

static bool token_is(const struct token *token, const char *word)
{
    size_t length = strlen(word);
    return (size_t)(token->end - token->text) == length && strncasecmp(token->text, word, length) == 0;
}

static fescue_status form_read(struct market *market)
{
    const struct token *form = &market->field[2];
    market->form.is_array = token_is(form, "array");
    if (!market->form.is_array && !token_is(form, "coordinate"))
        return BAD_LINE(market->stream, "'%.*s' was found, 'coordinate' or 'array' was expected",
                        QUOTE(form->text, form->end));
    return FESCUE_OK;
}

static fescue_status kind_read(struct market *market)
{
    const struct token *kind = &market->field[3];
    if (token_is(kind, "complex"))
        return BAD_LINE(market->stream, "complex values were found, real ones were expected: a table is filled with "
                                        "real numbers; real and imaginary parts can be filled as two tables");
    if (token_is(kind, "pattern"))
        return BAD_LINE(market->stream, "a pattern was found, values were expected: it says where cells are and not "
                                        "what they hold, so there is nothing to fill from");
    market->form.is_integer = token_is(kind, "integer");
    if (!market->form.is_integer && !token_is(kind, "real") && !token_is(kind, "double"))
        return BAD_LINE(market->stream, "'%.*s' was found, 'real' or 'integer' was expected",
                        QUOTE(kind->text, kind->end));
    return FESCUE_OK;
}

static fescue_status symmetry_read(struct market *market)
{
    const struct token *symmetry = &market->field[4];
    if (token_is(symmetry, "symmetric"))
        market->pile.mirror = MIRROR_SAME;
    else if (token_is(symmetry, "skew-symmetric"))
        market->pile.mirror = MIRROR_NEGATED;
    else if (!token_is(symmetry, "general"))
        return BAD_LINE(market->stream, "'%.*s' was found, 'general', 'symmetric' or 'skew-symmetric' was expected",
                        QUOTE(symmetry->text, symmetry->end));
    return FESCUE_OK;
}

static fescue_status banner_read(struct market *market)
{
    fescue_status status;
    TRY(stream_line(market->stream, &market->line));
    fields_split(market);
    if (market->fields != 5 || !token_is(&market->field[0], banner) || !token_is(&market->field[1], "matrix")) {
        status =
            BAD_LINE(market->stream,
                     "'%.*s' was found, '%%%%MatrixMarket matrix coordinate real general' or the like was expected",
                     QUOTE(market->line.text, market->line.end));
        goto done;
    }
    TRY(form_read(market));
    TRY(kind_read(market));
    TRY(symmetry_read(market));
done:
    return status;
}

static fescue_status sides_check(const struct market *market)
{
    if (market->form.rows == 0 || market->form.columns == 0)
        return BAD_LINE(market->stream, "a table of %" PRIu64 " rows and %" PRIu64 " columns has no cells",
                        market->form.rows, market->form.columns);
    if (market->form.rows > TABLE_MOST_LINES || market->form.columns > TABLE_MOST_LINES)
        return BAD_LINE(market->stream,
                        "%" PRIu64 " rows and %" PRIu64 " columns were found, at most %" PRIu32 " of each are possible",
                        market->form.rows, market->form.columns, TABLE_MOST_LINES);
    if (market->pile.mirror != MIRROR_NONE && market->form.rows != market->form.columns)
        return BAD_LINE(market->stream,
                        "%" PRIu64 " rows and %" PRIu64
                        " columns were found, a symmetric table has as many rows as columns",
                        market->form.rows, market->form.columns);
    return FESCUE_OK;
}

/* The number of values in the array form: all, or a triangle. Below 2^64, since sides are below 2^32. */
static uint64_t array_entries(const struct market *market)
{
    uint64_t n = market->form.rows;
    switch (market->pile.mirror) {
    case MIRROR_SAME:
        return n % 2 == 0 ? n / 2 * (n + 1) : (n + 1) / 2 * n;
    case MIRROR_NEGATED:
        return n % 2 == 0 ? n / 2 * (n - 1) : (n - 1) / 2 * n;
    default:
        return n * market->form.columns;
    }
}

static fescue_status sizes_read(struct market *market)
{
    fescue_status status;
    int expected = market->form.is_array ? 2 : 3;
    TRY(line_next(market));
    if (market->fields == 0) {
        status = BAD_LINE(market->stream, "the file ends here, a line with the sizes of the table was expected");
        goto done;
    }
    if (market->fields != expected || !count_parse(&market->field[0], &market->form.rows) ||
        !count_parse(&market->field[1], &market->form.columns) ||
        (!market->form.is_array && !count_parse(&market->field[2], &market->entries))) {
        status = BAD_LINE(
            market->stream, "'%.*s' was found, %s were expected", QUOTE(market->line.text, market->line.end),
            market->form.is_array ? "the numbers of rows and columns" : "the numbers of rows, columns and entries");
        goto done;
    }
    TRY(sides_check(market));
    if (market->form.is_array)
        market->entries = array_entries(market);
    market->pile.keeps_lines = !market->form.is_array;
    pile_told_size(&market->pile, market->form.rows, market->form.columns);
    if (!market->form.is_array)
        TRY(ascent_open(&market->pile, market->form.rows, market->entries, stream_text_size(market->stream)));
done:
    return status;
}

/* ---- entries ---------------------------------------------------------------------------------------------------- */

static fescue_status value_refuse(const struct market *market, const struct token *token, const char *fault)
{
    return BAD_LINE(market->stream, "the value '%.*s' %s", QUOTE(token->text, token->end), fault);
}

/* A sign and digits alone, as a header that says integer promises. */
static bool is_integer_text(const struct token *token)
{
    const char *c = token->text;
    if (c < token->end && (*c == '-' || *c == '+'))
        c++;
    while (c < token->end && (unsigned char)(*c - '0') <= 9)
        c++;
    return c == token->end;
}

static fescue_status value_read(const struct market *market, const struct token *token, double *value)
{
    const char *fault = value_parse(token->text, token->end, market->pile.precision, value);
    if (fault != NULL)
        return value_refuse(market, token, fault);
    if (market->form.is_integer && !is_integer_text(token))
        return value_refuse(market, token, "is not an integer, as the header promises");
    return FESCUE_OK;
}

static fescue_status entry_add(struct market *market, uint64_t row, uint64_t column, const struct token *token)
{
    struct pile_entry entry = {.row = (uint32_t)row,
                               .column = (uint32_t)column,
                               .line = stream_line_number(market->stream),
                               .text = token->text,
                               .end = token->end};
    fescue_status status = value_read(market, token, &entry.value);
    return status == FESCUE_OK ? pile_add(&market->pile, &entry) : status;
}

/* A number from 1 to `most`. */
static fescue_status place_read(const struct market *market, int field, const char *side, uint64_t most,
                                uint64_t *place)
{
    const struct token *token = &market->field[field];
    if (count_parse(token, place) && *place >= 1 && *place <= most)
        return FESCUE_OK;
    if (token->text < token->end && is_integer_text(token))
        return BAD_LINE(market->stream, "%s %.*s is outside 1..%" PRIu64, side, QUOTE(token->text, token->end), most);
    return BAD_LINE(market->stream, "'%.*s' was found, the number of a %s was expected", QUOTE(token->text, token->end),
                    side);
}

static fescue_status triangle_check(const struct market *market, uint64_t row, uint64_t column)
{
    if (row < column)
        return BAD_LINE(market->stream,
                        "row %" PRIu64 ", column %" PRIu64
                        " lies above the diagonal; a symmetric file holds the lower triangle alone",
                        row, column);
    if (row == column && market->pile.mirror == MIRROR_NEGATED)
        return BAD_LINE(market->stream,
                        "row %" PRIu64 ", column %" PRIu64
                        " lies on the diagonal, which is zero in a skew-symmetric table and left out",
                        row, column);
    return FESCUE_OK;
}

static fescue_status coordinate_entry(struct market *market)
{
    fescue_status status;
    uint64_t row, column;
    if (market->fields != 3) {
        status = BAD_LINE(market->stream, "'%.*s' was found, row, column and value were expected",
                          QUOTE(market->line.text, market->line.end));
        goto done;
    }
    TRY(place_read(market, 0, "row", market->form.rows, &row));
    TRY(place_read(market, 1, "column", market->form.columns, &column));
    if (market->pile.mirror != MIRROR_NONE)
        TRY(triangle_check(market, row, column));
    if (is_nan_text(market->field[2].text, market->field[2].end)) {
        status = value_refuse(market, &market->field[2], "is not a number; in this form a hole is left out");
        goto done;
    }
    TRY(entry_add(market, row - 1, column - 1, &market->field[2]));
done:
    return status;
}

static void array_place_next(struct market *market)
{
    struct array_place *place = &market->next;
    if (++place->row < market->form.rows)
        return;
    place->column++;
    place->row = 0;
    if (market->pile.mirror != MIRROR_NONE)
        place->row = place->column + (market->pile.mirror == MIRROR_NEGATED);
}

static fescue_status array_entry(struct market *market)
{
    const struct token *token = &market->field[0];
    if (market->fields != 1)
        return BAD_LINE(market->stream, "'%.*s' was found, one value a line was expected",
                        QUOTE(market->line.text, market->line.end));
    if (is_nan_text(token->text, token->end))
        return FESCUE_OK;
    return entry_add(market, market->next.row, market->next.column, token);
}

/* Reads the chunk line by line. */
static fescue_status entries_read(struct market *market)
{
    fescue_status status;
    for (;; market->read++) {
        TRY(line_next(market));
        if (market->fields == 0)
            return FESCUE_OK;
        if (market->read == market->entries)
            return BAD_LINE(market->stream,
                            "'%.*s' was found after all %" PRIu64
                            " entries that the header promises, the end of the file was expected",
                            QUOTE(market->line.text, market->line.end), market->entries);
        TRY(market->form.is_array ? array_entry(market) : coordinate_entry(market));
        if (market->form.is_array)
            array_place_next(market);
    }
done:
    return status;
}

/* ---- entries by chunks ------------------------------------------------------------------------------------------ */

static void entry_move(const struct pile *pile, struct pile_block *block, uint32_t from, uint32_t to)
{
    size_t size = cell_size(pile->precision);
    memmove((char *)block->value + to * size, (char *)block->value + from * size, size);
    if (block->code != NULL)
        block->code[to] = block->code[from];
}

/* Gives the values of the array form their places, and takes out the holes. */
static void array_places_give(struct market *market, struct pile_block *block)
{
    uint32_t kept = 0;
    for (uint32_t k = 0; k < block->count; k++, array_place_next(market)) {
        bool is_hole = market->pile.precision == FESCUE_SINGLE ? isnan(((const float *)block->value)[k])
                                                               : isnan(((const double *)block->value)[k]);
        if (is_hole)
            continue;
        entry_move(&market->pile, block, k, kept);
        block->row[kept] = (uint32_t)market->next.row;
        block->column[kept++] = (uint32_t)market->next.column;
    }
    block->count = kept;
}

static fescue_status chunk_parse(void *data, size_t worker, const struct chunk *chunk, struct pile_block **block)
{
    const struct market *market = data;
    return market_parse(&market->form, worker, chunk, block);
}

static fescue_status chunk_finish(void *data, size_t worker, struct chunk *chunk, struct pile_block **block,
                                  bool *is_left)
{
    struct market *market = data;
    (void)worker, (void)is_left;
    market->chunk = chunk;
    if (*block == NULL || (*block)->count > market->entries - market->read)
        return entries_read(market);
    const uint64_t lines = (*block)->count;
    const struct line_run run = {0, stream_line_number(market->stream) + 1};
    if (market->form.is_array)
        array_places_give(market, *block);
    stream_lines_skip(market->stream, lines);
    market->read += lines;
    return pile_take(&market->pile, block, &run, 1);
}

static void block_settle(void *data, const struct pile_block *block)
{
    const struct market *market = data;
    ascent_fill(&market->pile, block);
}

static fescue_status chunks_read(struct market *market)
{
    const struct chunk_reader reader = {market, chunk_parse, chunk_finish, block_settle};
    fescue_context *context = market->pile.context;
    const size_t workers = team_workers(context);
    fescue_status status;
    TRY(TAKE(context, workers, &market->form.room));
    market->next.row = market->pile.mirror == MIRROR_NEGATED;
    TRY(stream_parse(market->stream, &reader));
    if (market->read < market->entries)
        status = BAD_LINE(market->stream,
                          "the file ends here after %" PRIu64 " of the %" PRIu64 " entries that its header promises",
                          market->read, market->entries);
done:
    for (size_t k = 0; market->form.room != NULL && k < workers; k++)
        pile_room_join(&market->pile, &market->form.room[k]);
    GIVE(context, &market->form.room);
    return status;
}

/* Offsets of lines take memory by what the header promises: only as much as the entries make plausible. */
static fescue_status promise_check(const struct market *market)
{
    uint64_t most = market->form.rows > market->form.columns ? market->form.rows : market->form.columns;
    if (most <= FREE_LINES || (most - FREE_LINES) / LINES_AN_ENTRY <= market->pile.count)
        return FESCUE_OK;
    return FAIL(market->pile.context, FESCUE_BAD_DATA,
                "%s: the header promises %" PRIu64 " rows and %" PRIu64 " columns, but only %" PRIu64
                " cells are observed: nearly every one of them would be empty",
                stream_name(market->stream), market->form.rows, market->form.columns, market->pile.count);
}

fescue_status matrix_market_read(struct stream *stream, const struct table_reading *reading, fescue_table *table)
{
    fescue_status status;
    struct market market = {.stream = stream};
    market.form.pile = &market.pile;
    market.form.vectors = vectors_choose();
    pile_open(table->context, reading, &market.pile);
    TRY(banner_read(&market));
    TRY(sizes_read(&market));
    TRY(chunks_read(&market));
    TRY(promise_check(&market));
    table->look.shape = market.form.is_array ? SHAPE_MM_ARRAY : SHAPE_MM_COORDINATE;
    table->row_labels.count = (uint32_t)market.form.rows;
    table->column_labels.count = (uint32_t)market.form.columns;
    TRY(pile_build(&market.pile, stream, reading->duplicates, table));
done:
    pile_free(&market.pile);
    return status;
}
