/* SPDX-License-Identifier: MIT
 *
 * Cells as they come from a file, on their way into the store.
 *
 * Memory for n entries in single precision: 12 n bytes of pile, then 8 n for the rows; the pile is given back before
 * the columns take another 8 n. So the peak is 20 n and what sort.c needs, and what a header promises is never
 * believed: a block is taken when the entries for it are there, or the text that they come from. (Texts, kept for small
 * tables only, need the pile until they are in order.)
 *
 * Entries that come in order need none of this (ascent.c): 12 n bytes for the rows are all, before the columns.
 *
 * The line of an entry, wanted only for a message about duplicates, is kept in runs: an ordinary file is one run.
 */
#include "table/table_internal.h"

#include <assert.h>
#include <string.h>

void pile_open(fescue_context *context, const struct table_reading *reading, struct pile *pile)
{
    *pile = (struct pile){.context = context,
                          .precision = reading->precision,
                          .decimal = '.',
                          .keeps_texts = true,
                          .keeps_lines = true,
                          .dense_most = reading->dense_most != 0 ? reading->dense_most : FESCUE_DENSE_MOST};
}

void pile_told_size(struct pile *pile, uint64_t rows, uint64_t columns)
{
    if (!pile->keeps_texts || columns == 0 || rows <= pile->dense_most / columns)
        return;
    pile->keeps_texts = false;
    for (struct pile_block *block = pile->first; block != NULL; block = block->next)
        odd_texts_free(pile->context, &block->odd);
}

/* ---- blocks ----------------------------------------------------------------------------------------------------- */

struct pile_slab {
    struct pile_slab *older;
    size_t used, size;
    _Alignas(64) char bytes[];
};

/* Each slab of a worker is twice as large as the one before, up to this: so what is idle stays below what is used, and
   below this. */
enum { SLAB_MOST = 1 << 23, SLAB_ALIGNMENT = 64 };

/* A place for so many bytes in the newest slab, or in a new one. */
static fescue_status slab_carve(fescue_context *context, struct pile_room *room, size_t size, void *out)
{
    struct pile_slab *slab = room->slab;
    size = (size + SLAB_ALIGNMENT - 1) & ~(size_t)(SLAB_ALIGNMENT - 1);
    if (slab == NULL || slab->size - slab->used < size) {
        size_t most = slab == NULL ? 0 : 2 * slab->size < SLAB_MOST ? 2 * slab->size : SLAB_MOST;
        size_t whole = size < most ? most : size;
        fescue_status status = memory_take(context, 1, sizeof *slab + whole, &slab);
        if (status != FESCUE_OK)
            return status;
        slab->size = whole;
        slab->older = room->slab;
        room->slab = slab;
    }
    char *place = slab->bytes + slab->used;
    slab->used += size;
    memcpy(out, &place, sizeof place);
    return FESCUE_OK;
}

void pile_room_join(struct pile *pile, struct pile_room *room)
{
    while (room->slab != NULL) {
        struct pile_slab *slab = room->slab;
        room->slab = slab->older;
        slab->older = pile->slabs;
        pile->slabs = slab;
    }
}

fescue_status pile_block_create(const struct pile *pile, struct pile_room *room, uint32_t capacity,
                                struct pile_block **out)
{
    fescue_status status;
    struct pile_block *block;
    size_t value = cell_size(pile->precision), code = pile->keeps_texts ? 1 : 0, size;
    bool fits = size_product(capacity, value + 2 * sizeof(uint32_t) + code, &size) && size <= SIZE_MAX / 4;
    *out = NULL;
    size = fits ? size + sizeof *block : SIZE_MAX;
    if (room != NULL && fits)
        TRY(slab_carve(pile->context, room, size, &block));
    else
        TRY(memory_take(pile->context, 1, size, &block));
    *block = (struct pile_block){.slab = room != NULL ? room->slab : NULL, .capacity = capacity, .value = block + 1};
    /* value is aligned for doubles: the struct holds pointers */
    block->row = (uint32_t *)(void *)((char *)block->value + capacity * value);
    block->column = block->row + capacity;
    block->code = pile->keeps_texts ? (uint8_t *)(block->column + capacity) : NULL;
    *out = block;
done:
    return status;
}

