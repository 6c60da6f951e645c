/* SPDX-License-Identifier: MIT
 *
 * Long text of several chunks: the same table and the same sentences from 1, 2 and 5 workers as from reading record by
 * record, which a column of weights makes the reader do.
 */
#include "support_reader.h"

#include <inttypes.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

enum { ROWS = 900, COLUMNS = 700, RECORDS = 60000 }; /* more than 1 MB of text: four chunks or more */
static const size_t workers[] = {1, 2, 5};
static const uint64_t seed = 20240703;

struct layout {
    const char *name;
    char separator, decimal;
    bool quotes, returns, long_labels;
    uint64_t holes, blanks, odd; /* one record in so many on average is a hole, behind a blank line, one with quotes and
                                    ends of lines in its label; 0: none */
    uint64_t again;              /* this record is that of the one before once more */
};

static bool is_one_in(uint64_t rarity, uint64_t k, uint32_t which)
{
    return rarity > 0 && random_uniform_at(seed, RANDOM_TEST, which, k) * (double)rarity < 1;
}

static void label_print(FILE *out, const struct layout *layout, char side, uint64_t number, bool odd)
{
    const char *quote = layout->quotes || odd ? "\"" : "";
    fprintf(out, "%s%c%s%s%" PRIu64 "%s", quote, side, odd ? "\"\"\n\"\", " : "",
            layout->long_labels && number % 3 == 0 ? "-a-label-of-more-than-sixteen-bytes-" : "", number, quote);
}

static void value_print(FILE *out, const struct layout *layout, uint64_t k)
{
    char text[64];
    double u = random_uniform_at(seed, RANDOM_TEST, 4, k) - 0.5;
    if (is_one_in(layout->holes, k, 5)) {
        fputs(k % 3 == 0 ? "NA" : k % 3 == 1 ? " " : "", out);
        return;
    }
    snprintf(text, sizeof text, k % 4 == 0 ? "%.2f" : k % 4 == 1 ? "%.0f" : k % 4 == 2 ? "%.9g" : "%.17g", 1000 * u);
    if (layout->decimal == ',' && strchr(text, '.') != NULL)
        *strchr(text, '.') = ',';
    fputs(text, out);
}

/* The text, with or without a weight of 1 in every record. */
static char *text_write(const struct layout *layout, bool weighted, size_t *length)
{
    char *text = NULL;
    FILE *out = open_memstream(&text, length);
    assert_non_null(out);
    const char *end = layout->returns ? "\r\n" : "\n";
    const char s = layout->separator;
    fprintf(out, "row%ccolumn%cvalue", s, s);
    if (weighted)
        fprintf(out, "%cweight", s);
    fputs(end, out);
    for (uint64_t k = 0; k < RECORDS; k++) {
        uint64_t from = k > 0 && k == layout->again ? k - 1 : k, cell = from * 104729 % ((uint64_t)ROWS * COLUMNS);
        bool odd = is_one_in(layout->odd, k, 6);
        if (is_one_in(layout->blanks, k, 7))
            fputs(end, out);
        label_print(out, layout, 'r', cell / COLUMNS, odd);
        fputc(s, out);
        label_print(out, layout, 'c', cell % COLUMNS, false);
        fputc(s, out);
        value_print(out, layout, k);
        if (weighted)
            fprintf(out, "%c1", s);
        fputs(end, out);
    }
    fclose(out);
    return text;
}

static void labels_equal(const struct labels *a, const struct labels *b)
{
    assert_int_equal(a->count, b->count);
    for (uint32_t i = 0; i < a->count; i++)
        assert_string_equal(a->text[i], b->text[i]);
}

static void all_equal(const fescue_table *a, const fescue_table *b)
{
    tables_equal(a, b);
    labels_equal(&a->row_labels, &b->row_labels);
    labels_equal(&a->column_labels, &b->column_labels);
    assert_int_equal(a->look.decimal, b->look.decimal);
    for (uint64_t k = 0; k < a->cells.count; k++) {
        char buffer[2][32];
        size_t length[2];
        const char *text[2] = {texts_of(a->texts, &a->cells, k, buffer[0], &length[0]),
                               texts_of(b->texts, &b->cells, k, buffer[1], &length[1])};
        assert_int_equal(length[0], length[1]);
        assert_memory_equal(text[0], text[1], length[0]);
    }
}

static void layout_check(struct bench *bench, const struct layout *layout)
{
    size_t length[2], packed_length = 0;
    char *text = text_write(layout, false, &length[0]), *weighted = text_write(layout, true, &length[1]);
    char *packed = NULL;
    fescue_table *expected, *table;
    gzip_append(&packed, &packed_length, text, length[0]);
    assert_status(bench->context, team_resize(bench->context, 1), FESCUE_OK);
    assert_status(bench->context, bytes_read(bench, weighted, length[1], NULL, &expected), FESCUE_OK);
    for (size_t w = 0; w < 4; w++) {
        assert_status(bench->context, team_resize(bench->context, workers[w % 3]), FESCUE_OK);
        assert_status(bench->context,
                      w < 3 ? bytes_read(bench, text, length[0], NULL, &table)
                            : bytes_read(bench, packed, packed_length, NULL, &table),
                      FESCUE_OK);
        all_equal(table, expected);
        table_destroy(&table);
    }
    table_destroy(&expected);
    free(text), free(weighted), free(packed);
}

