/* SPDX-License-Identifier: MIT
 *
 * A chunk of long text, read at one go and beside other chunks.
 *
 * Only plain records are known here: three fields, each without quotes or in one pair of them, a value that is a number
 * or a hole; and blank lines. At anything else the chunk is left to long.c, which reads it record by record, when what
 * stands before it is known; so what is said of a fault, and where, is said in one place. What is accepted here is
 * accepted there, with the same value. A quoted field that goes on in the next line makes its chunk no plain one, so
 * that the next chunk, if it is ever finished here, does begin with a record.
 *
 * Rows and columns are numbered as they come first in the text, which no chunk knows. A worker numbers labels as it
 * meets them itself (lexicon.h); when the turn of a chunk has come, its new labels are entered into the lists of the
 * table in the order of the text, and the worker's numbers become the table's. So the numbering does not depend on the
 * number of workers. Entering takes a search for each label that is new to a worker, the rest is one jump a cell.
 *
 * Every line but the last of a file ends with a line feed, so no loop over a field looks for the end of the chunk. A
 * chunk without one at its end is left.
 */
#include "table/digits.h"
#include "table/lexicon.h"

#include <math.h>

enum side { SIDE_ROW, SIDE_COLUMN, SIDES };

/* Records are cut a batch at a time, and then their labels are looked for: by then the slots have come from memory. */
enum { BATCH = 32 };
struct cut_record {
    struct lexicon_label label[SIDES];
    bool is_same[SIDES]; /* as in the record before: files have runs of the same label */
    bool is_hole;
    struct pile_entry entry;
};

struct long_worker {
    struct pile pile; /* what blocks are made for: how the pile of all was when this worker saw it last */
    struct pile_room room;
    struct lexicon lexicon[SIDES];
    struct line_run *runs; /* of the block */
    size_t run_count, run_capacity;
    uint64_t lines; /* of the chunk, so far */
    bool is_plain;
    struct cut_record batch[BATCH];
    size_t cut; /* of the batch, so far */
    struct cut_label {
        const struct lexicon_label *label;
        uint32_t number;
    } last[SIDES]; /* of the record that was cut last, in the batch or `none`, and the number of what was found last */
    struct lexicon_label none; /* of no length */
};

/* Where a worker stands in its chunk. */
struct place {
    struct long_worker *worker;
    const struct delimited *delimited;
    const char *at, *end;
    char separator, point;
};

/* ---- fields ----------------------------------------------------------------------------------------------------- */

/* A bit in the bytes of the word that equal the byte, right up to the first that does. */
static inline uint64_t bytes_equal(uint64_t word, unsigned char byte)
{
    static const uint64_t ones = 0x0101010101010101;
    word ^= ones * byte;
    return (word - ones) & ~word & ones * 0x80;
}

/* The first of the closing character, a quote and a line feed. */
static inline const char *field_end_find(const char *at, char closing)
{
    for (;; at += sizeof(uint64_t)) {
        uint64_t word = lexicon_word(at);
        uint64_t found = bytes_equal(word, (unsigned char)closing) | bytes_equal(word, '"') | bytes_equal(word, '\n');
        if (found != 0)
            return at + __builtin_ctzll(found) / 8;
    }
}

/* Cuts off a label, and the separator behind it. */
static inline void label_cut(struct place *place, enum side side, struct cut_record *record)
{
    struct long_worker *worker = place->worker;
    const struct lexicon_label *last = worker->last[side].label;
    const bool quoted = *place->at == '"';
    const char closing = quoted ? '"' : place->separator, *text = place->at + quoted, *end = text + last->length;
    record->is_same[side] = last->length > 0 && place->end - text > (ptrdiff_t)last->length &&
                            lexicon_label_is(last, text) && *end == closing;
    if (!record->is_same[side]) {
        end = field_end_find(text, closing);
        worker->is_plain = end > text && *end == closing && end - text <= INT32_MAX;
        if (!worker->is_plain)
            return;
        lexicon_label_make(&worker->lexicon[side], text, (uint32_t)(end - text), &record->label[side]);
        worker->last[side].label = &record->label[side]; /* nobody writes there before there is another one */
        lexicon_expect(&worker->lexicon[side], &record->label[side]);
    }
    worker->is_plain = end[quoted] == place->separator;
    place->at = end + quoted + 1;
}

/* The number of a label that was cut off. */
static inline fescue_status label_find(struct place *place, enum side side, const struct cut_record *record,
                                       uint32_t *number)
{
    fescue_status status = FESCUE_OK;
    struct cut_label *last = &place->worker->last[side];
    bool is_new;
    if (!record->is_same[side]) {
        const struct lexicon_label *label = &record->label[side];
        TRY(lexicon_find_or_add(place->delimited->table->context, &place->worker->lexicon[side], label, &last->number,
                                &is_new));
        if (is_new && utf8_fault(label->text, label->text + label->length) != NULL)
            place->worker->is_plain = false;
    }
    *number = last->number;
done:
    return status;
}

