/* SPDX-License-Identifier: MIT
 *
 * Seasons of a table whose rows (or columns) are times. With time as rows, t_i in steps of the clock,
 *
 *     x_ij = m_j + sum over waves k of (c_jk cos 2 pi f_k t_i + s_jk sin 2 pi f_k t_i) + e_ij
 *
 *     e_ij ~ N(0, s2_j / w_ij)      c_jk ~ N(g_k, v_k)      s_jk ~ N(h_k, v_k)
 *
 *     symbol    shape   what it is
 *     f_k       W       frequencies: the harmonics 1, 2, ... of every period that are slower than two and a half steps
 *                       a cycle, at most four a period, each frequency once
 *     z_i       2W + 1  1, and cosine and sine of every wave at step i
 *     b_j       2W + 1  m_j, and c_jk, s_jk
 *
 * so that a series of many cells has its own season, a short one leans on the others, and one without cells has the
 * common season g, h. The linear mixed model is fitted by expectation and maximisation (Laird, Ware 1982,
 * "Random-effects models for longitudinal data"): per series the posterior of b_j from its sums of z z' and z x, then
 *
 *     g_k, h_k = means of the posterior means
 *     v_k      = mean of the posterior's spread around them, both of its halves
 *     s2_j     = (expected squared error of the series + 4 mean s2) / (cells + 4)
 *
 * The level m_j is free and not kept: offsets are learnt behind, from what the season leaves.
 *
 * Departure: e is taken for white. What lies in the table at the very frequencies of the waves goes into the season
 * then, also where it is a piece of slower noise; season_find asks whether it stands out of that.
 *
 * Cost: one pass of (2W+1)^2/2 operations a cell, then (2W+1)^3 a series and round; memory (2W+1)^2/2 numbers a series.
 * Series run in parallel; sums go block by block. Nothing is allocated in a round.
 */
#include "model/model.h"

#include <assert.h>
#include <math.h>
#include <string.h>

enum { HARMONICS = 4, ROUNDS = 40, SIZE_MOST = 2 * SEASON_WAVES_MOST + 1 };
/* A cycle of fewer steps than this is not told from one of more (Nyquist), with room for a clock that is not regular.
 */
#define CYCLE_LEAST 2.5
/* Two frequencies closer than this, relatively, are one. */
#define SAME_FREQUENCY 1e-6
/* Pseudo-cells of mean noise with which every series learns its own. */
#define NOISE_PRIOR_CELLS 4.0
/* A variance of amplitudes that fell below this share of the noise is nothing; it keeps the precision finite. */
#define VARIANCE_LEAST 1e-12

/* ---- waves ----------------------------------------------------------------------------------------------------------
 */

static bool frequency_is_known(const struct season *season, double frequency)
{
    for (size_t k = 0; k < season->waves; k++)
        if (fabs(season->frequency[k] - frequency) <= SAME_FREQUENCY * frequency)
            return true;
    return false;
}

static void frequencies_set(const double *period, size_t periods, struct season *season)
{
    for (size_t p = 0; p < periods; p++)
        for (int h = 1; h <= HARMONICS; h++) {
            double frequency = h / period[p];
            bool is_first = h == 1 && period[p] >= 2;
            if (season->waves < SEASON_WAVES_MOST && (is_first || frequency * CYCLE_LEAST <= 1) &&
                !frequency_is_known(season, frequency))
                season->frequency[season->waves++] = frequency;
        }
}

