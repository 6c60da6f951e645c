/* SPDX-License-Identifier: MIT
 *
 * Recursive least squares: against the discounted least squares that the recursion stands for, and by what it is for.
 */
#include "support_stream.h"

static const char name[] = "recursive-least-squares";

/* ---- the recursion -------------------------------------------------------------------------------------------------
 */

enum { RANK = 3, ROWS = 12, COLUMNS = 40 };

/* For every row the sums that the recursion inverts: second = l second + w w', first = l first + w x, from second_0 =
   prior and first_0 = second_0 U_i; then U_i solves second U_i' = first. */
struct sums {
    double second[ROWS][RANK][RANK], first[ROWS][RANK];
};

/* By LAPACK's LU, which the library does not use. */
static void system_solve(double matrix[RANK][RANK], const double *side, double *solution)
{
    double copy[RANK * RANK];
    lapack_int pivot[RANK];
    memcpy(copy, matrix, sizeof copy);
    memcpy(solution, side, RANK * sizeof *side);
    assert_int_equal(LAPACKE_dgesv(LAPACK_ROW_MAJOR, RANK, 1, copy, RANK, pivot, solution, 1), 0);
}

/* w of one column. */
static void weights_plain(const struct plot *plot, uint32_t column, struct matrix basis, double ridge, double *w)
{
    const struct half *half = &plot->problem.target.by_column;
    double second[RANK][RANK] = {{0}}, first[RANK] = {0};
    for (int p = 0; p < RANK; p++)
        second[p][p] = ridge;
    for (uint64_t c = half->start[column]; c < half->start[column + 1]; c++)
        for (int p = 0; p < RANK; p++) {
            double u = MATRIX_AT(basis, half->across[c], p);
            first[p] += u * cells_value(&plot->problem.target, half, c);
            for (int q = 0; q < RANK; q++)
                second[p][q] += u * MATRIX_AT(basis, half->across[c], q);
        }
    system_solve(second, first, w);
}

static void column_learn(const struct plot *plot, uint32_t column, double progress, const double *w, struct sums *sums,
                         struct matrix basis)
{
    const struct half *half = &plot->problem.target.by_column, *rows = &plot->problem.target.by_row;
    for (uint64_t c = half->start[column]; c < half->start[column + 1]; c++) {
        uint32_t i = half->across[c];
        double seen = (double)(rows->start[i + 1] - rows->start[i]);
        double keep = 1 - 1 / fmax(fmax(0.1, 0.5 * progress) * seen, 3 * RANK);
        for (int p = 0; p < RANK; p++) {
            sums->first[i][p] = keep * sums->first[i][p] + w[p] * cells_value(&plot->problem.target, half, c);
            for (int q = 0; q < RANK; q++)
                sums->second[i][p][q] = keep * sums->second[i][p][q] + w[p] * w[q];
        }
        system_solve(sums->second[i], sums->first[i], &MATRIX_AT(basis, i, 0));
    }
}

/* The sums that go with the prior: `memory` times the mean of w w', plus what keeps it regular. */
static void sums_begin(const struct plot *plot, const struct batches *order, struct matrix basis, double ridge,
                       struct sums *sums)
{
    double mean[RANK][RANK] = {{0}}, w[RANK], trace = 0;
    for (uint32_t j = 0; j < COLUMNS; j++) {
        weights_plain(plot, order->order[j], basis, ridge, w);
        for (int p = 0; p < RANK; p++)
            for (int q = 0; q < RANK; q++)
                mean[p][q] += w[p] * w[q] / COLUMNS;
    }
    for (int p = 0; p < RANK; p++)
        trace += mean[p][p];
    for (int i = 0; i < ROWS; i++)
        for (int p = 0; p < RANK; p++) {
            sums->first[i][p] = 0;
            for (int q = 0; q < RANK; q++) {
                sums->second[i][p][q] = 3 * (mean[p][q] + (p == q ? 1e-6 * trace / RANK : 0));
                sums->first[i][p] += sums->second[i][p][q] * MATRIX_AT(basis, i, q);
            }
        }
}

/* second <- T second T', first <- T first: the sums over T w. */
static void sums_rebase(struct sums *sums, struct matrix turn)
{
    for (int i = 0; i < ROWS; i++) {
        double half[RANK][RANK] = {{0}}, whole[RANK][RANK] = {{0}}, first[RANK] = {0};
        for (int p = 0; p < RANK; p++)
            for (int q = 0; q < RANK; q++)
                for (int l = 0; l < RANK; l++)
                    half[p][q] += MATRIX_AT(turn, p, l) * sums->second[i][l][q];
        for (int p = 0; p < RANK; p++)
            for (int q = 0; q < RANK; q++) {
                first[p] += MATRIX_AT(turn, p, q) * sums->first[i][q];
                for (int l = 0; l < RANK; l++)
                    whole[p][q] += half[p][l] * MATRIX_AT(turn, q, l);
            }
        memcpy(sums->second[i], whole, sizeof whole);
        memcpy(sums->first[i], first, sizeof first);
    }
}

static double matrix_distance(struct matrix a, struct matrix b)
{
    double most = 0;
    for (size_t i = 0; i < a.rows; i++)
        for (size_t k = 0; k < a.columns; k++)
            most = fmax(most, fabs(MATRIX_AT(a, i, k) - MATRIX_AT(b, i, k)));
    return most;
}

/* Two passes, with columns so few that they come one at a time. The reference takes the order from the solver and
   nothing else. */
