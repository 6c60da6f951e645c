/* SPDX-License-Identifier: MIT
 *
 * Text to double: the grammar, and the last bit against the C library's strtod (which rounds correctly, C17 F.5).
 * FESCUE_TRIALS is the number of random texts of each kind.
 */
#include "support.h"
#include "support_locale.h"
#include "table/table.h"

#include <float.h>
#include <inttypes.h>
#include <locale.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

static const uint64_t seed = 20240301;

static uint64_t trials(void)
{
    const char *text = getenv("FESCUE_TRIALS");
    return text != NULL ? strtoull(text, NULL, 10) : 100000;
}

/* The text is surrounded by digits that do not belong to it: parsing must stop at its end. */
static void check(const char *text)
{
    size_t length = strlen(text);
    char *around = malloc(length + 2);
    memset(around, '7', length + 2);
    memcpy(around + 1, text, length);
    double expected = strtod(text, NULL), value = -1;
    bool is_number = number_parse(around + 1, around + 1 + length, &value);
    if (!is_number || memcmp(&value, &expected, sizeof value) != 0)
        print_error("%s: %.17g where %.17g was expected (seed %" PRIu64 ")\n", text, value, expected, seed);
    assert_true(is_number);
    assert_memory_equal(&value, &expected, sizeof value);
    free(around);
}

static void numbers_are_read_to_the_last_bit(void **state)
{
    (void)state;
    static const char *const texts[] = {
        "0",
        "-0",
        "+0",
        "0.0",
        "-0.000",
        "1",
        "-1",
        "+1",
        "007",
        "5.",
        ".5",
        "-.5e1",
        "1e5",
        "1E+05",
        "1e-05",
        "12.50",
        "3.14159265358979323846",
        "9007199254740991",
        "9007199254740992",
        "9007199254740993",
        "9007199254740995",
        "18446744073709551615",
        "18446744073709551616",
        "9999999999999999999",
        "99999999999999999999",
        "1e22",
        "1e23",
        "123456789e22",
        "9007199254740991e22",
        "9007199254740993e22",
        "1e-22",
        "1e-23",
        "3e-22",
        /* the ends of the range: largest, smallest normal, smallest, half of it and a little more, overflow */
        "1.7976931348623157e308",
        "1.7976931348623158e308",
        "1.7976931348623159e308",
        "1e309",
        "-1e400",
        "2.2250738585072014e-308",
        "2.2250738585072011e-308",
        "4.9e-324",
        "5e-324",
        "2.4703282292062327e-324",
        "2.4703282292062328e-324",
        "2e-324",
        "1e-400",
        "-1e-400",
        "1e999999999999999999999",
        "1e-999999999999999999999",
        "0e999999999999999999999",
        "0.000e-99999999999999999999",
        /* zeros that do not count, before and behind */
        "0000000000000000000000000000000000000001",
        "0.00000000000000000000000000000000000000000000000001e50",
        "100000000000000000000000000000000000000000000000000e-50",
        "1.00000000000000000000000000000000000000000000",
        /* half way between two doubles, and one unit of a far digit to either side */
        "1.00000000000000011102230246251565404236316680908203125",
        "1.00000000000000011102230246251565404236316680908203124",
        "1.00000000000000011102230246251565404236316680908203126",
    };
    for (size_t k = 0; k < sizeof texts / sizeof texts[0]; k++)
        check(texts[k]);
}

static void what_is_no_number_is_refused(void **state)
{
    (void)state;
    static const char *const texts[] = {
        "",         "+",    "-",     ".",   "-.",  "e5",    ".e5",   "1e",    "1e+",      "1e-", "1e5.",
        "1.2.3",    "1,5",  "1 ",    " 1",  "1 2", "--1",   "+-1",   "nan",   "NaN",      "inf", "-inf",
        "Infinity", "0x10", "0x1p3", "1d5", "1f",  "1_000", "1'000", "1e5e5", "\xd9\xa1",
    };
    for (size_t k = 0; k < sizeof texts / sizeof texts[0]; k++) {
        double value;
        if (number_parse(texts[k], texts[k] + strlen(texts[k]), &value))
            print_error("'%s' was taken for %g\n", texts[k], value);
        assert_false(number_parse(texts[k], texts[k] + strlen(texts[k]), &value));
    }
}

static char *digits_put(struct random_stream *stream, char *text, size_t count)
{
    for (; count > 0; count--)
        *text++ = (char)('0' + random_below(stream, 10));
    *text = '\0';
    return text;
}

static void random_decimals_agree(void **state)
{
    (void)state;
    struct random_stream stream = random_open(seed, RANDOM_TEST, 0);
    for (uint64_t n = trials(); n > 0; n--) {
        char text[128], *end = text;
        if (random_below(&stream, 2) == 0)
            *end++ = '-';
        end = digits_put(&stream, end, 1 + random_below(&stream, 22));
        if (random_below(&stream, 3) > 0) {
            *end++ = '.';
            end = digits_put(&stream, end, random_below(&stream, 22));
        }
        if (random_below(&stream, 3) == 0)
            sprintf(end, "e%d", (int)random_below(&stream, 700) - 350);
        check(text);
    }
}

/* A double drawn by its bits. */
static double random_double(struct random_stream *stream)
{
    double value;
    do {
        uint64_t bits = (uint64_t)(random_uniform(stream) * 0x1p32) << 32 | (uint64_t)(random_uniform(stream) * 0x1p32);
        memcpy(&value, &bits, sizeof value);
    } while (!isfinite(value));
    return value;
}

