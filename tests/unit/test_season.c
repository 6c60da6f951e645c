/* SPDX-License-Identifier: MIT
 *
 * Seasons: closed solutions where there are any, truths that were sown, what stands out of noise and what does not.
 */
#include "model/model.h"
#include "support.h"

#include <math.h>
#include <stdlib.h>

/* Times 0, 1, 2, ... along the rows. */
struct clock {
    struct time_axis axis;
    double *at;
    uint32_t *order;
};

static struct clock clock_make(uint32_t steps)
{
    struct clock clock = {.at = malloc(steps * sizeof(double)), .order = malloc(steps * sizeof(uint32_t))};
    assert_true(clock.at != NULL && clock.order != NULL);
    for (uint32_t i = 0; i < steps; i++) {
        clock.at[i] = i;
        clock.order[i] = i;
    }
    clock.axis = (struct time_axis){.along = TIME_ROWS, .count = steps, .at = clock.at, .order = clock.order};
    return clock;
}

static void clock_free(struct clock *clock)
{
    free(clock->at);
    free(clock->order);
}

/* What the cells hold: 10 j + amplitude_j cos(2 pi t / period + 0.7) + noise; series j sees `seen(j)` of its first
 * steps. */
struct scene {
    uint32_t steps, series;
    double period, noise, spread; /* amplitudes 2 + spread * normal */
    bool is_turned;               /* columns are times */
    uint32_t last_seen;           /* steps that the last series sees; the one before it sees none */
};

static double amplitude_of(const struct scene *scene, uint32_t j)
{
    struct random_stream random = random_open(3, RANDOM_TEST, j);
    return 2 + scene->spread * random_normal(&random);
}

static double wave_of(const struct scene *scene, uint32_t i, uint32_t j)
{
    return amplitude_of(scene, j) * cos(2 * M_PI * i / scene->period + 0.7);
}

static void scene_cells(fescue_context *context, const struct scene *scene, struct cells *cells)
{
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    for (uint32_t i = 0; i < scene->steps; i++)
        for (uint32_t j = 0; j < scene->series; j++) {
            struct random_stream random = random_open(4, RANDOM_TEST, i * scene->series + j);
            bool is_seen =
                scene->last_seen == 0 || j + 2 < scene->series || (j + 1 == scene->series && i < scene->last_seen);
            double x = 10.0 * j + wave_of(scene, i, j) + scene->noise * random_normal(&random);
            if (is_seen)
                assert_status(context,
                              triplets_append(context, &list, scene->is_turned ? j : i, scene->is_turned ? i : j, x),
                              FESCUE_OK);
        }
    uint32_t rows = scene->is_turned ? scene->series : scene->steps;
    assert_status(context, cells_build(context, rows, scene->is_turned ? scene->steps : scene->series, &list, cells),
                  FESCUE_OK);
    triplets_free(context, &list);
}

static struct season fit_season(fescue_context *context, const struct scene *scene, const struct cells *cells)
{
    struct clock clock = clock_make(scene->steps);
    struct season season;
    if (scene->is_turned)
        clock.axis.along = TIME_COLUMNS;
    assert_status(context, season_create(context, &clock.axis, scene->series, &scene->period, 1, &season), FESCUE_OK);
    assert_status(context, season_fit(context, cells, &season), FESCUE_OK);
    clock_free(&clock);
    return season;
}

/* Whole cycles, every cell seen, next to no noise: the Fourier sums 2/n sum x cos, 2/n sum x sin. */
static void whole_cycles_give_fourier_sums(void **state)
{
    fescue_context *context = bench_of(state)->context;
    for (int turned = 0; turned < 2; turned++) {
        const struct scene scene = {96, 5, 24, 0.01, 0.5, turned == 1, 0};
        struct cells cells;
        scene_cells(context, &scene, &cells);
        struct season season = fit_season(context, &scene, &cells);
        assert_int_equal(season.waves, 4);
        for (uint32_t j = 0; j < 5; j++)
            for (size_t k = 0; k < 2; k++) {
                const struct half *half = turned == 1 ? &cells.by_row : &cells.by_column;
                double sum = 0;
                for (uint32_t i = 0; i < 96; i++)
                    sum += cells_value(&cells, half, half->start[j] + i) * season.wave[i * 8 + k] / 48;
                assert_close(season.amplitude[j * 8 + k], sum, 1e-3);
            }
        season_free(context, &season);
        cells_free(context, &cells);
    }
}

/* Amplitudes drawn around 2: the series without cells has the common season, the one with six cells comes near it,
   others are their own; noise of one a cell. */