static void every_layout_gives_the_same_table(void **state)
{
    static const struct layout layouts[] = {
        {.name = "plain", .separator = ',', .decimal = '.'},
        {.name = "quotes, CR LF", .separator = '\t', .decimal = '.', .quotes = true, .returns = true, .blanks = 999},
        {.name = "decimal commas, holes", .separator = ';', .decimal = ',', .holes = 9, .blanks = 30},
        {.name = "long labels, some chunks odd", .separator = ';', .decimal = '.', .long_labels = true, .odd = 30000},
        {.name = "all chunks odd", .separator = ',', .decimal = '.', .holes = 50, .quotes = true, .odd = 50},
    };
    for (size_t k = 0; k < sizeof layouts / sizeof layouts[0]; k++) {
        print_message("# %s\n", layouts[k].name);
        layout_check(bench_of(state), &layouts[k]);
    }
}

/* A cell that comes again, far in the text, behind holes and blank lines: both lines are told, from any worker. */
static void duplicates_are_told_with_their_lines(void **state)
{
    struct bench *bench = bench_of(state);
    const struct layout layout = {
        .separator = ',', .decimal = '.', .blanks = 100, .odd = 20000, .again = RECORDS - 100};
    size_t length;
    char *text = text_write(&layout, false, &length), sentence[200], cell[64], *at = text;
    uint64_t line = 0, records = 0, first = 0, again = 0;
    snprintf(cell, sizeof cell, "r%" PRIu64 ",c%" PRIu64 ",",
             (layout.again - 1) * 104729 % ((uint64_t)ROWS * COLUMNS) / COLUMNS,
             (layout.again - 1) * 104729 % ((uint64_t)ROWS * COLUMNS) % COLUMNS);
    for (char *end; (end = strchr(at, '\n')) != NULL; at = end + 1, records++) {
        line++;
        if (strncmp(at, cell, strlen(cell)) != 0)
            continue;
        first = first == 0 ? line : first;
        again = line;
    }
    assert_true(first > 0 && again > first);
    snprintf(sentence, sizeof sentence,
             "line %" PRIu64 ": row %.*s, column %s was given on line %" PRIu64
             " already; --duplicates mean, last or first takes a cell that comes more than once",
             again, (int)(strchr(cell, ',') - cell), cell, strtok(strchr(cell, ',') + 1, ","), first);
    for (size_t w = 0; w < 3; w++) {
        assert_status(bench->context, team_resize(bench->context, workers[w]), FESCUE_OK);
        bytes_refused(bench, text, length, NULL, sentence);
    }
    free(text);
}

/* Records at the edge of what is read at one go. A text without a last end of line is read record by record. */
static void the_last_end_of_line_changes_nothing(void **state)
{
    struct bench *bench = bench_of(state);
    static const char *const records[] = {
        "b,y,2",
        "\"b\",y,2",
        "\"b\",\"y\",\"2\"",
        "b,y,\"2\"x",
        "b,y,2\r",
        "b,y,\"2\"\r",
        "b,y,2\r\r",
        "b,y,",
        "b,y,NA",
        "b,y,nan",
        "b,y,inf",
        "b,y, 2",
        "b,y,2 ",
        "b,y,\"\"",
        "b,y,2e3",
        "b,y,-2.5",
        "b,y,1e400",
        "b,y,+2",
        "b,y,.5",
        "b,y,2.",
        "b,y,-",
        "b,y,2,3",
        "b,y",
        "b",
        ",y,2",
        "b,,2",
        "\"\",y,2",
        "b\"c,y,2",
        "b,y\"z,2",
        "\"b\"c,y,2",
        "\"b\"\"\",y,2",
        "\"b",
        "\"b,c\",y,2",
        "b,y,2,",
        "b\xff,y,2",
        "b,\xc3\xa9,2",
        " b,y,2",
        "b ,y,2",
        "a,x,5",
        "\r",
        "",
        "b,y,12345678",
        "b,y,1.23456789",
        "b,y,2,5",
        "b,y,0x10",
        "b,y,--2",
        "bbbbbbbb,yyyyyyyyyyyyyyyy,1",
        "bbbbbbbbbbbbbbbbb,yyyyyyy,1",
    };
    static const char *const separators[] = {",", ";"};
    for (size_t k = 0; k < 2 * (sizeof records / sizeof records[0]); k++) {
        const struct table_reading as_long = {.format = FESCUE_FORMAT_LONG};
        fescue_table *table[2];
        fescue_status status[2];
        char text[256], sentence[300] = "";
        size_t length = (size_t)snprintf(text, sizeof text, "a,x,1\na,z,3\n%s\nc,x,4\nc,\"z\",7\n", records[k / 2]);
        for (size_t i = 0; i < length && k % 2 > 0; i++)
            text[i] = text[i] == ',' ? separators[k % 2][0] : text[i] == '.' ? ',' : text[i];
        for (size_t whole = 0; whole < 2; whole++) {
            fescue_failure_clear(bench->context);
            status[whole] = bytes_read(bench, text, length - 1 + whole, &as_long, &table[whole]);
            if (whole == 0 && status[0] != FESCUE_OK)
                snprintf(sentence, sizeof sentence, "%s", fescue_failure_text(bench->context));
        }
        assert_int_equal(status[0], status[1]);
        if (status[0] == FESCUE_OK)
            all_equal(table[0], table[1]);
        else
            assert_string_equal(sentence, fescue_failure_text(bench->context));
        table_destroy(&table[0]), table_destroy(&table[1]);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(every_layout_gives_the_same_table),
        BENCH_TEST(duplicates_are_told_with_their_lines),
        BENCH_TEST(the_last_end_of_line_changes_nothing),
    };
    return cmocka_run_group_tests_name("long_chunk", tests, NULL, NULL);
}
