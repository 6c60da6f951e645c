/* SPDX-License-Identifier: MIT
 *
 * The evidence fit: against the closed solution of the fully seen table, and by what it promises: components that are
 * there are found, others pruned; nothing depends on threads, orientation or units.
 */
#include "solve/solve.h"
#include "support_solve.h"

static struct evidence_request request_of(size_t rank, enum fescue_offsets offsets)
{
    return (struct evidence_request){.offsets = offsets,
                                     .rank = rank,
                                     .rank_most = rank,
                                     .seed = 1,
                                     .rounds = 400,
                                     .change = 1e-9,
                                     .noise = EVIDENCE_NOISE_EQUAL};
}

static struct evidence_result learn(fescue_context *context, const struct cells *cells,
                                    const struct evidence_request *request)
{
    struct evidence_result fit;
    assert_status(context, evidence_learn(context, cells, request, &fit), FESCUE_OK);
    return fit;
}

/* RMSE of the estimates over all cells against the truth. */
static double error_of(const struct evidence_result *fit, const struct sowing *sowing)
{
    double square = 0;
    for (uint32_t i = 0; i < sowing->rows; i++)
        for (uint32_t j = 0; j < sowing->columns; j++) {
            double e = model_estimate(&fit->model, i, j) - sowing_truth(sowing, i, j);
            square += e * e;
        }
    return sqrt(square / ((double)sowing->rows * sowing->columns));
}

/* Every cell seen, no offsets: the empirical variational Bayes solution shrinks each singular value g of the table to
       g/2 (1 - (m+n) s2/g^2 + sqrt((1 - (m+n) s2/g^2)^2 - 4 m n s2^2/g^4))
   or to 0 (Nakajima, Sugiyama, Babacan, Tomioka 2013, "Global analytic solution of fully-observed variational Bayesian
   matrix factorization", theorem 2, from memory). s2 is the one the fit learnt. */
static void closed_solution_check(fescue_context *context, const struct sowing *sowing, double noise_error)
{
    struct plot plot = plot_sow(context, sowing, 0);
    struct evidence_request request = request_of(10, FESCUE_OFFSETS_NONE);
    struct evidence_result fit = learn(context, &plot.cells, &request);
    double *dense = dense_targets(&plot, NAN), spectrum[100];
    double m = sowing->rows, n = sowing->columns;
    struct low_rank truncated;
    dense_truncate(context, dense, sowing->rows, sowing->columns, 3, &truncated, spectrum);
    assert_int_equal(fit.model.low_rank.rank, 3);
    for (size_t k = 0; k < 3; k++) {
        double g = spectrum[k] * plot.problem.scale, x = fit.noise * fit.noise / (g * g);
        double half = 1 - (m + n) * x;
        double shrunk = g / 2 * (half + sqrt(half * half - 4 * m * n * x * x));
        assert_close(fit.model.low_rank.spectrum[k], shrunk, 1e-5 * g);
        assert_true(shrunk < 0.999 * g);
    }
    assert_close(fit.noise, 0.8, noise_error);
    low_rank_free(context, &truncated);
    free(dense);
    evidence_result_free(context, &fit);
    plot_free(&plot);
}

/* The second is large enough for moments in halves. */
static void full_table_meets_the_closed_solution(void **state)
{
    fescue_context *context = bench_of(state)->context;
    closed_solution_check(context, &(struct sowing){40, 25, 3, 1, 0.8, FESCUE_DOUBLE, 3}, 0.06);
    closed_solution_check(context, &(struct sowing){520, 100, 3, 1, 0.8, FESCUE_DOUBLE, 3}, 0.01);
}

/* A settled fit is where one round more from its means alone leads, once these are known to be shrunk: on a table of
   which all is seen variances follow from them exactly. Taken for certain they move. */
