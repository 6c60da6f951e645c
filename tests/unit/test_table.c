/* SPDX-License-Identifier: MIT
 *
 * Tables: from memory; the same content through every form of file gives the same cells, to the bit; faults.
 */
#include "support_reader.h"
#include "support_table.h"

#include <errno.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <zlib.h>

/* ---- from memory ------------------------------------------------------------------------------------------------ */

static void numbers_in_memory_make_a_table(void **state)
{
    fescue_context *context = bench_of(state)->context;
    static const uint32_t row[] = {2, 0, 2}, column[] = {1, 3, 0};
    static const double value[] = {1.1, 2.5, -3};
    for (int precision = FESCUE_DOUBLE; precision <= FESCUE_SINGLE; precision++) {
        fescue_table *table;
        char buffer[16];
        assert_status(
            context,
            table_from_triplets(context, 3, 4, 3, row, column, value, (enum fescue_precision)precision, &table),
            FESCUE_OK);
        assert_int_equal(table->look.shape, SHAPE_MEMORY);
        assert_string_equal(label_text(&table->column_labels, 3, buffer), "4");
        assert_int_equal(table->cells.count, 3);
        assert_true(cells_value(&table->cells, &table->cells.by_row, 0) == 2.5);
        assert_true(cells_value(&table->cells, &table->cells.by_row, 1) == -3);
        assert_true(cells_value(&table->cells, &table->cells.by_row, 2) == (precision ? (double)1.1f : 1.1));
        assert_null(table->texts);
        table_destroy(&table);
        assert_null(table);
        table_destroy(&table);
    }
}

static void bad_numbers_in_memory_are_refused(void **state)
{
    fescue_context *context = bench_of(state)->context;
    static const struct {
        uint32_t rows, row[2], column[2];
        double value[2];
        uint64_t count;
        enum fescue_precision precision;
        const char *sentence;
    } cases[] = {
        {3, {0, 3}, {0, 0}, {1, 1}, 2, FESCUE_DOUBLE, "cell 1: row 3 is outside 0..2"},
        {3, {0, 0}, {0, 4}, {1, 1}, 2, FESCUE_DOUBLE, "cell 1: column 4 is outside 0..3"},
        {0, {0, 0}, {0, 4}, {1, 1}, 2, FESCUE_DOUBLE, "cell 0: row 0 is outside 0..-1"},
        {3, {2, 2}, {1, 1}, {1, 1}, 2, FESCUE_DOUBLE, "the cell of row 2 and column 1 is given twice"},
        {3, {0, 1}, {0, 0}, {1, NAN}, 2, FESCUE_DOUBLE, "cell 1: the value is not finite"},
        {3, {0, 1}, {0, 0}, {-INFINITY, 1}, 2, FESCUE_DOUBLE, "cell 0: the value is not finite"},
        {3, {0, 1}, {0, 0}, {1, 1e39}, 2, FESCUE_SINGLE, "cell 1: 1e+39 is too large for single precision"},
        {3, {0}, {0}, {0}, 0, FESCUE_DOUBLE, "the table has no observed cell"},
        {UINT32_MAX, {0}, {0}, {0}, 1, FESCUE_DOUBLE, "more than 4294967294 rows or columns are not possible"},
    };
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++) {
        fescue_table *table;
        fescue_failure_clear(context);
        fescue_status status = table_from_triplets(context, cases[k].rows, 4, cases[k].count, cases[k].row,
                                                   cases[k].column, cases[k].value, cases[k].precision, &table);
        assert_status(context, status, FESCUE_BAD_DATA);
        assert_string_equal(fescue_failure_text(context), cases[k].sentence);
        assert_null(table);
        assert_no_leak(context);
    }
}

/* ---- every form of file ----------------------------------------------------------------------------------------- */

/* A table with holes, some values negative, and the texts they are written as. */
struct sheet {
    int rows, columns;
    bool is_symmetric;
    char text[40][40][32]; /* "" is a hole */
};

static void sheet_make(struct sheet *sheet, int rows, int columns, bool is_symmetric)
{
    struct random_stream stream = random_open(11, RANDOM_TEST, (uint32_t)rows);
    *sheet = (struct sheet){.rows = rows, .columns = columns, .is_symmetric = is_symmetric};
    for (int i = 0; i < rows; i++)
        for (int j = 0; j < columns; j++) {
            double value = random_normal(&stream) * 100;
            if (random_uniform(&stream) < 0.6)
                snprintf(sheet->text[i][j], sizeof sheet->text[i][j], "%.*f", (int)random_below(&stream, 9), value);
            if (is_symmetric && i > j)
                memcpy(sheet->text[i][j], sheet->text[j][i], sizeof sheet->text[i][j]);
        }
}

