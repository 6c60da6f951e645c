/* SPDX-License-Identifier: MIT
 *
 * Whether seasons are there. The mean over the series seen at each step, every series taken from its own mean and in
 * units of its own spread, is a series of its own, y_t; its periodogram at frequency f is
 *
 *     P(f) = |sum over t of w_t (y_t - ybar) exp(2 pi i f t)|^2 / sum of w_t        w_t: series seen at t
 *
 * A candidate period stands out when its P is many times what lies around it: the mean of P over NEIGHBOURS frequencies
 * each side, spaced by one cycle over the whole span and beginning two such away. In noise of any smooth spectrum P
 * over its mean is near exponential (Priestley 1981, "Spectral analysis and time series", section 6.1), so that a ratio
 * R arises by chance with probability exp(-R); with the mean of 2 x NEIGHBOURS others in place of the true one, the F
 * distribution has (1 + R/n)^-n, n = 2 x NEIGHBOURS. LEVEL is shared among the candidates (Bonferroni).
 *
 * A candidate that is not seen for two whole cycles, or has fewer than two and a half steps, is none. Cost: O(cells)
 * and O(steps x candidates).
 */
#include "model/model.h"

#include <math.h>
#include <string.h>

enum { NEIGHBOURS = 8 };
#define LEVEL 1e-3
#define CYCLES_LEAST 2.0
#define CYCLE_LEAST 2.5

struct mean_series {
    const struct time_axis *axis;
    double *value, *weight; /* of each step */
    double total, span;
};

/* Mean and spread of a series; 0 spread where it has none. */
static void series_scale(const struct cells *cells, const struct half *half, size_t line, double *mean, double *spread)
{
    double count = (double)(half->start[line + 1] - half->start[line]), square = 0;
    *mean = 0;
    for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++)
        *mean += cells_value(cells, half, k) / count;
    for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++) {
        double rest = cells_value(cells, half, k) - *mean;
        square += rest * rest / count;
    }
    *spread = count > 1 ? sqrt(square) : 0;
}

static void mean_series_fill(const struct cells *cells, struct mean_series *series)
{
    const struct half *half = series->axis->along == TIME_ROWS ? &cells->by_column : &cells->by_row;
    double all = 0;
    for (size_t line = 0; line < half->lines; line++) {
        double mean, spread;
        series_scale(cells, half, line, &mean, &spread);
        for (uint64_t k = half->start[line]; spread > 0 && k < half->start[line + 1]; k++) {
            series->value[half->across[k]] += (cells_value(cells, half, k) - mean) / spread;
            series->weight[half->across[k]] += 1;
        }
    }
    for (uint32_t i = 0; i < series->axis->count; i++) {
        series->total += series->weight[i];
        all += series->value[i];
        series->span = fmax(series->span, series->axis->at[i]);
    }
    for (uint32_t i = 0; i < series->axis->count && series->total > 0; i++)
        series->value[i] -= series->weight[i] * all / series->total; /* w_t (y_t - ybar) */
}

static double power_at(const struct mean_series *series, double frequency)
{
    double real = 0, imaginary = 0;
    for (uint32_t i = 0; i < series->axis->count; i++) {
        double turns = frequency * series->axis->at[i], angle = 2 * M_PI * (turns - floor(turns));
        real += series->value[i] * cos(angle);
        imaginary += series->value[i] * sin(angle);
    }
    return (real * real + imaginary * imaginary) / series->total;
}

static bool stands_out(const struct mean_series *series, double period, size_t candidates)
{
    double frequency = 1 / period, cycle = 1 / series->span, sum = 0;
    int count = 0;
    if (!(period >= CYCLE_LEAST && series->span >= CYCLES_LEAST * period))
        return false;
    for (int side = -1; side <= 1; side += 2)
        for (int k = 0; k < NEIGHBOURS; k++) {
            double other = frequency + side * (k + 2) * cycle;
            if (other < 0.75 * cycle || other > 0.5)
                continue;
            sum += power_at(series, other);
            count++;
        }
    if (count < NEIGHBOURS / 2 || !(sum > 0))
        return false;
    double ratio = power_at(series, frequency) / (sum / count);
    return -count * log1p(ratio / count) < log(LEVEL / (double)candidates);
}

fescue_status season_find(fescue_context *context, const struct cells *cells, const struct time_axis *axis,
                          double *period, size_t candidates, size_t *found)
{
    struct mean_series series = {.axis = axis};
    fescue_status status;
    *found = 0;
    TRY(TAKE(context, axis->count, &series.value));
    TRY(TAKE(context, axis->count, &series.weight));
    mean_series_fill(cells, &series);
    for (size_t k = 0; k < candidates && series.total > 0; k++)
        if (stands_out(&series, period[k], candidates))
            period[(*found)++] = period[k];
done:
    GIVE(context, &series.value);
    GIVE(context, &series.weight);
    return status;
}
