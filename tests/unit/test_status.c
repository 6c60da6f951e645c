/* SPDX-License-Identifier: MIT
 *
 * Statuses, the record of the first failure, and what a sentence for a person may hold.
 */
#include "support.h"

#include <stdio.h>
#include <string.h>
#include <sysexits.h>

/* sysexits(3), of 4.3 BSD, is the outside reference of the numbers. */
static void exit_codes_are_those_of_sysexits(void **state)
{
    (void)state;
    assert_int_equal(fescue_status_exit_code(FESCUE_OK), EX_OK);
    assert_int_equal(fescue_status_exit_code(FESCUE_USAGE), EX_USAGE);
    assert_int_equal(fescue_status_exit_code(FESCUE_BAD_DATA), EX_DATAERR);
    assert_int_equal(fescue_status_exit_code(FESCUE_NO_INPUT), EX_NOINPUT);
    assert_int_equal(fescue_status_exit_code(FESCUE_DEFECT), EX_SOFTWARE);
    assert_int_equal(fescue_status_exit_code(FESCUE_NO_MEMORY), EX_OSERR);
    assert_int_equal(fescue_status_exit_code(FESCUE_CANNOT_CREATE), EX_CANTCREAT);
    assert_int_equal(fescue_status_exit_code(FESCUE_CANNOT_WRITE), EX_IOERR);
    assert_int_equal(fescue_status_exit_code(FESCUE_STOPPED), EX_TEMPFAIL);
}

static void an_unknown_status_is_a_defect(void **state)
{
    (void)state;
    fescue_status unknown = (fescue_status)99;
    assert_int_equal(fescue_status_exit_code(unknown), EX_SOFTWARE);
    assert_string_equal(fescue_status_text(unknown), "an unknown status");
    assert_string_equal(fescue_status_text(FESCUE_OK), "done");
}

static void the_first_failure_is_kept(void **state)
{
    fescue_context *context = bench_of(state)->context;
    assert_string_equal(fescue_failure_text(context), "");
    assert_string_equal(fescue_failure_where(context), "");
    assert_int_equal(FAIL(context, FESCUE_BAD_DATA, "line %d", 7), FESCUE_BAD_DATA);
    char where[64];
    snprintf(where, sizeof where, "test_status.c:%d", __LINE__ - 2);
    assert_int_equal(FAIL(context, FESCUE_NO_MEMORY, "another"), FESCUE_NO_MEMORY);
    assert_string_equal(fescue_failure_text(context), "line 7");
    assert_non_null(strstr(fescue_failure_where(context), where));
    fescue_failure_clear(context);
    assert_string_equal(fescue_failure_text(context), "");
    FAIL(context, FESCUE_NO_MEMORY, "a new one");
    assert_string_equal(fescue_failure_text(context), "a new one");
}

static void a_failure_replaces_a_stop(void **state)
{
    fescue_context *context = bench_of(state)->context;
    FAIL(context, FESCUE_STOPPED, "stopped");
    FAIL(context, FESCUE_STOPPED, "stopped again");
    assert_string_equal(fescue_failure_text(context), "stopped");
    FAIL(context, FESCUE_CANNOT_WRITE, "full");
    FAIL(context, FESCUE_STOPPED, "stopped");
    assert_string_equal(fescue_failure_text(context), "full");
}

static void without_a_context_there_was_no_memory(void **state)
{
    (void)state;
    assert_string_equal(fescue_failure_text(NULL), fescue_status_text(FESCUE_NO_MEMORY));
    assert_string_equal(fescue_failure_where(NULL), "");
}

static const char *sentence_of(fescue_context *context, const char *quoted)
{
    fescue_failure_clear(context);
    FAIL(context, FESCUE_BAD_DATA, "%s", quoted);
    return fescue_failure_text(context);
}

/* What is well formed and what is not: table 3-7 of the Unicode standard. */
static void a_sentence_is_plain_text(void **state)
{
    static const struct {
        const char *quoted, *sentence;
    } cases[] = {
        {"plain, with ~ and spaces", "plain, with ~ and spaces"},
        {"two\nlines\r\tand \x1b[31mred\x7f", "two?lines??and ?[31mred?"},
        {"Gr\xc3\xbc\xc3\x9f" /* U+00FC, U+00DF */ "e", "Gr\xc3\xbc\xc3\x9f"
                                                        "e"},
        {"\xe0\xa0\x80\xed\x9f\xbf\xf0\x90\x80\x80\xf4\x8f\xbf\xbf",
         "\xe0\xa0\x80\xed\x9f\xbf\xf0\x90\x80\x80\xf4\x8f\xbf\xbf"},
        {"latin \xfc 1", "latin ? 1"},
        {"csi \xc2\x9b"
         "2J",
         "csi ??2J"},
        {"overlong \xc0\xaf \xe0\x9f\xbf \xf0\x8f\xbf\xbf", "overlong ?? ??? ????"},
        {"surrogate \xed\xa0\x80", "surrogate ???"},
        {"too large \xf4\x90\x80\x80 \xf5\x80\x80\x80", "too large ???? ????"},
        {"cut short \xe2\x82", "cut short ??"},
        {"a lone tail \x80", "a lone tail ?"},
    };
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++)
        assert_string_equal(sentence_of(bench_of(state)->context, cases[k].quoted), cases[k].sentence);
}

/* One of the lengths puts the cut inside the character of three bytes. */
static void a_long_sentence_is_cut_between_characters(void **state)
{
    fescue_context *context = bench_of(state)->context;
    char quoted[4096];
    for (size_t lead = 0; lead < 3; lead++) {
        memset(quoted, 'x', lead);
        for (size_t k = lead; k + 3 < sizeof quoted; k += 3)
            memcpy(quoted + k, "\xe2\x82\xac", 4); /* the euro sign */
        const char *sentence = sentence_of(context, quoted);
        size_t length = strlen(sentence);
        assert_in_range(length, 1000, 1023);
        assert_string_equal(sentence + length - 3, "...");
        assert_int_equal((length - 3 - lead) % 3, 0);
        assert_memory_equal(sentence, quoted, length - 3);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(exit_codes_are_those_of_sysexits),
        cmocka_unit_test(an_unknown_status_is_a_defect),
        BENCH_TEST(the_first_failure_is_kept),
        BENCH_TEST(a_failure_replaces_a_stop),
        cmocka_unit_test(without_a_context_there_was_no_memory),
        BENCH_TEST(a_sentence_is_plain_text),
        BENCH_TEST(a_long_sentence_is_cut_between_characters),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
