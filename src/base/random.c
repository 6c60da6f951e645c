/* SPDX-License-Identifier: MIT
 *
 * Random numbers by counting: Philox4x32-10 of Salmon, Moraes, Dror and Shaw 2011, "Parallel random numbers: as easy as
 * 1, 2, 3", section 3.3.
 *
 *     key      = (seed low, seed high)
 *     counter  = (index low, index high, stream low, stream high)
 *     ten rounds of   (c0, c1, c2, c3) <- (hi(M1 c2) ^ c1 ^ k0,  lo(M1 c2),  hi(M0 c0) ^ c3 ^ k1,  lo(M0 c0))
 *     with            k0 += W0, k1 += W1   between rounds
 *
 * M0, M1 are the multipliers the paper found by search, W0 the golden ratio and W1 sqrt(3) - 1, both times 2^32. Every
 * draw uses a block of 128 bits of its own, so that the n-th draw of a stream is found without the ones before it.
 */
#include "base/base.h"

#include <assert.h>
#include <math.h>

enum { ROUNDS = 10 };
static const uint32_t multiplier[2] = {0xd2511f53, 0xcd9e8d57};
static const uint32_t key_step[2] = {0x9e3779b9, 0xbb67ae85};

void philox4x32(const uint32_t counter[4], const uint32_t key[2], uint32_t out[4])
{
    uint32_t c0 = counter[0], c1 = counter[1], c2 = counter[2], c3 = counter[3];
    uint32_t k0 = key[0], k1 = key[1];
    for (int round = 0; round < ROUNDS; round++) {
        uint64_t p0 = (uint64_t)multiplier[0] * c0, p1 = (uint64_t)multiplier[1] * c2;
        c0 = (uint32_t)(p1 >> 32) ^ c1 ^ k0;
        c1 = (uint32_t)p1;
        c2 = (uint32_t)(p0 >> 32) ^ c3 ^ k1;
        c3 = (uint32_t)p0;
        k0 += key_step[0];
        k1 += key_step[1];
    }
    out[0] = c0;
    out[1] = c1;
    out[2] = c2;
    out[3] = c3;
}

struct random_stream random_open(uint64_t seed, enum random_purpose purpose, uint32_t which)
{
    return (struct random_stream){.seed = seed, .stream = (uint64_t)purpose << 32 | which, .index = 0};
}

/* The two 64-bit halves of the stream's next block. */
static void block_draw(struct random_stream *stream, uint64_t half[2])
{
    const uint32_t counter[4] = {(uint32_t)stream->index, (uint32_t)(stream->index >> 32), (uint32_t)stream->stream,
                                 (uint32_t)(stream->stream >> 32)};
    const uint32_t key[2] = {(uint32_t)stream->seed, (uint32_t)(stream->seed >> 32)};
    uint32_t word[4];
    philox4x32(counter, key, word);
    half[0] = (uint64_t)word[1] << 32 | word[0];
    half[1] = (uint64_t)word[3] << 32 | word[2];
    stream->index++;
}

/* The upper 53 bits, as many as a double holds, times 2^-53: [0, 1), every value exact. */
static double unit_interval(uint64_t bits)
{
    return (double)(bits >> 11) * 0x1p-53;
}

uint64_t random_bits(struct random_stream *stream)
{
    uint64_t half[2];
    block_draw(stream, half);
    return half[0];
}

double random_uniform(struct random_stream *stream)
{
    return unit_interval(random_bits(stream));
}

double random_normal(struct random_stream *stream)
{
    static const double turn = 6.283185307179586476925; /* 2 pi */
    uint64_t half[2];
    block_draw(stream, half);
    double above_zero = 1 - unit_interval(half[0]); /* (0, 1], so that the logarithm is finite */
    return sqrt(-2 * log(above_zero)) * cos(turn * unit_interval(half[1]));
}

/* Lemire 2019, "Fast random integer generation in an interval": the upper half of bits * bound; draws whose lower half
   falls into the 2^64 mod bound surplus values are drawn again. */
uint64_t random_below(struct random_stream *stream, uint64_t bound)
{
    assert(bound > 0);
    uint64_t surplus = -bound % bound;
    for (;;) {
        unsigned __int128 product = (unsigned __int128)random_bits(stream) * bound;
        if ((uint64_t)product >= surplus)
            return (uint64_t)(product >> 64);
    }
}

double random_uniform_at(uint64_t seed, enum random_purpose purpose, uint32_t which, uint64_t index)
{
    struct random_stream stream = random_open(seed, purpose, which);
    stream.index = index;
    return random_uniform(&stream);
}
