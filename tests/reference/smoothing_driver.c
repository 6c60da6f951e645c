/* SPDX-License-Identifier: MIT
 *
 * Smoothing in time for smoothing.py. Reads numbers of native doubles on standard input, writes such on standard
 * output.
 *
 *   series   in: count, variance, correlation, then count times, values, noises
 *            out: log likelihood; count means, variances, covariances with the step before; variance and correlation
 *            after one step of learning
 *   chain    in: steps, size, then `size` variances, `size` correlations, steps times, steps lines, steps packed
 *            precisions and steps right sides by line
 *            out: by line: means, packed covariances, covariances with the step before
 */
#include "numeric/numeric.h"

#include <stdio.h>
#include <stdlib.h>
#include <string.h>

static double *numbers_read(size_t count)
{
    double *at = calloc(count + 1, sizeof *at);
    if (at == NULL || fread(at, sizeof *at, count, stdin) != count)
        exit(1);
    return at;
}

static void numbers_write(const double *at, size_t count)
{
    if (fwrite(at, sizeof *at, count, stdout) != count)
        exit(1);
}

static void series_run(void)
{
    double *head = numbers_read(3);
    size_t n = (size_t)head[0];
    double *time = numbers_read(n), *value = numbers_read(n), *noise = numbers_read(n);
    double *mean = calloc(n, sizeof *mean), *variance = calloc(n, sizeof *mean), *cross = calloc(n, sizeof *mean);
    struct kalman_law law = {head[1], head[2]};
    struct kalman_series series = {n, time, value, noise};
    struct kalman_state state = {mean, variance, cross};
    struct kalman_tally *tally = calloc(1, sizeof *tally);
    double likelihood = kalman_smooth(&series, &law, &state);
    numbers_write(&likelihood, 1);
    numbers_write(mean, n);
    numbers_write(variance, n);
    numbers_write(cross, n);
    kalman_tally_series(tally, &series, &state);
    kalman_learn(tally, &law);
    numbers_write(&law.variance, 1);
    numbers_write(&law.correlation, 1);
    free(tally);
    free(head);
    free(time);
    free(value);
    free(noise);
    free(mean);
    free(variance);
    free(cross);
}

static void chain_run(void)
{
    double *head = numbers_read(2);
    size_t steps = (size_t)head[0], d = (size_t)head[1], packed = packed_size(d);
    double *variance = numbers_read(d), *correlation = numbers_read(d);
    double *time = numbers_read(steps), *place = numbers_read(steps);
    double *precision = numbers_read(steps * packed), *side = numbers_read(steps * d);
    struct kalman_law *law = calloc(d, sizeof *law);
    uint32_t *line = calloc(steps, sizeof *line);
    double *out = calloc(steps * (2 * d + packed), sizeof *out), *work = calloc(chain_work(d), sizeof *work);
    double *forward = calloc(steps * chain_room(d), sizeof *forward);
    double *backward = calloc(steps * chain_room(d), sizeof *backward);
    for (size_t k = 0; k < d; k++)
        law[k] = (struct kalman_law){variance[k], correlation[k]};
    for (size_t t = 0; t < steps; t++)
        line[t] = (uint32_t)place[t];
    struct chain chain = {.steps = steps, .size = d, .time = time, .law = law, .line = line, .precision = precision};
    chain.precision_stride = packed;
    chain.mean = side;
    chain.mean_stride = d;
    chain.cross = out + steps * (d + packed);
    chain.forward = forward;
    chain.backward = backward;
    chain_forward(&chain, work);
    chain_backward(&chain, work);
    double *eight = calloc(BATCH_LANES * chain_room(d), sizeof *eight);
    for (size_t t = 0; t < steps; t++) {
        if (t % BATCH_LANES == 0)
            chain_marginals(&chain, batch_kernel_choose(), t, eight, work);
        memcpy(out + line[t] * d, chain_mean(&chain, eight, t % BATCH_LANES), d * sizeof *out);
        memcpy(out + steps * d + line[t] * packed, chain_covariance(&chain, eight, t % BATCH_LANES),
               packed * sizeof *out);
    }
    free(eight);
    numbers_write(out, steps * (2 * d + packed));
    free(head);
    free(variance);
    free(correlation);
    free(time);
    free(place);
    free(precision);
    free(side);
    free(law);
    free(line);
    free(out);
    free(work);
    free(forward);
    free(backward);
}

int main(int count, char **words)
{
    if (count == 2 && strcmp(words[1], "series") == 0)
        series_run();
    else if (count == 2 && strcmp(words[1], "chain") == 0)
        chain_run();
    else
        return 1;
    return 0;
}
