/* SPDX-License-Identifier: MIT
 *
 * What is said of a fill's errors: leverage against dense algebra, the variance surface and the scales of sensors
 * against errors of known law, and judgements of small tables whole.
 */
#include "judge/judge.h"
#include "judge/judgement.h"
#include "support_faults.h"
#include "support_table.h"

#include <math.h>
#include <string.h>

/* ---- leverage ------------------------------------------------------------------------------------------------------
 */

enum { M = 9, N = 7, RANK = 2 };

/* A model with factors of no particular kind; the caller frees it. */
static void model_make(fescue_context *context, enum fescue_offsets kind, struct model *model)
{
    struct random_stream random = random_open(3, RANDOM_TEST, 2);
    *model = (struct model){.rows = M, .columns = N, .offsets = {.kind = kind, .row_ridge = 0.7, .column_ridge = 1.3}};
    assert_status(context, memory_take(context, M, sizeof(double), &model->offsets.row), FESCUE_OK);
    assert_status(context, memory_take(context, N, sizeof(double), &model->offsets.column), FESCUE_OK);
    assert_status(context, low_rank_create(context, M, N, RANK, &model->low_rank), FESCUE_OK);
    for (size_t k = 0; k < RANK; k++) {
        model->low_rank.spectrum[k] = 5. / (double)(k + 1);
        for (size_t i = 0; i < M; i++)
            MATRIX_AT(model->low_rank.left, i, k) = random_normal(&random) / 3;
        for (size_t j = 0; j < N; j++)
            MATRIX_AT(model->low_rank.right, j, k) = random_normal(&random) / 3;
    }
}

/* g' (diag(ridge) + sum g g')^-1 g by elimination, for the line's seen positions. */
static double form_by_elimination(const struct half *half, uint32_t line, struct matrix factor, uint32_t at,
                                  const double *ridge)
{
    enum { SIZE = RANK + 1 };
    double a[SIZE][SIZE + 1] = {{0}}, g[SIZE], sum = 0;
    for (size_t k = 0; k < SIZE; k++) {
        a[k][k] = ridge[k];
        a[k][SIZE] = g[k] = k < RANK ? MATRIX_AT(factor, at, k) : 1;
    }
    for (uint64_t c = half->start[line]; c < half->start[line + 1]; c++)
        for (size_t k = 0; k < SIZE; k++)
            for (size_t l = 0; l < SIZE; l++)
                a[k][l] += (k < RANK ? MATRIX_AT(factor, half->across[c], k) : 1) *
                           (l < RANK ? MATRIX_AT(factor, half->across[c], l) : 1);
    for (size_t p = 0; p < SIZE; p++)
        for (size_t k = 0; k < SIZE; k++) {
            double share = k == p ? 0 : a[k][p] / a[p][p];
            for (size_t l = p; share != 0 && l <= SIZE; l++)
                a[k][l] -= share * a[p][l];
        }
    for (size_t k = 0; k < SIZE; k++)
        sum += g[k] * a[k][SIZE] / a[k][k];
    return sum;
}

static void leverage_is_that_of_the_two_systems(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {.rows = M, .columns = N, .rank = 1, .share = 0.5, .seed = 4};
    struct cells cells;
    struct model model;
    sow_cells(context, &sowing, &cells);
    model_make(context, FESCUE_OFFSETS_BOTH, &model);
    const double noise = 0.3;
    for (int learnt = 0; learnt < 2; learnt++) {
        struct leverage leverage;
        double lambda = learnt ? NAN : 0.4, of_rows[RANK + 1] = {0.4, 0.4, 0.7}, of_columns[RANK + 1] = {0.4, 0.4, 1.3};
        for (size_t k = 0; learnt && k < RANK; k++) {
            double square = model.low_rank.spectrum[k] * model.low_rank.spectrum[k];
            of_rows[k] = noise * M / square;
            of_columns[k] = noise * N / square;
        }
        assert_status(context, leverage_create(context, &cells, &model, noise, lambda, &leverage), FESCUE_OK);
        for (uint32_t i = 0; i < M; i++)
            for (uint32_t j = 0; j < N; j++)
                assert_close(leverage_at(&leverage, i, j),
                             form_by_elimination(&cells.by_row, i, model.low_rank.right, j, of_rows) +
                                 form_by_elimination(&cells.by_column, j, model.low_rank.left, i, of_columns),
                             1e-9);
        leverage_free(context, &leverage);
    }
    model_free(context, &model);
    cells_free(context, &cells);
}

