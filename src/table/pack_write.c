/* SPDX-License-Identifier: MIT
 *
 * A table into a packed file (pack_internal.h), which appears whole under its name or not at all. One pass: bytes are
 * summed on their way to the file, and the sums are written behind them.
 *
 * The file is written in pieces of a large page: the system then keeps it in pages of that size, each of which is
 * mapped at once. Small ones are mapped one by one when the pack is read, which takes several times longer than its
 * check.
 */
#include "table/pack_internal.h"

#include <assert.h>
#include <string.h>

struct packer {
    const fescue_table *table;
    enum vectors vectors;
    struct pack_header header;
    struct pack_places places;
    struct output *output;
    struct outfile *file;
    char *block; /* of the sum that is being filled */
    size_t used;
    uint64_t *sums, summed; /* so many are known */
    uint64_t written;       /* bytes of the file */
};

/* ---- bytes ------------------------------------------------------------------------------------------------------ */

static void block_sum(struct packer *packer)
{
    if (packer->used == 0)
        return;
    packer->sums[packer->summed++] = pack_sum(packer->block, packer->used, packer->vectors);
    packer->used = 0;
}

static void bytes_put(struct packer *packer, const void *bytes, size_t count)
{
    outfile_write(packer->file, bytes, count);
    packer->written += count;
    while (count > 0) {
        size_t room = PACK_BLOCK - packer->used, step = count < room ? count : room;
        memcpy(packer->block + packer->used, bytes, step);
        packer->used += step;
        bytes = (const char *)bytes + step;
        count -= step;
        if (packer->used == PACK_BLOCK)
            block_sum(packer);
    }
}

/* Zeros up to where a part begins. */
static void place_reach(struct packer *packer, uint64_t place)
{
    static const char zeros[PACK_ALIGNMENT];
    assert(place - packer->written < PACK_ALIGNMENT);
    bytes_put(packer, zeros, (size_t)(place - packer->written));
}

static void part_put(struct packer *packer, enum pack_part part, const void *bytes)
{
    place_reach(packer, packer->places.part[part]);
    bytes_put(packer, bytes, packer->header.part_bytes[part]);
}

/* ---- texts ------------------------------------------------------------------------------------------------------ */

static uint64_t labels_bytes(const struct labels *labels)
{
    uint64_t bytes = 0;
    for (uint32_t i = 0; labels->text != NULL && i < labels->count; i++)
        bytes += strlen(labels->text[i]) + 1;
    return bytes;
}

static void labels_put(struct packer *packer, enum pack_part part, const struct labels *labels)
{
    place_reach(packer, packer->places.part[part]);
    for (uint32_t i = 0; labels->text != NULL && i < labels->count; i++)
        bytes_put(packer, labels->text[i], strlen(labels->text[i]) + 1);
}

static void titles_of(const fescue_table *table, const char *title[PACK_TITLE_COUNT])
{
    title[0] = table->packed_from != NULL ? table->packed_from : table->path;
    title[1] = table->look.corner;
    title[2] = table->look.row_title;
    title[3] = table->look.column_title;
    title[4] = table->look.value_title;
    title[5] = table->weights.rows;
    title[6] = table->weights.columns;
}

static uint64_t titles_bytes(const fescue_table *table)
{
    const char *title[PACK_TITLE_COUNT];
    uint64_t bytes = 0;
    titles_of(table, title);
    for (int k = 0; k < PACK_TITLE_COUNT; k++)
        bytes += 2 + (title[k] != NULL ? strlen(title[k]) : 0);
    return bytes;
}

static void titles_put(struct packer *packer)
{
    const char *title[PACK_TITLE_COUNT];
    titles_of(packer->table, title);
    place_reach(packer, packer->places.part[PACK_TITLES]);
    for (int k = 0; k < PACK_TITLE_COUNT; k++) {
        bytes_put(packer, title[k] != NULL ? "+" : "-", 1);
        bytes_put(packer, title[k] != NULL ? title[k] : "", title[k] != NULL ? strlen(title[k]) + 1 : 1);
    }
}

static void odd_texts_put(struct packer *packer)
{
    struct texts_parts parts;
    place_reach(packer, packer->places.part[PACK_TEXT_ODD]);
    if (packer->table->texts == NULL)
        return;
    texts_take_apart(packer->table->texts, &parts);
    for (uint64_t k = 0; k < parts.odd_count; k++)
        bytes_put(packer, parts.odd[k], strlen(parts.odd[k]) + 1);
}

/* ---- the file --------------------------------------------------------------------------------------------------- */

