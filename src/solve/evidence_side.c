/* SPDX-License-Identifier: MIT
 *
 * The posterior of every line of one side, given the second moments of the other side: step 1 of evidence.c. Lines are
 * independent of one another, so blocks of them run in parallel, and every sum over lines goes block by block.
 *
 * With the free part h = (factor, effect) of length p = r + 1, the gathered S, t, q of moments.c and the line's own
 * precision c:
 *
 *     L = diag(1 / prior variance) + c S[0..p, 0..p]          covariance  C = L^-1
 *     mean  h = C c (t[0..p] - S[p, 0..p])                    (regressor p of the other side is its effect)
 *     expected squared error  q - 2 (h't[0..p] + t[p]) + <E[hh'], S[0..p, 0..p]> + 2 h'S[p, 0..p] + S[p, p]
 *
 * A component whose prior variance is 0 is held at 0 by a precision far above any data.
 */
#include "solve/evidence_internal.h"

#include <assert.h>

/* Precision that stands for "switched off": in units where cells have size one, no sum of cells comes near it. */
#define PRECISION_OFF 1e30

/* The prior variance of the effects follows MacKay's fixed point, mean of the squared posterior means over the share of
   it that the data decide, which has the same solution as the mean of E a^2 and reaches it, above all at 0, in far
   fewer rounds. Below this share it is the latter. */
#define KNOWN_LEAST 0.01

struct line_scratch {
    double *second, *target;            /* gathered */
    double *factor, *covariance, *mean; /* of the free part */
};

size_t evidence_side_scratch(size_t rank)
{
    return packed_size(rank + 2) + 2 * packed_size(rank + 1) + 2 * (rank + 2);
}

static struct line_scratch scratch_carve(double *at, size_t rank)
{
    struct line_scratch s = {.second = at};
    s.factor = s.second + packed_size(rank + 2);
    s.covariance = s.factor + packed_size(rank + 1);
    s.target = s.covariance + packed_size(rank + 1);
    s.mean = s.target + rank + 2;
    return s;
}

/* Second moments of (factor, 1, effect) from mean and covariance of (factor, effect); covariance NULL: none. */
static void moments_write(double *moment, const double *mean, const double *covariance, size_t rank)
{
    for (size_t k = 0, at = 0; k < rank; k++)
        for (size_t l = 0; l <= k; l++, at++)
            moment[at] = mean[k] * mean[l] + (covariance != NULL ? covariance[at] : 0);
    double *one = moment + packed_size(rank), *effect = moment + packed_size(rank + 1);
    const double *effect_covariance = covariance != NULL ? covariance + packed_size(rank) : NULL;
    for (size_t k = 0; k < rank; k++) {
        one[k] = mean[k];
        effect[k] = mean[rank] * mean[k] + (covariance != NULL ? effect_covariance[k] : 0);
    }
    one[rank] = 1;
    effect[rank] = mean[rank];
    effect[rank + 1] = mean[rank] * mean[rank] + (covariance != NULL ? effect_covariance[rank] : 0);
}

void evidence_side_plant(struct evidence *evidence, struct evidence_side *side, size_t line, const double *mean)
{
    moments_write(side->moments.data + line * side->moments.stride, mean, NULL, evidence->rank);
}

/* <mean mean' + covariance, S> over the free part, S packed. */
static double inner_second(const struct line_scratch *s, size_t free)
{
    double sum = 0;
    for (size_t k = 0, at = 0; k < free; k++)
        for (size_t l = 0; l <= k; l++, at++)
            sum += (k == l ? 1 : 2) * (s->mean[k] * s->mean[l] + s->covariance[at]) * s->second[at];
    return sum;
}

