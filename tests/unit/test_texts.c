/* SPDX-License-Identifier: MIT
 *
 * What a value looked like comes back byte for byte, from one byte a cell where the value says it all.
 */
#include "support_reader.h"
#include "table/table_internal.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

static enum text_code code_of(const char *text, enum fescue_precision precision)
{
    double value;
    assert_null(value_parse(text, text + strlen(text), precision, &value));
    const struct text_style style = {precision, '.'};
    return text_code_of(precision == FESCUE_SINGLE ? (double)(float)value : value, style, text, strlen(text));
}

static void ordinary_texts_need_no_room(void **state)
{
    (void)state;
    static const struct {
        const char *text;
        unsigned code;
    } cases[] = {
        {"0", TEXT_SHORTEST},         {"-0", TEXT_SHORTEST},        {"17", TEXT_SHORTEST},
        {"-3", TEXT_SHORTEST},        {"1.5", TEXT_DECIMALS + 1},   {"12.50", TEXT_DECIMALS + 2},
        {"0.0", TEXT_DECIMALS + 1},   {"-0.00", TEXT_DECIMALS + 2}, {"100.000", TEXT_DECIMALS + 3},
        {"0.001", TEXT_DECIMALS + 3},
    };
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++) {
        assert_int_equal(code_of(cases[k].text, FESCUE_DOUBLE), cases[k].code);
        assert_int_equal(code_of(cases[k].text, FESCUE_SINGLE), cases[k].code);
    }
    assert_int_equal(code_of("0.1234567890123456", FESCUE_DOUBLE), TEXT_DECIMALS + 16);
    assert_int_equal(code_of("1e+20", FESCUE_DOUBLE), TEXT_SHORTEST);
    assert_int_equal(code_of("123456789012345678", FESCUE_DOUBLE), TEXT_ODD);
    assert_int_equal(code_of("1234567.25", FESCUE_DOUBLE), TEXT_DECIMALS + 2);
    assert_int_equal(code_of("1234567.26", FESCUE_SINGLE), TEXT_ODD);
    assert_int_equal(code_of("16777217", FESCUE_SINGLE), TEXT_ODD);
}

static const char *const texts[] = {
    "0",
    "-0",
    "+0",
    "0.0",
    "-0.000",
    "00",
    "1",
    "01",
    "-1",
    "+1",
    "1.",
    ".5",
    "-.5",
    "0.5",
    "1.50",
    "1e5",
    "1E5",
    "1e+05",
    "1e05",
    "100000",
    "1e-05",
    "0.00001",
    "0.000010",
    "0.0001",
    "0.000012345",
    "123456.7",
    "123456.78",
    "1234567.89",
    "0.1",
    "0.10",
    "0.123456",
    "0.1234567",
    "0.12345678",
    "16777216",
    "16777217",
    "9007199254740993",
    "999999999999999",
    "999999999999999.5",
    "1000000000000000",
    "12345678901234567890",
    "0.30000000000000004",
    "3.14159265358979323846",
    "1.0000000000000000e+00",
    "2.5000000000000000e-01",
    "-1.7976931348623157e+30",
    "1.0000000000000000000000000000000",
    "0.0000000000000000000000000000000000",
    "1.000000000000000000000000000000000000000000000000000000000000000000001",
    "4.9e-30",
    "7.00",
    "8.250",
    " 3",
    "3 ",
    "\t4.0 ",
    "9.999999",
    "99999.9",
    "33554433.0",
    "1.17549435e-38",
    "1e-45",
};
enum { TEXTS = sizeof texts / sizeof texts[0] };

/* One row a text, in three columns; the middle one holds the text, the others something ordinary. */
static char *table_text(char separator, char decimal)
{
    char *text;
    size_t size;
    FILE *out = open_memstream(&text, &size);
    fprintf(out, "t%ca%cb%cc\n", separator, separator, separator);
    for (int k = 0; k < TEXTS; k++) {
        fprintf(out, "%d%c1%c\"", k, separator, separator);
        for (const char *c = texts[k]; *c != '\0'; c++)
            fputc(*c == '.' ? decimal : *c, out);
        fprintf(out, "\"%c\n", separator);
    }
    fclose(out);
    return text;
}