fescue_status season_create(fescue_context *context, const struct time_axis *axis, uint32_t series,
                            const double *period, size_t periods, struct season *season)
{
    fescue_status status = FESCUE_OK;
    assert(axis->along != TIME_NONE);
    *season = (struct season){.along = axis->along, .steps = axis->count, .series = series};
    frequencies_set(period, periods, season);
    size_t width = 2 * season->waves;
    TRY(memory_take(context, axis->count, width * sizeof(double), &season->wave));
    TRY(memory_take(context, series, width * sizeof(double), &season->amplitude));
    for (uint32_t i = 0; i < axis->count; i++)
        for (size_t k = 0; k < season->waves; k++) {
            double turns = season->frequency[k] * axis->at[i], angle = 2 * M_PI * (turns - floor(turns));
            season->wave[i * width + 2 * k] = cos(angle);
            season->wave[i * width + 2 * k + 1] = sin(angle);
        }
done:
    if (status != FESCUE_OK)
        season_free(context, season);
    return status;
}

fescue_status season_alike(fescue_context *context, const struct season *from, struct season *season)
{
    fescue_status status = FESCUE_OK;
    size_t width = 2 * from->waves;
    *season = *from;
    season->wave = season->amplitude = NULL;
    TRY(memory_take(context, from->steps, width * sizeof(double), &season->wave));
    TRY(memory_take(context, from->series, width * sizeof(double), &season->amplitude));
    if (width > 0)
        memcpy(season->wave, from->wave, from->steps * width * sizeof(double));
done:
    if (status != FESCUE_OK)
        season_free(context, season);
    return status;
}

void season_free(fescue_context *context, struct season *season)
{
    GIVE(context, &season->wave);
    GIVE(context, &season->amplitude);
    *season = (struct season){0};
}

double season_at(const struct season *season, uint32_t row, uint32_t column)
{
    bool by_rows = season->along == TIME_ROWS;
    size_t width = 2 * season->waves;
    double sum = 0;
    if (season->along == TIME_NONE)
        return 0;
    const double *wave = season->wave + (by_rows ? row : column) * width;
    const double *amplitude = season->amplitude + (by_rows ? column : row) * width;
    for (size_t k = 0; k < width; k++)
        sum += wave[k] * amplitude[k];
    return sum;
}

/* ---- the mixed model ------------------------------------------------------------------------------------------------
 */

struct season_fit {
    fescue_context *context;
    const struct cells *cells;
    const struct half *half; /* by series */
    struct season *season;
    size_t size;    /* 2W + 1: the waves, then the level */
    double *second; /* series x packed_size(size): sum w z z' */
    double *target; /* series x size: sum w z x */
    double *square; /* series: sum w x^2 */
    double *noise;  /* series: s2_j */
    double *partial, sum[4 * SEASON_WAVES_MOST + 2];
    double common[2 * SEASON_WAVES_MOST], variance[SEASON_WAVES_MOST], mean_noise;
    struct arena arena;
};

/* Numbers that a block sums: posterior means, their squares with variances, by wave; error and weight of cells. */
static size_t sums_count(const struct season_fit *fit)
{
    return 3 * fit->season->waves + 2;
}

static fescue_status fit_open(struct season_fit *fit)
{
    size_t series = fit->season->series, size = fit->size;
    struct arena *arena = &fit->arena;
    arena_reserve(arena, series * packed_size(size), sizeof(double));
    arena_reserve(arena, series * size, sizeof(double));
    arena_reserve(arena, series, sizeof(double));
    arena_reserve(arena, series, sizeof(double));
    arena_reserve(arena, fit->half->blocks * sums_count(fit), sizeof(double));
    fescue_status status = arena_open(fit->context, arena);
    if (status != FESCUE_OK)
        return status;
    fit->second = arena_carve(arena, series * packed_size(size), sizeof(double));
    fit->target = arena_carve(arena, series * size, sizeof(double));
    fit->square = arena_carve(arena, series, sizeof(double));
    fit->noise = arena_carve(arena, series, sizeof(double));
    fit->partial = arena_carve(arena, fit->half->blocks * sums_count(fit), sizeof(double));
    return FESCUE_OK;
}

