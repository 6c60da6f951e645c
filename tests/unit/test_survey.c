/* SPDX-License-Identifier: MIT
 *
 * The survey: sentences on small tables whose every figure can be counted by hand, and foreign text made safe.
 */
#include "judge/judge_internal.h"
#include "support_table.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

/* A table of one figure a place: digits are values, anything else is a hole. Rows and columns are labelled when names
   are given. */
struct drawing {
    uint32_t rows, columns;
    const char *picture;
    const char *const *row_names, *const *column_names;
    const char *path;
    uint64_t duplicates;
};

static struct labels labels_of(uint32_t count, const char *const *names)
{
    return (struct labels){.count = count, .text = (char **)(uintptr_t)names}; /* only read */
}

static char *survey_of(fescue_context *context, const struct drawing *drawing)
{
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    fescue_table table = {.context = context,
                          .path = (char *)(uintptr_t)drawing->path,
                          .look = {.shape = SHAPE_WIDE, .separator = ';'},
                          .row_labels = labels_of(drawing->rows, drawing->row_names),
                          .column_labels = labels_of(drawing->columns, drawing->column_names),
                          .duplicates = drawing->duplicates};
    char *text = NULL;
    for (uint32_t i = 0; i < drawing->rows; i++)
        for (uint32_t j = 0; j < drawing->columns; j++) {
            char c = drawing->picture[i * drawing->columns + j];
            if (c >= '0' && c <= '9')
                assert_status(context, triplets_append(context, &list, i, j, c - '0'), FESCUE_OK);
        }
    assert_status(context, cells_build(context, drawing->rows, drawing->columns, &list, &table.cells), FESCUE_OK);
    assert_status(context, survey_text(&table, NULL, &text), FESCUE_OK);
    cells_free(context, &table.cells);
    triplets_free(context, &list);
    return text;
}

static void check_says(const char *text, const char *sentence)
{
    if (strstr(text, sentence) == NULL)
        print_error("not said: %s\nbut:\n%s\n", sentence, text);
    assert_non_null(strstr(text, sentence));
}

static void check_silent(const char *text, const char *sentence)
{
    if (strstr(text, sentence) != NULL)
        print_error("said: %s\nin:\n%s\n", sentence, text);
    assert_null(strstr(text, sentence));
}

/* Two blocks, 4 x 4 and 2 x 2; an empty row and column; row d all 7; row e thin. 20 cells, which sum to 92. */
static const char *const row_names[] = {"a", "b", "c", "d", "e", "f", "g\x1b[31m"};
static const char *const column_names[] = {"p", "q", "r", "s", "t", "u", "v"};
static const struct drawing two_blocks = {.rows = 7,
                                          .columns = 7,
                                          .picture = "1234..."
                                                     "4321..."
                                                     "5599..."
                                                     "7777..."
                                                     "....24."
                                                     "....37."
                                                     ".......",
                                          .row_names = row_names,
                                          .column_names = column_names,
                                          .path = "out of\tcounty.csv",
                                          .duplicates = 2};

static void a_worked_example(void **state)
{
    fescue_context *context = bench_of(state)->context;
    char *text = survey_of(context, &two_blocks);
    check_says(text, ": 7 rows by 7 columns, 20 of 49 cells observed (40.8 %).\n");
    check_says(text,
               "Read as text, one line a row, semicolon separated. 2 cells that came more than once were merged.\n");
    check_says(text, "Values: least 1, median 4, mean 4.6, greatest 9, whole numbers, 7 different.\n");
    check_says(text, "Cells a row: least 0, median 4, most 4.\n");
    check_says(text, "1 row without any cell: g\\x1b[31m.\n");
    check_says(text, "1 row whose cells are all equal: d.\n");
    check_says(text, "1 column without any cell: v.\n");
    check_silent(text, "column whose cells");
    check_says(text, "The observed cells fall into 2 blocks that share no row or column: 4 by 4 (16 cells), 2 by 2 (4 "
                     "cells).\n");
    /* All 20 in the 2-core; 16 of 20 in the 4-core, which is more than half and less than nine tenths. */
    check_says(text, "all observed cells up to rank 2, for nine tenths of them up to rank 2, for half up to rank 4.\n");
    /* 12 lines with cells: 1 (12-1) = 11 <= 20 < 2 (12-2) = 20 is not: rank 2 fits exactly, 3 (12-3) = 27 does not. */
    check_says(text, "Above rank 2 there would be more unknowns than observed cells.\n");
    check_says(text, "The data cannot decide anything above rank 2.\n");
    check_says(text, "\n    fescue fill 'out of?county.csv' --rank-most 2 --duplicates mean\n");
    check_silent(text, "\x1b");
    GIVE(context, &text);
}

