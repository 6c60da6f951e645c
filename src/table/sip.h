/* SPDX-License-Identifier: MIT
 *
 * A keyed hash for texts that anybody may have written: SipHash-1-3 (Aumasson, Bernstein 2012, "SipHash: a fast
 * short-input PRF"; one round a word, three at the end), of which 32 bits are kept.
 */
#ifndef FESCUE_TABLE_SIP_H
#define FESCUE_TABLE_SIP_H

#include <stddef.h>
#include <stdint.h>
#include <string.h>

struct sip {
    uint64_t v0, v1, v2, v3;
};

static inline struct sip sip_open(const uint64_t key[2])
{
    return (struct sip){key[0] ^ 0x736f6d6570736575, key[1] ^ 0x646f72616e646f6d, key[0] ^ 0x6c7967656e657261,
                        key[1] ^ 0x7465646279746573};
}

static inline uint64_t sip_turned(uint64_t x, int bits)
{
    return x << bits | x >> (64 - bits);
}

static inline void sip_round(struct sip *s)
{
    s->v0 += s->v1;
    s->v1 = sip_turned(s->v1, 13) ^ s->v0;
    s->v0 = sip_turned(s->v0, 32);
    s->v2 += s->v3;
    s->v3 = sip_turned(s->v3, 16) ^ s->v2;
    s->v0 += s->v3;
    s->v3 = sip_turned(s->v3, 21) ^ s->v0;
    s->v2 += s->v1;
    s->v1 = sip_turned(s->v1, 17) ^ s->v2;
    s->v2 = sip_turned(s->v2, 32);
}

static inline void sip_word(struct sip *s, uint64_t word)
{
    s->v3 ^= word;
    sip_round(s);
    s->v0 ^= word;
}

static inline uint32_t sip_close(struct sip *s)
{
    s->v2 ^= 0xff;
    for (int round = 0; round < 3; round++)
        sip_round(s);
    return (uint32_t)(s->v0 ^ s->v1 ^ s->v2 ^ s->v3);
}

#endif
