/* SPDX-License-Identifier: MIT
 *
 * The packed file: a table as it lies in memory, so that it is mapped and not read.
 *
 *     header     PACK_HEADER bytes: who wrote it and how (struct pack_header), zeros
 *     parts      one after the other, each from a multiple of PACK_ALIGNMENT on, zeros between: see enum pack_part
 *     sums       uint64_t for every PACK_BLOCK bytes from the end of the header to the end of the last part
 *     sum        uint64_t over the sums
 *
 * All numbers are as the machine that wrote them holds them; `byte_order` tells whether that is ours. Where a part
 * begins follows from the sizes of those before it, so a header cannot make parts overlap. No byte is outside of a sum:
 * the header has its own, the zeros between parts belong to the blocks.
 *
 * The sums are there against damage. Whoever makes a pack by hand makes the sums fit too, so nothing in it is believed:
 * positions, order, labels and texts are looked at like those of a text (pack_check.c) before anybody uses them.
 */
#ifndef FESCUE_TABLE_PACK_INTERNAL_H
#define FESCUE_TABLE_PACK_INTERNAL_H

#include "table/table_internal.h"

enum {
    PACK_VERSION = 2,
    PACK_HEADER = 512,
    PACK_ALIGNMENT = 64, /* a cache line, and more than any number needs */
    PACK_BLOCK = 1 << 16 /* of one sum: some fit a cache together, and the sums are few beside the data */
};
static const uint32_t pack_byte_order = 0x0a0b0c0d;

enum pack_part {
    PACK_ROW_START, /* uint64_t, rows + 1: struct half's start, and so on */
    PACK_ROW_ACROSS,
    PACK_ROW_VALUE, /* float or double */
    PACK_COLUMN_START,
    PACK_COLUMN_ACROSS,
    PACK_COLUMN_VALUE,
    PACK_ROW_LABELS, /* texts, each with its zero byte; nothing where the side has none */
    PACK_COLUMN_LABELS,
    PACK_WEIGHT,    /* float for each cell, in row order; nothing where all are alike */
    PACK_TITLES,    /* texts, each a '+' and itself or a '-' alone: see titles_of (pack_write.c) */
    PACK_TEXT_CODE, /* uint8_t for each cell (texts.c); nothing where no texts are kept */
    PACK_TEXT_ODD,  /* texts, in the order of the cells */
    PACK_PARTS
};
enum { PACK_TITLE_COUNT = 7 };

struct pack_header {
    char magic[16];
    uint32_t byte_order, version;
    uint64_t file_bytes;
    uint64_t rows, columns, cells;
    uint64_t duplicates, input_bytes; /* of the source, for the run record */
    uint32_t input_crc32;
    uint8_t precision, shape, separator, decimal;
    double weight_least, weight_most; /* struct table_weights */
    uint64_t weight_of_cells;         /* 0 or 1 */
    uint64_t part_bytes[PACK_PARTS];
    uint64_t sum; /* of all before it */
};
extern const char pack_magic[16];

/* Where the parts of a header begin, and the sums behind them; false when the sizes cannot be added. */
struct pack_places {
    uint64_t part[PACK_PARTS], end, sums, blocks, file_bytes;
};
bool pack_places_find(const struct pack_header *header, struct pack_places *places);

/* A sum that changes with any single word of the bytes, and with more of them but for one case in 2^64; the same with
   all vectors. */
uint64_t pack_sum(const void *bytes, size_t count, enum vectors vectors);

/* Numbers that nobody knew when the pack was made. */
struct pack_key {
    uint64_t added, odd[3];
};
/* Lines first .. end-1 of a direction. */
struct pack_lines {
    const struct half *half;
    enum fescue_precision precision;
    bool is_column;
    uint32_t first, end;
    const struct pack_key *key;
};
/* Whether positions ascend and lie inside, and values are finite; *sum then is what the lines add to the sum of their
   direction. Offsets ascend and lie inside. */
bool pack_lines_look(const struct pack_lines *lines, enum vectors vectors, uint64_t *sum);

/* Who is told of a stretch of positions or values just before it is looked at, while that brings it into the cache. */
struct pack_watch {
    void (*tell)(void *data, const void *first, const void *end);
    void *data;
};
/* Whether what a table points at, in a pack, is a table: lines in order and inside, both directions the same cells,
   finite values. NULL, and then the watch was told of every byte of positions and values once; or what is wrong. */
const char *pack_check_cells(fescue_context *context, const struct cells *cells, const struct pack_watch *watch,
                             enum vectors vectors);

#endif