static void a_full_table_has_nothing_to_fill(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct drawing drawing = {.rows = 2, .columns = 3, .picture = "123456", .path = "full.csv"};
    char *text = survey_of(context, &drawing);
    check_says(text, "6 of 6 cells observed (100 %).\n");
    check_says(text, "There is nothing to fill: every cell is observed.\n");
    check_says(text, "Each row has 3 cells.\n");
    check_says(text, "median 3.5, mean 3.5");
    check_says(text, "hang together in one block");
    GIVE(context, &text);
}

static void an_empty_table_is_no_trouble(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct drawing drawing = {.rows = 2, .columns = 3, .picture = "......", .path = "empty.csv"};
    char *text = survey_of(context, &drawing);
    check_says(text, "empty.csv: 2 rows by 3 columns, 0 of 6 cells observed (0 %).\n");
    check_silent(text, "fescue fill");
    check_silent(text, "nan");
    GIVE(context, &text);
}

static void one_of_a_thing_is_singular(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct drawing drawing = {.rows = 1, .columns = 1, .picture = "5", .path = "-", .duplicates = 1};
    char *text = survey_of(context, &drawing);
    check_says(text, "Standard input: 1 row by 1 column, 1 of 1 cells observed");
    check_says(text, "1 cell that came more than once was merged.");
    check_says(text, "Each row has 1 cell.\n");
    check_says(text, "\n    fescue fill - -o filled --rank-most 1 --duplicates mean\n");
    GIVE(context, &text);
}

/* 20 lines of which the first seven have one cell of twenty: five are named, two counted. */
static void long_lists_are_cut(void **state)
{
    fescue_context *context = bench_of(state)->context;
    char picture[20 * 20];
    for (int k = 0; k < 400; k++)
        picture[k] = (char)(k / 20 < 7 && k % 20 != 19 ? '.' : '0' + k * 7 % 10);
    struct drawing drawing = {.rows = 20, .columns = 20, .picture = picture, .path = "thin.csv"};
    char *text = survey_of(context, &drawing);
    check_says(text, "7 rows with very few cells: 1, 2, 3, 4, 5 and 2 more.\n");
    check_silent(text, "columns with very few");
    check_says(text, "10 different");
    check_says(text, "--bounds 0:9\n");
    GIVE(context, &text);
}

/* Five blocks of sizes 1, 4, 1, 1, 1: the largest first, equals in the order of their rows, the rest counted. */
static void the_largest_blocks_come_first(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct drawing drawing = {.rows = 6,
                              .columns = 6,
                              .picture = "1....."
                                         ".12..."
                                         ".34..."
                                         "...1.."
                                         "....1."
                                         ".....1",
                              .path = "blocks.csv"};
    char *text = survey_of(context, &drawing);
    check_says(text, "5 blocks that share no row or column: 2 by 2 (4 cells), 1 by 1 (1 cell), 1 by 1 (1 cell) and 2 "
                     "more.\n");
    check_says(text, "all observed cells up to rank 1, for nine tenths of them up to rank 1, for half up to rank 2.");
    GIVE(context, &text);
}

static char *page_of(fescue_context *context, void (*show)(struct page *, const char *), const char *foreign)
{
    struct page page = {.context = context};
    char *out;
    show(&page, foreign);
    assert_status(context, page_close(&page, &out), FESCUE_OK);
    return out;
}

