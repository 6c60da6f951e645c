/* SPDX-License-Identifier: MIT
 *
 * The store of observed cells: both directions against a dense table, blocks, selections, lists in any order.
 */
#include "support_table.h"
#include "table/table_internal.h"

#include <string.h>

static const struct sowing sowings[] = {
    {.rows = 1, .columns = 1, .rank = 1, .share = 1.1, .seed = 1},
    {.rows = 1, .columns = 40, .rank = 1, .share = 0.5, .seed = 2},
    {.rows = 40, .columns = 1, .rank = 1, .share = 0.5, .seed = 3},
    {.rows = 37, .columns = 53, .rank = 2, .share = 0.2, .seed = 4, .precision = FESCUE_SINGLE},
    {.rows = 200, .columns = 300, .rank = 2, .share = 0.6, .seed = 5},
    {.rows = 300, .columns = 20, .rank = 1, .share = 0.02, .seed = 6, .precision = FESCUE_SINGLE},
    {.rows = 5, .columns = 7, .rank = 1, .share = -1, .seed = 7},
};
enum { SOWINGS = sizeof sowings / sizeof sowings[0] };

/* A fixed shuffle: swaps with places drawn from the seed. */
static void shuffle(struct triplet_list *list, uint64_t seed)
{
    struct random_stream stream = random_open(seed, RANDOM_TEST, 99);
    for (uint64_t k = list->count; k > 1; k--) {
        uint64_t other = (uint64_t)(random_uniform(&stream) * (double)k);
        uint32_t row = list->row[k - 1], column = list->column[k - 1];
        list->row[k - 1] = list->row[other], list->column[k - 1] = list->column[other];
        list->row[other] = row, list->column[other] = column;
        size_t size = list->precision == FESCUE_SINGLE ? 4 : 8;
        char value[8], *values = list->value;
        memcpy(value, values + (k - 1) * size, size);
        memcpy(values + (k - 1) * size, values + other * size, size);
        memcpy(values + other * size, value, size);
    }
}

static void check_half(const struct half *half, uint64_t count)
{
    assert_int_equal(half->start[0], 0);
    assert_int_equal(half->start[half->lines], count);
    for (uint32_t i = 0; i < half->lines; i++)
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++) {
            assert_true(half->across[k] < half->length);
            assert_true(k == half->start[i] || half->across[k - 1] < half->across[k]);
        }
    assert_in_range(half->blocks, 1, CELLS_MOST_BLOCKS);
    assert_int_equal(half->block[0], 0);
    assert_int_equal(half->block[half->blocks], half->lines);
    for (size_t b = 0; b < half->blocks; b++)
        assert_true(half->block[b] < half->block[b + 1]);
}

/* Both directions hold exactly the cells of the list. */
static void check_cells(const struct cells *cells, const struct triplet_list *list)
{
    const struct half *rows = &cells->by_row, *columns = &cells->by_column;
    size_t size = (size_t)cells->rows * cells->columns;
    double *value = test_calloc(size, sizeof *value);
    bool *seen = test_calloc(size, sizeof *seen);
    for (uint64_t k = 0; k < list->count; k++) {
        size_t at = (size_t)list->row[k] * cells->columns + list->column[k];
        value[at] = triplet_value(list, k);
        seen[at] = true;
    }
    assert_int_equal(cells->count, list->count);
    assert_int_equal(rows->lines, columns->length);
    assert_int_equal(rows->length, columns->lines);
    check_half(rows, cells->count);
    check_half(columns, cells->count);
    for (uint32_t i = 0; i < cells->rows; i++)
        for (uint64_t k = rows->start[i]; k < rows->start[i + 1]; k++) {
            size_t at = (size_t)i * cells->columns + rows->across[k];
            assert_true(seen[at]);
            assert_true(value[at] == cells_value(cells, rows, k));
        }
    for (uint32_t j = 0; j < cells->columns; j++)
        for (uint64_t k = columns->start[j]; k < columns->start[j + 1]; k++) {
            size_t at = (size_t)columns->across[k] * cells->columns + j;
            assert_true(seen[at]);
            assert_true(value[at] == cells_value(cells, columns, k));
        }
    test_free(value);
    test_free(seen);
}

