/* SPDX-License-Identifier: MIT
 *
 * Hold-outs that are shaped like the holes: which shape is seen in a pattern, and what is hidden in each.
 */
#include "judge/judge.h"
#include "support_faults.h"
#include "support_table.h"

#include <math.h>

enum { ROWS = 400, COLUMNS = 20 };

/* Every pattern is a function of row, column and a stream; the value is of no account. */
typedef bool pattern_seen(uint32_t row, uint32_t column, struct random_stream *random);

static bool seen_scattered(uint32_t row, uint32_t column, struct random_stream *random)
{
    (void)row, (void)column;
    return random_uniform(random) < 0.6;
}

/* Stretches of 25 rows, unseen with probability 0.3; each column draws its own. */
static bool seen_runs(uint32_t row, uint32_t column, struct random_stream *random)
{
    (void)random;
    return random_uniform_at(5, RANDOM_TEST, column, row / 25) >= 0.3;
}

static bool seen_late(uint32_t row, uint32_t column, struct random_stream *random)
{
    (void)random;
    return row >= 15 * column;
}

/* Rows 100 to 119 and every 80th have nothing; else a tenth is missing here and there. */
static bool seen_dark(uint32_t row, uint32_t column, struct random_stream *random)
{
    (void)column;
    bool is_dark = (row >= 100 && row < 120) || row % 80 == 79;
    return !is_dark && random_uniform(random) >= 0.1;
}

/* Every third row has two cells. */
static bool seen_newcomers(uint32_t row, uint32_t column, struct random_stream *random)
{
    (void)random;
    return row % 3 != 0 || column == row % COLUMNS || column == (row + 7) % COLUMNS;
}

static bool seen_all(uint32_t row, uint32_t column, struct random_stream *random)
{
    (void)row, (void)column, (void)random;
    return true;
}

/* The pattern as cells; turned: its rows are the columns. */
static void cells_sow(fescue_context *context, pattern_seen *seen, bool turned, struct cells *cells)
{
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    struct random_stream random = random_open(9, RANDOM_TEST, 1);
    for (uint32_t i = 0; i < ROWS; i++)
        for (uint32_t j = 0; j < COLUMNS; j++)
            if (seen(i, j, &random))
                assert_status(context, triplets_append(context, &list, turned ? j : i, turned ? i : j, 1), FESCUE_OK);
    assert_status(context, cells_build(context, turned ? COLUMNS : ROWS, turned ? ROWS : COLUMNS, &list, cells),
                  FESCUE_OK);
    triplets_free(context, &list);
}

static void the_shape_is_read_from_the_pattern(void **state)
{
    fescue_context *context = bench_of(state)->context;
    static const struct line_order clock = {.along_columns = false};
    static const struct {
        pattern_seen *seen;
        const struct line_order *order;
        bool turned;
        enum fescue_holdout_shape shape;
    } cases[] = {
        {seen_scattered, NULL, false, FESCUE_HOLDOUT_CELLS}, {seen_scattered, &clock, false, FESCUE_HOLDOUT_CELLS},
        {seen_runs, NULL, false, FESCUE_HOLDOUT_GAPS},       {seen_runs, NULL, true, FESCUE_HOLDOUT_GAPS},
        {seen_runs, &clock, true, FESCUE_HOLDOUT_CELLS}, /* the clock goes the other way */
        {seen_late, NULL, false, FESCUE_HOLDOUT_GAPS},       {seen_late, NULL, true, FESCUE_HOLDOUT_GAPS},
        {seen_dark, NULL, false, FESCUE_HOLDOUT_CELLS},      {seen_dark, &clock, false, FESCUE_HOLDOUT_GAPS},
        {seen_newcomers, NULL, false, FESCUE_HOLDOUT_ROWS},  {seen_newcomers, NULL, true, FESCUE_HOLDOUT_COLUMNS},
        {seen_all, NULL, false, FESCUE_HOLDOUT_CELLS},
    };
    for (size_t c = 0; c < sizeof cases / sizeof cases[0]; c++) {
        struct cells cells;
        struct hole_shape found;
        cells_sow(context, cases[c].seen, cases[c].turned, &cells);
        assert_status(context, hole_shape_find(context, &cells, cases[c].order, &found), FESCUE_OK);
        if (found.shape != cases[c].shape)
            fail_msg("case %zu: found shape %d (%s), expected %d", c, (int)found.shape, found.why, (int)cases[c].shape);
        if (found.shape == FESCUE_HOLDOUT_GAPS)
            assert_int_equal(found.along_columns, cases[c].turned);
        assert_true(found.why[0] != '\0');
        cells_free(context, &cells);
    }
}

