/* SPDX-License-Identifier: MIT
 *
 * The posterior of every line of one side, given the second moments of the other side: step 1 of evidence.c. Lines are
 * independent of one another: eight go side by side, batches of eight run in parallel, and every sum over lines goes
 * block by block.
 *
 * With the free part h = (factor, effect) of length p = r + 1, the gathered S, t, q of moments.c and the line's own
 * precision c:
 *
 *     L = diag(1 / prior variance) + c S[0..p, 0..p]          covariance  C = L^-1
 *     mean  h = C c (t[0..p] - S[p, 0..p])                    (regressor p of the other side is its effect)
 *     expected squared error  q - 2 (h't[0..p] + t[p]) + <E[hh'], S[0..p, 0..p]> + 2 h'S[p, 0..p] + S[p, p]
 *
 * Lines may have priors of their own instead (own, pull): diag(own) in L, and pull added to the right side.
 *
 * A component whose prior variance is 0 is held at 0 by a precision far above any data.
 */
#include "solve/evidence_internal.h"

#include <assert.h>
#include <math.h>
#include <string.h>

/* The prior variance of the effects follows MacKay's fixed point, mean of the squared posterior means over the share of
   it that the data decide, which has the same solution as the mean of E a^2 and reaches it, above all at 0, in far
   fewer rounds. Below this share it is the latter. */
#define KNOWN_LEAST 0.01

/* Eight lines side by side, each number BATCH_LANES times. */
struct lines_scratch {
    struct moments_batch gathered;
    double *factor, *covariance, *mean; /* of the free part */
    double *moment;                     /* of the regressors */
    double *beyond;                     /* where the moments of lanes without a line go */
};

size_t evidence_side_scratch(size_t rank)
{
    return moments_batch_size(rank + 2) + 2 * batch_size(packed_size(rank + 1)) + batch_size(rank + 1) +
           batch_size(packed_size(rank + 2)) + moments_stride(rank + 2);
}

static struct lines_scratch scratch_carve(double *at, size_t rank)
{
    struct lines_scratch s = {.gathered = moments_batch_carve(at, rank + 2)};
    s.factor = at + moments_batch_size(rank + 2);
    s.covariance = s.factor + batch_size(packed_size(rank + 1));
    s.mean = s.covariance + batch_size(packed_size(rank + 1));
    s.moment = s.mean + batch_size(rank + 1);
    s.beyond = s.moment + batch_size(packed_size(rank + 2));
    return s;
}

void evidence_moments_write(double *moment, const double *mean, const double *covariance, size_t rank)
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
    evidence_moments_write(side->moments.data + line * side->moments.stride, mean, NULL, evidence->rank);
}

#define EACH_LANE for (size_t lane = 0; lane < BATCH_LANES; lane++)

/* Prior precision of component k of a line. */
static double own_of(const struct evidence_side *side, size_t free, size_t line, size_t k)
{
    if (side->own != NULL)
        return side->own[line * free + k];
    return side->variance[k] > 0 ? 1 / side->variance[k] : EVIDENCE_PRECISION_OFF;
}

/* Where lines have priors of their own; lanes without a line have any. */
static void own_add(const struct evidence_side *side, size_t free, size_t first, const struct lines_scratch *s)
{
    EACH_LANE
    {
        size_t line = first + lane < side->half->lines ? first + lane : first;
        for (size_t k = 0; k < free; k++) {
            s->factor[(packed_size(k) + k) * BATCH_LANES + lane] += side->own[line * free + k];
            s->mean[k * BATCH_LANES + lane] += side->pull[line * free + k];
        }
    }
}

/* L into factor and c (t[0..p] - S[p, 0..p]) into mean, but for priors of the lines' own. */
NUMERIC_VERSIONS
static void systems_write(const struct evidence_side *side, size_t free, const double *restrict precision,
                          const struct lines_scratch *s)
{
    const double *restrict second = s->gathered.second, *restrict target = s->gathered.target;
    const double *restrict cross = second + packed_size(free) * BATCH_LANES;
    double *restrict factor = s->factor, *restrict mean = s->mean;
    for (size_t at = 0; at < packed_size(free) * BATCH_LANES; at += BATCH_LANES)
        EACH_LANE factor[at + lane] = precision[lane] * second[at + lane];
    for (size_t k = 0; k < free; k++) {
        double own = side->own != NULL ? 0 : own_of(side, free, 0, k);
        EACH_LANE factor[(packed_size(k) + k) * BATCH_LANES + lane] += own;
        EACH_LANE mean[k * BATCH_LANES + lane] =
            precision[lane] * (target[k * BATCH_LANES + lane] - cross[k * BATCH_LANES + lane]);
    }
}