static void any_order_gives_both_directions(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (size_t n = 0; n < SOWINGS; n++) {
        struct triplet_list list;
        struct cells sorted, shuffled;
        sow_triplets(context, &sowings[n], &list);
        assert_status(context, cells_build(context, sowings[n].rows, sowings[n].columns, &list, &sorted), FESCUE_OK);
        check_cells(&sorted, &list);
        shuffle(&list, n);
        assert_status(context, cells_build(context, sowings[n].rows, sowings[n].columns, &list, &shuffled), FESCUE_OK);
        check_cells(&shuffled, &list);
        assert_int_equal(sorted.by_row.blocks, shuffled.by_row.blocks);
        triplets_free(context, &list);
        cells_free(context, &sorted);
        cells_free(context, &shuffled);
    }
}

static void selected_cells_are_those_kept(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (size_t n = 0; n < SOWINGS; n++) {
        struct cells all, some;
        struct triplet_list list = {.precision = sowings[n].precision};
        sow_cells(context, &sowings[n], &all);
        uint8_t *keep = test_calloc(all.count + 1, 1);
        for (uint32_t i = 0; i < all.rows; i++)
            for (uint64_t k = all.by_row.start[i]; k < all.by_row.start[i + 1]; k++) {
                keep[k] = (k * 7 + n) % 3 == 0 ? 0 : (uint8_t)(k | 1);
                if (keep[k])
                    assert_status(
                        context,
                        triplets_append(context, &list, i, all.by_row.across[k], cells_value(&all, &all.by_row, k)),
                        FESCUE_OK);
            }
        assert_status(context, cells_select(context, &all, keep, &some), FESCUE_OK);
        check_cells(&some, &list);
        test_free(keep);
        triplets_free(context, &list);
        cells_free(context, &all);
        cells_free(context, &some);
    }
}

static void an_alike_store_shares_the_pattern(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct cells from, alike;
    sow_cells(context, &sowings[3], &from);
    assert_status(context, cells_alike(context, &from, from.precision, &alike), FESCUE_OK);
    assert_true(alike.shares_pattern);
    assert_ptr_equal(alike.by_row.across, from.by_row.across);
    assert_ptr_equal(alike.by_column.start, from.by_column.start);
    for (uint64_t k = 0; k < alike.count; k++)
        assert_true(cells_value(&alike, &alike.by_row, k) == 0 && cells_value(&alike, &alike.by_column, k) == 0);
    ((float *)alike.by_row.value)[0] = 5;
    assert_false(cells_value(&from, &from.by_row, 0) == 5);
    cells_free(context, &alike);
    assert_status(context, cells_alike(context, &from, FESCUE_DOUBLE, &alike), FESCUE_OK);
    assert_int_equal(alike.precision, FESCUE_DOUBLE);
    ((double *)alike.by_column.value)[alike.count - 1] = 1e-300; /* no float */
    assert_true(cells_value(&alike, &alike.by_column, alike.count - 1) == 1e-300);
    cells_free(context, &alike);
    alike = cells_share(&from); /* of which nothing is freed but once */
    assert_ptr_equal(alike.by_row.value, from.by_row.value);
    cells_free(context, &alike);
    assert_true(alike.count == 0);
    cells_free(context, &from);
}

