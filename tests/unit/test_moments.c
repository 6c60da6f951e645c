/* SPDX-License-Identifier: MIT
 *
 * Sums of second moments over the cells of lines, batches of small systems and the inverse of a packed matrix, against
 * plain double loops.
 */
#include "numeric/numeric.h"
#include "support_table.h"

#include <float.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

enum { LARGEST = 64, ROWS_MOST = 33, MOMENT_MOST = 1024 };
static const char *const kernels[] = {"portable", "avx2", "avx512"}; /* those the processor lacks are not taken */
#define COUNT(array) (sizeof(array) / sizeof *(array))

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

struct gather_case {
    bool in_halves;
    enum fescue_precision precision;
    double seen; /* of the cells: lines that see few positions go through them alone, others together */
    size_t d, one;
    bool weighted, cells_weighted;
    bool from_total; /* lines that see most positions take from the sum of all what they lack */
    double heaviest; /* weight of one position; 0: like the others */
};

/* Of the position times that of the cell. */
static double weight_of(const struct moments *moments, const struct half *half, uint64_t k)
{
    return (moments->weight != NULL ? moments->weight[half->across[k]] : 1) *
           (half->weight != NULL ? (double)half->weight[k] : 1);
}

/* sum over the cells of a line of weight * value * entry (a, b) of the moment */
static double plain_sum(const struct cells *cells, const struct moments *moments, size_t line, size_t a, size_t b,
                        bool valued)
{
    const struct half *half = &cells->by_row;
    double sum = 0;
    for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++) {
        uint32_t j = half->across[k];
        sum += weight_of(moments, half, k) * (valued ? cells_value(cells, half, k) : 1) *
               entry(moments->data + j * moments->stride, a, b);
    }
    return sum;
}

static void line_check(const struct cells *cells, const struct moments *moments, const struct moments_batch *sum,
                       size_t line)
{
    const struct half *half = &cells->by_row;
    size_t lane = line % BATCH_LANES, d = moments->regressors;
    double square = 0;
    for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++) {
        double z = cells_value(cells, half, k);
        square += weight_of(moments, half, k) * z * z;
    }
    double heaviest = 1; /* sums that hold a heavy position have its rounding */
    for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++)
        heaviest = fmax(heaviest, weight_of(moments, half, k));
    assert_close(sum->square[lane], square, 1e-13 * (1 + square));
    for (size_t a = 0; a < d; a++) {
        assert_close(sum->target[a * BATCH_LANES + lane], plain_sum(cells, moments, line, a, moments->one, true),
                     1e-12 * heaviest);
        for (size_t b = 0; b <= a; b++)
            assert_close(sum->second[(packed_size(a) + b) * BATCH_LANES + lane],
                         plain_sum(cells, moments, line, a, b, false), 1e-12 * heaviest);
    }
}

static void cells_draw_weights(fescue_context *context, struct cells *cells)
{
    double *weight;
    assert_status(context, TAKE(context, cells->count, &weight), FESCUE_OK);
    for (uint64_t k = 0; k < cells->count; k++)
        weight[k] = 0.1 + random_uniform_at(2, RANDOM_TEST, 0, k);
    assert_status(context, cells_weigh(context, cells, weight), FESCUE_OK);
    GIVE(context, &weight);
}

/* The moment of a position in halves; it becomes what these hold, so that sums of either are the same. */
static void halves_put(const struct moments *moments, size_t position, uint64_t *halves)
{
    static const double rounding = 0x1p-21;
    double room[MOMENT_MOST], kept[MOMENT_MOST], *moment = moments->data + position * moments->stride;
    size_t d = moments->regressors, one = moments->one, words = moments_words(d), mean = 0, rest = d;
    uint64_t *to = halves + position * words;
    assert_true(moments_room(d) <= MOMENT_MOST);
    moments_halve(moments, moment, room, to);
    for (size_t w = 0; w < words; w++) {
        uint64_t low = to[w] << 32;
        memcpy(&kept[w / 8 * 16 + w % 8], to + w, sizeof *kept);
        memcpy(&kept[w / 8 * 16 + w % 8 + 8], &low, sizeof *kept);
    }
    for (size_t k = 0; k < d; k++) /* row and column of the constant first */
        for (size_t l = 0; l <= k; l++) {
            double *number = moment + packed_size(k) + l, was = *number;
            *number = kept[k == one || l == one ? mean++ : rest++];
            assert_close(*number, was, rounding * fabs(was) + 1e-300);
        }
}

