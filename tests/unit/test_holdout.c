/* SPDX-License-Identifier: MIT
 *
 * Hold-outs: what is hidden is hidden whole, no line is emptied, and only seed and positions decide.
 */
#include "judge/judge.h"
#include "support_table.h"

#include <string.h>

/* Bit 0: kept, bit 1: hidden; one byte a place of the table. */
static uint8_t *fates_of(const struct holdout *holdout, uint32_t rows, uint32_t columns)
{
    uint8_t *fate = test_calloc((size_t)rows * columns, 1);
    const struct cells *part[] = {&holdout->kept, &holdout->hidden};
    for (int p = 0; p < 2; p++) {
        const struct half *half = &part[p]->by_row;
        for (uint32_t i = 0; i < rows; i++)
            for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++)
                fate[(size_t)i * columns + half->across[k]] |= (uint8_t)(1 << p);
    }
    return fate;
}

static uint64_t line_cells(const struct half *half, uint32_t line)
{
    return half->start[line + 1] - half->start[line];
}

static void check_no_line_emptied(const struct half *all, const struct half *kept)
{
    for (uint32_t i = 0; i < all->lines; i++)
        assert_true((line_cells(all, i) > 0) == (line_cells(kept, i) > 0));
}

/* From the thinnest tables to full ones, from no share to all of it. */
static void no_line_is_emptied_and_no_cell_is_lost(void **state)
{
    fescue_context *context = bench_of(state)->context;
    static const double shares[] = {0, 0.1, 0.5, 0.9, 1}, seen[] = {0.01, 0.05, 0.3, 1.1};
    uint64_t hidden = 0;
    for (uint64_t seed = 1; seed <= 20; seed++)
        for (size_t s = 0; s < 5; s++) {
            struct sowing sowing = {.rows = 23, .columns = 31, .rank = 1, .share = seen[seed % 4], .seed = seed};
            struct cells cells;
            struct holdout holdout;
            sow_cells(context, &sowing, &cells);
            assert_status(context, holdout_split(context, &cells, shares[s], seed, &holdout), FESCUE_OK);
            check_no_line_emptied(&cells.by_row, &holdout.kept.by_row);
            check_no_line_emptied(&cells.by_column, &holdout.kept.by_column);
            assert_int_equal(holdout.kept.count + holdout.hidden.count, cells.count);
            uint8_t *fate = fates_of(&holdout, 23, 31);
            uint64_t in_one = 0;
            for (size_t k = 0; k < 23 * 31; k++)
                in_one += fate[k] == 1 || fate[k] == 2;
            assert_int_equal(in_one, cells.count);
            if (s == 0)
                assert_int_equal(holdout.hidden.count, 0);
            hidden += holdout.hidden.count;
            test_free(fate);
            holdout_free(context, &holdout);
            cells_free(context, &cells);
        }
    assert_true(hidden > 1000);
}

/* With every cell seen no line is in danger, and each cell's fate is its own draw. */
static void a_cell_is_hidden_by_its_own_draw(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {.rows = 60, .columns = 50, .rank = 1, .share = 1.1, .seed = 4};
    struct cells cells;
    struct holdout holdout;
    sow_cells(context, &sowing, &cells);
    assert_status(context, holdout_split(context, &cells, 0.2, 77, &holdout), FESCUE_OK);
    uint8_t *fate = fates_of(&holdout, 60, 50);
    for (uint64_t k = 0; k < 3000; k++)
        assert_int_equal(fate[k], random_uniform_at(77, RANDOM_HOLDOUT, 0, k) < 0.2 ? 2 : 1);
    /* 600 expected, standard deviation 22 */
    assert_in_range(holdout.hidden.count, 600 - 100, 600 + 100);
    test_free(fate);
    holdout_free(context, &holdout);
    cells_free(context, &cells);
}

/* When all would be hidden, the largest draw of a row stays, and of a column that is empty then. */
static void the_largest_draw_stays(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {.rows = 5, .columns = 4, .rank = 1, .share = 1.1, .seed = 4};
    struct cells cells;
    struct holdout holdout;
    sow_cells(context, &sowing, &cells);
    assert_status(context, holdout_split(context, &cells, 1, 9, &holdout), FESCUE_OK);
    uint8_t *fate = fates_of(&holdout, 5, 4), expected[20];
    memset(expected, 2, sizeof expected);
    for (uint64_t i = 0; i < 5; i++) {
        uint64_t best = 4 * i;
        for (uint64_t k = best; k < 4 * i + 4; k++)
            if (random_uniform_at(9, RANDOM_HOLDOUT, 0, k) > random_uniform_at(9, RANDOM_HOLDOUT, 0, best))
                best = k;
        expected[best] = 1;
    }
    for (uint64_t j = 0; j < 4; j++) {
        uint64_t best = j, kept = 0;
        for (uint64_t k = j; k < 20; k += 4) {
            kept += expected[k] == 1;
            if (random_uniform_at(9, RANDOM_HOLDOUT, 0, k) > random_uniform_at(9, RANDOM_HOLDOUT, 0, best))
                best = k;
        }
        if (kept == 0)
            expected[best] = 1;
    }
    assert_memory_equal(fate, expected, 20);
    test_free(fate);
    holdout_free(context, &holdout);
    cells_free(context, &cells);
}

