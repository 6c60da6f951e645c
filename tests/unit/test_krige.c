/* SPDX-License-Identifier: MIT
 *
 * Kriging of what a model leaves of series in time: laws sown are found again, the numbers at the cells are those of
 * the smoother that smoothing.py holds against dense algebra, and hidden values between them are met better than by
 * nothing.
 */
#include "judge/judge.h"
#include "support_solve.h"

enum { STEPS = 600, SERIES = 12 };
static const double correlation = 0.85, residual = 1, nugget = 0.36;

struct sown {
    double truth[STEPS][SERIES];
    struct cells cells;
    struct time_axis axis;
    struct model model; /* offsets of the columns alone: what is left is the residual */
};

static struct sown *sown_new(fescue_context *context)
{
    struct sown *sown = calloc(1, sizeof *sown);
    struct random_stream random = random_open(15, RANDOM_TEST, 4);
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    assert_non_null(sown);
    sown->axis = (struct time_axis){.along = TIME_ROWS, .count = STEPS, .is_sorted = true};
    assert_status(context, TAKE(context, STEPS, &sown->axis.at), FESCUE_OK);
    assert_status(context, TAKE(context, STEPS, &sown->axis.order), FESCUE_OK);
    for (uint32_t t = 0; t < STEPS; t++) {
        sown->axis.at[t] = t;
        sown->axis.order[t] = t;
        for (uint32_t j = 0; j < SERIES; j++) {
            double before = t > 0 ? sown->truth[t - 1][j] : 0, kept = t > 0 ? correlation : 0;
            sown->truth[t][j] = kept * before + sqrt(residual * (1 - kept * kept)) * random_normal(&random);
            double value = 5. + j + sown->truth[t][j] + sqrt(nugget) * random_normal(&random);
            if (random_uniform(&random) < 0.5)
                assert_status(context, triplets_append(context, &list, t, j, value), FESCUE_OK);
        }
    }
    assert_status(context, cells_build(context, STEPS, SERIES, &list, &sown->cells), FESCUE_OK);
    triplets_free(context, &list);
    sown->model = (struct model){.rows = STEPS, .columns = SERIES, .bounds = {-INFINITY, INFINITY}};
    assert_status(context, offsets_fit(context, &sown->cells, FESCUE_OFFSETS_COLUMNS, &sown->model.offsets), FESCUE_OK);
    assert_status(context, low_rank_create(context, STEPS, SERIES, 0, &sown->model.low_rank), FESCUE_OK);
    return sown;
}

static void sown_free(fescue_context *context, struct sown *sown)
{
    cells_free(context, &sown->cells);
    time_axis_free(context, &sown->axis);
    model_free(context, &sown->model);
    free(sown);
}

static void laws_are_found_again(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sown *sown = sown_new(context);
    struct krige_request request = {.time = &sown->axis};
    struct time_part *part = &sown->model.time;
    double variance = 0, rho = 0, noise = 0, with = 0, without = 0;
    assert_status(context, krige_run(context, &sown->cells, &sown->model, &request, part), FESCUE_OK);
    for (size_t j = 0; j < SERIES; j++) {
        variance += part->law[j].variance / SERIES;
        rho += part->law[j].correlation / SERIES;
        noise += part->noise[j] / SERIES;
    }
    /* 12 series of some 300 cells: three standard errors of the means are about these */
    assert_close(variance, residual, 0.25);
    assert_close(rho, correlation, 0.04);
    assert_close(noise, nugget, 0.08);
    for (uint32_t t = 0; t < STEPS; t++)
        for (uint32_t j = 0; j < SERIES; j++) {
            double there = sown->truth[t][j], e = time_part_at(part, t, j) - there;
            with += e * e;
            without += there * there;
        }
    assert_true(with < 0.4 * without); /* the best that the true laws allow is 0.3 */
    sown_free(context, sown);
}

static void same_bits_for_any_number_of_workers(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sown *sown = sown_new(context);
    struct krige_request request = {.time = &sown->axis};
    struct time_part one, other;
    assert_status(context, team_resize(context, 1), FESCUE_OK);
    assert_status(context, krige_run(context, &sown->cells, &sown->model, &request, &one), FESCUE_OK);
    assert_status(context, team_resize(context, 3), FESCUE_OK);
    assert_status(context, krige_run(context, &sown->cells, &sown->model, &request, &other), FESCUE_OK);
    assert_memory_equal(one.mean, other.mean, sown->cells.count * sizeof *one.mean);
    time_part_free(context, &one);
    time_part_free(context, &other);
    sown_free(context, sown);
}

static void failing_memory_leaks_nothing(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sown *sown = sown_new(context);
    struct krige_request request = {.time = &sown->axis};
    uint64_t alive = fescue_memory_usage(context).blocks;
    for (uint64_t n = 1;; n++) {
        struct time_part part;
        fault_plan(FAULT_TAKE, n, false, 0);
        fescue_status status = krige_run(context, &sown->cells, &sown->model, &request, &part);
        bool met = fault_met();
        fault_clear();
        assert_int_equal(status, met ? FESCUE_NO_MEMORY : FESCUE_OK);
        if (status == FESCUE_OK)
            time_part_free(context, &part);
        assert_int_equal(fescue_memory_usage(context).blocks, alive);
        fescue_failure_clear(context);
        if (!met)
            break;
    }
    sown_free(context, sown);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(laws_are_found_again),
        BENCH_TEST(same_bits_for_any_number_of_workers),
        BENCH_TEST(failing_memory_leaks_nothing),
    };
    return cmocka_run_group_tests_name("krige", tests, NULL, NULL);
}
