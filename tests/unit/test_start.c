/* SPDX-License-Identifier: MIT
 *
 * Starting points: against LAPACK's singular value decomposition of the dense table (gesvd), and by what they promise.
 */
#include "support_solve.h"

/* A table seen whole starts at its truncated singular value decomposition, whichever side is the shorter one. */
static void a_full_table_starts_at_its_truncation(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const uint32_t shapes[][2] = {{40, 30}, {30, 40}, {25, 25}, {9, 200}};
    for (int s = 0; s < 4; s++) {
        struct sowing sowing = {
            .rows = shapes[s][0], .columns = shapes[s][1], .rank = 4, .share = 1, .noise = 0.05, .seed = 3};
        struct plot plot = plot_sow(context, &sowing, 0);
        struct low_rank start, reference;
        double spectrum[40], *dense = dense_targets(&plot, 0);
        dense_truncate(context, dense, sowing.rows, sowing.columns, 4, &reference, spectrum);
        assert_status(context, start_spectral(&plot.problem, 4, 1, &start), FESCUE_OK);
        assert_close(form_error(&start), 0, 1e-13);
        /* A gap of about 20 between the fourth and the fifth value, ten applications of the matrix. */
        assert_close(point_distance(&start, 1, &reference), 0, 1e-9);
        for (int k = 0; k < 4; k++)
            assert_close(start.spectrum[k], spectrum[k], 1e-9 * spectrum[0]);
        low_rank_free(context, &start);
        low_rank_free(context, &reference);
        free(dense);
        plot_free(&plot);
    }
}

/* With a ridge the best multiple of the truncation T_r is 1 / (1 + lambda). */
static void the_length_is_exact(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct sowing sowing = {.rows = 30, .columns = 40, .rank = 3, .share = 1, .noise = 0.05, .seed = 3};
    struct plot plot = plot_sow(context, &sowing, 0.25);
    struct low_rank start, reference;
    double spectrum[30], *dense = dense_targets(&plot, 0);
    dense_truncate(context, dense, 30, 40, 3, &reference, spectrum);
    assert_status(context, start_spectral(&plot.problem, 3, 1, &start), FESCUE_OK);
    assert_close(point_distance(&start, 1.25, &reference), 0, 1e-9);
    low_rank_free(context, &start);
    low_rank_free(context, &reference);
    free(dense);
    plot_free(&plot);
}

/* The start is the best multiple of itself, on a table with holes too: no other length has a lower objective. */
static void no_other_length_is_better(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct sowing sowing = {.rows = 80, .columns = 60, .rank = 3, .share = 0.3, .noise = 0.1, .seed = 4};
    for (int ridge = 0; ridge < 2; ridge++) {
        struct plot plot = plot_sow(context, &sowing, 0.3 * ridge);
        struct low_rank start;
        double objective[3];
        assert_status(context, start_spectral(&plot.problem, 3, 1, &start), FESCUE_OK);
        for (int t = -1; t <= 1; t++) {
            for (size_t k = 0; k < 3; k++)
                start.spectrum[k] *= 1 + 1e-3 * t;
            objective[t + 1] = objective_plain(&plot.problem, &start);
            for (size_t k = 0; k < 3; k++)
                start.spectrum[k] /= 1 + 1e-3 * t;
        }
        /* A parabola with its lowest point in the middle: both sides are the same amount above it. */
        assert_true(objective[0] > objective[1] && objective[2] > objective[1]);
        assert_close((objective[0] - objective[1]) / (objective[2] - objective[1]), 1, 1e-5);
        low_rank_free(context, &start);
        plot_free(&plot);
    }
}

