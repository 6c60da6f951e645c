/* SPDX-License-Identifier: MIT
 *
 * The Matrix Market reader: forms, symmetries, holes, and every promise that a header can break.
 */
#include "support_reader.h"

#include <inttypes.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

#define REAL "%%MatrixMarket matrix coordinate real general\n"
#define ARRAY "%%MatrixMarket matrix array real general\n"

static void text_check(struct bench *bench, const char *text, enum table_shape shape, const char *cells)
{
    fescue_table *table = text_read(bench, text, NULL);
    assert_int_equal(table->look.shape, shape);
    table_check(table, cells);
    table_destroy(&table);
}

/* The 5 x 5 matrix with 8 entries of NISTIR 5935, quoted from memory. */
static void coordinates_are_read(void **state)
{
    struct bench *bench = bench_of(state);
    fescue_table *table = text_read(bench,
                                    "%%MatrixMarket matrix coordinate real general\n"
                                    "% a comment\n%\n"
                                    "  5  5  8\n"
                                    "    1     1   1.000e+00\n    2     2   1.050e+01\n    3     3   1.500e-02\n"
                                    "    1     4   6.000e+00\n    4     2   2.505e+02\n    4     4  -2.800e+02\n"
                                    "    4     5   3.332e+01\n    5     5   1.200e+01\n",
                                    NULL);
    assert_int_equal(table->look.shape, SHAPE_MM_COORDINATE);
    assert_int_equal(table->row_labels.count, 5);
    assert_int_equal(table->column_labels.count, 5);
    assert_null(table->row_labels.text);
    table_check(table, "1|1|1.000e+00\n1|4|6.000e+00\n2|2|1.050e+01\n3|3|1.500e-02\n"
                       "4|2|2.505e+02\n4|4|-2.800e+02\n4|5|3.332e+01\n5|5|1.200e+01\n");
    assert_true(cells_value(&table->cells, &table->cells.by_row, 5) == -280);
    table_destroy(&table);
}

static void spelling_is_free(void **state)
{
    struct bench *bench = bench_of(state);
    text_check(bench,
               "%%matrixmarket MATRIX Coordinate Double General\r\n\r\n2 3 2\r\n1\t3\t4\r\n\r\n% late\r\n 2 1 -5 ",
               SHAPE_MM_COORDINATE, "1|3|4\n2|1|-5\n");
    text_check(bench, "%%MatrixMarket matrix coordinate integer general\n1 2 2\n1 2 +7\n1 1 -0\n", SHAPE_MM_COORDINATE,
               "1|1|-0\n1|2|+7\n");
}

static void empty_rows_and_columns_stay(void **state)
{
    struct bench *bench = bench_of(state);
    fescue_table *table = text_read(bench, REAL "1000 2000 1\n7 9 0\n", NULL);
    assert_int_equal(table->cells.rows, 1000);
    assert_int_equal(table->cells.columns, 2000);
    table_check(table, "7|9|0\n");
    table_destroy(&table);
}

static void the_other_triangle_is_a_mirror(void **state)
{
    struct bench *bench = bench_of(state);
    text_check(bench, "%%MatrixMarket matrix coordinate real symmetric\n3 3 3\n3 1 2.50\n2 2 1e1\n2 1 -1e0\n",
               SHAPE_MM_COORDINATE, "1|2|-1e0\n1|3|2.50\n2|1|-1e0\n2|2|1e1\n3|1|2.50\n");
    text_check(bench, "%%MatrixMarket matrix coordinate real skew-symmetric\n3 3 3\n3 1 2.50\n3 2 0.0\n2 1 -1e0\n",
               SHAPE_MM_COORDINATE, "1|2|1\n1|3|-2.50\n2|1|-1e0\n2|3|-0.0\n3|1|2.50\n3|2|0.0\n");
    text_check(bench, "%%MatrixMarket matrix array real symmetric\n3 3\n1\n2\nnan\n4\n5\n6\n", SHAPE_MM_ARRAY,
               "1|1|1\n1|2|2\n2|1|2\n2|2|4\n2|3|5\n3|2|5\n3|3|6\n");
    text_check(bench, "%%MatrixMarket matrix array real skew-symmetric\n3 3\n1\n2\n3\n", SHAPE_MM_ARRAY,
               "1|2|-1\n1|3|-2\n2|1|1\n2|3|-3\n3|1|2\n3|2|3\n");
    text_check(bench, "%%MatrixMarket matrix array integer symmetric\n1 1\n1\n", SHAPE_MM_ARRAY, "1|1|1\n");
}

