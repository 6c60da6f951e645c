/* SPDX-License-Identifier: MIT
 *
 * Lines of a pack, looked at: positions that ascend and lie inside, finite values, and the lines' share of a sum that
 * is the same for both directions of a table (pack_check.c). Of each cell, in row i and column j with the value's bits
 * w,
 *
 *     x = (w + k) a;  x ^= x >> 32;  x = (x + (i, j)) b;  x ^= x >> 32;  x = x c;  x ^= x >> 32     modulo 2^64
 *
 * is added, (i, j) being one word, a, b and c odd. Each step is one to one, in w for given (i, j) and the other way.
 *
 * Eight cells at a time where the processor has AVX-512, which multiplies eight words at once; what is left of a line
 * is masked. It is the compiler that makes the other version; the order of cells does not matter to a sum modulo 2^64.
 */
#include "table/pack_internal.h"

#include <string.h>

#if defined(__x86_64__)
#include <immintrin.h>
#endif

/* All bits of the exponent are set in an infinity and in what is not a number. */
static const uint32_t single_exponent = 0x7f800000;
static const uint64_t double_exponent = 0x7ff0000000000000;

/* ---- cell by cell ----------------------------------------------------------------------------------------------- */

static inline uint64_t cell_mixed(const struct pack_key *key, uint64_t bits, uint64_t place)
{
    uint64_t x = (bits + key->added) * key->odd[0];
    x = ((x ^ x >> 32) + place) * key->odd[1];
    x = (x ^ x >> 32) * key->odd[2];
    return x ^ x >> 32;
}

/* The bits of the value, and whether it is finite. */
static inline uint64_t value_bits(const struct half *half, uint64_t k, enum fescue_precision precision, bool *is_finite)
{
    if (precision == FESCUE_SINGLE) {
        uint32_t bits;
        memcpy(&bits, (const float *)half->value + k, sizeof bits);
        *is_finite = (bits & single_exponent) != single_exponent;
        return bits;
    }
    uint64_t bits;
    memcpy(&bits, (const double *)half->value + k, sizeof bits);
    *is_finite = (bits & double_exponent) != double_exponent;
    return bits;
}

__attribute__((always_inline)) static inline bool cells_look(const struct pack_lines *lines, uint32_t line,
                                                             enum fescue_precision precision, uint64_t *sum)
{
    const struct half *half = lines->half;
    int64_t before = -1;
    bool sound = true, is_finite;
    for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++) {
        const uint64_t across = half->across[k], bits = value_bits(half, k, precision, &is_finite);
        const uint64_t place = lines->is_column ? across << 32 | line : (uint64_t)line << 32 | across;
        sound &= (int64_t)across > before && is_finite;
        before = (int64_t)across;
        *sum += cell_mixed(lines->key, bits, place);
    }
    return sound && before < (int64_t)half->length;
}

static bool lines_look(const struct pack_lines *lines, uint64_t *sum)
{
    bool sound = true;
    for (uint32_t i = lines->first; i < lines->end; i++)
        sound &= lines->precision == FESCUE_SINGLE ? cells_look(lines, i, FESCUE_SINGLE, sum)
                                                   : cells_look(lines, i, FESCUE_DOUBLE, sum);
    return sound;
}

/* ---- eight at a time -------------------------------------------------------------------------------------------- */

#if defined(__x86_64__)

#define EIGHT __attribute__((target("avx512f,avx512vl,avx512dq")))

EIGHT static inline __m512i folded(__m512i x)
{
    return _mm512_xor_si512(x, _mm512_srli_epi64(x, 32));
}

