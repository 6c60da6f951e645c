/* SPDX-License-Identifier: MIT
 *
 * When the lines of a side were: regular, irregular, unsorted and repeated times, clocks that are set back, and what is
 * refused.
 */
#include "support_reader.h"
#include "table/table_internal.h"

#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>
#include <time.h>

/* A wide table of two columns, one row a label, labels with blanks between. */
static fescue_table *rows_read(struct bench *bench, const char *const *labels, size_t count)
{
    char *text = malloc(64 + 64 * count);
    assert_non_null(text);
    int length = sprintf(text, "t,a,b,c\n");
    for (size_t k = 0; k < count; k++)
        length += sprintf(text + length, "%s,%zu,%zu,1\n", labels[k], k, k + 1);
    fescue_table *table = text_read(bench, text, NULL);
    free(text);
    return table;
}

static struct time_axis rows_find(struct bench *bench, const char *const *labels, size_t count,
                                  enum fescue_time_axis wanted)
{
    struct time_axis axis;
    fescue_table *table = rows_read(bench, labels, count);
    assert_status(bench->context, time_axis_find(bench->context, table, wanted, &axis), FESCUE_OK);
    table_destroy(&table);
    return axis;
}

static void axis_text_is(const struct time_axis *axis, const char *expected)
{
    char text[TIME_TEXT_SIZE];
    assert_string_equal(time_axis_text(axis, text), expected);
}

#define ROWS_FIND(bench, wanted, ...)                                                                                  \
    rows_find((bench), (const char *const[]){__VA_ARGS__},                                                             \
              sizeof((const char *const[]){__VA_ARGS__}) / sizeof(const char *), (wanted))

static void at_is(const struct time_axis *axis, const double *at)
{
    for (uint32_t k = 0; k < axis->count; k++)
        assert_close(axis->at[k], at[k], 0);
}

static void order_is(const struct time_axis *axis, const uint32_t *order)
{
    for (uint32_t k = 0; k < axis->count; k++)
        assert_int_equal(axis->order[k], order[k]);
}

static void a_clock_with_gaps(void **state)
{
    struct bench *bench = bench_of(state);
    struct time_axis axis = ROWS_FIND(bench, FESCUE_TIME_AUTO, "2024-04-01T00:00", "2024-04-01T01:00",
                                      "2024-04-01T02:00", "2024-04-01T05:00", "2024-04-02");
    assert_int_equal(axis.along, TIME_ROWS);
    assert_int_equal(axis.count, 5);
    assert_close(axis.step_seconds, 3600, 0);
    assert_close(axis.start, 1711929600, 0);
    at_is(&axis, (const double[]){0, 1, 2, 5, 24});
    assert_true(axis.is_sorted);
    axis_text_is(&axis, "rows are times, step 1 h, 2 gaps in the clock");
    time_axis_free(bench->context, &axis);
    assert_int_equal(axis.along, TIME_NONE);
}

static void times_in_any_order_and_equal_ones(void **state)
{
    struct bench *bench = bench_of(state);
    struct time_axis axis =
        ROWS_FIND(bench, FESCUE_TIME_AUTO, "2024-04-03", "2024-04-01", "2024-04-04", "2024-04-01T00:00", "2024-04-02");
    at_is(&axis, (const double[]){2, 0, 3, 0, 1});
    order_is(&axis, (const uint32_t[]){1, 3, 4, 0, 2});
    assert_false(axis.is_sorted);
    assert_int_equal(axis.equal, 1);
    assert_int_equal(axis.set_back, 0);
    axis_text_is(&axis, "rows are times, step 1 d, 1 line at the time of another, not in order");
    time_axis_free(bench->context, &axis);
}

/* A label of a time may come twice, any other one may not (test_delimited). */
static void a_time_may_come_twice(void **state)
{
    struct bench *bench = bench_of(state);
    struct time_axis axis = ROWS_FIND(bench, FESCUE_TIME_AUTO, "2024-04-01T10:00:00.1Z", "2024-04-01T10:00:00.2Z",
                                      "2024-04-01T10:00:00.2Z", "2024-04-01T10:00:00.3Z", "2024-04-01T10:00:00.4Z");
    order_is(&axis, (const uint32_t[]){0, 1, 2, 3, 4});
    assert_int_equal(axis.equal, 1);
    assert_close(axis.at[4], 3, 1e-9);
    axis_text_is(&axis, "rows are times, step 0.1 s, 1 line at the time of another");
    time_axis_free(bench->context, &axis);
}