static void it_is_discounted_least_squares(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct sowing sowing = {
        .rows = ROWS, .columns = COLUMNS, .rank = RANK, .share = 0.7, .noise = 0.3, .seed = 5};
    struct plot plot = plot_sow(context, &sowing, 0);
    struct low_rank point = random_point(context, ROWS, COLUMNS, RANK, 0),
                    basis = random_point(context, ROWS, 5, RANK, 0);
    struct field field = {.problem = &plot.problem};
    struct sums sums;
    double ridge = (double)plot.cells.count / (ROWS * COLUMNS) * 1e-4, w[RANK], *work;
    void *solver;
    bool moved;
    assert_status(context, sweep_create(context, &plot.problem.target, RANK, &field.sweep), FESCUE_OK);
    assert_status(context, solver_find(name)->create(&field, &point, &solver), FESCUE_OK);
    struct stream *stream = solver;
    work = malloc(dense_work_size(ROWS, RANK) * sizeof *work);
    assert_int_equal(stream->passes, 0);
    matrix_copy(stream->projection.basis, basis.left);
    batches_shuffle(&stream->batches, 0);
    sums_begin(&plot, &stream->batches, basis.left, ridge, &sums);
    for (uint32_t pass = 0; pass < 2; pass++) {
        struct matrix turn = {.data = (double[RANK * 8]){0}, .rows = RANK, .columns = RANK, .stride = 8};
        batches_shuffle(&stream->batches, pass);
        for (uint32_t j = 0; j < COLUMNS; j++) {
            weights_plain(&plot, stream->batches.order[j], basis.left, ridge, w);
            column_learn(&plot, stream->batches.order[j], pass + (double)j / COLUMNS, w, &sums, basis.left);
        }
        assert_status(context, dense_qr(context, basis.left, turn, work), FESCUE_OK);
        sums_rebase(&sums, turn);
        stream->finishing = false;
        assert_status(context, stream_step(stream, &moved), FESCUE_OK);
        assert_close(matrix_distance(stream->finishing ? stream->best : stream->projection.basis, basis.left), 0, 1e-9);
    }
    free(work);
    stream_destroy(context, &solver);
    sweep_destroy(&field.sweep);
    low_rank_free(context, &point);
    low_rank_free(context, &basis);
    plot_free(&plot);
}

/* ---- what it is for ------------------------------------------------------------------------------------------------
 */

static const struct meadow meadow = {
    .rows = 300, .columns = 3000, .rank = 6, .kappa = 10, .share = 0.15, .noise = 0.1, .seed = 1};

/* Two passes, whatever the condition; three with rows of very unequal numbers of cells. */
static void it_is_near_the_full_fit_in_a_few_passes(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (int variant = 0; variant < 4; variant++) {
        struct meadow table = meadow;
        table.kappa = variant % 2 == 0 ? 10 : 30;
        table.skew = variant < 2 ? 0 : 0.9;
        struct field_plot field = meadow_sow(context, &table);
        struct low_rank minimum = meadow_minimum(&field);
        double ratio = passes_error(&field, &minimum, name, variant < 2 ? 2 : 3);
        print_message("# kappa %.0f, skew %.1f: %.4f\n", table.kappa, table.skew, ratio);
        assert_true(ratio < 1.01);
        low_rank_free(context, &minimum);
        meadow_free(&field);
    }
}

/* A table large enough for batches that are shared out, in all its passes and after. */
static void the_bits_do_not_depend_on_the_workers(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const size_t workers[] = {1, 2, 7};
    struct field_plot field = meadow_sow(context, &meadow);
    struct low_rank points[3];
    for (int w = 0; w < 3; w++) {
        struct solve_result result = {0};
        const struct solve_limits limits = {.iterations = 3};
        assert_status(context, team_resize(context, workers[w]), FESCUE_OK);
        points[w] = random_point(context, meadow.rows, meadow.columns, meadow.rank, 0);
        assert_status(context, solve_run(&field.plot.problem, solver_find(name), &limits, &points[w], &result),
                      FESCUE_OK);
        solve_result_free(context, &result);
    }
    assert_true(points_same(&points[0], &points[1]) && points_same(&points[0], &points[2]));
    for (int w = 0; w < 3; w++)
        low_rank_free(context, &points[w]);
    meadow_free(&field);
}

/* From the fit of a slightly other problem it does not go back to the beginning: the objective is that of the start, or
   lower, and the minimum is met in a few steps. */
static void a_point_of_an_earlier_fit_is_used(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct field_plot field = meadow_sow(context, &meadow);
    struct low_rank point = meadow_minimum(&field);
    struct solve_result result = {0};
    struct field borrowed = {.problem = &field.plot.problem};
    void *solver;
    problem_set_ridge(&field.plot.problem, 0.01);
    assert_status(context, sweep_create(context, &field.plot.problem.target, meadow.rank, &borrowed.sweep), FESCUE_OK);
    assert_status(context, solver_find(name)->create(&borrowed, &point, &solver), FESCUE_OK);
    assert_int_equal(((struct stream *)solver)->passes, 1);
    assert_close(matrix_distance(((struct stream *)solver)->projection.basis, point.left), 0, 1e-15);
    stream_destroy(context, &solver);
    sweep_destroy(&borrowed.sweep);
    assert_status(context, solve_run(&field.plot.problem, solver_find(name), &usual_limits, &point, &result),
                  FESCUE_OK);
    assert_true(solve_converged(result.stop));
    assert_in_range(result.iterations, 1, 8);
    solve_result_free(context, &result);
    low_rank_free(context, &point);
    meadow_free(&field);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(it_is_discounted_least_squares),
        BENCH_TEST(it_is_near_the_full_fit_in_a_few_passes),
        BENCH_TEST(the_bits_do_not_depend_on_the_workers),
        BENCH_TEST(a_point_of_an_earlier_fit_is_used),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