/* Rank 0 and offsets of rows alone: a row's effect rests on its n cells and a ridge of 0.7. */
static void leverage_of_effects_is_one_over_the_cells(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {.rows = M, .columns = N, .rank = 1, .share = 0.5, .seed = 4};
    struct cells cells;
    struct model model;
    struct leverage leverage;
    sow_cells(context, &sowing, &cells);
    model_make(context, FESCUE_OFFSETS_ROWS, &model);
    model.low_rank.rank = 0;
    assert_status(context, leverage_create(context, &cells, &model, 0.3, NAN, &leverage), FESCUE_OK);
    for (uint32_t i = 0; i < M; i++) {
        double count = (double)(cells.by_row.start[i + 1] - cells.by_row.start[i]);
        assert_close(leverage_at(&leverage, i, 2), 1 / (count + 0.7), 1e-12);
    }
    leverage_free(context, &leverage);
    model.low_rank.rank = RANK;
    model_free(context, &model);
    cells_free(context, &cells);
}

/* ---- the surface ---------------------------------------------------------------------------------------------------
 */

enum { JUDGED = 20000, SENSORS = 40 };

/* Cells with leverages and distances of all sizes and normal errors of the variance `law`, times the sensor's own. */
static void judged_sow(fescue_context *context, const struct variance *law, const double *sensor, struct judged *judged)
{
    struct random_stream random = random_open(8, RANDOM_TEST, 5);
    *judged = (struct judged){0};
    assert_status(context, judged_grow(context, JUDGED, judged), FESCUE_OK);
    for (uint64_t c = 0; c < JUDGED; c++) {
        judged->row[c] = (uint32_t)c;
        judged->column[c] = (uint32_t)(c % SENSORS);
        double leverage = 0.05 + 2 * pow(random_uniform(&random), 3), share = random_uniform(&random);
        judged->at[c] = (struct standing){.leverage = (float)leverage,
                                          .own = (float)(share * leverage),
                                          .distance = (float)floor(exp(5 * random_uniform(&random))),
                                          .weight = 1,
                                          .marks = random_uniform(&random) < 0.2 ? STANDING_ONE_SIDED : 0};
        double v = variance_at(law, &judged->at[c]);
        double e = random_normal(&random) * sqrt(v) * sensor[c % SENSORS];
        judged->square[c] = e * e;
    }
    judged->count = JUDGED;
}

static void the_surface_is_found_again(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct variance law = {.weight = {1, 2, 0, 0, 3, 0, 0.5, 0, 0, 4}, .has_distance = true}, found;
    struct judged judged;
    double sensor[SENSORS];
    for (size_t s = 0; s < SENSORS; s++)
        sensor[s] = 1;
    for (int of_gaps = 0; of_gaps < 2; of_gaps++) {
        law.is_of_gaps = of_gaps == 1;
        judged_sow(context, &law, sensor, &judged);
        assert_status(context, variance_fit(context, &judged, true, law.is_of_gaps, &found), FESCUE_OK);
        /* 20 000 squared errors of relative spread sqrt 2: a mean over a tenth of them is known to 3 % */
        for (float lev = 0.1f; lev < 2; lev += 0.3f)
            for (float d = 1; d < 100; d *= 3)
                for (float share = 0.1f; share < 1; share += 0.4f) {
                    struct standing at = {.leverage = lev, .own = share * lev, .distance = d, .weight = 1};
                    assert_true(fabs(variance_at(&found, &at) / variance_at(&law, &at) - 1) < 0.12);
                }
        for (size_t k = 0; k < VARIANCE_TERMS; k++)
            assert_true(found.weight[k] >= 0);
        struct variance by_three = {0};
        assert_status(context, team_resize(context, 3), FESCUE_OK);
        assert_status(context, variance_fit(context, &judged, true, law.is_of_gaps, &by_three), FESCUE_OK);
        assert_memory_equal(by_three.weight, found.weight, sizeof found.weight);
        assert_status(context, team_resize(context, 1), FESCUE_OK);
        assert_status(context, variance_fit(context, &judged, false, false, &found), FESCUE_OK);
        struct standing near = {.leverage = 0.5f, .distance = 1, .weight = 1}, far = near;
        far.distance = 100;
        far.marks = STANDING_ONE_SIDED;
        assert_close(variance_at(&found, &near), variance_at(&found, &far), 0);
        judged_free(context, &judged);
    }
}