static void a_start_depends_on_the_seed_alone(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct sowing sowing = {.rows = 300, .columns = 90, .rank = 3, .share = 0.3, .noise = 0.1, .seed = 4};
    struct plot plot = plot_sow(context, &sowing, 0);
    struct low_rank first, again;
    assert_status(context, start_spectral(&plot.problem, 3, 1, &first), FESCUE_OK);
    assert_status(context, start_spectral(&plot.problem, 3, 2, &again), FESCUE_OK);
    assert_false(points_same(&first, &again));
    low_rank_free(context, &again);
    for (size_t workers = 2; workers <= 7; workers += 5) {
        assert_status(context, team_resize(context, workers), FESCUE_OK);
        assert_status(context, start_spectral(&plot.problem, 3, 1, &again), FESCUE_OK);
        assert_true(points_same(&first, &again));
        low_rank_free(context, &again);
    }
    low_rank_free(context, &first);
    plot_free(&plot);
}

/* A hundredth of the rows is seen whole, the rest at one cell in twenty: the start must still be about the table, when
   the rows are the shorter side and when they are the longer one. Without trimming the shorter side the first error is
   0.79, with trimming of both sides the second is 0.81. */
static void busy_rows_do_not_take_over(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const uint32_t shapes[][2] = {{300, 400}, {400, 300}};
    for (int s = 0; s < 2; s++) {
        struct sowing sowing = {.rows = shapes[s][0], .columns = shapes[s][1], .rank = 2, .share = 1, .seed = 6};
        struct plot plot = {.context = context, .sowing = sowing};
        struct triplet_list list = {.precision = FESCUE_DOUBLE};
        struct low_rank start;
        for (uint32_t i = 0; i < sowing.rows; i++)
            for (uint32_t j = 0; j < sowing.columns; j++)
                if (i % 100 == 0 || random_uniform_at(1, RANDOM_TEST, 9, i * sowing.columns + j) < 0.05)
                    assert_status(context, triplets_append(context, &list, i, j, sowing_truth(&sowing, i, j)),
                                  FESCUE_OK);
        assert_status(context, cells_build(context, sowing.rows, sowing.columns, &list, &plot.cells), FESCUE_OK);
        triplets_free(context, &list);
        plot_of_cells(context, 0, &plot);
        assert_status(context, start_spectral(&plot.problem, 2, 1, &start), FESCUE_OK);
        assert_true(truth_distance(&plot, &start) < 0.7);
        low_rank_free(context, &start);
        plot_free(&plot);
    }
}

static void odd_tables_have_a_start(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const double zeros[] = {0, 0, 0, 0, NAN, 0}, one[] = {NAN, NAN, 5, NAN}, none[] = {NAN, NAN, NAN, NAN};
    const struct {
        const double *dense;
        uint32_t rows, columns;
        size_t rank;
    } odd[] = {{zeros, 2, 3, 2}, {zeros, 3, 2, 0}, {one, 2, 2, 2}, {one, 1, 4, 1}, {one, 4, 1, 1}, {none, 2, 2, 1}};
    for (size_t k = 0; k < sizeof odd / sizeof *odd; k++) {
        struct plot plot = plot_dense(context, odd[k].rows, odd[k].columns, odd[k].dense, 0);
        struct low_rank start;
        assert_status(context, start_spectral(&plot.problem, odd[k].rank, 1, &start), FESCUE_OK);
        assert_int_equal(start.rank, odd[k].rank);
        assert_close(form_error(&start), 0, 1e-13);
        assert_true(isfinite(objective_plain(&plot.problem, &start)));
        if (odd[k].dense == one) /* one number is matched by any rank */
            assert_close(objective_plain(&plot.problem, &start), 0, 1e-25);
        low_rank_free(context, &start);
        plot_free(&plot);
    }
}

/* ---- growth --------------------------------------------------------------------------------------------------------
 */

/* From rank 0 on a full table, one rank after the other builds up the truncation: each new pair is the leading one of
   what is left. */