static int sheet_count(const struct sheet *sheet, bool lower_alone)
{
    int count = 0;
    for (int i = 0; i < sheet->rows; i++)
        for (int j = 0; j < (lower_alone ? i + 1 : sheet->columns); j++)
            count += sheet->text[i][j][0] != '\0';
    return count;
}

static void coordinate_write(const struct sheet *sheet, FILE *out, bool lower_alone, bool by_column)
{
    int outer = by_column ? sheet->columns : sheet->rows, inner = by_column ? sheet->rows : sheet->columns;
    fprintf(out, "%%%%MatrixMarket matrix coordinate real %s\n%d %d %d\n", lower_alone ? "symmetric" : "general",
            sheet->rows, sheet->columns, sheet_count(sheet, lower_alone));
    for (int a = 0; a < outer; a++)
        for (int b = inner - 1; b >= 0; b--) {
            int i = by_column ? b : a, j = by_column ? a : b;
            if (sheet->text[i][j][0] != '\0' && (!lower_alone || i >= j))
                fprintf(out, "%d %d %s\n", i + 1, j + 1, sheet->text[i][j]);
        }
}

static void array_write(const struct sheet *sheet, FILE *out, bool lower_alone)
{
    fprintf(out, "%%%%MatrixMarket matrix array real %s\n%d %d\n", lower_alone ? "symmetric" : "general", sheet->rows,
            sheet->columns);
    for (int j = 0; j < sheet->columns; j++)
        for (int i = lower_alone ? j : 0; i < sheet->rows; i++)
            fprintf(out, "%s\n", sheet->text[i][j][0] != '\0' ? sheet->text[i][j] : "nan");
}

static void wide_write(const struct sheet *sheet, FILE *out, char separator)
{
    for (int j = 1; j <= sheet->columns; j++)
        fprintf(out, "%c%d", separator, j);
    for (int i = 0; i < sheet->rows; i++) {
        fprintf(out, "\r\n%d", i + 1);
        for (int j = 0; j < sheet->columns; j++)
            fprintf(out, "%c%s", separator, sheet->text[i][j]);
    }
}

/* Records without a value first, so that rows and columns are met in their order. */
static void long_write(const struct sheet *sheet, FILE *out, char separator)
{
    fprintf(out, "row%ccolumn%cvalue\n", separator, separator);
    for (int i = 1; i <= sheet->rows; i++)
        fprintf(out, "%d%c1%c\n", i, separator, separator);
    for (int j = 1; j <= sheet->columns; j++)
        fprintf(out, "1%c%d%cNA\n", separator, j, separator);
    for (int j = 0; j < sheet->columns; j++)
        for (int i = 0; i < sheet->rows; i++)
            if (sheet->text[i][j][0] != '\0')
                fprintf(out, "%d%c\"%d\"%c%s\n", i + 1, separator, j + 1, separator, sheet->text[i][j]);
}

enum form {
    FORM_ROWS,
    FORM_COLUMNS,
    FORM_ARRAY,
    FORM_WIDE_COMMA,
    FORM_WIDE_TAB,
    FORM_LONG_COMMA,
    FORM_LONG_SEMICOLON,
    FORM_SYMMETRIC,
    FORM_SYMMETRIC_ARRAY,
    FORMS
};

/* The sheet as a file; the caller frees it. */
static char *sheet_write(const struct sheet *sheet, enum form form, size_t *length)
{
    char *text;
    FILE *out = open_memstream(&text, length);
    switch (form) {
    case FORM_ROWS:
    case FORM_COLUMNS:
    case FORM_SYMMETRIC:
        coordinate_write(sheet, out, form == FORM_SYMMETRIC, form == FORM_COLUMNS);
        break;
    case FORM_ARRAY:
    case FORM_SYMMETRIC_ARRAY:
        array_write(sheet, out, form == FORM_SYMMETRIC_ARRAY);
        break;
    case FORM_WIDE_COMMA:
    case FORM_WIDE_TAB:
        wide_write(sheet, out, form == FORM_WIDE_COMMA ? ',' : '\t');
        break;
    default:
        long_write(sheet, out, form == FORM_LONG_COMMA ? ',' : ';');
    }
    fclose(out);
    return text;
}