static void header_fill(struct packer *packer)
{
    const fescue_table *table = packer->table;
    const struct cells *cells = &table->cells;
    struct texts_parts parts = {0};
    if (table->texts != NULL)
        texts_take_apart(table->texts, &parts);
    packer->header = (struct pack_header){.byte_order = pack_byte_order,
                                          .version = PACK_VERSION,
                                          .rows = cells->rows,
                                          .columns = cells->columns,
                                          .cells = cells->count,
                                          .duplicates = table->duplicates,
                                          .input_bytes = table->input_bytes,
                                          .input_crc32 = table->input_crc32,
                                          .weight_least = table->weights.least,
                                          .weight_most = table->weights.most,
                                          .weight_of_cells = table->weights.of_cells,
                                          .precision = (uint8_t)cells->precision,
                                          .shape = (uint8_t)table->look.shape,
                                          .separator = (uint8_t)table->look.separator,
                                          .decimal = (uint8_t)table->look.decimal};
    uint64_t *bytes = packer->header.part_bytes, values = cells->count * cell_size(cells->precision);
    memcpy(packer->header.magic, pack_magic, sizeof pack_magic);
    bytes[PACK_ROW_START] = ((uint64_t)cells->rows + 1) * sizeof(uint64_t);
    bytes[PACK_COLUMN_START] = ((uint64_t)cells->columns + 1) * sizeof(uint64_t);
    bytes[PACK_ROW_ACROSS] = bytes[PACK_COLUMN_ACROSS] = cells->count * sizeof(uint32_t);
    bytes[PACK_ROW_VALUE] = bytes[PACK_COLUMN_VALUE] = values;
    bytes[PACK_ROW_LABELS] = labels_bytes(&table->row_labels);
    bytes[PACK_COLUMN_LABELS] = labels_bytes(&table->column_labels);
    bytes[PACK_WEIGHT] = cells->by_row.weight != NULL ? cells->count * sizeof(float) : 0;
    bytes[PACK_TITLES] = titles_bytes(table);
    bytes[PACK_TEXT_CODE] = table->texts != NULL ? cells->count : 0;
    for (uint64_t k = 0; k < parts.odd_count; k++)
        bytes[PACK_TEXT_ODD] += strlen(parts.odd[k]) + 1;
}

static void parts_put(struct packer *packer)
{
    const fescue_table *table = packer->table;
    const struct half *rows = &table->cells.by_row, *columns = &table->cells.by_column;
    struct texts_parts parts = {0};
    if (table->texts != NULL)
        texts_take_apart(table->texts, &parts);
    part_put(packer, PACK_ROW_START, rows->start);
    part_put(packer, PACK_ROW_ACROSS, rows->across);
    part_put(packer, PACK_ROW_VALUE, rows->value);
    part_put(packer, PACK_COLUMN_START, columns->start);
    part_put(packer, PACK_COLUMN_ACROSS, columns->across);
    part_put(packer, PACK_COLUMN_VALUE, columns->value);
    labels_put(packer, PACK_ROW_LABELS, &table->row_labels);
    labels_put(packer, PACK_COLUMN_LABELS, &table->column_labels);
    part_put(packer, PACK_WEIGHT, rows->weight);
    titles_put(packer);
    part_put(packer, PACK_TEXT_CODE, parts.code);
    odd_texts_put(packer);
    place_reach(packer, packer->places.end);
    block_sum(packer);
}

static void file_write(struct packer *packer)
{
    char header[PACK_HEADER] = {0};
    packer->header.file_bytes = packer->places.file_bytes;
    packer->header.sum = pack_sum(&packer->header, offsetof(struct pack_header, sum), VECTORS_NONE);
    memcpy(header, &packer->header, sizeof packer->header);
    outfile_write(packer->file, header, sizeof header);
    packer->written = sizeof header;
    parts_put(packer);
    assert(packer->summed == packer->places.blocks);
    size_t bytes = packer->places.blocks * sizeof *packer->sums;
    uint64_t sum = pack_sum(packer->sums, bytes, packer->vectors);
    outfile_write(packer->file, packer->sums, bytes);
    outfile_write(packer->file, &sum, sizeof sum);
}

/* Opens the output set of the file's directory. */
static fescue_status place_open(fescue_context *context, const char *path, struct packer *packer)
{
    fescue_status status;
    const char *slash = strrchr(path, '/'), *name = slash != NULL ? slash + 1 : path;
    char *directory = NULL;
    if (name[0] == '\0' || strcmp(name, ".") == 0 || strcmp(name, "..") == 0)
        return FAIL(context, FESCUE_CANNOT_CREATE, "%s: the name of a file was expected", path);
    TRY(memory_copy_text(context, slash != NULL ? path : ".", slash != NULL ? (size_t)(name - path) : 1, &directory));
    TRY(output_open(context, directory, NULL, &packer->output));
    TRY(output_add(packer->output, name, &packer->file));
done:
    GIVE(context, &directory);
    return status;
}

fescue_status table_pack(const fescue_table *table, const char *path)
{
    fescue_status status;
    fescue_context *context = table->context;
    struct packer packer = {.table = table, .vectors = vectors_choose()};
    header_fill(&packer);
    if (!pack_places_find(&packer.header, &packer.places))
        return FAIL(context, FESCUE_NO_MEMORY, "%s: the pack would be larger than can be addressed", path);
    TRY(TAKE(context, PACK_BLOCK, &packer.block));
    TRY(TAKE(context, packer.places.blocks, &packer.sums));
    TRY(progress_tell(context, "packing", -1));
    TRY(place_open(context, path, &packer));
    TRY(outfile_widen(packer.file, MEMORY_LARGE_PAGE));
    file_write(&packer);
    TRY(outfile_status(packer.file));
    TRY(output_publish(&packer.output));
done:
    output_abandon(&packer.output);
    GIVE(context, &packer.block);
    GIVE(context, &packer.sums);
    return status;
}
