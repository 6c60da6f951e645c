/* SPDX-License-Identifier: MIT
 *
 * Digits, eight at a time (Lemire 2021, "Number parsing at a gigabyte per second", Software: Practice and Experience
 * 51(8), section 7): a word of eight characters less eight times '0' has a byte above 9 where the digits end; shifted
 * so that the last digit is the last byte, three multiplications add pairs of digits, pairs of pairs and the two
 * halves. A value of less than eight digits on either side of its point is then one division away (way 1 of number.c).
 */
#ifndef FESCUE_TABLE_DIGITS_H
#define FESCUE_TABLE_DIGITS_H

#include "table/table_internal.h"

#include <endian.h>
#include <string.h>

_Static_assert(CHUNK_SLACK >= 3 * sizeof(uint64_t), "eight characters can be read from behind any short value");

static const double digits_power[] = {1e0, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7};

static inline bool is_digit(char c)
{
    return (unsigned char)(c - '0') < 10;
}

/* Eight characters, each less '0': a digit's own number, the first in the lowest byte. */
static inline uint64_t digits_load(const char *at)
{
    uint64_t word;
    memcpy(&word, at, sizeof word);
    return le64toh(word) ^ UINT64_C(0x0101010101010101) * '0';
}

/* The number that the first `count` of them make, count 0 .. 8. Two shifts, since one by 64 bits is none. */
static inline uint64_t digits_number(uint64_t word, unsigned count)
{
    const unsigned half = 4 * (8 - count);
    word = word << half << half;
    word = word * (1 + (10 << 8)) >> 8;
    word = (word & 0x00ff00ff00ff00ff) * (1 + (UINT64_C(100) << 16)) >> 16;
    return (word & 0x0000ffff0000ffff) * (1 + (UINT64_C(10000) << 32)) >> 32;
}

/* How many digits a word begins with. */
static inline unsigned digits_count(uint64_t word)
{
    static const uint64_t ones = 0x0101010101010101;
    uint64_t beyond = ((word + ones * (0x80 - 10)) | word) & ones * 0x80; /* right up to the first that is no digit */
    return beyond == 0 ? 8 : (unsigned)__builtin_ctzll(beyond) / 8;
}

/* Reads the digits at `at`, at most eight of them, and returns how many there are. */
static inline unsigned eight_digits(const char *at, uint64_t *number)
{
    uint64_t word = digits_load(at);
    unsigned count = digits_count(word);
    *number = digits_number(word, count);
    return count;
}

/* Reads [-] digits [point digits], less than eight of either, and returns what is behind them; NULL when there is no
   such number, or it may go on. Nothing branches on the point, which no processor could foresee: without one, what
   comes next counts as no digits. */
static inline const char *short_value_read(const char *at, char point, double *value)
{
    const bool negative = *at == '-';
    uint64_t whole;
    at += negative;
    const unsigned digits = eight_digits(at, &whole);
    const bool has_point = at[digits] == point;
    at += digits + has_point;
    const uint64_t word = digits_load(at);
    const unsigned decimals = digits_count(word) & (0u - has_point);
    const uint64_t fraction = digits_number(word, decimals);
    at += decimals;
    if (digits == 0 || digits == 8 || decimals == 8 || (*at | ' ') == 'e')
        return NULL;
    double size = ((double)whole * digits_power[decimals] + (double)fraction) / digits_power[decimals];
    *value = negative ? -size : size;
    return at;
}

#endif
