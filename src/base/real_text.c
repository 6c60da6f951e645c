/* SPDX-License-Identifier: MIT
 *
 * The shortest decimal that reads back as the same number, exactly, in integers alone: Giulietti 2020, "The Schubfach
 * way to render doubles", sections 8 and 9.
 *
 *     v = c 2^q                       the number, c an integer of at most 53 (24) bits
 *     (v_l, v_r)                      what rounds to v: half a step of the last bit either way (a quarter below, when c
 *                                     is a power of two and the step below is half as wide); the ends belong when c is
 *                                     even, since readers round to even
 *     k = floor log10 (v_r - v_l)     so that at least one, at most ten multiples of 10^k, and at most one of 10^(k+1),
 *                                     lie inside
 *     s = floor(v / 10^k)             candidates: 10 floor(s/10), that + 10 (shorter ones); s, s + 1 (the closer one)
 *
 * If a decimal shorter than s exists inside, it is the one multiple of 10^(k+1), with its zeros stripped.
 *
 * The comparisons are made on 4v, 4v_l, 4v_r divided by 10^k, each rounded to odd: the integer part of the product of
 * an integer below 2^60 with g, a 128-bit value of 10^-k rounded up, its last bit set when anything was cut off. The
 * paper shows that 126 bits of g suffice for every double, hence for every float as well.
 *
 *   symbol            name                    size
 *   g(n)              powers[n - LEAST]       128 bits, 2^127 <= g < 2^128: floor(10^n 2^-e) + 1
 *   h                 shift                   1 .. 4, puts the product's binary point at bit 128
 *
 * Departures: the table of g is not stored in the source but computed when first used, by exact long arithmetic (under
 * a millisecond); integers below 2^53 skip all this. Nothing here depends on the locale.
 *
 * Layout of the text: plain for 1e-5 <= |v| < 1e15, where it is never longer than 24 bytes, else d.ddde+XX.
 */
#include "base/base.h"

#include <math.h>
#include <pthread.h>
#include <string.h>

typedef unsigned __int128 uint128;

/* The powers of ten that the steps of all doubles, 2^-1074 .. 2^971, ask for: k from -324 to 292, and g(-k). */
enum { LEAST_POWER = -292, MOST_POWER = 324 };
static uint128 powers[MOST_POWER - LEAST_POWER + 1];
static pthread_once_t powers_once = PTHREAD_ONCE_INIT;

/* ---- the table: long integers, words of 32 bits, the lowest first ----------------------------------------------- */

/* 10^324 has 1077 bits; 2^1216 / 10^292 still has 246, more than the 128 that are kept. */
enum { LONG_WORDS = 39, LONG_ONE = 1216 };

static void long_multiply_by_10(uint32_t word[LONG_WORDS])
{
    uint64_t carry = 0;
    for (int k = 0; k < LONG_WORDS; k++) {
        carry += (uint64_t)word[k] * 10;
        word[k] = (uint32_t)carry;
        carry >>= 32;
    }
}

static void long_divide_by_10(uint32_t word[LONG_WORDS])
{
    uint64_t rest = 0;
    for (int k = LONG_WORDS - 1; k >= 0; k--) {
        rest = rest << 32 | word[k];
        word[k] = (uint32_t)(rest / 10);
        rest %= 10;
    }
}

/* The highest 128 bits, from the highest that is set (with zeros below the lowest), plus one. Flooring twice is
   flooring once, so a quotient that was floored before gives the same. */
static uint128 long_top(const uint32_t word[LONG_WORDS])
{
    int top = LONG_WORDS - 1;
    while (word[top] == 0)
        top--;
    uint128 bits = 0;
    for (int k = top; k > top - 4; k--)
        bits = bits << 32 | (k >= 0 ? word[k] : 0);
    int empty = __builtin_clz(word[top]);
    if (empty > 0)
        bits = bits << empty | (top >= 4 ? word[top - 4] >> (32 - empty) : 0);
    return bits + 1;
}

static void powers_compute(void)
{
    uint32_t word[LONG_WORDS] = {1};
    for (int n = 0; n <= MOST_POWER; n++) {
        powers[n - LEAST_POWER] = long_top(word);
        long_multiply_by_10(word);
    }
    memset(word, 0, sizeof word);
    word[LONG_ONE / 32] = 1u << LONG_ONE % 32;
    for (int n = -1; n >= LEAST_POWER; n--) {
        long_divide_by_10(word);
        powers[n - LEAST_POWER] = long_top(word);
    }
}

/* ---- the shortest decimal --------------------------------------------------------------------------------------- */

struct decimal { /* digits * 10^exponent */
    uint64_t digits;
    int exponent;
};

/* floor(log10(2^q)), floor(log10(3/4 2^q)) and floor(log2(10^n)): the constants are log10(2), log10(3/4) and log2(10)
   in fixed point, precise enough for the |q| < 1100, |n| < 330 of doubles. */
static int floor_log10_pow2(int q)
{
    return (int)(((int64_t)q * 661971961083) >> 41);
}

static int floor_log10_three_quarters_pow2(int q)
{
    return (int)(((int64_t)q * 661971961083 - 274743187321) >> 41);
}

static int floor_log2_pow10(int n)
{
    return (int)(((int64_t)n * 913124641741) >> 38);
}

/* floor(g a / 2^128), its last bit set when anything but a trace was cut off (g is a trace too large). */
static uint64_t product_to_odd(uint128 g, uint64_t a)
{
    uint128 low = (uint128)(uint64_t)g * a;
    uint128 high = (uint128)(uint64_t)(g >> 64) * a + (uint64_t)(low >> 64);
    return (uint64_t)(high >> 64) | ((uint64_t)high > 1);
}