static void sensors_keep_one_scale_unless_they_differ(void **state)
{
    fescue_context *context = bench_of(state)->context;
    const struct variance law = {.weight = {1, 1}};
    for (int differ = 0; differ < 2; differ++) {
        struct judged judged;
        struct judgement judgement = {.leverage = {.columns = SENSORS}};
        double sensor[SENSORS];
        for (size_t s = 0; s < SENSORS; s++)
            sensor[s] = differ && s % 4 == 0 ? 3 : 1;
        judged_sow(context, &law, sensor, &judged);
        assert_status(context, variance_fit(context, &judged, false, false, &judgement.variance), FESCUE_OK);
        assert_status(context, scales_fit(context, &judged, NULL, &judgement), FESCUE_OK);
        for (size_t s = 0; s < SENSORS; s++)
            if (differ)
                assert_true(fabs(judgement.scale[s] / judgement.scale[1] / sensor[s] - 1) < 0.15);
            else
                assert_close(judgement.scale[s], 1, 0);
        judgement_free(context, &judgement);
        judged_free(context, &judged);
    }
}

/* Scores that fall, or do not, with the noise's share x of the variance: |normal| times 1 - x/2, or times 1. */
static void scores_tilt_where_their_shape_changes(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct judged judged;
    const struct variance law = {.weight = {1}};
    static double scores[JUDGED], sensor[SENSORS];
    struct random_stream random = random_open(8, RANDOM_TEST, 6);
    judged_sow(context, &law, sensor, &judged);
    for (int tilted = 0; tilted < 2; tilted++) {
        struct judgement judgement = {.level = 0.5};
        for (uint64_t c = 0; c < JUDGED; c++) {
            double x = 0.05 + 0.9 * random_uniform(&random);
            judged.at[c].leverage = (float)(1 / x - 1);
            scores[c] = (tilted ? 1 - x / 2 : 1) * fabs(random_normal(&random));
        }
        assert_status(context, tilt_fit(context, &judged, scores, &judgement), FESCUE_OK);
        double q = score_quantile(scores, JUDGED, 0.5);
        for (double x = 0.1; x < 1; x += 0.2) { /* 0.6745: the median of |normal| */
            struct standing at = {.leverage = (float)(1 / x - 1), .weight = 1};
            assert_true(fabs(q * tilt_at(&judgement, &at) / 0.6745 / (tilted ? 1 - x / 2 : 1) - 1) < 0.06);
        }
    }
    judged_free(context, &judged);
}

/* ---- weights -------------------------------------------------------------------------------------------------------
 */

/* Weights that are products of those of rows and columns are met at unseen cells too. */
static void unseen_readings_are_as_precise_as_their_lines(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct sowing sowing = {.rows = M, .columns = N, .rank = 1, .share = 0.5, .seed = 4};
    struct cells cells;
    struct line_weights weights;
    double weight[M * N];
    sow_cells(context, &sowing, &cells);
    for (uint32_t i = 0; i < M; i++)
        for (uint64_t k = cells.by_row.start[i]; k < cells.by_row.start[i + 1]; k++)
            weight[k] = (1 + i) / (1. + cells.by_row.across[k]);
    assert_status(context, cells_weigh(context, &cells, weight), FESCUE_OK);
    assert_status(context, line_weights_find(context, &cells, &weights), FESCUE_OK);
    for (uint32_t i = 0; i < M; i++)
        for (uint32_t j = 0; j < N; j++)
            assert_close(line_weights_at(&weights, i, j) * (1. + j) / (1 + i), 1, 1e-6);
    line_weights_free(context, &weights);
    cells_free(context, &cells);
}

/* ---- whole ----------------------------------------------------------------------------------------------------------
 */

