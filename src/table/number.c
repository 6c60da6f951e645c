/* SPDX-License-Identifier: MIT
 *
 * Text to double, exact to the last bit, independent of the locale.
 *
 *     number    =  [+-] ( digits [ "." [digits] ] | "." digits ) [ (e|E) [+-] digits ]
 *     value     =  w * 10^q        w the digits read as one whole number, q the exponent less the digits after the
 * point
 *
 * Three ways to the double nearest to w * 10^q (ties to even), the first that can tell:
 *
 *   1  w < 2^53 and |q| <= 22: w and 10^|q| are doubles, and one multiplication or division rounds the exact result
 * once (Clinger 1990, "How to read floating point numbers accurately", section 3). Most of what loggers and people
 * write. 2  |q| <= 55: a product of w with 5^q in 128 bits (Lemire 2021, "Number parsing at a gigabyte per second",
 * Software: Practice and Experience 51(8), section 5, algorithm 1). With w shifted to w' in [2^63, 2^64) and 5^q = c
 * 2^b, c in [2^127, 2^128) cut to whole numbers, the upper half of w' c decides the 54 bits that rounding needs, unless
 * all bits below them are ones, so that what was cut off might carry into them; then the lower half of c is multiplied
 * too. Seventeen digits of a double go this way. Of more than 19 digits w takes the first 19; the number lies between w
 * and w + 1, and where both give the same double it is the one. 3  the C library's strtod in the C locale, which rounds
 * correctly, given the digits in a form of our own, so that the text need not end in a zero byte and may be of any
 * length: of more than 800 digits the rest only matters as "something or nothing follows", since a point half way
 * between two doubles has at most 767 significant digits, so that a 1 in place of the rest lies on the same side of it.
 *
 * Departure in 2: the paper's table goes from 5^-342 to 5^308. Here it ends where 5^q still fits 128 bits, which is
 * enough for anything measured, and is computed at first use instead of written down; nothing in it is subnormal or
 * infinite, so those cases of the algorithm are left to 3.
 */
#include "table/table_internal.h"

#include <assert.h>
#include <float.h>
#include <locale.h>
#include <pthread.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

_Static_assert(FLT_EVAL_METHOD == 0, "exact_value needs products rounded once, to double");

enum {
    MOST_DIGITS = 19,   /* 10^19 < 2^64 */
    EXACT_POWER = 22,   /* 10^22 = 2^22 5^22 and 5^22 < 2^53 */
    PRODUCT_POWER = 55, /* 5^55 < 2^128 */
    SLOW_DIGITS = 800
};

/* An exponent this large says infinity, or zero, whatever the digits before (which are fewer, or memory would not hold
   them); counting stops there, so that no sum overflows. */
static const int64_t most_exponent = (int64_t)1 << 48;

static locale_t c_locale;
static pthread_once_t c_locale_once = PTHREAD_ONCE_INIT;

static void c_locale_open(void)
{
    c_locale = newlocale(LC_ALL_MASK, "C", (locale_t)0);
    assert(c_locale != (locale_t)0); /* the C locale is part of the C library: nothing is loaded or taken */
}

static inline bool is_digit(char c)
{
    return (unsigned char)(c - '0') < 10;
}

/* What a text says, before its digits are turned into a number. */
struct decimal_text {
    bool negative;
    const char *whole, *whole_end;       /* digits before the point */
    const char *fraction, *fraction_end; /* digits after it */
    int64_t exponent;
};

/* ---- powers of five --------------------------------------------------------------------------------------------- */

typedef unsigned __int128 wide;
static const wide top_bit = (wide)1 << 127;

/* 5^q for q = -PRODUCT_POWER .. PRODUCT_POWER, shifted until its highest bit is the 128th, and cut. */
static wide five_power[2 * PRODUCT_POWER + 1];
static pthread_once_t five_power_once = PTHREAD_ONCE_INIT;

/* The first 128 bits of 1 / five, by long division. Down to 5^-27 the paper's proof wants them rounded up, beyond cut.
 */
