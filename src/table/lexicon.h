/* SPDX-License-Identifier: MIT
 *
 * The labels of one side that one worker has met, beside the list of all (labels.c), which chunks are entered into in
 * their order only.
 *
 *     label[0 .. settled)        have their position in the list of all, and their text in its store
 *     label[settled .. count)    are new in the chunk that is read, and their text lies in it
 *
 * Looking up a text takes no lock and asks nobody; when the chunk's turn has come, its new labels are settled. Hash
 * table with open addressing, at most half full; labels of up to 16 bytes are told apart by two words, without their
 * text. When there are LEXICON_MOST labels it is emptied: it is a cache, and what it has forgotten is settled again.
 */
#ifndef FESCUE_TABLE_LEXICON_H
#define FESCUE_TABLE_LEXICON_H

#include "table/sip.h"
#include "table/table_internal.h"

#include <endian.h>

/* Some 14 MB; a chunk has room for half as many. */
enum { LEXICON_MOST = 1 << 18 };

struct lexicon_label {
    uint64_t head, tail; /* the first and the last eight bytes; of less than eight, those and zero */
    const char *text;
    uint32_t length, hash;
};
struct lexicon {
    struct lexicon_slot {
        uint64_t head, tail;
        uint32_t length, number; /* number: of the label, from 1; 0: the slot is free */
        uint64_t spare;          /* so that no slot lies in two lines of memory */
    } * slots;
    size_t mask;
    struct lexicon_label *label;
    uint32_t *position; /* of each label, in the list of all */
    uint32_t count, capacity, settled;
    uint64_t key[2];
};
void lexicon_open(struct lexicon *lexicon); /* empty; takes no memory */
/* Before a chunk: forgets what was never settled, or all. */
fescue_status lexicon_begin(fescue_context *context, struct lexicon *lexicon);
/* Behind a chunk: enters its new labels into the list of all. */
fescue_status lexicon_settle(fescue_context *context, struct lexicon *lexicon, struct label_list *list);
void lexicon_free(fescue_context *context, struct lexicon *lexicon);
/* The number of a label, made for this lexicon, which is added when it is new; *is_new. */
fescue_status lexicon_find_or_add(fescue_context *context, struct lexicon *lexicon, const struct lexicon_label *label,
                                  uint32_t *number, bool *is_new);

static inline uint64_t lexicon_word(const char *text)
{
    uint64_t word;
    memcpy(&word, text, sizeof word);
    return le64toh(word);
}

/* The label of a text behind which eight bytes can be read. Each member is stored as it will be loaded: a copy of the
   whole would have to wait until it is in the cache. The length is a word of its own only where the text is longer than
   two, since no more than nine shorter ones have the same two words. */
static inline void lexicon_label_make(const struct lexicon *lexicon, const char *text, uint32_t length,
                                      struct lexicon_label *label)
{
    enum { WORD = sizeof(uint64_t) };
    const bool is_short = length < WORD;
    const uint64_t head = lexicon_word(text) & (is_short ? (UINT64_C(1) << 8 * length) - 1 : UINT64_MAX);
    const uint64_t tail = is_short ? 0 : lexicon_word(text + length - WORD);
    struct sip s = sip_open(lexicon->key);
    sip_word(&s, head);
    if (length > 2 * WORD) {
        for (size_t k = WORD; k + WORD <= length; k += WORD)
            sip_word(&s, lexicon_word(text + k));
        sip_word(&s, length);
    }
    sip_word(&s, tail);
    label->head = head;
    label->tail = tail;
    label->text = text;
    label->length = length;
    label->hash = sip_close(&s);
}

/* It will be looked for: the slot can be on its way. */
static inline void lexicon_expect(const struct lexicon *lexicon, const struct lexicon_label *label)
{
    if (lexicon->slots != NULL)
        __builtin_prefetch(&lexicon->slots[label->hash & lexicon->mask]);
}

/* Whether the label stands at `text`, where as many bytes, and eight, can be read. */
static inline bool lexicon_label_is(const struct lexicon_label *label, const char *text)
{
    enum { WORD = sizeof(uint64_t) };
    if (label->length < WORD)
        return ((lexicon_word(text) ^ label->head) & ((UINT64_C(1) << 8 * label->length) - 1)) == 0;
    return lexicon_word(text) == label->head && lexicon_word(text + label->length - WORD) == label->tail &&
           (label->length <= 2 * WORD || memcmp(text, label->text, label->length) == 0);
}

#endif
