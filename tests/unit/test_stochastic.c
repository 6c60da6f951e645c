/* SPDX-License-Identifier: MIT
 *
 * The two solvers that take gradient steps over batches: a step against its formula, and by what they are for.
 */
#include "support_stream.h"

static const char *const names[] = {"grassmann-stochastic", "grassmann-variance-reduced"};
enum { SHRINKING, REDUCED };

/* A solver begun at a point, by hand, so that passes can be taken one by one. */
struct opened {
    struct field field;
    void *state;
};

static struct stream *stream_open(struct opened *opened, struct problem *problem, const struct low_rank *point,
                                  const char *name)
{
    *opened = (struct opened){.field.problem = problem};
    assert_status(problem->context, sweep_create(problem->context, &problem->target, point->rank, &opened->field.sweep),
                  FESCUE_OK);
    assert_status(problem->context, solver_find(name)->create(&opened->field, point, &opened->state), FESCUE_OK);
    return opened->state;
}

static void stream_shut(struct opened *opened)
{
    stream_destroy(opened->field.problem->context, &opened->state);
    sweep_destroy(&opened->field.sweep);
}

/* ---- a step --------------------------------------------------------------------------------------------------------
 */

/* So small that the longer side is one batch, and a pass one step. */
enum { RANK = 3, SHORT = 5, LONG = 6 };

/* a x = b for `count` right-hand sides, each RANK numbers in a row, by LAPACK's LU, which the library does not use. */
static void system_solve(double a[RANK][RANK], double *b, int count)
{
    lapack_int pivot[RANK];
    assert_int_equal(LAPACKE_dgesv(LAPACK_COL_MAJOR, RANK, count, &a[0][0], RANK, pivot, b, RANK), 0);
}

static void weights_plain(const struct problem *problem, uint32_t j, struct matrix basis, double ridge, double *w)
{
    const struct half *half = &problem->target.by_column;
    double second[RANK][RANK] = {{0}};
    for (int p = 0; p < RANK; p++) {
        second[p][p] = ridge;
        w[p] = 0;
    }
    for (uint64_t c = half->start[j]; c < half->start[j + 1]; c++)
        for (int p = 0; p < RANK; p++) {
            double u = MATRIX_AT(basis, half->across[c], p);
            w[p] += u * cells_value(&problem->target, half, c);
            for (int q = 0; q < RANK; q++)
                second[p][q] += u * MATRIX_AT(basis, half->across[c], q);
        }
    system_solve(second, w, 1);
}

/* -D before projection, with G and H over all lines, from their definitions; the ridges of the weights in either. */
static void step_plain(const struct problem *problem, struct matrix basis, const double ridge[2],
                       double to[SHORT][RANK])
{
    const struct half *half = &problem->target.by_column;
    double g[SHORT][RANK] = {{0}}, moment[RANK][RANK] = {{0}}, w[RANK], seen[SHORT] = {0}, trace = 0;
    for (uint32_t j = 0; j < LONG; j++) {
        weights_plain(problem, j, basis, ridge[1], w);
        for (int p = 0; p < RANK; p++)
            for (int q = 0; q < RANK; q++)
                moment[p][q] += w[p] * w[q] / LONG;
        weights_plain(problem, j, basis, ridge[0], w);
        for (uint64_t c = half->start[j]; c < half->start[j + 1]; c++) {
            uint32_t i = half->across[c];
            double residual = -cells_value(&problem->target, half, c);
            for (int p = 0; p < RANK; p++)
                residual += MATRIX_AT(basis, i, p) * w[p];
            for (int p = 0; p < RANK; p++)
                g[i][p] += residual * w[p] / LONG;
            seen[i] += 1.0 / LONG;
        }
    }
    for (int p = 0; p < RANK; p++)
        trace += moment[p][p];
    for (int p = 0; p < RANK; p++)
        moment[p][p] += 1e-6 * trace / RANK;
    system_solve(moment, &g[0][0], SHORT);
    for (int i = 0; i < SHORT; i++)
        for (int p = 0; p < RANK; p++)
            to[i][p] = -g[i][p] / (seen[i] + (RANK + 2.0) / LONG);
}

