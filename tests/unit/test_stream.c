/* SPDX-License-Identifier: MIT
 *
 * Lines out of plain and gzip files: ends of lines, blocks, members, damage, and what is said about it.
 */
#include "support_reader.h"
#include "table/table_internal.h"

#include <errno.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <unistd.h>
#include <zlib.h>

/* All lines, each followed by "|" and how long its terminator was; the caller frees it. NULL after a failure. */
static char *lines_read(fescue_context *context, const char *path)
{
    struct stream *stream;
    char *text = NULL;
    size_t size;
    fescue_failure_clear(context);
    if (stream_open(context, path, &stream) != FESCUE_OK)
        return NULL;
    FILE *out = open_memstream(&text, &size);
    struct line line;
    fescue_status status;
    while ((status = stream_line(stream, &line)) == FESCUE_OK && line.text != NULL) {
        fwrite(line.text, 1, (size_t)(line.end - line.text), out);
        fprintf(out, "|%zu", line.terminator);
    }
    fclose(out);
    stream_close(&stream);
    if (status == FESCUE_OK)
        return text;
    free(text);
    return NULL;
}

static const char *input_put(struct bench *bench, const void *bytes, size_t count, char path[PATH_SIZE])
{
    file_put(path_in(bench->folder, "input", path), bytes, count);
    return path;
}

static void lines_check(struct bench *bench, const void *bytes, size_t count, const char *expected)
{
    char path[PATH_SIZE], *text = lines_read(bench->context, input_put(bench, bytes, count, path));
    if (text == NULL)
        print_error("%s\n", fescue_failure_text(bench->context));
    assert_non_null(text);
    assert_string_equal(text, expected);
    free(text);
}

/* Reading must fail with "PATH: " and the sentence. */
static void failure_check(struct bench *bench, const void *bytes, size_t count, const char *sentence)
{
    char path[PATH_SIZE], expected[2 * PATH_SIZE];
    snprintf(expected, sizeof expected, "%s: %s", input_put(bench, bytes, count, path), sentence);
    assert_null(lines_read(bench->context, path));
    assert_string_equal(fescue_failure_text(bench->context), expected);
    assert_no_leak(bench->context);
}

static void lines_end_as_they_like(void **state)
{
    struct bench *bench = bench_of(state);
    static const char *const cases[][2] = {
        {"a\nb\n", "a|1b|1"},
        {"a\nb", "a|1b|0"},
        {"a\r\nb\r\n", "a|2b|2"},
        {"a\r\nb\r", "a|2b|1"},
        {"\n\na", "|1|1a|0"},
        {"\r\n", "|2"},
        {"a\rb\n", "a\rb|1"},
        {"\xef\xbb\xbf"
         "a\nb",
         "a|1b|0"},
        {"\xef\xbb\xbf", ""},
        {"a\xef\xbb\xbf\n", "a\xef\xbb\xbf|1"},
    };
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++)
        lines_check(bench, cases[k][0], strlen(cases[k][0]), cases[k][1]);
}

/* A text of lines of all lengths, some longer than the buffer at first is, and what lines_read makes of it. */
static char *long_text(size_t *length, char **expected)
{
    static const size_t lengths[] = {0,  1, 70000,  3, (1 << 20) - 1, 1 << 20, 5, (1 << 20) + 1, 3000000,
                                     12, 0, 262144, 7};
    char *text = NULL;
    size_t size;
    FILE *out = open_memstream(&text, length), *shown = open_memstream(expected, &size);
    for (size_t k = 0; k < sizeof lengths / sizeof lengths[0]; k++) {
        for (size_t i = 0; i < lengths[k]; i++) {
            int c = 'a' + (int)((i * 7 + k + i / 1000) % 26);
            fputc(c, out), fputc(c, shown);
        }
        fputc('\n', out), fputs("|1", shown);
    }
    fclose(out), fclose(shown);
    return text;
}

static void lines_cross_blocks(void **state)
{
    struct bench *bench = bench_of(state);
    char *expected, *bytes = NULL;
    size_t length, count = 0;
    char *text = long_text(&length, &expected);
    lines_check(bench, text, length, expected);
    gzip_append(&bytes, &count, text, length);
    lines_check(bench, bytes, count, expected);
    free(bytes), free(text), free(expected);
}