static void gather_check(fescue_context *context, const struct gather_case *at)
{
    enum { ROWS = 23, COLUMNS = 83 };
    struct sowing sowing = {ROWS, COLUMNS, 2, at->seen, 0.3, at->precision, 4};
    struct cells cells;
    sow_cells(context, &sowing, &cells);
    struct random_stream stream = random_open(1, RANDOM_TEST, (uint32_t)at->d);
    struct moments moments = {.stride = moments_stride(at->d), .regressors = at->d, .one = at->one};
    double *weight, *work, *total;
    uint64_t *halves;
    moments.kernel = batch_kernel_choose();
    assert_status(context, TAKE(context, COLUMNS * moments.stride, &moments.data), FESCUE_OK);
    assert_status(context, TAKE(context, COLUMNS, &weight), FESCUE_OK);
    assert_status(context, TAKE(context, moments_batch_size(at->d), &work), FESCUE_OK);
    assert_status(context, TAKE(context, COLUMNS * moments_words(at->d), &halves), FESCUE_OK);
    assert_status(context, TAKE(context, moments_total_size(at->d), &total), FESCUE_OK);
    for (size_t j = 0; j < COLUMNS; j++) {
        moment_draw(&stream, at->d, at->one, moments.data + j * moments.stride);
        weight[j] = 0.1 + random_uniform(&stream);
        halves_put(&moments, j, halves);
    }
    moments.halves = at->in_halves ? halves : NULL;
    moments.weight = at->weighted ? weight : NULL;
    if (at->heaviest > 0)
        weight[COLUMNS / 2] = at->heaviest;
    if (at->cells_weighted)
        cells_draw_weights(context, &cells);
    if (at->from_total)
        moments_total(context, &moments, &cells.by_row, total);
    assert_int_equal(moments.total != NULL, at->from_total && !at->cells_weighted && at->seen > 0.6);
    struct moments_batch sum = moments_batch_carve(work, at->d);
    for (size_t line = 0; line < ROWS; line++) {
        if (line % BATCH_LANES == 0)
            moments_gather(&moments, &cells.by_row, at->precision, line, &sum);
        line_check(&cells, &moments, &sum, line);
    }
    for (size_t lane = ROWS % BATCH_LANES; lane < BATCH_LANES; lane++)
        assert_true(sum.square[lane] == 0 && sum.second[lane] == 0 && sum.target[lane] == 0);
    memory_give(context, &moments.data);
    GIVE(context, &weight);
    GIVE(context, &work);
    GIVE(context, &halves);
    GIVE(context, &total);
    cells_free(context, &cells);
}

static void sums_are_those_of_plain_loops(void **state)
{
    static const double seen[] = {0.05, 0.2, 0.5, 0.97};
    static const size_t sizes[] = {2, 3, 4, 5, 8, 9, 12, 16, 18, 22, 30, 41};
    fescue_context *context = bench_of(state)->context;
    for (size_t n = 0; n < COUNT(kernels); n++) {
        setenv("FESCUE_KERNEL", kernels[n], 1);
        for (size_t k = 0; k < COUNT(sizes); k++)
            for (size_t s = 0; s < COUNT(seen); s++) {
                size_t d = sizes[k];
                for (int half = 0; half < 2; half++) {
                    struct gather_case at = {.in_halves = half != 0, .seen = seen[s], .d = d};
                    at.precision = FESCUE_DOUBLE, at.one = d - 2;
                    at.weighted = s % 2 == 0, at.cells_weighted = k % 2 == 1;
                    gather_check(context, &at);
                    at.precision = FESCUE_SINGLE, at.one = k % 2 == 0 ? 0 : d - 1;
                    at.weighted = s > 1, at.cells_weighted = k % 3 == 1;
                    gather_check(context, &at);
                }
            }
    }
    unsetenv("FESCUE_KERNEL");
}

