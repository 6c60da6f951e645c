/* SPDX-License-Identifier: MIT
 *
 * Packed files: nothing is lost on the way, no damage goes unnoticed, and no file does harm, though its sums fit.
 */
#include "support_reader.h"
#include "table/pack_internal.h"

#include <errno.h>
#include <inttypes.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>

static const uint64_t seed = 20240811;

static uint64_t trials(void)
{
    const char *text = getenv("FESCUE_TRIALS");
    return text != NULL ? strtoull(text, NULL, 10) : 1500;
}

static const char *const tables[] = {
    "%%MatrixMarket matrix coordinate real general\n4 3 5\n3 1 1.50\n1 2 -2e3\n4 3 0\n1 1 7\n3 3 +1\n",
    "%%MatrixMarket matrix coordinate integer skew-symmetric\n3 3 2\n2 1 5\n3 2 -7\n",
    "%%MatrixMarket matrix array real general\n2 2\n1.25\nnan\n3\n-4.000\n",
    "t,a,b,c\nx,1,2.50,\ny,,1.000000000000000000001,0x\n", /* refused: replaced below */
    "time;north;south\n2024-01-01;1,5;2\n2024-01-02;;-3,250\n2024-01-03;7; 8\n",
    "who,what,n\nMere,amber,4.5\n\"North, fen\",\"a \"\"b\"\"\",3.00\nMere,rust,007\n\"\xc3\x84lv\",rust,1e2\n",
    "a\tx\t1\nb\tx\t2\na\ty\t4.0\na\tx\t3\n",
    "row,column,value,sd\na,x,1.0,0.5\nb,x,2,1\nb,y,3,0.25\n",
};
enum { TABLES = sizeof tables / sizeof tables[0] };

static const char *table_text(size_t k)
{
    return k == 3 ? "t,a,b,c\nx,1,2.50,\ny,,1.000000000000000000001,00.5\n" : tables[k];
}

static fescue_table *table_open(struct bench *bench, size_t k, enum fescue_precision precision)
{
    const struct table_reading reading = {.precision = precision, .duplicates = FESCUE_DUPLICATES_LAST};
    return text_read(bench, table_text(k), &reading);
}

static const char *pack_put(struct bench *bench, const fescue_table *table, char path[PATH_SIZE])
{
    assert_status(bench->context, table_pack(table, path_in(bench->folder, "pack", path)), FESCUE_OK);
    return path;
}

/* ---- nothing is lost -------------------------------------------------------------------------------------------- */

static void texts_equal(const char *a, const char *b)
{
    assert_int_equal(a == NULL, b == NULL);
    if (a != NULL)
        assert_string_equal(a, b);
}

static void labels_equal(const struct labels *a, const struct labels *b)
{
    assert_int_equal(a->count, b->count);
    assert_int_equal(a->text == NULL, b->text == NULL);
    for (uint32_t i = 0; a->text != NULL && i < a->count; i++)
        assert_string_equal(a->text[i], b->text[i]);
}

static void values_equal(const fescue_table *a, const fescue_table *b)
{
    assert_int_equal(a->texts == NULL, b->texts == NULL);
    for (uint64_t k = 0; a->texts != NULL && k < a->cells.count; k++) {
        char buffer[2][32];
        size_t length[2];
        const char *left = texts_of(a->texts, &a->cells, k, buffer[0], &length[0]);
        const char *right = texts_of(b->texts, &b->cells, k, buffer[1], &length[1]);
        assert_int_equal(length[0], length[1]);
        assert_memory_equal(left, right, length[0]);
    }
}