/* step <- U + (I - U U') step */
static void step_project(struct matrix basis, double step[SHORT][RANK])
{
    for (int p = 0; p < RANK; p++) {
        double dot[RANK] = {0};
        for (int q = 0; q < RANK; q++)
            for (int i = 0; i < SHORT; i++)
                dot[q] += MATRIX_AT(basis, i, q) * step[i][p];
        for (int i = 0; i < SHORT; i++) {
            step[i][p] += MATRIX_AT(basis, i, p);
            for (int q = 0; q < RANK; q++)
                step[i][p] -= dot[q] * MATRIX_AT(basis, i, q);
        }
    }
}

/* The largest part of a column of `a`, made orthonormal by Gram and Schmidt, that is outside the span of b. */
static double span_distance(double a[SHORT][RANK], struct matrix b)
{
    double most = 0;
    for (int p = 0; p < RANK; p++) {
        double size = 0, rest[SHORT];
        for (int q = 0; q < p; q++) {
            double dot = 0;
            for (int i = 0; i < SHORT; i++)
                dot += a[i][p] * a[i][q];
            for (int i = 0; i < SHORT; i++)
                a[i][p] -= dot * a[i][q];
        }
        for (int i = 0; i < SHORT; i++)
            size += a[i][p] * a[i][p];
        for (int i = 0; i < SHORT; i++)
            rest[i] = a[i][p] /= sqrt(size);
        for (int q = 0; q < RANK; q++) {
            double dot = 0;
            for (int i = 0; i < SHORT; i++)
                dot += a[i][p] * MATRIX_AT(b, i, q);
            for (int i = 0; i < SHORT; i++)
                rest[i] -= dot * MATRIX_AT(b, i, q);
        }
        for (int i = 0; i < SHORT; i++)
            most = fmax(most, fabs(rest[i]));
    }
    return most;
}

/* The first step of a cold run, and of a warm one, where variance reduction leaves the gradient of all lines as it is
   at the point it was taken. */
static void a_step_is_its_formula(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct sowing sowing = {.rows = SHORT, .columns = LONG, .rank = RANK, .share = 0.9, .noise = 0.5, .seed = 10};
    struct plot plot = plot_sow(context, &sowing, 0);
    struct low_rank point = random_point(context, SHORT, LONG, RANK, 1);
    for (int s = 0; s < 2; s++)
        for (uint32_t passes = 0; passes < 2; passes++) {
            struct opened opened;
            struct stream *stream = stream_open(&opened, &plot.problem, &point, names[s]);
            double small = (double)plot.cells.count / (SHORT * LONG) * 1e-4, step[SHORT][RANK];
            const double ridge[] = {passes > 0 && s == REDUCED ? 0 : small, passes > 0 ? 0 : small};
            assert_int_equal(stream->passes, 0);
            stream->passes = passes;
            if (passes > 0)
                trust_start(&stream->trust);
            step_plain(&plot.problem, stream->projection.basis, ridge, step);
            step_project(stream->projection.basis, step);
            assert_status(context, stream->kind->pass(stream), FESCUE_OK);
            double distance = span_distance(step, stream->projection.basis);
            print_message("# %s, %u passes before: %.1e\n", names[s], (unsigned)passes, distance);
            assert_close(distance, 0, 1e-12);
            stream_shut(&opened);
        }
    low_rank_free(context, &point);
    plot_free(&plot);
}

/* ---- what they are for ---------------------------------------------------------------------------------------------
 */

static const struct meadow meadow = {
    .rows = 300, .columns = 3000, .rank = 6, .kappa = 10, .share = 0.15, .noise = 0.1, .seed = 1};