struct trial {
    struct cells cells;
    struct fescue_options options;
    struct holdout holdout;
    struct choice choice;
    struct model model;
    struct hole_shape shape;
    struct judge_request request;
};

static const struct sowing trial_sowing = {
    .rows = 120, .columns = 60, .rank = 2, .share = 0.5, .noise = 0.3, .seed = 2};

/* The weight of a row's readings: six steps of a factor 4, of mean one about. */
static double row_weight(uint32_t row)
{
    return pow(4, row % 6) / 227.5;
}

/* Readings of other precision: their noise is divided by the root of their weight. */
static void trial_weigh(fescue_context *context, struct trial *trial)
{
    struct cells *cells = &trial->cells;
    double *weight = NULL;
    assert_status(context, TAKE(context, cells->count, &weight), FESCUE_OK);
    for (int side = 0; side < 2; side++) {
        const struct half *half = side == 0 ? &cells->by_row : &cells->by_column;
        for (uint32_t line = 0; line < half->lines; line++)
            for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++) {
                uint32_t row = side == 0 ? line : half->across[k], column = side == 0 ? half->across[k] : line;
                double truth = sowing_truth(&trial_sowing, row, column);
                ((double *)half->value)[k] = truth + (cells_value(cells, half, k) - truth) / sqrt(row_weight(row));
                if (side == 0)
                    weight[k] = row_weight(row);
            }
    }
    assert_status(context, cells_weigh(context, cells, weight), FESCUE_OK);
    GIVE(context, &weight);
}

/* A table of rank 2 with noise 0.3, offsets chosen, and a fit on all cells that is simply what choosing ends with,
   learnt again. */
static void trial_begin_with(fescue_context *context, bool is_weighted, struct trial *trial)
{
    struct choose_request choosing = {.options = &trial->options, .solver = solver_at(0)};
    struct relearnt learnt;
    *trial = (struct trial){.shape = {.shape = FESCUE_HOLDOUT_CELLS}};
    fescue_options_standard(&trial->options);
    sow_cells(context, &trial_sowing, &trial->cells);
    if (is_weighted)
        trial_weigh(context, trial);
    assert_status(context, holdout_split(context, &trial->cells, 0.1, 1, &trial->holdout), FESCUE_OK);
    assert_status(context, choose_run(context, &trial->holdout, &choosing, &trial->choice), FESCUE_OK);
    assert_true(trial->choice.is_learnt);
    trial->request = (struct judge_request){.cells = &trial->cells,
                                            .options = &trial->options,
                                            .choice = &trial->choice,
                                            .solver = solver_at(0),
                                            .shape = &trial->shape};
    assert_status(context, relearn(context, &trial->cells, &trial->request, false, &learnt), FESCUE_OK);
    trial->model = learnt.model;
    trial->request.noise = learnt.noise;
    trial->request.model = &trial->model;
}

static void trial_begin(fescue_context *context, struct trial *trial)
{
    trial_begin_with(context, false, trial);
}

static void trial_end(fescue_context *context, struct trial *trial)
{
    model_free(context, &trial->model);
    choice_free(context, &trial->choice);
    holdout_free(context, &trial->holdout);
    cells_free(context, &trial->cells);
}

/* What unseen readings say of a judgement: of the rows with row % 6 in [from, to). */
struct told {
    double rmse, inside;
};
static struct told unseen_tell(const struct trial *trial, const struct judgement *judgement, uint32_t from, uint32_t to)
{
    struct random_stream random = random_open(77, RANDOM_TEST, 9);
    const struct half *half = &trial->cells.by_row;
    double square = 0, count = 0, inside = 0;
    for (uint32_t i = 0; i < trial_sowing.rows; i++)
        for (uint32_t j = 0; j < trial_sowing.columns; j++) {
            double noise = 0.3 * random_normal(&random) / (half->weight != NULL ? sqrt(row_weight(i)) : 1);
            double e = model_estimate(&trial->model, i, j) - sowing_truth(&trial_sowing, i, j) - noise;
            bool seen = i % 6 < from || i % 6 >= to;
            for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++)
                seen |= half->across[k] == j;
            if (seen)
                continue;
            count++;
            square += e * e;
            inside += fabs(e) <= judgement_halfwidth(judgement, i, j);
        }
    return (struct told){sqrt(square / count), inside / count};
}