static void sums_from_the_total_are_the_same(void **state)
{
    static const double seen[] = {0.4, 0.7, 0.8, 0.97, 1};
    static const size_t sizes[] = {2, 4, 8, 9, 12, 18, 22, 30, 41};
    fescue_context *context = bench_of(state)->context;
    for (size_t n = 0; n < COUNT(kernels); n++) {
        setenv("FESCUE_KERNEL", kernels[n], 1);
        for (size_t k = 0; k < COUNT(sizes); k++)
            for (size_t s = 0; s < COUNT(seen); s++)
                for (int half = 0; half < 2; half++) {
                    struct gather_case at = {.in_halves = half != 0, .seen = seen[s], .d = sizes[k]};
                    at.one = sizes[k] - 2, at.weighted = s % 2 == 0, at.from_total = true;
                    gather_check(context, &at);
                    at.one = sizes[k] - 1;
                    at.cells_weighted = true;
                    gather_check(context, &at);
                }
    }
    unsetenv("FESCUE_KERNEL");
}

/* A thousand million times the weight of any other: without it nine digits of the total would be gone. */
static void a_line_that_lacks_a_heavy_position_keeps_its_digits(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (int half = 0; half < 2; half++)
        gather_check(context, &(struct gather_case){.in_halves = half != 0,
                                                    .seen = 0.8,
                                                    .d = 18,
                                                    .one = 16,
                                                    .weighted = true,
                                                    .from_total = true,
                                                    .heaviest = 1e9});
}

/* Added to what is there, whatever the size leaves beside whole tiles. */
static void products_of_rows_are_those_of_plain_loops(void **state)
{
    static double left[ROWS_MOST * LARGEST], right[ROWS_MOST * LARGEST], square[LARGEST * LARGEST];
    struct random_stream stream = random_open(7, RANDOM_TEST, 0);
    (void)state;
    for (size_t k = 0; k < ROWS_MOST * LARGEST; k++) {
        left[k] = draw(&stream);
        right[k] = draw(&stream);
    }
    for (size_t n = 0; n < COUNT(kernels); n++) {
        setenv("FESCUE_KERNEL", kernels[n], 1);
        for (size_t size = 1; size <= LARGEST; size += size < 26 ? 1 : 19)
            for (size_t count = 0; count <= ROWS_MOST; count += 11) {
                size_t stride = factor_stride(size);
                for (size_t k = 0; k < LARGEST * LARGEST; k++)
                    square[k] = 2;
                gram_add(batch_kernel_choose(), left, right, count, size, square);
                for (size_t i = 0; i < size; i++)
                    for (size_t j = 0; j <= i; j++) {
                        double sum = 2;
                        for (size_t c = 0; c < count; c++)
                            sum += left[c * stride + i] * right[c * stride + j];
                        assert_close(square[i * stride + j], sum, 1e-13 * (double)(count + 1));
                    }
            }
    }
    unsetenv("FESCUE_KERNEL");
}

/* A = G G' + 0.5 I, packed. */
static void definite_draw(struct random_stream *stream, size_t k, double *a)
{
    static double g[LARGEST][LARGEST];
    for (size_t i = 0; i < k; i++)
        for (size_t j = 0; j < k; j++)
            g[i][j] = draw(stream);
    for (size_t i = 0; i < k; i++)
        for (size_t j = 0; j <= i; j++) {
            double sum = i == j ? 0.5 : 0;
            for (size_t p = 0; p < k; p++)
                sum += g[i][p] * g[j][p];
            a[packed_size(i) + j] = sum;
        }
}