static void an_array_goes_down_the_columns(void **state)
{
    struct bench *bench = bench_of(state);
    text_check(bench, ARRAY "% c\n2 3\n1\n2\nnan\nNaN\n-nan\n6.0\n", SHAPE_MM_ARRAY, "1|1|1\n2|1|2\n2|3|6.0\n");
}

static void headers_are_checked(void **state)
{
    struct bench *bench = bench_of(state);
    static const struct {
        const char *text, *sentence;
    } cases[] = {
        {"%%MatrixMarket\n", "line 1: '%%MatrixMarket' was found, '%%MatrixMarket matrix coordinate real general' or "
                             "the like was expected"},
        {"%%MatrixMarket vector coordinate real general\n", "line 1: '%%MatrixMarket vector coordinate real ge' was "
                                                            "found, '%%MatrixMarket matrix coordinate real general' "
                                                            "or the like was expected"},
        {"%%MatrixMarket matrix graph real general\n",
         "line 1: 'graph' was found, 'coordinate' or 'array' was expected"},
        {"%%MatrixMarket matrix coordinate quaternion general\n",
         "line 1: 'quaternion' was found, 'real' or 'integer' was expected"},
        {"%%MatrixMarket matrix coordinate complex general\n1 1 1\n1 1 1 1\n",
         "line 1: complex values were found, real ones were expected: a table is filled with real numbers; real and "
         "imaginary parts can be filled as two tables"},
        {"%%MatrixMarket matrix coordinate pattern general\n1 1 1\n1 1\n",
         "line 1: a pattern was found, values were expected: it says where cells are and not what they hold, so there "
         "is "
         "nothing to fill from"},
        {"%%MatrixMarket matrix coordinate real hermitian\n",
         "line 1: 'hermitian' was found, 'general', 'symmetric' or 'skew-symmetric' was expected"},
        {REAL, "line 1: the file ends here, a line with the sizes of the table was expected"},
        {REAL "% c\n\n", "line 3: the file ends here, a line with the sizes of the table was expected"},
        {REAL "3 3\n", "line 2: '3 3' was found, the numbers of rows, columns and entries were expected"},
        {REAL "3 -3 1\n", "line 2: '3 -3 1' was found, the numbers of rows, columns and entries were expected"},
        {REAL "3 3 1e2\n", "line 2: '3 3 1e2' was found, the numbers of rows, columns and entries were expected"},
        {ARRAY "3 3 3\n", "line 2: '3 3 3' was found, the numbers of rows and columns were expected"},
        {REAL "99999999999999999999 3 3\n",
         "line 2: '99999999999999999999 3 3' was found, the numbers of rows, columns and entries were expected"},
        {REAL "4294967295 3 3\n",
         "line 2: 4294967295 rows and 3 columns were found, at most 4294967294 of each are possible"},
        {REAL "3 9999999999999999999 3\n",
         "line 2: 3 rows and 9999999999999999999 columns were found, at most 4294967294 of each are possible"},
        {REAL "0 3 0\n", "line 2: a table of 0 rows and 3 columns has no cells"},
        {"%%MatrixMarket matrix coordinate real symmetric\n3 4 1\n1 1 1\n",
         "line 2: 3 rows and 4 columns were found, a symmetric table has as many rows as columns"},
    };
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++)
        text_refused(bench, cases[k].text, NULL, cases[k].sentence);
}