/* Against readings that nobody saw, of the same law. */
static void the_announced_error_is_that_of_unseen_readings(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct trial trial;
    struct judgement judgement;
    trial_begin(context, &trial);
    assert_status(context, judge_run(context, &trial.request, &judgement), FESCUE_OK);
    struct told told = unseen_tell(&trial, &judgement, 0, 6);
    /* about 3600 unseen and 1800 hidden normal errors: standard error of the ratio 2 % */
    assert_true(fabs(judgement.rmse / told.rmse - 1) < 0.06);
    assert_true(fabs(told.inside - 0.9) < 0.025);
    assert_true(judgement.rmse_low < judgement.rmse && judgement.rmse < judgement.rmse_high);
    assert_true(judgement.is_judged && judgement.scattered_folds == 5 && judgement.shaped_folds == 0);
    judgement_free(context, &judgement);
    trial_end(context, &trial);
}

/* Rows whose readings differ in precision by a factor of a thousand: what is announced is over all of them, and the
   intervals keep their promise among the precise and among the others. */
static void weights_are_in_the_intervals(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct trial trial;
    struct judgement judgement;
    trial_begin_with(context, true, &trial);
    assert_status(context, judge_run(context, &trial.request, &judgement), FESCUE_OK);
    /* the mean square is that of the sixth with the noisiest rows: 600 unseen and 300 hidden errors, 5 % */
    assert_true(fabs(judgement.rmse / unseen_tell(&trial, &judgement, 0, 6).rmse - 1) < 0.15);
    for (uint32_t at = 0; at < 6; at += 2) /* 1200 unseen cells each */
        assert_true(fabs(unseen_tell(&trial, &judgement, at, at + 2).inside - 0.9) < 0.05);
    judgement_free(context, &judgement);
    trial_end(context, &trial);
}

static void threads_do_not_matter(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct trial trial;
    struct judgement one, other;
    static const struct line_order order = {.along_columns = false};
    trial_begin(context, &trial);
    trial.shape.shape = FESCUE_HOLDOUT_GAPS;
    trial.request.order = &order;
    trial.options.folds = 1;
    assert_status(context, team_resize(context, 1), FESCUE_OK);
    assert_status(context, judge_run(context, &trial.request, &one), FESCUE_OK);
    assert_status(context, team_resize(context, 7), FESCUE_OK);
    assert_status(context, judge_run(context, &trial.request, &other), FESCUE_OK);
    assert_true(one.rmse == other.rmse && one.rmse_low == other.rmse_low && one.quantile == other.quantile);
    assert_memory_equal(&one.variance, &other.variance, sizeof one.variance);
    for (uint32_t i = 0; i < 120; i++)
        assert_true(judgement_halfwidth(&one, i, 5) == judgement_halfwidth(&other, i, 5));
    judgement_free(context, &one);
    judgement_free(context, &other);
    trial_end(context, &trial);
}

/* What the choice was made on, handed in as the one fold: its errors are those that choosing announced, and the
   intervals keep their promise. */
static void the_choice_may_stand_for_a_fold(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct trial trial;
    struct judgement judgement;
    trial_begin(context, &trial);
    trial.request.held = &trial.holdout;
    trial.options.folds = 1;
    assert_status(context, judge_run(context, &trial.request, &judgement), FESCUE_OK);
    assert_true(judgement.is_judged && !judgement.is_warm && judgement.scattered_folds == 1);
    assert_int_equal(judgement.judged, trial.holdout.hidden.count);
    assert_close(judgement.scattered_rmse, trial.choice.errors.rmse, 1e-12);
    struct told told = unseen_tell(&trial, &judgement, 0, 6);
    /* about 360 hidden normal errors: standard error 4 % */
    assert_true(fabs(judgement.rmse / told.rmse - 1) < 0.12);
    assert_true(fabs(told.inside - 0.9) < 0.05);
    judgement_free(context, &judgement);
    trial.options.folds = 2; /* one is not enough */
    assert_status(context, judge_run(context, &trial.request, &judgement), FESCUE_OK);
    assert_int_equal(judgement.scattered_folds, 2);
    judgement_free(context, &judgement);
    trial_end(context, &trial);
}

