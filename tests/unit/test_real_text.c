/* SPDX-License-Identifier: MIT
 *
 * The shortest decimal that reads back as the same number. The outside reference is the C library, whose strtod and
 * "%.*e" are exact: with one digit less no decimal may read back, and of the decimals with as many digits ours must be
 * the nearest, which is the one "%.*e" gives.
 */
#include "support.h"

#include <float.h>
#include <locale.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

/* ---- layout and special values ---------------------------------------------------------------------------------- */

static void text_check(double value, enum fescue_precision precision, const char *expected)
{
    char text[32];
    size_t length = real_to_text(value, precision, text);
    assert_string_equal(text, expected);
    assert_int_equal(length, strlen(expected));
}

static void doubles_have_the_expected_texts(void **state)
{
    static const struct {
        double value;
        const char *text;
    } cases[] = {
        {0.0, "0"},
        {-0.0, "-0"},
        {1, "1"},
        {-1, "-1"},
        {10, "10"},
        {0.1, "0.1"},
        {0.5, "0.5"},
        {-2.5, "-2.5"},
        {0.1 + 0.2, "0.30000000000000004"},
        {1.0 / 3, "0.3333333333333333"},
        {123.456, "123.456"},
        {1e-4, "0.0001"},
        {1e-5, "0.00001"},
        {1.2345678901234567e-5, "0.000012345678901234568"},
        {9.999e-6, "9.999e-06"},
        {1e-6, "1e-06"},
        {999999999999999, "999999999999999"},
        {999999999999999.9, "999999999999999.9"},
        {1e15, "1e+15"},
        {1234567890123456, "1.234567890123456e+15"},
        {0x1p53, "9.007199254740992e+15"},
        {1e22, "1e+22"},
        {1e23, "1e+23"},
        {1e100, "1e+100"},
        {-1e-100, "-1e-100"},
        {DBL_MAX, "1.7976931348623157e+308"},
        {DBL_MIN, "2.2250738585072014e-308"},
        {DBL_TRUE_MIN, "5e-324"},
        {INFINITY, "inf"},
        {-INFINITY, "-inf"},
        {NAN, "nan"},
    };
    (void)state;
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++)
        text_check(cases[k].value, FESCUE_DOUBLE, cases[k].text);
    text_check(-NAN, FESCUE_DOUBLE, "nan"); /* a hole has no sign */
}

static void floats_have_the_expected_texts(void **state)
{
    static const struct {
        double value;
        const char *text;
    } cases[] = {
        {0.1f, "0.1"},
        {0.1, "0.1"}, /* a double is rounded to a float first */
        {1.0 / 3, "0.33333334"},
        {16777215, "16777215"},
        {16777216, "16777216"},
        {33554432, "33554432"},
        {123456789, "123456790"},
        {1e14, "100000000000000"},
        {1e15, "1e+15"},
        {FLT_MAX, "3.4028235e+38"},
        {FLT_MIN, "1.1754944e-38"},
        {FLT_TRUE_MIN, "1e-45"},
        {-0.0, "-0"},
        {INFINITY, "inf"},
        {-INFINITY, "-inf"},
        {NAN, "nan"},
    };
    (void)state;
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++)
        text_check(cases[k].value, FESCUE_SINGLE, cases[k].text);
}

/* ---- shortest, nearest, and back again -------------------------------------------------------------------------- */

/* The significant digits of a decimal, without zeros at either end. */
static size_t digits_of(const char *text, char digits[32])
{
    size_t count = 0;
    for (; *text != '\0' && *text != 'e'; text++)
        if (*text != '.' && *text != '-' && (*text != '0' || count > 0))
            digits[count++] = *text;
    while (count > 0 && digits[count - 1] == '0')
        count--;
    digits[count] = '\0';
    return count;
}

static bool reads_back(const char *text, double value, enum fescue_precision precision)
{
    double read = precision == FESCUE_SINGLE ? (double)strtof(text, NULL) : strtod(text, NULL);
    return memcmp(&read, &value, sizeof read) == 0;
}

/* Whether a decimal of so few digits reads back: only the nearest and, where the spacing of the numbers changes, its
   neighbours can. */
static bool can_be_shorter(double value, enum fescue_precision precision, int digits)
{
    char nearest[40], neighbour[40];
    snprintf(nearest, sizeof nearest, "%.*e", digits - 1, fabs(value));
    char only[32] = {nearest[0]};
    memcpy(only + 1, nearest + 2, (size_t)digits - 1);
    int exponent = atoi(strchr(nearest, 'e') + 1) - (digits - 1);
    for (int step = -1; step <= 1; step++) {
        snprintf(neighbour, sizeof neighbour, "%llde%d", atoll(only) + step, exponent);
        if (reads_back(neighbour, fabs(value), precision))
            return true;
    }
    return false;
}

static void value_check(double value, enum fescue_precision precision)
{
    char text[32], digits[32], nearest[40], nearest_digits[32];
    size_t length = real_to_text(value, precision, text);
    if (length != strlen(text) || length > 24)
        fail_msg("%a: the length of %s is told as %zu", value, text, length);
    if (!reads_back(text, value, precision))
        fail_msg("%a: %s does not read back", value, text);
    int count = (int)digits_of(text, digits);
    if (count > 1 && can_be_shorter(value, precision, count - 1))
        fail_msg("%a: %s can be shorter", value, text);
    snprintf(nearest, sizeof nearest, "%.*e", count - 1, value);
    digits_of(nearest, nearest_digits);
    if (strcmp(digits, nearest_digits) != 0 && reads_back(nearest, value, precision))
        fail_msg("%a: %s is not the nearest decimal of its length, %s is", value, text, nearest);
}