static void short_series_lean_on_the_others(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct scene scene = {480, 40, 24, 1, 0.3, false, 6};
    struct cells cells;
    double mean = 0, worst = 0;
    scene_cells(context, &scene, &cells);
    struct season season = fit_season(context, &scene, &cells);
    for (uint32_t j = 0; j + 2 < 40; j++) {
        mean += amplitude_of(&scene, j) / 38;
        for (uint32_t i = 0; i < 24; i++)
            worst = fmax(worst, fabs(season_at(&season, i, j) - wave_of(&scene, i, j)));
    }
    assert_true(worst < 4 * sqrt(2.0 * 4 / 480)); /* four waves of two amplitudes, each of deviation sqrt(2/480) */
    for (uint32_t i = 0; i < 24; i++) {
        double common = mean * cos(2 * M_PI * i / 24 + 0.7);
        assert_close(season_at(&season, i, 38), common, 0.1);
        assert_close(season_at(&season, i, 39), common, 0.5);
        assert_close(season_at(&season, i + 24, 39), season_at(&season, i, 39), 1e-9);
    }
    season_free(context, &season);
    cells_free(context, &cells);
}

/* Cells of weight 0.01 that say the opposite are outvoted. */
static void weights_count(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct scene scene = {96, 6, 24, 0.2, 0.2, false, 0};
    struct cells cells;
    scene_cells(context, &scene, &cells);
    double *weight;
    assert_status(context, TAKE(context, cells.count, &weight), FESCUE_OK);
    for (uint64_t k = 0; k < cells.count; k++) {
        weight[k] = k / 6 % 3 == 0 ? 1e-4 : 1.5;
        if (k / 6 % 3 == 0)
            ((double *)cells.by_row.value)[k] = ((double *)cells.by_column.value)[k % 6 * 96 + k / 6] = -50;
    }
    assert_status(context, cells_weigh(context, &cells, weight), FESCUE_OK);
    struct season season = fit_season(context, &scene, &cells);
    for (uint32_t i = 0; i < 96; i++)
        for (uint32_t j = 0; j < 6; j++)
            assert_close(season_at(&season, i, j), wave_of(&scene, i, j), 0.3);
    season_free(context, &season);
    GIVE(context, &weight);
    cells_free(context, &cells);
}

static void harmonics_are_taken_once(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct clock clock = clock_make(400);
    struct season season;
    const double periods[] = {24, 12, 168, 3, 2}; /* 1/12 is a harmonic of 24; 3 and 2 have no room for more */
    assert_status(context, season_create(context, &clock.axis, 7, periods, 5, &season), FESCUE_OK);
    const double expected[] = {1 / 24.0,  2 / 24.0,  3 / 24.0,  4 / 24.0,  4 / 12.0,
                               1 / 168.0, 2 / 168.0, 3 / 168.0, 4 / 168.0, 1 / 2.0};
    /* of 12: 1 and 2 are there, 3/12 is new, 4/12 is 1/3 */
    assert_int_equal(season.waves, 11);
    assert_close(season.frequency[4], 3 / 12.0, 1e-12);
    for (size_t k = 0; k < 10; k++)
        assert_close(season.frequency[k < 4 ? k : k + 1], expected[k], 1e-12);
    season_free(context, &season);
    clock_free(&clock);
}

static void what_is_left_and_the_season_are_the_table(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct scene scene = {60, 4, 12, 0.5, 0.3, true, 0};
    struct cells cells, rest;
    scene_cells(context, &scene, &cells);
    struct season season = fit_season(context, &scene, &cells);
    assert_status(context, season_remove(context, &cells, &season, &rest), FESCUE_OK);
    for (uint32_t i = 0; i < 4; i++)
        for (uint32_t j = 0; j < 60; j++) {
            double x = cells_value(&cells, &cells.by_row, i * 60 + j);
            assert_close(cells_value(&rest, &rest.by_row, i * 60 + j) + season_at(&season, i, j), x, 1e-12);
            assert_close(cells_value(&rest, &rest.by_column, j * 4 + i) + season_at(&season, i, j), x, 1e-12);
        }
    season_free(context, &season);
    cells_free(context, &rest);
    cells_free(context, &cells);
}

static void a_constant_table_has_none(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    struct cells cells;
    for (uint32_t i = 0; i < 30; i++)
        assert_status(context, triplets_append(context, &list, i, 0, 5), FESCUE_OK);
    assert_status(context, cells_build(context, 30, 1, &list, &cells), FESCUE_OK);
    const struct scene scene = {.steps = 30, .series = 1, .period = 6};
    struct season season = fit_season(context, &scene, &cells);
    for (uint32_t i = 0; i < 30; i++)
        assert_close(season_at(&season, i, 0), 0, 0);
    season_free(context, &season);
    cells_free(context, &cells);
    triplets_free(context, &list);
}

/* ---- looking ------------------------------------------------------------------------------------------------------
 */

