/* SPDX-License-Identifier: MIT
 *
 * Matrix Market files of several chunks: the same table and the same sentences from 1, 2 and 5 workers, whether chunks
 * are parsed at one go or, because of a remark in them, line by line.
 */
#include "support_reader.h"

#include <inttypes.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

enum { ROWS = 900, COLUMNS = 700, ENTRIES = 50000 }; /* some 900 kB of text: four chunks */
static const size_t workers[] = {1, 2, 5};
static const uint64_t seed = 20240701;

/* How a text is read: with and without vectors, texts kept or not, in either precision. */
struct way {
    struct table_reading reading;
    const char *kernel;
};
static const struct way ways[] = {
    {{0}, ""},
    {{.dense_most = 1}, ""},
    {{.dense_most = 1}, "portable"},
    {{.dense_most = 1, .precision = FESCUE_SINGLE}, ""},
};
enum { WAYS = sizeof ways / sizeof ways[0] };

static void way_take(const struct way *way)
{
    setenv("FESCUE_KERNEL", way->kernel, 1);
}

/* How the text is laid out. */
struct layout {
    uint64_t remarks; /* one every so many lines on average; 0: none */
    bool is_wide;     /* more blanks than needed, and CR LF */
    bool is_integer;
    uint64_t promised, bad_line; /* entries in the header; a line that reads "1 x 1" (0: none) */
    bool is_ordered;             /* cells come row by row */
    uint64_t swapped;            /* but for this one and the next (0: none) */
    uint64_t repeated;           /* this one is where the one before is (0: none) */
};

static double value_at(uint64_t k, bool is_integer)
{
    double u = random_uniform_at(seed, RANDOM_TEST, 1, k);
    return is_integer ? floor(2000 * u) - 1000 : (double)(float)(u - 0.5) * pow(10, (double)(k % 7) - 3);
}

/* Cells in a scrambled order, none twice: 104729 is a prime that divides no number of cells. Or in order, every twelfth
   one, with some rows left out. */
static void place_at(const struct layout *layout, uint64_t k, uint64_t place[2])
{
    if (layout->swapped > 0 && (k == layout->swapped || k == layout->swapped + 1))
        k ^= layout->swapped ^ (layout->swapped + 1);
    if (layout->repeated > 0 && k == layout->repeated)
        k--;
    uint64_t cell = k * 104729 % ((uint64_t)ROWS * COLUMNS);
    if (layout->is_ordered)
        cell = k * 10 + (k > ENTRIES / 2 ? 17000 : 2000);
    place[0] = cell / COLUMNS;
    place[1] = cell % COLUMNS;
}

static char *text_write(const struct layout *layout, size_t *length)
{
    char *text = NULL;
    uint64_t line = 2;
    FILE *out = open_memstream(&text, length);
    assert_non_null(out);
    fprintf(out, "%%%%MatrixMarket matrix coordinate %s general\n%d %d %" PRIu64 "\n",
            layout->is_integer ? "integer" : "real", ROWS, COLUMNS, layout->promised);
    for (uint64_t k = 0; k < ENTRIES; k++) {
        uint64_t place[2];
        place_at(layout, k, place);
        if (layout->remarks > 0 && random_uniform_at(seed, RANDOM_TEST, 2, k) * (double)layout->remarks < 1) {
            fputs(k % 2 == 0 ? "% a remark\n" : "\n", out);
            line++;
        }
        if (++line == layout->bad_line)
            fputs("1 x 1\n", out);
        else
            fprintf(out, layout->is_wide ? " %" PRIu64 "\t %" PRIu64 "  %.9g \r\n" : "%" PRIu64 " %" PRIu64 " %.9g\n",
                    place[0] + 1, place[1] + 1, value_at(k, layout->is_integer));
    }
    fclose(out);
    return text;
}

static void cells_check(const fescue_table *table, const struct layout *layout)
{
    const struct half *rows = &table->cells.by_row;
    double *expected = malloc((size_t)ROWS * COLUMNS * sizeof *expected);
    assert_non_null(expected);
    for (size_t k = 0; k < (size_t)ROWS * COLUMNS; k++)
        expected[k] = NAN;
    for (uint64_t k = 0; k < ENTRIES; k++) {
        char text[32];
        uint64_t place[2];
        place_at(layout, k, place);
        sprintf(text, "%.9g", value_at(k, layout->is_integer));
        expected[place[0] * COLUMNS + place[1]] = strtod(text, NULL);
    }
    assert_int_equal(table->cells.count, ENTRIES);
    for (uint32_t i = 0; i < rows->lines; i++)
        for (uint64_t k = rows->start[i]; k < rows->start[i + 1]; k++)
            assert_true(cells_value(&table->cells, rows, k) == expected[(size_t)i * COLUMNS + rows->across[k]]);
    free(expected);
}

