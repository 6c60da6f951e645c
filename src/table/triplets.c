/* SPDX-License-Identifier: MIT
 *
 * A growing list of cells in any order.
 */
#include "table/table_internal.h"

#include <assert.h>

/* Half as much again: the old and the new arrays together stay below 2.5 times what is held, and the number of copies
   is logarithmic. The least length is a page or so. */
static fescue_status triplets_grow(fescue_context *context, struct triplet_list *list)
{
    enum { LEAST = 1024 };
    fescue_status status;
    uint64_t capacity = list->capacity < LEAST ? LEAST : list->capacity + list->capacity / 2;
    TRY(RESIZE(context, capacity, &list->row));
    TRY(RESIZE(context, capacity, &list->column));
    TRY(memory_resize(context, capacity, list->precision == FESCUE_SINGLE ? sizeof(float) : sizeof(double),
                      &list->value));
    list->capacity = capacity;
done:
    return status;
}

fescue_status triplets_append(fescue_context *context, struct triplet_list *list, uint32_t row, uint32_t column,
                              double value)
{
    if (list->count == list->capacity) {
        fescue_status status = triplets_grow(context, list);
        if (status != FESCUE_OK)
            return status;
    }
    uint64_t k = list->count++;
    list->row[k] = row;
    list->column[k] = column;
    if (list->precision == FESCUE_SINGLE)
        ((float *)list->value)[k] = (float)value;
    else
        ((double *)list->value)[k] = value;
    return FESCUE_OK;
}

double triplet_value(const struct triplet_list *list, uint64_t index)
{
    assert(index < list->count);
    return list->precision == FESCUE_SINGLE ? (double)((const float *)list->value)[index]
                                            : ((const double *)list->value)[index];
}

void triplets_free(fescue_context *context, struct triplet_list *list)
{
    GIVE(context, &list->row);
    GIVE(context, &list->column);
    GIVE(context, &list->value);
    list->count = list->capacity = 0;
}
