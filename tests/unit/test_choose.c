/* SPDX-License-Identifier: MIT
 *
 * The choice of offsets, rank and ridge on tables whose truth is known.
 */
#include "judge/judge.h"
#include "support_table.h"

#include <math.h>

/* A sown table with effects of `effect` times a standard normal on top. */
struct plot {
    struct sowing sowing;
    double mean, effect;
};

static double normal_at(uint64_t seed, uint32_t which, uint64_t index)
{
    struct random_stream stream = random_open(seed, RANDOM_TEST, which);
    stream.index = index;
    return random_normal(&stream);
}

static double plot_truth(const struct plot *plot, uint32_t i, uint32_t j)
{
    double effects = plot->effect * (normal_at(plot->sowing.seed, 70, i) + normal_at(plot->sowing.seed, 71, j));
    return sowing_truth(&plot->sowing, i, j) + plot->mean + effects;
}

static void plot_cells(fescue_context *context, const struct plot *plot, struct cells *cells)
{
    struct triplet_list list, sum = {.precision = plot->sowing.precision};
    struct sowing noise = plot->sowing;
    noise.rank = 0;
    sow_triplets(context, &noise, &list);
    for (uint64_t k = 0; k < list.count; k++) {
        double value = triplet_value(&list, k) + plot_truth(plot, list.row[k], list.column[k]);
        assert_status(context, triplets_append(context, &sum, list.row[k], list.column[k], value), FESCUE_OK);
    }
    assert_status(context, cells_build(context, noise.rows, noise.columns, &sum, cells), FESCUE_OK);
    triplets_free(context, &list);
    triplets_free(context, &sum);
}

/* What a test asks for, and what comes of it. */
struct trial {
    fescue_context *context;
    struct fescue_options options;
    struct choose_request request;
    struct cells cells;
    struct holdout holdout;
    struct choice choice;
};

static void trial_open(fescue_context *context, const struct plot *plot, struct trial *trial)
{
    *trial = (struct trial){.context = context, .request = {.way = CHOOSE_PATH, .solver = solver_at(0)}};
    trial->request.options = &trial->options;
    fescue_options_standard(&trial->options);
    plot_cells(context, plot, &trial->cells);
}

static void trial_set(struct trial *trial, const char *name, const char *text)
{
    assert_status(trial->context, fescue_options_set(trial->context, &trial->options, name, text), FESCUE_OK);
}

static fescue_status trial_try(struct trial *trial)
{
    fescue_status status = holdout_split(trial->context, &trial->cells, trial->options.holdout,
                                         (uint64_t)trial->options.seed, &trial->holdout);
    if (status == FESCUE_OK)
        status = choose_run(trial->context, &trial->holdout, &trial->request, &trial->choice);
    return status;
}

static void trial_run(struct trial *trial)
{
    assert_status(trial->context, trial_try(trial), FESCUE_OK);
}

/* Leaves the cells. */
static void trial_clear(struct trial *trial)
{
    choice_free(trial->context, &trial->choice);
    holdout_free(trial->context, &trial->holdout);
}

static void trial_close(struct trial *trial)
{
    trial_clear(trial);
    cells_free(trial->context, &trial->cells);
}

/* Root mean square error over the unseen cells of the start, with offsets refitted to it on all cells. */
static double start_error(struct trial *trial, const struct plot *plot)
{
    struct model model = {.rows = trial->cells.rows,
                          .columns = trial->cells.columns,
                          .low_rank = trial->choice.start,
                          .bounds = {-INFINITY, INFINITY}};
    const struct half *half = &trial->cells.by_row;
    double square = 0;
    uint64_t count = 0;
    assert_status(
        trial->context,
        refit_offsets(trial->context, &trial->cells, trial->choice.offsets, &trial->choice.start, &model.offsets),
        FESCUE_OK);
    for (uint32_t i = 0; i < model.rows; i++) {
        uint64_t k = half->start[i];
        for (uint32_t j = 0; j < model.columns; j++) {
            bool is_seen = k < half->start[i + 1] && half->across[k] == j;
            k += is_seen;
            square += is_seen ? 0 : pow(model_estimate(&model, i, j) - plot_truth(plot, i, j), 2);
            count += !is_seen;
        }
    }
    offsets_free(trial->context, &model.offsets);
    return sqrt(square / (double)count);
}