static wide reciprocal(wide five, bool round_up)
{
    wide quotient = 0, rest = 1;
    while (quotient < top_bit) {
        bool carry = rest >= top_bit; /* 2 rest then has a 129th bit, and surely holds five */
        rest += rest;
        bool fits = carry || rest >= five;
        rest -= fits ? five : 0;
        quotient = 2 * quotient + fits;
    }
    return quotient + round_up;
}

static void five_powers_compute(void)
{
    enum { ROUNDED_UP = 27 };
    wide five = 1;
    for (int q = 0; q <= PRODUCT_POWER; q++, five *= 5) {
        wide shifted = five;
        while (shifted < top_bit)
            shifted += shifted;
        five_power[PRODUCT_POWER + q] = shifted;
        if (q > 0)
            five_power[PRODUCT_POWER - q] = reciprocal(five, q <= ROUNDED_UP);
    }
}

/* ---- from digits ------------------------------------------------------------------------------------------------ */

static double exact_value(uint64_t w, int q)
{
    static const double power[EXACT_POWER + 1] = {1e0,  1e1,  1e2,  1e3,  1e4,  1e5,  1e6,  1e7,
                                                  1e8,  1e9,  1e10, 1e11, 1e12, 1e13, 1e14, 1e15,
                                                  1e16, 1e17, 1e18, 1e19, 1e20, 1e21, 1e22};
    return q < 0 ? (double)w / power[-q] : (double)w * power[q];
}

/* w * 5^q as its 128 highest bits, w with its highest bit set; the lowest may be one too small. */
static wide product(uint64_t w, int q)
{
    static const uint64_t undecided = 0x1ff; /* the bits of the upper half below the 54 that rounding needs, and one */
    const wide five = five_power[PRODUCT_POWER + q];
    wide z = (wide)w * (uint64_t)(five >> 64);
    if (((uint64_t)(z >> 64) & undecided) == undecided)
        z += (wide)w * (uint64_t)five >> 64;
    return z;
}

/* The double nearest to w * 10^q; false where 128 bits do not tell. */
static bool product_value(uint64_t w, int q, double *value)
{
    enum { BIAS = 1023, FRACTION = 52, TIES_LEAST = -4, TIES_MOST = 23, TRUSTED_LEAST = -27 };
    pthread_once(&five_power_once, five_powers_compute);
    int zeros = __builtin_clzll(w);
    wide z = product(w << zeros, q);
    uint64_t high = (uint64_t)(z >> 64), low = (uint64_t)z;
    if (low == UINT64_MAX && q < TRUSTED_LEAST) /* what was cut off 5^q might carry all through */
        return false;
    int top = (int)(high >> 63), shift = top + 64 - FRACTION - 3;
    uint64_t m = high >> shift; /* 53 bits of the double, and one to round by */
    /* Half way between two doubles, which needs a small 5^|q|: the even one. */
    if (low <= 1 && q >= TIES_LEAST && q <= TIES_MOST && (m & 3) == 1 && m << shift == high)
        m--;
    m = (m + (m & 1)) >> 1;
    int carry = (int)(m >> (FRACTION + 1));
    /* floor(log2 10^q) = floor(q log2 10) for these q; 217706 / 2^16 is log2 10 to six digits. */
    int exponent = (217706 * q >> 16) + 63 + top - zeros + carry;
    uint64_t bits = (m >> carry & ((UINT64_C(1) << FRACTION) - 1)) | (uint64_t)(exponent + BIAS) << FRACTION;
    memcpy(value, &bits, sizeof bits);
    return true;
}

/* From all digits of a number. */
static bool whole_value(uint64_t w, int64_t q, double *value)
{
    if (w < UINT64_C(1) << DBL_MANT_DIG && q >= -EXACT_POWER && q <= EXACT_POWER) {
        *value = exact_value(w, (int)q);
        return true;
    }
    *value = 0;
    return w == 0 || (q >= -PRODUCT_POWER && q <= PRODUCT_POWER && product_value(w, (int)q, value));
}

