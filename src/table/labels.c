/* SPDX-License-Identifier: MIT
 *
 * Names of rows and columns: the list, and finding a name in it.
 *
 * The index is a table of slots with open addressing, at most half of them taken, so that a search looks at two or
 * three slots on average. Labels come from files that anybody may have written, so the hash is keyed (sip.h), with a
 * key that changes from run to run. Positions do not depend on it: they follow the order of the file.
 */
#include "table/sip.h"
#include "table/table_internal.h"

#include <assert.h>
#include <stdio.h>
#include <string.h>

/* ---- hash ------------------------------------------------------------------------------------------------------ */

static uint32_t text_hash(const uint64_t key[2], const char *text, size_t length)
{
    struct sip s = sip_open(key);
    uint64_t word, last = (uint64_t)length << 56;
    size_t whole = length / sizeof word * sizeof word;
    for (size_t k = 0; k < whole; k += sizeof word) {
        memcpy(&word, text + k, sizeof word);
        sip_word(&s, word);
    }
    for (size_t k = whole; k < length; k++)
        last |= (uint64_t)(unsigned char)text[k] << 8 * (k - whole);
    sip_word(&s, last);
    return sip_close(&s);
}

/* ---- index ----------------------------------------------------------------------------------------------------- */

struct label_index {
    const struct labels *labels; /* borrowed; may grow */
    struct slot {
        const char *text; /* the label's, so that a look costs one jump less; NULL: the slot is free */
        uint32_t hash, position;
    } * slots;
    size_t mask; /* number of slots - 1, a power of two less one */
    uint32_t taken;
    uint64_t key[2];
};

/* The text may hold a zero byte, where it was not looked for yet; then it is no label. */
static bool text_is(const char *label, const char *text, size_t length)
{
    return strncmp(label, text, length) == 0 && strlen(label) == length;
}

/* The slot that holds the text, or the free one where it belongs. */
static struct slot *slot_find(const struct label_index *index, uint32_t hash, const char *text, size_t length)
{
    for (size_t at = hash & index->mask;; at = (at + 1) & index->mask) {
        struct slot *slot = &index->slots[at];
        if (slot->text == NULL || (slot->hash == hash && text_is(slot->text, text, length)))
            return slot;
    }
}

static fescue_status slots_resize(fescue_context *context, struct label_index *index, size_t count)
{
    struct slot *old = index->slots;
    size_t old_count = old == NULL ? 0 : index->mask + 1;
    struct slot *slots;
    fescue_status status = TAKE(context, count, &slots);
    if (status != FESCUE_OK)
        return status;
    index->slots = slots;
    index->mask = count - 1;
    for (size_t k = 0; k < old_count; k++) {
        if (old[k].text == NULL)
            continue;
        size_t at = old[k].hash & index->mask;
        while (slots[at].text != NULL)
            at = (at + 1) & index->mask;
        slots[at] = old[k];
    }
    GIVE(context, &old);
    return FESCUE_OK;
}

/* Learns label i of the list; of two equal ones the first stays. */
static fescue_status label_index_add(fescue_context *context, struct label_index *index, uint32_t i)
{
    if (index->slots == NULL || index->taken >= (index->mask + 1) / 2) {
        fescue_status status = slots_resize(context, index, index->slots == NULL ? 64 : 2 * (index->mask + 1));
        if (status != FESCUE_OK)
            return status;
    }
    const char *text = index->labels->text[i];
    size_t length = strlen(text);
    uint32_t hash = text_hash(index->key, text, length);
    struct slot *slot = slot_find(index, hash, text, length);
    if (slot->text == NULL) {
        *slot = (struct slot){text, hash, i};
        index->taken++;
    }
    return FESCUE_OK;
}

