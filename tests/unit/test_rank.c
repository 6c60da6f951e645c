/* SPDX-License-Identifier: MIT
 *
 * Cross-validation through the public face: a lack of memory at any point of it is told and leaks nothing, with folds
 * on one worker and on three.
 */
#include "support.h"

static fescue_table *table_make(fescue_context *context, const struct fescue_options *options)
{
    enum { ROWS = 14, COLUMNS = 9, MOST = ROWS * COLUMNS };
    uint32_t row[MOST], column[MOST];
    double value[MOST];
    uint64_t count = 0;
    struct random_stream stream = random_open(3, RANDOM_TEST, 0);
    fescue_table *table;
    for (uint32_t i = 0; i < ROWS; i++)
        for (uint32_t j = 0; j < COLUMNS; j++) {
            if (random_uniform(&stream) < 0.3)
                continue;
            row[count] = i;
            column[count] = j;
            value[count++] = (i + 1.0) * (j - 4.0) + 0.1 * random_normal(&stream);
        }
    assert_status(context, fescue_table_from_cells(context, ROWS, COLUMNS, count, row, column, value, options, &table),
                  FESCUE_OK);
    return table;
}

static void a_lack_of_memory_leaks_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options;
    fescue_options_standard(&options);
    options.folds = 2;
    options.rank_most = 2;
    options.threads = 1;
    fescue_table *table = table_make(context, &options);
    uint64_t alive = fescue_memory_usage(context).blocks;
    for (int64_t threads = 1; threads <= 3; threads += 2) {
        bool met = true;
        options.threads = threads;
        /* Every allocation at first; later ones, in fits that are all alike, in steps that grow. */
        for (uint64_t n = 1; met; n += 1 + n / 16) {
            fescue_ranking *ranking = NULL;
            fault_plan(FAULT_TAKE, n, false, 0);
            fescue_status status = fescue_rank_table(table, &options, &ranking);
            met = fault_met();
            assert_true(status == FESCUE_OK || (met && status == FESCUE_NO_MEMORY));
            assert_int_equal(status == FESCUE_OK, ranking != NULL);
            fescue_ranking_destroy(&ranking);
            assert_int_equal(fescue_memory_usage(context).blocks, alive);
            fescue_failure_clear(context);
        }
        fault_clear();
    }
    fescue_table_destroy(&table);
}

static void a_rank_is_found(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct fescue_options options;
    fescue_ranking *ranking;
    fescue_options_standard(&options);
    fescue_table *table = table_make(context, &options);
    assert_status(context, fescue_rank_table(table, &options, &ranking), FESCUE_OK);
    assert_int_equal(fescue_ranking_rank(ranking), 1);
    fescue_ranking_destroy(&ranking);
    fescue_table_destroy(&table);
}

static bool stop_at_once(void *data, const char *stage, double share)
{
    (void)data;
    (void)stage;
    (void)share;
    return false;
}

static void asked_to_stop_it_stops(void **state)
{
    (void)state;
    const struct fescue_hooks hooks = {.progress = stop_at_once};
    fescue_context *context;
    struct fescue_options options;
    fescue_ranking *ranking;
    fescue_options_standard(&options);
    assert_int_equal(fescue_context_create(&hooks, &context), FESCUE_OK);
    fescue_table *table = table_make(context, &options);
    assert_int_equal(fescue_rank_table(table, &options, &ranking), FESCUE_STOPPED);
    assert_null(ranking);
    fescue_table_destroy(&table);
    assert_int_equal(fescue_memory_usage(context).blocks, 0);
    fescue_context_destroy(&context);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(a_rank_is_found),
        BENCH_TEST(asked_to_stop_it_stops),
        BENCH_TEST(a_lack_of_memory_leaks_nothing),
    };
    return cmocka_run_group_tests_name("rank", tests, NULL, NULL);
}