/* One lane whose pivots broke down, again and with a lift. */
static void lane_solve(const struct evidence_side *side, size_t free, double precision, size_t line,
                       const struct lines_scratch *s)
{
    size_t lane = line % BATCH_LANES;
    double *factor = s->beyond, *inverse = s->gathered.work, *mean = inverse + packed_size(free);
    const double *cross = s->gathered.second + packed_size(free) * BATCH_LANES;
    for (size_t at = 0; at < packed_size(free); at++)
        factor[at] = precision * s->gathered.second[at * BATCH_LANES + lane];
    for (size_t k = 0; k < free; k++) {
        factor[packed_size(k) + k] += own_of(side, free, line, k);
        mean[k] = precision * (s->gathered.target[k * BATCH_LANES + lane] - cross[k * BATCH_LANES + lane]);
        mean[k] += side->pull != NULL ? side->pull[line * free + k] : 0;
    }
    packed_cholesky(factor, free);
    packed_solve(factor, free, mean);
    packed_inverse(factor, free, inverse);
    for (size_t k = 0; k < free; k++)
        s->mean[k * BATCH_LANES + lane] = mean[k];
    for (size_t at = 0; at < packed_size(free); at++)
        s->covariance[at * BATCH_LANES + lane] = inverse[at];
}

/* Second moments of (factor, 1, effect) from mean and covariance of (factor, effect), and <E[hh'], S> over the free
   part. */
NUMERIC_VERSIONS
static void moments_write(size_t rank, const struct lines_scratch *s, double *restrict inner)
{
    const double *restrict mean = s->mean, *restrict covariance = s->covariance, *restrict second = s->gathered.second;
    double *restrict moment = s->moment;
    EACH_LANE inner[lane] = 0;
    for (size_t k = 0, at = 0; k <= rank; k++) {
        double *row = moment + packed_size(k < rank ? k : rank + 1) * BATCH_LANES;
        const double *mine = mean + k * BATCH_LANES;
        for (size_t l = 0; l <= k; l++, at += BATCH_LANES) {
            double *to = row + (k == rank && l == rank ? rank + 1 : l) * BATCH_LANES, times = l == k ? 1 : 2;
            EACH_LANE
            {
                double entry = mine[lane] * mean[l * BATCH_LANES + lane] + covariance[at + lane];
                to[lane] = entry;
                inner[lane] += times * entry * second[at + lane];
            }
        }
    }
    double *one = moment + packed_size(rank) * BATCH_LANES;
    double *effect = moment + (packed_size(rank + 1) + rank) * BATCH_LANES;
    memcpy(one, mean, rank * BATCH_LANES * sizeof *one);
    EACH_LANE one[rank * BATCH_LANES + lane] = 1;
    EACH_LANE effect[lane] = mean[rank * BATCH_LANES + lane];
}

/* Posteriors of a batch of lines into mean and moment; error[lane] is the expected squared error, rest[lane] what the
   means leave of the lines' sums. */
static void lines_solve(const struct evidence_side *side, size_t rank, size_t first, const double *precision,
                        const struct lines_scratch *s, double *error, double *rest)
{
    size_t free = rank + 1;
    const double *sum = s->gathered.second + packed_size(rank) * BATCH_LANES;
    const double *cross = s->gathered.second + packed_size(free) * BATCH_LANES, *target = s->gathered.target;
    double inner[BATCH_LANES];
    systems_write(side, free, precision, s);
    if (side->own != NULL)
        own_add(side, free, first, s);
    unsigned broken = packed_batch_solve(side->moments.kernel, s->factor, free, s->mean, s->covariance);
    for (size_t lane = 0; broken >> lane != 0; lane++)
        if (broken >> lane & 1)
            lane_solve(side, free, precision[lane], first + lane, s);
    moments_write(rank, s, inner);
    EACH_LANE error[lane] = s->gathered.square[lane] - 2 * target[free * BATCH_LANES + lane] +
                            cross[free * BATCH_LANES + lane] + inner[lane];
    for (size_t at = 0; at < free * BATCH_LANES; at += BATCH_LANES)
        EACH_LANE error[lane] += 2 * s->mean[at + lane] * (cross[at + lane] - target[at + lane]);
    EACH_LANE error[lane] = error[lane] > 0 ? error[lane] : 0;
    EACH_LANE rest[lane] = target[rank * BATCH_LANES + lane] - cross[rank * BATCH_LANES + lane];
    for (size_t at = 0; at < free * BATCH_LANES; at += BATCH_LANES)
        EACH_LANE rest[lane] -= s->mean[at + lane] * sum[at + lane];
}