static void printed_doubles_come_back(void **state)
{
    (void)state;
    struct random_stream stream = random_open(seed, RANDOM_TEST, 1);
    for (uint64_t n = trials(); n > 0; n--) {
        char text[400];
        double value = random_double(&stream), back;
        sprintf(text, "%.16e", value);
        check(text);
        assert_true(number_parse(text, text + strlen(text), &back));
        assert_memory_equal(&back, &value, sizeof back);
        sprintf(text, "%.*g", (int)random_below(&stream, 17) + 1, value);
        check(text);
    }
}

/* The exact decimal of the point half way between two neighbours (at most 767 digits), itself and with something far
   behind it. printf prints doubles exactly; the half-way point of x is printed as half of 2x + step, by hand. */
static void half_way_points_agree(void **state)
{
    (void)state;
    struct random_stream stream = random_open(seed, RANDOM_TEST, 2);
    for (uint64_t n = trials() / 100; n > 0; n--) {
        /* c + 1/2 for a whole c of 53 bits, times a power of two that keeps it exact in print */
        uint64_t c = UINT64_C(1) << 52 | (uint64_t)(random_uniform(&stream) * 0x1p52);
        int power = -(int)random_below(&stream, 900);
        char *text = malloc(3000);
        /* long double holds the 54 bits; printing it with as many digits as there are is exact */
        int length = sprintf(text, "%.1000Lf", ldexpl((long double)c + 0.5L, power));
        check(text);
        strcpy(text + length, "0000000000000000000000000000000000000000000000000000000000000000000000001");
        check(text);
        free(text);
    }
}

/* Close to half way, in few digits: 17 to 21 of the point itself, the last of them moved a little, at the exponents
   where the product with a power of five decides. Whole numbers above 2^53 are half way exactly when they are odd and
   below 2^54. */
static void nearly_half_way_points_agree(void **state)
{
    (void)state;
    struct random_stream stream = random_open(seed, RANDOM_TEST, 4);
    for (uint64_t n = trials(); n > 0; n--) {
        uint64_t c = UINT64_C(1) << 52 | (uint64_t)(random_uniform(&stream) * 0x1p52);
        int power = (int)random_below(&stream, 500) - 280, digits = 17 + (int)random_below(&stream, 5);
        char text[64], *last;
        sprintf(text, "%.*Le", digits - 1, ldexpl((long double)c + 0.5L, power));
        check(text);
        last = strchr(text, 'e') - 1;
        *last = (char)('0' + random_below(&stream, 10));
        check(text);
        static const char *const scales[] = {"", "0e-1", "00e-2", "000e-3"};
        sprintf(text, "%" PRIu64 "%s", 2 * c + random_below(&stream, 3), scales[random_below(&stream, 4)]);
        check(text);
    }
}

/* Whole powers of two and of ten, and their neighbours, at every exponent. */
static void neighbours_of_powers_agree(void **state)
{
    (void)state;
    char text[64];
    for (int power = -340; power <= 310; power++)
        for (int first = 1; first <= 9; first++)
            for (int way = -1; way <= 1; way++) {
                sprintf(text, "%" PRIu64 "e%d", (uint64_t)first * UINT64_C(1000000000000000000) + (uint64_t)way, power);
                check(text);
                sprintf(text, "%de%d", first, power);
                check(text);
            }
    for (int power = -1074; power <= 1023; power++)
        for (int digits = 15; digits <= 25; digits++) {
            double value = ldexp(1, power);
            sprintf(text, "%.*e", digits, value);
            check(text);
            sprintf(text, "%.*e", digits, nextafter(value, 0));
            check(text);
        }
}

static void a_thousand_digits_are_not_too_many(void **state)
{
    (void)state;
    struct random_stream stream = random_open(seed, RANDOM_TEST, 3);
    for (uint64_t n = trials() / 500; n > 0; n--) {
        char *text = malloc(8000), *end = digits_put(&stream, text, random_below(&stream, 3000));
        *end++ = '.';
        end = digits_put(&stream, end, 1 + random_below(&stream, 3000));
        sprintf(end, "e%d", (int)random_below(&stream, 5000) - 4000);
        check(text);
        free(text);
    }
}

/* With a decimal comma around us. */
static void the_locale_does_not_matter(void **state)
{
    static const char point[] = "1.2345678901234567890123", comma[] = "1,5";
    double value = 0, none;
    locale_t locale = comma_locale(bench_of(state)->folder);
    locale_t around = uselocale(locale);
    bool is_number = number_parse(point, point + sizeof point - 1, &value);
    bool takes_comma = number_parse(comma, comma + sizeof comma - 1, &none);
    uselocale(around);
    freelocale(locale);
    assert_true(is_number);
    assert_true(value == 1.2345678901234567890123);
    assert_false(takes_comma);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(numbers_are_read_to_the_last_bit),
        cmocka_unit_test(what_is_no_number_is_refused),
        cmocka_unit_test(random_decimals_agree),
        cmocka_unit_test(printed_doubles_come_back),
        cmocka_unit_test(half_way_points_agree),
        cmocka_unit_test(nearly_half_way_points_agree),
        cmocka_unit_test(neighbours_of_powers_agree),
        cmocka_unit_test(a_thousand_digits_are_not_too_many),
        BENCH_TEST(the_locale_does_not_matter),
    };
    return cmocka_run_group_tests_name("number", tests, NULL, NULL);
}
