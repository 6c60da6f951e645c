/* SPDX-License-Identifier: MIT
 *
 * The inside of the table folder.
 */
#ifndef FESCUE_TABLE_INTERNAL_H
#define FESCUE_TABLE_INTERNAL_H

#include "table/table.h"

#include <inttypes.h>

/* Rows and columns are counted in 32 bits, and one number is kept free to mean "none". */
#define TABLE_MOST_LINES (UINT32_MAX - 1)

/* ---- text_store: characters that stay where they are ----------------------------------------------------------- */

/* Many short texts in few blocks; a text never moves while the store lives, so pointers into it stay good. */
struct text_store {
    struct text_store *older;
    size_t used, size;
    char bytes[];
};
/* New NUL-terminated copy of `length` bytes; *store is created at the first call. */
fescue_status text_store_add(fescue_context *context, struct text_store **store, const char *text, size_t length,
                             char **out);
/* Moves the texts of the other store, which is empty then. */
void text_store_join(struct text_store **store, struct text_store **other);
void text_store_free(fescue_context *context, struct text_store **store);

/* ---- labels ------------------------------------------------------------------------------------------------------ */

/* A growing list of labels: capacity belongs to labels->text. */
struct label_list {
    struct labels labels;
    uint32_t capacity, last;   /* last: found last; files have runs of the same label */
    struct label_index *index; /* NULL: positions are not looked up */
};
/* Appends without looking whether it is there already. The index, when there is one, learns it. */
fescue_status label_list_add(fescue_context *context, struct label_list *list, const char *text, size_t length);
/* The position of a label, which is added when it is new. Creates the index at the first call. */
fescue_status label_list_find_or_add(fescue_context *context, struct label_list *list, const char *text, size_t length,
                                     uint32_t *position);
/* Hands the labels over to *labels; the list is empty then. */
void label_list_finish(fescue_context *context, struct label_list *list, struct labels *labels);
void label_list_free(fescue_context *context, struct label_list *list);
void labels_free(fescue_context *context, struct labels *labels);

/* ---- instants ---------------------------------------------------------------------------------------------------- */

struct instant {
    int64_t second; /* since 1970-01-01T00:00, in UTC where the label has an offset, else by the clock on the wall */
    int32_t nano;   /* 0 .. 999999999 */
    bool has_offset;
};
/* Whether the whole text is an instant as ISO 8601 writes it (time_label.c). */
bool time_label_parse(const char *text, const char *end, struct instant *instant);
/* Clocks on the wall that were set back (time_clock.c): moves the seconds of such lines so that they are in order, and
   counts the times when it happened. Lines are in the order of the file; step: the usual spacing in seconds. */
uint32_t time_clock_mend(struct instant *instants, uint32_t count, double step);

/* ---- halves: one direction of the store ---------------------------------------------------------------------------
 */

size_t cell_size(enum fescue_precision precision); /* bytes of a value */
/* Room for `count` cells; everything zero. */
fescue_status half_open(fescue_context *context, uint32_t lines, uint32_t length, uint64_t count,
                        enum fescue_precision precision, struct half *half);

/* What a symmetric file leaves out: the other triangle, with the same or the opposite sign. */
enum mirror { MIRROR_NONE, MIRROR_SAME, MIRROR_NEGATED };
/* Cells on their way into a half: `line` of each, and the position `across` it. With a mirror they are the images of
   the cells of a file: those off the diagonal, with that sign. */
struct cell_run {
    const uint32_t *line, *across;
    const void *value; /* of the half's precision */
    uint64_t count;
    enum mirror mirror;
};
/* Fills a half that is open. Cells of the same line keep the order in which they come. */
fescue_status half_sort(fescue_context *context, const struct cell_run *runs, size_t count,
                        enum fescue_precision precision, struct half *half);
/* Fills `to`, opened with room for the cells of `from`, with the same cells the other way; ascending within each line;
   equal cells keep their order. What `to` held is lost. */
fescue_status half_transpose(fescue_context *context, const struct half *from, struct half *to,
                             enum fescue_precision precision);
