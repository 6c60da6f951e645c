/* SPDX-License-Identifier: MIT
 *
 * Recovery: tables that no single start finds, the strategies one by one, and how a portfolio ends.
 */
#include "solve/recover_internal.h"
#include "support_solve.h"

/* A table with a spectrum falling geometrically by `kappa`, and the cells seen by chance, at least `rank` a line. */
struct patch {
    struct plot plot;
    struct low_rank truth;
};

static struct patch patch_sow(fescue_context *context, const struct sowing *sowing, double kappa)
{
    struct patch patch = {.truth = random_point(context, sowing->rows, sowing->columns, sowing->rank, 1)};
    double *dense = malloc((size_t)sowing->rows * sowing->columns * sizeof *dense);
    struct random_stream noise = random_open(sowing->seed, RANDOM_TEST, 41);
    for (size_t k = 0; k < sowing->rank; k++)
        patch.truth.spectrum[k] = 50 * pow(kappa, -(double)k / (double)(sowing->rank - 1));
    for (uint32_t i = 0; i < sowing->rows; i++)
        for (uint32_t j = 0; j < sowing->columns; j++) {
            uint64_t at = (uint64_t)i * sowing->columns + j;
            bool seen = random_uniform_at(sowing->seed, RANDOM_TEST, 40, at) < sowing->share;
            /* A band of cells around the diagonal gives every line its least number. */
            uint32_t band = (j * sowing->rows / sowing->columns + sowing->rows - i) % sowing->rows;
            double error = sowing->noise > 0 ? sowing->noise * random_normal(&noise) : 0;
            dense[at] = seen || band < 2 * sowing->rank ? low_rank_entry(&patch.truth, i, j) + error : NAN;
        }
    patch.plot = plot_dense(context, sowing->rows, sowing->columns, dense, 0);
    free(dense);
    return patch;
}

static void patch_free(fescue_context *context, struct patch *patch)
{
    low_rank_free(context, &patch->truth);
    plot_free(&patch->plot);
}

static double patch_error(const struct patch *patch, const struct low_rank *point)
{
    return point_distance(point, patch->plot.problem.scale, &patch->truth);
}

/* About 1600 cells for 885 unknowns. */
static const struct sowing scarce = {.rows = 160, .columns = 140, .rank = 3, .share = 0.035, .seed = 2};

/* At a flat and at a falling spectrum alike, where the solvers from the spectral start find only the flat one. */
static void tables_with_few_cells_are_recovered(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const double kappas[] = {1, 10, 1000};
    int spectral = 0, later = 0;
    for (int k = 0; k < 3; k++)
        for (uint64_t seed = 1; seed <= 4; seed++) {
            struct sowing sowing = scarce;
            sowing.seed = seed;
            struct patch patch = patch_sow(context, &sowing, kappas[k]);
            struct solve_result result = {0};
            struct low_rank point;
            assert_status(context, solve_recover(&patch.plot.problem, 3, 1, &usual_limits, &point, &result), FESCUE_OK);
            print_message("# condition %g: %d cells, %s, %s\n", kappas[k], (int)patch.plot.cells.count, result.start,
                          solve_stop_word(result.stop));
            assert_int_equal(result.stop, STOP_EXACT);
            assert_close(patch_error(&patch, &point), 0, 1e-8);
            assert_close(form_error(&point), 0, 1e-12);
            later += strcmp(result.start, "growth") != 0;
            low_rank_free(context, &point);
            assert_status(context, start_spectral(&patch.plot.problem, 3, 1, &point), FESCUE_OK);
            assert_status(context,
                          solve_run(&patch.plot.problem, solver_find("grassmann-cg"), &usual_limits, &point, &result),
                          FESCUE_OK);
            spectral += patch_error(&patch, &point) < 1e-4;
            low_rank_free(context, &point);
            solve_result_free(context, &result);
            patch_free(context, &patch);
        }
    print_message("# from the spectral start: %d of 12\n", spectral);
    assert_true(spectral < 10 && later > 0);
}

/* What each strategy says it is good for, finished by Newton's steps. */
static void every_strategy_finds_its_kind(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct {
        recover_start *start;
        double weight, kappa;
        int steps;
    } kinds[] = {{recover_growth, 0.001, 1000, 100},
                 {recover_weighted, 4, 1000, 10},
                 {recover_weighted, 4, 10, 10},
                 {recover_ladder, 0.9, 1, 3},
                 {recover_ladder, 0.9, 10, 3}};
    for (size_t k = 0; k < sizeof kinds / sizeof *kinds; k++) {
        struct patch patch = patch_sow(context, &scarce, kinds[k].kappa);
        struct recover_request request = {
            .problem = &patch.plot.problem, .rank = 3, .seed = 1, .weight = kinds[k].weight, .steps = kinds[k].steps};
        struct solve_result result = {0};
        struct low_rank point;
        assert_status(context, kinds[k].start(&request, &point), FESCUE_OK);
        assert_int_equal(point.rank, 3);
        assert_close(form_error(&point), 0, 1e-12);
        assert_status(
            context,
            solve_run(&patch.plot.problem, solver_find("grassmann-trust-region"), &usual_limits, &point, &result),
            FESCUE_OK);
        assert_close(patch_error(&patch, &point), 0, 1e-8);
        low_rank_free(context, &point);
        solve_result_free(context, &result);
        patch_free(context, &patch);
    }
}

