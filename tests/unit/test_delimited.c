/* SPDX-License-Identifier: MIT
 *
 * Delimited text: quoting as RFC 4180 says, separators, the two shapes, holes, labels, and what is refused.
 */
#include "support_reader.h"
#include "table/table_internal.h"

#include <inttypes.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

static const struct table_reading as_wide = {.format = FESCUE_FORMAT_WIDE}, as_long = {.format = FESCUE_FORMAT_LONG};

static void text_check(struct bench *bench, const char *text, const struct table_reading *reading,
                       enum table_shape shape, const char *cells)
{
    fescue_table *table = text_read(bench, text, reading);
    assert_int_equal(table->look.shape, shape);
    table_check(table, cells);
    table_destroy(&table);
}

static void wide_text_is_read(void **state)
{
    struct bench *bench = bench_of(state);
    fescue_table *table = text_read(bench,
                                    "time,W1,W2,W3\n2024-03-01T00:00,12.50,,-3\n2024-03-01T01:00,NA,1e2,NaN\n"
                                    "2024-03-01T02:00,null,nan, \n2024-03-01T03:00,0,+7,.5\n",
                                    NULL);
    assert_int_equal(table->look.shape, SHAPE_WIDE);
    assert_int_equal(table->look.separator, ',');
    assert_int_equal(table->look.decimal, '.');
    assert_string_equal(table->look.corner, "time");
    assert_int_equal(table->row_labels.count, 4); /* a row of holes is a row */
    assert_int_equal(table->column_labels.count, 3);
    table_check(table, "2024-03-01T00:00|W1|12.50\n2024-03-01T00:00|W3|-3\n2024-03-01T01:00|W2|1e2\n"
                       "2024-03-01T03:00|W1|0\n2024-03-01T03:00|W2|+7\n2024-03-01T03:00|W3|.5\n");
    table_destroy(&table);
}

static void long_text_is_read(void **state)
{
    struct bench *bench = bench_of(state);
    fescue_table *table = text_read(
        bench, "panellist\tcider\tscore\nAda\tRusset\t7.5\nBea\tRusset\t6\nAda\tKing's\t8.0\nCy\tRusset\tNA\n", NULL);
    assert_int_equal(table->look.shape, SHAPE_LONG);
    assert_int_equal(table->look.separator, '\t');
    assert_string_equal(table->look.row_title, "panellist");
    assert_string_equal(table->look.column_title, "cider");
    assert_string_equal(table->look.value_title, "score");
    assert_null(table->look.corner);
    assert_int_equal(table->row_labels.count, 3); /* a record with a hole names its row */
    table_check(table, "Ada|Russet|7.5\nAda|King's|8.0\nBea|Russet|6\n");
    table_destroy(&table);
    table = text_read(bench, "Ada;Russet;7.5\nBea;Russet;6\n", NULL);
    assert_int_equal(table->look.shape, SHAPE_LONG);
    assert_null(table->look.row_title);
    table_check(table, "Ada|Russet|7.5\nBea|Russet|6\n");
    table_destroy(&table);
}

/* RFC 4180, section 2: rule 2 (the last end of line may lack), 5, 6 and 7. */
static void quotes_are_taken_out(void **state)
{
    struct bench *bench = bench_of(state);
    text_check(bench, "\"\",\"A\",\"b,c\",\"\"\"D\"\"\"\r\n\"row\r\none\",\"1.5\",2,\"\"\r\n\"x\ny\n\nz\",,\"4\",5",
               NULL, SHAPE_WIDE, "row\r\none|A|1.5\nrow\r\none|b,c|2\nx\ny\n\nz|b,c|4\nx\ny\n\nz|\"D\"|5\n");
    text_check(bench, "\"\"\"\",x,1\n\"a\"\"\"\"b\",x,2\n", NULL, SHAPE_LONG, "\"|x|1\na\"\"b|x|2\n");
}