/* The line feed at `at`, or the one behind a carriage return; NULL when there is none. */
static inline const char *line_end_at(const char *at)
{
    at += *at == '\r';
    return *at == '\n' ? at : NULL;
}

/* A number that is no short one, or a hole. */
static bool long_value_read(const struct place *place, struct field field, double *value, bool *is_a_hole)
{
    const size_t length = (size_t)(field.end - field.text);
    const bool is_semicolon = place->separator == ';';
    char sign = memchr(field.text, ',', length) != NULL ? ',' : memchr(field.text, '.', length) != NULL ? '.' : 0;
    *is_a_hole = is_hole(&field);
    if (*is_a_hole)
        return true;
    if (is_semicolon && sign != 0 && sign != place->delimited->decimal)
        return false;
    return field_number(&field, is_semicolon, value) && isfinite(*value) &&
           (place->worker->pile.precision != FESCUE_SINGLE || isfinite((float)*value));
}

/* The value, and the end of the line behind it. */
static inline void value_take(struct place *place, struct pile_entry *entry, bool *is_a_hole)
{
    const bool quoted = *place->at == '"';
    const char *line_end;
    entry->text = place->at + quoted;
    entry->end = short_value_read(entry->text, place->point, &entry->value);
    *is_a_hole = false;
    if (entry->end == NULL || (quoted && *entry->end != '"') || line_end_at(entry->end + quoted) == NULL) {
        entry->end = field_end_find(entry->text, quoted ? '"' : place->separator);
        entry->end -= !quoted && *entry->end == '\n' && entry->end > entry->text && entry->end[-1] == '\r';
        place->worker->is_plain =
            (!quoted || *entry->end == '"') &&
            long_value_read(place, (struct field){entry->text, entry->end}, &entry->value, is_a_hole);
    }
    line_end = line_end_at(entry->end + quoted);
    place->worker->is_plain = place->worker->is_plain && line_end != NULL;
    if (line_end != NULL)
        place->at = line_end + 1;
}

/* ---- chunks ----------------------------------------------------------------------------------------------------- */

static fescue_status run_begin(fescue_context *context, struct long_worker *worker, uint32_t entry)
{
    fescue_status status = FESCUE_OK;
    if (worker->run_count == worker->run_capacity) {
        size_t capacity = worker->run_capacity < 16 ? 16 : 2 * worker->run_capacity;
        TRY(RESIZE(context, capacity, &worker->runs));
        worker->run_capacity = capacity;
    }
    worker->runs[worker->run_count++] = (struct line_run){entry, worker->lines};
done:
    return status;
}

/* Cuts the next line, which is not blank. */
static inline void record_cut(struct place *place)
{
    struct long_worker *worker = place->worker;
    struct cut_record *record = &worker->batch[worker->cut++];
    label_cut(place, SIDE_ROW, record);
    if (worker->is_plain)
        label_cut(place, SIDE_COLUMN, record);
    if (worker->is_plain)
        value_take(place, &record->entry, &record->is_hole);
}

static inline fescue_status record_add(struct place *place, struct cut_record *record, struct pile_block *block)
{
    fescue_status status;
    struct long_worker *worker = place->worker;
    TRY(label_find(place, SIDE_ROW, record, &record->entry.row));
    TRY(label_find(place, SIDE_COLUMN, record, &record->entry.column));
    worker->lines++;
    if (record->is_hole)
        status = run_begin(place->delimited->table->context, worker, block->count);
    else if (worker->pile.keeps_texts)
        status = pile_block_add(&worker->pile, block, &record->entry);
    else
        pile_block_put(&worker->pile, block, &record->entry);
done:
    return status;
}

/* A batch of records, up to a blank line. */
static fescue_status batch_take(struct place *place, struct pile_block *block)
{
    fescue_status status = FESCUE_OK;
    struct long_worker *worker = place->worker;
    worker->cut = 0;
    while (worker->cut < BATCH && worker->is_plain && place->at < place->end && line_end_at(place->at) == NULL)
        record_cut(place);
    for (size_t k = 0; k < worker->cut && worker->is_plain; k++)
        TRY(record_add(place, &worker->batch[k], block));
done:
    return status;
}

static fescue_status lines_parse(struct place *place, struct pile_block *block)
{
    fescue_status status;
    struct long_worker *worker = place->worker;
    TRY(run_begin(place->delimited->table->context, worker, 0));
    while (place->at < place->end && worker->is_plain) {
        const char *blank = line_end_at(place->at);
        if (blank == NULL) {
            TRY(batch_take(place, block));
            continue;
        }
        worker->lines++;
        place->at = blank + 1;
        TRY(run_begin(place->delimited->table->context, worker, block->count));
    }
done:
    return status;
}