/* ---- what is found ------------------------------------------------------------------------------------------------
 */

static void the_rank_of_a_noisy_table_is_found(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct plot plot = {{200, 150, 3, 0.3, 0.3, FESCUE_DOUBLE, 2}, 0, 0};
    /* Candes, Plan 2010: sigma sqrt(r(m+n-r)/cells), of the nine tenths that are kept. */
    static const char *const solvers[] = {"fixed-rank-cg", "grassmann-cg"};
    for (size_t s = 0; s < 2; s++) {
        struct trial trial;
        trial_open(context, &plot, &trial);
        trial.request.solver = solver_find(solvers[s]);
        trial_run(&trial);
        double oracle = 0.3 * sqrt(3.0 * (200 + 150 - 3) / (double)trial.holdout.kept.count);
        double unseen = start_error(&trial, &plot);
        assert_int_equal(trial.choice.rank, 3);
        assert_int_equal(trial.choice.offsets, FESCUE_OFFSETS_NONE);
        assert_false(trial.choice.noiseless);
        assert_true(unseen < 1.15 * oracle);
        /* Some 900 hidden cells: their error is known to 1/sqrt(1800) = 2.4 %. */
        assert_close(trial.choice.errors.rmse / hypot(unseen, 0.3), 1, 3 * 0.024);
        /* Gaussian residuals: 0.9 of them lie within 1.645 deviations; the quantile is known to 3.4 %. */
        assert_close(trial.choice.halfwidth / (1.645 * trial.choice.errors.rmse), 1, 3 * 0.034);
        trial_close(&trial);
    }
}

static void a_table_without_noise_is_met(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (int p = 0; p < 2; p++) {
        enum fescue_precision precision = p == 0 ? FESCUE_DOUBLE : FESCUE_SINGLE;
        const struct plot plot = {{150, 120, 4, 0.3, 0, precision, 3}, 0, 0};
        struct trial trial;
        trial_open(context, &plot, &trial);
        trial_run(&trial);
        assert_int_equal(trial.choice.rank, 4);
        assert_int_equal(trial.choice.offsets, FESCUE_OFFSETS_NONE);
        assert_true(trial.choice.noiseless);
        assert_true(trial.choice.ridge == 0);
        assert_true(start_error(&trial, &plot) < (p == 0 ? 1e-10 : 1e-5));
        trial_close(&trial);
    }
}

/* Learning ends near an exact fit; what is handed back has been taken all the way. */
static void learning_does_not_stop_short_of_exact(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (uint64_t seed = 1; seed <= 3; seed++) {
        const struct plot plot = {{200, 150, 3, 0.4, 0, FESCUE_DOUBLE, seed}, 0, 0};
        struct trial trial;
        trial_open(context, &plot, &trial);
        trial.request.way = CHOOSE_LEARN;
        trial_run(&trial);
        assert_int_equal(trial.choice.rank, 3);
        assert_true(trial.choice.noiseless);
        assert_false(trial.choice.is_learnt);
        assert_true(start_error(&trial, &plot) < 1e-10);
        trial_close(&trial);
    }
}

static void noise_alone_has_no_rank(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (uint64_t seed = 1; seed <= 8; seed++) {
        const struct plot plot = {{120, 90, 0, 0.4, 1, FESCUE_DOUBLE, seed}, 0, 0};
        struct trial trial;
        trial_open(context, &plot, &trial);
        trial_run(&trial);
        assert_int_equal(trial.choice.rank, 0);
        assert_true(trial.choice.ridge == 0);
        assert_close(trial.choice.errors.rmse, 1, 0.15);
        trial_close(&trial);
    }
}