/* What must come out: straight from the sheet. */
static fescue_table *sheet_table(fescue_context *context, const struct sheet *sheet, enum fescue_precision precision)
{
    static uint32_t row[1600], column[1600];
    static double value[1600];
    uint64_t count = 0;
    fescue_table *table;
    for (int i = 0; i < sheet->rows; i++)
        for (int j = 0; j < sheet->columns; j++)
            if (sheet->text[i][j][0] != '\0') {
                row[count] = (uint32_t)i;
                column[count] = (uint32_t)j;
                value[count++] = strtod(sheet->text[i][j], NULL);
            }
    assert_status(context,
                  table_from_triplets(context, (uint32_t)sheet->rows, (uint32_t)sheet->columns, count, row, column,
                                      value, precision, &table),
                  FESCUE_OK);
    return table;
}

static void texts_check(const fescue_table *table, const struct sheet *sheet)
{
    const struct half *rows = &table->cells.by_row;
    for (uint32_t i = 0; i < rows->lines; i++)
        for (uint64_t k = rows->start[i]; k < rows->start[i + 1]; k++) {
            char buffer[32];
            size_t length;
            const char *text = texts_of(table->texts, &table->cells, k, buffer, &length), *expected;
            expected = sheet->text[i][rows->across[k]];
            assert_int_equal(length, strlen(expected));
            assert_memory_equal(text, expected, length);
        }
}

/* Plain, as one gzip member, and as three that cut lines in two. */
static void form_check(struct bench *bench, const struct sheet *sheet, enum form form, enum fescue_precision precision)
{
    const struct table_reading reading = {.precision = precision};
    fescue_table *expected = sheet_table(bench->context, sheet, precision);
    size_t length;
    char *text = sheet_write(sheet, form, &length);
    for (int packing = 0; packing < 3; packing++) {
        fescue_table *table;
        char *bytes = NULL;
        size_t count = 0;
        if (packing > 0)
            gzip_append(&bytes, &count, text, packing == 1 ? length : length / 3);
        if (packing == 2) {
            gzip_append(&bytes, &count, text + length / 3, length / 3);
            gzip_append(&bytes, &count, text + length / 3 * 2, length - length / 3 * 2);
        }
        const char *given = packing == 0 ? text : bytes;
        size_t given_count = packing == 0 ? length : count;
        assert_status(bench->context, bytes_read(bench, given, given_count, &reading, &table), FESCUE_OK);
        tables_equal(table, expected);
        texts_check(table, sheet);
        assert_int_equal(table->input_bytes, given_count);
        assert_int_equal(table->input_crc32, crc32(0, (const unsigned char *)given, (uInt)given_count));
        table_destroy(&table);
        free(bytes);
    }
    table_destroy(&expected);
    free(text);
}

static void every_form_gives_the_same_cells(void **state)
{
    struct bench *bench = bench_of(state);
    static const int sizes[][2] = {{17, 23}, {40, 5}, {4, 40}, {1, 12}, {12, 1}, {1, 1}};
    static struct sheet sheet;
    for (int precision = FESCUE_DOUBLE; precision <= FESCUE_SINGLE; precision++)
        for (size_t k = 0; k < sizeof sizes / sizeof sizes[0]; k++) {
            sheet_make(&sheet, sizes[k][0], sizes[k][1], false);
            snprintf(sheet.text[0][0], sizeof sheet.text[0][0], "2.50"); /* never without a cell */
            for (int form = FORM_ROWS; form <= FORM_LONG_SEMICOLON; form++)
                form_check(bench, &sheet, (enum form)form, (enum fescue_precision)precision);
        }
}

static void symmetric_forms_give_the_same_cells(void **state)
{
    struct bench *bench = bench_of(state);
    static struct sheet sheet;
    for (int precision = FESCUE_DOUBLE; precision <= FESCUE_SINGLE; precision++) {
        sheet_make(&sheet, 31, 31, true);
        for (int form = FORM_ROWS; form < FORMS; form++)
            form_check(bench, &sheet, (enum form)form, (enum fescue_precision)precision);
    }
}

/* ---- faults ----------------------------------------------------------------------------------------------------- */