static void separators_are_found(void **state)
{
    struct bench *bench = bench_of(state);
    static const struct {
        const char *text;
        char separator;
        const char *cells;
    } cases[] = {
        {"t,a,b,c\n1,2,3,4\n", ',', "1|a|2\n1|b|3\n1|c|4\n"},
        {"t;a;b;c\n1;2;3;4\n", ';', "1|a|2\n1|b|3\n1|c|4\n"},
        {"t\ta\tb\tc\n1\t2\t3\t4\n", '\t', "1|a|2\n1|b|3\n1|c|4\n"},
        {"t,a\n1,2\n", ',', "1|a|2\n"},
        /* other separators inside labels and in quotes */
        {"fen;north,w1,3.5\nfen;south,w1,4\n", ',', "fen;north|w1|3.5\nfen;south|w1|4\n"},
        {"\"t;u;v\",a,b,c\n1,2,3,4\n", ',', "1|a|2\n1|b|3\n1|c|4\n"},
        {"t,u;a;b;c\n1;2;3;4\n", ';', "1|a|2\n1|b|3\n1|c|4\n"},
        {"t;a b\tc;d;e\n1;2;3;4\n", ';', "1|a b\tc|2\n1|d|3\n1|e|4\n"},
        /* decimal commas in every field are not separators */
        {"r1;c1;1,5\nr2;c1;2,5\n", ';', "r1|c1|1,5\nr2|c1|2,5\n"},
        {"t;a;b;c\n1,0;1,5;2,5;3,5\n", ';', "1,0|a|1,5\n1,0|b|2,5\n1,0|c|3,5\n"},
    };
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++) {
        fescue_table *table = text_read(bench, cases[k].text, NULL);
        assert_int_equal(table->look.separator, cases[k].separator);
        table_check(table, cases[k].cells);
        table_destroy(&table);
    }
    text_refused(bench, "a b c\n1 2 3\n", NULL,
                 "line 1: no comma, semicolon or tab was found, fields separated by one of them were expected");
    text_refused(bench, "\n\n", NULL,
                 "line 1: no comma, semicolon or tab was found, fields separated by one of them were expected");
}

static void a_comma_may_be_the_decimal_sign(void **state)
{
    struct bench *bench = bench_of(state);
    fescue_table *table = text_read(bench, "t;a;b;c\n1;2,50;-0,125;,5\n2;3;1,5e1;\"2,0\"\n", NULL);
    assert_int_equal(table->look.decimal, ',');
    table_check(table, "1|a|2,50\n1|b|-0,125\n1|c|,5\n2|a|3\n2|b|1,5e1\n2|c|2,0\n");
    assert_true(cells_value(&table->cells, &table->cells.by_row, 1) == -0.125);
    assert_true(cells_value(&table->cells, &table->cells.by_row, 4) == 15);
    table_destroy(&table);
    text_refused(bench, "t;a;b;c\n1;2,50;3;4\n2;1.500;1;1\n", NULL,
                 "line 3: the value '1.500' has a decimal point, but line 2 has a decimal comma");
    text_refused(bench, "t;a;b;c\n1;2.50;3;4,5\n", NULL,
                 "line 2: the value '4,5' has a decimal comma, but line 2 has a decimal point");
    text_refused(bench, "t;a;b;c\n1;1.234,5;3;4\n", NULL,
                 "line 2: the value '1.234,5' is not a number; a number, or nothing, NA, NaN or null for a hole, was "
                 "expected");
    text_refused(bench, "t\ta\tb\tc\n1\t2,5\t3\t4\n", NULL,
                 "line 2: the value '2,5' has a decimal comma, which is taken where the semicolon separates; a decimal "
                 "point was expected");
    text_refused(bench, "t,a,b,c\n1,\"2,5\",3,4\n", NULL,
                 "line 2: the value '2,5' has a decimal comma, which is taken where the semicolon separates; a decimal "
                 "point was expected");
}

