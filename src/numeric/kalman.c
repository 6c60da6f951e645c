/* SPDX-License-Identifier: MIT
 *
 * A scalar process in time, seen with noise: stationary, of variance v, its correlation falling by rho a step,
 *
 *     x_0 ~ N(0, v)     x_k = f_k x_(k-1) + N(0, v (1 - f_k^2))     f_k = rho^(t_k - t_(k-1))
 *     y_k = x_k + N(0, R_k)
 *
 * Steps may be irregular; R_k infinite stands for a step that was not seen. Filter (Kalman 1960) forward, m, V:
 *
 *     P = f^2 V + v (1 - f^2)     m <- f m + P/(P+R) (y - f m)     V <- P R/(P+R)
 *     log p(y) = -1/2 sum log 2 pi (P+R) + (y - f m)^2/(P+R)
 *
 * smoother (Rauch, Tung, Striebel 1965) backward, with G_k = V_k f_(k+1) / P_(k+1):
 *
 *     m_k += G_k (m_(k+1) - f_(k+1) m_k)     V_k += G_k^2 (V_(k+1) - P_(k+1))     Cov(x_(k+1), x_k) = G_k V_(k+1)
 *
 * Learning v and rho: the expectation step's sums are tallied by length of step, in classes an eighth of an octave wide
 * (steps 1 to 8 have classes of their own), because that is all that the maximisation needs. With A, B, C the sums of
 * E x_k^2, E x_k x_(k-1), E x_(k-1)^2 over a class of n_c steps of mean length d_c, F = E x_0^2, it minimises
 *
 *     n log v(rho) + sum_c n_c log(1 - f_c^2),     n v(rho) = F + sum_c (A - 2 f_c B + f_c^2 C)/(1 - f_c^2)
 *
 * over rho by golden section on log(-log rho). (Shumway, Stoffer 1982, "An approach to time series smoothing and
 * forecasting using the EM algorithm".) Tallies add up, so that series can share what they know.
 *
 * Cost: O(count), one power a step whose length differs from the one before.
 */
#include "numeric/numeric.h"

#include <math.h>
#include <string.h>

/* Two lines at the same time are told apart by this much of a step: else a step would have no innovation at all. */
static const double step_least = 1.0 / 64;
/* Correlations that are searched, as log(-log rho): 0.9999 to e^-5. Beyond the first, differences of precisions lose
   more than four digits; below the second, nothing tells it from 0. */
static const double search_low = -9.21, search_high = 1.609;
/* Golden sections: the last interval is 1e-4 of the first. */
enum { SECTIONS = 20 };
static const double golden = 0.6180339887498949;

double kalman_step(double from, double to)
{
    return fmax(to - from, step_least);
}

/* rho^step, remembered while steps are equal. */
struct decay {
    double rho, step, factor;
};

static double decay_of(struct decay *decay, double step)
{
    if (step != decay->step) {
        decay->step = step;
        decay->factor = pow(decay->rho, step);
    }
    return decay->factor;
}

static double filter(const struct kalman_series *series, const struct kalman_law *law, const struct kalman_state *state)
{
    struct decay decay = {law->correlation, 1, law->correlation};
    double mean = 0, variance = law->variance, sum = 0;
    static const double log_two_pi = 1.8378770664093453;
    for (size_t k = 0; k < series->count; k++) {
        double f = k > 0 ? decay_of(&decay, kalman_step(series->time[k - 1], series->time[k])) : 0;
        double expected = f * mean, spread = f * f * variance + law->variance * (1 - f * f), noise = series->noise[k];
        mean = expected;
        variance = spread;
        if (isfinite(noise)) {
            double total = spread + noise, surprise = series->value[k] - expected;
            mean += spread / total * surprise;
            variance = spread * noise / total;
            sum += log_two_pi + log(total) + surprise * surprise / total;
        }
        state->mean[k] = mean;
        state->variance[k] = variance;
    }
    return -sum / 2;
}