static uint64_t line_cells(const struct half *half, uint32_t line)
{
    return half->start[line + 1] - half->start[line];
}

static bool holds(const struct half *half, uint32_t line, uint32_t position)
{
    for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++)
        if (half->across[k] == position)
            return true;
    return false;
}

/* Mean length of the stretches of hidden rows, which unseen rows do not end. */
static double hidden_stretch(const struct cells *cells, const struct holdout *holdout)
{
    double length = 0, stretches = 0;
    for (uint32_t j = 0; j < cells->columns; j++) {
        bool was_hidden = false;
        for (uint32_t i = 0; i < cells->rows; i++) {
            if (!holds(&cells->by_column, j, i))
                continue;
            bool is_hidden = holds(&holdout->hidden.by_column, j, i);
            length += is_hidden;
            stretches += is_hidden && !was_hidden;
            was_hidden = is_hidden;
        }
    }
    return length / stretches;
}

/* Columns that are seen to 0.7, in stretches of 25: a hidden stretch is about as long, those cut at an end shorter and
   those of neighbours longer; scattered cells have stretches of 1 / 0.9. No column loses more than seven tenths. */
static void gaps_are_as_long_as_the_holes(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    cells_sow(context, seen_runs, false, &cells);
    for (uint32_t fold = 1; fold <= 10; fold++) {
        struct holdout_request request = {.shape = FESCUE_HOLDOUT_GAPS, .share = 0.1, .seed = 3, .fold = fold};
        struct holdout holdout;
        assert_status(context, holdout_cut(context, &cells, &request, &holdout), FESCUE_OK);
        double share = (double)holdout.hidden.count / (double)cells.count;
        assert_true(share > 0.08 && share < 0.16);
        double length = hidden_stretch(&cells, &holdout);
        if (!(length > 12 && length < 50))
            fail_msg("fold %u: stretches of %g", fold, length);
        for (uint32_t j = 0; j < COLUMNS; j++)
            assert_true((double)line_cells(&holdout.hidden.by_column, j) <=
                        0.7 * (double)line_cells(&cells.by_column, j));
        for (uint32_t i = 0; i < ROWS; i++)
            assert_true(line_cells(&holdout.kept.by_row, i) > 0 || line_cells(&cells.by_row, i) == 0);
        holdout_free(context, &holdout);
    }
    cells_free(context, &cells);
}

/* The order of time is not that of the rows: the same holes, in the order of time. */
static void gaps_follow_the_clock(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct cells cells, mixed;
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    uint32_t order[ROWS];
    for (uint32_t k = 0; k < ROWS; k++)
        order[k] = (uint32_t)((uint64_t)k * 237 % ROWS); /* 237 and 400 have no divisor in common */
    cells_sow(context, seen_runs, false, &cells);
    for (uint32_t k = 0; k < ROWS; k++)
        for (uint64_t c = cells.by_row.start[k]; c < cells.by_row.start[k + 1]; c++)
            assert_status(context, triplets_append(context, &list, order[k], cells.by_row.across[c], 1), FESCUE_OK);
    assert_status(context, cells_build(context, ROWS, COLUMNS, &list, &mixed), FESCUE_OK);
    struct line_order clock = {.order = order};
    struct holdout_request request = {.shape = FESCUE_HOLDOUT_GAPS, .share = 0.2, .seed = 3, .fold = 2};
    struct holdout plain, turned;
    assert_status(context, holdout_cut(context, &cells, &request, &plain), FESCUE_OK);
    request.order = &clock;
    assert_status(context, holdout_cut(context, &mixed, &request, &turned), FESCUE_OK);
    assert_int_equal(plain.hidden.count, turned.hidden.count);
    for (uint32_t k = 0; k < ROWS; k++)
        for (uint32_t j = 0; j < COLUMNS; j++)
            assert_int_equal(holds(&plain.hidden.by_row, k, j), holds(&turned.hidden.by_row, order[k], j));
    holdout_free(context, &plain);
    holdout_free(context, &turned);
    cells_free(context, &cells);
    cells_free(context, &mixed);
    triplets_free(context, &list);
}

