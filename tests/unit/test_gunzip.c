/* SPDX-License-Identifier: MIT
 *
 * Members made by zlib, with all that a header may have, inflated in pieces of any size: the text comes back whole, and
 * a header's check sum is looked at.
 */
#include "support_reader.h"
#include "table/table_internal.h"

#include <stdlib.h>
#include <string.h>
#include <zlib.h>

enum { MOST_TEXT = 300000, MOST_BYTES = 400000, TRIALS = 150 };

struct trial {
    struct random_stream random;
    char text[MOST_TEXT];
    unsigned char bytes[MOST_BYTES];
    size_t length, count;
};

static size_t below(struct trial *trial, size_t bound)
{
    return (size_t)random_below(&trial->random, bound);
}

/* A member of the text from `first` on, by any level and strategy. */
static void member_append(struct trial *trial, size_t first)
{
    enum { GZIP = 15 + 16, LEVELS = 10, MEMORIES = 9, STRATEGIES = 5 };
    z_stream deflating = {0};
    gz_header header = {.extra_len = 6, .name_max = 0};
    assert_int_equal(deflateInit2(&deflating, (int)below(trial, LEVELS), Z_DEFLATED, GZIP,
                                  1 + (int)below(trial, MEMORIES), (int)below(trial, STRATEGIES)),
                     Z_OK);
    header.extra = below(trial, 2) ? (unsigned char *)(uintptr_t) "abcdef" : NULL;
    header.name = below(trial, 2) ? (unsigned char *)(uintptr_t) "wells.csv" : NULL;
    header.comment = below(trial, 2) ? (unsigned char *)(uintptr_t) "" : NULL;
    header.hcrc = (int)below(trial, 2);
    if (below(trial, 4) > 0)
        assert_int_equal(deflateSetHeader(&deflating, &header), Z_OK);
    deflating.next_in = (unsigned char *)trial->text + first;
    deflating.avail_in = (uInt)(trial->length - first);
    deflating.next_out = trial->bytes + trial->count;
    deflating.avail_out = (uInt)(MOST_BYTES - trial->count);
    assert_int_equal(deflate(&deflating, Z_FINISH), Z_STREAM_END);
    trial->count = MOST_BYTES - deflating.avail_out;
    deflateEnd(&deflating);
}

static void members_make(struct trial *trial)
{
    static const char letters[] = "0123456789 \n.";
    trial->length = trial->count = 0;
    for (size_t members = 1 + below(trial, 4); members > 0; members--) {
        size_t first = trial->length, end = first + below(trial, below(trial, 2) ? 200 : MOST_TEXT / 4);
        bool is_text = below(trial, 3) > 0;
        while (trial->length < end)
            trial->text[trial->length++] = is_text ? letters[below(trial, 13)] : (char)below(trial, 256);
        member_append(trial, first);
    }
}

/* Inflates in pieces of at most so many bytes, given from a block, as from a disk, into as much room. */
static const char *inflated(fescue_context *context, const struct trial *trial, size_t piece, size_t room, char *out,
                            size_t *made)
{
    struct gunzip *gunzip;
    const char *complaint = NULL;
    unsigned char *block = malloc(piece);
    size_t at = 0, given = 0, taken = 0;
    assert_int_equal(gunzip_open(context, &gunzip), FESCUE_OK);
    *made = 0;
    for (struct gunzip_bytes bytes = {0}; complaint == NULL;) {
        if (taken == given && bytes.made == 0) {
            given = trial->count - at < piece ? trial->count - at : piece;
            memcpy(block, trial->bytes + at, given);
            at += given;
            taken = 0;
            if (given == 0)
                break;
        }
        bytes = (struct gunzip_bytes){
            .in = block + taken, .given = given - taken, .to = out + *made, .room = MOST_TEXT + 1 - *made};
        bytes.room = bytes.room < room ? bytes.room : room;
        complaint = gunzip_step(gunzip, &bytes);
        taken += bytes.taken;
        *made += bytes.made;
    }
    if (complaint == NULL)
        assert_false(gunzip_in_member(gunzip));
    GIVE(context, &gunzip);
    free(block);
    return complaint;
}

static void members_come_back_whole(void **state)
{
    struct bench *bench = bench_of(state);
    struct trial *trial = malloc(sizeof *trial);
    char *out = malloc(MOST_TEXT + 1);
    assert_non_null(trial);
    assert_non_null(out);
    for (uint32_t n = 0; n < TRIALS; n++) {
        size_t made;
        trial->random = random_open(20240702, RANDOM_TEST, n);
        members_make(trial);
        size_t piece = 1 + below(trial, below(trial, 2) ? 20 : 70000), room = 1 + below(trial, 90000);
        assert_null(inflated(bench->context, trial, piece, below(trial, 2) ? 1 + below(trial, 50) : room, out, &made));
        assert_int_equal(made, trial->length);
        assert_memory_equal(out, trial->text, made);
    }
    free(out), free(trial);
}

/* RFC 1952, 2.3: flag FHCRC (2) with FNAME (8), so the name "a" and then the lower half of the header's CRC. */
static void a_header_is_checked(void **state)
{
    struct bench *bench = bench_of(state);
    static const unsigned char fields[] = {0x1f, 0x8b, 8, 2 + 8, 0, 0, 0, 0, 0, 3, 'a', 0};
    static const unsigned char nothing[] = {3, 0, 0, 0, 0, 0, 0, 0, 0, 0}; /* an empty block, its sum and length */
    struct trial *trial = calloc(1, sizeof *trial);
    char out[1];
    size_t made;
    assert_non_null(trial);
    uint32_t sum = (uint32_t)crc32_z(0, fields, sizeof fields);
    memcpy(trial->bytes, fields, sizeof fields);
    trial->bytes[sizeof fields] = (unsigned char)sum;
    trial->bytes[sizeof fields + 1] = (unsigned char)(sum >> 8);
    memcpy(trial->bytes + sizeof fields + 2, nothing, sizeof nothing);
    trial->count = sizeof fields + 2 + sizeof nothing;
    for (size_t piece = 1; piece <= trial->count; piece++)
        assert_null(inflated(bench->context, trial, piece, 1, out, &made));
    trial->bytes[4] ^= 1;
    assert_string_equal(inflated(bench->context, trial, 3, 1, out, &made), "the gzip data are damaged (header check)");
    trial->bytes[3] |= 32;
    assert_string_equal(inflated(bench->context, trial, 3, 1, out, &made),
                        "the gzip data are damaged (unknown header flags)");
    free(trial);
}

int main(void)
{
    const struct CMUnitTest tests[] = {BENCH_TEST(members_come_back_whole), BENCH_TEST(a_header_is_checked)};
    return cmocka_run_group_tests(tests, NULL, NULL);
}