/* Each lane against the same system on its own; A x = b and A A^-1 = I within what rounding does to A of such
   condition. */
static void lane_check(const double *single, size_t k, const double *x, const double *inverse, size_t lane)
{
    for (size_t i = 0; i < k; i++) {
        double b = 0;
        for (size_t p = 0; p < k; p++)
            b += entry(single, i, p) * x[p * BATCH_LANES + lane];
        assert_close(b, (double)(i + lane), 1e-9 * (double)k);
        for (size_t j = 0; j < k; j++) {
            double sum = 0;
            for (size_t p = 0; p < k; p++) {
                size_t at = p >= j ? packed_size(p) + j : packed_size(j) + p;
                sum += entry(single, i, p) * inverse[at * BATCH_LANES + lane];
            }
            assert_close(sum, i == j ? 1 : 0, 1e-10 * (double)k);
        }
    }
}

/* The bits of a lane, to be compared with what other lanes around it leave of them. */
static double lane_mark(const double *batch, size_t numbers, size_t lane)
{
    double mark = 0;
    for (size_t at = 0; at < numbers; at++)
        mark += batch[at * BATCH_LANES + lane] * (double)(at + 1);
    return mark;
}

static void batches_are_solved_lane_by_lane(void **state)
{
    static double single[BATCH_LANES][LARGEST * (LARGEST + 1) / 2], a[BATCH_LANES * LARGEST * (LARGEST + 1) / 2];
    static double inverse[BATCH_LANES * LARGEST * (LARGEST + 1) / 2], b[BATCH_LANES * LARGEST];
    (void)state;
    for (size_t n = 0; n < COUNT(kernels); n++) {
        setenv("FESCUE_KERNEL", kernels[n], 1);
        const struct batch_kernel *kernel = batch_kernel_choose();
        for (size_t k = 1; k <= LARGEST; k += k < 10 ? 1 : 27) {
            struct random_stream stream = random_open(5, RANDOM_TEST, (uint32_t)k);
            double mark = 0;
            for (size_t lane = 0; lane < BATCH_LANES; lane++)
                definite_draw(&stream, k, single[lane]);
            for (int spoilt = 0; spoilt < 2; spoilt++) {
                for (size_t lane = 0; lane < BATCH_LANES; lane++) {
                    for (size_t at = 0; at < packed_size(k); at++)
                        a[at * BATCH_LANES + lane] = single[lane][at];
                    for (size_t i = 0; i < k; i++)
                        b[i * BATCH_LANES + lane] = (double)(i + lane);
                }
                if (spoilt != 0)
                    a[(packed_size(k) - 1) * BATCH_LANES + 3] = -1; /* no longer definite */
                assert_int_equal(packed_batch_solve(kernel, a, k, b, inverse), spoilt != 0 ? 8 : 0);
                for (size_t lane = 0; lane < BATCH_LANES; lane++)
                    if (spoilt == 0 || lane != 3)
                        lane_check(single[lane], k, b, inverse, lane);
                double now = lane_mark(inverse, packed_size(k), 5) + lane_mark(b, k, 5);
                assert_true(spoilt == 0 || now == mark);
                mark = now;
            }
        }
    }
    unsetenv("FESCUE_KERNEL");
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
        BENCH_TEST(sums_from_the_total_are_the_same),
        BENCH_TEST(a_line_that_lacks_a_heavy_position_keeps_its_digits),
        cmocka_unit_test(products_of_rows_are_those_of_plain_loops),
        cmocka_unit_test(batches_are_solved_lane_by_lane),
        cmocka_unit_test(congruence_is_a_product_of_three),
        cmocka_unit_test(inverse_times_matrix_is_identity),
    };
    return cmocka_run_group_tests_name("moments", tests, NULL, NULL);
}