/* Two standard errors are passed by chance in one table of forty and rank; eight tables may show it once. */
static void effects_alone_have_no_rank(void **state)
{
    fescue_context *context = bench_of(state)->context;
    int found = 0;
    for (uint64_t seed = 1; seed <= 8; seed++) {
        const struct plot plot = {{120, 90, 0, 0.4, 1, FESCUE_DOUBLE, seed}, 10, 1};
        struct trial trial;
        trial_open(context, &plot, &trial);
        trial_run(&trial);
        found += trial.choice.rank == 0;
        assert_int_equal(trial.choice.offsets, FESCUE_OFFSETS_BOTH);
        assert_true(trial.choice.rank > 0 || trial.choice.errors.rmse == trial.choice.offsets_errors.rmse);
        assert_true(trial.choice.offsets_only_rank0_rmse == trial.choice.offsets_errors.rmse);
        assert_true(start_error(&trial, &plot) < 0.35);
        trial_close(&trial);
    }
    assert_in_range(found, 7, 8);
}

/* On a large table effects have a fit of their own where the fit without leaves some, be they too weak to have become
   components (a thousandth of the noise's variance would), or has them as components; and only there. */
static void effects_of_large_tables_are_seen_beside_components(void **state)
{
    static const double effects[] = {0, 0.02, 0.05, 0.5};
    fescue_context *context = bench_of(state)->context;
    for (size_t e = 0; e < sizeof effects / sizeof effects[0]; e++) {
        const struct plot plot = {{900, 1000, 3, 0.64, 0.8, FESCUE_DOUBLE, 4}, 0, effects[e]};
        struct trial trial;
        bool is_tried = false;
        trial_open(context, &plot, &trial);
        trial.request.way = CHOOSE_LEARN;
        trial_run(&trial);
        for (size_t k = 0; k < trial.choice.path_count; k++)
            is_tried |= trial.choice.path[k].offsets == FESCUE_OFFSETS_BOTH && trial.choice.path[k].rank > 0;
        assert_true(is_tried == (effects[e] > 0));
        assert_int_equal(trial.choice.offsets, effects[e] > 0 ? FESCUE_OFFSETS_BOTH : FESCUE_OFFSETS_NONE);
        trial_close(&trial);
    }
}

/* Like sensors: levels far apart, and two components underneath that are not to be lost in them. */
static void effects_and_components_are_told_apart(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (uint64_t seed = 1; seed <= 3; seed++) {
        const struct plot plot = {{300, 40, 2, 0.6, 0.2, FESCUE_DOUBLE, seed}, 50, 5};
        struct trial trial;
        trial_open(context, &plot, &trial);
        trial_run(&trial);
        double oracle = 0.2 * sqrt(3.0 * 340 / (double)trial.holdout.kept.count); /* 2 components, 1 for the effects */
        assert_int_equal(trial.choice.offsets, FESCUE_OFFSETS_BOTH);
        assert_int_equal(trial.choice.rank, 2);
        assert_true(start_error(&trial, &plot) < 1.3 * oracle);
        trial_close(&trial);
    }
}

/* Rows and columns the other way round, and other units: the same choice. */
static void a_turned_table_in_other_units_gets_the_same(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct plot plot = {{100, 130, 2, 0.3, 0.3, FESCUE_DOUBLE, 5}, 0, 0};
    struct trial trial;
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    trial_open(context, &plot, &trial);
    trial_run(&trial);
    const struct half *half = &trial.cells.by_row;
    for (uint32_t i = 0; i < 100; i++)
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++)
            assert_status(context,
                          triplets_append(context, &list, half->across[k], i, 1e6 * cells_value(&trial.cells, half, k)),
                          FESCUE_OK);
    uint32_t rank = trial.choice.rank;
    double rmse = trial.choice.errors.rmse;
    trial_close(&trial);
    assert_status(context, cells_build(context, 130, 100, &list, &trial.cells), FESCUE_OK);
    trial_run(&trial);
    assert_int_equal(rank, 2);
    assert_int_equal(trial.choice.rank, 2);
    assert_int_equal(trial.choice.offsets, FESCUE_OFFSETS_NONE);
    assert_close(trial.choice.errors.rmse / (1e6 * rmse), 1, 0.15); /* other cells are hidden: 400, 3.5 % each way */
    trial_close(&trial);
    triplets_free(context, &list);
}