static void all_equal(const fescue_table *a, const fescue_table *b)
{
    tables_equal(a, b);
    labels_equal(&a->row_labels, &b->row_labels);
    labels_equal(&a->column_labels, &b->column_labels);
    values_equal(a, b);
    assert_int_equal(a->look.shape, b->look.shape);
    assert_int_equal(a->look.separator, b->look.separator);
    assert_int_equal(a->look.decimal, b->look.decimal);
    texts_equal(a->look.corner, b->look.corner);
    texts_equal(a->look.row_title, b->look.row_title);
    texts_equal(a->look.column_title, b->look.column_title);
    texts_equal(a->look.value_title, b->look.value_title);
    assert_int_equal(a->duplicates, b->duplicates);
    texts_equal(a->weights.rows, b->weights.rows);
    texts_equal(a->weights.columns, b->weights.columns);
    assert_int_equal(a->weights.of_cells, b->weights.of_cells);
    assert_true(a->weights.least == b->weights.least && a->weights.most == b->weights.most);
    assert_int_equal(a->cells.by_row.weight == NULL, b->cells.by_row.weight == NULL);
    for (uint64_t k = 0; a->cells.by_row.weight != NULL && k < a->cells.count; k++) {
        assert_true(a->cells.by_row.weight[k] == b->cells.by_row.weight[k]);
        assert_true(a->cells.by_column.weight[k] == b->cells.by_column.weight[k]);
    }
    assert_int_equal(a->input_crc32, b->input_crc32);
    assert_int_equal(a->input_bytes, b->input_bytes);
    assert_int_equal(a->cells.by_row.blocks, b->cells.by_row.blocks);
    assert_int_equal(a->cells.by_column.blocks, b->cells.by_column.blocks);
}

/* Through a pipe, where nothing can be mapped. */
static fescue_status piped_read(struct bench *bench, const char *bytes, size_t count, fescue_table **table)
{
    const struct table_reading reading = {0};
    int ends[2];
    char path[PATH_SIZE];
    assert_int_equal(pipe(ends), 0);
    assert_int_equal(write(ends[1], bytes, count), count);
    close(ends[1]);
    snprintf(path, sizeof path, "/dev/fd/%d", ends[0]);
    fescue_status status = table_read(bench->context, path, &reading, table);
    close(ends[0]);
    return status;
}

static void what_was_packed_comes_back(void **state)
{
    struct bench *bench = bench_of(state);
    for (size_t k = 0; k < TABLES; k++)
        for (int precision = FESCUE_DOUBLE; precision <= FESCUE_SINGLE; precision++) {
            const struct table_reading reading = {.precision = (enum fescue_precision)precision};
            char path[PATH_SIZE], again[PATH_SIZE];
            size_t count, repacked_count;
            assert_status(bench->context, team_resize(bench->context, 1 + k % 3), FESCUE_OK);
            fescue_table *table = table_open(bench, k, reading.precision), *back;
            pack_put(bench, table, path);
            assert_status(bench->context, table_read(bench->context, path, &reading, &back), FESCUE_OK);
            all_equal(table, back);
            assert_string_equal(back->packed_from, table->path);
            assert_status(bench->context, table_pack(back, path_in(bench->folder, "again", again)), FESCUE_OK);
            char *bytes = file_get(path, &count), *repacked = file_get(again, &repacked_count);
            assert_int_equal(count, repacked_count);
            assert_memory_equal(bytes, repacked, count);
            table_destroy(&back);
            if (precision == FESCUE_DOUBLE) {
                assert_status(bench->context, piped_read(bench, bytes, count, &back), FESCUE_OK);
                all_equal(table, back);
                table_destroy(&back);
                char *packed = NULL;
                size_t packed_count = 0;
                gzip_append(&packed, &packed_count, bytes, count);
                assert_status(bench->context, bytes_read(bench, packed, packed_count, NULL, &back), FESCUE_OK);
                all_equal(table, back);
                table_destroy(&back);
                free(packed);
            }
            free(bytes), free(repacked);
            table_destroy(&table);
        }
}

/* Large enough for several sums and, without texts, for a table that is too large for them. */
static fescue_table *large_table(struct bench *bench)
{
    enum { ROWS = 3000, COLUMNS = 9000, CELLS = 200000 };
    uint32_t *row = malloc(CELLS * sizeof *row), *column = malloc(CELLS * sizeof *column);
    double *value = malloc(CELLS * sizeof *value);
    fescue_table *table;
    for (uint32_t k = 0; k < CELLS; k++) {
        row[k] = k % ROWS;
        column[k] = (uint32_t)(k / ROWS * 131 + k % 97) % COLUMNS;
        value[k] = random_uniform_at(seed, RANDOM_TEST, 1, k) - 0.5;
    }
    assert_status(bench->context,
                  table_from_triplets(bench->context, ROWS, COLUMNS, CELLS, row, column, value, FESCUE_DOUBLE, &table),
                  FESCUE_OK);
    free(row), free(column), free(value);
    return table;
}

