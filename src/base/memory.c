/* SPDX-License-Identifier: MIT
 *
 * One counting allocator over the take and give of the surroundings.
 *
 *     what `take` returned                       what the caller gets, aligned to 64
 *     |                                          |
 *     [ 0 to 63 bytes | struct block_header, 64  | the block, zeroed ]
 *
 * 64 is the line of a cache and the width of the widest vector register, so that no loop needs a ragged start and no
 * two workers share a line. Bytes are counted as asked for, without header and padding: what a caller can reason about.
 */
#include "base/context_internal.h"

#include <assert.h>
#include <inttypes.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <sys/mman.h>

enum { ALIGNMENT = 64 };

/* Marks a live block, so that giving back a stray pointer or the same block twice is noticed. Any odd pattern does. */
static const uint64_t alive_mark = 0x6665736375650b10;

struct block_header {
    _Alignas(ALIGNMENT) void *taken; /* what the surroundings gave */
    size_t bytes;
    uint64_t mark;
};
_Static_assert(sizeof(struct block_header) == ALIGNMENT, "the header fills the room before the block");

bool size_product(size_t a, size_t b, size_t *product)
{
    return !__builtin_mul_overflow(a, b, product);
}

static struct block_header *block_header_of(void *block)
{
    struct block_header *header = (struct block_header *)block - 1;
    assert(header->mark == alive_mark);
    return header;
}

static void pointer_store(void *place, void *block)
{
    memcpy(place, &block, sizeof block);
}

static void *pointer_load(const void *place)
{
    void *block;
    memcpy(&block, place, sizeof block);
    return block;
}

/* A block that spans pages of 2 MB gets such, where the system has them: its first touch then costs a fifth, and so do
   random accesses, which nearly all miss the table of small pages. Only whole pages inside of it: no byte more is used.
 */
static void pages_enlarge(void *taken, size_t size)
{
    uintptr_t first = ((uintptr_t)taken + MEMORY_LARGE_PAGE - 1) & ~(uintptr_t)(MEMORY_LARGE_PAGE - 1);
    uintptr_t end = ((uintptr_t)taken + size) & ~(uintptr_t)(MEMORY_LARGE_PAGE - 1);
    if (first < end)
        (void)madvise((void *)first, end - first, MADV_HUGEPAGE); /* a wish: it may be refused */
}

/* calloc rather than malloc: pages that are never touched then cost nothing. */
static void *taken_zeroed(const struct fescue_hooks *hooks, size_t size)
{
    if (hooks->take == NULL) {
        void *zeroed = calloc(1, size);
        if (zeroed != NULL)
            pages_enlarge(zeroed, size);
        return zeroed;
    }
    void *taken = hooks->take(hooks->data, size);
    if (taken != NULL)
        memset(taken, 0, size);
    return taken;
}

/* "12.3 MB"; the tenth only where there are fewer than three digits, and never from the locale. */
static const char *size_text(uint64_t bytes, char text[32])
{
    static const char *const units[] = {"kB", "MB", "GB", "TB", "PB", "EB"};
    uint64_t scale = 1000;
    size_t unit = 0;
    while (bytes / scale >= 1000) {
        scale *= 1000;
        unit++;
    }
    uint64_t whole = bytes / scale, tenth = bytes % scale / (scale / 10);
    if (bytes < 1000)
        snprintf(text, 32, "%" PRIu64 " bytes", bytes);
    else if (whole >= 100 || tenth == 0)
        snprintf(text, 32, "%" PRIu64 " %s", whole, units[unit]);
    else
        snprintf(text, 32, "%" PRIu64 ".%" PRIu64 " %s", whole, tenth, units[unit]);
    return text;
}

/* Counts `bytes` as alive, unless that would pass the limit; *now is what is alive with them. */
static bool bytes_count(struct memory_counters *memory, size_t bytes, uint64_t *now)
{
    uint64_t limit = atomic_load(&memory->limit);
    *now = atomic_fetch_add(&memory->bytes, bytes) + bytes;
    if (limit != 0 && *now > limit) {
        atomic_fetch_sub(&memory->bytes, bytes);
        return false;
    }
    return true;
}

static void peak_raise(struct memory_counters *memory, uint64_t now)
{
    uint64_t peak = atomic_load(&memory->peak_bytes);
    while (now > peak && !atomic_compare_exchange_weak(&memory->peak_bytes, &peak, now))
        ;
}

static void *block_create(fescue_context *context, size_t bytes)
{
    char *taken = taken_zeroed(&context->hooks, bytes + sizeof(struct block_header) + ALIGNMENT - 1);
    if (taken == NULL)
        return NULL;
    uintptr_t first = (uintptr_t)taken + sizeof(struct block_header);
    char *block = taken + sizeof(struct block_header) + (-first & (ALIGNMENT - 1));
    struct block_header *header = (struct block_header *)(void *)block - 1;
    *header = (struct block_header){.taken = taken, .bytes = bytes, .mark = alive_mark};
    return block;
}

/* A counted block of bytes > 0, or NULL; *over_limit tells which of the two reasons it was. */
static void *block_take(fescue_context *context, size_t bytes, bool *over_limit)
{
    struct memory_counters *memory = &context->memory;
    uint64_t now;
    atomic_fetch_add(&memory->calls, 1);
    *over_limit = !bytes_count(memory, bytes, &now);
    if (*over_limit)
        return NULL;
    void *block = block_create(context, bytes);
    if (block == NULL) {
        atomic_fetch_sub(&memory->bytes, bytes);
        return NULL;
    }
    atomic_fetch_add(&memory->blocks, 1);
    peak_raise(memory, now);
    return block;
}