static void a_fit_goes_on_where_one_ended(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {40, 25, 3, 1, 1.2, FESCUE_DOUBLE, 3};
    struct plot plot = plot_sow(context, &sowing, 0);
    struct evidence_request request = request_of(3, FESCUE_OFFSETS_NONE);
    struct evidence_result fit = learn(context, &plot.cells, &request), next;
    assert_int_equal(fit.model.low_rank.rank, 3);
    request.rounds = 1;
    request.noise_start = fit.noise * fit.noise;
    for (int shrunk = 0; shrunk < 2; shrunk++) {
        request.is_shrunk = shrunk == 1;
        assert_status(context, evidence_fit(context, &plot.cells, &request, &fit.model, &next), FESCUE_OK);
        double kept = next.model.low_rank.spectrum[2] / fit.model.low_rank.spectrum[2];
        /* what a round moves is counted from the start on */
        if (request.is_shrunk)
            assert_true(fabs(kept - 1) < 1e-6 && next.fit.trace[0].step < 1e-4);
        else
            assert_true(fabs(kept - 1) > 1e-3 && next.fit.trace[0].step > 1e-4);
        evidence_result_free(context, &next);
    }
    evidence_result_free(context, &fit);
    plot_free(&plot);
}

static void noise_alone_has_no_components(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {60, 50, 0, 0.4, 1, FESCUE_DOUBLE, 5};
    struct plot plot = plot_sow(context, &sowing, 0);
    struct evidence_request request = request_of(8, FESCUE_OFFSETS_BOTH);
    struct evidence_result fit = learn(context, &plot.cells, &request);
    assert_int_equal(fit.model.low_rank.rank, 0);
    assert_close(fit.noise, 1, 0.06);
    evidence_result_free(context, &fit);
    plot_free(&plot);
}

/* Near the bound sigma sqrt(r(m+n-r)/|seen|) of an oracle that knows the tangent space (Candes, Plan 2010). With some
   four times as many cells as unknowns, nobody gets below about 1.15 times it. */
static void few_cells_near_the_oracle(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {200, 150, 4, 0.2, 0.2, FESCUE_DOUBLE, 6};
    struct plot plot = plot_sow(context, &sowing, 0);
    struct evidence_request request = request_of(12, FESCUE_OFFSETS_NONE);
    struct evidence_result fit = learn(context, &plot.cells, &request);
    double oracle = 0.2 * sqrt(4 * (200 + 150 - 4) / (double)plot.cells.count);
    assert_int_equal(fit.model.low_rank.rank, 4);
    assert_true(error_of(&fit, &sowing) < 1.25 * oracle);
    evidence_result_free(context, &fit);
    plot_free(&plot);
}

static void cells_turned(fescue_context *context, const struct cells *from, double a, double b, bool turn,
                         struct cells *to)
{
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    for (uint32_t i = 0; i < from->rows; i++)
        for (uint64_t k = from->by_row.start[i]; k < from->by_row.start[i + 1]; k++) {
            uint32_t j = from->by_row.across[k];
            double x = a * cells_value(from, &from->by_row, k) + b;
            assert_status(context, triplets_append(context, &list, turn ? j : i, turn ? i : j, x), FESCUE_OK);
        }
    assert_status(context,
                  cells_build(context, turn ? from->columns : from->rows, turn ? from->rows : from->columns, &list, to),
                  FESCUE_OK);
    triplets_free(context, &list);
}

static void units_and_orientation_do_not_matter(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {50, 40, 2, 0.5, 0.3, FESCUE_DOUBLE, 7};
    struct plot plot = plot_sow(context, &sowing, 0);
    struct cells scaled, turned;
    cells_turned(context, &plot.cells, 1e6, 3e5, false, &scaled);
    cells_turned(context, &plot.cells, 1, 0, true, &turned);
    struct evidence_request request = request_of(5, FESCUE_OFFSETS_MEAN);
    struct evidence_result plain = learn(context, &plot.cells, &request);
    struct evidence_result big = learn(context, &scaled, &request), over = learn(context, &turned, &request);
    for (uint32_t i = 0; i < 50; i += 7)
        for (uint32_t j = 0; j < 40; j += 3) {
            double x = model_estimate(&plain.model, i, j);
            /* rounds end at a change of 1e-9, slow ones some 1e-6 from where they lead */
            assert_close(model_estimate(&big.model, i, j), 1e6 * x + 3e5, 10);
            assert_close(model_estimate(&over.model, j, i), x, 1e-4);
        }
    evidence_result_free(context, &plain);
    evidence_result_free(context, &big);
    evidence_result_free(context, &over);
    cells_free(context, &scaled);
    cells_free(context, &turned);
    plot_free(&plot);
}