static void foreign_text_is_made_safe(void **state)
{
    fescue_context *context = bench_of(state)->context;
    static const struct {
        void (*show)(struct page *, const char *);
        const char *foreign, *shown;
    } cases[] = {
        {page_label, "", ""},
        {page_label, "plain \"quoted\" 100 %s", "plain \"quoted\" 100 %s"},
        {page_label, "tab\there\nline\x7f", "tab\\x09here\\x0aline\\x7f"},
        {page_label, "caf\xc3\xa9 \xe6\xb0\xb4 \xf0\x9f\x8c\xbe", "caf\xc3\xa9 \xe6\xb0\xb4 \xf0\x9f\x8c\xbe"},
        {page_label, "\xc2\x9b", "\\x9b"}, /* a control character of two bytes */
        {page_label,
         "a\xe2\x80\xae"
         "b",
         "a\\u202eb"},                                                     /* turns the direction of writing */
        {page_label, "\xff\xc3(\xc3", "\\xff\\xc3(\\xc3"},                 /* not UTF-8 */
        {page_label, "\xc0\x80\xe0\x80\x80", "\\xc0\\x80\\xe0\\x80\\x80"}, /* longer than need be */
        {page_label, "\xed\xa0\x80", "\\xed\\xa0\\x80"},                   /* half of a pair */
        {page_label, "0123456789012345678901234567890123456789", "0123456789012345678901234567890123456789"},
        {page_label, "0123456789012345678901234567890123456789x", "0123456789012345678901234567890123456789..."},
        {page_argument, "a/b-c_d.csv", "a/b-c_d.csv"},
        {page_argument, "", "''"},
        {page_argument, "two words", "'two words'"},
        {page_argument, "it's", "'it'\\''s'"},
        {page_argument, "$(rm) `x` \"y\" *", "'$(rm) `x` \"y\" *'"},
        {page_argument, "new\nline\xff", "'new?line?'"},
    };
    for (size_t c = 0; c < sizeof cases / sizeof cases[0]; c++) {
        char *out = page_of(context, cases[c].show, cases[c].foreign);
        assert_string_equal(out, cases[c].shown);
        GIVE(context, &out);
    }
}

/* The shell itself reads an argument back as it was. */
static void a_shell_reads_arguments_back(void **state)
{
    struct bench *bench = bench_of(state);
    static const char *const names[] = {"it's", "$(echo x) `y` \"z\" *", "a b;c&d|e>f", "~/x#!{1,2}[a]\\"};
    char path[PATH_SIZE], *command, *got;
    size_t count;
    for (size_t k = 0; k < sizeof names / sizeof names[0]; k++) {
        struct page page = {.context = bench->context};
        page_add(&page, "printf %%s ");
        page_argument(&page, names[k]);
        page_add(&page, " > ");
        page_argument(&page, path_in(bench->folder, "said", path));
        assert_status(bench->context, page_close(&page, &command), FESCUE_OK);
        assert_int_equal(system(command), 0);
        got = file_get(path, &count);
        assert_string_equal(got, names[k]);
        free(got);
        GIVE(bench->context, &command);
    }
}

/* A hundred to a line, broken at blanks, what goes on indented by four; words without a blank stay whole. */
static void long_lines_are_broken(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct page page = {.context = context};
    char *out, expected[1024];
    page_add(&page, "%0120d before\n", 0);
    size_t from = page.length;
    page_add(&page, "  ! %090d %05d %05d\n%0150d\nshort %0130d end\n", 1, 2, 3, 4, 5);
    page_wrap(&page, from);
    assert_status(context, page_close(&page, &out), FESCUE_OK);
    snprintf(expected, sizeof expected, "%0120d before\n  ! %090d\n    %05d %05d\n%0150d\nshort\n    %0130d\n    end\n",
             0, 1, 2, 3, 4, 5);
    assert_string_equal(out, expected);
    GIVE(context, &out);
}

static void a_lack_of_memory_leaks_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    static const uint32_t row[] = {0, 0, 1, 2}, column[] = {0, 1, 1, 2};
    static const double value[] = {1, 2, 3.25, 4};
    fescue_table *table;
    assert_status(context, table_from_triplets(context, 3, 3, 4, row, column, value, FESCUE_DOUBLE, &table), FESCUE_OK);
    uint64_t alive = fescue_memory_usage(context).blocks;
    bool met = true;
    for (uint64_t n = 1; met; n++) {
        char *text = NULL;
        fault_plan(FAULT_TAKE, n, false, 0);
        fescue_status status = survey_text(table, NULL, &text);
        met = fault_met();
        assert_status(context, status, met ? FESCUE_NO_MEMORY : FESCUE_OK);
        assert_true((text == NULL) == met);
        GIVE(context, &text);
        assert_int_equal(fescue_memory_usage(context).blocks, alive);
        fescue_failure_clear(context);
    }
    fault_clear();
    table_destroy(&table);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(a_worked_example),
        BENCH_TEST(a_full_table_has_nothing_to_fill),
        BENCH_TEST(an_empty_table_is_no_trouble),
        BENCH_TEST(one_of_a_thing_is_singular),
        BENCH_TEST(long_lists_are_cut),
        BENCH_TEST(the_largest_blocks_come_first),
        BENCH_TEST(foreign_text_is_made_safe),
        BENCH_TEST(a_shell_reads_arguments_back),
        BENCH_TEST(long_lines_are_broken),
        BENCH_TEST(a_lack_of_memory_leaks_nothing),
    };
    return cmocka_run_group_tests_name("survey", tests, NULL, NULL);
}