/* The fit that learns rank and ridge by itself, under the same judge. */
static void learning_finds_the_same(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct plot plain = {{200, 150, 3, 0.3, 0.3, FESCUE_DOUBLE, 2}, 0, 0};
    const struct plot noise = {{120, 90, 0, 0.4, 1, FESCUE_DOUBLE, 1}, 0, 0};
    struct trial trial;
    trial_open(context, &plain, &trial);
    trial.request.way = CHOOSE_LEARN;
    trial_run(&trial);
    assert_true(trial.choice.is_learnt);
    assert_int_equal(trial.choice.rank, 3);
    assert_int_equal(trial.choice.offsets, FESCUE_OFFSETS_NONE);
    assert_true(start_error(&trial, &plain) < 1.15 * 0.3 * sqrt(3.0 * 347 / (double)trial.holdout.kept.count));
    trial_close(&trial);
    trial_open(context, &noise, &trial);
    trial.request.way = CHOOSE_LEARN;
    trial_run(&trial);
    assert_int_equal(trial.choice.rank, 0);
    trial_close(&trial);
}

/* ---- what is asked ------------------------------------------------------------------------------------------------
 */

static void what_is_given_is_kept(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct plot plot = {{80, 60, 3, 0.4, 0.3, FESCUE_DOUBLE, 4}, 3, 1};
    struct trial trial;
    trial_open(context, &plot, &trial);
    trial_set(&trial, "rank", "2");
    trial_set(&trial, "ridge", "0.05");
    trial_set(&trial, "offsets", "rows");
    trial_run(&trial);
    assert_int_equal(trial.choice.rank, 2);
    assert_true(trial.choice.ridge == 0.05);
    assert_int_equal(trial.choice.offsets, FESCUE_OFFSETS_ROWS);
    assert_false(trial.choice.own_holdout);
    assert_int_equal(trial.choice.errors.count, trial.holdout.hidden.count);
    for (uint64_t k = 1; k < trial.choice.path_count; k++) {
        assert_int_equal(trial.choice.path[k].offsets, FESCUE_OFFSETS_ROWS);
        assert_in_range(trial.choice.path[k].rank, 1, 2); /* 1 on the way */
        assert_true(trial.choice.path[k].ridge == 0.05);
    }
    trial_clear(&trial);
    trial_set(&trial, "rank", "auto");
    trial_set(&trial, "rank-most", "2");
    trial_run(&trial);
    assert_int_equal(trial.choice.rank, 2); /* the best of those allowed */
    for (uint64_t k = 0; k < trial.choice.path_count; k++)
        assert_true(trial.choice.path[k].rank <= 2);
    trial_close(&trial);
}

/* A weak component under a strong one is lost to a ridge that stays where it began. */
static void the_ridge_follows_on_the_way_to_a_given_rank(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct plot plot = {{300, 40, 2, 0.6, 0.05, FESCUE_DOUBLE, 1}, 50, 5};
    struct trial trial;
    trial_open(context, &plot, &trial);
    trial_set(&trial, "rank", "2");
    trial_run(&trial);
    assert_int_equal(trial.choice.rank, 2);
    assert_true(trial.choice.ridge < 0.01);
    assert_true(start_error(&trial, &plot) < 1.3 * 0.05 * sqrt(3.0 * 340 / (double)trial.holdout.kept.count));
    trial_close(&trial);
}

static void bounds_hold_on_hidden_cells(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct plot plot = {{80, 60, 1, 0.4, 0.3, FESCUE_DOUBLE, 4}, 0, 0};
    struct trial trial;
    double free_rmse;
    trial_open(context, &plot, &trial);
    trial_set(&trial, "rank", "1");
    trial_run(&trial);
    free_rmse = trial.choice.errors.rmse;
    trial_clear(&trial);
    trial_set(&trial, "bounds", "0:1e-9");
    trial_run(&trial);
    /* All estimates are next to 0: the error is the size of the hidden values themselves, about hypot(1, 0.3). */
    assert_true(trial.choice.errors.rmse > 2 * free_rmse);
    assert_close(trial.choice.errors.rmse, hypot(1, 0.3), 0.3);
    trial_close(&trial);
}

