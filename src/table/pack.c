/* SPDX-License-Identifier: MIT
 *
 * What writing and reading a pack share: where its parts lie, and the sum over its bytes.
 *
 * The sum. Words of 64 bits go in turn to 32 lanes h, so that as many products are on their way at once:
 *
 *     h <- (h xor w) K;   h <- h xor h >> 32          K odd
 *
 * Both steps are one to one in h, for any w, and in w, for any h: a change of one word changes its lane, and no later
 * word takes it back, unless it is changed too, in the one of 2^64 ways that does. The shift brings the upper half,
 * into which products carry everything, down again; without it two flipped signs in one lane would cancel. At the end
 * the lanes go through the same step one after the other, the number of bytes first.
 */
#include "table/pack_internal.h"

#include <string.h>

const char pack_magic[16] =
    "fescue pack\r\n\x1a\n"; /* changed by whatever takes it for a text and converts its lines */

_Static_assert(sizeof(struct pack_header) <= PACK_HEADER, "the header has its room");
_Static_assert(sizeof(struct pack_header) == offsetof(struct pack_header, sum) + sizeof(uint64_t), "and no holes");

bool pack_places_find(const struct pack_header *header, struct pack_places *places)
{
    uint64_t at = PACK_HEADER;
    for (int k = 0; k < PACK_PARTS; k++) {
        places->part[k] = at;
        if (__builtin_add_overflow(at, header->part_bytes[k], &at) ||
            __builtin_add_overflow(at, PACK_ALIGNMENT - 1, &at))
            return false;
        at &= ~(uint64_t)(PACK_ALIGNMENT - 1);
    }
    places->end = places->sums = at;
    places->blocks = (at - PACK_HEADER + PACK_BLOCK - 1) / PACK_BLOCK;
    return !__builtin_add_overflow(at, (places->blocks + 1) * sizeof(uint64_t), &places->file_bytes) &&
           places->file_bytes <= SIZE_MAX;
}

enum { LANES = 32, STRIDE = LANES * sizeof(uint64_t) };

static const uint64_t multiplier =
    0x9e3779b97f4a7c15; /* 2^64 over the golden ratio, made odd: its bits have no pattern */

static inline uint64_t mixed(uint64_t h, uint64_t word)
{
    h = (h ^ word) * multiplier;
    return h ^ h >> 32;
}

/* Eight lanes at a time, as many as registers hold, through so few bytes that the cache has them for the others. */
static void strides_add(uint64_t h[LANES], const unsigned char *bytes, size_t count)
{
    enum { TOGETHER = 8, NEAR = 16 * STRIDE };
    for (size_t near = 0; near < count; near += NEAR) {
        const size_t end = count - near < NEAR ? count : near + NEAR;
        for (size_t first = 0; first < LANES; first += TOGETHER) {
            uint64_t few[TOGETHER], word[TOGETHER];
            memcpy(few, h + first, sizeof few);
            for (size_t k = near; k < end; k += STRIDE) {
                memcpy(word, bytes + k + first * sizeof *h, sizeof word);
                for (size_t lane = 0; lane < TOGETHER; lane++)
                    few[lane] = mixed(few[lane], word[lane]);
            }
            memcpy(h + first, few, sizeof few);
        }
    }
}

/* The same for the compiler to make with vectors. */
#if defined(__x86_64__)
__attribute__((target("avx512f,avx512dq"))) static void strides_add_wide(uint64_t lanes[LANES],
                                                                         const unsigned char *bytes, size_t count)
{
    typedef uint64_t wide __attribute__((vector_size(64)));
    enum { VECTORS = STRIDE / sizeof(wide) };
    wide h[VECTORS], word[VECTORS];
    memcpy(h, lanes, sizeof h);
    for (size_t k = 0; k < count; k += STRIDE) {
        memcpy(word, bytes + k, sizeof word);
        for (size_t v = 0; v < VECTORS; v++) {
            h[v] = (h[v] ^ word[v]) * multiplier;
            h[v] ^= h[v] >> 32;
        }
    }
    memcpy(lanes, h, sizeof h);
}
#else
static void strides_add_wide(uint64_t lanes[LANES], const unsigned char *bytes, size_t count)
{
    strides_add(lanes, bytes, count);
}
#endif

uint64_t pack_sum(const void *bytes, size_t count, enum vectors vectors)
{
    uint64_t h[LANES];
    const unsigned char *at = bytes;
    size_t rest = count % STRIDE;
    for (uint64_t lane = 0; lane < LANES; lane++)
        h[lane] = mixed(lane, LANES);
    if (vectors == VECTORS_AVX512)
        strides_add_wide(h, at, count - rest);
    else
        strides_add(h, at, count - rest);
    if (rest > 0) {
        unsigned char last[STRIDE] = {0};
        memcpy(last, at + count - rest, rest);
        strides_add(h, last, STRIDE);
    }
    uint64_t sum = mixed(0, count);
    for (int lane = 0; lane < LANES; lane++)
        sum = mixed(sum, h[lane]);
    return sum;
}