static void growth_on_a_full_table_is_the_truncation(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct sowing sowing = {.rows = 35, .columns = 50, .rank = 3, .share = 1, .seed = 12};
    struct plot plot = plot_sow(context, &sowing, 0);
    struct low_rank point, reference;
    double spectrum[35];
    assert_status(context, low_rank_create(context, 35, 50, 0, &point), FESCUE_OK);
    for (size_t rank = 1; rank <= 3; rank++) {
        double *dense = dense_targets(&plot, 0);
        dense_truncate(context, dense, 35, 50, rank, &reference, spectrum);
        assert_status(context, start_grow(&plot.problem, 1, &point), FESCUE_OK);
        assert_int_equal(point.rank, rank);
        assert_close(form_error(&point), 0, 1e-13);
        assert_close(point_distance(&point, 1, &reference), 0, 1e-5); /* gaps of only 1.2 or so, ten applications */
        low_rank_free(context, &reference);
        free(dense);
    }
    low_rank_free(context, &point);
    plot_free(&plot);
}

/* On a table with holes the objective falls by <P(uv'), R>^2 / 2 |P(uv')|^2, at least |R|_2^2 / 2: the exact step along
   the pair, whose <P(uv'), R> is the leading singular value of R (LAPACK) and whose |P(uv')|^2 is at most 1. */
static void growth_takes_the_exact_step(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct sowing sowing = {.rows = 60, .columns = 45, .rank = 6, .share = 0.4, .noise = 0.2, .seed = 14};
    for (int ridge = 0; ridge < 2; ridge++) {
        struct plot plot = plot_sow(context, &sowing, 0.2 * ridge);
        struct low_rank point, leading, grown;
        double spectrum[45], *dense = dense_targets(&plot, NAN);
        assert_status(context, start_spectral(&plot.problem, 2, 1, &point), FESCUE_OK);
        for (size_t i = 0; i < 60; i++)
            for (size_t j = 0; j < 45; j++) {
                double *cell = &dense[i * 45 + j];
                *cell = isnan(*cell) ? 0 : low_rank_entry(&point, i, j) - *cell;
            }
        dense_truncate(context, dense, 60, 45, 1, &leading, spectrum);
        double before = objective_plain(&plot.problem, &point);
        assert_status(context, low_rank_copy(context, &point, &grown), FESCUE_OK);
        assert_status(context, start_grow(&plot.problem, 1, &grown), FESCUE_OK);
        double after = objective_plain(&plot.problem, &grown);
        assert_close(form_error(&grown), 0, 1e-13);
        if (ridge == 0) {
            assert_true(before - after >= 0.499 * spectrum[0] * spectrum[0]);
            assert_true(before - after <= spectrum[0] * spectrum[0] / 0.4); /* |P(uv')|^2 is near the share seen */
        } else {
            assert_true(after < before);
        }
        /* grown - point is t u v': rank one, parallel to the leading pair. */
        double dot = 0, size = 0, t_size = 0;
        for (size_t i = 0; i < 60; i++)
            for (size_t j = 0; j < 45; j++) {
                double d = low_rank_entry(&grown, i, j) - low_rank_entry(&point, i, j);
                double pair = low_rank_entry(&leading, i, j) / spectrum[0];
                dot += d * pair;
                size += d * d;
                t_size += pair * pair;
            }
        assert_close(t_size, 1, 1e-12);
        assert_close(-dot / sqrt(size), 1, 1e-4); /* opposite to R's own pair */
        low_rank_free(context, &grown);
        low_rank_free(context, &leading);
        low_rank_free(context, &point);
        free(dense);
        plot_free(&plot);
    }
}

/* Nothing is left to explain: the new singular value is 0, and the sides are orthonormal all the same. */
static void growth_without_residual_adds_zero(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const double zeros[] = {0, 0, 0, 0, NAN, 0, 0, 0, 0, NAN, 0, 0};
    struct plot plot = plot_dense(context, 3, 4, zeros, 0);
    struct low_rank point;
    assert_status(context, low_rank_create(context, 3, 4, 0, &point), FESCUE_OK);
    for (size_t rank = 1; rank <= 3; rank++) {
        assert_status(context, start_grow(&plot.problem, 1, &point), FESCUE_OK);
        assert_int_equal(point.rank, rank);
        assert_close(point.spectrum[rank - 1], 0, 0);
        assert_close(form_error(&point), 0, 1e-13);
    }
    low_rank_free(context, &point);
    plot_free(&plot);
}

