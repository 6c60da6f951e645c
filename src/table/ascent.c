/* SPDX-License-Identifier: MIT
 *
 * Cells that come in order, row by row and ascending within each, go straight to where they stay.
 *
 * Most files are in order. Then nothing is gained by a pile that is counted and sorted: a block of the text, just
 * parsed and still in the cache, is copied to its place behind those before it, and its memory serves the next one.
 *
 *     claim   one block after the other, in the order of the text: does it go on where the last one ended?
 *     fill    beside others: positions, values, and where the rows begin that begin in the block
 *
 * The first block that does not go on ends it; that one and all behind it go to the pile, and if there are any, what is
 * here goes to the pile as well when that is built (ascent_leave), and is sorted with the rest.
 *
 * The room is that of the entries which the header promises, if the text is long enough to hold them: an entry takes at
 * least six characters. What is never filled is never touched.
 */
#include "table/table_internal.h"

#include <assert.h>
#include <string.h>

fescue_status ascent_open(struct pile *pile, uint64_t rows, uint64_t entries, uint64_t text_size)
{
    enum { LEAST_LINE = sizeof "1 1 1" }; /* with its line feed */
    fescue_status status = FESCUE_OK;
    struct ascent *ascent = &pile->ascent;
    if (pile->keeps_texts || pile->mirror != MIRROR_NONE || entries == 0 || entries > text_size / LEAST_LINE ||
        rows > entries)
        return FESCUE_OK;
    TRY(TAKE(pile->context, rows + 1, &ascent->start));
    TRY(TAKE(pile->context, entries, &ascent->across));
    TRY(memory_take(pile->context, entries, cell_size(pile->precision), &ascent->value));
    ascent->rows = (uint32_t)rows;
    ascent->capacity = entries;
    ascent->is_open = true;
done:
    return status;
}

void ascent_free(struct pile *pile)
{
    struct ascent *ascent = &pile->ascent;
    GIVE(pile->context, &ascent->start);
    GIVE(pile->context, &ascent->across);
    GIVE(pile->context, &ascent->value);
    *ascent = (struct ascent){0};
}

bool pile_block_ascends(const struct pile_block *block)
{
    bool falls = false;
    for (uint32_t k = 1; k < block->count; k++)
        falls |= block->row[k] < block->row[k - 1] ||
                 (block->row[k] == block->row[k - 1] && block->column[k] <= block->column[k - 1]);
    return !falls;
}

/* The rows up to and with `row`, behind the last one, begin at `place`. */
static void rows_begin(const struct ascent *ascent, uint32_t first, uint32_t row, uint64_t place)
{
    for (uint64_t i = first; i <= row; i++)
        ascent->start[i] = place;
}

bool ascent_claim(struct pile *pile, struct pile_block *block)
{
    struct ascent *ascent = &pile->ascent;
    if (!ascent->is_open)
        return false;
    if (block->count > 0) {
        const uint32_t row = block->row[0], last = block->count - 1;
        bool goes_on =
            ascent->count == 0 || row > ascent->row || (row == ascent->row && block->column[0] > ascent->column);
        if (!goes_on || !block->ascends || block->count > ascent->capacity - ascent->count) {
            ascent_end(pile);
            return false;
        }
        if (ascent->count == 0 || row > ascent->row)
            rows_begin(ascent, ascent->count == 0 ? 0 : ascent->row + 1, row, ascent->count);
        ascent->row = block->row[last];
        ascent->column = block->column[last];
    }
    block->is_claimed = true;
    block->place = ascent->count;
    ascent->count += block->count;
    return true;
}

void ascent_end(struct pile *pile)
{
    pile->ascent.is_open = false;
    if (pile->ascent.count == 0)
        ascent_free(pile);
}

void ascent_fill(const struct pile *pile, const struct pile_block *block)
{
    const struct ascent *ascent = &pile->ascent;
    const size_t size = cell_size(pile->precision);
    if (!block->is_claimed || block->count == 0)
        return;
    memcpy(ascent->across + block->place, block->column, block->count * sizeof *block->column);
    memcpy((char *)ascent->value + block->place * size, block->value, block->count * size);
    for (uint32_t k = 1; k < block->count; k++)
        if (block->row[k] != block->row[k - 1])
            rows_begin(ascent, block->row[k - 1] + 1, block->row[k], block->place + k);
}

void ascent_become(struct pile *pile, struct half *half)
{
    struct ascent *ascent = &pile->ascent;
    assert(ascent->count == ascent->capacity && ascent->rows == half->lines);
    rows_begin(ascent, ascent->row + 1, ascent->rows, ascent->count);
    half->start = ascent->start;
    half->across = ascent->across;
    half->value = ascent->value;
    *ascent = (struct ascent){0};
}

/* Block after block, from the last one back, so that each is put before those that are there. */
fescue_status ascent_leave(struct pile *pile)
{
    enum { MOST = 1 << 20 };
    fescue_status status = FESCUE_OK;
    struct ascent *ascent = &pile->ascent;
    const size_t size = cell_size(pile->precision);
    uint32_t row = ascent->row;
    for (uint64_t left = ascent->count; left > 0;) {
        const uint32_t count = left < MOST ? (uint32_t)left : MOST;
        struct pile_block *block;
        TRY(pile_block_create(pile, NULL, count, &block));
        left -= count;
        block->count = count;
        memcpy(block->column, ascent->across + left, count * sizeof *block->column);
        memcpy(block->value, (const char *)ascent->value + left * size, count * size);
        for (uint32_t k = count; k > 0; k--) {
            while (ascent->start[row] > left + k - 1)
                row--;
            block->row[k - 1] = row;
        }
        pile_block_prepend(pile, block);
    }
    ascent_free(pile);
done:
    return status;
}