/* Columns with noise from 0.1 to 3: a fit that learns it beats one that takes all alike. */
static void unequal_noise_is_learnt(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {150, 30, 2, 0.5, 0, FESCUE_DOUBLE, 8};
    struct cells clean, noisy;
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    sow_cells(context, &sowing, &clean);
    for (uint32_t i = 0; i < 150; i++)
        for (uint64_t k = clean.by_row.start[i]; k < clean.by_row.start[i + 1]; k++) {
            uint32_t j = clean.by_row.across[k];
            struct random_stream stream = random_open(9, RANDOM_TEST, i * 30 + j);
            double sigma = 0.1 * pow(30, j / 29.0);
            double x = cells_value(&clean, &clean.by_row, k) + sigma * random_normal(&stream);
            assert_status(context, triplets_append(context, &list, i, j, x), FESCUE_OK);
        }
    assert_status(context, cells_build(context, 150, 30, &list, &noisy), FESCUE_OK);
    struct evidence_request request = request_of(6, FESCUE_OFFSETS_NONE);
    struct evidence_result equal = learn(context, &noisy, &request);
    request.noise = EVIDENCE_NOISE_COLUMNS;
    struct evidence_result own = learn(context, &noisy, &request);
    assert_true(error_of(&own, &sowing) < 0.8 * error_of(&equal, &sowing));
    /* Less than the planted 2.5, since the noisiest columns get components of their own; of rows, whose cells have the
       same mixture of noises, nothing is left. */
    assert_true(equal.column_spread > 0.1 && fabs(equal.row_spread) < 0.02);
    evidence_result_free(context, &equal);
    evidence_result_free(context, &own);
    triplets_free(context, &list);
    cells_free(context, &clean);
    cells_free(context, &noisy);
}

/* Of equal noise nothing is left beyond chance. */
static void equal_noise_has_no_spread(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {150, 100, 2, 0.5, 0.5, FESCUE_DOUBLE, 8};
    struct plot plot = plot_sow(context, &sowing, 0);
    struct evidence_request request = request_of(4, FESCUE_OFFSETS_NONE);
    struct evidence_result fit = learn(context, &plot.cells, &request);
    /* over 100 lines of 75 cells a variance of 2/75 is known to a share of sqrt(2/100) */
    assert_true(fabs(fit.row_spread) < 0.015 && fabs(fit.column_spread) < 0.015);
    evidence_result_free(context, &fit);
    plot_free(&plot);
}

/* The rounds' own changes tell what is left of them: two, where the start comes from such rounds. */
static void a_change_from_elsewhere_tells_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {150, 100, 3, 0.3, 0.5, FESCUE_DOUBLE, 8};
    struct plot plot = plot_sow(context, &sowing, 0);
    struct evidence_request request = request_of(3, FESCUE_OFFSETS_NONE);
    struct evidence_result fit = learn(context, &plot.cells, &request), next;
    request.noise_start = 2 * fit.noise * fit.noise;
    request.change_left = 1e3;
    for (int shrunk = 0; shrunk < 2; shrunk++) {
        request.is_shrunk = shrunk == 1;
        assert_status(context, evidence_fit(context, &plot.cells, &request, &fit.model, &next), FESCUE_OK);
        assert_int_equal(next.fit.iterations, request.is_shrunk ? 2 : 3);
        assert_int_equal(next.fit.stop, STOP_CHANGE);
        evidence_result_free(context, &next);
    }
    evidence_result_free(context, &fit);
    plot_free(&plot);
}