static void large_tables_come_back(void **state)
{
    struct bench *bench = bench_of(state);
    const struct table_reading reading = {.precision = FESCUE_DOUBLE};
    fescue_table *table = large_table(bench), *back;
    char path[PATH_SIZE];
    pack_put(bench, table, path);
    for (size_t workers = 1; workers <= 4; workers++) {
        setenv("FESCUE_KERNEL", workers == 2 ? "portable" : workers == 3 ? "avx2" : "", 1);
        assert_status(bench->context, team_resize(bench->context, workers), FESCUE_OK);
        assert_status(bench->context, table_read(bench->context, path, &reading, &back), FESCUE_OK);
        all_equal(table, back);
        table_destroy(&back);
    }
    setenv("FESCUE_KERNEL", "", 1);
    table_destroy(&table);
}

/* ---- damage ----------------------------------------------------------------------------------------------------- */

/* Whether the bytes are refused with one sentence. */
static bool is_refused(struct bench *bench, const char *bytes, size_t count)
{
    char path[PATH_SIZE];
    fescue_table *table;
    fescue_status status = bytes_read(bench, bytes, count, NULL, &table);
    const char *sentence = fescue_failure_text(bench->context);
    bool refused = status == FESCUE_BAD_DATA && table == NULL && strchr(sentence, '\n') == NULL &&
                   strncmp(sentence, path_in(bench->folder, "input", path), strlen(path)) == 0;
    table_destroy(&table);
    return refused && fescue_memory_usage(bench->context).blocks == 0;
}

static char *pack_make(struct bench *bench, size_t k, size_t *count)
{
    char path[PATH_SIZE];
    fescue_table *table = table_open(bench, k, FESCUE_DOUBLE);
    pack_put(bench, table, path);
    table_destroy(&table);
    return file_get(path, count);
}

static void no_changed_byte_goes_unnoticed(void **state)
{
    struct bench *bench = bench_of(state);
    struct random_stream stream = random_open(seed, RANDOM_TEST, 2);
    size_t count;
    char *bytes = pack_make(bench, 5, &count);
    for (size_t k = 0; k < count; k++) {
        char was = bytes[k];
        bytes[k] = (char)(was ^ (1 << random_below(&stream, 8)));
        assert_true(is_refused(bench, bytes, count));
        bytes[k] = was;
    }
    for (uint64_t n = trials() / 10; n > 0; n--) { /* several at once */
        char *copy = malloc(count);
        memcpy(copy, bytes, count);
        for (uint64_t changes = 2 + random_below(&stream, 8); changes > 0; changes--)
            copy[random_below(&stream, count)] ^= (char)(1 + random_below(&stream, 255));
        assert_true(is_refused(bench, copy, count) || memcmp(copy, bytes, count) == 0);
        free(copy);
    }
    free(bytes);
}

/* Every part of a pack of many sums, its first and last bytes and some between; by the number of the block. */
static void damage_is_told_with_its_place(void **state)
{
    struct bench *bench = bench_of(state);
    struct random_stream stream = random_open(seed, RANDOM_TEST, 5);
    struct pack_header header;
    struct pack_places places;
    size_t count;
    char path[PATH_SIZE], sentence[128], *bytes;
    fescue_table *table = large_table(bench);
    pack_put(bench, table, path);
    table_destroy(&table);
    bytes = file_get(path, &count);
    memcpy(&header, bytes, sizeof header);
    assert_true(pack_places_find(&header, &places));
    for (int n = 0; n < 4 * PACK_PARTS; n++) {
        const uint64_t size = header.part_bytes[n / 4];
        if (size == 0)
            continue;
        uint64_t at = n % 4 == 0 ? 0 : n % 4 == 1 ? size - 1 : random_below(&stream, size);
        at += places.part[n / 4];
        uint64_t first = PACK_HEADER + (at - PACK_HEADER) / PACK_BLOCK * PACK_BLOCK, end = first + PACK_BLOCK;
        snprintf(sentence, sizeof sentence,
                 "the pack is damaged: bytes %" PRIu64 " to %" PRIu64 " are not what was written", first,
                 (end < places.end ? end : places.end) - 1);
        char was = bytes[at];
        bytes[at] = (char)(was ^ (1 << random_below(&stream, 8)));
        assert_status(bench->context, team_resize(bench->context, 1 + (size_t)n % 3), FESCUE_OK);
        setenv("FESCUE_KERNEL", n % 2 == 0 ? "" : "portable", 1);
        bytes_refused(bench, bytes, count, NULL, sentence);
        bytes[at] = was;
    }
    setenv("FESCUE_KERNEL", "", 1);
    free(bytes);
}

