/* SPDX-License-Identifier: MIT
 *
 * Sums of second moments over the cells of a line, and the inverse of a packed matrix, against plain double loops.
 */
#include "numeric/numeric.h"
#include "support_table.h"

#include <float.h>
#include <math.h>
#include <string.h>

static double draw(struct random_stream *stream)
{
    return random_normal(stream);
}

/* A symmetric matrix with 1 at (one, one), packed. */
static void moment_draw(struct random_stream *stream, size_t d, size_t one, double *moment)
{
    for (size_t k = 0, at = 0; k < d; k++)
        for (size_t l = 0; l <= k; l++, at++)
            moment[at] = k == one && l == one ? 1 : draw(stream);
}

static double entry(const double *moment, size_t k, size_t l)
{
    return k >= l ? moment[packed_size(k) + l] : moment[packed_size(l) + k];
}

static void gather_check(fescue_context *context, enum fescue_precision precision, size_t d, size_t one, bool weighted)
{
    struct sowing sowing = {23, 17, 2, 0.5, 0.3, precision, 4};
    struct cells cells;
    sow_cells(context, &sowing, &cells);
    const struct half *half = &cells.by_row;
    struct random_stream stream = random_open(1, RANDOM_TEST, (uint32_t)d);
    struct moments moments = {.stride = moments_stride(d), .regressors = d, .one = one};
    double *weight, *second, *target;
    assert_status(context, TAKE(context, 17 * moments.stride, &moments.data), FESCUE_OK);
    assert_status(context, TAKE(context, 17, &weight), FESCUE_OK);
    assert_status(context, TAKE(context, packed_size(d), &second), FESCUE_OK);
    assert_status(context, TAKE(context, d, &target), FESCUE_OK);
    for (size_t j = 0; j < 17; j++) {
        moment_draw(&stream, d, one, moments.data + j * moments.stride);
        weight[j] = 0.1 + random_uniform(&stream);
    }
    moments.weight = weighted ? weight : NULL;
    for (size_t line = 0; line < 23; line++) {
        struct moments_sum sum = {second, target, -1};
        double square = 0;
        moments_gather(&moments, half, precision, line, &sum);
        for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++) {
            double z = cells_value(&cells, half, k), c = weighted ? weight[half->across[k]] : 1;
            square += c * z * z;
        }
        assert_close(sum.square, square, 1e-13 * (1 + square));
        for (size_t a = 0; a < d; a++) {
            double expected = 0;
            for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++) {
                double c = weighted ? weight[half->across[k]] : 1;
                expected +=
                    c * cells_value(&cells, half, k) * entry(moments.data + half->across[k] * moments.stride, a, one);
            }
            assert_close(target[a], expected, 1e-12);
            for (size_t b = 0; b <= a; b++) {
                double s = 0;
                for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++)
                    s += (weighted ? weight[half->across[k]] : 1) *
                         entry(moments.data + half->across[k] * moments.stride, a, b);
                assert_close(second[packed_size(a) + b], s, 1e-12);
            }
        }
    }
    memory_give(context, &moments.data);
    GIVE(context, &weight);
    GIVE(context, &second);
    GIVE(context, &target);
    cells_free(context, &cells);
}

static void sums_are_those_of_plain_loops(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (size_t d = 2; d < 13; d++)
        for (int weighted = 0; weighted < 2; weighted++) {
            gather_check(context, FESCUE_DOUBLE, d, d - 2, weighted);
            gather_check(context, FESCUE_SINGLE, d, 0, weighted);
        }
}

static void inverse_times_matrix_is_identity(void **state)
{
    (void)state;
    double a[66], factor[66], inverse[66];
    for (size_t k = 1; k <= 11; k++) {
        struct random_stream stream = random_open(2, RANDOM_TEST, (uint32_t)k);
        double g[11][11];
        for (size_t i = 0; i < k; i++)
            for (size_t j = 0; j < k; j++)
                g[i][j] = draw(&stream);
        for (size_t i = 0; i < k; i++)
            for (size_t j = 0; j <= i; j++) {
                double sum = i == j ? 0.5 : 0;
                for (size_t p = 0; p < k; p++)
                    sum += g[i][p] * g[j][p];
                a[packed_size(i) + j] = factor[packed_size(i) + j] = sum;
            }
        packed_cholesky(factor, k);
        packed_inverse(factor, k, inverse);
        for (size_t i = 0; i < k; i++)
            for (size_t j = 0; j < k; j++) {
                double sum = 0;
                for (size_t p = 0; p < k; p++)
                    sum += entry(a, i, p) * entry(inverse, p, j);
                assert_close(sum, i == j ? 1 : 0, 1e-11);
            }
    }
}

static void congruence_is_a_product_of_three(void **state)
{
    (void)state;
    enum { MOST = 11, STRIDE = 16 };
    for (size_t k = 1; k <= MOST; k++) {
        struct random_stream stream = random_open(3, RANDOM_TEST, (uint32_t)k);
        double moment[66], map[MOST * STRIDE] = {0}, transposed[MOST * STRIDE] = {0}, work[2 * MOST * STRIDE];
        size_t stride = factor_stride(k);
        moment_draw(&stream, k, k, moment);
        double before[66];
        memcpy(before, moment, sizeof before);
        for (size_t i = 0; i < k; i++)
            for (size_t j = 0; j < k; j++)
                map[i * stride + j] = transposed[j * stride + i] = draw(&stream);
        packed_congruence(moment, k, (struct matrix){map, k, k, stride}, (struct matrix){transposed, k, k, stride},
                          work);
        for (size_t i = 0; i < k; i++)
            for (size_t j = 0; j <= i; j++) {
                double sum = 0;
                for (size_t p = 0; p < k; p++)
                    for (size_t q = 0; q < k; q++)
                        sum += map[i * stride + p] * entry(before, p, q) * map[j * stride + q];
                assert_close(moment[packed_size(i) + j], sum, 1e-11);
            }
    }
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(sums_are_those_of_plain_loops),
        cmocka_unit_test(congruence_is_a_product_of_three),
        cmocka_unit_test(inverse_times_matrix_is_identity),
    };
    return cmocka_run_group_tests_name("moments", tests, NULL, NULL);
}