/* With noise two strategies that agree are enough, and the end is as low as from the truth. */
static void with_noise_the_lowest_minimum_is_found(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = scarce;
    sowing.share = 0.12;
    sowing.noise = 0.02; /* of entries around 0.6 */
    struct patch patch = patch_sow(context, &sowing, 10);
    struct solve_result result = {0}, reference = {0};
    struct low_rank point, truth;
    assert_status(context, solve_recover(&patch.plot.problem, 3, 1, &usual_limits, &point, &result), FESCUE_OK);
    assert_true(solve_converged(result.stop) && result.gradient <= 1e-9);
    assert_close(result.objective / objective_plain(&patch.plot.problem, &point), 1, 1e-12);
    assert_status(context, low_rank_copy(context, &patch.truth, &truth), FESCUE_OK);
    for (size_t k = 0; k < 3; k++)
        truth.spectrum[k] /= patch.plot.problem.scale;
    assert_status(
        context,
        solve_run(&patch.plot.problem, solver_find("grassmann-trust-region"), &usual_limits, &truth, &reference),
        FESCUE_OK);
    assert_true(result.objective <= reference.objective * (1 + 1e-9));
    low_rank_free(context, &point);
    low_rank_free(context, &truth);
    solve_result_free(context, &result);
    solve_result_free(context, &reference);
    patch_free(context, &patch);
}

static void odd_ranks_and_tables_end_well(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const double zeros[] = {0, 0, 0, NAN, 0, 0}, row[] = {1, 2, NAN, 4, 5, 6}, square[] = {1, 2, 3, 4};
    const struct {
        const double *dense;
        uint32_t rows, columns;
        size_t rank;
    } odd[] = {{zeros, 2, 3, 2}, {row, 1, 6, 1}, {row, 6, 1, 1}, {row, 2, 3, 0}, {row, 2, 3, 2}, {square, 2, 2, 2}};
    for (size_t k = 0; k < sizeof odd / sizeof *odd; k++) {
        struct plot plot = plot_dense(context, odd[k].rows, odd[k].columns, odd[k].dense, 0);
        struct solve_result result = {0};
        struct low_rank point;
        assert_status(context, solve_recover(&plot.problem, odd[k].rank, 1, &usual_limits, &point, &result), FESCUE_OK);
        assert_int_equal(point.rank, odd[k].rank);
        assert_true(solve_converged(result.stop));
        assert_close(form_error(&point), 0, 1e-12);
        if (odd[k].rank > 0)
            assert_close(result.rmse, 0, 1e-9);
        low_rank_free(context, &point);
        solve_result_free(context, &result);
        plot_free(&plot);
    }
}

static void more_components_than_there_are_do_no_harm(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = scarce;
    sowing.share = 0.3;
    struct patch patch = patch_sow(context, &sowing, 10);
    struct solve_result result = {0};
    struct low_rank point;
    assert_status(context, solve_recover(&patch.plot.problem, 5, 1, &usual_limits, &point, &result), FESCUE_OK);
    assert_close(result.rmse, 0, 1e-8);
    assert_close(patch_error(&patch, &point), 0, 1e-6);
    low_rank_free(context, &point);
    solve_result_free(context, &result);
    patch_free(context, &patch);
}

static void single_precision_is_met_to_its_rounding(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct sowing sowing = {
        .rows = 60, .columns = 50, .rank = 3, .share = 0.4, .precision = FESCUE_SINGLE, .seed = 5};
    struct plot plot = plot_sow(context, &sowing, 0);
    struct solve_result result = {0};
    struct low_rank point;
    assert_status(context, solve_recover(&plot.problem, 3, 1, &usual_limits, &point, &result), FESCUE_OK);
    assert_close(truth_distance(&plot, &point), 0, 1e-5);
    low_rank_free(context, &point);
    solve_result_free(context, &result);
    plot_free(&plot);
}