static fescue_status chunk_parse(void *data, size_t number, const struct chunk *chunk, struct pile_block **block)
{
    fescue_status status;
    const struct long_chunks *chunks = data;
    const struct delimited *delimited = chunks->delimited;
    struct long_worker *worker = &chunks->worker[number];
    fescue_context *context = delimited->table->context;
    struct place place = {worker, delimited, chunk->text + chunk->at, chunk->text + chunk->end, delimited->separator,
                          '.'};
    if (delimited->separator == ';') /* none is known before the first that comes */
        place.point = delimited->decimal;
    size_t lines = lines_count(place.at, place.end);
    *block = NULL;
    worker->lines = worker->run_count = 0;
    worker->last[SIDE_ROW].label = worker->last[SIDE_COLUMN].label = &worker->none;
    worker->is_plain = place.at == place.end || (place.end[-1] == '\n' && !chunk->has_zero && lines <= UINT32_MAX);
    if (!worker->is_plain)
        return FESCUE_OK;
    for (int side = 0; side < SIDES; side++)
        TRY(lexicon_begin(context, &worker->lexicon[side]));
    TRY(pile_block_create(&worker->pile, &worker->room, (uint32_t)lines, block));
    TRY(lines_parse(&place, *block));
done:
    if (status != FESCUE_OK || !worker->is_plain)
        pile_block_free(context, block);
    return status;
}

/* The worker's numbers of rows and columns become the table's. */
static void block_renumber(const struct long_worker *worker, struct pile_block *block)
{
    const uint32_t *row = worker->lexicon[SIDE_ROW].position, *column = worker->lexicon[SIDE_COLUMN].position;
    for (uint32_t k = 0; k < block->count; k++) {
        block->row[k] = row[block->row[k]];
        block->column[k] = column[block->column[k]];
    }
}

static fescue_status chunk_finish(void *data, size_t number, struct chunk *chunk, struct pile_block **block,
                                  bool *is_left)
{
    fescue_status status;
    struct long_chunks *chunks = data;
    struct delimited *delimited = chunks->delimited;
    struct long_worker *worker = &chunks->worker[number];
    fescue_context *context = delimited->table->context;
    const uint64_t first = stream_line_number(delimited->stream) + 1;
    (void)chunk;
    *is_left = *block == NULL;
    if (*is_left)
        return FESCUE_OK;
    TRY(lexicon_settle(context, &worker->lexicon[SIDE_ROW], &delimited->rows));
    TRY(lexicon_settle(context, &worker->lexicon[SIDE_COLUMN], &delimited->columns));
    pile_told_size(&delimited->pile, delimited->rows.labels.count, delimited->columns.labels.count);
    worker->pile.keeps_texts = delimited->pile.keeps_texts;
    block_renumber(worker, *block);
    for (size_t k = 0; k < worker->run_count; k++)
        worker->runs[k].line += first;
    TRY(pile_take(&delimited->pile, block, worker->runs, worker->run_count));
    stream_lines_skip(delimited->stream, worker->lines);
done:
    return status;
}

/* ---- all of them ------------------------------------------------------------------------------------------------ */

fescue_status long_chunks_open(struct delimited *delimited, struct long_chunks *chunks)
{
    fescue_status status;
    fescue_context *context = delimited->table->context;
    *chunks = (struct long_chunks){.delimited = delimited, .workers = team_workers(context)};
    TRY(TAKE(context, chunks->workers, &chunks->worker));
    for (size_t k = 0; k < chunks->workers; k++)
        for (int side = 0; side < SIDES; side++)
            lexicon_open(&chunks->worker[k].lexicon[side]);
done:
    return status;
}

fescue_status long_chunks_read(struct long_chunks *chunks)
{
    const struct chunk_reader reader = {chunks, chunk_parse, chunk_finish, NULL};
    const struct pile *pile = &chunks->delimited->pile;
    for (size_t k = 0; k < chunks->workers; k++)
        chunks->worker[k].pile = (struct pile){.context = pile->context,
                                               .precision = pile->precision,
                                               .decimal = pile->decimal,
                                               .keeps_texts = pile->keeps_texts};
    return stream_parse(chunks->delimited->stream, &reader);
}

void long_chunks_close(struct long_chunks *chunks)
{
    if (chunks->worker == NULL)
        return;
    fescue_context *context = chunks->delimited->table->context;
    for (size_t k = 0; k < chunks->workers; k++) {
        for (int side = 0; side < SIDES; side++)
            lexicon_free(context, &chunks->worker[k].lexicon[side]);
        GIVE(context, &chunks->worker[k].runs);
        pile_room_join(&chunks->delimited->pile, &chunks->worker[k].room);
    }
    GIVE(context, &chunks->worker);
}