static void offsets_from_utc_are_exact(void **state)
{
    struct bench *bench = bench_of(state);
    /* Berlin, the night in which summer time ends: 01:30, 02:30 and 02:30 again, 03:30. */
    struct time_axis axis = ROWS_FIND(bench, FESCUE_TIME_AUTO, "2024-10-27T01:30+02:00", "2024-10-27T02:30+02:00",
                                      "2024-10-27T02:30+01:00", "2024-10-27T03:30+01:00");
    at_is(&axis, (const double[]){0, 1, 2, 3});
    axis_text_is(&axis, "rows are times, step 1 h");
    time_axis_free(bench->context, &axis);
}

/* The same night on the wall, hourly and every half hour; the hour is sorted out in the order of the file. */
static void an_hour_that_comes_twice(void **state)
{
    struct bench *bench = bench_of(state);
    struct time_axis axis = ROWS_FIND(bench, FESCUE_TIME_AUTO, "2024-10-27T00:00", "2024-10-27T01:00",
                                      "2024-10-27T02:00", "2024-10-27T02:00", "2024-10-27T03:00", "2024-10-27T04:00");
    at_is(&axis, (const double[]){0, 1, 2, 3, 4, 5});
    assert_int_equal(axis.set_back, 1);
    axis_text_is(&axis, "rows are times, step 1 h, 1 hour that came twice");
    time_axis_free(bench->context, &axis);
    axis = ROWS_FIND(bench, FESCUE_TIME_AUTO, "2024-11-03 00:30", "2024-11-03 01:00", "2024-11-03 01:30",
                     "2024-11-03 01:00", "2024-11-03 01:30", "2024-11-03 02:00");
    at_is(&axis, (const double[]){0, 1, 2, 3, 4, 5});
    order_is(&axis, (const uint32_t[]){0, 1, 2, 3, 4, 5});
    axis_text_is(&axis, "rows are times, step 30 min, 1 hour that came twice");
    time_axis_free(bench->context, &axis);
}

/* Hours by the clock of Berlin from March 2023 to April 2025, two readings missing: one step, and two gaps beside the
   hour that the spring of 2025, whose autumn is not there, leaves. Summer time: directive 2000/84/EC, last Sundays. */
static void years_by_the_clock_on_the_wall(void **state)
{
    struct bench *bench = bench_of(state);
    enum { HOURS = 18500, MISSING = 5000, SECOND = 1679616000 /* 2023-03-24T00:00 */ };
    static const int64_t changes[] = {1679792400, 1698541200, 1711846800, 1729990800, 1743296400}; /* UTC */
    char *text = malloc(64 + (size_t)HOURS * 40);
    assert_non_null(text);
    int length = sprintf(text, "t,a,b,c\n");
    for (int64_t k = 0; k < HOURS; k++) {
        int64_t utc = SECOND + 3600 * k, wall = utc + 3600;
        if (k == MISSING || k == 2 * MISSING)
            continue;
        for (int c = 0; c < 5; c++)
            if (utc >= changes[c])
                wall += c % 2 == 0 ? 3600 : -3600;
        char label[32];
        time_t seconds = (time_t)wall;
        struct tm parts;
        strftime(label, sizeof label, "%Y-%m-%dT%H:%M", gmtime_r(&seconds, &parts));
        length += sprintf(text + length, "%s,1,2,%d\n", label, (int)(k % 7));
    }
    fescue_table *table = text_read(bench, text, NULL);
    struct time_axis axis;
    assert_status(bench->context, time_axis_find(bench->context, table, FESCUE_TIME_AUTO, &axis), FESCUE_OK);
    assert_int_equal(axis.count, HOURS - 2);
    assert_int_equal(axis.set_back, 2);
    assert_true(axis.is_sorted);
    assert_int_equal(axis.equal, 0);
    assert_int_equal(axis.gaps, 3);
    for (uint32_t k = 0; k < axis.count; k++) {
        int64_t hour = (int64_t)k + (k >= MISSING) + (k >= 2 * MISSING - 1);
        bool is_last_summer = SECOND + 3600 * hour >= changes[4];
        assert_close(axis.at[k], (double)(hour + is_last_summer), 0);
    }
    time_axis_free(bench->context, &axis);
    table_destroy(&table);
    free(text);
}