double kalman_smooth(const struct kalman_series *series, const struct kalman_law *law, const struct kalman_state *state)
{
    struct decay decay = {law->correlation, 1, law->correlation};
    double likelihood = filter(series, law, state);
    if (series->count > 0)
        state->cross[0] = 0;
    for (size_t k = series->count; k-- > 1;) {
        double f = decay_of(&decay, kalman_step(series->time[k - 1], series->time[k]));
        double *mean = state->mean + k - 1, *variance = state->variance + k - 1;
        double spread = f * f * *variance + law->variance * (1 - f * f);
        double gain = spread > 0 ? *variance * f / spread : 0;
        state->cross[k] = gain * variance[1];
        *mean += gain * (mean[1] - f * *mean);
        *variance += gain * gain * (variance[1] - spread);
    }
    return likelihood;
}

double kalman_between(const struct kalman_law *law, const double step[2], const double mean[2])
{
    double before = pow(law->correlation, step[0]), after = pow(law->correlation, step[1]), both = before * after;
    double rest = 1 - both * both;
    if (!(rest > 0))
        return (mean[0] * step[1] + mean[1] * step[0]) / (step[0] + step[1]);
    return (before * (1 - after * after) * mean[0] + after * (1 - before * before) * mean[1]) / rest;
}

/* ---- learning the law ------------------------------------------------------------------------------------------ */

/* Classes an eighth of an octave wide, from a sixteenth of a step up to 2^12 steps. */
static size_t class_of(double step)
{
    double place = round(8 * log2(step)) + 32;
    return place < 0 ? 0 : place < KALMAN_CLASSES ? (size_t)place : KALMAN_CLASSES - 1;
}

void kalman_tally_step(struct kalman_tally *tally, double step, double now, double both, double before)
{
    size_t c = step == 1 ? 32 : class_of(step);
    tally->count[c] += 1;
    tally->length[c] += step;
    tally->now[c] += now;
    tally->both[c] += both;
    tally->before[c] += before;
}

void kalman_tally_series(struct kalman_tally *tally, const struct kalman_series *series,
                         const struct kalman_state *state)
{
    const double *mean = state->mean, *variance = state->variance;
    for (size_t k = 0; k < series->count; k++) {
        double now = mean[k] * mean[k] + variance[k];
        if (k == 0) {
            tally->series += 1;
            tally->first += now;
            continue;
        }
        kalman_tally_step(tally, kalman_step(series->time[k - 1], series->time[k]), now,
                          mean[k] * mean[k - 1] + state->cross[k], mean[k - 1] * mean[k - 1] + variance[k - 1]);
    }
}

void kalman_tally_add(struct kalman_tally *tally, double share, const struct kalman_tally *more)
{
    double *to = (double *)tally;
    const double *from = (const double *)more;
    for (size_t k = 0; k < sizeof *tally / sizeof *to; k++)
        to[k] += share * from[k];
}

/* n log v + sum n_c log(1 - f_c^2) at log(-log rho), and that v. */
static double law_cost(const struct kalman_tally *tally, double place, double *variance)
{
    double rate = -exp(place), sum = tally->first, number = tally->series, logs = 0;
    for (size_t c = 0; c < KALMAN_CLASSES; c++) {
        if (!(tally->count[c] > 0))
            continue;
        double f = exp(rate * tally->length[c] / tally->count[c]), rest = 1 - f * f;
        sum += (tally->now[c] - 2 * f * tally->both[c] + f * f * tally->before[c]) / rest;
        logs += tally->count[c] * log(rest);
        number += tally->count[c];
    }
    *variance = sum / number;
    return number * log(*variance) + logs;
}

void kalman_learn(const struct kalman_tally *tally, struct kalman_law *law)
{
    double low = search_low, high = search_high, variance;
    double left = high - golden * (high - low), right = low + golden * (high - low);
    double left_cost = law_cost(tally, left, &variance), right_cost = law_cost(tally, right, &variance);
    if (!(variance > 0))
        return; /* nothing there to learn from */
    for (int k = 0; k < SECTIONS; k++) {
        if (left_cost <= right_cost) {
            high = right;
            right = left;
            right_cost = left_cost;
            left = high - golden * (high - low);
            left_cost = law_cost(tally, left, &variance);
        } else {
            low = left;
            left = right;
            left_cost = right_cost;
            right = low + golden * (high - low);
            right_cost = law_cost(tally, right, &variance);
        }
    }
    double place = (low + high) / 2;
    law_cost(tally, place, &law->variance);
    law->correlation = exp(-exp(place));
}
