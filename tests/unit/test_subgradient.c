/* SPDX-License-Identifier: MIT
 *
 * Subgradient steps for the absolute loss: against known minima, and on tables with values that are plainly wrong.
 */
#include "support_stream.h"

static const struct solver *solver(void)
{
    return solver_find("subgradient");
}

static struct low_rank solved(struct plot *plot, size_t rank, struct solve_result *result)
{
    struct low_rank point;
    assert_status(plot->context, start_spectral(&plot->problem, rank, 1, &point), FESCUE_OK);
    assert_status(plot->context, solve_run(&plot->problem, solver(), &usual_limits, &point, result), FESCUE_OK);
    print_message("# %d iterations, %s\n", (int)result->iterations, solve_stop_word(result->stop));
    return point;
}

/* 5 % of the cells are out by 3 to 10 times the rms of the table. A cell that was not seen, noise and all, is met
   nearly as well as by squares with those cells deleted; the truth, as well as medians can against means: an error of
   sqrt(pi/2) = 1.2533 times that of the mean (Laplace's asymptotic variance of the median under normal noise). */
static void wrong_cells_do_little_harm(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const double kappas[] = {1, 10, 30};
    for (int k = 0; k < 3; k++) {
        struct meadow meadow = {.rows = 150,
                                .columns = 600,
                                .rank = 4,
                                .kappa = kappas[k],
                                .share = 0.25,
                                .noise = 0.1,
                                .outliers = 0.05,
                                .seed = 3};
        struct solve_result result = {0};
        struct field_plot field = meadow_sow(context, &meadow);
        meadow.weeded = true;
        struct field_plot weeded = meadow_sow(context, &meadow);
        struct low_rank point = solved(&field.plot, meadow.rank, &result), reference = meadow_minimum(&weeded);
        double error = meadow_error(&field, &point), best = meadow_error(&weeded, &reference), noise = meadow.noise;
        print_message("# kappa %.0f: truth %.4f, hidden cells %.4f\n", kappas[k], error / best,
                      sqrt((error * error + noise * noise) / (best * best + noise * noise)));
        assert_true(error < 1.35 * best);
        assert_true(error * error + noise * noise < 1.2 * 1.2 * (best * best + noise * noise));
        assert_true(solve_converged(result.stop));
        solve_result_free(context, &result);
        low_rank_free(context, &point);
        low_rank_free(context, &reference);
        meadow_free(&field);
        meadow_free(&weeded);
    }
}

/* Without noise the right cells are met to rounding, however wrong the others are: the absolute loss is sharp there. */
static void right_cells_are_met(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (int turn = 0; turn < 2; turn++) {
        const struct meadow meadow = {.rows = turn == 0 ? 60 : 200,
                                      .columns = turn == 0 ? 200 : 60,
                                      .rank = 3,
                                      .kappa = 10,
                                      .share = 0.4,
                                      .outliers = 0.05,
                                      .seed = 4};
        struct solve_result result = {0};
        struct field_plot field = meadow_sow(context, &meadow);
        struct low_rank point = solved(&field.plot, meadow.rank, &result);
        assert_close(meadow_error(&field, &point), 0, 1e-10);
        assert_close(form_error(&point), 0, 1e-13);
        solve_result_free(context, &result);
        low_rank_free(context, &point);
        meadow_free(&field);
    }
}

/* |(I - U U') sign(R) V| at the point given back: the part of the subgradient that turns the shorter side. */
static void the_gradient_is_that_of_the_signs(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct sowing sowing = {.rows = 30, .columns = 50, .rank = 2, .share = 0.5, .noise = 0.3, .seed = 6};
    struct plot plot = plot_sow(context, &sowing, 0.1);
    struct solve_result result = {0};
    struct low_rank point = solved(&plot, 2, &result);
    double *dense = dense_targets(&plot, NAN), product[30][2] = {{0}}, square = 0;
    for (uint32_t i = 0; i < 30; i++)
        for (uint32_t j = 0; j < 50; j++) {
            double residual = low_rank_entry(&point, i, j) - dense[i * 50 + j];
            for (int k = 0; k < 2 && !isnan(residual); k++)
                product[i][k] += (residual > 0 ? 1 : -1) * MATRIX_AT(point.right, j, k);
        }
    for (int k = 0; k < 2; k++) {
        double dot[2] = {0};
        for (int l = 0; l < 2; l++)
            for (int i = 0; i < 30; i++)
                dot[l] += MATRIX_AT(point.left, i, l) * product[i][k];
        for (int i = 0; i < 30; i++)
            square +=
                pow(product[i][k] - MATRIX_AT(point.left, i, 0) * dot[0] - MATRIX_AT(point.left, i, 1) * dot[1], 2);
    }
    assert_close(result.gradient * plot.problem.norm / sqrt(square), 1, 1e-9);
    free(dense);
    solve_result_free(context, &result);
    low_rank_free(context, &point);
    plot_free(&plot);
}