/* Whether every line is strictly ascending: in order and without a cell twice. */
bool half_is_ascending(fescue_context *context, const struct half *half);
/* Looks for two cells at the same place, in lines of any order: *twice, and where. O(cells + lines). */
fescue_status half_find_twice(fescue_context *context, const struct half *half, bool *twice, uint32_t *line,
                              uint32_t *across);
/* The first line from which on at least `work` lies behind, or `lines`: work before line i is start[i] + i, which
   ascends. */
uint32_t half_line_at_work(const struct half *half, uint64_t work);
/* Cuts the lines into blocks of roughly equal work. */
fescue_status half_cut(fescue_context *context, struct half *half);
void half_free(fescue_context *context, struct half *half);

/* Makes cells complete whose rows are placed: the columns, and the blocks of both. Cells of the same place, taken in
   the order in which they were placed, are merged, unless `is_ascending` says that there are none and the rows in
   order; *merged counts the cells that are gone. With FESCUE_DUPLICATES_REFUSE there must be none. */
fescue_status cells_finish(fescue_context *context, enum fescue_duplicates duplicates, bool is_ascending,
                           struct cells *cells, uint64_t *merged);

/* ---- gunzip ------------------------------------------------------------------------------------------------------ */

struct gunzip; /* given back by GIVE */
struct gunzip_bytes {
    const unsigned char *in;
    char *to;
    size_t given, room, taken, made;
};
fescue_status gunzip_open(fescue_context *context, struct gunzip **out);
/* Inflates what is given, as far as there is room; NULL, or what is wrong with the data. Without a complaint it takes
   or makes something while something is given, or is on its way, and there is room. */
const char *gunzip_step(struct gunzip *gunzip, struct gunzip_bytes *bytes);
bool gunzip_in_member(const struct gunzip *gunzip); /* between the first and the last byte of a member */

/* ---- source: bytes of a plain or gzip file -------------------------------------------------------------------------
 */

struct source {
    fescue_context *context;
    const char *path, *name; /* borrowed; name: as the user calls it */
    int descriptor;
    unsigned char *disk;
    size_t at, got;         /* of the disk block: not handed out yet */
    bool disk_ended, ended; /* nothing more comes from the disk; nothing more is made of it */
    uint64_t disk_bytes;
    uint32_t crc32;
    bool is_gzip;
    struct gunzip *gunzip; /* NULL: plain */
    const char *complaint; /* what is wrong with compressed data; NULL: nothing so far */
    char complaint_text[96];
};
/* FESCUE_NO_INPUT, or FESCUE_BAD_DATA for what no table can be: nothing at all, another kind of compression. To be
   closed in any case. */
fescue_status source_open(fescue_context *context, const char *path, struct source *source);
/* Makes the disk block hold the first `enough` bytes, if there are so many. Before the first source_read. */
fescue_status source_look(struct source *source, size_t enough);
/* Up to `room` bytes, inflated; none do not mean the end. */
fescue_status source_read(struct source *source, char *to, size_t room, size_t *made);
bool source_has_ended(const struct source *source); /* also where the data are damaged: complaint says how */
fescue_status source_tell(const struct source *source, uint64_t line); /* FESCUE_BAD_DATA with the complaint */
void source_told(const struct source *source, uint32_t *crc32, uint64_t *bytes); /* of the bytes read from the disk */
void source_close(struct source *source);                                        /* idempotent */

/* ---- stream: the text of a source, in chunks of whole lines
 * ----------------------------------------------------------
 */

struct pile_block;
struct stream;
struct chunk {
    char *text; /* owned by the stream */
    size_t at, end, got, size;
    uint64_t number;       /* in the order of the text, from 0 */
    bool has_zero;         /* there is a zero byte in it */
    const char *complaint; /* the source's; there are no lines then */
};
struct line {
    const char *text, *end; /* without its terminator; text is NULL at the end of the data */
    size_t terminator;      /* bytes of it, which lie at `end`: 0 at the end of the file, 1 or 2 (CR LF) */
};
fescue_status stream_open(fescue_context *context, const char *path, struct stream **out); /* as source_open */
/* The first bytes, without taking them: all that are read, up to `most`; so at least CHUNK_SIZE, or all there are. Only
   before the first line. */