/* Whatever is refused, first, second, ...: the status says so, nothing is left, and in the end it reads. */
static void sweep(struct bench *bench, const char *bytes, size_t count, enum fault_kind kind, fescue_status expected)
{
    const struct table_reading reading = {.duplicates = FESCUE_DUPLICATES_MEAN};
    bool met = true;
    for (uint64_t n = 1; met; n++) {
        fescue_table *table;
        char path[PATH_SIZE];
        file_put(path_in(bench->folder, "input", path), bytes, count);
        fescue_failure_clear(bench->context);
        fault_plan(kind, n, false, EIO);
        fescue_status status = table_read(bench->context, path, &reading, &table);
        met = fault_met();
        fault_clear();
        assert_status(bench->context, status, met ? expected : FESCUE_OK);
        assert_true((table == NULL) == met);
        table_destroy(&table);
        assert_no_leak(bench->context);
        assert_int_equal(descriptors_count(), bench->descriptors);
    }
}

static void every_fault_is_told_and_leaks_nothing(void **state)
{
    struct bench *bench = bench_of(state);
    static struct sheet sheet;
    sheet_make(&sheet, 9, 7, false);
    snprintf(sheet.text[2][3], sizeof sheet.text[2][3], "+1.0E+01"); /* an odd text */
    for (int form = FORM_ROWS; form <= FORM_LONG_SEMICOLON; form++) {
        size_t length, count = 0;
        char *bytes = NULL, *text = sheet_write(&sheet, (enum form)form, &length);
        sweep(bench, text, length, FAULT_TAKE, FESCUE_NO_MEMORY);
        sweep(bench, text, length, FAULT_READ, FESCUE_NO_INPUT);
        gzip_append(&bytes, &count, text, length);
        sweep(bench, bytes, count, FAULT_TAKE, FESCUE_NO_MEMORY);
        sweep(bench, bytes, count, FAULT_OPEN, FESCUE_NO_INPUT);
        free(bytes), free(text);
    }
    static const char twice[] = "a,x,1\nb,x,2\na,x,4.0\n";
    sweep(bench, twice, sizeof twice - 1, FAULT_TAKE, FESCUE_NO_MEMORY);
    static const char skew[] = "%%MatrixMarket matrix coordinate real skew-symmetric\n3 3 2\n2 1 +1\n3 2 1\n";
    sweep(bench, skew, sizeof skew - 1, FAULT_TAKE, FESCUE_NO_MEMORY);
}

static void a_memory_limit_is_kept(void **state)
{
    struct bench *bench = bench_of(state);
    fescue_table *table;
    static const char text[] = "t,a,b,c\n1,2,3,4\n";
    memory_limit_set(bench->context, 400000);
    assert_status(bench->context, bytes_read(bench, text, sizeof text - 1, NULL, &table), FESCUE_NO_MEMORY);
    assert_null(table);
    memory_limit_set(bench->context, 0);
    assert_status(bench->context, bytes_read(bench, text, sizeof text - 1, NULL, &table), FESCUE_OK);
    table_destroy(&table);
}

static void what_is_not_there_is_no_input(void **state)
{
    struct bench *bench = bench_of(state);
    const struct table_reading reading = {0};
    char path[PATH_SIZE], sentence[2 * PATH_SIZE];
    fescue_table *table;
    assert_status(bench->context, table_read(bench->context, path_in(bench->folder, "none", path), &reading, &table),
                  FESCUE_NO_INPUT);
    snprintf(sentence, sizeof sentence, "%s: cannot be opened: No such file or directory", path);
    assert_string_equal(fescue_failure_text(bench->context), sentence);
    assert_null(table);
    fescue_failure_clear(bench->context);
    assert_status(bench->context, table_read(bench->context, bench->folder, &reading, &table), FESCUE_NO_INPUT);
    snprintf(sentence, sizeof sentence, "%s: cannot be read: Is a directory", bench->folder);
    assert_string_equal(fescue_failure_text(bench->context), sentence);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(numbers_in_memory_make_a_table),        BENCH_TEST(bad_numbers_in_memory_are_refused),
        BENCH_TEST(every_form_gives_the_same_cells),       BENCH_TEST(symmetric_forms_give_the_same_cells),
        BENCH_TEST(every_fault_is_told_and_leaks_nothing), BENCH_TEST(a_memory_limit_is_kept),
        BENCH_TEST(what_is_not_there_is_no_input),
    };
    return cmocka_run_group_tests_name("table", tests, NULL, NULL);
}
