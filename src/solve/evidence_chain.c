/* SPDX-License-Identifier: MIT
 *
 * Factors and effects of the steps, AR(1) in time: every component k of (u_t, a_t) is stationary of variance su_k, its
 * correlation falling by rho_k a step. The posterior of all steps together, given the series, is that of chain.c, with
 * the gathered c S of a step as its data and c (t - S[p, .]) as right side (evidence_side.c); a step in which nothing
 * was seen has no data and follows its neighbours. Its error is
 *
 *     q - 2 (h't[0..p] + t[p]) + <E[hh'], S[0..p, 0..p]> + 2 h'S[p, 0..p] + S[p, p]
 *
 * with t, S[p, .] and q kept from the gather and c S still in its place.
 *
 * su_k and rho_k maximise the expected log density of all steps (kalman_learn). The change of basis stops when the
 * chain begins: rho_k belongs to its component.
 *
 * Cost: three small factorisations a step. The gather, the marginals and the components are parallel, and the two
 * messages run beside one another.
 */
#include "solve/evidence_internal.h"

#include <math.h>
#include <string.h>

/* t (p + 1 numbers), S[p, 0..p] (p + 1) and q of a line. */
size_t evidence_chain_store(size_t rank)
{
    return 2 * (rank + 2) + 1;
}

size_t evidence_chain_scratch(size_t rank)
{
    size_t gather = moments_batch_size(rank + 2) + batch_size(packed_size(rank + 1)) + moments_stride(rank + 2);
    size_t marginal = BATCH_LANES * chain_room(rank + 1) + chain_work(rank + 1);
    return gather > marginal ? gather : marginal;
}

struct chain_job {
    struct evidence *evidence;
    struct evidence_time *time;
};

/* Of eight lines: c S in the place of their moments, c (t - S[p, .]) in that of their means, and the store. */
static void gather_batch(void *opaque, size_t batch, size_t worker)
{
    struct chain_job *job = opaque;
    struct evidence *evidence = job->evidence;
    struct evidence_side *side = job->time->steps;
    size_t rank = evidence->rank, free = rank + 1, first = batch * BATCH_LANES, left = side->half->lines - first;
    size_t count = left < BATCH_LANES ? left : BATCH_LANES;
    double *at = evidence->scratch + worker * evidence->scratch_size, *to[BATCH_LANES], precision[BATCH_LANES];
    struct moments_batch sum = moments_batch_carve(at, rank + 2);
    double *data = at + moments_batch_size(rank + 2), *beyond = data + batch_size(packed_size(free));
    const double *cross = sum.second + packed_size(free) * BATCH_LANES;
    moments_gather(&job->time->series->moments, side->half, evidence->problem->target.precision, first, &sum);
    for (size_t lane = 0; lane < BATCH_LANES; lane++) {
        precision[lane] = lane < count ? side->line_precision[first + lane] / evidence->noise : 0;
        to[lane] = lane < count ? side->moments.data + (first + lane) * side->moments.stride : beyond;
    }
    for (size_t k = 0; k < packed_size(free); k++)
        for (size_t lane = 0; lane < BATCH_LANES; lane++)
            data[k * BATCH_LANES + lane] = precision[lane] * sum.second[k * BATCH_LANES + lane];
    packed_batch_unpack(side->moments.kernel, data, packed_size(free), to);
    for (size_t lane = 0; lane < count; lane++) {
        double *store = job->time->store + (first + lane) * evidence_chain_store(rank);
        for (size_t k = 0; k <= free; k++) {
            store[k] = sum.target[k * BATCH_LANES + lane];
            store[free + 1 + k] = cross[k * BATCH_LANES + lane];
        }
        store[2 * (free + 1)] = sum.square[lane];
        for (size_t k = 0; k < free; k++)
            MATRIX_AT(side->mean, first + lane, k) = precision[lane] * (store[k] - store[free + 1 + k]);
    }
}

static void message_task(void *opaque, size_t block, size_t worker)
{
    struct chain_job *job = opaque;
    double *work = job->evidence->scratch + worker * job->evidence->scratch_size;
    (block == 0 ? chain_forward : chain_backward)(&job->time->chain, work);
}

