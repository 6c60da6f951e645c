/* SPDX-License-Identifier: MIT
 *
 * The factor zeta at its limits and against its series, and the step rules by their defining equations.
 */
#include "manifold/manifold.h"
#include "support.h"

#include <float.h>
#include <math.h>

static void zeta_is_one_without_negative_curvature(void **state)
{
    (void)state;
    assert_close(curvature_zeta(0, 5), 1, 0);
    assert_close(curvature_zeta(2, 1e9), 1, 0);
    assert_close(curvature_zeta(-3, 0), 1, 0);
    assert_close(curvature_zeta(-1e-300, 1), 1, 0);
    assert_close(curvature_zeta(-1, 1e-300), 1, 0);
}

/* The Taylor series of x / tanh(x) to x^6, coefficients 1/3, -1/45, 2/945 from the Bernoulli numbers; the next term,
   x^8 / 4725, is below 1e-17 here. */
static void zeta_follows_its_series_near_zero(void **state)
{
    (void)state;
    for (double x = 1e-9; x < 0.02; x *= 1.1) {
        double square = x * x;
        double series = 1 + square / 3 - square * square / 45 + 2 * square * square * square / 945;
        assert_close(curvature_zeta(-1, x), series, 3 * DBL_EPSILON);
        assert_close(curvature_zeta(-4, x / 2), series, 3 * DBL_EPSILON);
    }
}

static void zeta_is_the_root_times_the_radius_when_large(void **state)
{
    (void)state;
    for (double x = 20; x < 1e150; x *= 3)
        assert_close(curvature_zeta(-1, x) / x, 1, 3 * DBL_EPSILON);
    assert_close(curvature_zeta(-1e8, 1e4) / 1e8, 1, 3 * DBL_EPSILON);
}

/* coth(1) = 1.3130352854993313, from tables, quoted from memory; and zeta grows with radius and curvature. */
static void zeta_in_between(void **state)
{
    (void)state;
    assert_close(curvature_zeta(-1, 1), 1.3130352854993313, 4 * DBL_EPSILON);
    double last = 1;
    for (double x = 0.01; x < 50; x += 0.01) {
        double zeta = curvature_zeta(-1, x);
        assert_true(zeta > last && zeta >= x && zeta <= 1 + x);
        assert_close(curvature_zeta(-x * x, 1), zeta, 4 * DBL_EPSILON * zeta);
        last = zeta;
    }
}

/* In the hyperbolic plane of curvature -1 the law of cosines is known: cosh a = cosh b cosh c - sinh b sinh c cos A.
   The comparison that zeta stands for must hold for every triangle, and is met with equality to second order for small
   b at a right angle, so that no smaller factor would do. */
static void zeta_is_what_hyperbolic_triangles_need(void **state)
{
    (void)state;
    for (double b = 0.05; b < 3; b += 0.35)
        for (double c = 0.05; c < 3; c += 0.35)
            for (double angle = 0; angle <= 3.1416; angle += 0.2) {
                double a = acosh(fmax(1, cosh(b) * cosh(c) - sinh(b) * sinh(c) * cos(angle)));
                double bound = curvature_zeta(-1, c) * b * b + c * c - 2 * b * c * cos(angle);
                assert_true(a * a <= bound + 1e-12);
            }
    for (double c = 0.5; c < 3; c += 0.5) {
        double b = 1e-3, a = acosh(cosh(b) * cosh(c));
        assert_close((a * a - c * c) / (b * b), curvature_zeta(-1, c), 1e-5);
    }
}

static void a_number_that_is_none_poisons_zeta(void **state)
{
    (void)state;
    assert_true(isnan(curvature_zeta((double)NAN, 1)));
}

static void steps_follow_their_rules(void **state)
{
    (void)state;
    assert_close(step_smooth(8), 0.125, 0);
    assert_close(step_subgradient(6, 2, 1, 9), 1, DBL_EPSILON);
    assert_close(step_subgradient(6, 2, 4, 9), 0.5, DBL_EPSILON);
    assert_close(step_strongly_convex(0.5, 1), 2, DBL_EPSILON);
    assert_close(step_strongly_convex(0.5, 7), 0.5, DBL_EPSILON);
}

/* The weights of a running mean make it the mean. */
static void weights_average(void **state)
{
    (void)state;
    double mean = 0, sum = 0;
    for (uint64_t t = 1; t <= 50; t++) {
        double x = sin((double)(t * t));
        sum += x;
        mean += average_weight(t) * (x - mean);
        assert_close(mean, sum / (double)t, 1e-15);
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        cmocka_unit_test(zeta_is_one_without_negative_curvature),
        cmocka_unit_test(zeta_follows_its_series_near_zero),
        cmocka_unit_test(zeta_is_the_root_times_the_radius_when_large),
        cmocka_unit_test(zeta_in_between),
        cmocka_unit_test(zeta_is_what_hyperbolic_triangles_need),
        cmocka_unit_test(a_number_that_is_none_poisons_zeta),
        cmocka_unit_test(steps_follow_their_rules),
        cmocka_unit_test(weights_average),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
