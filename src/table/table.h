/* SPDX-License-Identifier: MIT
 *
 * What was observed: files in, one immutable table out.
 *
 *   stream          bytes of a plain or gzip file, or of standard input, with the line number for messages
 *   number          text to double, exact to the last bit, independent of the locale
 *   matrix_market   coordinate and array
 *   delimited       wide and long text, comma, semicolon or tab, RFC 4180 quoting
 *   labels          names of rows and columns
 *   cells           the two-way compressed store of observed cells
 *   texts           what a value looked like in the input, so that it can be given back byte for byte
 *   pack            all of it as a file that is mapped, not read
 *   time_axis       when the lines of one side were: from labels that are times, or evenly spaced
 */
#ifndef FESCUE_TABLE_H
#define FESCUE_TABLE_H

#include "base/base.h"

/* One direction of the store: the observed cells line by line (a line is a row or a column).
   start[lines+1]; across[start[i] .. start[i+1]-1] are the positions seen in line i, ascending;
   value holds the numbers in the same order, float or double as cells.precision says.
   block[blocks+1] cuts the lines into pieces of roughly equal work (cells + lines), the same for any number of
   workers: no line is split, blocks is at most CELLS_MOST_BLOCKS. */
struct half {
    uint32_t lines, length; /* length: how many positions a line has */
    uint64_t *start;
    uint32_t *across;
    void *value;
    float *weight; /* relative precision of each cell, beside its value; NULL: all alike */
    uint32_t *block;
    size_t blocks;
};
enum { CELLS_MOST_BLOCKS = 256 };

/* The observed cells both ways; immutable once built. by_row.lines = rows = by_column.length, and the other way. */
struct cells {
    uint32_t rows, columns;
    uint64_t count;
    enum fescue_precision precision;
    struct half by_row, by_column;
    bool shares_pattern; /* start, across, weight and block belong to another store: only the values are ours */
    bool shares_all;     /* and not even these */
};

/* A cell on its way into a store. */
struct triplet_list {
    uint32_t *row, *column;
    void *value; /* float or double */
    uint64_t count, capacity;
    enum fescue_precision precision;
};
fescue_status triplets_append(fescue_context *context, struct triplet_list *list, uint32_t row, uint32_t column,
                              double value);
void triplets_free(fescue_context *context, struct triplet_list *list);
double triplet_value(const struct triplet_list *list, uint64_t index);

/* Builds both directions by counting sort, O(count + rows + columns). Input in any order, no (row, column) twice
   (asserted in debug, tables merge duplicates before). Borrows the list. `cells` is an output, empty on failure. */
fescue_status cells_build(fescue_context *context, uint32_t rows, uint32_t columns, const struct triplet_list *list,
                          struct cells *cells);
/* New store with the cells k (k counts in row order) for which keep[k] is nonzero. */
fescue_status cells_select(fescue_context *context, const struct cells *from, const uint8_t *keep, struct cells *cells);
/* The same cells, which stay `from`'s and must not be changed; it must outlive this. Freed like any other store. */
struct cells cells_share(const struct cells *from);
/* New store that shares `from`'s pattern (which must outlive it) and has values of its own, zeroed, in this precision.
 */
fescue_status cells_alike(fescue_context *context, const struct cells *from, enum fescue_precision precision,
                          struct cells *cells);
/* Gives every cell its weight, in row order, positive and finite; those it has are replaced. With NULL they have none.
 */
fescue_status cells_weigh(fescue_context *context, struct cells *cells, const double *weight);
void cells_free(fescue_context *context, struct cells *cells);
/* The first cell of the line whose position is not before `position`; the line's end when there is none. */
uint64_t half_find(const struct half *half, uint32_t line, uint32_t position);
double cells_value(const struct cells *cells, const struct half *half, uint64_t k); /* half->value[k] as double */

/* Names of one side. Unlabelled sides (Matrix Market) have text == NULL and are called by their number from 1. */
struct text_store;
struct labels {
    uint32_t count;
    char **text;              /* NUL-terminated UTF-8 as read, unquoted; the array is owned */
    struct text_store *store; /* where the characters lie; owned */
};
/* The label of line i into `buffer` when the side is unlabelled, else the label itself. */
const char *label_text(const struct labels *labels, uint32_t i, char buffer[16]);
/* Finds a label in O(1) expected; used by the long reader and by questions about cells. */
struct label_index;
fescue_status label_index_create(fescue_context *context, const struct labels *labels, struct label_index **out);
bool label_index_find(const struct label_index *index, const char *text, size_t length, uint32_t *position);
void label_index_destroy(fescue_context *context, struct label_index **index);

enum table_shape { SHAPE_MM_COORDINATE, SHAPE_MM_ARRAY, SHAPE_WIDE, SHAPE_LONG, SHAPE_MEMORY };

/* What the input looked like, enough to write it back in the same shape. */
struct table_look {
    enum table_shape shape;
    char separator;                               /* ',' ';' '\t' for delimited text */
    char decimal;                                 /* '.', or ',' in semicolon-separated text that uses it */
    char *corner;                                 /* wide: the text of the first cell; owned */
    char *row_title, *column_title, *value_title; /* long: the header, NULL where there was none; owned */
};

/* Where the weights of the cells come from; their product is in cells, scaled to mean one. */
struct table_weights {
    bool of_cells;        /* a fourth column of long text */
    char *rows, *columns; /* paths of the files; owned, or NULL */
    double least, most;   /* of the cells' weights; 0 where there are none */
};