static void growth_does_not_depend_on_the_workers(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct sowing sowing = {.rows = 300, .columns = 90, .rank = 3, .share = 0.3, .noise = 0.1, .seed = 4};
    struct plot plot = plot_sow(context, &sowing, 0);
    struct low_rank first, again;
    for (size_t workers = 1; workers <= 7; workers += 3) {
        struct low_rank *point = workers == 1 ? &first : &again;
        assert_status(context, team_resize(context, workers), FESCUE_OK);
        assert_status(context, low_rank_create(context, 300, 90, 0, point), FESCUE_OK);
        assert_status(context, start_grow(&plot.problem, 1, point), FESCUE_OK);
        assert_status(context, start_grow(&plot.problem, 1, point), FESCUE_OK);
        if (point == &again) {
            assert_true(points_same(&first, &again));
            low_rank_free(context, &again);
        }
    }
    low_rank_free(context, &first);
    plot_free(&plot);
}

static void single_precision_has_starts_too(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct sowing sowing = {
        .rows = 50, .columns = 40, .rank = 2, .share = 1, .precision = FESCUE_SINGLE, .seed = 3};
    struct plot plot = plot_sow(context, &sowing, 0);
    struct low_rank point;
    assert_status(context, start_spectral(&plot.problem, 1, 1, &point), FESCUE_OK);
    assert_status(context, start_grow(&plot.problem, 1, &point), FESCUE_OK);
    assert_close(truth_distance(&plot, &point), 0, 1e-5);
    low_rank_free(context, &point);
    plot_free(&plot);
}

/* Every allocation of both fails in turn: the status says so, nothing is lost, and what there was stays. */
static void lack_of_memory_leaves_everything_as_it_was(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct sowing sowing = {.rows = 20, .columns = 30, .rank = 2, .share = 0.5, .seed = 3};
    struct plot plot = plot_sow(context, &sowing, 0);
    struct low_rank point = {0}, before;
    bool met = true;
    uint64_t alive = fescue_memory_usage(context).blocks;
    for (uint64_t nth = 1; met; nth++) {
        fault_plan(FAULT_TAKE, nth, false, 0);
        fescue_status status = start_spectral(&plot.problem, 2, 1, &point);
        met = fault_met();
        fault_clear();
        assert_int_equal(status, met ? FESCUE_NO_MEMORY : FESCUE_OK);
        if (met)
            assert_int_equal(fescue_memory_usage(context).blocks, alive);
        fescue_failure_clear(context);
    }
    assert_status(context, low_rank_copy(context, &point, &before), FESCUE_OK);
    alive = fescue_memory_usage(context).blocks;
    met = true;
    for (uint64_t nth = 1; met; nth++) {
        fault_plan(FAULT_TAKE, nth, false, 0);
        fescue_status status = start_grow(&plot.problem, 1, &point);
        met = fault_met();
        fault_clear();
        assert_int_equal(status, met ? FESCUE_NO_MEMORY : FESCUE_OK);
        assert_int_equal(fescue_memory_usage(context).blocks, alive);
        assert_true(!met || points_same(&point, &before));
        fescue_failure_clear(context);
    }
    assert_int_equal(point.rank, 3);
    low_rank_free(context, &before);
    low_rank_free(context, &point);
    plot_free(&plot);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(a_full_table_starts_at_its_truncation),
        BENCH_TEST(the_length_is_exact),
        BENCH_TEST(no_other_length_is_better),
        BENCH_TEST(a_start_depends_on_the_seed_alone),
        BENCH_TEST(busy_rows_do_not_take_over),
        BENCH_TEST(odd_tables_have_a_start),
        BENCH_TEST(growth_on_a_full_table_is_the_truncation),
        BENCH_TEST(growth_takes_the_exact_step),
        BENCH_TEST(growth_without_residual_adds_zero),
        BENCH_TEST(growth_does_not_depend_on_the_workers),
        BENCH_TEST(single_precision_has_starts_too),
        BENCH_TEST(lack_of_memory_leaves_everything_as_it_was),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