/* Work of each block within two of an even share and the longest line; as many blocks as allowed. */
static void blocks_are_even(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct sowing sowing = {.rows = 1500, .columns = 1500, .rank = 1, .share = 0.7, .seed = 8};
    struct cells cells;
    sow_cells(context, &sowing, &cells);
    const struct half *half = &cells.by_row;
    assert_int_equal(half->blocks, CELLS_MOST_BLOCKS);
    uint64_t share = (cells.count + half->lines) / CELLS_MOST_BLOCKS, line = half->length + 1;
    for (size_t b = 0; b < half->blocks; b++) {
        uint64_t work = half->start[half->block[b + 1]] - half->start[half->block[b]];
        work += half->block[b + 1] - half->block[b];
        assert_in_range(work, share < line ? 1 : share - line, share + line);
    }
    cells_free(context, &cells);
}

static void a_line_longer_than_a_block_stays_whole(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct triplet_list list = {0};
    struct cells cells;
    for (uint32_t j = 0; j < 100000; j++)
        assert_status(context, triplets_append(context, &list, 1, j, j), FESCUE_OK);
    assert_status(context, triplets_append(context, &list, 0, 3, 1), FESCUE_OK);
    assert_status(context, triplets_append(context, &list, 2, 3, 1), FESCUE_OK);
    assert_status(context, cells_build(context, 4, 100000, &list, &cells), FESCUE_OK);
    check_half(&cells.by_row, cells.count);
    assert_in_range(cells.by_row.blocks, 1, 3);
    triplets_free(context, &list);
    cells_free(context, &cells);
}

static void a_cell_given_twice_is_found(void **state)
{
    fescue_context *context = bench_of(state)->context;
    static const uint32_t row[] = {0, 0, 1, 1, 1, 2}, column[] = {1, 0, 2, 0, 2, 2};
    static const double value[6];
    struct half half;
    bool twice;
    uint32_t line, across;
    assert_status(context, half_open(context, 3, 3, 6, FESCUE_DOUBLE, &half), FESCUE_OK);
    const struct cell_run run = {row, column, value, 6, MIRROR_NONE};
    assert_status(context, half_sort(context, &run, 1, FESCUE_DOUBLE, &half), FESCUE_OK);
    assert_false(half_is_ascending(context, &half));
    assert_status(context, half_find_twice(context, &half, &twice, &line, &across), FESCUE_OK);
    assert_true(twice);
    assert_int_equal(line, 1);
    assert_int_equal(across, 2);
    half_free(context, &half);
}

/* Every allocation fails in turn; BENCH_TEST's end finds what leaked. */
static void a_lack_of_memory_leaks_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    static const uint8_t keep[2000] = {1, 0, 1, 1};
    struct triplet_list list;
    sow_triplets(context, &sowings[3], &list);
    shuffle(&list, 1);
    uint64_t alive = fescue_memory_usage(context).blocks;
    bool met = true;
    for (uint64_t n = 1; met; n++) {
        struct cells cells, some, alike;
        fault_plan(FAULT_TAKE, n, false, 0);
        fescue_status status = cells_build(context, 37, 53, &list, &cells);
        if (status == FESCUE_OK) {
            status = cells_select(context, &cells, keep, &some);
            if (status == FESCUE_OK) {
                status = cells_alike(context, &cells, cells.precision, &alike);
                cells_free(context, &some);
                cells_free(context, &alike);
            }
            cells_free(context, &cells);
        }
        met = fault_met();
        assert_status(context, status, met ? FESCUE_NO_MEMORY : FESCUE_OK);
        assert_int_equal(fescue_memory_usage(context).blocks, alive);
        fescue_failure_clear(context);
    }
    fault_clear();
    triplets_free(context, &list);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(any_order_gives_both_directions),        BENCH_TEST(selected_cells_are_those_kept),
        BENCH_TEST(an_alike_store_shares_the_pattern),      BENCH_TEST(blocks_are_even),
        BENCH_TEST(a_line_longer_than_a_block_stays_whole), BENCH_TEST(a_cell_given_twice_is_found),
        BENCH_TEST(a_lack_of_memory_leaks_nothing),
    };
    return cmocka_run_group_tests_name("cells", tests, NULL, NULL);
}