enum {
    CHUNK_SIZE = 1 << 18, /* stays in the second cache with what is parsed from it; a lock costs nothing beside */
    CHUNK_SLACK = 64      /* bytes behind `got` that may be read, whatever they are */
};
void stream_peek(const struct stream *stream, size_t most, const char **text, size_t *length);
/* The next line; good until the next call. */
fescue_status stream_line(struct stream *stream, struct line *line);
/* The next line of the chunk, whose turn it is (see stream_parse); text is NULL at its end. */
fescue_status chunk_line(struct stream *stream, struct chunk *chunk, struct line *line);
void stream_lines_skip(struct stream *stream, uint64_t lines); /* counts lines that were read in another way */

/* Runs read(data), which takes lines with stream_line, while another thread, if there is one, reads and inflates what
   follows. `read` runs on any worker and starts no team of its own. */
fescue_status stream_read(struct stream *stream, fescue_status (*read)(void *data), void *data);

/* How the rest of a stream is read by all workers. `parse` reads one chunk beside others; it sees neither lines before
   nor after, and leaves *block NULL when that is not enough. `finish` is called once for each chunk in their order, by
   the worker that parsed it and has parsed nothing since; it takes the block (and nulls *block), reads the chunk line
   by line, or leaves it: then stream_parse ends, stream_line gives the lines from this chunk on, and it may be called
   again. `settle`, if there is one, is called with a block that finish did not take, beside others again, before that
   is given back. */
struct chunk_reader {
    void *data;
    fescue_status (*parse)(void *data, size_t worker, const struct chunk *chunk, struct pile_block **block);
    fescue_status (*finish)(void *data, size_t worker, struct chunk *chunk, struct pile_block **block, bool *is_left);
    void (*settle)(void *data, const struct pile_block *block);
};
fescue_status stream_parse(struct stream *stream, const struct chunk_reader *reader);
size_t lines_count(const char *text, const char *end);     /* line feeds */
uint64_t stream_chunk_number(const struct stream *stream); /* of the line delivered last; UINT64_MAX behind the end */
bool stream_chunk_is_read(const struct stream *stream);    /* that line is the last of its chunk */

uint64_t stream_text_size(const struct stream *stream);   /* bytes of all text; 0 when that is not known */
uint64_t stream_line_number(const struct stream *stream); /* of the line delivered last, from 1 */
const char *stream_name(const struct stream *stream);     /* as the user calls it */
fescue_context *stream_context(const struct stream *stream);
struct source *stream_source(struct stream *stream);
void stream_close(struct stream **stream); /* NULL-safe; nulls the pointer */

