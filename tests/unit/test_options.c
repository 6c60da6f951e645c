/* SPDX-License-Identifier: MIT
 *
 * The options: each entry of both tables from its own bounds, and each kind by examples.
 */
#include "support.h"
#include "support_locale.h"

#include <float.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

/* ---- over the tables ------------------------------------------------------------------------------------------------
 */

typedef void each_option(fescue_context *context, const struct fescue_option *option, bool is_sow);

static void each_do(void **state, each_option *test)
{
    size_t count;
    const struct fescue_option *table = fescue_option_table(&count);
    for (size_t k = 0; k < count; k++)
        test(bench_of(state)->context, &table[k], false);
    table = fescue_sow_option_table(&count);
    for (size_t k = 0; k < count; k++)
        test(bench_of(state)->context, &table[k], true);
}

union any_options {
    struct fescue_options fill;
    struct fescue_sow_options sow;
};

static void any_standard(bool is_sow, union any_options *options)
{
    if (is_sow)
        fescue_sow_options_standard(&options->sow);
    else
        fescue_options_standard(&options->fill);
}

static fescue_status any_set(fescue_context *context, bool is_sow, union any_options *options, const char *name,
                             const char *text)
{
    return is_sow ? fescue_sow_options_set(context, &options->sow, name, text)
                  : fescue_options_set(context, &options->fill, name, text);
}

static void check_taken(fescue_context *context, const struct fescue_option *option, bool is_sow, const char *text)
{
    union any_options options;
    any_standard(is_sow, &options);
    fescue_status status = any_set(context, is_sow, &options, option->name, text);
    if (status != FESCUE_OK)
        fail_msg("--%s %s: %s", option->name, text, fescue_failure_text(context));
}

/* Refused, with a sentence that names option and value, and nothing is changed. */
static void check_refused(fescue_context *context, const struct fescue_option *option, bool is_sow, const char *text)
{
    union any_options options, before;
    char value[600], name[64];
    memset(&options, 0, sizeof options);
    any_standard(is_sow, &options);
    memcpy(&before, &options, sizeof before);
    fescue_status status = any_set(context, is_sow, &options, option->name, text);
    if (status != FESCUE_USAGE)
        fail_msg("--%s took \"%s\"", option->name, text == NULL ? "nothing" : text);
    snprintf(name, sizeof name, "--%s: ", option->name);
    snprintf(value, sizeof value, "found \"%.500s\", expected ", text == NULL ? "" : text);
    const char *sentence = fescue_failure_text(context);
    if (strncmp(sentence, name, strlen(name)) != 0 || (text != NULL && strstr(sentence, value) == NULL))
        fail_msg("--%s \"%s\": the sentence is \"%s\"", option->name, text, sentence);
    assert_memory_equal(&options, &before, sizeof before);
    fescue_failure_clear(context);
}

static void number_bounds(fescue_context *context, const struct fescue_option *option, bool is_sow)
{
    char text[64];
    bool is_whole = option->kind == FESCUE_KIND_COUNT || option->kind == FESCUE_KIND_BYTES;
    if (!is_whole && option->kind != FESCUE_KIND_REAL && option->kind != FESCUE_KIND_TIME)
        return;
    assert_true(option->least <= option->most);
    const char *format = is_whole ? "%.0f" : "%.17g";
    snprintf(text, sizeof text, format, option->least);
    check_taken(context, option, is_sow, text);
    snprintf(text, sizeof text, format, option->most);
    check_taken(context, option, is_sow, text);
    double step = is_whole ? 1 : 0;
    snprintf(text, sizeof text, format, step > 0 ? option->least - step : nextafter(option->least, -INFINITY));
    check_refused(context, option, is_sow, text);
    /* 2^53 + 1 is no double: two more is the next one */
    double above = option->most + step;
    snprintf(text, sizeof text, format, above > option->most ? above : nextafter(option->most, INFINITY));
    check_refused(context, option, is_sow, text);
    static const char *const wrong[] = {"", "abc", "1x", "1,5", "nan", "inf", "0x10", " 1", "1 ", "--1", "1e999"};
    for (size_t k = 0; k < sizeof wrong / sizeof wrong[0]; k++)
        check_refused(context, option, is_sow, wrong[k]);
}

static void every_number_has_its_bounds(void **state)
{
    each_do(state, number_bounds);
}

