/* SPDX-License-Identifier: MIT
 *
 * Interpolation in time on a small table, figures by hand.
 */
#include "judge/judge.h"
#include "support_solve.h"

/* One series seen at times 1, 3 and 7 with 10, 20, 0; hidden at 0, 2, 4, 9 with 11, 15, 14, -2. A second one is never
   seen, and hidden once. Lines are in the order of `line`. */
static void table_make(fescue_context *context, const uint32_t *line, bool by_rows, struct cells *kept,
                       struct cells *hidden)
{
    static const double seen[3] = {10, 20, 0}, missing[5] = {11, 15, 14, -2, 12};
    struct triplet_list a = {.precision = FESCUE_DOUBLE}, b = {.precision = FESCUE_DOUBLE};
    static const uint32_t seen_at[3] = {1, 3, 5}, missing_at[5] = {0, 2, 4, 6, 6};
    for (size_t k = 0; k < 3; k++) {
        uint32_t step = line[seen_at[k]];
        assert_status(context, triplets_append(context, &a, by_rows ? step : 0, by_rows ? 0 : step, seen[k]),
                      FESCUE_OK);
    }
    for (size_t k = 0; k < 5; k++) {
        uint32_t step = line[missing_at[k]], series = k == 4;
        assert_status(context,
                      triplets_append(context, &b, by_rows ? step : series, by_rows ? series : step, missing[k]),
                      FESCUE_OK);
    }
    assert_status(context, cells_build(context, by_rows ? 7 : 2, by_rows ? 2 : 7, &a, kept), FESCUE_OK);
    assert_status(context, cells_build(context, by_rows ? 7 : 2, by_rows ? 2 : 7, &b, hidden), FESCUE_OK);
    triplets_free(context, &a);
    triplets_free(context, &b);
}

static void check(fescue_context *context, const uint32_t *line, bool by_rows)
{
    static const double times[7] = {0, 1, 2, 3, 4, 7, 9};
    /* Nearest at the ends: 10 and 0; half way: 15; a quarter from 20 to 0: 15; the mean of all for the unseen series.
     */
    static const double away[5] = {10 - 11, 15 - 15, 15 - 14, 0 + 2, 10 - 12};
    struct cells kept, hidden;
    struct errors errors;
    double at[7], square = 0, size = 0;
    uint32_t order[7];
    for (uint32_t t = 0; t < 7; t++) {
        at[line[t]] = times[t];
        order[t] = line[t];
    }
    struct time_axis axis = {.along = by_rows ? TIME_ROWS : TIME_COLUMNS, .count = 7, .at = at, .order = order};
    table_make(context, line, by_rows, &kept, &hidden);
    assert_status(context, interpolation_measure(context, &kept, &hidden, &axis, &errors), FESCUE_OK);
    for (size_t k = 0; k < 5; k++) {
        square += away[k] * away[k] / 5;
        size += fabs(away[k]) / 5;
    }
    assert_int_equal(errors.count, 5);
    assert_close(errors.rmse, sqrt(square), 1e-14);
    assert_close(errors.mae, size, 1e-14);
    cells_free(context, &kept);
    cells_free(context, &hidden);
}

static void linear_between_nearest_at_the_ends(void **state)
{
    static const uint32_t plain[7] = {0, 1, 2, 3, 4, 5, 6}, mixed[7] = {4, 0, 6, 2, 1, 5, 3};
    fescue_context *context = bench_of(state)->context;
    check(context, plain, true);
    check(context, mixed, true);
    check(context, plain, false);
    check(context, mixed, false);
}

int main(void)
{
    const struct CMUnitTest tests[] = {BENCH_TEST(linear_between_nearest_at_the_ends)};
    return cmocka_run_group_tests_name("interpolation", tests, NULL, NULL);
}