static struct decimal shortest(uint64_t c, int q, bool narrow_below)
{
    int k = narrow_below ? floor_log10_three_quarters_pow2(q) : floor_log10_pow2(q);
    int shift = q + floor_log2_pow10(-k) + 1;
    uint128 g = powers[-k - LEAST_POWER];
    uint64_t open = c & 1; /* the ends of the interval do not belong */
    uint64_t v = product_to_odd(g, (4 * c) << shift);
    uint64_t least = product_to_odd(g, (4 * c - (narrow_below ? 1 : 2)) << shift) + open;
    uint64_t most = product_to_odd(g, (4 * c + 2) << shift) - open;

    uint64_t s = v / 4;
    uint64_t tens = s / 10 * 10;
    bool low_inside = least <= 4 * tens, high_inside = 4 * (tens + 10) <= most;
    if (s >= 10 && low_inside != high_inside)
        return (struct decimal){low_inside ? tens : tens + 10, k};
    low_inside = least <= 4 * s;
    high_inside = 4 * (s + 1) <= most;
    if (low_inside != high_inside)
        return (struct decimal){low_inside ? s : s + 1, k};
    uint64_t middle = 4 * s + 2;
    bool up = v > middle || (v == middle && s % 2 == 1);
    return (struct decimal){up ? s + 1 : s, k};
}

static struct decimal shortest_of_double(double size)
{
    enum { FRACTION = 52, BIAS = 1075 };
    uint64_t bits;
    memcpy(&bits, &size, sizeof bits);
    uint64_t fraction = bits & ((UINT64_C(1) << FRACTION) - 1);
    int exponent = (int)(bits >> FRACTION);
    if (exponent == 0)
        return shortest(fraction, 1 - BIAS, false);
    return shortest(fraction | UINT64_C(1) << FRACTION, exponent - BIAS, fraction == 0 && exponent > 1);
}

static struct decimal shortest_of_float(float size)
{
    enum { FRACTION = 23, BIAS = 150 };
    uint32_t bits;
    memcpy(&bits, &size, sizeof bits);
    uint32_t fraction = bits & ((UINT32_C(1) << FRACTION) - 1);
    int exponent = (int)(bits >> FRACTION);
    if (exponent == 0)
        return shortest(fraction, 1 - BIAS, false);
    return shortest(fraction | UINT32_C(1) << FRACTION, exponent - BIAS, fraction == 0 && exponent > 1);
}

/* ---- layout ----------------------------------------------------------------------------------------------------- */

static char *zeros_put(char *text, int count)
{
    for (; count > 0; count--)
        *text++ = '0';
    return text;
}

/* The digits of a number, the first `point` of them before the point (none at all: the point is left out). */
static char *digits_put(char *text, const char *digits, int count, int point)
{
    int before = count < point ? count : point;
    memcpy(text, digits, (size_t)before);
    text = zeros_put(text + before, point - before);
    if (count > before) {
        *text++ = '.';
        memcpy(text, digits + before, (size_t)(count - before));
        text += count - before;
    }
    return text;
}

static char *exponent_put(char *text, int exponent)
{
    *text++ = 'e';
    *text++ = exponent < 0 ? '-' : '+';
    int size = exponent < 0 ? -exponent : exponent;
    if (size >= 100)
        *text++ = (char)('0' + size / 100);
    *text++ = (char)('0' + size / 10 % 10);
    *text++ = (char)('0' + size % 10);
    return text;
}

static char *decimal_put(char *text, struct decimal decimal)
{
    char digits[20];
    int first = sizeof digits;
    while (decimal.digits % 10 == 0) {
        decimal.digits /= 10;
        decimal.exponent++;
    }
    for (; decimal.digits != 0; decimal.digits /= 10)
        digits[--first] = (char)('0' + decimal.digits % 10);
    int count = (int)sizeof digits - first;
    int point = decimal.exponent + count; /* 0.ddd * 10^point */
    if (point > 15 || point <= -5)
        return exponent_put(digits_put(text, digits + first, count, 1), point - 1);
    if (point > 0)
        return digits_put(text, digits + first, count, point);
    memcpy(text, "0.", 2);
    text = zeros_put(text + 2, -point);
    memcpy(text, digits + first, (size_t)count);
    return text + count;
}

/* A whole number below 2^53 as it is: no shorter decimal lies within half a unit of it. */
static char *whole_put(char *text, uint64_t whole)
{
    char digits[20];
    size_t first = sizeof digits;
    do
        digits[--first] = (char)('0' + whole % 10);
    while ((whole /= 10) != 0);
    memcpy(text, digits + first, sizeof digits - first);
    return text + sizeof digits - first;
}

size_t real_to_text(double value, enum fescue_precision precision, char text[32])
{
    char *end = text;
    if (isnan(value)) {
        memcpy(text, "nan", 4);
        return 3;
    }
    if (precision == FESCUE_SINGLE)
        value = (float)value;
    if (signbit(value))
        *end++ = '-';
    double size = fabs(value);
    /* Plain layout ends at 1e15; floats above 2^24 are shorter than their whole digits. */
    double whole_most = precision == FESCUE_SINGLE ? 0x1p24 : 1e15;
    if (isinf(size)) {
        memcpy(end, "inf", 3);
        end += 3;
    } else if (size < whole_most && size == (double)(uint64_t)size) {
        end = whole_put(end, (uint64_t)size);
    } else {
        pthread_once(&powers_once, powers_compute);
        end = decimal_put(end, precision == FESCUE_SINGLE ? shortest_of_float((float)size) : shortest_of_double(size));
    }
    *end = '\0';
    return (size_t)(end - text);
}