/* Everything read from one input; immutable. Row order of cells is the key of `texts`. */
struct fescue_table {
    fescue_context *context; /* borrowed */
    char *path;              /* as the user gave it */
    struct table_look look;
    struct labels row_labels, column_labels;
    struct cells cells;
    struct table_weights weights;
    struct texts *texts;  /* NULL when not kept (a table too large to be written out dense) */
    uint64_t duplicates;  /* cells that came more than once and were merged */
    uint32_t input_crc32; /* of the bytes as they lie on disk, for the run record; of a pack, those of its source */
    uint64_t input_bytes;
    struct pack *pack; /* in which cells, labels and texts lie; NULL when they are the table's own */
    char *packed_from; /* the path of the pack's source; NULL when there is no pack */
};

/* The text of observed cell k (row order) as the input had it; *length bytes, not terminated; buffer may be used. */
const char *texts_of(const struct texts *texts, const struct cells *cells, uint64_t k, char buffer[32], size_t *length);

struct table_reading { /* how to read; defaults are all zero */
    enum fescue_precision precision;
    enum fescue_duplicates duplicates;
    enum fescue_format format;
    uint64_t dense_most; /* keep texts only while rows * columns is at most this; 0: FESCUE_DENSE_MOST */
};

/* Reads a table from path ("-": standard input), recognised by content, plain or gzip. FESCUE_NO_INPUT,
   FESCUE_BAD_DATA with one line "path: line N: what was found, what was expected", FESCUE_NO_MEMORY.
   The caller owns *out: table_destroy. */
fescue_status table_read(fescue_context *context, const char *path, const struct table_reading *reading,
                         fescue_table **out);
/* Multiplies the weights of the cells by those of their rows and columns, read from files (weights.c); a path may be
   NULL. Takes the table before anybody else has it. FESCUE_NO_INPUT, FESCUE_BAD_DATA with one line. */
fescue_status table_weigh(fescue_table *table, const char *row_path, const char *column_path);
/* Pairs of columns that are near one another, ascending, low < high; the columns that are near any have strengths that
   sum to one in the mean. */
struct nearness {
    uint32_t columns;
    uint64_t count; /* 0: nothing is known */
    uint32_t *high, *low;
    double *strength;
};
/* From a file (nearness.c). FESCUE_NO_INPUT, FESCUE_BAD_DATA with one line. The caller owns *near. */
fescue_status nearness_read(const fescue_table *table, const char *path, struct nearness *near);
void nearness_free(fescue_context *context, struct nearness *near);
/* New table from numbers in memory (copied); fails on an index out of range, a duplicate, a value not finite. */
fescue_status table_from_triplets(fescue_context *context, uint32_t rows, uint32_t columns, uint64_t count,
                                  const uint32_t *row, const uint32_t *column, const double *value,
                                  enum fescue_precision precision, fescue_table **out);
void table_destroy(fescue_table **table); /* NULL-safe; nulls the pointer */
/* The table will not be looked at for a while; what lies in a mapped pack leaves memory until then. */
void table_rest(const fescue_table *table);

/* Writes the table as a packed file, which table_read takes like any other and maps. The file appears whole or not at
   all. FESCUE_CANNOT_CREATE, FESCUE_CANNOT_WRITE. */
fescue_status table_pack(const fescue_table *table, const char *path);

/* When the rows or the columns were. Equal times are allowed; nothing says that lines come in the order of time. */
enum time_along { TIME_NONE, TIME_ROWS, TIME_COLUMNS };
struct time_axis {
    enum time_along along; /* TIME_NONE: there is no such side; everything else is 0 or NULL, but for the note */
    uint32_t count;
    double *at;                /* count: of each line, in steps from the earliest; a step is the median spacing of
                                  neighbouring distinct times */
    uint32_t *order;           /* order[k]: the k-th line in time; of equal times the one that comes first */
    double step_seconds;       /* NAN where lines are only numbered */
    double start;              /* Unix second of the earliest (by the wall clock where labels have no offset), or NAN */
    uint32_t gaps;             /* between neighbours in time of more than one and a half steps */
    uint32_t equal;            /* lines at the time of an earlier one */
    uint32_t set_back;         /* times when a clock without offset was seen to be set back */
    bool is_sorted, is_labels; /* order is 0, 1, 2, ...; the times come from labels */
    char note[256];            /* why there is none although many labels are times, or ""; one plain line */
};
/* auto: the rows, else the columns, if all labels of the side are times as ISO 8601 writes them and at least three of
   them differ. Rows or columns: that side; unlabelled lines are evenly spaced, labels may also be plain numbers, which
   are times in a unit of their own; FESCUE_BAD_DATA when they are neither. The caller owns what is in *out. */
fescue_status time_axis_find(fescue_context *context, const fescue_table *table, enum fescue_time_axis wanted,
                             struct time_axis *out);
void time_axis_free(fescue_context *context, struct time_axis *axis);
/* "rows are times, step 1 h, 12 gaps in the clock" into text; "" for TIME_NONE. */
enum { TIME_TEXT_SIZE = 256 };
const char *time_axis_text(const struct time_axis *axis, char text[TIME_TEXT_SIZE]);

/* A double from decimal text [text, end): optional sign, digits, point, exponent. Exactly what strtod gives in the C
   locale. False when it is not a number in this grammar (nan, inf, hex, empty, trailing bytes are not). An overflow
   gives an infinity: callers refuse it. */
bool number_parse(const char *text, const char *end, double *value);

#endif