/* AR(1) noise of correlation 0.9 shared by four series, and a cycle of 24 steps of this amplitude. */
static size_t found_in(fescue_context *context, uint32_t draw, double amplitude, double period[3])
{
    enum { STEPS = 480 };
    struct clock clock = clock_make(STEPS);
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    struct cells cells;
    struct random_stream random = random_open(draw, RANDOM_TEST, 77);
    double state = random_normal(&random);
    size_t found;
    for (uint32_t i = 0; i < STEPS; i++) {
        for (uint32_t j = 0; j < 4; j++)
            if (random_uniform(&random) < 0.8)
                assert_status(context,
                              triplets_append(context, &list, i, j,
                                              state + amplitude * sin(2 * M_PI * i / 24) + random_normal(&random)),
                              FESCUE_OK);
        state = 0.9 * state + sqrt(1 - 0.81) * random_normal(&random);
    }
    assert_status(context, cells_build(context, STEPS, 4, &list, &cells), FESCUE_OK);
    period[0] = 24;
    period[1] = 168;
    period[2] = 8766;
    assert_status(context, season_find(context, &cells, &clock.axis, period, 3, &found), FESCUE_OK);
    triplets_free(context, &list);
    cells_free(context, &cells);
    clock_free(&clock);
    return found;
}

static void noise_alone_is_rarely_a_season(void **state)
{
    double period[3];
    size_t alarms = 0;
    for (uint32_t draw = 1; draw <= 200; draw++)
        alarms += found_in(bench_of(state)->context, draw, 0, period) > 0;
    assert_true(alarms <= 2); /* 0.2 expected at the level of 1e-3 */
}

static void a_cycle_stands_out(void **state)
{
    double period[3];
    for (uint32_t draw = 1; draw <= 20; draw++) {
        assert_int_equal(found_in(bench_of(state)->context, draw, 1.2, period), 1);
        assert_close(period[0], 24, 0);
    }
}

/* ---- bits and memory ----------------------------------------------------------------------------------------------
 */

static void same_bits_for_any_number_of_workers(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct scene scene = {700, 300, 24, 1, 0.3, false, 6};
    struct cells cells;
    scene_cells(context, &scene, &cells);
    struct season one = fit_season(context, &scene, &cells);
    assert_status(context, team_resize(context, 3), FESCUE_OK);
    struct season three = fit_season(context, &scene, &cells);
    assert_memory_equal(one.amplitude, three.amplitude, 300 * 2 * one.waves * sizeof(double));
    season_free(context, &one);
    season_free(context, &three);
    cells_free(context, &cells);
    assert_status(context, team_resize(context, 1), FESCUE_OK);
}

static fescue_status all_run(fescue_context *context, const struct cells *cells, struct season *season,
                             struct cells *rest)
{
    struct clock clock = clock_make(60);
    double period = 12;
    size_t found;
    fescue_status status;
    TRY(season_find(context, cells, &clock.axis, &period, 1, &found));
    TRY(season_create(context, &clock.axis, 4, &period, 1, season));
    TRY(season_fit(context, cells, season));
    TRY(season_remove(context, cells, season, rest));
done:
    clock_free(&clock);
    return status;
}

static void a_lack_of_memory_leaks_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct scene scene = {60, 4, 12, 0.5, 0.3, false, 0};
    struct cells cells;
    scene_cells(context, &scene, &cells);
    uint64_t blocks = fescue_memory_usage(context).blocks;
    bool met = true;
    for (uint64_t n = 1; met; n++) {
        struct season season = {0};
        struct cells rest = {0};
        fault_plan(FAULT_TAKE, n, false, 0);
        fescue_status status = all_run(context, &cells, &season, &rest);
        met = fault_met();
        fault_clear();
        assert_status(context, status, met ? FESCUE_NO_MEMORY : FESCUE_OK);
        season_free(context, &season);
        cells_free(context, &rest);
        assert_int_equal(fescue_memory_usage(context).blocks, blocks);
        fescue_failure_clear(context);
    }
    cells_free(context, &cells);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(whole_cycles_give_fourier_sums),
        BENCH_TEST(short_series_lean_on_the_others),
        BENCH_TEST(weights_count),
        BENCH_TEST(harmonics_are_taken_once),
        BENCH_TEST(what_is_left_and_the_season_are_the_table),
        BENCH_TEST(a_constant_table_has_none),
        BENCH_TEST(noise_alone_is_rarely_a_season),
        BENCH_TEST(a_cycle_stands_out),
        BENCH_TEST(same_bits_for_any_number_of_workers),
        BENCH_TEST(a_lack_of_memory_leaks_nothing),
    };
    return cmocka_run_group_tests_name("season", tests, NULL, NULL);
}