/* Every byte in a read of its own, as from a slow pipe. */
static void short_reads_change_nothing(void **state)
{
    struct bench *bench = bench_of(state);
    static const char text[] = "\xef\xbb\xbf"
                               "well,A,B\r\n1,2,3\r\n4,5,6";
    char path[PATH_SIZE], *bytes = NULL;
    size_t count = 0;
    gzip_append(&bytes, &count, text, sizeof text - 1);
    for (int is_gzip = 0; is_gzip < 2; is_gzip++) {
        int ends[2];
        assert_int_equal(pipe(ends), 0);
        size_t total = is_gzip ? count : sizeof text - 1;
        assert_int_equal(write(ends[1], is_gzip ? bytes : text, total), total);
        close(ends[1]);
        fault_plan(FAULT_SHORT_READ, 1, true, 0);
        snprintf(path, sizeof path, "/dev/fd/%d", ends[0]);
        char *lines = lines_read(bench->context, path);
        assert_true(fault_met());
        fault_clear();
        assert_non_null(lines);
        assert_string_equal(lines, "well,A,B|21,2,3|24,5,6|0");
        free(lines);
        close(ends[0]);
    }
    free(bytes);
}

static void members_follow_one_another(void **state)
{
    struct bench *bench = bench_of(state);
    char *bytes = NULL;
    size_t count = 0;
    gzip_append(&bytes, &count, "a\nb", 3);
    gzip_append(&bytes, &count, "", 0);
    gzip_append(&bytes, &count, "c\nd\n", 4);
    gzip_append(&bytes, &count, "e", 1);
    lines_check(bench, bytes, count, "a|1bc|1d|1e|0");
    free(bytes);
}

/* Cut anywhere: inside a member it is an error; between the two it cannot be seen. */
static void a_cut_gzip_file_is_truncated(void **state)
{
    struct bench *bench = bench_of(state);
    char *bytes = NULL, sentence[128];
    size_t count = 0, first;
    gzip_append(&bytes, &count, "a\nb\n", 4);
    first = count;
    gzip_append(&bytes, &count, "c\nd\n", 4);
    for (size_t cut = 3; cut < count; cut++) {
        if (cut == first) {
            lines_check(bench, bytes, cut, "a|1b|1");
            continue;
        }
        char path[PATH_SIZE];
        assert_null(lines_read(bench->context, input_put(bench, bytes, cut, path)));
        snprintf(sentence, sizeof sentence, ": the gzip data end in the middle: the file is truncated after %zu bytes",
                 cut);
        assert_non_null(strstr(fescue_failure_text(bench->context), sentence));
    }
    snprintf(sentence, sizeof sentence,
             "line 5: the gzip data end in the middle: the file is truncated after %zu bytes", count - 1);
    failure_check(bench, bytes, count - 1, sentence);
    free(bytes);
}

static void damage_is_named(void **state)
{
    struct bench *bench = bench_of(state);
    char *bytes = NULL;
    size_t count = 0;
    gzip_append(&bytes, &count, "a\nb\nc\n", 6);
    bytes[count - 8] ^= 1; /* RFC 1952: the last eight bytes are CRC32 and length */
    static const char differs[] =
        "line 4: the gzip check sum or length does not match what was inflated: the file is damaged";
    failure_check(bench, bytes, count, differs);
    bytes[count - 8] ^= 1;
    bytes[count - 4] ^= 1;
    failure_check(bench, bytes, count, differs);
    bytes[count - 4] ^= 1;
    bytes[10] = 7; /* the first block's header, bits 1 and 2 both set: a kind that there is not (RFC 1951, 3.2.3) */
    failure_check(bench, bytes, count, "line 1: the gzip data are damaged (invalid block)");
    bytes[10] = 7;
    bytes[2] = 9;
    failure_check(bench, bytes, count, "line 1: the gzip data are damaged (unknown compression method)");
    free(bytes);
}

static void what_follows_must_be_gzip(void **state)
{
    struct bench *bench = bench_of(state);
    char *bytes = NULL;
    size_t count = 0;
    gzip_append(&bytes, &count, "a\nb\n", 4);
    bytes = realloc(bytes, count + 5);
    memcpy(bytes + count, "hello", 5);
    failure_check(bench, bytes, count + 5, "line 3: the gzip data are followed by bytes that are not gzip");
    free(bytes);
}

static void strangers_are_named(void **state)
{
    struct bench *bench = bench_of(state);
    failure_check(bench, "", 0, "the input is empty, a table was expected");
    failure_check(bench, "BZh91AY&SY....", 14, "line 1: bzip2 data were found; only plain text and gzip are read");
    failure_check(bench,
                  "\xfd"
                  "7zXZ\0",
                  6, "line 1: xz data were found; only plain text and gzip are read");
    failure_check(bench, "\x28\xb5\x2f\xfd....", 8, "line 1: zstd data were found; only plain text and gzip are read");
    failure_check(bench, "PK\x03\x04....", 8,
                  "line 1: a zip archive (or a spreadsheet) was found; save it as delimited text");
    failure_check(bench,
                  "\xff\xfe"
                  "a\0",
                  4, "line 1: UTF-16 text was found, UTF-8 was expected; convert it, for instance with iconv");
    lines_check(bench, "BZhang,1\n", 9, "BZhang,1|1");
}