/* Bad data at the line delivered last, or at another one. */
#define BAD_LINE_AT(stream, number, format, ...)                                                                       \
    FAIL(stream_context(stream), FESCUE_BAD_DATA, "%s: line %" PRIu64 ": " format, stream_name(stream), (number),      \
         ##__VA_ARGS__)
#define BAD_LINE(stream, format, ...) BAD_LINE_AT(stream, stream_line_number(stream), format, ##__VA_ARGS__)

/* For "%.*s": a piece of the input, no longer than a reader needs to find it. */
enum { QUOTE_MOST = 40 };
#define QUOTE(text, end) (int)((end) - (text) > QUOTE_MOST ? QUOTE_MOST : (end) - (text)), (text)

/* ---- values and texts -------------------------------------------------------------------------------------------- */

/* Behind the number (number_parse's grammar) that `text` begins with; NULL when it begins with none. */
const char *number_read(const char *text, const char *end, double *value);

/* A value to be stored in `precision`. NULL, or what is wrong with the text: "is not a number" and the like. */
const char *value_parse(const char *text, const char *end, enum fescue_precision precision, double *value);

/* The first byte that is not UTF-8 (RFC 3629); NULL when there is none. */
const char *utf8_fault(const char *text, const char *end);

bool is_nan_text(const char *text, const char *end); /* in any case, with or without a sign */

/* How the text of a cell follows from its value. */
enum text_code {
    TEXT_SHORTEST,                /* the shortest text that reads back as the value */
    TEXT_DECIMALS,                /* TEXT_DECIMALS + d: that, with zeros up to d decimals */
    TEXT_MOST_DECIMALS = 30,      /* more make an odd text */
    TEXT_UNKNOWN = UINT8_MAX - 1, /* while texts are put in order */
    TEXT_ODD = UINT8_MAX          /* kept as it is */
};
/* How numbers are laid out: rounded to `precision` when they were read, with `decimal` for a point. */
struct text_style {
    enum fescue_precision precision;
    char decimal;
};
/* The code of a text that was read as `value`. */
enum text_code text_code_of(double value, struct text_style style, const char *text, size_t length);

/* Odd texts in the order of the input. */
struct odd_texts {
    struct text_store *store;
    char **text;
    uint64_t count, capacity;
};
fescue_status odd_texts_add(fescue_context *context, struct odd_texts *odd, const char *text, size_t length);
void odd_texts_free(fescue_context *context, struct odd_texts *odd);

/* ---- pile: cells as they come from a file -------------------------------------------------------------------------
 */

/* A large piece of memory for many blocks, which large pages fit (base/memory.c). */
struct pile_slab;
/* Where the blocks of one worker come from; zero is empty. They lie there until the pile is used up. */
struct pile_room {
    struct pile_slab *slab; /* the newest, and through it all */
};
/* Entries that lie side by side; all its arrays are one piece of memory. */
struct pile_block {
    struct pile_block *next;
    struct pile_slab *slab; /* in which it lies; NULL: in memory of its own */
    uint32_t count, capacity;
    uint32_t *row, *column;
    void *value;
    uint8_t *code; /* NULL when texts are not kept */
    struct odd_texts odd;
    bool ascends;    /* by row, and by column within each; false where nobody looked */
    bool is_claimed; /* its cells go to the pile's ascent, from `place` on */
    uint64_t place;
};
enum { PILE_BLOCK = 1 << 14 }; /* entries, when it is not known how many will come: some 200 kB */

/* Entries from `entry` on lie on lines from `line` on, one a line. */
struct line_run {
    uint64_t entry, line;
};
/* The first cells of the input, as long as they come in order (ascent.c); zero is none. */
struct ascent {
    uint64_t *start; /* as in a half of rows, up to the last row that has begun */
    uint32_t *across;
    void *value;
    uint64_t count, capacity;
    uint32_t rows, row, column; /* of the last cell */
    bool is_open;
};
/* Entries in the order of the input: those of the ascent, then blocks, so that growing copies nothing. */
struct pile {
    fescue_context *context; /* borrowed */
    enum fescue_precision precision;
    enum mirror mirror;
    char decimal; /* what texts have for a point */
    bool keeps_texts;
    bool keeps_lines;    /* of entries: where no cell can come twice nobody asks for them */
    uint64_t dense_most; /* texts are kept while rows * columns is at most this */
    uint64_t count;      /* of all entries */
    struct ascent ascent;
    struct pile_block *first, *last;
    struct pile_slab *slabs;
    size_t blocks;
    struct line_run *runs;
    uint64_t run_count, run_capacity, next_line;
};
struct pile_entry {
    uint32_t row, column;
    double value;
    uint64_t line;
    const char *text, *end;
};
void pile_open(fescue_context *context, const struct table_reading *reading, struct pile *pile);
/* The table is going to have at least this size: texts are dropped when that is too much. */
void pile_told_size(struct pile *pile, uint64_t rows, uint64_t columns);
fescue_status pile_add(struct pile *pile, const struct pile_entry *entry);
/* An empty block as the pile would have it, with room for `capacity` entries. Safe from any worker that has the room
   for itself; NULL: memory of its own. The block before it in the room was taken by the pile, or given back. */
fescue_status pile_block_create(const struct pile *pile, struct pile_room *room, uint32_t capacity,
                                struct pile_block **out);
/* The pile takes what the room holds; before it is built or given back, whatever happened. */
void pile_room_join(struct pile *pile, struct pile_room *room);
/* One more entry, for which there is room, where no texts are kept. Safe from any worker, as all three. */
static inline void pile_block_put(const struct pile *pile, struct pile_block *block, const struct pile_entry *entry)
{
    uint32_t k = block->count++;
    block->row[k] = entry->row;
    block->column[k] = entry->column;
    if (pile->precision == FESCUE_SINGLE)
        ((float *)block->value)[k] = (float)entry->value;
    else
        ((double *)block->value)[k] = entry->value;
}
/* The same with its text, where texts are kept. */
fescue_status pile_block_add(const struct pile *pile, struct pile_block *block, const struct pile_entry *entry);
void pile_block_free(fescue_context *context, struct pile_block **block); /* NULL-safe */
/* Takes a block, whose entries, counted from 0, lie on the lines that the runs tell; the first run is that of entry 0.
   One that the ascent claims is not nulled: ascent_fill is called with it, and then it is given back. */
fescue_status pile_take(struct pile *pile, struct pile_block **block, const struct line_run *runs, size_t count);
uint64_t pile_line(const struct pile *pile, uint64_t entry);
void pile_block_prepend(struct pile *pile, struct pile_block *block); /* whose entries are counted already */

/* Room for entries that come in order, where a text of this size (0: not known) can hold them. */
fescue_status ascent_open(struct pile *pile, uint64_t rows, uint64_t entries, uint64_t text_size);
bool pile_block_ascends(const struct pile_block *block);
bool ascent_claim(struct pile *pile, struct pile_block *block); /* whether the block goes on where the last one ended */
void ascent_fill(const struct pile *pile, const struct pile_block *block); /* if claimed. Beside other workers */
void ascent_end(struct pile *pile);                                        /* nothing more is claimed */
void ascent_become(struct pile *pile,
                   struct half *half);         /* all entries, as the rows of cells, opened but for its arrays */
fescue_status ascent_leave(struct pile *pile); /* for blocks of the pile */
void ascent_free(struct pile *pile);
/* Makes table->cells, texts and duplicates from the pile, which is used up. The table's labels are there already. */
fescue_status pile_build(struct pile *pile, const struct stream *stream, enum fescue_duplicates duplicates,
                         fescue_table *table);
void pile_free(struct pile *pile);

/* The texts of the pile, taken out of it, in the order of the cells, which were built from it. */
fescue_status texts_create(struct pile *pile, const struct cells *cells, enum fescue_duplicates duplicates,
                           struct texts **out);
void texts_free(fescue_context *context, struct texts **texts);

/* What texts are made of: a code for each cell, and the odd texts in the order of the cells. */
struct texts_parts {
    uint8_t *code;
    char **odd;
    uint64_t odd_count;
    char decimal;
};
void texts_take_apart(const struct texts *texts, struct texts_parts *parts); /* all of it still belongs to texts */
/* Whether there are such codes, and every odd text reads as its value. */
bool texts_are_sound(const struct texts_parts *parts, const struct cells *cells);
/* New texts that borrow codes and odd texts (not the array `odd`); texts_forget_codes before texts_free. */
fescue_status texts_assemble(fescue_context *context, const struct texts_parts *parts, uint64_t cells,
                             struct texts **out);
void texts_forget_codes(struct texts *texts); /* NULL-safe */

fescue_status table_create(fescue_context *context, const char *path, fescue_table **out);

/* ---- readers -------------------------------------------------------------------------------------------------------
 */

/* Each reads the whole stream into a table that has its context and path, and nothing else. */
bool is_matrix_market(const char *text, size_t length);
/* What the header of a Matrix Market file says of its entries, and the pile that they go to. */
struct market_form {
    const struct pile *pile;
    bool is_array, is_integer;
    uint64_t rows, columns;
    enum vectors vectors;
    struct pile_room *room; /* of each worker */
};
/* All entries of the chunk as a block, those of the array form without their places and with nan for holes; NULL when
   there is anything but plain entries in it. Beside other workers. */
fescue_status market_parse(const struct market_form *form, size_t worker, const struct chunk *chunk,
                           struct pile_block **block);
fescue_status matrix_market_read(struct stream *stream, const struct table_reading *reading, fescue_table *table);
fescue_status delimited_read(struct stream *stream, const struct table_reading *reading, fescue_table *table);
bool is_pack(const char *text, size_t length);
fescue_status pack_read(struct stream *stream, const struct table_reading *reading, fescue_table *table);
void pack_release(fescue_table *table); /* before the table's parts are given back: those in a pack are not */

/* ---- delimited text ------------------------------------------------------------------------------------------------
 */

struct field {
    const char *text, *end; /* without quotes */
};
struct record {
    uint64_t line; /* its first */
    struct field *field;
    size_t count; /* 0 at the end of the file */
    size_t capacity;
    char *joined; /* a record with quotes is copied here */
    size_t joined_count, joined_size;
};
/* The next record that is not an empty line; fields are good until the next call. */
fescue_status record_read(struct stream *stream, char separator, struct record *record);
void record_free(fescue_context *context, struct record *record);

/* What the first lines say: separator, and shape SHAPE_WIDE or SHAPE_LONG as far as the format leaves it open. */
struct delimited_kind {
    char separator;
    enum table_shape shape;
};
fescue_status delimited_kind_find(struct stream *stream, enum fescue_format format, struct delimited_kind *kind);

/* What a number that goes with a cell or a line is: its precision relative to others, or its standard deviation. */
enum weight_kind { WEIGHT_NONE, WEIGHT_PRECISION, WEIGHT_DEVIATION };

/* Everything a reader of delimited text works with. */
struct delimited {
    struct stream *stream;
    const struct table_reading *reading;
    fescue_table *table;
    enum table_shape shape;
    char separator;
    char decimal;          /* 0 until a value has shown it */
    uint64_t decimal_line; /* where it did */
    struct record record;
    struct pile pile;
    struct label_list rows, columns;
    enum weight_kind weight; /* what a fourth field is */
    struct pile weights;     /* of the same cells, in the same order */
};
bool is_hole(const struct field *field); /* blank, NA, NaN, null, in any case */
bool field_number(const struct field *field, bool with_comma, double *value);
bool is_number(const struct field *field, bool with_comma); /* whether a decimal comma is taken for a point */
/* Adds the value of a field, unless it is a hole. */
fescue_status delimited_cell(struct delimited *delimited, uint32_t row, uint32_t column, const struct field *field);
/* Refuses what is not UTF-8 or empty; `what` says what it is a label of. */
fescue_status label_check(const struct delimited *delimited, const struct field *field, const char *what);
/* New text of the corner or of a header, which may be empty but not out of UTF-8. */
fescue_status title_keep(struct delimited *delimited, const struct field *field, char **title);
/* What a column is by its title: "weight", "weights" or "sd", in any case; else WEIGHT_NONE. */
enum weight_kind weight_title_kind(const struct field *title);
/* The weight that a number in a field is. NULL, or what is wrong with it. */
const char *weight_parse(enum weight_kind kind, const struct field *field, char separator, double *weight);
/* weight = the number itself or 1/sd^2; NULL, or what is wrong with it. */
const char *weight_of(enum weight_kind kind, double number, double *weight);
/* Adds the weight of the cell that was added last. */
fescue_status weight_add(struct delimited *delimited, uint32_t row, uint32_t column, const struct field *field);
/* Weights of all cells of the table, which was built from the same records. */
fescue_status weights_build(struct delimited *delimited, fescue_table *table);
/* Gives a table's cells these weights, in row order, scaled to mean one. */
fescue_status weights_set(fescue_table *table, double *weight);
fescue_status wide_read(struct delimited *delimited);
fescue_status long_read(struct delimited *delimited);

/* Long text by chunks (long_chunk.c): what each worker keeps. To be closed in any case. */
struct long_chunks {
    struct delimited *delimited;
    struct long_worker *worker;
    size_t workers;
};
fescue_status long_chunks_open(struct delimited *delimited, struct long_chunks *chunks);
/* Reads up to a chunk that must be read by records, or all. */
fescue_status long_chunks_read(struct long_chunks *chunks);
void long_chunks_close(struct long_chunks *chunks);

#endif