static void check_texts(struct bench *bench, enum fescue_precision precision, char separator, char decimal)
{
    const struct table_reading reading = {.precision = precision};
    char *text = table_text(separator, decimal), *expected;
    size_t size;
    FILE *out = open_memstream(&expected, &size);
    for (int k = 0; k < TEXTS; k++) {
        fprintf(out, "%d|a|1\n%d|b|", k, k);
        for (const char *c = texts[k]; *c != '\0'; c++)
            fputc(*c == '.' ? decimal : *c, out);
        fputc('\n', out);
    }
    fclose(out);
    fescue_table *table = text_read(bench, text, &reading);
    table_check(table, expected);
    table_destroy(&table);
    free(text), free(expected);
}

static void every_text_comes_back(void **state)
{
    struct bench *bench = bench_of(state);
    check_texts(bench, FESCUE_DOUBLE, ',', '.');
    check_texts(bench, FESCUE_SINGLE, '\t', '.');
    check_texts(bench, FESCUE_DOUBLE, ';', ',');
    check_texts(bench, FESCUE_SINGLE, ';', ',');
}

/* Numbers of 1 to 19 digits with 0 to 9 decimals, and printed in other ways, as entries in no order. */
static void random_texts_come_back(void **state)
{
    enum { SIDE = 67, SEED = 7 };
    struct bench *bench = bench_of(state);
    for (int precision = FESCUE_DOUBLE; precision <= FESCUE_SINGLE; precision++) {
        const struct table_reading reading = {.precision = (enum fescue_precision)precision};
        struct random_stream stream = random_open(SEED, RANDOM_TEST, 0);
        static char cell[SIDE * SIDE][40];
        char *text, *expected;
        size_t size;
        FILE *out = open_memstream(&text, &size);
        fprintf(out, "%%%%MatrixMarket matrix coordinate real general\n%d %d %d\n", SIDE, SIDE, SIDE * SIDE);
        for (int k = 0; k < SIDE * SIDE; k++) {
            int at = k * 11 % (SIDE * SIDE);
            static const char *const forms[] = {"%.*f", "%.*e", "%.*g"};
            double value = random_normal(&stream) * (double)(1 << random_below(&stream, 20));
            snprintf(cell[at], sizeof cell[at], forms[random_below(&stream, 8) % 3], (int)random_below(&stream, 17),
                     value);
            fprintf(out, "%d %d %s\n", at / SIDE + 1, at % SIDE + 1, cell[at]);
        }
        fclose(out);
        out = open_memstream(&expected, &size);
        for (int k = 0; k < SIDE * SIDE; k++)
            fprintf(out, "%d|%d|%s\n", k / SIDE + 1, k % SIDE + 1, cell[k]);
        fclose(out);
        fescue_table *table = text_read(bench, text, &reading);
        table_check(table, expected);
        table_destroy(&table);
        free(text), free(expected);
    }
}

static void texts_are_kept_for_small_tables_alone(void **state)
{
    struct bench *bench = bench_of(state);
    const struct table_reading small = {.dense_most = 6}, smaller = {.dense_most = 5};
    static const char *const tables[] = {
        "t,a,b,c\n1,2,+3,4\n2,5,6,7\n",
        "1,a,+2\n1,b,3\n2,a,4\n2,c,5\n",
        "%%MatrixMarket matrix coordinate real general\n2 3 1\n1 1 +1\n",
        "%%MatrixMarket matrix array real general\n3 2\n1\n+2\n3\n4\n5\n6\n",
    };
    for (size_t k = 0; k < sizeof tables / sizeof tables[0]; k++) {
        fescue_table *kept = text_read(bench, tables[k], &small), *dropped = text_read(bench, tables[k], &smaller);
        assert_non_null(kept->texts);
        assert_null(dropped->texts);
        tables_equal(kept, dropped);
        table_destroy(&kept);
        table_destroy(&dropped);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(ordinary_texts_need_no_room),
        BENCH_TEST(every_text_comes_back),
        BENCH_TEST(random_texts_come_back),
        BENCH_TEST(texts_are_kept_for_small_tables_alone),
    };
    return cmocka_run_group_tests_name("texts", tests, NULL, NULL);
}