static void shapes_are_told_apart(void **state)
{
    struct bench *bench = bench_of(state);
    static const char unclear[] =
        "line 1: three columns may be a wide table of two columns or a long one of row, column "
        "and value; --format wide or --format long says which it is";
    static const struct {
        const char *text;
        enum table_shape shape;
    } cases[] = {
        {"user,item,score\n1,a,3\n2,b,4\n", SHAPE_LONG}, /* the second field is text */
        {"user,item,score\n1,a,3\n2,7,4\n2,8,4\n", SHAPE_LONG},
        {"user,item,score\n1,7,3\n1,8,4\n", SHAPE_LONG},  /* a row comes again */
        {"1,7,3\n2,7,4\n2,8,4\n", SHAPE_LONG},            /* the same without a header */
        {",a,b\n1,7,3\n2,8,4\n", SHAPE_WIDE},             /* a blank corner */
        {"t,a,b\n1,,3\n2,8,4\n", SHAPE_WIDE},             /* a hole where a label would be */
        {"t,a,b\n1,7.5,3\n2,8,4\n", SHAPE_WIDE},          /* a decimal where a label would be */
        {"row,column,Value\n1,7,3\n2,8,4\n", SHAPE_LONG}, /* the header says so */
        {"t,a\n1,7\n1x,8\n", SHAPE_WIDE},                 /* two fields */
        {"t,a,b,c\n1,7,3,x2\n", SHAPE_WIDE},              /* four fields, and then a value that is none */
        {"t,a,b,c\n1,7,3,2\n", SHAPE_WIDE},               /* four fields */
        {"u,a,1,1\nv,a,2,1\n", SHAPE_LONG},               /* without a header, the second text everywhere */
        {"u,8,1,2\nv,9,2,1\n", SHAPE_WIDE},               /* or a number */
        {"row,item,score,SD\n1,7,3,2\n", SHAPE_LONG},     /* the header says so */
    };
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++) {
        fescue_table *table;
        fescue_status status = bytes_read(bench, cases[k].text, strlen(cases[k].text), NULL, &table);
        if (status == FESCUE_OK)
            assert_int_equal(table->look.shape, cases[k].shape);
        else
            assert_non_null(strstr(fescue_failure_text(bench->context), "'x2'"));
        table_destroy(&table);
    }
    text_refused(bench, "t,2020,2021\na,3,4\nb,5,6\n", NULL, unclear);
    text_refused(bench, "t,a,b\n1,3,4\n2,5,6\n", NULL, unclear);
    /* evidence for both: an hour twice, a value that is none, a hole where the header says long */
    text_refused(bench, "t,a,b\n1,7.5,3\n2,8,4\n2,9,5\n", NULL, unclear);
    text_refused(bench, "t,a,b\n1,,3\n1,8,4\n", NULL, unclear);
    text_refused(bench, "t,a,value\n1,0.5,3\n2,8,4\n", NULL, unclear);
    text_refused(bench, "t,a,b\n1,7,3\n2,8x,4\n", NULL, unclear);
    text_refused(
        bench, "t,a,b\n1,7.5,3\n2,8x,4\n", NULL,
        "line 3: the value '8x' is not a number; a number, or nothing, NA, NaN or null for a hole, was expected");
    text_check(bench, "t,a,b\n1,3,4\n2,5,6\n", &as_wide, SHAPE_WIDE, "1|a|3\n1|b|4\n2|a|5\n2|b|6\n");
    text_check(bench, "t,a,b\n1,3,4\n2,5,6\n", &as_long, SHAPE_LONG, "1|3|4\n2|5|6\n");
    text_check(bench, "t,2020,2021\na,3,4\n", &as_long, SHAPE_LONG, "t|2020|2021\na|3|4\n");
}

static void formats_that_do_not_fit_are_refused(void **state)
{
    struct bench *bench = bench_of(state);
    const struct table_reading as_market = {.format = FESCUE_FORMAT_MATRIX_MARKET};
    text_refused(bench, "%%MatrixMarket matrix coordinate real general\n1 1 1\n1 1 1\n", &as_wide,
                 "line 1: a Matrix Market file was found, but --format asks for delimited text");
    text_refused(bench, "t,a,b\n", &as_market,
                 "line 1: 't,a,b' was found, '%%MatrixMarket matrix coordinate real general' or the like was expected");
    text_refused(bench, "a,b\n", &as_long, "line 1: 2 fields were found, row, column and value were expected");
    text_refused(bench, "a,x,1\n\n\nb,y\n", &as_long,
                 "line 4: 2 fields were found, row, column and value were expected");
    text_refused(bench, "a,b,1,2,3\n", &as_long, "line 1: 5 fields were found, row, column and value were expected");
}