static double double_of(uint64_t bits)
{
    double value;
    memcpy(&value, &bits, sizeof value);
    return value;
}

static double float_of(uint32_t bits)
{
    float value;
    memcpy(&value, &bits, sizeof value);
    return value;
}

/* Every power of two and ten with its neighbours, the smallest and the greatest numbers. */
static void doubles_at_the_edges_read_back(void **state)
{
    (void)state;
    for (int exponent = -1074; exponent <= 1023; exponent++) {
        double power = ldexp(1, exponent);
        value_check(power, FESCUE_DOUBLE);
        value_check(-nextafter(power, INFINITY), FESCUE_DOUBLE);
        if (exponent > -1074)
            value_check(nextafter(power, 0), FESCUE_DOUBLE);
    }
    for (int exponent = -323; exponent <= 308; exponent++) {
        char text[16];
        snprintf(text, sizeof text, "1e%d", exponent);
        double power = strtod(text, NULL);
        value_check(power, FESCUE_DOUBLE);
        value_check(nextafter(power, INFINITY), FESCUE_DOUBLE);
        value_check(nextafter(power, 0) > 0 ? nextafter(power, 0) : power, FESCUE_DOUBLE);
    }
    for (uint64_t bits = 1; bits <= 2000; bits++) {
        value_check(double_of(bits), FESCUE_DOUBLE);
        value_check(double_of(0x7fefffffffffffff - bits), FESCUE_DOUBLE);
    }
}

static void floats_at_the_edges_read_back(void **state)
{
    (void)state;
    for (uint32_t exponent = 0; exponent < 255; exponent++)
        for (uint32_t step = 0; step < 5; step++) {
            uint32_t bits = (exponent << 23) + step;
            if (bits >= 2)
                value_check(float_of(bits - 2), FESCUE_SINGLE);
        }
    for (uint32_t bits = 1; bits <= 2000; bits++) {
        value_check(float_of(bits), FESCUE_SINGLE);
        value_check(float_of(0x7f7fffff - bits), FESCUE_SINGLE);
    }
}

static void any_bits_read_back(void **state)
{
    enum { COUNT = 100000 };
    (void)state;
    struct random_stream stream = random_open(21, RANDOM_TEST, 0);
    for (int k = 0; k < COUNT; k++) {
        uint64_t bits = random_bits(&stream);
        if (isfinite(double_of(bits)))
            value_check(double_of(bits), FESCUE_DOUBLE);
        if (isfinite(float_of((uint32_t)bits)))
            value_check(float_of((uint32_t)bits), FESCUE_SINGLE);
    }
}

/* Numbers as measurements have them: few decimals, moderate size. They come back with the decimals they had. */
static void decimals_come_back_as_they_were(void **state)
{
    (void)state;
    struct random_stream stream = random_open(22, RANDOM_TEST, 0);
    for (int k = 0; k < 50000; k++) {
        char decimal[32], text[32];
        uint64_t whole = random_below(&stream, 100000),
                 part = random_below(&stream, 1000) * 10 + 1 + random_below(&stream, 9);
        snprintf(decimal, sizeof decimal, "%s%llu.%04llu", k % 2 ? "-" : "", (unsigned long long)whole,
                 (unsigned long long)part);
        real_to_text(strtod(decimal, NULL), FESCUE_DOUBLE, text);
        assert_string_equal(text, decimal);
    }
}

/* The text must not change with the locale of the program around us; localedef builds one that has a decimal comma. */
static void no_locale_changes_the_text(void **state)
{
    static const char source[] = "LC_NUMERIC\ndecimal_point \",\"\nthousands_sep \".\"\ngrouping 3;3\nEND LC_NUMERIC\n";
    const struct bench *bench = bench_of(state);
    char path[PATH_SIZE], command[4 * PATH_SIZE];
    file_put_text(path_in(bench->folder, "comma.src", path), source);
    snprintf(command, sizeof command, "localedef -c -i %s %s/comma >%s/log 2>&1", path, bench->folder, bench->folder);
    (void)!system(command); /* tells of categories that are missing, and builds */
    setenv("LOCPATH", bench->folder, 1);
    const char *got = setlocale(LC_NUMERIC, "comma");
    char text[32], libc[32];
    snprintf(libc, sizeof libc, "%.2f", 0.25);
    real_to_text(0.25, FESCUE_DOUBLE, text);
    FAIL(bench->context, FESCUE_BAD_DATA, "%.2f", 0.25);
    setlocale(LC_NUMERIC, "C");
    unsetenv("LOCPATH");
    assert_non_null(got);
    assert_string_equal(libc, "0,25"); /* so the locale was in force */
    assert_string_equal(text, "0.25");
    assert_string_equal(fescue_failure_text(bench->context), "0.25");
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(doubles_have_the_expected_texts),
        cmocka_unit_test(floats_have_the_expected_texts),
        cmocka_unit_test(doubles_at_the_edges_read_back),
        cmocka_unit_test(floats_at_the_edges_read_back),
        cmocka_unit_test(any_bits_read_back),
        cmocka_unit_test(decimals_come_back_as_they_were),
        BENCH_TEST(no_locale_changes_the_text),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