/* From the first MOST_DIGITS significant digits of a longer one. */
static bool cut_value(const struct decimal_text *split, double *value)
{
    uint64_t w = 0;
    int digits = 0;
    int64_t q = split->exponent;
    double above;
    for (const char *c = split->whole; c < split->whole_end; c++)
        if (digits == MOST_DIGITS) {
            q++;
        } else {
            w = w * 10 + (uint64_t)(*c - '0');
            digits += w > 0;
        }
    for (const char *c = split->fraction; c < split->fraction_end && digits < MOST_DIGITS; c++, q--) {
        w = w * 10 + (uint64_t)(*c - '0');
        digits += w > 0;
    }
    if (digits < MOST_DIGITS) /* zeros stood before them */
        return whole_value(w, q, value);
    return q >= -PRODUCT_POWER && q <= PRODUCT_POWER && product_value(w, (int)q, value) &&
           product_value(w + 1, (int)q, &above) && *value == above;
}

/* Digits on their way to strtod. */
struct slow_digits {
    char text[SLOW_DIGITS + 32]; /* the digits, then 'e', sign and at most 16 digits of the exponent */
    size_t count;
    int64_t dropped; /* digits beyond the buffer */
    bool rest;       /* one of them was not 0 */
};

static void slow_add(struct slow_digits *digits, const char *text, const char *end)
{
    for (; text < end; text++) {
        if (digits->count == 0 && *text == '0')
            continue;
        if (digits->count < SLOW_DIGITS) {
            digits->text[digits->count++] = *text;
        } else {
            digits->dropped++;
            digits->rest = digits->rest || *text != '0';
        }
    }
}

static double slow_value(const struct decimal_text *split)
{
    struct slow_digits digits;
    digits.count = 0;
    digits.dropped = 0;
    digits.rest = false;
    slow_add(&digits, split->whole, split->whole_end);
    slow_add(&digits, split->fraction, split->fraction_end);
    if (digits.count == 0)
        return 0;
    int64_t exponent = split->exponent - (split->fraction_end - split->fraction) + digits.dropped;
    if (digits.rest) {
        digits.text[digits.count++] = '1';
        exponent--;
    }
    snprintf(digits.text + digits.count, sizeof digits.text - digits.count, "e%lld", (long long)exponent);
    pthread_once(&c_locale_once, c_locale_open);
    return strtod_l(digits.text, NULL, c_locale);
}

/* ---- from text -------------------------------------------------------------------------------------------------- */

/* [+-] digits. NULL when there are no digits. */
static const char *exponent_read(const char *text, const char *end, int64_t *exponent)
{
    bool negative = text < end && *text == '-';
    if (text < end && (*text == '-' || *text == '+'))
        text++;
    if (text == end || !is_digit(*text))
        return NULL;
    int64_t size = 0;
    for (; text < end && is_digit(*text); text++)
        if (size < most_exponent)
            size = size * 10 + (*text - '0');
    *exponent = negative ? -size : size;
    return text;
}

/* Adds digits to *w, which wraps around when there are too many. */
static inline const char *digits_read(const char *text, const char *end, uint64_t *w)
{
    for (; text < end && is_digit(*text); text++)
        *w = *w * 10 + (uint64_t)(*text - '0');
    return text;
}

const char *number_read(const char *text, const char *end, double *value)
{
    struct decimal_text split = {.negative = text < end && *text == '-'};
    uint64_t w = 0;
    if (text < end && (*text == '-' || *text == '+'))
        text++;
    split.whole = text;
    split.whole_end = split.fraction = split.fraction_end = text = digits_read(text, end, &w);
    if (text < end && *text == '.') {
        split.fraction = text + 1;
        split.fraction_end = text = digits_read(text + 1, end, &w);
    }
    ptrdiff_t decimals = split.fraction_end - split.fraction, digits = split.whole_end - split.whole + decimals;
    if (digits == 0)
        return NULL;
    if (text < end && (*text == 'e' || *text == 'E')) {
        text = exponent_read(text + 1, end, &split.exponent);
        if (text == NULL)
            return NULL;
    }
    double size;
    bool is_told = digits <= MOST_DIGITS ? whole_value(w, split.exponent - decimals, &size) : cut_value(&split, &size);
    if (!is_told)
        size = slow_value(&split);
    *value = split.negative ? -size : size;
    return text;
}

bool number_parse(const char *text, const char *end, double *value)
{
    return number_read(text, end, value) == end;
}