/* Of the cells from k on those in `live`; *odd tells which values are not finite. */
EIGHT static inline __m512i bits_load(const struct half *half, uint64_t k, enum fescue_precision precision,
                                      __mmask8 live, __mmask8 *odd)
{
    if (precision == FESCUE_SINGLE) {
        const __m256i exponent = _mm256_set1_epi32((int)single_exponent);
        const __m256i bits = _mm256_maskz_loadu_epi32(live, (const float *)half->value + k);
        *odd = _mm256_cmpeq_epi32_mask(_mm256_and_si256(bits, exponent), exponent);
        return _mm512_cvtepu32_epi64(bits);
    }
    const __m512i exponent = _mm512_set1_epi64((long long)double_exponent);
    const __m512i bits = _mm512_maskz_loadu_epi64(live, (const double *)half->value + k);
    *odd = _mm512_cmpeq_epi64_mask(_mm512_and_si512(bits, exponent), exponent);
    return bits;
}

EIGHT __attribute__((always_inline)) static inline bool
lines_look_eight(const struct pack_lines *lines, enum fescue_precision precision, bool is_column, uint64_t *sum)
{
    const struct half *half = lines->half;
    const __m512i added = _mm512_set1_epi64((long long)lines->key->added);
    const __m512i odd[3] = {_mm512_set1_epi64((long long)lines->key->odd[0]),
                            _mm512_set1_epi64((long long)lines->key->odd[1]),
                            _mm512_set1_epi64((long long)lines->key->odd[2])};
    __m512i total = _mm512_setzero_si512();
    unsigned faults = 0;
    for (uint32_t i = lines->first; i < lines->end; i++) {
        const uint64_t end = half->start[i + 1];
        const __m512i line = _mm512_set1_epi64((long long)(is_column ? i : (uint64_t)i << 32));
        __m256i before = _mm256_setzero_si256();
        __mmask8 compared = 0xfe; /* the first position of a line has none before it */
        for (uint64_t k = half->start[i]; k < end; k += 8, compared = 0xff) {
            const __mmask8 live = (__mmask8)(end - k < 8 ? (1u << (end - k)) - 1 : 0xff);
            const __m256i across = _mm256_maskz_loadu_epi32(live, half->across + k);
            const __m512i wide = _mm512_cvtepu32_epi64(across);
            __mmask8 infinite;
            const __m512i bits = bits_load(half, k, precision, live, &infinite);
            faults |= _mm256_mask_cmple_epu32_mask(live & compared, across, _mm256_alignr_epi32(across, before, 7));
            faults |= infinite;
            before = across;
            __m512i x = folded(_mm512_mullo_epi64(_mm512_add_epi64(bits, added), odd[0]));
            x = _mm512_add_epi64(x, _mm512_or_si512(is_column ? _mm512_slli_epi64(wide, 32) : wide, line));
            x = folded(_mm512_mullo_epi64(folded(_mm512_mullo_epi64(x, odd[1])), odd[2]));
            total = _mm512_mask_add_epi64(total, live, total, x);
        }
        faults |= end > half->start[i] && half->across[end - 1] >= half->length;
    }
    uint64_t part[8];
    _mm512_storeu_si512(part, total);
    *sum = 0;
    for (size_t lane = 0; lane < 8; lane++) /* unsigned: the sum wraps, which signed numbers of a reduction may not */
        *sum += part[lane];
    return faults == 0;
}

EIGHT static bool lines_look_wide(const struct pack_lines *lines, uint64_t *sum)
{
    if (lines->precision == FESCUE_SINGLE)
        return lines->is_column ? lines_look_eight(lines, FESCUE_SINGLE, true, sum)
                                : lines_look_eight(lines, FESCUE_SINGLE, false, sum);
    return lines->is_column ? lines_look_eight(lines, FESCUE_DOUBLE, true, sum)
                            : lines_look_eight(lines, FESCUE_DOUBLE, false, sum);
}

#else

static bool lines_look_wide(const struct pack_lines *lines, uint64_t *sum)
{
    return lines_look(lines, sum);
}

#endif

bool pack_lines_look(const struct pack_lines *lines, enum vectors vectors, uint64_t *sum)
{
    *sum = 0;
    return vectors == VECTORS_AVX512 ? lines_look_wide(lines, sum) : lines_look(lines, sum);
}