static void steps_back_that_no_calendar_makes(void **state)
{
    struct bench *bench = bench_of(state);
    struct time_axis axis = ROWS_FIND(bench, FESCUE_TIME_AUTO, "2024-06-10T13:00", "2024-06-10T14:00",
                                      "2024-06-10T14:00", "2024-06-10T15:00"); /* by day */
    at_is(&axis, (const double[]){0, 1, 1, 2});
    assert_int_equal(axis.set_back, 0);
    time_axis_free(bench->context, &axis);
    axis = ROWS_FIND(bench, FESCUE_TIME_AUTO, "2024-06-10T01:00", "2024-06-10T01:00", "2024-06-10T02:00",
                     "2024-06-10T02:00", "2024-06-10T03:00"); /* twice in a night */
    at_is(&axis, (const double[]){0, 0, 1, 1, 2});
    assert_int_equal(axis.set_back, 0);
    time_axis_free(bench->context, &axis);
}

static void labels_that_are_no_times(void **state)
{
    struct bench *bench = bench_of(state);
    struct time_axis axis = ROWS_FIND(bench, FESCUE_TIME_AUTO, "Ada", "Bea", "Cy");
    assert_int_equal(axis.along, TIME_NONE);
    assert_string_equal(axis.note, "");
    axis_text_is(&axis, "");
    axis = ROWS_FIND(bench, FESCUE_TIME_AUTO, "2001", "2002", "2003", "2004"); /* numbers */
    assert_int_equal(axis.along, TIME_NONE);
    axis = ROWS_FIND(bench, FESCUE_TIME_AUTO, "2024-04-01", "2024-04-02", "total", "2024-04-03");
    assert_int_equal(axis.along, TIME_NONE);
    assert_string_equal(axis.note, "rows are not taken for times: 'total' (row 3) is none");
    axis = ROWS_FIND(bench, FESCUE_TIME_AUTO, "2024-04-01T00:00Z", "2024-04-01T01:00", "2024-04-01T02:00Z");
    assert_string_equal(axis.note, "rows are not taken for times: '2024-04-01T01:00' (row 2) has no offset from UTC, "
                                   "those before it have one");
    axis = ROWS_FIND(bench, FESCUE_TIME_AUTO, "2024-04-01", "2024-04-02"); /* too few to know a step */
    assert_int_equal(axis.along, TIME_NONE);
    axis = ROWS_FIND(bench, FESCUE_TIME_NONE, "2024-04-01", "2024-04-02", "2024-04-03");
    assert_int_equal(axis.along, TIME_NONE);
}

static void numbers_are_times_on_request(void **state)
{
    struct bench *bench = bench_of(state);
    struct time_axis axis = ROWS_FIND(bench, FESCUE_TIME_ROWS, "2001", "2002", "2003", "2008.5");
    at_is(&axis, (const double[]){0, 1, 2, 7.5});
    assert_true(isnan(axis.step_seconds));
    assert_true(isnan(axis.start));
    axis_text_is(&axis, "rows are times in numbers, 1 gap in the clock");
    time_axis_free(bench->context, &axis);
}

static void columns_can_be_times(void **state)
{
    struct bench *bench = bench_of(state);
    struct time_axis axis;
    fescue_table *table =
        text_read(bench, "site,2024-05-01,2024-05-08,2024-05-15,2024-05-29\nA,1,2,3,4\nB,1,2,3,4\n", NULL);
    assert_status(bench->context, time_axis_find(bench->context, table, FESCUE_TIME_AUTO, &axis), FESCUE_OK);
    assert_int_equal(axis.along, TIME_COLUMNS);
    at_is(&axis, (const double[]){0, 1, 2, 4});
    axis_text_is(&axis, "columns are times, step 7 d, 1 gap in the clock");
    time_axis_free(bench->context, &axis);
    assert_status(bench->context, time_axis_find(bench->context, table, FESCUE_TIME_ROWS, &axis), FESCUE_BAD_DATA);
    assert_non_null(strstr(fescue_failure_text(bench->context),
                           ": --time-axis rows: the label 'A' of row 1 is neither a time as ISO 8601 writes it nor a "
                           "number"));
    fescue_failure_clear(bench->context);
    table_destroy(&table);
}

