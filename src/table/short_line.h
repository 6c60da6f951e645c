/* SPDX-License-Identifier: MIT
 *
 * Short lines of Matrix Market, "row column [-]digits[.digits]", by vectors of bytes.
 *
 * Sides have at most 7 digits, the value 15 in all, one blank stands between, the line feed is within WINDOW
 * characters. Masks of the window (which are digits, blanks, points, signs) say where fields end. A shuffle then brings
 * the digits of each number, the point left out, to the right end of its bytes, zeros before them, and three steps add
 * neighbours (the way of digits.h for all numbers of the line at once; the instructions in brackets):
 *
 *     8 bytes row | 8 bytes column | 16 bytes value      digits 0 .. 9
 *     [maddubs]  pairs of digits   10 a + b              below 10^2
 *     [madd]     pairs of pairs   100 a + b              below 10^4, packed to 16 bits
 *     [madd]     halves         10000 a + b              row, column, upper and lower eight digits of the value
 *
 * The value is w / 10^d with w < 10^15 < 2^53 and d <= 15, both doubles, so one division rounds the exact result once
 * (way 1 of number.c); a sign goes to the divisor. Divisions are made afterwards, four at a time.
 *
 * What costs is how long one line takes from its first byte to its last number, since a processor has only some 300
 * instructions on their way at once. So where a line begins is known beforehand, nothing branches on a sign or a point,
 * which no processor could foresee, and constants are read from memory, where the compiler would make them anew.
 */
#ifndef FESCUE_TABLE_SHORT_LINE_H
#define FESCUE_TABLE_SHORT_LINE_H

#include "table/table_internal.h"

#include <immintrin.h>
#include <pthread.h>
#include <string.h>

#define SHORT_LINE_VECTORS __attribute__((target("avx2,bmi,bmi2,popcnt")))

enum { WINDOW = 32, PLACE_DIGITS = 7, VALUE_DIGITS = 15, SHUFFLE = 16 };
_Static_assert(CHUNK_SLACK >= 2 * WINDOW, "two windows can be read from any place of a chunk");

/* Which byte goes where: by the digits of row and column; by those before and behind the point. */
static unsigned char place_shuffle[PLACE_DIGITS + 1][PLACE_DIGITS + 1][SHUFFLE];
static unsigned char value_shuffle[VALUE_DIGITS + 1][VALUE_DIGITS + 1][SHUFFLE];
/* Each character as a window full of it; the constants of the three steps. */
enum character { CHARACTER_ZERO, CHARACTER_NINE, CHARACTER_BLANK, CHARACTER_POINT, CHARACTER_SIGN, CHARACTERS };
static unsigned char characters[CHARACTERS][WINDOW];
static pthread_once_t shuffles_once = PTHREAD_ONCE_INIT;

/* Byte `from` and those behind it to the bytes from `to` on. */
static void digits_bring(unsigned char *shuffle, int to, int from, int count)
{
    for (int k = 0; k < count; k++)
        shuffle[to + k] = (unsigned char)(from + k);
}

static void shuffles_compute(void)
{
    enum { NOTHING = 0x80, HALF = SHUFFLE / 2 };
    static const char of_character[CHARACTERS] = {'0', 9, ' ', '.', '-'};
    for (int k = 0; k < CHARACTERS; k++)
        memset(characters[k], of_character[k], WINDOW);
    memset(place_shuffle, NOTHING, sizeof place_shuffle);
    memset(value_shuffle, NOTHING, sizeof value_shuffle);
    for (int row = 1; row <= PLACE_DIGITS; row++)
        for (int column = 1; column <= PLACE_DIGITS; column++) {
            digits_bring(place_shuffle[row][column], HALF - row, 0, row);
            digits_bring(place_shuffle[row][column], SHUFFLE - column, row + 1, column);
        }
    for (int whole = 0; whole <= VALUE_DIGITS; whole++)
        for (int decimals = 0; whole + decimals <= VALUE_DIGITS; decimals++) {
            digits_bring(value_shuffle[whole][decimals], SHUFFLE - decimals - whole, 0, whole);
            digits_bring(value_shuffle[whole][decimals], SHUFFLE - decimals, whole + 1, decimals);
        }
}

SHORT_LINE_VECTORS static inline __m256i window_load(const char *at)
{
    return _mm256_loadu_si256((const __m256i *)(const void *)at);
}

SHORT_LINE_VECTORS static inline uint32_t equal_find(__m256i left, __m256i right)
{
    return (uint32_t)_mm256_movemask_epi8(_mm256_cmpeq_epi8(left, right));
}

/* Where the window has such a character, the first in the lowest bit. */
SHORT_LINE_VECTORS static inline uint32_t characters_find(__m256i window, enum character character)
{
    return equal_find(window, window_load((const char *)characters[character]));
}

/* Where it has a digit. */
SHORT_LINE_VECTORS static inline uint32_t digits_find(__m256i window)
{
    const __m256i number = _mm256_sub_epi8(window, window_load((const char *)characters[CHARACTER_ZERO]));
    return equal_find(_mm256_min_epu8(number, window_load((const char *)characters[CHARACTER_NINE])), number);
}

/* Line feeds from `from` on, as places behind `text`: fills `place` until at least `enough` are there, or the text ends
   (at `end`). *from moves to where looking has to go on. There is room for two windows' bits more. */