/* Sums of a series, x taken from its mean: levels far from 0 would cost digits. */
static void series_gather(const struct season_fit *fit, size_t line)
{
    const struct half *half = fit->half;
    size_t width = fit->size - 1;
    double *second = fit->second + line * packed_size(fit->size), *target = fit->target + line * fit->size;
    double z[SIZE_MOST], mean = 0, count = (double)(half->start[line + 1] - half->start[line]);
    for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++)
        mean += cells_value(fit->cells, half, k) / count;
    z[width] = 1;
    for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++) {
        double x = cells_value(fit->cells, half, k) - mean, weight = half->weight != NULL ? (double)half->weight[k] : 1;
        memcpy(z, fit->season->wave + half->across[k] * width, width * sizeof *z);
        for (size_t a = 0, at = 0; a < fit->size; a++) {
            target[a] += weight * z[a] * x;
            for (size_t b = 0; b <= a; b++, at++)
                second[at] += weight * z[a] * z[b];
        }
        fit->square[line] += weight * x * x;
    }
}

static void gather_block(void *opaque, size_t block, size_t worker)
{
    const struct season_fit *fit = opaque;
    (void)worker;
    for (size_t line = fit->half->block[block]; line < fit->half->block[block + 1]; line++)
        series_gather(fit, line);
}

/* The posterior of a series: its means into `mean`, packed covariance into `covariance`. */
static void series_solve(const struct season_fit *fit, size_t line, double *mean, double *covariance)
{
    size_t size = fit->size, count = packed_size(size);
    double factor[SIZE_MOST * (SIZE_MOST + 1) / 2], precision = 1 / fit->noise[line];
    const double *second = fit->second + line * count, *target = fit->target + line * size;
    for (size_t at = 0; at < count; at++)
        factor[at] = precision * second[at];
    for (size_t a = 0; a < size; a++) {
        double prior = a + 1 < size ? 1 / fit->variance[a / 2] : VARIANCE_LEAST / fit->mean_noise;
        factor[packed_size(a) + a] += prior;
        mean[a] = precision * target[a] + (a + 1 < size ? prior * fit->common[a] : 0);
    }
    packed_cholesky(factor, size);
    packed_solve(factor, size, mean);
    packed_inverse(factor, size, covariance);
}

/* E of the weighted squared errors: q - 2 b't + <E bb', S>. */
static double series_error(const struct season_fit *fit, size_t line, const double *mean, const double *covariance)
{
    const double *second = fit->second + line * packed_size(fit->size), *target = fit->target + line * fit->size;
    double error = fit->square[line];
    for (size_t a = 0, at = 0; a < fit->size; a++) {
        error -= 2 * mean[a] * target[a];
        for (size_t b = 0; b <= a; b++, at++)
            error += (a == b ? 1 : 2) * (mean[a] * mean[b] + covariance[at]) * second[at];
    }
    return error > 0 ? error : 0;
}

static void round_block(void *opaque, size_t block, size_t worker)
{
    const struct season_fit *fit = opaque;
    size_t waves = fit->season->waves, width = 2 * waves;
    double mean[SIZE_MOST], covariance[SIZE_MOST * (SIZE_MOST + 1) / 2];
    double *sum = fit->partial + block * sums_count(fit);
    (void)worker;
    memset(sum, 0, sums_count(fit) * sizeof *sum);
    for (size_t line = fit->half->block[block]; line < fit->half->block[block + 1]; line++) {
        double cells = (double)(fit->half->start[line + 1] - fit->half->start[line]);
        double *amplitude = fit->season->amplitude + line * width;
        if (cells == 0) {
            memcpy(amplitude, fit->common, width * sizeof *amplitude);
            continue;
        }
        series_solve(fit, line, mean, covariance);
        double error = series_error(fit, line, mean, covariance);
        fit->noise[line] = (error + NOISE_PRIOR_CELLS * fit->mean_noise) / (cells + NOISE_PRIOR_CELLS);
        memcpy(amplitude, mean, width * sizeof *amplitude);
        for (size_t a = 0; a < width; a++) {
            sum[a] += mean[a];
            sum[width + a / 2] += mean[a] * mean[a] + covariance[packed_size(a) + a];
        }
        sum[3 * waves] += error;
        sum[3 * waves + 1] += 1;
    }
}