/* What rounds left would come to: the fit ends before the one that goes on, and as near to it as is said. */
static void rounds_end_when_little_is_left(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {150, 100, 3, 0.3, 0.5, FESCUE_DOUBLE, 8};
    struct plot plot = plot_sow(context, &sowing, 0);
    struct evidence_request request = request_of(5, FESCUE_OFFSETS_BOTH);
    struct evidence_result all = learn(context, &plot.cells, &request), few;
    for (double left = 0.1; left > 1e-4; left /= 10) {
        double square = 0;
        request.change_left = left;
        few = learn(context, &plot.cells, &request);
        for (uint32_t i = 0; i < 150; i++)
            for (uint32_t j = 0; j < 100; j++) {
                double away = model_estimate(&few.model, i, j) - model_estimate(&all.model, i, j);
                square += away * away / (150 * 100);
            }
        assert_true(few.fit.iterations < all.fit.iterations && few.fit.stop == STOP_CHANGE);
        assert_true(sqrt(square) <= 1.5 * left * all.noise);
        evidence_result_free(context, &few);
    }
    evidence_result_free(context, &all);
    plot_free(&plot);
}

/* Noise of a cell from 0.05 to 5, in no order: a fit that is told the precisions comes near the one of a table whose
   cells all have the same precision on the whole, and leaves the one that is not told far behind. The noise it learns
   is that of a cell of weight one. */
static void weights_of_cells_are_used(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {120, 60, 2, 0.6, 0, FESCUE_DOUBLE, 18};
    struct cells clean, noisy;
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    sow_cells(context, &sowing, &clean);
    double *weight, mean = 0;
    assert_status(context, TAKE(context, clean.count, &weight), FESCUE_OK);
    for (uint32_t i = 0; i < 120; i++)
        for (uint64_t k = clean.by_row.start[i]; k < clean.by_row.start[i + 1]; k++) {
            struct random_stream stream = random_open(19, RANDOM_TEST, (uint32_t)k);
            double sigma = 0.05 * pow(100, random_uniform(&stream));
            double x = cells_value(&clean, &clean.by_row, k) + sigma * random_normal(&stream);
            weight[k] = 1 / (sigma * sigma);
            mean += weight[k] / (double)clean.count;
            assert_status(context, triplets_append(context, &list, i, clean.by_row.across[k], x), FESCUE_OK);
        }
    assert_status(context, cells_build(context, 120, 60, &list, &noisy), FESCUE_OK);
    struct evidence_request request = request_of(6, FESCUE_OFFSETS_BOTH);
    struct evidence_result blind = learn(context, &noisy, &request);
    for (uint64_t k = 0; k < clean.count; k++)
        weight[k] /= mean;
    assert_status(context, cells_weigh(context, &noisy, weight), FESCUE_OK);
    struct evidence_result told = learn(context, &noisy, &request);
    assert_true(error_of(&told, &sowing) < 0.2 * error_of(&blind, &sowing));
    assert_close(told.noise, 1 / sqrt(mean), 0.03 / sqrt(mean));
    evidence_result_free(context, &blind);
    evidence_result_free(context, &told);
    triplets_free(context, &list);
    GIVE(context, &weight);
    cells_free(context, &clean);
    cells_free(context, &noisy);
}

static void same_bits_check(fescue_context *context, const struct sowing *sowing, uint64_t rounds)
{
    struct plot plot = plot_sow(context, sowing, 0);
    struct evidence_request request = request_of(6, FESCUE_OFFSETS_BOTH);
    request.noise = EVIDENCE_NOISE_ROWS;
    request.rounds = rounds;
    struct evidence_result first = {0};
    const size_t workers[] = {1, 2, 7};
    for (size_t w = 0; w < 3; w++) {
        assert_status(context, team_resize(context, workers[w]), FESCUE_OK);
        struct evidence_result fit = learn(context, &plot.cells, &request);
        if (w == 0) {
            first = fit;
            continue;
        }
        assert_int_equal(fit.model.low_rank.rank, first.model.low_rank.rank);
        assert_memory_equal(fit.model.offsets.row, first.model.offsets.row, sowing->rows * sizeof(double));
        assert_memory_equal(fit.model.low_rank.left.data, first.model.low_rank.left.data,
                            sowing->rows * first.model.low_rank.left.stride * sizeof(double));
        evidence_result_free(context, &fit);
    }
    evidence_result_free(context, &first);
    plot_free(&plot);
}

