/* SPDX-License-Identifier: MIT
 *
 * Moments in half the bytes, for loops that wait for memory: each number keeps the upper half of its 64 bits, that is
 * its sign, its exponent and 20 bits behind the point, and two of them share a word
 *
 *     word = upper half of x, upper half of y
 *
 * The word itself, read as a double, is x but for its last 32 bits, and shifted by 32 bits it is y: no conversion
 * stands between memory and the multiplication, which single precision would need. That x drags y behind it is allowed
 * for: its upper half is the one with which the whole word comes nearest to x. Both are thus rounded to nearest, by at
 * most 2^-21 of their size, and to neither side. A number too small for that (0 before all) becomes one below 1e-307.
 *
 * Blocks of 16 numbers, a line of the caches: word l holds numbers l and l + 8. The mean comes first, since it is
 * gathered with two weights:
 *
 *     row `one` and what stands below it in column `one`, d numbers; the rows before it; those behind, without that
 */
#include "numeric/batch_internal.h"

#include <string.h>

#define SIGN 0x8000000000000000U
#define UPPER 0xffffffff00000000U
#define HALF 0x80000000U          /* of the unit of the upper half */
#define LEAST 0x0010000000000000U /* the smallest exponent that is not denormal */

typedef uint64_t bits_of_double __attribute__((may_alias));

NUMERIC_VERSIONS
static void blocks_halve(const bits_of_double *restrict bits, size_t blocks, uint64_t *restrict halves)
{
    for (size_t b = 0; b < blocks; b++)
        for (size_t l = 0; l < 8; l++) {
            uint64_t x = bits[b * BATCH_BLOCK + l], y = bits[b * BATCH_BLOCK + 8 + l];
            uint64_t low = (y + HALF) >> 32, high = (x - low + HALF) & UPPER;
            halves[b * 8 + l] = ((x & ~SIGN) < LEAST ? (x & SIGN) | LEAST : high) | low;
        }
}

void moments_halve(const struct moments *moments, const double *moment, double *room, uint64_t *halves)
{
    size_t d = moments->regressors, one = moments->one, at = d;
    memset(room + packed_size(d), 0, (moments_room(d) - packed_size(d)) * sizeof *room);
    memcpy(room, moment + packed_size(one), (one + 1) * sizeof *room);
    memcpy(room + at, moment, packed_size(one) * sizeof *room);
    at += packed_size(one);
    for (size_t k = one + 1; k < d; at += k, k++) {
        const double *row = moment + packed_size(k);
        room[k] = row[one];
        memcpy(room + at, row, one * sizeof *room);
        memcpy(room + at + one, row + one + 1, (k - one) * sizeof *room);
    }
    blocks_halve((const bits_of_double *)room, moments_words(d) / 8, halves);
}

/* Every row moves towards the front by at least one number, so in place, row by row. */
void moments_restore(size_t d, size_t one, double *mean, double *numbers)
{
    size_t at = d + packed_size(one);
    memcpy(mean, numbers, d * sizeof *mean);
    memmove(numbers, numbers + d, packed_size(one) * sizeof *numbers);
    memcpy(numbers + packed_size(one), mean, (one + 1) * sizeof *numbers);
    for (size_t k = one + 1; k < d; at += k, k++) {
        double *row = numbers + packed_size(k);
        memmove(row, numbers + at, one * sizeof *numbers);
        memmove(row + one + 1, numbers + at + one, (k - one) * sizeof *numbers);
        row[one] = mean[k];
    }
}