/* Common amplitudes, variances and mean noise from the sums of a round. */
static void round_learn(struct season_fit *fit)
{
    size_t waves = fit->season->waves;
    double series = fit->sum[3 * waves + 1], least = VARIANCE_LEAST * fit->mean_noise;
    fit->mean_noise = fmax(fit->sum[3 * waves] / (double)fit->cells->count, least);
    for (size_t k = 0; k < waves; k++) {
        double square = 0;
        for (size_t a = 2 * k; a < 2 * k + 2; a++) {
            fit->common[a] = fit->sum[a] / series;
            square += fit->common[a] * fit->common[a];
        }
        fit->variance[k] = fmax((fit->sum[2 * waves + k] / series - square) / 2, least);
    }
}

static double variance_around_means(const struct season_fit *fit)
{
    double square = 0;
    for (size_t line = 0; line < fit->season->series; line++)
        square += fit->square[line];
    return square / (double)fit->cells->count;
}

fescue_status season_fit(fescue_context *context, const struct cells *cells, struct season *season)
{
    struct season_fit fit = {.context = context, .cells = cells, .season = season, .size = 2 * season->waves + 1};
    fescue_status status;
    fit.half = season->along == TIME_ROWS ? &cells->by_column : &cells->by_row;
    assert(season->along != TIME_NONE && fit.half->lines == season->series && fit.half->length == season->steps);
    TRY(fit_open(&fit));
    team_run(context, fit.half->blocks, gather_block, &fit);
    fit.mean_noise = variance_around_means(&fit);
    if (!(fit.mean_noise > 0)) /* every series is constant: there is no season */
        goto done;
    for (size_t k = 0; k < season->waves; k++)
        fit.variance[k] = fit.mean_noise;
    for (size_t line = 0; line < season->series; line++)
        fit.noise[line] = fit.mean_noise;
    for (int round = 0; round < ROUNDS; round++) {
        team_run(context, fit.half->blocks, round_block, &fit);
        team_sum(context, fit.partial, fit.half->blocks, sums_count(&fit), fit.sum);
        round_learn(&fit);
    }
done:
    arena_close(context, &fit.arena);
    return status;
}

/* ---- the rest -------------------------------------------------------------------------------------------------------
 */

struct removal {
    const struct cells *cells;
    const struct season *season;
    struct cells *rest;
    bool by_row;
};

static void remove_block(void *opaque, size_t block, size_t worker)
{
    const struct removal *job = opaque;
    const struct half *half = job->by_row ? &job->cells->by_row : &job->cells->by_column;
    const struct half *to = job->by_row ? &job->rest->by_row : &job->rest->by_column;
    (void)worker;
    for (uint32_t line = half->block[block]; line < half->block[block + 1]; line++)
        for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++) {
            uint32_t row = job->by_row ? line : half->across[k], column = job->by_row ? half->across[k] : line;
            double value = cells_value(job->cells, half, k) - season_at(job->season, row, column);
            if (job->cells->precision == FESCUE_SINGLE)
                ((float *)to->value)[k] = (float)value;
            else
                ((double *)to->value)[k] = value;
        }
}

fescue_status season_remove(fescue_context *context, const struct cells *cells, const struct season *season,
                            struct cells *rest)
{
    struct removal job = {cells, season, rest, true};
    fescue_status status = cells_alike(context, cells, cells->precision, rest);
    if (status != FESCUE_OK)
        return status;
    team_run(context, cells->by_row.blocks, remove_block, &job);
    job.by_row = false;
    team_run(context, cells->by_column.blocks, remove_block, &job);
    return FESCUE_OK;
}