/* A text and the same compressed. */
struct packed {
    char *bytes[2];
    size_t count[2];
};

static struct packed layout_pack(const struct layout *layout)
{
    struct packed packed = {0};
    packed.bytes[0] = text_write(layout, &packed.count[0]);
    gzip_append(&packed.bytes[1], &packed.count[1], packed.bytes[0], packed.count[0]);
    return packed;
}

static void packed_free(struct packed *packed)
{
    free(packed->bytes[0]), free(packed->bytes[1]);
}

static void layout_check(struct bench *bench, const struct layout *layout)
{
    struct packed packed = layout_pack(layout);
    fescue_table *first = NULL;
    for (size_t w = 0; w < 12; w++) {
        const struct table_reading reading = {.dense_most = w < 6 ? 0 : 1}; /* texts are kept, or not */
        size_t form = w / 3 % 2;
        fescue_table *table;
        assert_status(bench->context, team_resize(bench->context, workers[w % 3]), FESCUE_OK);
        assert_status(bench->context, bytes_read(bench, packed.bytes[form], packed.count[form], &reading, &table),
                      FESCUE_OK);
        if (first == NULL) {
            first = table;
            cells_check(table, layout);
        } else {
            tables_equal(first, table);
            table_destroy(&table);
        }
    }
    table_destroy(&first);
    packed_free(&packed);
}

static void every_layout_gives_the_same_table(void **state)
{
    static const struct layout layouts[] = {
        {.promised = ENTRIES},
        {.promised = ENTRIES, .remarks = 20000},
        {.promised = ENTRIES, .remarks = 7},
        {.promised = ENTRIES, .is_wide = true, .remarks = 40000},
        {.promised = ENTRIES, .is_integer = true},
        {.promised = ENTRIES, .is_ordered = true},
        {.promised = ENTRIES, .is_ordered = true, .remarks = 20000},
        {.promised = ENTRIES, .is_ordered = true, .swapped = 1},
        {.promised = ENTRIES, .is_ordered = true, .swapped = 30000},
        {.promised = ENTRIES, .is_ordered = true, .swapped = ENTRIES - 2},
    };
    for (size_t k = 0; k < sizeof layouts / sizeof layouts[0]; k++)
        layout_check(bench_of(state), &layouts[k]);
}

static void layout_refused(struct bench *bench, const struct layout *layout, const char *sentence)
{
    struct packed packed = layout_pack(layout);
    for (size_t w = 0; w < 12; w++) {
        const struct table_reading reading = {.dense_most = w < 6 ? 0 : 1};
        size_t form = w / 3 % 2;
        assert_status(bench->context, team_resize(bench->context, workers[w % 3]), FESCUE_OK);
        bytes_refused(bench, packed.bytes[form], packed.count[form], &reading, sentence);
    }
    packed_free(&packed);
}

static void faults_are_told_with_their_line(void **state)
{
    struct bench *bench = bench_of(state);
    static const uint64_t lines[] = {3, 30000, ENTRIES + 2};
    for (size_t k = 0; k < sizeof lines / sizeof lines[0]; k++) {
        char sentence[128];
        const struct layout layout = {.promised = ENTRIES, .bad_line = lines[k]};
        snprintf(sentence, sizeof sentence, "line %" PRIu64 ": 'x' was found, the number of a column was expected",
                 lines[k]);
        layout_refused(bench, &layout, sentence);
    }
}

static void promises_are_held_to(void **state)
{
    struct bench *bench = bench_of(state);
    char sentence[256], entry[64];
    uint64_t place[2];
    place_at(&(struct layout){0}, 30000, place);
    snprintf(entry, sizeof entry, "%" PRIu64 " %" PRIu64 " %.9g", place[0] + 1, place[1] + 1, value_at(30000, false));
    snprintf(sentence, sizeof sentence,
             "line 30003: '%s' was found after all 30000 entries that the header promises, the end of the file was "
             "expected",
             entry);
    layout_refused(bench, &(struct layout){.promised = 30000}, sentence);
    layout_refused(bench, &(struct layout){.promised = ENTRIES + 1},
                   "line 50002: the file ends here after 50000 of the 50001 entries that its header promises");
}