static double line_error(const struct evidence *evidence, const struct evidence_side *side, size_t line,
                         const double *mean, const double *covariance)
{
    size_t free = evidence->rank + 1;
    const double *target = evidence->time->store + line * evidence_chain_store(evidence->rank);
    const double *cross = target + free + 1, *data = side->moments.data + line * side->moments.stride;
    double error = 0;
    for (size_t k = 0, at = 0; k < free; k++)
        for (size_t l = 0; l <= k; l++, at++)
            error += (k == l ? 1 : 2) * (mean[k] * mean[l] + covariance[at]) * data[at];
    error *= evidence->noise / side->line_precision[line];
    error += target[2 * (free + 1)] - 2 * target[free] + cross[free];
    for (size_t k = 0; k < free; k++)
        error += 2 * mean[k] * (cross[k] - target[k]);
    return error > 0 ? error : 0;
}

static void marginal_batch(void *opaque, size_t batch, size_t worker)
{
    struct chain_job *job = opaque;
    struct evidence *evidence = job->evidence;
    struct evidence_side *side = job->time->steps;
    const struct chain *chain = &job->time->chain;
    size_t rank = evidence->rank, first = batch * BATCH_LANES;
    double *out = evidence->scratch + worker * evidence->scratch_size, *work = out + BATCH_LANES * chain_room(rank + 1);
    chain_marginals(chain, side->moments.kernel, first, out, work);
    for (size_t lane = 0; lane < BATCH_LANES && first + lane < chain->steps; lane++) {
        size_t line = job->time->axis->order[first + lane];
        const double *mean = chain_mean(chain, out, lane), *covariance = chain_covariance(chain, out, lane);
        side->line_error[line] = line_error(evidence, side, line, mean, covariance);
        evidence_moments_write(side->moments.data + line * side->moments.stride, mean, covariance, rank);
        for (size_t k = 0; k < rank; k++)
            MATRIX_AT(side->mean, line, k) = mean[k];
        MATRIX_AT(side->mean, line, side->effect_at) = mean[rank];
        MATRIX_AT(side->mean, line, side->one_at) = 1;
    }
}

void evidence_chain_update(struct evidence *evidence)
{
    struct evidence_side *side = evidence->time->steps;
    struct chain_job job = {evidence, evidence->time};
    size_t batches = (side->half->lines + BATCH_LANES - 1) / BATCH_LANES;
    team_run(evidence->context, batches, gather_batch, &job);
    team_run(evidence->context, 2, message_task, &job);
    team_run(evidence->context, batches, marginal_batch, &job);
}

/* One component, over all steps. Component `rank` is the effect. */
static void prior_component(void *opaque, size_t k, size_t worker)
{
    (void)worker;
    struct chain_job *job = opaque;
    const struct evidence_time *time = job->time;
    const struct evidence_side *side = time->steps;
    size_t rank = job->evidence->rank, d = rank + 1, row = k < rank ? k : rank + 1;
    size_t square = packed_size(row) + row, first = row < rank ? packed_size(rank) + row : packed_size(row) + rank;
    struct kalman_tally tally = {0};
    double before = 0, before_mean = 0, forgot = 1 - time->steps_law[k].correlation;
    time->law_moved[k] = 0;
    if (!(time->steps_law[k].variance > 0))
        return;
    for (size_t t = 0; t < time->chain.steps; t++) {
        size_t line = time->axis->order[t];
        const double *moment = side->moments.data + line * side->moments.stride;
        double now = moment[square], mean = moment[first];
        if (t == 0) {
            tally.series = 1;
            tally.first = now;
        } else {
            kalman_tally_step(&tally, kalman_step(time->clock[t - 1], time->clock[t]), now,
                              mean * before_mean + time->chain.cross[line * d + k], before);
        }
        before = now;
        before_mean = mean;
    }
    kalman_learn(&tally, &time->steps_law[k]);
    side->variance[k] = time->steps_law[k].variance;
    time->law_moved[k] = fabs(1 - time->steps_law[k].correlation - forgot) / forgot;
}

void evidence_chain_prior(struct evidence *evidence)
{
    struct chain_job job = {evidence, evidence->time};
    team_run(evidence->context, evidence->rank + 1, prior_component, &job);
}