static struct holdout split_by(fescue_context *context, const struct cells *cells, size_t workers, uint64_t seed)
{
    struct holdout holdout;
    assert_status(context, team_resize(context, workers), FESCUE_OK);
    assert_status(context, holdout_split(context, cells, 0.25, seed, &holdout), FESCUE_OK);
    return holdout;
}

static void threads_do_not_matter_and_the_seed_does(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {.rows = 300, .columns = 200, .rank = 1, .share = 0.1, .seed = 8};
    struct cells cells;
    sow_cells(context, &sowing, &cells);
    struct holdout one = split_by(context, &cells, 1, 5), seven = split_by(context, &cells, 7, 5);
    struct holdout other = split_by(context, &cells, 2, 6);
    assert_int_equal(one.hidden.count, seven.hidden.count);
    assert_memory_equal(one.hidden.by_row.across, seven.hidden.by_row.across, one.hidden.count * sizeof(uint32_t));
    assert_memory_equal(one.hidden.by_row.start, seven.hidden.by_row.start, 301 * sizeof(uint64_t));
    uint8_t *fate = fates_of(&one, 300, 200), *of_other = fates_of(&other, 300, 200);
    uint64_t both = 0;
    for (size_t k = 0; k < 60000; k++)
        both += fate[k] == 2 && of_other[k] == 2;
    /* independent: a quarter of a quarter of 6000, standard deviation 19 */
    assert_in_range(both, 375 - 90, 375 + 90);
    test_free(fate);
    test_free(of_other);
    holdout_free(context, &one);
    holdout_free(context, &seven);
    holdout_free(context, &other);
    cells_free(context, &cells);
}

/* Input in the opposite order, and a table with other cells beside the same ones. */
static void the_order_of_input_and_other_cells_do_not_matter(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {.rows = 40, .columns = 40, .rank = 1, .share = 0.7, .seed = 3};
    struct triplet_list list, turned = {.precision = FESCUE_DOUBLE};
    struct cells cells[3];
    struct holdout holdout[3];
    sow_triplets(context, &sowing, &list);
    for (uint64_t k = list.count; k-- > 0;)
        assert_status(context, triplets_append(context, &turned, list.row[k], list.column[k], triplet_value(&list, k)),
                      FESCUE_OK);
    assert_status(context, cells_build(context, 40, 40, &list, &cells[0]), FESCUE_OK);
    assert_status(context, cells_build(context, 40, 40, &turned, &cells[1]), FESCUE_OK);
    sowing.share = 1.1;
    sow_cells(context, &sowing, &cells[2]);
    uint8_t *fate[3];
    for (int c = 0; c < 3; c++) {
        assert_status(context, holdout_split(context, &cells[c], 0.1, 1, &holdout[c]), FESCUE_OK);
        fate[c] = fates_of(&holdout[c], 40, 40);
    }
    assert_memory_equal(fate[0], fate[1], 1600);
    for (size_t k = 0; k < 1600; k++) /* rows and columns of 28 cells are in no danger of being emptied */
        assert_true(fate[0][k] == 0 || fate[0][k] == fate[2][k]);
    for (int c = 0; c < 3; c++) {
        test_free(fate[c]);
        holdout_free(context, &holdout[c]);
        cells_free(context, &cells[c]);
    }
    triplets_free(context, &list);
    triplets_free(context, &turned);
}

static void a_lack_of_memory_leaks_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {.rows = 10, .columns = 12, .rank = 1, .share = 0.5, .seed = 3};
    struct cells cells;
    sow_cells(context, &sowing, &cells);
    uint64_t alive = fescue_memory_usage(context).blocks;
    bool met = true;
    for (uint64_t n = 1; met; n++) {
        struct holdout holdout;
        fault_plan(FAULT_TAKE, n, false, 0);
        fescue_status status = holdout_split(context, &cells, 0.2, 1, &holdout);
        met = fault_met();
        assert_status(context, status, met ? FESCUE_NO_MEMORY : FESCUE_OK);
        if (status == FESCUE_OK)
            holdout_free(context, &holdout);
        assert_int_equal(fescue_memory_usage(context).blocks, alive);
        fescue_failure_clear(context);
    }
    fault_clear();
    cells_free(context, &cells);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(no_line_is_emptied_and_no_cell_is_lost),
        BENCH_TEST(a_cell_is_hidden_by_its_own_draw),
        BENCH_TEST(the_largest_draw_stays),
        BENCH_TEST(threads_do_not_matter_and_the_seed_does),
        BENCH_TEST(the_order_of_input_and_other_cells_do_not_matter),
        BENCH_TEST(a_lack_of_memory_leaks_nothing),
    };
    return cmocka_run_group_tests_name("holdout", tests, NULL, NULL);
}
