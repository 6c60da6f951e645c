/* SPDX-License-Identifier: MIT
 *
 * Many short texts in few blocks.
 */
#include "table/table_internal.h"

#include <string.h>

/* Blocks grow with what is held, so that their number stays logarithmic and at most half of the room is idle. */
enum { LEAST_SIZE = 4096, MOST_GROWTH = 1 << 22 };

static fescue_status text_store_grow(fescue_context *context, struct text_store **store, size_t length)
{
    struct text_store *old = *store, *new;
    size_t size = old == NULL ? LEAST_SIZE : old->size < MOST_GROWTH ? 2 * old->size : MOST_GROWTH;
    if (size < length)
        size = length;
    fescue_status status = memory_take(context, 1, sizeof *new + size, &new);
    if (status != FESCUE_OK)
        return status;
    new->older = old;
    new->size = size;
    *store = new;
    return FESCUE_OK;
}

fescue_status text_store_add(fescue_context *context, struct text_store **store, const char *text, size_t length,
                             char **out)
{
    if (*store == NULL || (*store)->size - (*store)->used <= length) {
        fescue_status status = text_store_grow(context, store, length + 1);
        if (status != FESCUE_OK)
            return status;
    }
    *out = (*store)->bytes + (*store)->used;
    memcpy(*out, text, length);
    (*out)[length] = '\0';
    (*store)->used += length + 1;
    return FESCUE_OK;
}

void text_store_join(struct text_store **store, struct text_store **other)
{
    struct text_store **end = other;
    while (*end != NULL)
        end = &(*end)->older;
    *end = *store;
    *store = *other;
    *other = NULL;
}

void text_store_free(fescue_context *context, struct text_store **store)
{
    while (*store != NULL) {
        struct text_store *older = (*store)->older;
        GIVE(context, store);
        *store = older;
    }
}