fescue_status label_index_create(fescue_context *context, const struct labels *labels, struct label_index **out)
{
    *out = NULL;
    struct label_index *index;
    fescue_status status;
    TRY(TAKE(context, 1, &index));
    index->labels = labels;
    /* Two numbers that whoever wrote the file cannot know: where the index happens to lie, and when. */
    double now = clock_wall();
    index->key[0] = (uint64_t)(uintptr_t)index;
    memcpy(&index->key[1], &now, sizeof now);
    for (uint32_t i = 0; labels->text != NULL && i < labels->count; i++)
        TRY(label_index_add(context, index, i));
    *out = index;
done:
    if (status != FESCUE_OK)
        label_index_destroy(context, &index);
    return status;
}

/* A line of an unlabelled side is called by its number from 1, written without sign or leading zeros. */
static bool number_find(uint32_t count, const char *text, size_t length, uint32_t *position)
{
    uint64_t number = 0;
    if (length == 0 || length > 10 || text[0] == '0')
        return false;
    for (size_t k = 0; k < length; k++) {
        if (text[k] < '0' || text[k] > '9')
            return false;
        number = number * 10 + (uint64_t)(text[k] - '0');
    }
    *position = (uint32_t)(number - 1);
    return number <= count;
}

bool label_index_find(const struct label_index *index, const char *text, size_t length, uint32_t *position)
{
    if (index->labels->text == NULL)
        return number_find(index->labels->count, text, length, position);
    if (index->slots == NULL)
        return false;
    const struct slot *slot = slot_find(index, text_hash(index->key, text, length), text, length);
    *position = slot->position;
    return slot->text != NULL;
}

void label_index_destroy(fescue_context *context, struct label_index **index)
{
    if (*index == NULL)
        return;
    GIVE(context, &(*index)->slots);
    GIVE(context, index);
}

/* ---- lists ----------------------------------------------------------------------------------------------------- */

const char *label_text(const struct labels *labels, uint32_t i, char buffer[16])
{
    assert(i < labels->count);
    if (labels->text != NULL)
        return labels->text[i];
    snprintf(buffer, 16, "%" PRIu64, (uint64_t)i + 1);
    return buffer;
}

fescue_status label_list_add(fescue_context *context, struct label_list *list, const char *text, size_t length)
{
    fescue_status status;
    struct labels *labels = &list->labels;
    if (labels->count == list->capacity) {
        uint64_t capacity = list->capacity < 64 ? 64 : (uint64_t)list->capacity + list->capacity / 2;
        if (capacity > TABLE_MOST_LINES)
            capacity = TABLE_MOST_LINES;
        if (labels->count >= capacity)
            return FAIL(context, FESCUE_BAD_DATA, "there are more than %" PRIu32 " labels on one side",
                        TABLE_MOST_LINES);
        TRY(RESIZE(context, capacity, &labels->text));
        list->capacity = (uint32_t)capacity;
    }
    TRY(text_store_add(context, &labels->store, text, length, &labels->text[labels->count]));
    labels->count++;
    if (list->index != NULL)
        TRY(label_index_add(context, list->index, labels->count - 1));
done:
    return status;
}

fescue_status label_list_find_or_add(fescue_context *context, struct label_list *list, const char *text, size_t length,
                                     uint32_t *position)
{
    fescue_status status = FESCUE_OK;
    if (list->index == NULL)
        TRY(label_index_create(context, &list->labels, &list->index));
    if (list->labels.count > 0 && text_is(list->labels.text[list->last], text, length)) {
        *position = list->last;
        return FESCUE_OK;
    }
    if (!label_index_find(list->index, text, length, position)) {
        TRY(label_list_add(context, list, text, length));
        *position = list->labels.count - 1;
    }
    list->last = *position;
done:
    return status;
}

void labels_free(fescue_context *context, struct labels *labels)
{
    GIVE(context, &labels->text);
    text_store_free(context, &labels->store);
    labels->count = 0;
}

void label_list_finish(fescue_context *context, struct label_list *list, struct labels *labels)
{
    label_index_destroy(context, &list->index);
    *labels = list->labels;
    *list = (struct label_list){0};
}

void label_list_free(fescue_context *context, struct label_list *list)
{
    label_index_destroy(context, &list->index);
    labels_free(context, &list->labels);
    list->capacity = 0;
}