static void entries_are_checked(void **state)
{
    struct bench *bench = bench_of(state);
    static const struct {
        const char *text, *sentence;
    } cases[] = {
        {REAL "8760 4 2\n1 1 1\n8761 1 1\n", "line 4: row 8761 is outside 1..8760"},
        {REAL "3 4 1\n1 5 1\n", "line 3: column 5 is outside 1..4"},
        {REAL "3 4 1\n0 1 1\n", "line 3: row 0 is outside 1..3"},
        {REAL "3 4 1\n-1 1 1\n", "line 3: row -1 is outside 1..3"},
        {REAL "3 4 1\n1 4294967297 1\n", "line 3: column 4294967297 is outside 1..4"},
        {REAL "3 4 1\n18446744073709551617 1 1\n", "line 3: row 18446744073709551617 is outside 1..3"},
        {REAL "3 4 1\n1.0 1 1\n", "line 3: '1.0' was found, the number of a row was expected"},
        {REAL "3 4 1\n1 x 1\n", "line 3: 'x' was found, the number of a column was expected"},
        {REAL "3 4 1\n1 1\n", "line 3: '1 1' was found, row, column and value were expected"},
        {REAL "3 4 1\n1 1 1 1\n", "line 3: '1 1 1 1' was found, row, column and value were expected"},
        {REAL "3 4 1\n1 1 1 1 1 1 1 1 1 1 1 1\n",
         "line 3: '1 1 1 1 1 1 1 1 1 1 1 1' was found, row, column and value were expected"},
        {REAL "3 4 1\n1 1 abc\n", "line 3: the value 'abc' is not a number"},
        {REAL "3 4 1\n1 1 0x10\n", "line 3: the value '0x10' is not a number"},
        {REAL "3 4 1\n1 1 1,5\n", "line 3: the value '1,5' is not a number"},
        {REAL "3 4 1\n1 1 nan\n", "line 3: the value 'nan' is not a number; in this form a hole is left out"},
        {REAL "3 4 1\n1 1 -inf\n", "line 3: the value '-inf' is not finite"},
        {REAL "3 4 1\n1 1 1e999\n", "line 3: the value '1e999' is too large for a double"},
        {ARRAY "1 1\ninf\n", "line 3: the value 'inf' is not finite"},
        {ARRAY "1 2\n1 2\n", "line 3: '1 2' was found, one value a line was expected"},
        {"%%MatrixMarket matrix coordinate integer general\n3 4 1\n1 1 1.5\n",
         "line 3: the value '1.5' is not an integer, as the header promises"},
        {REAL "3 4 3\n1 1 1\n\n2 2 2\n\n",
         "line 6: the file ends here after 2 of the 3 entries that its header promises"},
        {REAL "3 4 18446744073709551615\n1 1 1\n", "line 2: '3 4 18446744073709551615' was found, the numbers of rows, "
                                                   "columns and entries were expected"},
        {REAL "3 4 9223372036854775808\n1 1 1\n",
         "line 3: the file ends here after 1 of the 9223372036854775808 entries that its header promises"},
        {ARRAY "4294967294 4294967294\n1\n",
         "line 3: the file ends here after 1 of the 18446744056529682436 entries that its header promises"},
        {ARRAY "2 2\n1\n2\n3\n", "line 5: the file ends here after 3 of the 4 entries that its header promises"},
        {REAL "3 4 1\n1 1 1\n2 2 2\n",
         "line 4: '2 2 2' was found after all 1 entries that the header promises, the end "
         "of the file was expected"},
        {ARRAY "1 1\n1\n2\n",
         "line 4: '2' was found after all 1 entries that the header promises, the end of the file was expected"},
        {"%%MatrixMarket matrix coordinate real symmetric\n3 3 1\n1 2 1\n",
         "line 3: row 1, column 2 lies above the diagonal; a symmetric file holds the lower triangle alone"},
        {"%%MatrixMarket matrix coordinate real skew-symmetric\n3 3 1\n2 2 1\n",
         "line 3: row 2, column 2 lies on the diagonal, which is zero in a skew-symmetric table and left out"},
        {REAL "3 4 0\n", "the table has no observed cell"},
        {ARRAY "1 2\nnan\nnan\n", "the table has no observed cell"},
        {"%%MatrixMarket matrix array real skew-symmetric\n1 1\n", "the table has no observed cell"},
        {REAL "4000000000 5 1\n7 1 1\n",
         "the header promises 4000000000 rows and 5 columns, but only 1 cells are observed: nearly every one of them "
         "would be empty"},
    };
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++)
        text_refused(bench, cases[k].text, NULL, cases[k].sentence);
}