/* Three passes, whatever the condition; with rows of very unequal numbers of cells shrinking steps take longer. */
static void they_are_near_the_full_fit_after_three_passes(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (int variant = 0; variant < 4; variant++) {
        struct meadow table = meadow;
        table.kappa = variant % 2 == 0 ? 10 : 30;
        table.skew = variant < 2 ? 0 : 0.9;
        struct field_plot field = meadow_sow(context, &table);
        struct low_rank minimum = meadow_minimum(&field);
        for (int s = 0; s < 2; s++) {
            double ratio = passes_error(&field, &minimum, names[s], 3);
            print_message("# %s, kappa %.0f, skew %.1f: %.4f\n", names[s], table.kappa, table.skew, ratio);
            assert_true(ratio < (s == SHRINKING && table.skew > 0 ? 1.05 : 1.01));
        }
        low_rank_free(context, &minimum);
        meadow_free(&field);
    }
}

/* The objective above the minimum's, after each of six passes that are taken whatever they bring. */
static void gaps_measure(struct field_plot *field, double lowest, const char *name, double gap[6])
{
    struct low_rank point = random_point(field->plot.context, meadow.rows, meadow.columns, meadow.rank, 0);
    struct opened opened;
    struct stream *stream = stream_open(&opened, &field->plot.problem, &point, name);
    for (int pass = 0; pass < 6; pass++) {
        bool moved;
        stream->finishing = false;
        assert_status(field->plot.context, stream_step(stream, &moved), FESCUE_OK);
        gap[pass] = stream->measure.objective / lowest - 1;
        print_message("# %s, pass %d: %.2e above the minimum\n", name, pass + 1, gap[pass]);
    }
    stream_shut(&opened);
    low_rank_free(field->plot.context, &point);
}

/* With steps that stay as long as they are, the noise of the batches dies out with the distance from the minimum: the
   gap falls by a factor each pass. With shrinking steps it falls, and ever more slowly. */
static void variance_reduction_goes_to_the_minimum(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct field_plot field = meadow_sow(context, &meadow);
    struct low_rank minimum = meadow_minimum(&field);
    double lowest = objective_plain(&field.plot.problem, &minimum), gap[2][6];
    for (int s = 0; s < 2; s++)
        gaps_measure(&field, lowest, names[s], gap[s]);
    for (int pass = 1; pass < 6; pass++) {
        assert_true(gap[REDUCED][pass] < 0.25 * gap[REDUCED][pass - 1]);
        assert_true(gap[SHRINKING][pass] < gap[SHRINKING][pass - 1]);
    }
    assert_true(gap[REDUCED][5] < 1e-6 && gap[SHRINKING][5] < 1e-3);
    low_rank_free(context, &minimum);
    meadow_free(&field);
}

/* A table large enough for batches that are shared out, in all its passes. */
static void the_bits_do_not_depend_on_the_workers(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const size_t workers[] = {1, 2, 7};
    struct field_plot field = meadow_sow(context, &meadow);
    for (int s = 0; s < 2; s++) {
        struct low_rank points[3];
        for (int w = 0; w < 3; w++) {
            struct solve_result result = {0};
            const struct solve_limits limits = {.iterations = 3};
            assert_status(context, team_resize(context, workers[w]), FESCUE_OK);
            points[w] = random_point(context, meadow.rows, meadow.columns, meadow.rank, 0);
            assert_status(context, solve_run(&field.plot.problem, solver_find(names[s]), &limits, &points[w], &result),
                          FESCUE_OK);
            solve_result_free(context, &result);
        }
        assert_true(points_same(&points[0], &points[1]) && points_same(&points[0], &points[2]));
        for (int w = 0; w < 3; w++)
            low_rank_free(context, &points[w]);
    }
    meadow_free(&field);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(a_step_is_its_formula),
        BENCH_TEST(they_are_near_the_full_fit_after_three_passes),
        BENCH_TEST(variance_reduction_goes_to_the_minimum),
        BENCH_TEST(the_bits_do_not_depend_on_the_workers),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