/* The bytes of the product, when they and the room around them can be addressed. */
static bool block_size(size_t count, size_t size, size_t *bytes)
{
    size_t total;
    return size_product(count, size, bytes) &&
           !__builtin_add_overflow(*bytes, sizeof(struct block_header) + ALIGNMENT, &total);
}

fescue_status memory_take(fescue_context *context, size_t count, size_t size, void *out)
{
    char asked[32], limit[32];
    size_t bytes;
    bool over_limit;
    pointer_store(out, NULL);
    if (!block_size(count, size, &bytes))
        return FAIL(context, FESCUE_NO_MEMORY, "%zu times %zu bytes are more than can be addressed", count, size);
    if (bytes == 0)
        return FESCUE_OK;
    void *block = block_take(context, bytes, &over_limit);
    pointer_store(out, block);
    if (block != NULL)
        return FESCUE_OK;
    if (over_limit)
        return FAIL(context, FESCUE_NO_MEMORY, "%s more would pass the memory limit of %s", size_text(bytes, asked),
                    size_text(atomic_load(&context->memory.limit), limit));
    return FAIL(context, FESCUE_NO_MEMORY, "the system has no %s of memory left", size_text(bytes, asked));
}

void memory_give(fescue_context *context, void *block)
{
    void *old = pointer_load(block);
    if (old == NULL)
        return;
    struct block_header *header = block_header_of(old);
    void *taken = header->taken;
    atomic_fetch_sub(&context->memory.bytes, header->bytes);
    atomic_fetch_sub(&context->memory.blocks, 1);
    header->mark = 0;
    if (context->hooks.give != NULL)
        context->hooks.give(context->hooks.data, taken);
    else
        free(taken);
    pointer_store(block, NULL);
}

/* The new block takes the place of the old one and what fits of its bytes. */
static void block_replace(fescue_context *context, void *block, void *new)
{
    void *old = pointer_load(block);
    if (old != NULL && new != NULL) {
        size_t kept = block_header_of(old)->bytes, bytes = block_header_of(new)->bytes;
        memcpy(new, old, kept < bytes ? kept : bytes);
    }
    memory_give(context, block);
    pointer_store(block, new);
}

fescue_status memory_resize(fescue_context *context, size_t count, size_t size, void *block)
{
    void *old = pointer_load(block), *new;
    size_t bytes;
    bool over_limit;
    if (old != NULL && block_size(count, size, &bytes) && bytes > 0 && bytes <= block_header_of(old)->bytes) {
        new = block_take(context, bytes, &over_limit);
        if (new != NULL)
            block_replace(context, block, new);
        return FESCUE_OK;
    }
    fescue_status status = memory_take(context, count, size, &new);
    if (status == FESCUE_OK)
        block_replace(context, block, new);
    return status;
}

fescue_status memory_copy_text(fescue_context *context, const char *text, size_t length, char **out)
{
    *out = NULL;
    if (length == SIZE_MAX)
        return FAIL(context, FESCUE_NO_MEMORY, "a text of %zu bytes is more than can be addressed", length);
    fescue_status status = TAKE(context, length + 1, out);
    if (status == FESCUE_OK && length > 0)
        memcpy(*out, text, length);
    return status;
}

void memory_limit_set(fescue_context *context, uint64_t bytes)
{
    atomic_store(&context->memory.limit, bytes);
}

struct fescue_memory fescue_memory_usage(const fescue_context *context)
{
    const struct memory_counters *memory = &context->memory;
    return (struct fescue_memory){.blocks = atomic_load(&memory->blocks),
                                  .bytes = atomic_load(&memory->bytes),
                                  .peak_bytes = atomic_load(&memory->peak_bytes),
                                  .calls = atomic_load(&memory->calls)};
}

/* The bytes of a piece, rounded up so that the next one is aligned. */
static bool piece_size(size_t count, size_t size, size_t *bytes)
{
    if (!size_product(count, size, bytes) || __builtin_add_overflow(*bytes, ALIGNMENT - 1, bytes))
        return false;
    *bytes &= ~(size_t)(ALIGNMENT - 1);
    return true;
}

void arena_reserve(struct arena *arena, size_t count, size_t size)
{
    size_t bytes;
    assert(arena->base == NULL);
    if (!piece_size(count, size, &bytes) || __builtin_add_overflow(arena->reserved, bytes, &arena->reserved))
        arena->overflow = true;
}

fescue_status arena_open(fescue_context *context, struct arena *arena)
{
    assert(arena->base == NULL);
    if (arena->overflow)
        return FAIL(context, FESCUE_NO_MEMORY, "the workspace is larger than can be addressed");
    arena->carved = 0;
    /* Never empty, so that a piece of 0 bytes still has an address. */
    return TAKE(context, arena->reserved + ALIGNMENT, &arena->base);
}

void *arena_carve(struct arena *arena, size_t count, size_t size)
{
    size_t bytes = 0;
    bool fits = piece_size(count, size, &bytes) && bytes <= arena->reserved - arena->carved;
    assert(arena->base != NULL && fits);
    (void)fits;
    void *piece = arena->base + arena->carved;
    arena->carved += bytes;
    return piece;
}

void arena_close(fescue_context *context, struct arena *arena)
{
    if (arena == NULL)
        return;
    GIVE(context, &arena->base);
    *arena = (struct arena){0};
}
