/* SPDX-License-Identifier: MIT
 *
 * Half-widths of intervals, and the order statistic under them.
 */
#include "judge/judge_internal.h"
#include "support.h"

#include <float.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

/* With n residuals the place is ceil((n+1) level): 9 of 9 at 0.9, 10 of 19 at 0.5, none of 8 at 0.9. */
static void worked_places(void **state)
{
    (void)state;
    double nine[] = {-9, 1, 8, -2, 7, 3, -6, 4, 5}, eight[] = {1, 2, 3, 4, 5, 6, 7, 8}, one[] = {-3}, nineteen[19];
    for (int k = 0; k < 19; k++)
        nineteen[k] = k % 2 == 0 ? k + 1 : -(k + 1);
    assert_close(interval_halfwidth(nine, 9, 0.9), 9, 0);
    assert_close(interval_halfwidth(nine, 9, 0.8), 8, 0);
    assert_close(interval_halfwidth(nine, 9, 0.81), 9, 0);
    assert_true(isinf(interval_halfwidth(nine, 9, 0.91)));
    assert_true(isinf(interval_halfwidth(eight, 8, 0.9)));
    assert_close(interval_halfwidth(nineteen, 19, 0.5), 10, 0);
    assert_close(interval_halfwidth(nineteen, 19, 0.95), 19, 0);
    assert_close(interval_halfwidth(one, 1, 0.5), 3, 0);
    assert_true(isinf(interval_halfwidth(one, 1, 0.6)));
    assert_true(isinf(interval_halfwidth(NULL, 0, 0.1)));
}

/* Every n and every level that is a whole place: the product must not be rounded up past it. */
static void whole_places_are_met_exactly(void **state)
{
    (void)state;
    double residuals[400];
    for (uint64_t n = 1; n <= 399; n++)
        for (uint64_t place = 1; place <= n; place += 1 + n / 13) {
            for (uint64_t k = 0; k < n; k++)
                residuals[k] = (double)((k * 7919) % n) + 1; /* 7919 is prime and larger: a permutation of 1..n */
            double got = interval_halfwidth(residuals, n, (double)place / (double)(n + 1));
            assert_close(got, (double)place, 0);
        }
}

static void a_number_that_is_none_gives_no_promise(void **state)
{
    (void)state;
    double residuals[] = {1, NAN, 2, 3, 4, 5, 6, 7, 8, 9};
    assert_true(isinf(interval_halfwidth(residuals, 10, 0.1)));
}

/* Cauchy residuals, a new one each time: covered in place/(n+1) of the cases, for any distribution without ties. */
static void coverage_is_what_exchangeability_promises(void **state)
{
    (void)state;
    enum { TRIALS = 20000, N = 24 };
    static const double levels[] = {0.5, 0.8, 0.9};
    struct random_stream stream = random_open(11, RANDOM_TEST, 0);
    for (size_t l = 0; l < 3; l++) {
        double expected = ceil((N + 1) * levels[l] - 1e-9) / (N + 1);
        uint64_t covered = 0;
        for (int t = 0; t < TRIALS; t++) {
            double residuals[N], fresh = tan(3.14159265358979 * (random_uniform(&stream) - 0.5));
            for (int k = 0; k < N; k++)
                residuals[k] = tan(3.14159265358979 * (random_uniform(&stream) - 0.5));
            covered += fabs(fresh) <= interval_halfwidth(residuals, N, levels[l]);
        }
        double deviation = sqrt(expected * (1 - expected) / TRIALS);
        assert_close((double)covered / TRIALS, expected, 4 * deviation);
        assert_true((double)covered / TRIALS > levels[l] - 4 * deviation);
    }
}

static int compare(const void *a, const void *b)
{
    double x = *(const double *)a, y = *(const double *)b;
    return (x > y) - (x < y);
}

static double value_at(const void *data, uint64_t k)
{
    return ((const double *)data)[k];
}

static void every_place_agrees_with_sorting(void **state)
{
    (void)state;
    enum { N = 300 };
    double value[N] = {0, -0.0, DBL_MIN, -DBL_MIN, DBL_MAX, -DBL_MAX, INFINITY, -INFINITY, DBL_TRUE_MIN, 1, 1, 1, -1};
    double sorted[N];
    struct random_stream stream = random_open(12, RANDOM_TEST, 0);
    for (int k = 13; k < N; k++)
        value[k] = random_normal(&stream) * pow(10, 20 * random_normal(&stream));
    memcpy(sorted, value, sizeof sorted);
    qsort(sorted, N, sizeof *sorted, compare);
    for (uint64_t k = 0; k < N; k++)
        assert_true(order_pick(value_at, value, N, k) == sorted[k]);
    assert_true(order_pick(value_at, value, 1, 0) == value[0]);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(worked_places),
        cmocka_unit_test(whole_places_are_met_exactly),
        cmocka_unit_test(a_number_that_is_none_gives_no_promise),
        cmocka_unit_test(coverage_is_what_exchangeability_promises),
        cmocka_unit_test(every_place_agrees_with_sorting),
    };
    return cmocka_run_group_tests_name("interval", tests, NULL, NULL);
}
