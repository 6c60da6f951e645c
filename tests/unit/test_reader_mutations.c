/* SPDX-License-Identifier: MIT
 *
 * Input is hostile until parsed: thousands of small files, each a good one with a few bytes changed, go through
 * table_read under a memory limit. Whatever they hold, the status is one of three, the sentence is one line that begins
 * with the path, nothing leaks, and a table that comes out is sound. Same seed, same files: a failure prints both
 * numbers that make it again. FESCUE_TRIALS is the number of files of each kind.
 */
#include "support_reader.h"

#include <inttypes.h>
#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

static const uint64_t seed = 5;

/* More than a small file can need, little enough that a header which is believed too soon is found out. */
enum { MEMORY_LIMIT = 1 << 26, INPUT_MOST = 4096 };

static const char *const good[] = {
    "%%MatrixMarket matrix coordinate real general\n% w\n4 5 5\n1 1 2.50\n4 5 -1e3\n2 2 +7\n3 1 0\n1 5 .5\n",
    "%%MatrixMarket matrix coordinate integer symmetric\n4 4 4\n1 1 2\n4 2 -1\n3 3 7\n4 3 0\n",
    "%%MatrixMarket matrix coordinate real skew-symmetric\r\n3 3 2\r\n2 1 1.5\r\n3 2 -2\r\n",
    "%%MatrixMarket matrix array real general\n3 2\n1\nnan\n3\n4e-2\nNaN\n6\n",
    "%%MatrixMarket matrix array real symmetric\n2 2\n1\n2\n3\n",
    "time,W1,W2,W3\n2024-03-01T00:00,12.50,,-3\n2024-03-01T01:00,NA,1e2,NaN\n\"2024,\"\"x\"\"\",null,1,\n",
    "\xef\xbb\xbf;A;B\r\nr1;1,5;2\r\nr2;;\"3,25\"\r\n",
    "row\tcolumn\tvalue\nAda\tRusset\t7.5\nBea\tRusset\t6\nAda\tKing's\t8.0\nBea\tKing's\tNA\n",
    "a,x,1\n\"b\nb\",x,2\na,y,3\na,x,4\n",
    "well,day,level,sd\na,x,1,0.5\nb,x,2,1\na,y,NA,\nb,y,4,2e-1\n",
    "t,a,b,c\n2024-10-27T02:00,1,2,3\n2024-10-27T02:00,1,2,\n2024-10-27T03:00Z,4,,6\n",
};
enum { GOOD = sizeof good / sizeof good[0] };

/* Pieces that have a meaning somewhere. */
static const struct {
    const char *bytes;
    size_t count;
} pieces[] = {
#define PIECE(text)                                                                                                    \
    {                                                                                                                  \
        text, sizeof text - 1                                                                                          \
    }
    PIECE("\n"),
    PIECE("\r\n"),
    PIECE("\r"),
    PIECE("\""),
    PIECE("\"\""),
    PIECE(","),
    PIECE(";"),
    PIECE("\t"),
    PIECE(" "),
    PIECE("%"),
    PIECE("%%"),
    PIECE("\0"),
    PIECE("nan"),
    PIECE("NA"),
    PIECE("inf"),
    PIECE("-"),
    PIECE("+"),
    PIECE("."),
    PIECE("e"),
    PIECE("e999"),
    PIECE("e-999"),
    PIECE("0"),
    PIECE("00000"),
    PIECE("1"),
    PIECE("4294967294"),
    PIECE("4294967295"),
    PIECE("4294967296"),
    PIECE("18446744073709551615"),
    PIECE("18446744073709551616"),
    PIECE("9223372036854775807"),
    PIECE("99999999999999999999999999"),
    PIECE("4000000 4000000 7\n"),
    PIECE("1 1 1\n"),
    PIECE("array"),
    PIECE("complex"),
    PIECE("pattern"),
    PIECE("symmetric"),
    PIECE("\xef\xbb\xbf"),
    PIECE("\xff\xfe"),
    PIECE("\x1f\x8b"),
    PIECE("\xc3\xa9"),
    PIECE("\xc3"),
    PIECE("\xed\xa0\x80"),
    PIECE("1,5"),
    PIECE("1.500"),
    PIECE("PK\x03\x04"),
    PIECE("weight"),
    PIECE("value"),
    PIECE("3.14159265358979323846"),
#undef PIECE
};
enum { PIECES = sizeof pieces / sizeof pieces[0] };

struct input {
    char bytes[INPUT_MOST];
    size_t count;
};

static size_t place_draw(struct random_stream *stream, const struct input *input)
{
    return (size_t)random_below(stream, input->count + 1);
}

