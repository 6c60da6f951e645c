/* SPDX-License-Identifier: MIT
 *
 * The k-th smallest of many numbers, where they lie: nothing is copied, moved or allocated.
 *
 * A double's bits, with the sign turned the right way, sort as integers do. So the answer is found digit by digit from
 * the top, 11 bits at a time: count which digits occur among the numbers that agree with what is known so far, and step
 * into the one that holds place k. Six passes over the numbers, O(n) whatever they are; exact.
 */
#include "judge/judge_internal.h"

#include <assert.h>
#include <string.h>

enum { DIGIT_BITS = 11, DIGITS = 6, DIGIT_VALUES = 1 << DIGIT_BITS };

/* Negative numbers: all bits turned; others: the sign bit set. Then the order of the integers is that of the numbers.
 */
static uint64_t key_of(double value)
{
    uint64_t bits;
    memcpy(&bits, &value, sizeof bits);
    return bits >> 63 ? ~bits : bits | UINT64_C(1) << 63;
}

static double key_value(uint64_t key)
{
    uint64_t bits = key >> 63 ? key & ~(UINT64_C(1) << 63) : ~key;
    double value;
    memcpy(&value, &bits, sizeof value);
    return value;
}

double order_pick(order_value *value_at, const void *data, uint64_t count, uint64_t place)
{
    assert(place < count);
    uint64_t known = 0;
    for (int digit = DIGITS - 1; digit >= 0; digit--) {
        uint64_t seen[DIGIT_VALUES] = {0};
        int shift = digit * DIGIT_BITS, above = shift + DIGIT_BITS;
        for (uint64_t k = 0; k < count; k++) {
            uint64_t key = key_of(value_at(data, k));
            if (above >= 64 || key >> above == known >> above)
                seen[key >> shift & (DIGIT_VALUES - 1)]++;
        }
        uint64_t d = 0;
        while (place >= seen[d])
            place -= seen[d++];
        known |= d << shift;
    }
    return key_value(known);
}
