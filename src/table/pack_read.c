/* SPDX-License-Identifier: MIT
 *
 * A table from a packed file (pack_internal.h): mapped, every byte summed by all workers, looked at, and used where it
 * lies. Positions and values, nearly all of a pack, are summed just before they are looked at, so that they come out of
 * memory once. Where the system cannot map (a pipe, a compressed pack) the bytes are read into memory and used there.
 *
 * A mapped file must not be changed in place while it is used; a new pack replaces an old one by a rename, which leaves
 * the old one to whoever has it.
 */
#include "table/pack_internal.h"

#include <math.h>
#include <stdatomic.h>
#include <string.h>

struct pack {
    const char *bytes;
    size_t size;
    bool is_mapped;
};

/* What reading is about. */
struct unpacker {
    fescue_context *context;
    const char *name;
    const char *bytes; /* of the pack */
    size_t size;
    enum vectors vectors;
    struct pack_header header;
    struct pack_places places;
};

#define REFUSE(unpacker, format, ...)                                                                                  \
    FAIL((unpacker)->context, FESCUE_BAD_DATA, "%s: the pack " format, (unpacker)->name, ##__VA_ARGS__)

bool is_pack(const char *text, size_t length)
{
    return length >= sizeof pack_magic && memcmp(text, pack_magic, sizeof pack_magic) == 0;
}

/* ---- bytes ------------------------------------------------------------------------------------------------------ */

/* All that is left of the source, behind `count` bytes that are there already. */
static fescue_status rest_read(struct source *source, char **bytes, size_t *count)
{
    fescue_status status = FESCUE_OK;
    size_t size = *count;
    while (!source_has_ended(source)) {
        size_t made;
        if (size - *count < PACK_BLOCK) {
            size = 2 * size + PACK_BLOCK;
            TRY(RESIZE(source->context, size, bytes));
        }
        TRY(progress_tell(source->context, "reading", -1));
        TRY(source_read(source, *bytes + *count, size - *count, &made));
        *count += made;
    }
    if (source->complaint != NULL)
        status = source_tell(source, 1);
done:
    return status;
}

static fescue_status pack_copy(struct stream *stream, struct pack *pack)
{
    fescue_status status;
    char *bytes = NULL;
    const char *text;
    stream_peek(stream, SIZE_MAX, &text, &pack->size);
    TRY(TAKE(stream_context(stream), pack->size, &bytes));
    memcpy(bytes, text, pack->size);
    TRY(rest_read(stream_source(stream), &bytes, &pack->size));
done:
    pack->bytes = bytes;
    return status;
}

static fescue_status pack_open(struct stream *stream, struct pack **out)
{
    fescue_status status;
    fescue_context *context = stream_context(stream);
    const struct source *source = stream_source(stream);
    TRY(TAKE(context, 1, out));
    struct pack *pack = *out;
    uint64_t size = file_size(context, source->descriptor);
    const void *bytes = NULL;
    if (!source->is_gzip && size > 0 && size <= SIZE_MAX)
        file_map(context, source->descriptor, (size_t)size, &bytes);
    pack->is_mapped = bytes != NULL;
    pack->bytes = bytes;
    pack->size = (size_t)size;
    if (!pack->is_mapped)
        TRY(pack_copy(stream, pack));
done:
    return status;
}

static void pack_close(fescue_context *context, struct pack **out)
{
    struct pack *pack = *out;
    if (pack == NULL)
        return;
    const void *bytes = pack->bytes;
    if (pack->is_mapped)
        file_unmap(context, &bytes, pack->size);
    else
        GIVE(context, &pack->bytes);
    GIVE(context, out);
}

/* ---- header ----------------------------------------------------------------------------------------------------- */

static fescue_status origin_check(const struct unpacker *unpacker)
{
    const struct pack_header *header = &unpacker->header;
    if (unpacker->size < PACK_HEADER)
        return REFUSE(unpacker, "is truncated after %zu bytes", unpacker->size);
    if (header->byte_order == __builtin_bswap32(pack_byte_order))
        return REFUSE(unpacker, "was written by a machine of the other byte order; pack the table again on this one");
    if (header->version != PACK_VERSION)
        return REFUSE(unpacker, "has version %" PRIu32 ", this program reads version %d; pack the table again",
                      header->version, (int)PACK_VERSION);
    if (header->byte_order != pack_byte_order ||
        header->sum != pack_sum(header, offsetof(struct pack_header, sum), VECTORS_NONE))
        return REFUSE(unpacker, "is damaged: the sum of its header does not match");
    if (header->file_bytes != unpacker->size)
        return REFUSE(unpacker, "has %zu bytes, its header tells of %" PRIu64 ": it is truncated or something follows",
                      unpacker->size, header->file_bytes);
    return FESCUE_OK;
}

/* Whether the sizes are those of a table. Products stay below 2^64, since cells are counted in bytes of the file. */
static bool sizes_are_sound(const struct unpacker *unpacker)
{
    const struct pack_header *header = &unpacker->header;
    const uint64_t *bytes = header->part_bytes;
    if (header->rows == 0 || header->rows > TABLE_MOST_LINES || header->columns == 0 ||
        header->columns > TABLE_MOST_LINES || header->cells == 0 || header->cells > unpacker->size ||
        header->precision > FESCUE_SINGLE || header->shape > SHAPE_MEMORY)
        return false;
    uint64_t values = header->cells * cell_size((enum fescue_precision)header->precision);
    return bytes[PACK_ROW_START] == (header->rows + 1) * sizeof(uint64_t) &&
           bytes[PACK_COLUMN_START] == (header->columns + 1) * sizeof(uint64_t) &&
           bytes[PACK_ROW_ACROSS] == header->cells * sizeof(uint32_t) &&
           bytes[PACK_COLUMN_ACROSS] == header->cells * sizeof(uint32_t) && bytes[PACK_ROW_VALUE] == values &&
           bytes[PACK_COLUMN_VALUE] == values &&
           (bytes[PACK_WEIGHT] == 0 || bytes[PACK_WEIGHT] == header->cells * sizeof(float)) &&
           header->weight_of_cells <= 1 && (bytes[PACK_TEXT_CODE] == 0 || bytes[PACK_TEXT_CODE] == header->cells) &&
           (header->decimal == 0 || header->decimal == '.' || header->decimal == ',') &&
           (header->separator == 0 || header->separator == ',' || header->separator == ';' ||
            header->separator == '\t');
}

static fescue_status header_check(struct unpacker *unpacker, const struct table_reading *reading)
{
    fescue_status status;
    memcpy(&unpacker->header, unpacker->bytes,
           unpacker->size < sizeof unpacker->header ? unpacker->size : sizeof unpacker->header);
    TRY(origin_check(unpacker));
    if (!sizes_are_sound(unpacker) || !pack_places_find(&unpacker->header, &unpacker->places) ||
        unpacker->places.file_bytes != unpacker->size)
        return REFUSE(unpacker, "is malformed: its sizes are not those of a table");
    if (unpacker->header.precision != (uint8_t)reading->precision)
        return REFUSE(unpacker,
                      "holds values in %s precision; read it with --precision %s, or pack the table again with "
                      "--precision %s",
                      reading->precision == FESCUE_SINGLE ? "double" : "single",
                      reading->precision == FESCUE_SINGLE ? "double" : "single",
                      reading->precision == FESCUE_SINGLE ? "single" : "double");
done:
    return status;
}

/* ---- sums ------------------------------------------------------------------------------------------------------- */

struct summing {
    const struct unpacker *unpacker;
    const uint64_t *sums;
    bool spares_cells;        /* blocks that begin in positions or values are left to when those are looked at */
    _Atomic uint64_t damaged; /* the first such block */
};

static struct summing summing_of(const struct unpacker *unpacker, bool spares_cells)
{
    return (struct summing){
        .unpacker = unpacker,
        .sums = (const uint64_t *)(const void *)(unpacker->bytes + unpacker->places.sums),
        .spares_cells = spares_cells,
        .damaged = UINT64_MAX,
    };
}

static void block_check(struct summing *summing, uint64_t block)
{
    const struct unpacker *unpacker = summing->unpacker;
    uint64_t first = PACK_HEADER + block * PACK_BLOCK, rest = unpacker->places.end - first;
    size_t count = rest < PACK_BLOCK ? (size_t)rest : PACK_BLOCK;
    if (pack_sum(unpacker->bytes + first, count, unpacker->vectors) == summing->sums[block])
        return;
    uint64_t damaged = atomic_load(&summing->damaged);
    while (block < damaged && !atomic_compare_exchange_weak(&summing->damaged, &damaged, block))
        ;
}

static bool block_is_of_cells(const struct unpacker *unpacker, uint64_t block)
{
    static const enum pack_part parts[] = {PACK_ROW_ACROSS, PACK_ROW_VALUE, PACK_COLUMN_ACROSS, PACK_COLUMN_VALUE};
    const uint64_t first = PACK_HEADER + block * PACK_BLOCK;
    for (size_t k = 0; k < sizeof parts / sizeof parts[0]; k++) /* the difference wraps where the part begins behind */
        if (first - unpacker->places.part[parts[k]] < unpacker->header.part_bytes[parts[k]])
            return true;
    return false;
}

static void block_task(void *job, size_t block, size_t worker)
{
    struct summing *summing = job;
    (void)worker;
    if (!summing->spares_cells || !block_is_of_cells(summing->unpacker, block))
        block_check(summing, block);
}

/* The blocks that begin in this stretch, which is one of positions or values. */
static void stretch_check(void *data, const void *first, const void *end)
{
    struct summing *summing = data;
    const char *bytes = summing->unpacker->bytes + PACK_HEADER;
    uint64_t from = (uint64_t)((const char *)first - bytes), to = (uint64_t)((const char *)end - bytes);
    for (uint64_t block = (from + PACK_BLOCK - 1) / PACK_BLOCK; block * PACK_BLOCK < to; block++)
        block_check(summing, block);
}

static fescue_status damage_tell(const struct summing *summing)
{
    const struct unpacker *unpacker = summing->unpacker;
    uint64_t damaged = atomic_load(&summing->damaged);
    if (damaged == UINT64_MAX)
        return FESCUE_OK;
    uint64_t first = PACK_HEADER + damaged * PACK_BLOCK, end = first + PACK_BLOCK;
    return REFUSE(unpacker, "is damaged: bytes %" PRIu64 " to %" PRIu64 " are not what was written", first,
                  (end < unpacker->places.end ? end : unpacker->places.end) - 1);
}

/* All blocks, or all but those of cells. */
static fescue_status sums_check(const struct unpacker *unpacker, bool spares_cells)
{
    struct summing summing = summing_of(unpacker, spares_cells);
    size_t blocks = (size_t)unpacker->places.blocks;
    for (const char *c = unpacker->bytes + sizeof unpacker->header; c < unpacker->bytes + PACK_HEADER; c++)
        if (*c != 0)
            return REFUSE(unpacker, "is damaged: there is something behind its header");
    if (pack_sum(summing.sums, blocks * sizeof(uint64_t), unpacker->vectors) != summing.sums[blocks])
        return REFUSE(unpacker, "is damaged: the sum over its sums does not match");
    team_run(unpacker->context, blocks, block_task, &summing);
    return damage_tell(&summing);
}

/* ---- parts ------------------------------------------------------------------------------------------------------ */

/* A part of the pack, which nobody writes to, as the structs of a table hold it. */
static void *part_of(const struct unpacker *unpacker, enum pack_part part)
{
    return (void *)(uintptr_t)(unpacker->bytes + unpacker->places.part[part]);
}

static fescue_status cells_unpack(const struct unpacker *unpacker, struct cells *cells)
{
    fescue_status status = FESCUE_OK;
    const struct pack_header *header = &unpacker->header;
    const uint32_t rows = (uint32_t)header->rows, columns = (uint32_t)header->columns;
    *cells = (struct cells){.rows = rows,
                            .columns = columns,
                            .count = header->cells,
                            .precision = (enum fescue_precision)header->precision,
                            .by_row = {.lines = rows,
                                       .length = columns,
                                       .start = part_of(unpacker, PACK_ROW_START),
                                       .across = part_of(unpacker, PACK_ROW_ACROSS),
                                       .value = part_of(unpacker, PACK_ROW_VALUE)},
                            .by_column = {.lines = columns,
                                          .length = rows,
                                          .start = part_of(unpacker, PACK_COLUMN_START),
                                          .across = part_of(unpacker, PACK_COLUMN_ACROSS),
                                          .value = part_of(unpacker, PACK_COLUMN_VALUE)}};
    struct summing summing = summing_of(unpacker, true);
    const struct pack_watch watch = {stretch_check, &summing};
    const char *fault = pack_check_cells(unpacker->context, cells, &watch, unpacker->vectors);
    if (fault != NULL) { /* which damage may be the cause of, and perhaps not all was summed */
        TRY(sums_check(unpacker, false));
        return REFUSE(unpacker, "is malformed: %s", fault);
    }
    TRY(damage_tell(&summing));
    TRY(half_cut(unpacker->context, &cells->by_row));
    TRY(half_cut(unpacker->context, &cells->by_column));
done:
    return status;
}

/* Weights are copied: those of lines may still be multiplied into them. */
static fescue_status weights_unpack(const struct unpacker *unpacker, fescue_table *table)
{
    fescue_status status = FESCUE_OK;
    const struct pack_header *header = &unpacker->header;
    const float *given = part_of(unpacker, PACK_WEIGHT);
    double *weight = NULL;
    bool sound = true;
    table->weights.of_cells = header->weight_of_cells != 0;
    table->weights.least = header->weight_least;
    table->weights.most = header->weight_most;
    if (header->part_bytes[PACK_WEIGHT] == 0)
        return FESCUE_OK;
    TRY(TAKE(unpacker->context, header->cells, &weight));
    for (uint64_t k = 0; k < header->cells; k++) {
        sound &= isfinite(given[k]) && given[k] > 0;
        weight[k] = given[k];
    }
    TRY(sound ? cells_weigh(unpacker->context, &table->cells, weight)
              : REFUSE(unpacker, "is malformed: it has weights that are not positive numbers"));
done:
    GIVE(unpacker->context, &weight);
    return status;
}

/* The texts of a part, each behind the zero byte of the one before; false when there are not `count` of them. */
static bool texts_find(const struct unpacker *unpacker, enum pack_part part, uint64_t count, char **text)
{
    char *at = part_of(unpacker, part), *end = at + unpacker->header.part_bytes[part];
    for (uint64_t k = 0; k < count; k++) {
        char *zero = at < end ? memchr(at, '\0', (size_t)(end - at)) : NULL;
        if (zero == NULL)
            return false;
        text[k] = at;
        at = zero + 1;
    }
    return at == end;
}

static fescue_status labels_unpack(const struct unpacker *unpacker, enum pack_part part, uint32_t count,
                                   struct labels *labels)
{
    fescue_status status = FESCUE_OK;
    labels->count = count;
    if (unpacker->header.part_bytes[part] == 0)
        return FESCUE_OK;
    if (unpacker->header.part_bytes[part] < 2 * (uint64_t)count) /* asked before memory is taken for so many */
        return REFUSE(unpacker, "is malformed: labels are missing");
    TRY(TAKE(unpacker->context, count, &labels->text));
    bool sound = texts_find(unpacker, part, count, labels->text);
    for (uint32_t i = 0; sound && i < count; i++) {
        const char *end = labels->text[i] + strlen(labels->text[i]);
        sound = end > labels->text[i] && utf8_fault(labels->text[i], end) == NULL;
    }
    if (!sound)
        status = REFUSE(unpacker, "is malformed: it does not hold a label for every line");
done:
    return status;
}

static fescue_status titles_unpack(const struct unpacker *unpacker, fescue_table *table)
{
    fescue_status status = FESCUE_OK;
    char *text[PACK_TITLE_COUNT];
    char **const title[PACK_TITLE_COUNT] = {&table->packed_from,       &table->look.corner,      &table->look.row_title,
                                            &table->look.column_title, &table->look.value_title, &table->weights.rows,
                                            &table->weights.columns};
    if (!texts_find(unpacker, PACK_TITLES, PACK_TITLE_COUNT, text))
        return REFUSE(unpacker, "is malformed: its titles are missing");
    for (int k = 0; k < PACK_TITLE_COUNT; k++) {
        size_t length = strlen(text[k]);
        bool is_path = k == 0 || k > 4; /* which may be any bytes */
        if (length == 0 || (!is_path && utf8_fault(text[k], text[k] + length) != NULL))
            return REFUSE(unpacker, "is malformed: its titles are no texts");
        if (text[k][0] == '+')
            TRY(memory_copy_text(unpacker->context, text[k] + 1, length - 1, title[k]));
    }
done:
    return status;
}

static fescue_status texts_unpack(const struct unpacker *unpacker, fescue_table *table)
{
    fescue_status status = FESCUE_OK;
    struct texts_parts parts = {.code = part_of(unpacker, PACK_TEXT_CODE),
                                .decimal = unpacker->header.decimal == ',' ? ',' : '.'};
    bool sound = true;
    if (unpacker->header.part_bytes[PACK_TEXT_CODE] == 0)
        return FESCUE_OK;
    for (uint64_t k = 0; k < table->cells.count; k++)
        parts.odd_count += parts.code[k] == TEXT_ODD;
    TRY(TAKE(unpacker->context, parts.odd_count, &parts.odd));
    sound = texts_find(unpacker, PACK_TEXT_ODD, parts.odd_count, parts.odd) && texts_are_sound(&parts, &table->cells);
    if (!sound)
        status = REFUSE(unpacker, "is malformed: the texts of its values are not theirs");
    else
        status = texts_assemble(unpacker->context, &parts, table->cells.count, &table->texts);
done:
    GIVE(unpacker->context, &parts.odd);
    return status;
}

/* ---- reading ---------------------------------------------------------------------------------------------------- */

static fescue_status table_unpack(const struct unpacker *unpacker, fescue_table *table)
{
    fescue_status status;
    const struct pack_header *header = &unpacker->header;
    TRY(sums_check(unpacker, true));
    TRY(cells_unpack(unpacker, &table->cells));
    TRY(labels_unpack(unpacker, PACK_ROW_LABELS, (uint32_t)header->rows, &table->row_labels));
    TRY(labels_unpack(unpacker, PACK_COLUMN_LABELS, (uint32_t)header->columns, &table->column_labels));
    TRY(titles_unpack(unpacker, table));
    TRY(weights_unpack(unpacker, table));
    TRY(texts_unpack(unpacker, table));
    table->look.shape = (enum table_shape)header->shape;
    table->look.separator = (char)header->separator;
    table->look.decimal = (char)header->decimal;
    table->duplicates = header->duplicates;
    table->input_crc32 = header->input_crc32;
    table->input_bytes = header->input_bytes;
done:
    return status;
}

fescue_status pack_read(struct stream *stream, const struct table_reading *reading, fescue_table *table)
{
    fescue_status status;
    struct unpacker unpacker = {.context = table->context, .name = stream_name(stream), .vectors = vectors_choose()};
    TRY(pack_open(stream, &table->pack));
    unpacker.bytes = table->pack->bytes;
    unpacker.size = table->pack->size;
    TRY(header_check(&unpacker, reading));
    TRY(table_unpack(&unpacker, table));
done:
    return status;
}

/* What lies in the pack is not the table's to give back. */
void table_rest(const fescue_table *table)
{
    if (table->pack != NULL && table->pack->is_mapped)
        file_rest(table->context, table->pack->bytes, table->pack->size);
}

void pack_release(fescue_table *table)
{
    struct half *const halves[] = {&table->cells.by_row, &table->cells.by_column};
    if (table->pack == NULL)
        return;
    for (int k = 0; k < 2; k++) {
        halves[k]->start = NULL;
        halves[k]->across = NULL;
        halves[k]->value = NULL;
    }
    texts_forget_codes(table->texts);
    pack_close(table->context, &table->pack);
}