static void single_precision_has_a_smaller_range(void **state)
{
    struct bench *bench = bench_of(state);
    const struct table_reading single = {.precision = FESCUE_SINGLE};
    text_refused(bench, REAL "1 1 1\n1 1 1e39\n", &single,
                 "line 3: the value '1e39' is too large for single precision");
    fescue_table *table = text_read(bench, REAL "1 1 1\n1 1 1e38\n", &single);
    table_destroy(&table);
}

static void duplicates_are_refused_with_both_lines(void **state)
{
    struct bench *bench = bench_of(state);
    static const char rest[] = "; --duplicates mean, last or first takes a cell that comes more than once";
    char sentence[256];
    snprintf(sentence, sizeof sentence, "line 7: row 2, column 3 was given on line 4 already%s", rest);
    text_refused(bench, REAL "3 4 4\n1 1 1\n2 3 2\n\n%\n2 3 2\n3 3 1\n", NULL, sentence);
    snprintf(sentence, sizeof sentence, "line 4: row 1, column 2 was given on line 3 already%s", rest);
    text_refused(bench, "%%MatrixMarket matrix coordinate real symmetric\n3 3 2\n2 1 1\n2 1 1\n", NULL, sentence);
}

static void duplicates_can_be_merged(void **state)
{
    struct bench *bench = bench_of(state);
    static const char text[] = REAL "2 2 6\n2 1 9.0\n1 2 1.50\n2 2 8\n1 2 +2\n2 1 1e1\n1 2 4.0\n";
    static const char *const cells[] = {[FESCUE_DUPLICATES_MEAN] = "1|2|2.5\n2|1|9.5\n2|2|8\n",
                                        [FESCUE_DUPLICATES_LAST] = "1|2|4.0\n2|1|1e1\n2|2|8\n",
                                        [FESCUE_DUPLICATES_FIRST] = "1|2|1.50\n2|1|9.0\n2|2|8\n"};
    for (int k = FESCUE_DUPLICATES_MEAN; k <= FESCUE_DUPLICATES_FIRST; k++) {
        const struct table_reading reading = {.duplicates = (enum fescue_duplicates)k};
        fescue_table *table = text_read(bench, text, &reading);
        assert_int_equal(table->duplicates, 3);
        assert_int_equal(table->cells.count, 3);
        table_check(table, cells[k]);
        table_destroy(&table);
    }
}

/* The sum of the two largest doubles is not a double; their mean is. */
static void a_mean_does_not_overflow(void **state)
{
    struct bench *bench = bench_of(state);
    const struct table_reading mean = {.duplicates = FESCUE_DUPLICATES_MEAN};
    fescue_table *table = text_read(bench, REAL "1 1 2\n1 1 1.7e308\n1 1 1.7e308\n", &mean);
    assert_true(cells_value(&table->cells, &table->cells.by_row, 0) == 1.7e308);
    table_destroy(&table);
}

/* A header may promise anything: what is taken depends on what came. */
static void memory_follows_the_entries(void **state)
{
    struct bench *bench = bench_of(state);
    fescue_table *table;
    static const char text[] = REAL "4000000 4000000 1000000000000\n1 1 1\n";
    assert_status(bench->context, bytes_read(bench, text, sizeof text - 1, NULL, &table), FESCUE_BAD_DATA);
    assert_in_range(fescue_memory_usage(bench->context).peak_bytes, 1, 3000000);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(coordinates_are_read),
        BENCH_TEST(spelling_is_free),
        BENCH_TEST(empty_rows_and_columns_stay),
        BENCH_TEST(the_other_triangle_is_a_mirror),
        BENCH_TEST(an_array_goes_down_the_columns),
        BENCH_TEST(headers_are_checked),
        BENCH_TEST(entries_are_checked),
        BENCH_TEST(single_precision_has_a_smaller_range),
        BENCH_TEST(duplicates_are_refused_with_both_lines),
        BENCH_TEST(duplicates_can_be_merged),
        BENCH_TEST(a_mean_does_not_overflow),
        BENCH_TEST(memory_follows_the_entries),
    };
    return cmocka_run_group_tests_name("matrix_market", tests, NULL, NULL);
}