static void unlabelled_lines_are_evenly_spaced(void **state)
{
    struct bench *bench = bench_of(state);
    struct time_axis axis;
    fescue_table *table =
        text_read(bench, "%%MatrixMarket matrix coordinate real general\n4 3 3\n1 1 1\n2 2 1\n4 3 1\n", NULL);
    assert_status(bench->context, time_axis_find(bench->context, table, FESCUE_TIME_AUTO, &axis), FESCUE_OK);
    assert_int_equal(axis.along, TIME_NONE);
    assert_status(bench->context, time_axis_find(bench->context, table, FESCUE_TIME_COLUMNS, &axis), FESCUE_OK);
    at_is(&axis, (const double[]){0, 1, 2});
    assert_int_equal(axis.count, 3);
    assert_true(isnan(axis.step_seconds));
    axis_text_is(&axis, "columns are taken for evenly spaced times");
    time_axis_free(bench->context, &axis);
    table_destroy(&table);
}

static void requests_that_cannot_be(void **state)
{
    struct bench *bench = bench_of(state);
    static const struct {
        const char *text, *sentence;
    } cases[] = {
        {"t,a,b,c\n2024-01-01,1,2,3\nx,1,2,3\n", "the label 'x' of row 2 is neither a time"},
        {"t,a,b,c\n1.5,1,2,3\n2024-01-01,1,2,3\n", "the label '2024-01-01' of row 2 is neither a time"},
        {"t,a,b,c\n2024-01-01,1,2,3\n2024-01-01,1,2,3\n", "all labels are the same time"},
        {"t,a,b,c\n2024-01-01T00Z,1,2,3\n2024-01-01T01,1,2,3\n", "the label '2024-01-01T01' of row 2 has no offset"},
        {"t,a,b,c\n0,1,2,3\n1e-300,1,2,3\n1e300,1,2,3\n", "the numbers of the rows are too far apart"},
    };
    for (size_t k = 0; k < sizeof cases / sizeof cases[0]; k++) {
        struct time_axis axis;
        fescue_table *table = text_read(bench, cases[k].text, NULL);
        assert_status(bench->context, time_axis_find(bench->context, table, FESCUE_TIME_ROWS, &axis), FESCUE_BAD_DATA);
        if (strstr(fescue_failure_text(bench->context), cases[k].sentence) == NULL)
            fail_msg("%s", fescue_failure_text(bench->context));
        assert_int_equal(axis.along, TIME_NONE);
        fescue_failure_clear(bench->context);
        table_destroy(&table);
    }
}

static void a_lack_of_memory_leaks_nothing(void **state)
{
    struct bench *bench = bench_of(state);
    static const char *const labels[] = {"2024-10-27T02:00", "2024-10-27T02:00", "2024-10-27T04:00", "2024-10-27T03:00",
                                         "2024-10-27T05:00"};
    fescue_table *table = rows_read(bench, labels, 5);
    uint64_t blocks = fescue_memory_usage(bench->context).blocks;
    bool met = true;
    for (uint64_t n = 1; met; n++) {
        struct time_axis axis;
        fault_plan(FAULT_TAKE, n, false, 0);
        fescue_status status = time_axis_find(bench->context, table, FESCUE_TIME_AUTO, &axis);
        met = fault_met();
        fault_clear();
        assert_status(bench->context, status, met ? FESCUE_NO_MEMORY : FESCUE_OK);
        time_axis_free(bench->context, &axis);
        assert_int_equal(fescue_memory_usage(bench->context).blocks, blocks);
        fescue_failure_clear(bench->context);
    }
    table_destroy(&table);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(a_clock_with_gaps),
        BENCH_TEST(times_in_any_order_and_equal_ones),
        BENCH_TEST(a_time_may_come_twice),
        BENCH_TEST(offsets_from_utc_are_exact),
        BENCH_TEST(an_hour_that_comes_twice),
        BENCH_TEST(years_by_the_clock_on_the_wall),
        BENCH_TEST(steps_back_that_no_calendar_makes),
        BENCH_TEST(labels_that_are_no_times),
        BENCH_TEST(numbers_are_times_on_request),
        BENCH_TEST(columns_can_be_times),
        BENCH_TEST(unlabelled_lines_are_evenly_spaced),
        BENCH_TEST(requests_that_cannot_be),
        BENCH_TEST(a_lack_of_memory_leaks_nothing),
    };
    return cmocka_run_group_tests_name("time_axis", tests, NULL, NULL);
}