/* Cells that come twice, in a file that is in order but for them. */
static void repeated_cells_are_told_with_both_lines(void **state)
{
    static const uint64_t repeated[] = {1, 17000, 30000, ENTRIES - 1};
    for (size_t k = 0; k < sizeof repeated / sizeof repeated[0]; k++) {
        const struct layout layout = {.promised = ENTRIES, .is_ordered = true, .repeated = repeated[k]};
        char sentence[256];
        uint64_t place[2];
        place_at(&layout, repeated[k], place);
        snprintf(sentence, sizeof sentence,
                 "line %" PRIu64 ": row %" PRIu64 ", column %" PRIu64 " was given on line %" PRIu64
                 " already; --duplicates mean, last or first takes a cell that comes more than once",
                 repeated[k] + 3, place[0] + 1, place[1] + 1, repeated[k] + 2);
        layout_refused(bench_of(state), &layout, sentence);
    }
}

/* A fault in the text is told before damage that comes behind it, though that may be met first. */
static void what_comes_first_is_told(void **state)
{
    struct bench *bench = bench_of(state);
    const struct layout layout = {.promised = ENTRIES, .bad_line = 40};
    size_t length, count = 0;
    char *text = text_write(&layout, &length), *bytes = NULL;
    gzip_append(&bytes, &count, text, length);
    for (size_t w = 0; w < 3; w++) {
        assert_status(bench->context, team_resize(bench->context, workers[w]), FESCUE_OK);
        bytes_refused(bench, bytes, count - 1000, NULL, "line 40: 'x' was found, the number of a column was expected");
    }
    free(bytes), free(text);
}

/* All cells of the array form but for holes, against the coordinate form; symmetric ones too. */
static void arrays_keep_their_places(void **state)
{
    struct bench *bench = bench_of(state);
    enum { SIDE = 400 };
    static const char *const symmetries[] = {"general", "symmetric", "skew-symmetric"};
    for (size_t s = 0; s < 3; s++) {
        char *array = NULL, *list = NULL, *cells = NULL;
        size_t array_length, list_length, cells_length;
        uint64_t count = 0;
        FILE *out = open_memstream(&array, &array_length), *side = open_memstream(&cells, &cells_length);
        fprintf(out, "%%%%MatrixMarket matrix array real %s\n%d %d\n", symmetries[s], SIDE, SIDE);
        for (uint64_t j = 0; j < SIDE; j++)
            for (uint64_t i = s == 0 ? 0 : s == 1 ? j : j + 1; i < SIDE; i++) {
                uint64_t k = j * SIDE + i;
                if (k % 5 == 2) {
                    fputs(k % 10 == 2 ? "nan\n" : "-NaN\n", out);
                    continue;
                }
                fprintf(out, "%.7g\n", value_at(k, false));
                fprintf(side, "%" PRIu64 " %" PRIu64 " %.7g\n", i + 1, j + 1, value_at(k, false));
                count++;
            }
        fclose(out), fclose(side);
        out = open_memstream(&list, &list_length);
        fprintf(out, "%%%%MatrixMarket matrix coordinate real %s\n%d %d %" PRIu64 "\n%s", symmetries[s], SIDE, SIDE,
                count, cells);
        fclose(out);
        for (size_t w = 0; w < 3; w++) {
            assert_status(bench->context, team_resize(bench->context, workers[w]), FESCUE_OK);
            fescue_table *a = text_read(bench, array, NULL), *b = text_read(bench, list, NULL);
            tables_equal(a, b);
            table_destroy(&a), table_destroy(&b);
        }
        free(array), free(list), free(cells);
    }
}