static void bad_lines_are_named(void **state)
{
    struct bench *bench = bench_of(state);
    static const struct {
        const char *text, *sentence;
    } cases[] = {
        {"t,a,b,c\n1,2,3,4\n2,3,4\n", "line 3: 3 fields were found, 4 were expected, as in the first line"},
        {"t,a,b,c\n\"1\n1\",2,3,4\n2,3,4,5,6\n", "line 4: 5 fields were found, 4 were expected, as in the first line"},
        {"t,a,b,c\n1,2,x y,4\n", "line 2: the value 'x y' is not a number; a number, or nothing, NA, NaN or null for a "
                                 "hole, was expected"},
        {"t,a,b,c\n1,2,inf,4\n", "line 2: the value 'inf' is not a number; a number, or nothing, NA, NaN or null for a "
                                 "hole, was expected"},
        {"t,a,b,c\n1,2,1e400,4\n", "line 2: the value '1e400' is too large for a double"},
        {"t,a,b,a\n1,2,3,4\n",
         "line 1: the label 'a' of column 3 is that of column 1 already; every label was expected once"},
        {"t,a,b,c\n1,2,3,4\n2,2,3,4\n1,2,3,4\n",
         "line 4: the label '1' of row 3 is that of row 1 already; every label was expected once"},
        {"t,a,,c\n1,2,3,4\n", "line 1: the label of a column is empty"},
        {"t,a,b,c\n,2,3,4\n", "line 2: the label of a row is empty"},
        {"a,x,1\n,x,2\n", "line 2: the label of a row is empty"},
        {"t,a,b,c\n1,2,3,4\n\"2,3,4,5\n3,4,5,6\n", "line 3: a quote is opened here and never closed"},
        {"t,a,b,c\n1,2,3\",4\n",
         "line 2: a quote was found inside a field that does not begin with one; a field with quotes in it is put in "
         "quotes, and each of its own is written twice"},
        {"t,a,b,c\n1,2,\"3\" ,4\n", "line 2: a closing quote is not followed by a separator"},
        {"t,a,b,c\n1\xe9,2,3,4\n",
         "line 2: the label of a row holds the byte 0xe9, which is not UTF-8; the text can be "
         "converted, for instance with iconv"},
        {"t,\xc0\x80,b,c\n1,2,3,4\n", "line 1: the label of a column holds the byte 0xc0, which is not UTF-8; the text "
                                      "can be converted, for instance with iconv"},
        {"\xed\xa0\x80,a,b,c\n1,2,3,4\n", "line 1: the label of a header holds the byte 0xed, which is not UTF-8; the "
                                          "text can be converted, for instance with iconv"},
        {"t,a,b,c\n", "the table has no observed cell"},
        {"t,a,b,c\n1,NA,,\n", "the table has no observed cell"},
        {"a,x,1\nb,x,2\nb,y,2\na,x,3\n", "line 4: row a, column x was given on line 1 already; --duplicates mean, last "
                                         "or first takes a cell that comes "
                                         "more than once"},
    };
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++)
        text_refused(bench, cases[k].text, NULL, cases[k].sentence);
    text_refused(bench, "a,x,1\nb,,2\nb,x,1\n", &as_long, "line 2: the label of a column is empty");
    static const char zero[] = "t,a,b,c\n1,2,3,4\n2,\0,3,4\n";
    bytes_refused(bench, zero, sizeof zero - 1, NULL, "line 3: a zero byte was found, where text was expected");
}

static void labels_in_any_script_are_kept(void **state)
{
    struct bench *bench = bench_of(state);
    text_check(bench, "\xe6\x97\xb6,\xc3\xa9t\xc3\xa9,\xf0\x9f\x8c\xbf,z\n\xce\xb1 \xce\xb2,1,2,3\n NA ,4,,\n", NULL,
               SHAPE_WIDE,
               "\xce\xb1 \xce\xb2|\xc3\xa9t\xc3\xa9|1\n\xce\xb1 \xce\xb2|\xf0\x9f\x8c\xbf|2\n\xce\xb1 \xce\xb2|z|3\n"
               " NA |\xc3\xa9t\xc3\xa9|4\n");
}