/* Without folds, and when there is no time for any, it is choosing's own hidden cells that speak. */
static void without_folds_choosing_speaks(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct trial trial;
    struct judgement judgement;
    trial_begin(context, &trial);
    for (int late = 0; late < 2; late++) {
        trial.options.folds = late ? FESCUE_AUTO : 0;
        trial.request.deadline = late ? clock_wall() : 0;
        assert_status(context, judge_run(context, &trial.request, &judgement), FESCUE_OK);
        assert_false(judgement.is_judged);
        assert_true(judgement.is_cut == (late == 1));
        assert_close(judgement.rmse, trial.choice.errors.rmse, 0);
        assert_close(judgement_halfwidth(&judgement, 3, 4), trial.choice.halfwidth, 0);
        judgement_free(context, &judgement);
    }
    trial_end(context, &trial);
}

/* A warm fold has forgotten what it lost: its errors are those of a cold one. */
static void warm_and_cold_folds_agree(void **state)
{
    fescue_context *context = bench_of(state)->context;
    struct trial trial;
    struct holdout holdout;
    struct errors errors[2];
    struct holdout_request asked = {.shape = FESCUE_HOLDOUT_COLUMNS, .share = 0.1, .seed = 5, .fold = 1};
    trial_begin(context, &trial);
    assert_status(context, holdout_cut(context, &trial.cells, &asked, &holdout), FESCUE_OK);
    for (int warm = 0; warm < 2; warm++) {
        struct relearnt learnt;
        assert_status(context, relearn(context, &holdout.kept, &trial.request, warm == 1, &learnt), FESCUE_OK);
        assert_status(context, errors_measure(context, &holdout.hidden, &learnt.model, NULL, &errors[warm]), FESCUE_OK);
        relearnt_free(context, &learnt);
    }
    assert_true(fabs(errors[1].rmse / errors[0].rmse - 1) < 0.03);
    holdout_free(context, &holdout);
    trial_end(context, &trial);
}

static void a_lack_of_memory_leaks_nothing(void **state)
{
    enum { STEP = 23 }; /* a judgement takes memory a thousand times; every 23rd, from another place each time */
    fescue_context *context = bench_of(state)->context;
    struct trial trial;
    static const struct line_order order = {.along_columns = false};
    trial_begin(context, &trial);
    trial.shape.shape = FESCUE_HOLDOUT_GAPS;
    trial.request.order = &order;
    trial.options.folds = 1;
    uint64_t alive = fescue_memory_usage(context).blocks;
    bool met = true;
    for (uint64_t n = 1; met; n += STEP) {
        struct judgement judgement;
        fault_plan(FAULT_TAKE, n, false, 0);
        fescue_status status = judge_run(context, &trial.request, &judgement);
        met = fault_met();
        assert_status(context, status, met ? FESCUE_NO_MEMORY : FESCUE_OK);
        judgement_free(context, &judgement);
        assert_int_equal(fescue_memory_usage(context).blocks, alive);
        fescue_failure_clear(context);
    }
    fault_clear();
    trial_end(context, &trial);
}

int main(void)
{
    const struct CMUnitTest tests[] = {
        BENCH_TEST(leverage_is_that_of_the_two_systems),
        BENCH_TEST(leverage_of_effects_is_one_over_the_cells),
        BENCH_TEST(the_surface_is_found_again),
        BENCH_TEST(sensors_keep_one_scale_unless_they_differ),
        BENCH_TEST(scores_tilt_where_their_shape_changes),
        BENCH_TEST(unseen_readings_are_as_precise_as_their_lines),
        BENCH_TEST(the_announced_error_is_that_of_unseen_readings),
        BENCH_TEST(weights_are_in_the_intervals),
        BENCH_TEST(threads_do_not_matter),
        BENCH_TEST(the_choice_may_stand_for_a_fold),
        BENCH_TEST(without_folds_choosing_speaks),
        BENCH_TEST(warm_and_cold_folds_agree),
        BENCH_TEST(a_lack_of_memory_leaks_nothing),
    };
    return cmocka_run_group_tests_name("judgement", tests, NULL, NULL);
}