static void zero_bytes_are_refused(void **state)
{
    struct bench *bench = bench_of(state);
    failure_check(bench, "a\nb\0c\nd\n", 8, "line 2: a zero byte was found, where text was expected");
    failure_check(bench, "a\nb\nd\0", 6, "line 3: a zero byte was found, where text was expected");
}

static void the_bytes_on_disk_are_told(void **state)
{
    struct bench *bench = bench_of(state);
    char path[PATH_SIZE], *bytes = NULL;
    size_t count = 0;
    struct stream *stream;
    struct line line;
    uint32_t sum;
    uint64_t total;
    gzip_append(&bytes, &count, "123456789", 9);
    assert_status(bench->context, stream_open(bench->context, input_put(bench, "123456789", 9, path), &stream),
                  FESCUE_OK);
    assert_status(bench->context, stream_line(stream, &line), FESCUE_OK);
    source_told(stream_source(stream), &sum, &total);
    assert_int_equal(sum, 0xcbf43926); /* the check value of CRC-32 for these nine digits, in every table of CRCs */
    assert_int_equal(total, 9);
    stream_close(&stream);
    assert_status(bench->context, stream_open(bench->context, input_put(bench, bytes, count, path), &stream),
                  FESCUE_OK);
    assert_status(bench->context, stream_line(stream, &line), FESCUE_OK);
    assert_status(bench->context, stream_line(stream, &line), FESCUE_OK);
    source_told(stream_source(stream), &sum, &total);
    assert_int_equal(sum, crc32(0, (const unsigned char *)bytes, (uInt)count));
    assert_int_equal(total, count);
    stream_close(&stream);
    free(bytes);
}

static void peeking_takes_nothing(void **state)
{
    struct bench *bench = bench_of(state);
    char path[PATH_SIZE];
    struct stream *stream;
    struct line line;
    const char *text;
    size_t length;
    assert_status(bench->context, stream_open(bench->context, input_put(bench, "abc\ndef", 7, path), &stream),
                  FESCUE_OK);
    stream_peek(stream, 5, &text, &length);
    assert_int_equal(length, 5);
    assert_memory_equal(text, "abc\nd", 5);
    stream_peek(stream, 100, &text, &length);
    assert_int_equal(length, 7);
    assert_status(bench->context, stream_line(stream, &line), FESCUE_OK);
    assert_int_equal(line.end - line.text, 3);
    assert_int_equal(stream_line_number(stream), 1);
    stream_close(&stream);
}

static void standard_input_is_called_so(void **state)
{
    struct bench *bench = bench_of(state);
    int ends[2], around = dup(STDIN_FILENO);
    assert_int_equal(pipe(ends), 0);
    assert_int_equal(write(ends[1], "a\nb\0\n", 5), 5);
    close(ends[1]);
    dup2(ends[0], STDIN_FILENO);
    assert_null(lines_read(bench->context, "-"));
    assert_string_equal(fescue_failure_text(bench->context),
                        "standard input: line 2: a zero byte was found, where text was expected");
    dup2(around, STDIN_FILENO);
    close(around), close(ends[0]);
}

static void a_failing_disk_is_no_input(void **state)
{
    struct bench *bench = bench_of(state);
    char path[PATH_SIZE];
    static const enum fault_kind kinds[] = {FAULT_OPEN, FAULT_READ};
    input_put(bench, "a\nb\n", 4, path);
    for (size_t k = 0; k < 2; k++) {
        struct stream *stream;
        fescue_failure_clear(bench->context);
        fault_plan(kinds[k], 1, false, EIO);
        assert_status(bench->context, stream_open(bench->context, path, &stream), FESCUE_NO_INPUT);
        assert_null(stream);
        fault_clear();
    }
}

static void a_cancelled_read_stops(void **state)
{
    struct bench *bench = bench_of(state);
    char path[PATH_SIZE];
    struct stream *stream;
    fescue_context_cancel(bench->context);
    assert_status(bench->context, stream_open(bench->context, input_put(bench, "a\nb\n", 4, path), &stream),
                  FESCUE_STOPPED);
    fescue_failure_clear(bench->context);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(lines_end_as_they_like),       BENCH_TEST(lines_cross_blocks),
        BENCH_TEST(short_reads_change_nothing),   BENCH_TEST(members_follow_one_another),
        BENCH_TEST(a_cut_gzip_file_is_truncated), BENCH_TEST(damage_is_named),
        BENCH_TEST(what_follows_must_be_gzip),    BENCH_TEST(strangers_are_named),
        BENCH_TEST(zero_bytes_are_refused),       BENCH_TEST(the_bytes_on_disk_are_told),
        BENCH_TEST(peeking_takes_nothing),        BENCH_TEST(standard_input_is_called_so),
        BENCH_TEST(a_failing_disk_is_no_input),   BENCH_TEST(a_cancelled_read_stops),
    };
    return cmocka_run_group_tests_name("stream", tests, NULL, NULL);
}
