/* SPDX-License-Identifier: MIT
 *
 * Packed Cholesky: L L' = A and A x = b for all sizes in use; the lift when A is not definite to rounding.
 */
#include "numeric/numeric.h"
#include "support.h"

#include <float.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

enum { MOST = 257 };
static const size_t sizes[] = {1, 2, 3, 4, 5, 8, 13, 16, 31, 32, 33, 64, 100, 256, 257};
#define COUNT(array) (sizeof(array) / sizeof *(array))

static double *at(double *a, size_t i, size_t j)
{
    return i < j ? a + j * (j + 1) / 2 + i : a + i * (i + 1) / 2 + j;
}

/* A = sum of `terms` random outer products + ridge I. */
static void gram_draw(double *a, size_t k, size_t terms, double ridge)
{
    struct random_stream stream = random_open(k, RANDOM_TEST, 1);
    double p[MOST];
    memset(a, 0, packed_size(k) * sizeof *a);
    for (size_t t = 0; t < terms; t++) {
        for (size_t i = 0; i < k; i++)
            p[i] = random_normal(&stream);
        for (size_t i = 0; i < k; i++)
            for (size_t j = 0; j <= i; j++)
                *at(a, i, j) += p[i] * p[j];
    }
    for (size_t i = 0; i < k; i++)
        *at(a, i, i) += ridge;
}

/* |L L' - A| <= bound_ij, entry by entry. */
static void factor_check(double *l, double *a, size_t k, double lift)
{
    for (size_t i = 0; i < k; i++)
        for (size_t j = 0; j <= i; j++) {
            double sum = 0, terms = 0;
            for (size_t c = 0; c <= j; c++) {
                sum += *at(l, i, c) * *at(l, j, c);
                terms += fabs(*at(l, i, c) * *at(l, j, c));
            }
            /* Higham 2002, theorem 10.3. */
            assert_close(sum, *at(a, i, j) + (i == j ? lift : 0), (double)(k + 2) * DBL_EPSILON * terms + 0.1 * lift);
        }
}

static void definite_matrices_are_solved(void **state)
{
    static double a[MOST * (MOST + 1) / 2], l[MOST * (MOST + 1) / 2], x[MOST], b[MOST];
    (void)state;
    for (size_t s = 0; s < COUNT(sizes); s++) {
        size_t k = sizes[s];
        gram_draw(a, k, k + 5, 0.1);
        memcpy(l, a, packed_size(k) * sizeof *a);
        packed_cholesky(l, k);
        factor_check(l, a, k, 0);
        double trace = 0;
        for (size_t i = 0; i < k; i++) {
            x[i] = b[i] = (double)i - 3;
            trace += *at(a, i, i);
        }
        packed_solve(l, k, x);
        for (size_t i = 0; i < k; i++) {
            double sum = 0, terms = fabs(b[i]);
            for (size_t j = 0; j < k; j++) {
                sum += *at(a, i, j) * x[j];
                terms += fabs(x[j]) * trace / (double)k;
            }
            assert_close(sum, b[i], (double)(4 * k + 10) * DBL_EPSILON * terms);
        }
    }
}

static void deficient_matrices_are_lifted(void **state)
{
    static double a[MOST * (MOST + 1) / 2], l[MOST * (MOST + 1) / 2];
    (void)state;
    for (size_t s = 1; s < COUNT(sizes); s++) {
        size_t k = sizes[s];
        double trace = 0, lift = 0;
        gram_draw(a, k, k / 2, 0);
        memcpy(l, a, packed_size(k) * sizeof *a);
        packed_cholesky(l, k);
        for (size_t i = 0; i < k; i++) {
            double row = 0;
            trace += *at(a, i, i);
            for (size_t j = 0; j <= i; j++)
                row += *at(l, i, j) * *at(l, i, j);
            lift += (row - *at(a, i, i)) / (double)k;
            assert_true(isfinite(row) && *at(l, i, i) > 0);
        }
        /* Two or three tenfold rises at the most. */
        assert_true(lift < 1.1e-11 * trace / (double)k);
    }
}

/* [[1 2] [2 1]] has the eigenvalue -1: the lift must exceed 1. Restored between attempts, so that it ends at
   1e-14, 1e-13, ... times trace/k = 1, that is 10. */
static void an_indefinite_matrix_is_lifted_far(void **state)
{
    double a[] = {1, 2, 1}, l[] = {1, 2, 1};
    (void)state;
    packed_cholesky(l, 2);
    factor_check(l, a, 2, l[0] * l[0] - 1);
    assert_true(l[0] * l[0] - 1 > 1 && l[0] * l[0] - 1 < 11);
}

/* The share of the mean diagonal number comes on top, also where A is definite. */
static void a_lift_may_come_first(void **state)
{
    static double a[MOST * (MOST + 1) / 2], l[MOST * (MOST + 1) / 2];
    (void)state;
    for (size_t s = 0; s < COUNT(sizes); s++) {
        size_t k = sizes[s];
        double trace = 0;
        gram_draw(a, k, k + 5, 0.1);
        memcpy(l, a, packed_size(k) * sizeof *a);
        for (size_t i = 0; i < k; i++)
            trace += *at(a, i, i);
        packed_cholesky_lifted(l, k, 0.25);
        for (size_t i = 0; i < k; i++)
            *at(a, i, i) += 0.25 * trace / (double)k;
        factor_check(l, a, k, 0);
    }
}

static void zero_and_what_is_not_finite(void **state)
{
    double zero[6] = {0}, b[] = {0, 0, 0}, bad[] = {1, 0, (double)NAN}, off[] = {1, (double)NAN, 1};
    (void)state;
    packed_cholesky(zero, 3);
    packed_solve(zero, 3, b);
    for (size_t i = 0; i < 3; i++)
        assert_true(*at(zero, i, i) == 1 && b[i] == 0);
    packed_cholesky(bad, 2);
    assert_true(isnan(bad[0]) && isnan(bad[2]));
    packed_cholesky(off, 2);
    assert_true(isnan(off[2]));
    packed_cholesky(NULL, 0);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(definite_matrices_are_solved),       BENCH_TEST(deficient_matrices_are_lifted),
        BENCH_TEST(an_indefinite_matrix_is_lifted_far), BENCH_TEST(a_lift_may_come_first),
        BENCH_TEST(zero_and_what_is_not_finite),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