static void auto_where_allowed(fescue_context *context, const struct fescue_option *option, bool is_sow)
{
    bool is_word_of_its = option->kind == FESCUE_KIND_WORD && strncmp(option->words, "auto|", 5) == 0;
    if (option->can_be_auto || is_word_of_its || option->kind == FESCUE_KIND_TEXT)
        check_taken(context, option, is_sow, "auto");
    else
        check_refused(context, option, is_sow, "auto");
}

static void auto_is_taken_where_the_table_says_so(void **state)
{
    each_do(state, auto_where_allowed);
}

static void words_of_option(fescue_context *context, const struct fescue_option *option, bool is_sow)
{
    char words[256];
    if (option->kind != FESCUE_KIND_WORD && option->kind != FESCUE_KIND_WORDS)
        return;
    snprintf(words, sizeof words, "%s", option->words);
    int position = 0;
    for (char *word = strtok(words, "|"); word != NULL; word = strtok(NULL, "|"), position++) {
        union any_options options;
        any_standard(is_sow, &options);
        assert_int_equal(any_set(context, is_sow, &options, option->name, word), FESCUE_OK);
        const char *field = (const char *)&options + option->position;
        if (option->kind == FESCUE_KIND_WORD)
            assert_int_equal(*(const int *)(const void *)field, position);
        else
            assert_int_equal(*(const unsigned *)(const void *)field, 1U << position);
        char longer[64];
        snprintf(longer, sizeof longer, "%sx", word);
        check_refused(context, option, is_sow, longer);
        longer[strlen(word) - 1] = '\0';
        check_refused(context, option, is_sow, longer);
    }
    check_refused(context, option, is_sow, "");
    check_refused(context, option, is_sow, option->words);
}

static void every_word_sets_its_position(void **state)
{
    each_do(state, words_of_option);
}

static void standard_round_trip(fescue_context *context, const struct fescue_option *option, bool is_sow)
{
    union any_options options, again;
    char text[128], back[128];
    any_standard(is_sow, &options);
    fescue_option_text(option, &options, text, sizeof text);
    if (option->kind == FESCUE_KIND_TEXT && option->standard == NULL)
        return; /* not given has no text */
    any_standard(is_sow, &again);
    assert_int_equal(any_set(context, is_sow, &again, option->name, text), FESCUE_OK);
    fescue_option_text(option, &again, back, sizeof back);
    assert_string_equal(back, text);
    if (option->standard == NULL)
        return;
    assert_int_equal(any_set(context, is_sow, &again, option->name, option->standard), FESCUE_OK);
    fescue_option_text(option, &again, back, sizeof back);
    assert_string_equal(back, text);
}

static void standards_come_back_as_text(void **state)
{
    each_do(state, standard_round_trip);
}

static void no_value_is_a_flag(fescue_context *context, const struct fescue_option *option, bool is_sow)
{
    union any_options options;
    any_standard(is_sow, &options);
    if (option->kind != FESCUE_KIND_FLAG) {
        check_refused(context, option, is_sow, NULL);
        return;
    }
    assert_int_equal(any_set(context, is_sow, &options, option->name, NULL), FESCUE_OK);
    assert_true(*((const bool *)&options + option->position));
    assert_int_equal(any_set(context, is_sow, &options, option->name, "no"), FESCUE_OK);
    assert_false(*((const bool *)&options + option->position));
    assert_int_equal(any_set(context, is_sow, &options, option->name, "yes"), FESCUE_OK);
    assert_true(*((const bool *)&options + option->position));
    check_refused(context, option, is_sow, "true");
    check_refused(context, option, is_sow, "");
}

static void only_flags_go_without_a_value(void **state)
{
    each_do(state, no_value_is_a_flag);
}

static void names_are_distinct(void **state)
{
    (void)state;
    for (int which = 0; which < 3; which++) {
        size_t count;
        const struct fescue_option *table = which == 0   ? fescue_option_table(&count)
                                            : which == 1 ? fescue_sow_option_table(&count)
                                                         : fescue_night_option_table(&count);
        assert_true(count > 0);
        for (size_t k = 0; k < count; k++) {
            assert_non_null(table[k].help);
            for (size_t l = 0; l < k; l++) {
                assert_string_not_equal(table[k].name, table[l].name);
                assert_false(table[k].letter != 0 && table[k].letter == table[l].letter);
            }
        }
    }
}

/* ---- kind by kind ---------------------------------------------------------------------------------------------------
 */