static void a_holdout_of_its_own_is_announced(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct plot plot = {{100, 80, 2, 0.4, 0.3, FESCUE_DOUBLE, 6}, 0, 0};
    struct trial trial;
    trial_open(context, &plot, &trial);
    trial_set(&trial, "holdout", "0");
    trial_run(&trial);
    assert_int_equal(trial.holdout.hidden.count, 0);
    assert_true(trial.choice.own_holdout);
    assert_int_equal(trial.choice.rank, 2);
    assert_close((double)trial.choice.errors.count / (double)trial.cells.count, 0.1, 0.03);
    assert_true(isfinite(trial.choice.halfwidth));
    trial_clear(&trial);
    trial_set(&trial, "rank", "2");
    trial_set(&trial, "ridge", "0.01");
    trial_set(&trial, "offsets", "none");
    trial_run(&trial);
    assert_false(trial.choice.own_holdout);
    assert_int_equal(trial.choice.errors.count, 0);
    assert_true(isnan(trial.choice.halfwidth));
    assert_int_equal(trial.choice.start.rank, 2);
    assert_true(start_error(&trial, &plot) < 0.2);
    trial_close(&trial);
}

/* Fits never see hidden cells: with rank, ridge and offsets given, other hidden values leave the start as it is. */
static void hidden_cells_stay_hidden(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct plot plot = {{80, 60, 2, 0.4, 0.3, FESCUE_DOUBLE, 7}, 0, 1};
    struct trial trial;
    struct low_rank before;
    trial_open(context, &plot, &trial);
    trial_set(&trial, "rank", "2");
    trial_set(&trial, "ridge", "0.01");
    trial_set(&trial, "offsets", "none");
    trial_run(&trial);
    assert_status(context, low_rank_copy(context, &trial.choice.start, &before), FESCUE_OK);
    double rmse = trial.choice.errors.rmse;
    choice_free(context, &trial.choice);
    for (uint64_t k = 0; k < trial.holdout.hidden.count; k++)
        ((double *)trial.holdout.hidden.by_row.value)[k] += k % 2 == 0 ? 0.5 : -0.5;
    assert_status(context, choose_run(context, &trial.holdout, &trial.request, &trial.choice), FESCUE_OK);
    assert_true(trial.choice.errors.rmse > rmse);
    assert_memory_equal(trial.choice.start.spectrum, before.spectrum, 2 * sizeof(double));
    assert_memory_equal(trial.choice.start.left.data, before.left.data, 80 * before.left.stride * sizeof(double));
    low_rank_free(context, &before);
    trial_close(&trial);
}

/* ---- at the edges -------------------------------------------------------------------------------------------------
 */

static void tiny_tables_get_an_answer(void **state)
{
    fescue_context *context = bench_of(state)->context;
    static const uint32_t sizes[][2] = {{1, 1}, {1, 7}, {7, 1}, {2, 2}, {3, 4}};
    for (size_t s = 0; s < sizeof sizes / sizeof sizes[0]; s++)
        for (int way = CHOOSE_AUTO; way <= CHOOSE_LEARN; way++)
            for (int given = 0; given < 2; given++) {
                const struct plot plot = {{sizes[s][0], sizes[s][1], 1, 1.1, 0.1, FESCUE_DOUBLE, 1}, 5, 1};
                struct trial trial;
                trial_open(context, &plot, &trial);
                trial.request.way = (enum choose_way)way;
                if (given == 1)
                    trial_set(&trial, "rank", "9");
                trial_run(&trial);
                assert_true(trial.choice.rank <= (sizes[s][0] < sizes[s][1] ? sizes[s][0] : sizes[s][1]));
                assert_true(trial.choice.offsets != FESCUE_OFFSETS_AUTO);
                assert_int_equal(trial.choice.start.rank, trial.choice.rank);
                trial_close(&trial);
            }
}

/* All cells equal: offsets say it all, and nothing is divided by their zero scale. */
static void a_constant_table_is_its_mean(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct plot plot = {{30, 20, 0, 0.5, 0, FESCUE_DOUBLE, 1}, 5, 0};
    struct trial trial;
    trial_open(context, &plot, &trial);
    trial_run(&trial);
    assert_true(trial.choice.errors.rmse < 1e-12);
    assert_true(start_error(&trial, &plot) < 1e-12);
    trial_close(&trial);
}