static void no_other_length_is_taken(void **state)
{
    struct bench *bench = bench_of(state);
    size_t count;
    char *bytes = pack_make(bench, 0, &count);
    bytes = realloc(bytes, count + 9);
    memset(bytes + count, 0, 9);
    for (size_t k = 1; k < count + 9; k++)
        assert_true(k == count || is_refused(bench, bytes, k));
    free(bytes);
}

/* The sum alone, where flipped signs, swapped words and moved bytes would cancel in a weaker one. */
static void the_sum_sees_what_cancels(void **state)
{
    enum { WORDS = 512 };
    static uint64_t words[WORDS], copy[WORDS];
    struct random_stream stream = random_open(seed, RANDOM_TEST, 3);
    (void)state;
    for (int k = 0; k < WORDS; k++)
        words[k] = random_bits(&stream);
    uint64_t sum = pack_sum(words, sizeof words, VECTORS_NONE);
    for (int a = 0; a < WORDS; a += 3)
        for (int b = a + 1; b < WORDS && b < a + 40; b++) {
            memcpy(copy, words, sizeof words);
            copy[a] ^= UINT64_C(1) << 63, copy[b] ^= UINT64_C(1) << 63;
            assert_true(pack_sum(copy, sizeof copy, VECTORS_NONE) != sum);
            memcpy(copy, words, sizeof words);
            copy[a] = words[b], copy[b] = words[a];
            assert_true(pack_sum(copy, sizeof copy, VECTORS_NONE) != sum);
            copy[a] = words[a] + 1, copy[b] = words[b] - 1;
            assert_true(pack_sum(copy, sizeof copy, VECTORS_NONE) != sum);
        }
    memset(words, 0, sizeof words);
    for (size_t count = 1; count < sizeof words; count++) /* of zeros, how many there are */
        assert_true(pack_sum(words, count, VECTORS_NONE) != pack_sum(words, count - 1, VECTORS_NONE));
}

/* ---- made by hand ------------------------------------------------------------------------------------------------ */

/* Makes all sums fit. */
static void sums_mend(char *bytes, size_t count)
{
    struct pack_header header;
    struct pack_places places;
    memcpy(&header, bytes, sizeof header);
    header.sum = pack_sum(&header, offsetof(struct pack_header, sum), VECTORS_NONE);
    memcpy(bytes, &header, sizeof header);
    if (!pack_places_find(&header, &places) || places.file_bytes != count)
        return;
    for (uint64_t k = 0; k < places.blocks; k++) {
        uint64_t first = PACK_HEADER + k * PACK_BLOCK, rest = places.end - first, sum;
        sum = pack_sum(bytes + first, rest < PACK_BLOCK ? rest : PACK_BLOCK, VECTORS_NONE);
        memcpy(bytes + places.sums + k * sizeof sum, &sum, sizeof sum);
    }
    uint64_t sum = pack_sum(bytes + places.sums, places.blocks * sizeof sum, VECTORS_NONE);
    memcpy(bytes + places.sums + places.blocks * sizeof sum, &sum, sizeof sum);
}