/* ---- one line ------------------------------------------------------------------------------------------------------
 */

/* sum |U_i w - t_i| over the cells of a column, w in two unknowns. */
static double line_sum(const struct plot *plot, uint32_t column, struct matrix basis, const double w[2])
{
    const struct half *half = &plot->problem.target.by_column;
    double sum = 0;
    for (uint64_t c = half->start[column]; c < half->start[column + 1]; c++) {
        uint32_t i = half->across[c];
        sum += fabs(MATRIX_AT(basis, i, 0) * w[0] + MATRIX_AT(basis, i, 1) * w[1] -
                    cells_value(&plot->problem.target, half, c));
    }
    return sum;
}

/* A least sum of absolute deviations in two unknowns is reached where two of the cells are met (Barrodale, Roberts
   1973): the least over all pairs. */
static double line_least(const struct plot *plot, uint32_t column, struct matrix basis)
{
    const struct half *half = &plot->problem.target.by_column;
    double least = INFINITY;
    for (uint64_t c = half->start[column]; c < half->start[column + 1]; c++)
        for (uint64_t d = c + 1; d < half->start[column + 1]; d++) {
            const double *a = &MATRIX_AT(basis, half->across[c], 0), *b = &MATRIX_AT(basis, half->across[d], 0);
            double x = cells_value(&plot->problem.target, half, c), y = cells_value(&plot->problem.target, half, d);
            double area = a[0] * b[1] - a[1] * b[0];
            const double w[] = {(x * b[1] - a[1] * y) / area, (a[0] * y - x * b[0]) / area};
            least = fmin(least, line_sum(plot, column, basis, w));
        }
    return least;
}

static void lines_reach_their_least_sum(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct sowing sowing = {.rows = 15, .columns = 20, .rank = 4, .share = 0.8, .noise = 0.3, .seed = 8};
    struct plot plot = plot_sow(context, &sowing, 0);
    struct low_rank point = random_point(context, 15, 20, 2, 0);
    struct field field = {.problem = &plot.problem};
    struct arena arena = {0};
    struct batches batches;
    double sums[2 * 20];
    batches_reserve(&arena, &field, 2, 20);
    matrix_reserve(&arena, 20, 2);
    assert_status(context, arena_open(context, &arena), FESCUE_OK);
    batches_carve(&arena, &field, 2, 20, &batches);
    struct absolute_fit fit = {
        .basis = point.left, .weights = matrix_carve(&arena, 20, 2), .least = 1e-7, .rounds = 500, .sums = sums};
    batches_shuffle(&batches, 0);
    while (batches_next(&batches, 7))
        batch_fit_absolute(&batches, &fit);
    for (uint32_t j = 0; j < 20; j++) {
        const double *w = &MATRIX_AT(fit.weights, j, 0);
        double least = line_least(&plot, j, point.left);
        assert_close(sums[2 * j] / line_sum(&plot, j, point.left, w), 1, 1e-12);
        assert_close(sums[2 * j] / least, 1, 1e-6);
        assert_true(sums[2 * j] >= least * (1 - 1e-12));
    }
    arena_close(context, &arena);
    low_rank_free(context, &point);
    plot_free(&plot);
}

/* A table large enough for batches that are shared out; passes of both kinds. */
static void the_bits_do_not_depend_on_the_workers(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const size_t workers[] = {1, 2, 7};
    const struct meadow meadow = {
        .rows = 150, .columns = 600, .rank = 4, .kappa = 10, .share = 0.25, .noise = 0.1, .outliers = 0.05, .seed = 3};
    struct field_plot field = meadow_sow(context, &meadow);
    struct low_rank points[3];
    for (int w = 0; w < 3; w++) {
        struct solve_result result = {0};
        assert_status(context, team_resize(context, workers[w]), FESCUE_OK);
        points[w] = solved(&field.plot, meadow.rank, &result);
        solve_result_free(context, &result);
    }
    assert_true(points_same(&points[0], &points[1]) && points_same(&points[0], &points[2]));
    for (int w = 0; w < 3; w++)
        low_rank_free(context, &points[w]);
    meadow_free(&field);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(wrong_cells_do_little_harm),
        BENCH_TEST(right_cells_are_met),
        BENCH_TEST(the_gradient_is_that_of_the_signs),
        BENCH_TEST(lines_reach_their_least_sum),
        BENCH_TEST(the_bits_do_not_depend_on_the_workers),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
