/* SPDX-License-Identifier: MIT
 *
 * Text to double, exact to the last bit, independent of the locale.
 *
 *     number    =  [+-] ( digits [ "." [digits] ] | "." digits ) [ (e|E) [+-] digits ]
 *     value     =  w * 10^q        w the digits read as one whole number, q the exponent less the digits after the
 * point
 *
 * Fast path (Clinger 1990, "How to read floating point numbers accurately", section 3): when w < 2^53 and |q| <= 22,
 * both w and 10^|q| are doubles, and one multiplication or division rounds the exact result once. All that loggers and
 * people write goes this way. Otherwise the C library's strtod in the C locale, which rounds correctly, is given the
 * digits in a form of our own, so that the text need not end in a zero byte and may be of any length:
 *
 *     of more than 800 digits the rest only matters as "something or nothing follows": a point half way between two
 *     doubles has at most 767 significant digits, so that a 1 in place of the rest lies on the same side of it.
 */
#include "table/table_internal.h"

#include <assert.h>
#include <float.h>
#include <locale.h>
#include <pthread.h>
#include <stdio.h>
#include <stdlib.h>

_Static_assert(FLT_EVAL_METHOD == 0, "the fast path needs products rounded once, to double");

enum {
    FAST_DIGITS = 19, /* 10^19 < 2^64 */
    FAST_POWER = 22,  /* 10^22 = 2^22 5^22 and 5^22 < 2^53 */
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

static bool is_digit(char c)
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

static const char *digits_end(const char *text, const char *end)
{
    while (text < end && is_digit(*text))
        text++;
    return text;
}

/* [+-] digits up to `end`. */
static bool exponent_parse(const char *text, const char *end, int64_t *exponent)
{
    bool negative = text < end && *text == '-';
    if (text < end && (*text == '-' || *text == '+'))
        text++;
    if (text == end || digits_end(text, end) != end)
        return false;
    int64_t size = 0;
    for (; text < end; text++)
        if (size < most_exponent)
            size = size * 10 + (*text - '0');
    *exponent = negative ? -size : size;
    return true;
}

static bool text_split(const char *text, const char *end, struct decimal_text *out)
{
    out->negative = text < end && *text == '-';
    if (text < end && (*text == '-' || *text == '+'))
        text++;
    out->whole = text;
    out->whole_end = out->fraction = out->fraction_end = text = digits_end(text, end);
    if (text < end && *text == '.') {
        out->fraction = text + 1;
        out->fraction_end = text = digits_end(text + 1, end);
    }
    if (out->whole == out->whole_end && out->fraction == out->fraction_end)
        return false;
    out->exponent = 0;
    if (text == end)
        return true;
    return (*text == 'e' || *text == 'E') && exponent_parse(text + 1, end, &out->exponent);
}

static double fast_value(uint64_t w, int q)
{
    static const double power[FAST_POWER + 1] = {1e0,  1e1,  1e2,  1e3,  1e4,  1e5,  1e6,  1e7,  1e8,  1e9,  1e10, 1e11,
                                                 1e12, 1e13, 1e14, 1e15, 1e16, 1e17, 1e18, 1e19, 1e20, 1e21, 1e22};
    return q < 0 ? (double)w / power[-q] : (double)w * power[q];
}

static uint64_t digits_add(uint64_t w, const char *text, const char *end)
{
    for (; text < end; text++)
        w = w * 10 + (uint64_t)(*text - '0');
    return w;
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

bool number_parse(const char *text, const char *end, double *value)
{
    struct decimal_text split;
    if (!text_split(text, end, &split))
        return false;
    ptrdiff_t decimals = split.fraction_end - split.fraction;
    double size;
    if ((split.whole_end - split.whole) + decimals <= FAST_DIGITS && split.exponent <= FAST_POWER &&
        split.exponent - decimals >= -FAST_POWER) {
        uint64_t w = digits_add(digits_add(0, split.whole, split.whole_end), split.fraction, split.fraction_end);
        size = w < (UINT64_C(1) << DBL_MANT_DIG) ? fast_value(w, (int)(split.exponent - decimals)) : slow_value(&split);
    } else {
        size = slow_value(&split);
    }
    *value = split.negative ? -size : size;
    return true;
}