static void a_deadline_that_has_passed_still_gives_an_answer(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct plot plot = {{200, 150, 3, 0.3, 0.3, FESCUE_DOUBLE, 2}, 0, 0};
    struct trial trial;
    trial_open(context, &plot, &trial);
    trial.request.deadline = clock_wall() - 1;
    trial_run(&trial);
    assert_true(trial.choice.path_count <= 4);
    assert_true(isfinite(trial.choice.errors.rmse));
    trial_close(&trial);
}

static void being_asked_to_stop_stops(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct plot plot = {{100, 80, 2, 0.3, 0.3, FESCUE_DOUBLE, 2}, 0, 0};
    struct trial trial;
    trial_open(context, &plot, &trial);
    fescue_context_cancel(context);
    assert_int_equal(trial_try(&trial), FESCUE_STOPPED);
    trial_close(&trial);
}

static void threads_do_not_change_a_bit(void **state)
{
    fescue_context *context = bench_of(state)->context;
    static const size_t workers[] = {1, 2, 7};
    const struct plot plot = {{120, 100, 2, 0.3, 0.3, FESCUE_DOUBLE, 9}, 4, 1};
    struct trial trial[3];
    for (int w = 0; w < 3; w++) {
        assert_status(context, team_resize(context, workers[w]), FESCUE_OK);
        trial_open(context, &plot, &trial[w]);
        trial_run(&trial[w]);
    }
    const struct choice *one = &trial[0].choice;
    for (int w = 1; w < 3; w++) {
        const struct choice *other = &trial[w].choice;
        assert_int_equal(other->path_count, one->path_count);
        for (uint64_t k = 0; k < one->path_count; k++)
            assert_true(other->path[k].errors.rmse == one->path[k].errors.rmse);
        assert_true(other->halfwidth == one->halfwidth);
        assert_memory_equal(other->start.left.data, one->start.left.data,
                            120 * one->start.left.stride * sizeof(double));
    }
    for (int w = 0; w < 3; w++)
        trial_close(&trial[w]);
}

/* The first 120 allocations one by one, then a sample. */
static void a_lack_of_memory_leaks_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct plot plot = {{12, 10, 1, 0.7, 0.1, FESCUE_DOUBLE, 1}, 0, 1};
    struct trial trial;
    trial_open(context, &plot, &trial);
    trial_set(&trial, "rank-most", "2");
    uint64_t alive = fescue_memory_usage(context).blocks;
    bool met = true;
    for (uint64_t n = 1; met; n += n < 120 ? 1 : 17) {
        fault_plan(FAULT_TAKE, n, false, 0);
        fescue_status status = trial_try(&trial);
        met = fault_met();
        assert_status(context, status, met ? FESCUE_NO_MEMORY : FESCUE_OK);
        trial_clear(&trial);
        assert_int_equal(fescue_memory_usage(context).blocks, alive);
        fescue_failure_clear(context);
    }
    fault_clear();
    trial_close(&trial);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(the_rank_of_a_noisy_table_is_found),
        BENCH_TEST(a_table_without_noise_is_met),
        BENCH_TEST(learning_does_not_stop_short_of_exact),
        BENCH_TEST(noise_alone_has_no_rank),
        BENCH_TEST(effects_alone_have_no_rank),
        BENCH_TEST(effects_of_large_tables_are_seen_beside_components),
        BENCH_TEST(effects_and_components_are_told_apart),
        BENCH_TEST(a_turned_table_in_other_units_gets_the_same),
        BENCH_TEST(learning_finds_the_same),
        BENCH_TEST(what_is_given_is_kept),
        BENCH_TEST(the_ridge_follows_on_the_way_to_a_given_rank),
        BENCH_TEST(bounds_hold_on_hidden_cells),
        BENCH_TEST(a_holdout_of_its_own_is_announced),
        BENCH_TEST(hidden_cells_stay_hidden),
        BENCH_TEST(tiny_tables_get_an_answer),
        BENCH_TEST(a_constant_table_is_its_mean),
        BENCH_TEST(a_deadline_that_has_passed_still_gives_an_answer),
        BENCH_TEST(being_asked_to_stop_stops),
        BENCH_TEST(threads_do_not_change_a_bit),
        BENCH_TEST(a_lack_of_memory_leaks_nothing),
    };
    return cmocka_run_group_tests_name("choose", tests, NULL, NULL);
}