static fescue_status text_keep(const struct pile *pile, struct pile_block *block, const struct pile_entry *entry,
                               double value)
{
    size_t length = (size_t)(entry->end - entry->text);
    const struct text_style style = {pile->precision, pile->decimal};
    enum text_code code = text_code_of(value, style, entry->text, length);
    block->code[block->count] = (uint8_t)code;
    return code == TEXT_ODD ? odd_texts_add(pile->context, &block->odd, entry->text, length) : FESCUE_OK;
}

fescue_status pile_block_add(const struct pile *pile, struct pile_block *block, const struct pile_entry *entry)
{
    fescue_status status = FESCUE_OK;
    assert(block->count < block->capacity);
    if (pile->keeps_texts)
        TRY(text_keep(pile, block, entry,
                      pile->precision == FESCUE_SINGLE ? (double)(float)entry->value : entry->value));
    pile_block_put(pile, block, entry);
done:
    return status;
}

void pile_block_free(fescue_context *context, struct pile_block **out)
{
    struct pile_block *block = *out;
    if (block == NULL)
        return;
    odd_texts_free(context, &block->odd);
    if (block->slab == NULL) {
        GIVE(context, out);
        return;
    }
    block->slab->used = (size_t)((char *)block - block->slab->bytes); /* it was the last */
    *out = NULL;
}

static void block_append(struct pile *pile, struct pile_block *block)
{
    if (pile->first == NULL)
        pile->first = block;
    else
        pile->last->next = block;
    pile->last = block;
    pile->blocks++;
}

void pile_block_prepend(struct pile *pile, struct pile_block *block)
{
    block->next = pile->first;
    pile->first = block;
    if (pile->last == NULL)
        pile->last = block;
    pile->blocks++;
}

/* ---- entries ---------------------------------------------------------------------------------------------------- */

/* From this entry on lines begin anew, unless they follow those before. */
static fescue_status run_append(struct pile *pile, uint64_t entry, uint64_t line)
{
    if (!pile->keeps_lines || line == pile->next_line)
        return FESCUE_OK;
    if (pile->run_count == pile->run_capacity) {
        uint64_t capacity = pile->run_capacity < 16 ? 16 : pile->run_capacity + pile->run_capacity / 2;
        fescue_status status = RESIZE(pile->context, capacity, &pile->runs);
        if (status != FESCUE_OK)
            return status;
        pile->run_capacity = capacity;
    }
    pile->runs[pile->run_count++] = (struct line_run){entry, line};
    return FESCUE_OK;
}

uint64_t pile_line(const struct pile *pile, uint64_t entry)
{
    uint64_t low = 0, high = pile->run_count;
    assert(entry < pile->count);
    while (high - low > 1) {
        uint64_t middle = low + (high - low) / 2;
        if (pile->runs[middle].entry <= entry)
            low = middle;
        else
            high = middle;
    }
    return pile->runs[low].line + (entry - pile->runs[low].entry);
}

fescue_status pile_add(struct pile *pile, const struct pile_entry *entry)
{
    fescue_status status = FESCUE_OK;
    ascent_end(pile);
    if (pile->last == NULL || pile->last->count == pile->last->capacity) {
        struct pile_block *block;
        TRY(pile_block_create(pile, NULL, PILE_BLOCK, &block));
        block_append(pile, block);
    }
    TRY(run_append(pile, pile->count, entry->line));
    TRY(pile_block_add(pile, pile->last, entry));
    pile->count++;
    pile->next_line = entry->line + 1;
done:
    return status;
}

fescue_status pile_take(struct pile *pile, struct pile_block **block, const struct line_run *runs, size_t count)
{
    fescue_status status = FESCUE_OK;
    uint64_t entries = (*block)->count;
    for (size_t k = 0; k < count; k++) {
        TRY(run_append(pile, pile->count + runs[k].entry, runs[k].line));
        pile->next_line = runs[k].line + ((k + 1 < count ? runs[k + 1].entry : entries) - runs[k].entry);
    }
    if (!pile->keeps_texts) /* they were, while it was parsed */
        odd_texts_free(pile->context, &(*block)->odd);
    pile->count += entries;
    if (ascent_claim(pile, *block))
        goto done;
    block_append(pile, *block);
    *block = NULL;
done:
    return status;
}

static void blocks_free(struct pile *pile)
{
    while (pile->first != NULL) {
        struct pile_block *next = pile->first->next;
        pile_block_free(pile->context, &pile->first);
        pile->first = next;
    }
    while (pile->slabs != NULL) {
        struct pile_slab *older = pile->slabs->older;
        GIVE(pile->context, &pile->slabs);
        pile->slabs = older;
    }
    pile->last = NULL;
    pile->blocks = 0;
}