/* Lines at the edge of what is read at one go: as a remark at the end, which has all be read line by line, tells. */
static void a_remark_changes_nothing(void **state)
{
    struct bench *bench = bench_of(state);
    static const char *const lines[] = {
        "1 2 3",
        "01 002 3.0",
        "1 2 -3.25",
        "1 2 -0",
        "1 2 0.1234567",
        "1 2 0.12345678",
        "1 2 1234567.75",
        "1 2 12345678.75",
        "1 2 3.",
        "1 2 .5",
        "1 2 +3",
        "1 2 3e2",
        "1 2 3\r",
        "1 2  3",
        " 1 2 3",
        "1\t2 3",
        "1 2 3 ",
        "1 2 3 4",
        "1 2",
        "0 2 3",
        "51 2 3",
        "1 61 3",
        "1 0 3",
        "1 2 -",
        "1 2 .",
        "1 2 nan",
        "1 2 1.2.3",
        "1 2 --3",
        "-1 2 3",
        "1 -2 3",
        "1 2.0 3",
        "1 2 -.5",
        "1 2 1/2",
        "12345678 2 3",
        "1 2 \xb2",
        "1 2 3-",
        "1 2 99999999",
        "1 2 9999999",
        "1 2 0.30000000001",
        "9999999 2 3",
        "1 9999999 3",
        "1 2 123456789012345",
        "1 2 12345678901234.5",
        "1 2 -1.23456789012345",
        "1 2 0.123456789012345",
        "1 2 1234567890123456",
        "1 2 000000000000007",
        "50 60 -000000000.00001",
        "0000050 0000060 3.5",
        "00000050 60 3.5",
        "1 2 .",
        "1 2 -.",
        "1.5 2 33",
        "1 2.5 33",
        ".1 2 33",
        "1 2 3.\r",
        "1 2 3 5",
        "1 2 3 .5",
        "1  3",
        "1 2 ",
        " 1 2",
        "1 2 33333333333333333333",
        "0000000000000000000000000000000001 2 3",
        "1 2 -12345.67890",
    };
    for (size_t k = 0; k < WAYS * sizeof lines / sizeof lines[0]; k++) {
        struct way way = ways[k % WAYS];
        fescue_table *table[2];
        char text[256], sentence[256] = "";
        fescue_status status[2];
        way_take(&way);
        for (int remark = 0; remark < 2; remark++) {
            int length = snprintf(text, sizeof text,
                                  "%%%%MatrixMarket matrix coordinate real general\n50 60 4\n48 58 1.25\n%s\n"
                                  "49 59 -0.5\n50 60 7\n%s",
                                  lines[k / WAYS], remark ? "% remark\n" : "");
            fescue_failure_clear(bench->context);
            status[remark] = bytes_read(bench, text, (size_t)length, &way.reading, &table[remark]);
            if (remark == 0 && status[0] != FESCUE_OK)
                snprintf(sentence, sizeof sentence, "%s", fescue_failure_text(bench->context));
        }
        assert_int_equal(status[0], status[1]);
        if (status[0] == FESCUE_OK)
            tables_equal(table[0], table[1]);
        else
            assert_string_equal(sentence, fescue_failure_text(bench->context));
        table_destroy(&table[0]), table_destroy(&table[1]);
    }
    way_take(&ways[0]);
}

/* Values of 1 to 17 digits with the point anywhere, in lines of every length: to the bit what strtod reads. */
static void values_are_those_of_strtod(void **state)
{
    struct bench *bench = bench_of(state);
    enum { VALUES = 40000 };
    char *text = NULL, (*written)[32] = malloc(VALUES * sizeof *written);
    size_t length;
    FILE *out = open_memstream(&text, &length);
    struct random_stream stream = random_open(seed, RANDOM_TEST, 3);
    fprintf(out, "%%%%MatrixMarket matrix coordinate real general\n%d 1234567 %d\n", VALUES, VALUES);
    for (uint64_t k = 0; k < VALUES; k++) {
        char *at = written[k];
        uint64_t digits = 1 + random_below(&stream, 17), point = random_below(&stream, digits + 2);
        if (random_below(&stream, 3) == 0)
            *at++ = '-';
        for (uint64_t d = 0; d < digits; d++) {
            if (d == point)
                *at++ = '.';
            *at++ = (char)('0' + random_below(&stream, 10));
        }
        *at = '\0';
        fprintf(out, "%" PRIu64 " %" PRIu64 " %s\n", k + 1, 1 + random_below(&stream, 10) * (k % 123456), written[k]);
    }
    fclose(out);
    for (size_t w = 0; w < WAYS; w++) {
        fescue_table *table = NULL;
        way_take(&ways[w]);
        assert_status(bench->context, bytes_read(bench, text, length, &ways[w].reading, &table), FESCUE_OK);
        for (uint64_t k = 0; k < VALUES; k++) {
            double read = cells_value(&table->cells, &table->cells.by_row, k), expected = strtod(written[k], NULL);
            if (ways[w].reading.precision == FESCUE_SINGLE)
                expected = (double)(float)expected;
            assert_memory_equal(&read, &expected, sizeof read);
        }
        table_destroy(&table);
    }
    way_take(&ways[0]);
    free(text), free(written);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(every_layout_gives_the_same_table),
        BENCH_TEST(faults_are_told_with_their_line),
        BENCH_TEST(promises_are_held_to),
        BENCH_TEST(repeated_cells_are_told_with_both_lines),
        BENCH_TEST(what_comes_first_is_told),
        BENCH_TEST(arrays_keep_their_places),
        BENCH_TEST(a_remark_changes_nothing),
        BENCH_TEST(values_are_those_of_strtod),
    };
    return cmocka_run_group_tests_name("market_chunk", tests, NULL, NULL);
}
