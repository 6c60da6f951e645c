/* SPDX-License-Identifier: MIT
 *
 * Text for people: rounding and growing.
 */
#include "job/job_internal.h"
#include "support.h"
#include "support_locale.h"

#include <math.h>
#include <string.h>

static void words_check(void)
{
    static const struct {
        double value;
        int digits;
        const char *words;
    } cases[] = {{3.14159, 4, "3.142"},
                 {0.30000000000000004, 4, "0.3"},
                 {-0.0012345, 3, "-0.00123"},
                 {99.95, 3, "100"}, /* 99.95 lies above the half: 99.9500000000000028 */
                 {83.40422, 3, "83.4"},
                 {123456, 3, "123000"},
                 {5, 1, "5"},
                 {0.96, 1, "1"},
                 {4.3298697960381105e-15, 4, "4.33e-15"},
                 {1.2345e-310, 3, "1.23e-310"},
                 {6.789e300, 2, "6.8e+300"},
                 {0, 4, "0"},
                 {1e15, 15, "1e+15"},
                 {NAN, 4, "nan"},
                 {INFINITY, 4, "inf"},
                 {-INFINITY, 4, "-inf"}};
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++) {
        char text[32];
        assert_string_equal(real_to_words(cases[k].value, cases[k].digits, text), cases[k].words);
    }
}

static void reals_are_rounded(void **state)
{
    (void)state;
    words_check();
}

static void reals_are_rounded_alike_in_any_locale(void **state)
{
    locale_t comma = comma_locale(bench_of(state)->folder), around = uselocale(comma);
    words_check();
    uselocale(around);
    freelocale(comma);
}

static void a_text_grows(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct text text = {.context = context};
    char *out = NULL;
    enum { LINES = 3000 };
    for (int k = 0; k < LINES; k++)
        text_add(&text, "line %04d\n", k);
    assert_status(context, text_finish(&text, &out), FESCUE_OK);
    assert_int_equal(strlen(out), LINES * strlen("line 0000\n"));
    assert_memory_equal(out + 10 * 2999, "line 2999\n", 11);
    GIVE(context, &out);
    struct text empty = {.context = context};
    assert_status(context, text_finish(&empty, &out), FESCUE_OK);
    assert_string_equal(out, "");
    GIVE(context, &out);
}

static void a_text_without_memory_is_none(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (uint64_t nth = 1; nth <= 2; nth++) {
        struct text text = {.context = context};
        char *out = NULL;
        fault_plan(FAULT_TAKE, nth, false, 0);
        for (int k = 0; k < 300; k++)
            text_add(&text, "line %04d\n", k);
        assert_int_equal(text_finish(&text, &out), FESCUE_NO_MEMORY);
        assert_null(out);
        fault_clear();
        fescue_failure_clear(context);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(reals_are_rounded),
        BENCH_TEST(reals_are_rounded_alike_in_any_locale),
        BENCH_TEST(a_text_grows),
        BENCH_TEST(a_text_without_memory_is_none),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