static void the_bits_do_not_depend_on_the_workers(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct patch patch = patch_sow(context, &scarce, 1);
    struct low_rank first = {0}, again;
    for (size_t workers = 1; workers <= 7; workers += 3) {
        struct solve_result result = {0};
        assert_status(context, team_resize(context, workers), FESCUE_OK);
        assert_status(context, solve_recover(&patch.plot.problem, 3, 1, &usual_limits, &again, &result), FESCUE_OK);
        solve_result_free(context, &result);
        if (workers == 1) {
            first = again;
            continue;
        }
        assert_true(points_same(&first, &again));
        low_rank_free(context, &again);
    }
    low_rank_free(context, &first);
    patch_free(context, &patch);
}

/* ---- ends ----------------------------------------------------------------------------------------------------------
 */

/* Past its deadline it still gives a point of the rank that was asked for. */
static void the_deadline_is_kept(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct patch patch = patch_sow(context, &scarce, 10);
    struct solve_limits limits = usual_limits;
    struct solve_result result = {0};
    struct low_rank point;
    limits.deadline = clock_wall() - 1;
    assert_status(context, solve_recover(&patch.plot.problem, 3, 1, &limits, &point, &result), FESCUE_OK);
    assert_int_equal(result.stop, STOP_TIME);
    assert_int_equal(point.rank, 3);
    assert_close(form_error(&point), 0, 1e-12);
    assert_true(result.rmse < 1);
    low_rank_free(context, &point);
    solve_result_free(context, &result);
    patch_free(context, &patch);
}

struct patience {
    int left;
};

static bool refuse_when_spent(void *data, const char *stage, double share)
{
    (void)stage;
    (void)share;
    return ((struct patience *)data)->left-- > 0;
}

/* Asked to stop at any moment, from the first to the last: FESCUE_STOPPED, and the best so far or nothing. */
static void asked_to_stop_it_stops(void **state)
{
    (void)state;
    bool stopped = true, with_point = false, without = false;
    for (int patience = 0; stopped; patience = patience * 5 / 4 + 1) {
        struct patience left = {patience};
        const struct fescue_hooks hooks = {.data = &left, .progress = refuse_when_spent};
        fescue_context *context;
        assert_int_equal(fescue_context_create(&hooks, &context), FESCUE_OK);
        struct patch patch = patch_sow(context, &scarce, 1);
        struct solve_result result = {0};
        struct low_rank point;
        fescue_status status = solve_recover(&patch.plot.problem, 3, 1, &usual_limits, &point, &result);
        stopped = status == FESCUE_STOPPED;
        assert_true(stopped || status == FESCUE_OK);
        assert_true(point.rank == 3 || (stopped && point.rank == 0 && point.left.data == NULL));
        if (stopped) {
            assert_int_equal(result.stop, STOP_CANCELLED);
            *(point.rank == 3 ? &with_point : &without) = true;
        }
        if (point.rank == 3)
            assert_close(form_error(&point), 0, 1e-12);
        low_rank_free(context, &point);
        solve_result_free(context, &result);
        patch_free(context, &patch);
        assert_no_leak(context);
        fescue_context_destroy(&context);
    }
    assert_true(with_point && without);
}

/* Every allocation fails in turn. */
static void lack_of_memory_leaves_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct sowing sowing = {.rows = 12, .columns = 9, .rank = 2, .share = 0.6, .noise = 0.1, .seed = 4};
    struct plot plot = plot_sow(context, &sowing, 0);
    uint64_t alive = fescue_memory_usage(context).blocks;
    bool met = true;
    for (uint64_t nth = 1; met; nth++) {
        struct solve_result result = {0};
        struct low_rank point;
        fault_plan(FAULT_TAKE, nth, false, 0);
        fescue_status status = solve_recover(&plot.problem, 2, 1, &usual_limits, &point, &result);
        met = fault_met();
        fault_clear();
        assert_int_equal(status, met ? FESCUE_NO_MEMORY : FESCUE_OK);
        if (met)
            assert_true(point.rank == 0 && point.left.data == NULL);
        low_rank_free(context, &point);
        solve_result_free(context, &result);
        assert_int_equal(fescue_memory_usage(context).blocks, alive);
        fescue_failure_clear(context);
    }
    plot_free(&plot);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(tables_with_few_cells_are_recovered),
        BENCH_TEST(every_strategy_finds_its_kind),
        BENCH_TEST(with_noise_the_lowest_minimum_is_found),
        BENCH_TEST(odd_ranks_and_tables_end_well),
        BENCH_TEST(more_components_than_there_are_do_no_harm),
        BENCH_TEST(single_precision_is_met_to_its_rounding),
        BENCH_TEST(the_bits_do_not_depend_on_the_workers),
        BENCH_TEST(the_deadline_is_kept),
        BENCH_TEST(asked_to_stop_it_stops),
        BENCH_TEST(lack_of_memory_leaves_nothing),
    };
    return cmocka_run_group_tests(tests, NULL, NULL);
}