static double line_solve(const struct evidence *evidence, const struct evidence_side *side, size_t line, double square,
                         const struct line_scratch *s)
{
    size_t free = evidence->rank + 1;
    double precision = side->line_precision[line] / evidence->noise;
    const double *cross = s->second + packed_size(free);
    for (size_t k = 0; k < packed_size(free); k++)
        s->factor[k] = precision * s->second[k];
    for (size_t k = 0; k < free; k++) {
        double variance = side->variance[k];
        s->factor[packed_size(k) + k] += variance > 0 ? 1 / variance : PRECISION_OFF;
        s->mean[k] = precision * (s->target[k] - cross[k]);
    }
    packed_cholesky(s->factor, free);
    packed_solve(s->factor, free, s->mean);
    packed_inverse(s->factor, free, s->covariance);
    double error = square - 2 * s->target[free] + cross[free] + inner_second(s, free);
    for (size_t k = 0; k < free; k++)
        error += 2 * s->mean[k] * (cross[k] - s->target[k]);
    return error > 0 ? error : 0;
}

struct update_job {
    struct evidence *evidence;
    struct evidence_side *side;
    const struct evidence_side *other;
};

static void update_block(void *opaque, size_t block, size_t worker)
{
    struct update_job *job = opaque;
    struct evidence *evidence = job->evidence;
    struct evidence_side *side = job->side;
    size_t rank = evidence->rank;
    struct line_scratch s = scratch_carve(evidence->scratch + worker * evidence->scratch_size, rank);
    for (size_t line = side->half->block[block]; line < side->half->block[block + 1]; line++) {
        struct moments_sum sum = {s.second, s.target, 0};
        moments_gather(&job->other->moments, side->half, evidence->problem->target.precision, line, &sum);
        side->line_error[line] = line_solve(evidence, side, line, sum.square, &s);
        moments_write(side->moments.data + line * side->moments.stride, s.mean, s.covariance, rank);
        for (size_t k = 0; k < rank; k++)
            MATRIX_AT(side->mean, line, k) = s.mean[k];
        MATRIX_AT(side->mean, line, side->effect_at) = s.mean[rank];
        MATRIX_AT(side->mean, line, side->one_at) = 1;
    }
}

void evidence_side_update(struct evidence *evidence, struct evidence_side *side, const struct evidence_side *other)
{
    struct update_job job = {evidence, side, other};
    team_run(evidence->context, side->half->blocks, update_block, &job);
}

static void prior_block(void *opaque, size_t block, size_t worker)
{
    (void)worker;
    struct update_job *job = opaque;
    struct evidence_side *side = job->side;
    size_t rank = job->evidence->rank;
    double *sum = side->partial + block * (rank + 3);
    for (size_t k = 0; k < rank + 3; k++)
        sum[k] = 0;
    for (size_t line = side->half->block[block]; line < side->half->block[block + 1]; line++) {
        if (side->half->start[line] == side->half->start[line + 1])
            continue; /* nothing seen: its posterior is the prior and tells nothing about it */
        const double *moment = side->moments.data + line * side->moments.stride;
        for (size_t k = 0; k < rank; k++)
            sum[k] += moment[packed_size(k) + k];
        sum[rank] += moment[packed_size(rank + 1) + rank + 1];
        double effect = moment[packed_size(rank + 1) + rank];
        sum[rank + 1] += effect * effect;
        sum[rank + 2] += 1;
    }
}

void evidence_side_prior(struct evidence *evidence, struct evidence_side *side)
{
    struct update_job job = {evidence, side, NULL};
    size_t rank = evidence->rank;
    double *sum = evidence->scratch;
    team_run(evidence->context, side->half->blocks, prior_block, &job);
    team_sum(evidence->context, side->partial, side->half->blocks, rank + 3, sum);
    double lines = sum[rank + 2];
    assert(lines > 0);
    for (size_t k = 0; k < rank; k++)
        if (side->variance[k] > 0)
            side->variance[k] = sum[k] / lines;
    double *effect = side->variance + rank;
    if (*effect > 0) {
        double known = 1 - (sum[rank] - sum[rank + 1]) / (lines * *effect);
        *effect = known > KNOWN_LEAST ? sum[rank + 1] / lines / known : sum[rank] / lines;
    }
}