static void word_draw(struct random_stream *stream, char *bytes, size_t count)
{
    static const uint64_t words[] = {0, 1, 2, 3, 4, 5, 7, 64, UINT32_MAX, UINT64_MAX, UINT64_C(1) << 63};
    size_t size = random_below(stream, 2) == 0 ? 4 : 8, at = random_below(stream, count - 8) / size * size;
    uint64_t word = words[random_below(stream, sizeof words / sizeof words[0])];
    if (random_below(stream, 3) == 0)
        bytes[random_below(stream, count)] = (char)random_below(stream, 256);
    else
        memcpy(bytes + at, &word, size);
}

static void hostile_packs_do_no_harm(void **state)
{
    struct bench *bench = bench_of(state);
    struct random_stream stream = random_open(seed, RANDOM_TEST, 4);
    uint64_t taken = 0;
    memory_limit_set(bench->context, 50000000);
    for (uint64_t n = 0; n < trials(); n++) {
        size_t count;
        char *bytes = pack_make(bench, n % TABLES, &count);
        for (uint64_t changes = 1 + random_below(&stream, 2); changes > 0; changes--)
            word_draw(&stream, bytes, random_below(&stream, 3) == 0 ? sizeof(struct pack_header) : count);
        sums_mend(bytes, count);
        fescue_table *table;
        fescue_status status = bytes_read(bench, bytes, count, NULL, &table);
        bool sound =
            status == FESCUE_OK ? table_is_sound(table) : status == FESCUE_BAD_DATA || status == FESCUE_NO_MEMORY;
        if (!sound)
            print_error("seed %" PRIu64 ", trial %" PRIu64 ": %s\n", seed, n, fescue_failure_text(bench->context));
        assert_true(sound);
        taken += status == FESCUE_OK;
        table_destroy(&table);
        free(bytes);
    }
    assert_true(taken > 0 && taken < trials());
}

/* Sums and checks by all vectors of this machine are the same, for every length of a line. */
static void vectors_make_no_difference(void **state)
{
    enum { LINES = 40, MOST = 64 * LINES };
    static unsigned char bytes[5000];
    static uint64_t start[LINES + 1];
    static uint32_t across[MOST];
    static double value[MOST];
    struct random_stream stream = random_open(seed, RANDOM_TEST, 6);
    const enum vectors best = vectors_choose();
    (void)state;
    for (size_t k = 0; k < sizeof bytes; k++)
        bytes[k] = (unsigned char)random_below(&stream, 256);
    for (size_t count = 0; count < sizeof bytes; count += 1 + count / 9)
        assert_true(pack_sum(bytes, count, VECTORS_NONE) == pack_sum(bytes, count, best));
    for (uint32_t i = 0; i < LINES; i++) { /* of i cells each */
        start[i + 1] = start[i] + i;
        for (uint32_t j = 0; j < i; j++) {
            across[start[i] + j] = 7 * j + (uint32_t)random_below(&stream, 7);
            value[start[i] + j] = random_uniform(&stream) - 0.5;
        }
    }
    struct half half = {.lines = LINES, .length = 7 * LINES, .start = start, .across = across, .value = value};
    const struct pack_key key = {random_bits(&stream), {random_bits(&stream) | 1, random_bits(&stream) | 1, 5}};
    for (int n = 0; n < 2 * FESCUE_SINGLE + 2; n++) {
        const struct pack_lines lines = {&half, n / 2 ? FESCUE_SINGLE : FESCUE_DOUBLE, n % 2, 0, LINES, &key};
        uint64_t sums[2];
        for (uint64_t k = 0; n / 2 && n % 2 == 0 && k < start[LINES]; k++)
            ((float *)(void *)value)[k] = (float)value[k];
        assert_true(pack_lines_look(&lines, VECTORS_NONE, &sums[0]) && pack_lines_look(&lines, best, &sums[1]));
        assert_true(sums[0] == sums[1]);
    }
    for (uint64_t k = 0; k < start[LINES]; k++) { /* any one cell out of order, outside or not finite */
        const struct pack_lines lines = {&half, FESCUE_SINGLE, false, 0, LINES, &key};
        const uint32_t was = across[k];
        const float number = ((float *)(void *)value)[k];
        uint64_t sum;
        across[k] = UINT32_MAX - 1;
        assert_true(!pack_lines_look(&lines, VECTORS_NONE, &sum) && !pack_lines_look(&lines, best, &sum));
        across[k] = 7 * LINES; /* the length itself: outside, or not below the next one */
        assert_true(!pack_lines_look(&lines, VECTORS_NONE, &sum) && !pack_lines_look(&lines, best, &sum));
        across[k] = was;
        ((float *)(void *)value)[k] = k % 2 ? INFINITY : NAN;
        assert_true(!pack_lines_look(&lines, VECTORS_NONE, &sum) && !pack_lines_look(&lines, best, &sum));
        ((float *)(void *)value)[k] = number;
    }
}

