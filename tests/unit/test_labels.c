/* SPDX-License-Identifier: MIT
 *
 * Labels: lists that grow, look-ups, sides without labels.
 */
#include "support.h"
#include "table/table_internal.h"

#include <stdio.h>
#include <string.h>

enum { MANY = 5000 };

/* Labels that share beginnings, lengths from 0 up. */
static size_t label_make(uint32_t i, char text[32])
{
    return (size_t)snprintf(text, 32, "%.*s%u", (int)(i % 13), "ottery-bridge", i);
}

static void a_label_is_found_again(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct label_list list = {0};
    char text[32];
    uint32_t position;
    for (int round = 0; round < 2; round++)
        for (uint32_t i = 0; i < MANY; i++) {
            size_t length = label_make(i, text);
            text[length] = '7'; /* does not belong to it */
            assert_status(context, label_list_find_or_add(context, &list, text, length, &position), FESCUE_OK);
            assert_int_equal(position, i);
        }
    assert_int_equal(list.labels.count, MANY);
    for (uint32_t i = 0; i < MANY; i++) {
        label_make(i, text);
        assert_string_equal(list.labels.text[i], text);
    }
    label_list_free(context, &list);
}

static void an_index_finds_labels_and_nothing_else(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct label_list list = {0};
    struct labels labels;
    struct label_index *index;
    static const char *const texts[] = {"a", "b", "", "a", "ab", "\xc3\xa9"};
    uint32_t position = 99;
    for (size_t k = 0; k < 6; k++)
        assert_status(context, label_list_add(context, &list, texts[k], strlen(texts[k])), FESCUE_OK);
    label_list_finish(context, &list, &labels);
    assert_int_equal(labels.count, 6);
    assert_status(context, label_index_create(context, &labels, &index), FESCUE_OK);
    assert_true(label_index_find(index, "a", 1, &position)); /* of two equal ones the first */
    assert_int_equal(position, 0);
    assert_true(label_index_find(index, "abc", 2, &position));
    assert_int_equal(position, 4);
    assert_true(label_index_find(index, "", 0, &position));
    assert_int_equal(position, 2);
    assert_true(label_index_find(index, "\xc3\xa9", 2, &position));
    assert_int_equal(position, 5);
    assert_false(label_index_find(index, "\xc3", 1, &position));
    assert_false(label_index_find(index, "A", 1, &position));
    assert_false(label_index_find(index, "abc", 3, &position));
    assert_false(label_index_find(index, "a\0b", 3, &position));
    label_index_destroy(context, &index);
    assert_null(index);
    label_index_destroy(context, &index);
    labels_free(context, &labels);
}

static void a_side_without_labels_is_numbered(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct labels labels = {.count = 4000000000};
    struct label_index *index;
    char buffer[16];
    uint32_t position = 99;
    assert_string_equal(label_text(&labels, 0, buffer), "1");
    assert_string_equal(label_text(&labels, 3999999999, buffer), "4000000000");
    assert_status(context, label_index_create(context, &labels, &index), FESCUE_OK);
    assert_true(label_index_find(index, "1", 1, &position));
    assert_int_equal(position, 0);
    assert_true(label_index_find(index, "4000000000", 10, &position));
    assert_int_equal(position, 3999999999);
    static const char *const none[] = {"",    "0", "01",         "+1",         "-1",
                                       "1.0", "a", "4000000001", "9999999999", "10000000000"};
    for (size_t k = 0; k < sizeof none / sizeof none[0]; k++)
        assert_false(label_index_find(index, none[k], strlen(none[k]), &position));
    label_index_destroy(context, &index);
}

static void long_texts_have_room(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct text_store *store = NULL;
    static char text[10000];
    char *small[3], *large;
    memset(text, 'x', sizeof text);
    for (int k = 0; k < 3; k++)
        assert_status(context, text_store_add(context, &store, "fen", 3, &small[k]), FESCUE_OK);
    assert_status(context, text_store_add(context, &store, text, sizeof text, &large), FESCUE_OK);
    assert_status(context, text_store_add(context, &store, "", 0, &small[0]), FESCUE_OK);
    assert_string_equal(small[0], "");
    assert_string_equal(small[1], "fen");
    assert_string_equal(small[2], "fen");
    assert_int_equal(strlen(large), sizeof text);
    text_store_free(context, &store);
}

static void a_lack_of_memory_leaks_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    bool met = true;
    for (uint64_t n = 1; met; n++) {
        struct label_list list = {0};
        char text[32];
        uint32_t position;
        fescue_status status = FESCUE_OK;
        fault_plan(FAULT_TAKE, n, false, 0);
        for (uint32_t i = 0; i < 500 && status == FESCUE_OK; i++)
            status = label_list_find_or_add(context, &list, text, label_make(i, text), &position);
        label_list_free(context, &list);
        met = fault_met();
        assert_status(context, status, met ? FESCUE_NO_MEMORY : FESCUE_OK);
        assert_no_leak(context);
        fescue_failure_clear(context);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(a_label_is_found_again),
        BENCH_TEST(an_index_finds_labels_and_nothing_else),
        BENCH_TEST(a_side_without_labels_is_numbered),
        BENCH_TEST(long_texts_have_room),
        BENCH_TEST(a_lack_of_memory_leaks_nothing),
    };
    return cmocka_run_group_tests_name("labels", tests, NULL, NULL);
}