static const struct fescue_option *option_find(const char *name)
{
    size_t count;
    const struct fescue_option *option = fescue_option_table(&count);
    while (strcmp(option->name, name) != 0) {
        assert_true(--count > 0);
        option++;
    }
    return option;
}

static struct fescue_options options_with(void **state, const char *name, const char *text)
{
    struct fescue_options options;
    fescue_context *context = bench_of(state)->context;
    fescue_options_standard(&options);
    assert_status(context, fescue_options_set(context, &options, name, text), FESCUE_OK);
    return options;
}

static void check_text(const struct fescue_options *options, const char *name, const char *expected)
{
    char text[128];
    fescue_option_text(option_find(name), options, text, sizeof text);
    assert_string_equal(text, expected);
}

static void refuse_all(void **state, const char *name, const char *const *wrong)
{
    for (; *wrong != NULL; wrong++)
        check_refused(bench_of(state)->context, option_find(name), false, *wrong);
}

static void times_have_units(void **state)
{
    static const struct {
        const char *text;
        double seconds;
    } right[] = {{"90", 90},         {"2.5", 2.5}, {"15m", 900},   {"2h", 7200},   {"1h30m", 5400},
                 {"1h30m20s", 5420}, {"45s", 45},  {"1.5h", 5400}, {"1h5s", 3605}, {"0", 0},
                 {"1e3", 1000},      {"0s", 0},    {"1e1m", 600}};
    for (size_t k = 0; k < sizeof right / sizeof right[0]; k++) {
        struct fescue_options options = options_with(state, "time-limit", right[k].text);
        assert_close(options.time_limit, right[k].seconds, 0);
    }
    static const char *const wrong[] = {"h",  "1h30", "30m1h", "1h1h", "1d",  "-1h",     "1h-5m",
                                        "m5", "1hm",  "1 h",   "1H",   "5ms", "300000h", NULL};
    refuse_all(state, "time-limit", wrong);
    struct fescue_options options = options_with(state, "time-limit", "1h30m");
    check_text(&options, "time-limit", "5400");
}

static void sizes_have_units(void **state)
{
    static const struct {
        const char *text;
        int64_t bytes;
    } right[] = {{"0", 0},
                 {"500M", 500000000},
                 {"2G", 2000000000},
                 {"1.5G", 1500000000},
                 {"1K", 1000},
                 {"1KB", 1000},
                 {"1KiB", 1024},
                 {"3MiB", 3145728},
                 {"1GiB", 1 << 30},
                 {"1T", 1000000000000},
                 {"1.5K", 1500},
                 {"1TiB", INT64_C(1) << 40},
                 {"123456789", 123456789}};
    for (size_t k = 0; k < sizeof right / sizeof right[0]; k++)
        assert_true(options_with(state, "memory-limit", right[k].text).memory_limit == right[k].bytes);
    static const char *const wrong[] = {"M",   "1k",  "1Gb", "1Gi", "1GB2", "1.0001K",
                                        "0.5", "-1M", "1 G", "1P",  "1e16", NULL};
    refuse_all(state, "memory-limit", wrong);
    struct fescue_options options = options_with(state, "memory-limit", "500M");
    check_text(&options, "memory-limit", "500000000");
}

static void ranges_may_be_open(void **state)
{
    struct fescue_options options = options_with(state, "bounds", "-1.5:2e3");
    assert_close(options.bounds.low, -1.5, 0);
    assert_close(options.bounds.high, 2000, 0);
    check_text(&options, "bounds", "-1.5:2000");
    options = options_with(state, "bounds", "0:");
    assert_close(options.bounds.low, 0, 0);
    assert_true(options.bounds.high == INFINITY);
    check_text(&options, "bounds", "0:");
    options = options_with(state, "bounds", ":10");
    assert_true(options.bounds.low == -INFINITY);
    check_text(&options, "bounds", ":10");
    options = options_with(state, "bounds", ":");
    assert_true(options.bounds.low == -INFINITY && options.bounds.high == INFINITY);
    check_text(&options, "bounds", ":");
    static const char *const wrong[] = {"",      "1",      "2:1", "1:1", "a:b",     "1:2:3",
                                        "nan:1", "-inf:1", "1:x", "0-1", "1:1e999", NULL};
    refuse_all(state, "bounds", wrong);
}

