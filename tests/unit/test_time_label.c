/* SPDX-License-Identifier: MIT
 *
 * Instants from labels: worked examples of RFC 3339 and of ISO 8601, and what is no instant. Python's datetime is
 * compared with in tests/reference/time_labels.py.
 */
#include "support.h"
#include "table/table_internal.h"

#include <stdlib.h>
#include <string.h>

static bool parse(const char *text, struct instant *instant)
{
    return time_label_parse(text, text + strlen(text), instant);
}

struct example {
    const char *text;
    int64_t second;
    int32_t nano;
    bool has_offset;
};

static void examples_check(const struct example *example, size_t count)
{
    for (size_t k = 0; k < count; k++) {
        struct instant instant;
        if (!parse(example[k].text, &instant))
            fail_msg("%s is not taken", example[k].text);
        if (instant.second != example[k].second || instant.nano != example[k].nano ||
            instant.has_offset != example[k].has_offset)
            fail_msg("%s is %lld + %d", example[k].text, (long long)instant.second, (int)instant.nano);
    }
}

/* RFC 3339, section 5.8, with what is said there of each. Unix seconds are those of GNU date. */
static void the_examples_of_rfc_3339_are_read(void **state)
{
    (void)state;
    static const struct example examples[] = {
        {"1985-04-12T23:20:50.52Z", 482196050, 520000000, true}, /* 20 minutes and 50.52 seconds after the 23rd hour */
        {"1996-12-19T16:39:57-08:00", 851042397, 0, true},
        {"1996-12-20T00:39:57Z", 851042397, 0, true}, /* equivalent to the one before */
        {"1990-12-31T23:59:60Z", 662688000, 0, true}, /* the leap second at the end of 1990 */
        {"1990-12-31T15:59:60-08:00", 662688000, 0, true},
        {"1937-01-01T12:00:27.87+00:20", -1041337173, 870000000, true}, /* 11:40:27.87 in UTC */
    };
    examples_check(examples, sizeof examples / sizeof examples[0]);
}

static void one_moment_in_all_forms(void **state)
{
    (void)state;
    static const char *const days[] = {"2024-02-29", "20240229", "2024-W09-4", "2024W094", "2024-060"};
    static const char *const moments[] = {
        "2024-02-29T13:30:00Z",   "20240229T133000Z",    "2024-02-29 13:30Z",        "2024-02-29t13:30:00z",
        "2024-W09-4T13:30Z",      "2024060T1330Z",       "2024-02-29T13:30:00.000Z", "2024-02-29T13,5Z",
        "2024-02-29T13:30:00,0Z", "2024-02-29T14:30+01", "2024-02-29T08:00-05:30",   "20240301T003000+1100",
        "2024-02-29T13:30+00:00", "2024-02-29T13:29:60Z"};
    struct instant instant;
    for (size_t k = 0; k < sizeof days / sizeof days[0]; k++) {
        assert_true(parse(days[k], &instant));
        assert_int_equal(instant.second, 1709164800);
        assert_false(instant.has_offset);
    }
    for (size_t k = 0; k < sizeof moments / sizeof moments[0]; k++) {
        if (!parse(moments[k], &instant) || instant.second != 1709213400 || instant.nano != 0)
            fail_msg("%s is %lld", moments[k], (long long)instant.second);
        assert_true(instant.has_offset);
    }
}

/* Weeks and ends: ISO 8601, where 2008-W01 begins on 2007-12-31, and 2009-W53 ends on 2010-01-03. */
static void ends_of_the_calendar(void **state)
{
    (void)state;
    static const struct example examples[] = {
        {"1970-01-01", 0, 0, false},
        {"0001-01-01", INT64_C(-62135596800), 0, false},
        {"9999-12-31T24:00", INT64_C(253402300800), 0, false},
        {"1969-12-31T23:59:59.999999999", -1, 999999999, false},
        {"2008-W01-1", 1199059200, 0, false}, /* 2007-12-31 */
        {"2009-W53-7", 1262476800, 0, false}, /* 2010-01-03 */
        {"2009-W53", 1261958400, 0, false},   /* 2009-12-28 */
        {"2024-12", 1733011200, 0, false},
        {"2000-366", 978220800, 0, false},
        {"1970-01-01T00:00:00.0000000019", 0, 1, false}, /* digits beyond the ninth are dropped */
    };
    examples_check(examples, sizeof examples / sizeof examples[0]);
}