static void dark_places_are_hidden_whole_where_the_table_has_such(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    cells_sow(context, seen_dark, false, &cells);
    uint32_t dark = 0;
    for (uint32_t fold = 1; fold <= 5; fold++) {
        struct holdout_request request = {.shape = FESCUE_HOLDOUT_GAPS, .share = 0.1, .seed = 3, .fold = fold};
        struct holdout holdout;
        assert_status(context, holdout_cut(context, &cells, &request, &holdout), FESCUE_OK);
        for (uint32_t i = 0; i < ROWS; i++)
            dark += line_cells(&holdout.kept.by_row, i) == 0 && line_cells(&cells.by_row, i) > 0;
        holdout_free(context, &holdout);
    }
    /* of some 40 rows' worth of cells that each fold hides, half at most */
    assert_in_range(dark, 5, 5 * 40);
    cells_free(context, &cells);
}

static void folds_of_scattered_cells_are_apart(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct cells cells;
    cells_sow(context, seen_scattered, false, &cells);
    uint64_t hidden = 0;
    static uint8_t times[ROWS][COLUMNS];
    for (uint32_t fold = 1; fold <= 10; fold++) {
        struct holdout_request request = {.shape = FESCUE_HOLDOUT_CELLS, .share = 0.1, .seed = 3, .fold = fold};
        struct holdout holdout;
        assert_status(context, holdout_cut(context, &cells, &request, &holdout), FESCUE_OK);
        hidden += holdout.hidden.count;
        for (uint32_t i = 0; i < ROWS; i++)
            for (uint64_t k = holdout.hidden.by_row.start[i]; k < holdout.hidden.by_row.start[i + 1]; k++)
                assert_int_equal(times[i][holdout.hidden.by_row.across[k]]++, 0);
        holdout_free(context, &holdout);
    }
    assert_int_equal(hidden, cells.count);
    cells_free(context, &cells);
}

/* A row that loses cells keeps as many as a thin one has: two, or three where a column had to get one back. */
static void newcomers_keep_a_few_cells(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (int turned = 0; turned < 2; turned++) {
        struct cells cells;
        struct holdout holdout;
        cells_sow(context, seen_newcomers, turned == 1, &cells);
        struct holdout_request request = {
            .shape = turned == 1 ? FESCUE_HOLDOUT_COLUMNS : FESCUE_HOLDOUT_ROWS, .share = 0.1, .seed = 3};
        assert_status(context, holdout_cut(context, &cells, &request, &holdout), FESCUE_OK);
        const struct half *hidden = turned == 1 ? &holdout.hidden.by_column : &holdout.hidden.by_row;
        const struct half *kept = turned == 1 ? &holdout.kept.by_column : &holdout.kept.by_row;
        uint32_t newcomers = 0;
        for (uint32_t i = 0; i < ROWS; i++) {
            newcomers += line_cells(hidden, i) > 0;
            if (line_cells(hidden, i) > 0)
                assert_in_range(line_cells(kept, i), 2, 3);
        }
        assert_in_range(newcomers, 25, 35); /* a tenth of the cells, 18 a row */
        holdout_free(context, &holdout);
        cells_free(context, &cells);
    }
}

static void a_lack_of_memory_leaks_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    static const enum fescue_holdout_shape shapes[] = {FESCUE_HOLDOUT_GAPS, FESCUE_HOLDOUT_ROWS};
    static const struct line_order along = {.along_columns = true};
    struct cells cells;
    cells_sow(context, seen_dark, true, &cells);
    uint64_t alive = fescue_memory_usage(context).blocks;
    for (size_t s = 0; s < 3; s++) {
        bool met = true;
        for (uint64_t n = 1; met; n++) {
            struct holdout holdout = {0};
            struct hole_shape found;
            struct holdout_request request = {.shape = shapes[s % 2], .share = 0.1, .seed = 3, .order = &along};
            fault_plan(FAULT_TAKE, n, false, 0);
            fescue_status status = s == 2 ? hole_shape_find(context, &cells, NULL, &found)
                                          : holdout_cut(context, &cells, &request, &holdout);
            met = fault_met();
            assert_status(context, status, met ? FESCUE_NO_MEMORY : FESCUE_OK);
            holdout_free(context, &holdout);
            assert_int_equal(fescue_memory_usage(context).blocks, alive);
            fescue_failure_clear(context);
        }
    }
    fault_clear();
    cells_free(context, &cells);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(the_shape_is_read_from_the_pattern),
        BENCH_TEST(gaps_are_as_long_as_the_holes),
        BENCH_TEST(gaps_follow_the_clock),
        BENCH_TEST(dark_places_are_hidden_whole_where_the_table_has_such),
        BENCH_TEST(folds_of_scattered_cells_are_apart),
        BENCH_TEST(newcomers_keep_a_few_cells),
        BENCH_TEST(a_lack_of_memory_leaks_nothing),
    };
    return cmocka_run_group_tests_name("hole shape", tests, NULL, NULL);
}