SHORT_LINE_VECTORS static inline size_t line_feeds_find(const char *text, size_t *from, size_t end, size_t enough,
                                                        uint32_t *place)
{
    enum { STEP = 2 * WINDOW, USUAL = 8 }; /* as many in a step, or fewer: written without asking how many there are */
    const __m256i feed = _mm256_set1_epi8('\n');
    size_t count = 0;
    for (; *from < end && count < enough; *from += STEP) {
        uint64_t found = equal_find(window_load(text + *from), feed) |
                         (uint64_t)equal_find(window_load(text + *from + WINDOW), feed) << WINDOW;
        if (end - *from < STEP)
            found &= (UINT64_C(1) << (end - *from)) - 1;
        const size_t feeds = (size_t)__builtin_popcountll(found);
        for (size_t k = 0; k < USUAL; k++, found &= found - 1)
            place[count + k] = (uint32_t)(*from + _tzcnt_u64(found));
        for (size_t k = USUAL; k < feeds; k++, found &= found - 1)
            place[count + k] = (uint32_t)(*from + _tzcnt_u64(found));
        count += feeds;
    }
    return count;
}

SHORT_LINE_VECTORS static inline __m128i bytes_load(const void *at)
{
    return _mm_loadu_si128(at);
}

/* Row, column and the two halves of the value's digits, from the bytes at two places. */
SHORT_LINE_VECTORS static inline __m128i numbers_make(const char *places, const char *value,
                                                      const unsigned char *shuffle_places,
                                                      const unsigned char *shuffle_value)
{
    const __m128i zero = bytes_load(characters[CHARACTER_ZERO]), tens = _mm_set1_epi16(1 << 8 | 10);
    const __m128i hundreds = _mm_set1_epi32(1 << 16 | 100), thousands = _mm_set1_epi32(1 << 16 | 10000);
    __m128i left = _mm_shuffle_epi8(_mm_sub_epi8(bytes_load(places), zero), bytes_load(shuffle_places));
    __m128i right = _mm_shuffle_epi8(_mm_sub_epi8(bytes_load(value), zero), bytes_load(shuffle_value));
    left = _mm_madd_epi16(_mm_maddubs_epi16(left, tens), hundreds);
    right = _mm_madd_epi16(_mm_maddubs_epi16(right, tens), hundreds);
    return _mm_madd_epi16(_mm_packus_epi32(left, right), thousands);
}

/* A line taken apart. */
struct short_line {
    uint32_t row, column;
    uint64_t halves; /* of the value's digits: the upper eight in the lower bits */
    double power;    /* of ten, by which they are divided, with the value's sign */
    uint32_t text;   /* where the value begins */
};

/* Takes the line of `length` characters apart if it is short; points are none where `points_mask` is 0. */
SHORT_LINE_VECTORS static inline bool short_line_cut(const char *at, size_t length, uint32_t points_mask,
                                                     struct short_line *cut)
{
    static const double power[2][VALUE_DIGITS + 1] = {
        {1e0, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10, 1e11, 1e12, 1e13, 1e14, 1e15},
        {-1e0, -1e1, -1e2, -1e3, -1e4, -1e5, -1e6, -1e7, -1e8, -1e9, -1e10, -1e11, -1e12, -1e13, -1e14, -1e15}};
    const __m256i window = window_load(at);
    const uint32_t blanks = characters_find(window, CHARACTER_BLANK), signs = characters_find(window, CHARACTER_SIGN);
    const uint32_t points = characters_find(window, CHARACTER_POINT) & points_mask, digits = digits_find(window);
    if (length >= WINDOW)
        return false;
    const unsigned end = (unsigned)length, row_end = _tzcnt_u32(blanks), column_end = _tzcnt_u32(_blsr_u32(blanks));
    const unsigned column = column_end - row_end - 1, whole_end = _tzcnt_u32(points | UINT32_C(1) << end);
    const unsigned negative = (unsigned)((uint64_t)signs >> (column_end + 1)) & 1, value = column_end + 1 + negative;
    const unsigned point = whole_end < end, whole = whole_end - value, decimals = end - whole_end - point;
    /* Two blanks, a sign, a point, and all else are digits. A number without digits is 0, which is no place. */
    if ((unsigned)_mm_popcnt_u32(_bzhi_u32(digits, end)) + negative + point + 2 != end ||
        (row_end | column) > PLACE_DIGITS || whole > VALUE_DIGITS || whole + decimals - 1 >= VALUE_DIGITS)
        return false;
    const __m128i numbers =
        numbers_make(at, at + value, place_shuffle[row_end][column], value_shuffle[whole][decimals]);
    const uint64_t places = (uint64_t)_mm_cvtsi128_si64(numbers);
    *cut = (struct short_line){.row = (uint32_t)places - 1,
                               .column = (uint32_t)(places >> 32) - 1,
                               .halves = (uint64_t)_mm_extract_epi64(numbers, 1),
                               .power = power[negative][decimals],
                               .text = column_end + 1};
    return true;
}

static inline double value_make(const struct short_line *cut)
{
    const uint64_t digits = (cut->halves & UINT32_MAX) * 100000000 + (cut->halves >> 32);
    return (double)(int64_t)digits / cut->power;
}

/* Four values. A whole number below 2^52 becomes a double as the lower bits of one between 2^52 and 2^53. */
SHORT_LINE_VECTORS static inline __m256d values_make(const uint64_t *halves, const double *power)
{
    const __m256i both = _mm256_loadu_si256((const __m256i *)(const void *)halves);
    const __m256d two_52 = _mm256_set1_pd(0x1p52);
    __m256i number = _mm256_mul_epu32(both, _mm256_set1_epi64x(100000000));
    number = _mm256_add_epi64(number, _mm256_srli_epi64(both, 32));
    number = _mm256_or_si256(number, _mm256_castpd_si256(two_52));
    return _mm256_div_pd(_mm256_sub_pd(_mm256_castsi256_pd(number), two_52), _mm256_loadu_pd(power));
}

#endif