static void what_is_no_instant(void **state)
{
    (void)state;
    static const char *const texts[] = {"",
                                        "W1",
                                        "alder-01",
                                        "17",
                                        "2024",
                                        "202402",
                                        "2024-1-05",
                                        "2024-01-5",
                                        "24-01-05",
                                        "0000-01-01",
                                        "10000-01-01",
                                        "-2024-01-05",
                                        "+2024-01-05",
                                        "2024-00-10",
                                        "2024-13-10",
                                        "2023-02-29",
                                        "1900-02-29",
                                        "2024-04-31",
                                        "2024-01-00",

                                        "2023-366",
                                        "2024-000",
                                        "2024060",
                                        "2024-W00-1",
                                        "2024-W54-1",
                                        "2024-W53-1",
                                        "2024-W10-0",
                                        "2024-W10-8",
                                        "2024W1",
                                        "2024-01-05T",
                                        "2024-01-05T1",
                                        "2024-01-05T25:00",
                                        "2024-01-05T24:01",
                                        "2024-01-05T24:00:00.1",
                                        "2024-01-05T10:60",
                                        "2024-01-05T10:15:60",
                                        "2024-01-05T10:14:61",
                                        "2024-01-05T10:15:",
                                        "2024-01-05T10:15:1",
                                        "2024-01-05T10:15.",
                                        "2024-01-05T10:15:00.5.5",
                                        "2024-01-05T1015:00",
                                        "2024-01-05T10:1500",
                                        "2024-01-05  10:15",
                                        "2024-01-05_10:15",
                                        "2024-01-05T10:15 Z",
                                        "2024-01-05T10:15Z ",
                                        " 2024-01-05",
                                        "2024-01-05T10:15+",
                                        "2024-01-05T10:15+1",
                                        "2024-01-05T10:15+24:00",
                                        "2024-01-05T10:15+01:60",
                                        "2024-01-05T10:15+01:0",
                                        "2024-01-05T10:15+01:00x",
                                        "2024-01-05Z",
                                        "2024-01T10:15",
                                        "2024-W10T10:15",
                                        "2024-01-05T10:15ZZ",
                                        "2024/01/05",
                                        "05.01.2024",
                                        "2024-01-05T10h15",
                                        "10:15",
                                        "T10:15",
                                        "2024-0105",
                                        "2024-W105"};
    struct instant instant;
    for (size_t k = 0; k < sizeof texts / sizeof texts[0]; k++)
        if (parse(texts[k], &instant))
            fail_msg("%s is taken", texts[k]);
}

/* No byte behind the text is looked at, and none before its end is left out. */
static void every_beginning_is_safe(void **state)
{
    (void)state;
    static const char text[] = "2024-02-29T13:30:00.125+01:00";
    struct instant instant;
    size_t taken = 0;
    for (size_t length = 0; length < sizeof text; length++) {
        char *copy = malloc(length + 1);
        assert_non_null(copy);
        memcpy(copy, text, length);
        taken += time_label_parse(copy, copy + length, &instant);
        free(copy);
    }
    /* YYYY-MM, a day, an hour, a minute, a second, three fractions, an offset of hours, one of minutes */
    assert_int_equal(taken, 10);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(the_examples_of_rfc_3339_are_read),
        cmocka_unit_test(one_moment_in_all_forms),
        cmocka_unit_test(ends_of_the_calendar),
        cmocka_unit_test(what_is_no_instant),
        cmocka_unit_test(every_beginning_is_safe),
    };
    return cmocka_run_group_tests_name("time_label", tests, NULL, NULL);
}
