/* SPDX-License-Identifier: MIT
 *
 * Cells as they come from a file, on their way into the store.
 *
 * Memory for n entries in single precision: 12 n bytes of pile, then 8 n for the rows; the pile is given back before
 * the columns take another 8 n. So the peak is 20 n, and what a header promises is never believed: a block is taken
 * when the entries for it are there. (Texts, kept for small tables only, need the pile until they are in order.)
 *
 * The line of an entry, wanted only for a message about duplicates, is kept in runs: an ordinary file is one run.
 */
#include "table/table_internal.h"

#include <assert.h>

static size_t value_size(enum fescue_precision precision)
{
    return precision == FESCUE_SINGLE ? sizeof(float) : sizeof(double);
}

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
    odd_texts_free(pile->context, &pile->odd);
}

static fescue_status block_create(const struct pile *pile, struct pile_block **out)
{
    struct pile_block *block;
    size_t size = value_size(pile->precision);
    size_t bytes = sizeof *block + PILE_BLOCK * (size + (pile->keeps_texts ? 1 : 0));
    fescue_status status = memory_take(pile->context, 1, bytes, &block);
    if (status == FESCUE_OK) {
        block->value = block + 1; /* aligned for doubles: the struct holds pointers */
        block->code = pile->keeps_texts ? (uint8_t *)block->value + PILE_BLOCK * size : NULL;
    }
    *out = block;
    return status;
}

static fescue_status block_append(struct pile *pile)
{
    struct pile_block *block;
    fescue_status status = block_create(pile, &block);
    if (status != FESCUE_OK)
        return status;
    if (pile->last == NULL)
        pile->first = block;
    else
        pile->last->next = block;
    pile->last = block;
    return FESCUE_OK;
}

static fescue_status run_append(struct pile *pile, uint64_t line)
{
    if (pile->run_count == pile->run_capacity) {
        uint64_t capacity = pile->run_capacity < 16 ? 16 : pile->run_capacity + pile->run_capacity / 2;
        fescue_status status = RESIZE(pile->context, capacity, &pile->runs);
        if (status != FESCUE_OK)
            return status;
        pile->run_capacity = capacity;
    }
    pile->runs[pile->run_count++] = (struct line_run){pile->count, line};
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

static fescue_status text_keep(struct pile *pile, const struct pile_entry *entry, double value, uint8_t *code)
{
    size_t length = (size_t)(entry->end - entry->text);
    const struct text_style style = {pile->precision, pile->decimal};
    *code = (uint8_t)text_code_of(value, style, entry->text, length);
    return *code == TEXT_ODD ? odd_texts_add(pile->context, &pile->odd, entry->text, length) : FESCUE_OK;
}

fescue_status pile_add(struct pile *pile, const struct pile_entry *entry)
{
    fescue_status status = FESCUE_OK;
    if (pile->last == NULL || pile->last->count == PILE_BLOCK)
        TRY(block_append(pile));
    if (pile->keeps_lines && entry->line != pile->next_line)
        TRY(run_append(pile, entry->line));
    struct pile_block *block = pile->last;
    uint32_t k = block->count;
    block->row[k] = entry->row;
    block->column[k] = entry->column;
    if (pile->precision == FESCUE_SINGLE)
        ((float *)block->value)[k] = (float)entry->value;
    else
        ((double *)block->value)[k] = entry->value;
    if (pile->keeps_texts)
        TRY(text_keep(pile, entry, pile->precision == FESCUE_SINGLE ? (double)(float)entry->value : entry->value,
                      &block->code[k]));
    block->count++;
    pile->count++;
    pile->next_line = entry->line + 1;
done:
    return status;
}

static void blocks_free(struct pile *pile)
{
    while (pile->first != NULL) {
        struct pile_block *next = pile->first->next;
        GIVE(pile->context, &pile->first);
        pile->first = next;
    }
    pile->last = NULL;
}

void pile_free(struct pile *pile)
{
    blocks_free(pile);
    GIVE(pile->context, &pile->runs);
    odd_texts_free(pile->context, &pile->odd);
}

/* ---- building --------------------------------------------------------------------------------------------------- */

/* The entries of the other triangle. */
static void block_mirror(const struct pile *pile, const struct pile_block *from, struct pile_block *to)
{
    bool negated = pile->mirror == MIRROR_NEGATED;
    to->count = 0;
    for (uint32_t k = 0; k < from->count; k++) {
        if (from->row[k] == from->column[k])
            continue;
        uint32_t at = to->count++;
        to->row[at] = from->column[k];
        to->column[at] = from->row[k];
        if (pile->precision == FESCUE_SINGLE) {
            float value = ((const float *)from->value)[k];
            ((float *)to->value)[at] = negated ? -value : value;
        } else {
            double value = ((const double *)from->value)[k];
            ((double *)to->value)[at] = negated ? -value : value;
        }
    }
}

static uint64_t cells_of(const struct pile *pile)
{
    uint64_t count = pile->count;
    if (pile->mirror != MIRROR_NONE)
        for (const struct pile_block *block = pile->first; block != NULL; block = block->next)
            for (uint32_t k = 0; k < block->count; k++)
                count += block->row[k] != block->column[k];
    return count;
}

/* Lays the entries and their mirror images into the rows. */
static fescue_status rows_place(const struct pile *pile, struct cells *cells)
{
    fescue_status status;
    struct half *rows = &cells->by_row;
    struct pile_block *mirrored = NULL;
    if (pile->mirror != MIRROR_NONE)
        TRY(block_create(pile, &mirrored));
    TRY(half_open(pile->context, cells->rows, cells->columns, cells->count, cells->precision, rows));
    for (const struct pile_block *block = pile->first; block != NULL; block = block->next) {
        half_count(rows, block->row, block->count);
        if (mirrored != NULL) {
            block_mirror(pile, block, mirrored);
            half_count(rows, mirrored->row, mirrored->count);
        }
    }
    half_begin(rows);
    for (const struct pile_block *block = pile->first; block != NULL; block = block->next) {
        half_place(rows, block->row, block->column, block->value, block->count, cells->precision);
        if (mirrored != NULL) {
            block_mirror(pile, block, mirrored);
            half_place(rows, mirrored->row, mirrored->column, mirrored->value, mirrored->count, cells->precision);
        }
    }
    half_end(rows);
done:
    GIVE(pile->context, &mirrored);
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
    TRY(rows_place(pile, cells));
    if (duplicates == FESCUE_DUPLICATES_REFUSE)
        TRY(duplicates_refuse(pile, stream, table));
    if (!pile->keeps_texts)
        blocks_free(pile);
    TRY(cells_finish(pile->context, duplicates, cells, &table->duplicates));
    if (pile->keeps_texts)
        TRY(texts_create(pile, cells, duplicates, &table->texts));
done:
    pile_free(pile);
    return status;
}