static void word_flip(char *bytes, uint64_t at, uint64_t bits)
{
    uint64_t word;
    memcpy(&word, bytes + at, sizeof word);
    word ^= bits;
    memcpy(bytes + at, &word, sizeof word);
}

/* Rows and columns that are each a table, and not the same one: a pattern that differs; a value; its sign; the signs of
   two; two values of one column, or of two, that change places. */
static void directions_that_differ_are_refused(void **state)
{
    struct bench *bench = bench_of(state);
    enum { WAYS = 6, KEYS = 8 };
    const uint64_t sign = UINT64_C(1) << 63;
    for (int n = 0; n < WAYS * KEYS; n++) {
        const int way = n % WAYS;
        struct pack_header header;
        struct pack_places places;
        size_t count;
        char *bytes = pack_make(bench, 0, &count);
        memcpy(&header, bytes, sizeof header);
        assert_true(pack_places_find(&header, &places));
        uint32_t row = 1; /* of the second column's only cell, which is in row 0 */
        double value = 1;
        const uint64_t values = places.part[PACK_COLUMN_VALUE];
        uint64_t words[5];
        memcpy(words, bytes + values, sizeof words); /* 7 and 1.5 in the first column, -2e3, 1 and 0 in the third */
        setenv("FESCUE_KERNEL", n % 4 == 0 ? "portable" : "", 1);
        if (way == 0)
            memcpy(bytes + places.part[PACK_COLUMN_ACROSS] + 2 * sizeof row, &row, sizeof row);
        else if (way == 1)
            memcpy(bytes + values, &value, sizeof value);
        else if (way <= 3)
            word_flip(bytes, values, sign);
        else
            word_flip(bytes, values, words[0] ^ words[way == 4 ? 1 : 2]);
        if (way >= 3)
            word_flip(bytes, values + (way == 5 ? 2 : 1) * sizeof value,
                      way == 3 ? sign : words[0] ^ words[way == 4 ? 1 : 2]);
        sums_mend(bytes, count);
        bytes_refused(bench, bytes, count, NULL,
                      "the pack is malformed: its rows and its columns hold different cells");
        free(bytes);
    }
    setenv("FESCUE_KERNEL", "", 1);
}

static void strangers_are_told(void **state)
{
    struct bench *bench = bench_of(state);
    const struct table_reading single = {.precision = FESCUE_SINGLE}, wide = {.format = FESCUE_FORMAT_WIDE};
    struct pack_header header;
    size_t count;
    char *bytes = pack_make(bench, 0, &count), *copy = malloc(count), sentence[2 * PATH_SIZE];
    memcpy(&header, bytes, sizeof header);
    memcpy(copy, bytes, count);
    struct pack_header other = header;
    other.byte_order = __builtin_bswap32(header.byte_order);
    memcpy(copy, &other, sizeof other);
    bytes_refused(bench, copy, count, NULL,
                  "the pack was written by a machine of the other byte order; pack the table again on this one");
    other = header;
    other.version = 7;
    memcpy(copy, &other, sizeof other);
    bytes_refused(bench, copy, count, NULL,
                  "the pack has version 7, this program reads version 2; pack the table again");
    bytes_refused(bench, bytes, 300, NULL, "the pack is truncated after 300 bytes");
    snprintf(sentence, sizeof sentence,
             "the pack has %zu bytes, its header tells of %zu: it is truncated or something follows", count - 1, count);
    bytes_refused(bench, bytes, count - 1, NULL, sentence);
    bytes_refused(bench, bytes, count, &single,
                  "the pack holds values in double precision; read it with --precision double, or pack the table again "
                  "with --precision single");
    bytes_refused(bench, bytes, count, &wide, "a packed table was found, but --format asks for a text");
    bytes[PACK_HEADER + 3] ^= 1;
    bytes_refused(bench, bytes, count, NULL, "the pack is damaged: bytes 512 to 1087 are not what was written");
    free(bytes), free(copy);
}