struct update_job {
    struct evidence *evidence;
    struct evidence_side *side;
    const struct evidence_side *other;
};

/* Batches are cut by lines alone, so that eight columns go together also where each is a block of work of its own. */
static void update_batch(void *opaque, size_t batch, size_t worker)
{
    struct update_job *job = opaque;
    struct evidence *evidence = job->evidence;
    struct evidence_side *side = job->side;
    size_t rank = evidence->rank, first = batch * BATCH_LANES, left = side->half->lines - first;
    size_t count = left < BATCH_LANES ? left : BATCH_LANES;
    struct lines_scratch s = scratch_carve(evidence->scratch + worker * evidence->scratch_size, rank);
    double precision[BATCH_LANES], error[BATCH_LANES], rest[BATCH_LANES], *to[BATCH_LANES];
    EACH_LANE precision[lane] = lane < count ? side->line_precision[first + lane] / evidence->noise : 0;
    EACH_LANE to[lane] = lane < count ? side->moments.data + (first + lane) * side->moments.stride : s.beyond;
    moments_gather(&job->other->moments, side->half, evidence->problem->target.precision, first, &s.gathered);
    lines_solve(side, rank, first, precision, &s, error, rest);
    packed_batch_unpack(side->moments.kernel, s.moment, packed_size(rank + 2), to);
    for (size_t lane = 0; lane < count; lane++) {
        size_t line = first + lane;
        side->line_error[line] = error[lane];
        side->line_rest[line] = rest[lane];
        for (size_t k = 0; k < rank; k++)
            MATRIX_AT(side->mean, line, k) = s.mean[k * BATCH_LANES + lane];
        MATRIX_AT(side->mean, line, side->effect_at) = s.mean[rank * BATCH_LANES + lane];
        MATRIX_AT(side->mean, line, side->one_at) = 1;
    }
}

void evidence_side_update(struct evidence *evidence, struct evidence_side *side, const struct evidence_side *other)
{
    struct update_job job = {evidence, side, other};
    team_run(evidence->context, (side->half->lines + BATCH_LANES - 1) / BATCH_LANES, update_batch, &job);
}

/* Halves are rounded by 2^-21. Above this noise, in units in which cells have size one, what that adds to the expected
   squared error of a line is far below what its cells tell of it. */
#define HALVES_NOISE 1e-2

static void halve_block(void *opaque, size_t block, size_t worker)
{
    const struct update_job *job = opaque;
    const struct evidence *evidence = job->evidence;
    const struct evidence_side *side = job->side;
    size_t words = moments_words(side->moments.regressors);
    double *room = evidence->scratch + worker * evidence->scratch_size;
    for (size_t line = side->half->block[block]; line < side->half->block[block + 1]; line++)
        moments_halve(&side->moments, side->moments.data + line * side->moments.stride, room,
                      evidence->halves + line * words);
}

void evidence_side_offer(struct evidence *evidence, struct evidence_side *side, const struct evidence_side *other)
{
    struct update_job job = {evidence, side, NULL};
    bool serves = evidence->halves != NULL && evidence->noise >= HALVES_NOISE;
    side->moments.halves = serves ? evidence->halves : NULL;
    if (serves)
        team_run(evidence->context, side->half->blocks, halve_block, &job);
    moments_total(evidence->context, &side->moments, other->half, evidence->total);
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
            side->variance[k] = fmax(sum[k] / lines, EVIDENCE_VARIANCE_LEAST);
    double *effect = side->variance + rank;
    if (*effect > 0) {
        double known = 1 - (sum[rank] - sum[rank + 1]) / (lines * *effect);
        *effect = known > KNOWN_LEAST ? sum[rank + 1] / lines / known : sum[rank] / lines;
        *effect = fmax(*effect, EVIDENCE_VARIANCE_LEAST);
    }
}
