/* SPDX-License-Identifier: MIT
 *
 * The labels that a worker has met (lexicon.h).
 */
#include "table/lexicon.h"

enum { WORD = sizeof(uint64_t), LEAST_SLOTS = 256 };

void lexicon_open(struct lexicon *lexicon)
{
    *lexicon = (struct lexicon){.key = {(uint64_t)(uintptr_t)lexicon}};
    double now = clock_wall(); /* as of the index of labels.c: two numbers that whoever wrote the file cannot know */
    memcpy(&lexicon->key[1], &now, sizeof now);
}

void lexicon_free(fescue_context *context, struct lexicon *lexicon)
{
    GIVE(context, &lexicon->slots);
    GIVE(context, &lexicon->label);
    GIVE(context, &lexicon->position);
}

static inline bool slot_is(const struct lexicon *lexicon, const struct lexicon_slot *slot,
                           const struct lexicon_label *label)
{
    return slot->head == label->head && slot->tail == label->tail && slot->length == label->length &&
           (label->length <= 2 * WORD ||
            memcmp(lexicon->label[slot->number - 1].text, label->text, label->length) == 0);
}

/* The slot of the label, or the free one where it belongs. */
static inline struct lexicon_slot *slot_find(const struct lexicon *lexicon, const struct lexicon_label *label)
{
    size_t at = label->hash & lexicon->mask;
    while (lexicon->slots[at].number != 0 && !slot_is(lexicon, &lexicon->slots[at], label))
        at = (at + 1) & lexicon->mask;
    return &lexicon->slots[at];
}

static void slot_fill(struct lexicon *lexicon, uint32_t number)
{
    const struct lexicon_label *label = &lexicon->label[number];
    *slot_find(lexicon, label) =
        (struct lexicon_slot){.head = label->head, .tail = label->tail, .length = label->length, .number = number + 1};
}

/* All labels into a new table of `count` slots. */
static fescue_status slots_refill(fescue_context *context, struct lexicon *lexicon, size_t count)
{
    struct lexicon_slot *slots;
    fescue_status status = TAKE(context, count, &slots);
    if (status != FESCUE_OK)
        return status;
    GIVE(context, &lexicon->slots);
    lexicon->slots = slots;
    lexicon->mask = count - 1;
    for (uint32_t number = 0; number < lexicon->count; number++)
        slot_fill(lexicon, number);
    return FESCUE_OK;
}

fescue_status lexicon_begin(fescue_context *context, struct lexicon *lexicon)
{
    const uint32_t kept = lexicon->settled < LEXICON_MOST ? lexicon->settled : 0;
    if (kept == lexicon->count)
        return FESCUE_OK;
    lexicon->count = lexicon->settled = kept;
    return slots_refill(context, lexicon, lexicon->mask + 1);
}

static fescue_status label_append(fescue_context *context, struct lexicon *lexicon, const struct lexicon_label *label)
{
    fescue_status status = FESCUE_OK;
    if (lexicon->count == lexicon->capacity) {
        uint32_t capacity = lexicon->capacity < LEAST_SLOTS / 2 ? LEAST_SLOTS / 2 : 2 * lexicon->capacity;
        TRY(RESIZE(context, capacity, &lexicon->label));
        TRY(RESIZE(context, capacity, &lexicon->position));
        lexicon->capacity = capacity;
    }
    lexicon->label[lexicon->count++] = *label;
done:
    return status;
}

fescue_status lexicon_find_or_add(fescue_context *context, struct lexicon *lexicon, const struct lexicon_label *label,
                                  uint32_t *number, bool *is_new)
{
    fescue_status status = FESCUE_OK;
    if (lexicon->slots == NULL || lexicon->count > lexicon->mask / 2)
        TRY(slots_refill(context, lexicon, lexicon->slots == NULL ? LEAST_SLOTS : 2 * (lexicon->mask + 1)));
    const struct lexicon_slot *slot = slot_find(lexicon, label);
    *is_new = slot->number == 0;
    if (*is_new) {
        TRY(label_append(context, lexicon, label));
        slot_fill(lexicon, lexicon->count - 1);
    }
    *number = slot->number - 1;
done:
    return status;
}

fescue_status lexicon_settle(fescue_context *context, struct lexicon *lexicon, struct label_list *list)
{
    fescue_status status = FESCUE_OK;
    for (; lexicon->settled < lexicon->count; lexicon->settled++) {
        struct lexicon_label *label = &lexicon->label[lexicon->settled];
        TRY(label_list_find_or_add(context, list, label->text, label->length, &lexicon->position[lexicon->settled]));
        label->text = list->labels.text[lexicon->position[lexicon->settled]];
    }
done:
    return status;
}