static void sets_of_words_are_bits(void **state)
{
    struct fescue_options options = options_with(state, "write", "filled,factors");
    assert_int_equal(options.write, 5);
    check_text(&options, "write", "filled,factors");
    options = options_with(state, "write", "factors,filled,filled");
    assert_int_equal(options.write, 5);
    options = options_with(state, "write", "auto");
    assert_true(options.write == (unsigned)FESCUE_AUTO);
    check_text(&options, "write", "auto");
    static const char *const wrong[] = {",", "filled,", ",filled", "filled;cells", "filled,auto", "none", NULL};
    refuse_all(state, "write", wrong);
}

static void texts_are_borrowed(void **state)
{
    static const char name[] = "the place";
    struct fescue_options options = options_with(state, "output", name);
    assert_ptr_equal(options.output, name);
    check_text(&options, "output", name);
    check_refused(bench_of(state)->context, option_find("output"), false, "");
    fescue_options_standard(&options);
    assert_null(options.output);
    check_text(&options, "output", "");
}

/* Shortest text of a real reads back as the same real, whatever it is. */
static void reals_come_back_to_the_bit(void **state)
{
    static const double reals[] = {0.1, 1.0 / 3, 1e-300, DBL_MIN, 0, 123456.789, 1e6};
    for (size_t k = 0; k < sizeof reals / sizeof reals[0]; k++) {
        struct fescue_options options;
        char text[128];
        fescue_options_standard(&options);
        options.ridge = reals[k];
        fescue_option_text(option_find("ridge"), &options, text, sizeof text);
        assert_true(options_with(state, "ridge", text).ridge == reals[k]);
    }
}

static void sentences_say_what_is_taken(void **state)
{
    static const char *const cases[][3] = {
        {"rank", "many", "--rank: found \"many\", expected a whole number from 0 to 256, or auto"},
        {"holdout", "0.7", "--holdout: found \"0.7\", expected a number from 0 to 0.5"},
        {"offsets", "rows,columns",
         "--offsets: found \"rows,columns\", expected auto, both, rows, columns, mean or none"},
        {"write", "all",
         "--write: found \"all\", expected some of filled, cells and factors with commas between, or auto"},
        {"bounds", "5",
         "--bounds: found \"5\", expected LO:HI, a lower and a higher number, one of which may be left out"},
        {"time-limit", "soon",
         "--time-limit: found \"soon\", expected a time such as 90, 15m, 2h or 1h30m, at most 1000000000 seconds"},
        {"memory-limit", "lots",
         "--memory-limit: found \"lots\", expected a size in whole bytes such as 500M, 2G or 1GiB, at most 9e+15"},
        {"strict", "maybe", "--strict: found \"maybe\", expected yes, no, or nothing for yes"},
        {"rank", NULL, "--rank: no value was given, expected a whole number from 0 to 256, or auto"},
        {"ranks", "3", "there is no option --ranks"}};
    fescue_context *context = bench_of(state)->context;
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++) {
        struct fescue_options options;
        fescue_options_standard(&options);
        assert_int_equal(fescue_options_set(context, &options, cases[k][0], cases[k][1]), FESCUE_USAGE);
        assert_string_equal(fescue_failure_text(context), cases[k][2]);
        fescue_failure_clear(context);
    }
}

/* A locale with a decimal comma around us changes nothing. */
static void the_locale_does_not_matter(void **state)
{
    locale_t comma = comma_locale(bench_of(state)->folder), around = uselocale(comma);
    struct fescue_options options = options_with(state, "holdout", "0.25");
    assert_close(options.holdout, 0.25, 0);
    check_text(&options, "holdout", "0.25");
    check_refused(bench_of(state)->context, option_find("holdout"), false, "0,25");
    uselocale(around);
    freelocale(comma);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(every_number_has_its_bounds),
        BENCH_TEST(auto_is_taken_where_the_table_says_so),
        BENCH_TEST(every_word_sets_its_position),
        BENCH_TEST(standards_come_back_as_text),
        BENCH_TEST(only_flags_go_without_a_value),
        BENCH_TEST(names_are_distinct),
        BENCH_TEST(times_have_units),
        BENCH_TEST(sizes_have_units),
        BENCH_TEST(ranges_may_be_open),
        BENCH_TEST(sets_of_words_are_bits),
        BENCH_TEST(texts_are_borrowed),
        BENCH_TEST(reals_come_back_to_the_bit),
        BENCH_TEST(sentences_say_what_is_taken),
        BENCH_TEST(the_locale_does_not_matter),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