static void bytes_insert(struct input *input, size_t at, const char *bytes, size_t count)
{
    if (input->count + count > INPUT_MOST)
        return;
    memmove(input->bytes + at + count, input->bytes + at, input->count - at);
    memcpy(input->bytes + at, bytes, count);
    input->count += count;
}

static void bytes_remove(struct input *input, size_t from, size_t to)
{
    memmove(input->bytes + from, input->bytes + to, input->count - to);
    input->count -= to - from;
}

static void input_mutate(struct random_stream *stream, struct input *input)
{
    size_t a = place_draw(stream, input), b = place_draw(stream, input);
    size_t from = a < b ? a : b, to = a < b ? b : a;
    char copy[INPUT_MOST];
    if (to - from > 40)
        to = from + 40;
    switch (random_below(stream, 8)) {
    case 0: /* a bit */
        if (input->count > 0)
            input->bytes[a % input->count] ^= (char)(1 << random_below(stream, 8));
        break;
    case 1: /* a byte */
        if (input->count > 0)
            input->bytes[a % input->count] = (char)random_below(stream, 256);
        break;
    case 2:
        bytes_remove(input, from, to);
        break;
    case 3: /* a span again, elsewhere */
        memcpy(copy, input->bytes + from, to - from);
        bytes_insert(input, place_draw(stream, input), copy, to - from);
        break;
    case 4:
        if (random_below(stream, 4) == 0)
            input->count = a;
        break;
    default: {
        size_t piece = (size_t)random_below(stream, PIECES);
        bytes_insert(input, a, pieces[piece].bytes, pieces[piece].count);
    }
    }
}

static void mutations_draw(struct random_stream *stream, struct input *input)
{
    for (uint64_t n = 1 + random_below(stream, 5); n > 0; n--)
        input_mutate(stream, input);
}

/* ---- what must hold --------------------------------------------------------------------------------------------- */

static bool sentence_is_sound(const char *sentence, const char *path)
{
    return strncmp(sentence, path, strlen(path)) == 0 && sentence[strlen(path)] == ':' &&
           strchr(sentence, '\n') == NULL;
}

static bool trial_is_sound(struct bench *bench, const struct input *input, struct random_stream *stream)
{
    const struct table_reading reading = {.precision = (enum fescue_precision)random_below(stream, 2),
                                          .duplicates = (enum fescue_duplicates)random_below(stream, 4),
                                          .format = (enum fescue_format)random_below(stream, 4)};
    char path[PATH_SIZE];
    fescue_table *table;
    fescue_status status = bytes_read(bench, input->bytes, input->count, &reading, &table);
    bool sound;
    if (status == FESCUE_OK)
        sound = table != NULL && table_is_sound(table);
    else if (status == FESCUE_BAD_DATA)
        sound = table == NULL &&
                sentence_is_sound(fescue_failure_text(bench->context), path_in(bench->folder, "input", path));
    else
        sound = table == NULL && status == FESCUE_NO_MEMORY;
    table_destroy(&table);
    return sound && fescue_memory_usage(bench->context).blocks == 0;
}

static uint64_t trials(void)
{
    const char *text = getenv("FESCUE_TRIALS");
    return text != NULL ? strtoull(text, NULL, 10) : 400;
}

static void run_trials(struct bench *bench, bool is_gzip)
{
    memory_limit_set(bench->context, MEMORY_LIMIT);
    for (uint64_t n = 0; n < trials() * GOOD; n++) {
        struct random_stream stream = random_open(seed + n, RANDOM_TEST, is_gzip);
        struct input input = {.count = strlen(good[n % GOOD])};
        memcpy(input.bytes, good[n % GOOD], input.count);
        if (random_below(&stream, 50) > 0)
            mutations_draw(&stream, &input);
        if (is_gzip) {
            char *bytes = NULL;
            size_t count = 0, cut = place_draw(&stream, &input);
            gzip_append(&bytes, &count, input.bytes, cut);
            gzip_append(&bytes, &count, input.bytes + cut, input.count - cut);
            assert_true(count < INPUT_MOST);
            memcpy(input.bytes, bytes, count);
            input.count = count;
            free(bytes);
            if (random_below(&stream, 4) > 0)
                mutations_draw(&stream, &input);
        }
        bool sound = trial_is_sound(bench, &input, &stream);
        if (!sound)
            print_error("seed %" PRIu64 ", trial %" PRIu64 ": %s\n", seed, n, fescue_failure_text(bench->context));
        assert_true(sound);
    }
}

static void changed_texts_do_no_harm(void **state)
{
    run_trials(bench_of(state), false);
}

static void changed_gzip_files_do_no_harm(void **state)
{
    run_trials(bench_of(state), true);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(changed_texts_do_no_harm),
        BENCH_TEST(changed_gzip_files_do_no_harm),
    };
    return cmocka_run_group_tests_name("reader_mutations", tests, NULL, NULL);
}
