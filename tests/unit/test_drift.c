/* SPDX-License-Identifier: MIT
 *
 * What counts as unusual: by median and MAD of the past, so that one wild night in it changes little.
 */
#include "night/night_internal.h"
#include "support.h"

#include <math.h>
#include <string.h>

static bool is_unusual(double value, double floor, const double *past, size_t count, double range[2])
{
    double copy[64];
    memcpy(copy, past, count * sizeof *past);
    return drift_is_unusual(value, floor, copy, count, range);
}

static void a_range_is_of_median_and_mad(void **state)
{
    (void)state;
    /* Median 10, distances 2 1 0 1 2: MAD 1; 4 * 1.4826 + 0.02 * 10 = 6.1304. */
    static const double past[] = {12, 9, 10, 11, 8};
    double range[2];
    assert_false(is_unusual(16.13, 0, past, 5, range));
    assert_close(range[0], 10 - 6.1304, 1e-12);
    assert_close(range[1], 10 + 6.1304, 1e-12);
    assert_true(is_unusual(16.14, 0, past, 5, range));
    assert_true(is_unusual(3.8, 0, past, 5, range));
    assert_false(is_unusual(16.14, 0.1, past, 5, range));
}

static void one_wild_night_does_not_widen_it(void **state)
{
    (void)state;
    static const double calm[] = {1, 1.01, 0.99, 1.02, 0.98, 1}, wild[] = {1, 1.01, 0.99, 1.02, 0.98, 1000};
    double range[2], wider[2];
    assert_true(is_unusual(1.5, 0, calm, 6, range));
    assert_true(is_unusual(1.5, 0, wild, 6, wider));
    assert_true(wider[1] < 1.3);
}

static void too_few_nights_tell_nothing(void **state)
{
    (void)state;
    static const double past[] = {1, 1, 1, 1, 1};
    double range[2];
    assert_false(is_unusual(100, 0, past, 4, range));
    assert_true(is_unusual(100, 0, past, 5, range));
    assert_false(is_unusual(1.01, 0, past, 5, range));
    assert_false(is_unusual(NAN, 0, past, 5, range));
}

int main(void)
{
    const struct CMUnitTest tests[] = {cmocka_unit_test(a_range_is_of_median_and_mad),
                                       cmocka_unit_test(one_wild_night_does_not_widen_it),
                                       cmocka_unit_test(too_few_nights_tell_nothing)};
    return cmocka_run_group_tests_name("drift", tests, NULL, NULL);
}