static void same_bits_for_any_number_of_workers(void **state)
{
    fescue_context *context = bench_of(state)->context;
    same_bits_check(context, &(struct sowing){90, 70, 3, 0.3, 0.2, FESCUE_SINGLE, 10}, 40);
    same_bits_check(context, &(struct sowing){900, 120, 3, 0.5, 0.2, FESCUE_SINGLE, 10}, 3);
}

static uint64_t calls_for(fescue_context *context, const struct cells *cells, uint64_t rounds)
{
    struct evidence_request request = request_of(4, FESCUE_OFFSETS_BOTH);
    struct model start = {.rows = cells->rows, .columns = cells->columns};
    struct evidence_result fit;
    request.rounds = rounds;
    request.change = 0;
    assert_status(context, offsets_fit(context, cells, FESCUE_OFFSETS_BOTH, &start.offsets), FESCUE_OK);
    assert_status(context, low_rank_create(context, cells->rows, cells->columns, 0, &start.low_rank), FESCUE_OK);
    uint64_t before = fescue_memory_usage(context).calls;
    assert_status(context, evidence_fit(context, cells, &request, &start, &fit), FESCUE_OK);
    uint64_t calls = fescue_memory_usage(context).calls - before;
    assert_int_equal(fit.fit.iterations, rounds);
    evidence_result_free(context, &fit);
    model_free(context, &start);
    return calls;
}

static void rounds_allocate_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {30, 20, 2, 0.5, 0.2, FESCUE_DOUBLE, 11};
    struct plot plot = plot_sow(context, &sowing, 0);
    assert_int_equal(calls_for(context, &plot.cells, 5), calls_for(context, &plot.cells, 50));
    plot_free(&plot);
}

static void failing_memory_leaks_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {20, 15, 2, 0.6, 0.2, FESCUE_DOUBLE, 12};
    struct plot plot = plot_sow(context, &sowing, 0);
    struct evidence_request request = request_of(3, FESCUE_OFFSETS_BOTH);
    request.rounds = 3;
    evidence_refuse_memory(context, &plot.cells, &request);
    plot_free(&plot);
}

/* Rows and columns in which nothing was seen get the other side's effect and no component. */
static void lines_without_cells(void **state)
{
    fescue_context *context = bench_of(state)->context;
    double dense[12 * 8];
    for (size_t i = 0; i < 12; i++)
        for (size_t j = 0; j < 8; j++)
            dense[i * 8 + j] = i == 3 || j == 5 || (i + j) % 5 == 0 ? NAN : (double)i + 2 * (double)j;
    struct plot plot = plot_dense(context, 12, 8, dense, 0);
    struct evidence_request request = request_of(2, FESCUE_OFFSETS_BOTH);
    struct evidence_result fit = learn(context, &plot.cells, &request);
    for (uint32_t j = 0; j < 8; j++)
        assert_true(isfinite(model_estimate(&fit.model, 3, j)));
    double step = model_estimate(&fit.model, 3, 7) - model_estimate(&fit.model, 3, 0);
    assert_close(step, 14, 0.5);
    evidence_result_free(context, &fit);
    plot_free(&plot);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(full_table_meets_the_closed_solution),
        BENCH_TEST(a_fit_goes_on_where_one_ended),
        BENCH_TEST(noise_alone_has_no_components),
        BENCH_TEST(few_cells_near_the_oracle),
        BENCH_TEST(units_and_orientation_do_not_matter),
        BENCH_TEST(unequal_noise_is_learnt),
        BENCH_TEST(equal_noise_has_no_spread),
        BENCH_TEST(a_change_from_elsewhere_tells_nothing),
        BENCH_TEST(rounds_end_when_little_is_left),
        BENCH_TEST(weights_of_cells_are_used),
        BENCH_TEST(same_bits_for_any_number_of_workers),
        BENCH_TEST(rounds_allocate_nothing),
        BENCH_TEST(failing_memory_leaks_nothing),
        BENCH_TEST(lines_without_cells),
    };
    return cmocka_run_group_tests_name("evidence", tests, NULL, NULL);
}