/* The first record alone is longer than what is looked at to tell the kind. */
static void a_table_may_be_wider_than_the_sample(void **state)
{
    enum { COLUMNS = 30000 };
    struct bench *bench = bench_of(state);
    char *text;
    size_t size;
    FILE *out = open_memstream(&text, &size);
    fputs("t", out);
    for (int j = 0; j < COLUMNS; j++)
        fprintf(out, ",\"w;%d\"", j);
    fputs("\nr1", out);
    for (int j = 0; j < COLUMNS; j++)
        fprintf(out, ",%d", j);
    fclose(out);
    fescue_table *table = text_read(bench, text, NULL);
    assert_int_equal(table->look.shape, SHAPE_WIDE);
    assert_int_equal(table->cells.columns, COLUMNS);
    assert_int_equal(table->cells.count, COLUMNS);
    assert_string_equal(table->column_labels.text[COLUMNS - 1], "w;29999");
    table_destroy(&table);
    free(text);
}

/* Long text of more than the sample, its rows in no order; labels are numbered as they come. */
static void many_labels_are_found_again(void **state)
{
    enum { ROWS = 1009, COLUMNS = 31 }; /* primes, so that the walk below meets every cell once */
    struct bench *bench = bench_of(state);
    char *text, label[16];
    size_t size;
    FILE *out = open_memstream(&text, &size);
    for (int k = 0; k < ROWS * COLUMNS; k++)
        fprintf(out, "r%d,c%d,%d\n", k * 7 % ROWS, k * 3 % COLUMNS, k * 7 % ROWS * COLUMNS + k * 3 % COLUMNS);
    fclose(out);
    fescue_table *table = text_read(bench, text, NULL);
    assert_int_equal(table->cells.count, ROWS * COLUMNS);
    const struct half *rows = &table->cells.by_row;
    for (uint32_t i = 0; i < ROWS; i++)
        for (uint64_t k = rows->start[i]; k < rows->start[i + 1]; k++) {
            int value = (int)cells_value(&table->cells, rows, k);
            sprintf(label, "r%d", value / COLUMNS);
            assert_string_equal(table->row_labels.text[i], label);
            sprintf(label, "c%d", value % COLUMNS);
            assert_string_equal(table->column_labels.text[rows->across[k]], label);
        }
    table_destroy(&table);
    free(text);
}

static void every_duplicate_rule_reads_long_text(void **state)
{
    struct bench *bench = bench_of(state);
    static const char text[] = "a,x,1\nb,x,2\na,x,4.0\n";
    const struct table_reading mean = {.duplicates = FESCUE_DUPLICATES_MEAN},
                               last = {.duplicates = FESCUE_DUPLICATES_LAST},
                               first = {.duplicates = FESCUE_DUPLICATES_FIRST};
    text_check(bench, text, &mean, SHAPE_LONG, "a|x|2.5\nb|x|2\n");
    text_check(bench, text, &last, SHAPE_LONG, "a|x|4.0\nb|x|2\n");
    text_check(bench, text, &first, SHAPE_LONG, "a|x|1\nb|x|2\n");
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(wide_text_is_read),
        BENCH_TEST(long_text_is_read),
        BENCH_TEST(quotes_are_taken_out),
        BENCH_TEST(separators_are_found),
        BENCH_TEST(a_comma_may_be_the_decimal_sign),
        BENCH_TEST(shapes_are_told_apart),
        BENCH_TEST(formats_that_do_not_fit_are_refused),
        BENCH_TEST(bad_lines_are_named),
        BENCH_TEST(labels_in_any_script_are_kept),
        BENCH_TEST(a_table_may_be_wider_than_the_sample),
        BENCH_TEST(many_labels_are_found_again),
        BENCH_TEST(every_duplicate_rule_reads_long_text),
    };
    return cmocka_run_group_tests_name("delimited", tests, NULL, NULL);
}