void pile_free(struct pile *pile)
{
    blocks_free(pile);
    ascent_free(pile);
    GIVE(pile->context, &pile->runs);
}

/* ---- building --------------------------------------------------------------------------------------------------- */

static uint64_t cells_of(const struct pile *pile)
{
    uint64_t count = pile->count;
    if (pile->mirror != MIRROR_NONE)
        for (const struct pile_block *block = pile->first; block != NULL; block = block->next)
            for (uint32_t k = 0; k < block->count; k++)
                count += block->row[k] != block->column[k];
    return count;
}

/* Sorts the entries, and their mirror images behind those of their block, into the rows. */
static fescue_status rows_sort(const struct pile *pile, struct cells *cells)
{
    fescue_status status;
    struct cell_run *runs = NULL;
    size_t count = 0;
    TRY(half_open(pile->context, cells->rows, cells->columns, cells->count, cells->precision, &cells->by_row));
    TRY(TAKE(pile->context, 2 * pile->blocks, &runs));
    for (const struct pile_block *block = pile->first; block != NULL; block = block->next) {
        runs[count++] = (struct cell_run){block->row, block->column, block->value, block->count, MIRROR_NONE};
        if (pile->mirror != MIRROR_NONE)
            runs[count++] = (struct cell_run){block->column, block->row, block->value, block->count, pile->mirror};
    }
    TRY(half_sort(pile->context, runs, count, cells->precision, &cells->by_row));
done:
    GIVE(pile->context, &runs);
    return status;
}

/* The lines of the first two entries at a place, or at its mirror image. */
static void lines_find(const struct pile *pile, uint32_t row, uint32_t column, uint64_t line[2])
{
    uint64_t entry = 0;
    int found = 0;
    bool mirrored = pile->mirror != MIRROR_NONE;
    for (const struct pile_block *block = pile->first; block != NULL; block = block->next)
        for (uint32_t k = 0; k < block->count && found < 2; k++, entry++) {
            bool here = block->row[k] == row && block->column[k] == column;
            if (here || (mirrored && block->row[k] == column && block->column[k] == row))
                line[found++] = pile_line(pile, entry);
        }
    assert(found == 2);
}

static fescue_status duplicates_refuse(const struct pile *pile, const struct stream *stream, const fescue_table *table)
{
    bool twice;
    uint32_t row, column;
    uint64_t line[2] = {0};
    char row_text[16], column_text[16];
    fescue_status status = half_find_twice(pile->context, &table->cells.by_row, &twice, &row, &column);
    if (status != FESCUE_OK || !twice)
        return status;
    lines_find(pile, row, column, line);
    return BAD_LINE_AT(stream, line[1],
                       "row %s, column %s was given on line %" PRIu64
                       " already; --duplicates mean, last or first takes a cell that comes more than once",
                       label_text(&table->row_labels, row, row_text),
                       label_text(&table->column_labels, column, column_text), line[0]);
}

fescue_status pile_build(struct pile *pile, const struct stream *stream, enum fescue_duplicates duplicates,
                         fescue_table *table)
{
    fescue_status status = FESCUE_OK;
    struct cells *cells = &table->cells;
    if (pile->count == 0) {
        status = FAIL(pile->context, FESCUE_BAD_DATA, "%s: the table has no observed cell", stream_name(stream));
        goto done;
    }
    *cells = (struct cells){.rows = table->row_labels.count,
                            .columns = table->column_labels.count,
                            .count = cells_of(pile),
                            .precision = pile->precision};
    pile_told_size(pile, cells->rows, cells->columns);
    bool is_ascending = pile->ascent.count == pile->count;
    if (is_ascending) {
        cells->by_row = (struct half){.lines = cells->rows, .length = cells->columns};
        ascent_become(pile, &cells->by_row);
    } else {
        TRY(ascent_leave(pile));
        TRY(rows_sort(pile, cells));
        is_ascending = half_is_ascending(pile->context, &cells->by_row);
    }
    if (!is_ascending && duplicates == FESCUE_DUPLICATES_REFUSE)
        TRY(duplicates_refuse(pile, stream, table));
    if (!pile->keeps_texts)
        blocks_free(pile);
    TRY(cells_finish(pile->context, duplicates, is_ascending, cells, &table->duplicates));
    if (pile->keeps_texts)
        TRY(texts_create(pile, cells, duplicates, &table->texts));
done:
    pile_free(pile);
    return status;
}