/* ---- faults ----------------------------------------------------------------------------------------------------- */

static void every_fault_of_reading_is_met(void **state)
{
    struct bench *bench = bench_of(state);
    static const struct {
        enum fault_kind kind;
        fescue_status expected;
    } faults[] = {{FAULT_TAKE, FESCUE_NO_MEMORY}, {FAULT_OPEN, FESCUE_NO_INPUT}, {FAULT_READ, FESCUE_NO_INPUT},
                  {FAULT_SHORT_READ, FESCUE_OK},  {FAULT_MAP, FESCUE_OK},        {FAULT_SIZE, FESCUE_OK}};
    size_t count;
    char *bytes = pack_make(bench, 5, &count);
    for (size_t f = 0; f < sizeof faults / sizeof faults[0]; f++)
        for (uint64_t nth = 1;; nth++) {
            fescue_table *table;
            fault_plan(faults[f].kind, nth, false, EIO);
            fescue_status status = bytes_read(bench, bytes, count, NULL, &table);
            bool met = fault_met();
            fault_clear();
            assert_status(bench->context, status, met ? faults[f].expected : FESCUE_OK);
            table_destroy(&table);
            assert_no_leak(bench->context);
            if (!met)
                break;
        }
    free(bytes);
}

static void every_fault_of_writing_leaves_nothing(void **state)
{
    struct bench *bench = bench_of(state);
    static const struct {
        enum fault_kind kind;
        unsigned allowed; /* bit by status */
    } faults[] = {{FAULT_TAKE, 1u << FESCUE_NO_MEMORY},
                  {FAULT_OPEN, 1u << FESCUE_CANNOT_CREATE | 1u << FESCUE_OK}, /* a folder opened to flush it */
                  {FAULT_WRITE, 1u << FESCUE_CANNOT_WRITE},
                  {FAULT_SYNC, 1u << FESCUE_CANNOT_WRITE | 1u << FESCUE_CANNOT_CREATE},
                  {FAULT_RENAME, 1u << FESCUE_CANNOT_WRITE},
                  {FAULT_SHORT_WRITE, 1u << FESCUE_OK}};
    char folder[PATH_SIZE], path[PATH_SIZE];
    fescue_table *table = table_open(bench, 5, FESCUE_DOUBLE);
    path_in(path_in(bench->folder, "packs", folder), "pack", path);
    for (size_t f = 0; f < sizeof faults / sizeof faults[0]; f++)
        for (uint64_t nth = 1;; nth++) {
            fescue_failure_clear(bench->context);
            if (file_exists(folder))
                folder_remove(folder);
            fault_plan(faults[f].kind, nth, false, ENOSPC);
            fescue_status status = table_pack(table, path);
            bool met = fault_met();
            fault_clear();
            assert_true(met ? (faults[f].allowed >> status & 1) != 0 : status == FESCUE_OK);
            assert_int_equal(folder_count(folder), status == FESCUE_OK);
            if (!met)
                break;
        }
    table_destroy(&table);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(what_was_packed_comes_back),         BENCH_TEST(large_tables_come_back),
        BENCH_TEST(no_changed_byte_goes_unnoticed),     BENCH_TEST(damage_is_told_with_its_place),
        BENCH_TEST(no_other_length_is_taken),           cmocka_unit_test(the_sum_sees_what_cancels),
        BENCH_TEST(hostile_packs_do_no_harm),           BENCH_TEST(vectors_make_no_difference),
        BENCH_TEST(directions_that_differ_are_refused), BENCH_TEST(strangers_are_told),
        BENCH_TEST(every_fault_of_reading_is_met),      BENCH_TEST(every_fault_of_writing_leaves_nothing),
    };
    return cmocka_run_group_tests_name("pack", tests, NULL, NULL);
}
