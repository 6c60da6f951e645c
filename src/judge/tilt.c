/* SPDX-License-Identifier: MIT
 *
 * Scores whose shape changes with leverage. The error of a cell is that of its estimate, a sum over many cells and
 * nearly normal, plus its own noise, which may be anything: so where the noise has heavy tails, the scores of cells
 * that rest on few others are closer to normal, and one quantile for all is too small for them in the middle of the
 * distribution and too large far out. With
 *
 *     x = 1 / (1 + w lev)      the noise's share of the variance, w the weight of the reading, as a rule 1
 *
 * the level's quantile q_g is taken in five groups of equal number by x, a line q_g / q = 1 + t (x - x0) fitted to the
 * groups by least squares, and the slope shrunk by 1 - (error / t)^2, so that a slope within its own standard error is
 * none (the positive part of James, Stein 1961, "Estimation with quadratic loss"). Scores are divided by the line,
 * between a half and two, before the quantile of all is taken: its promise on average stays exact.
 */
#include "judge/judgement.h"

#include <math.h>

enum { GROUPS = 5, GROUP_LEAST = 50 };

static double value_at(const void *values, uint64_t k)
{
    return ((const double *)values)[k];
}

double score_quantile(const double *scores, uint64_t count, double level)
{
    static const double rounding = 1e-12; /* as in interval.c */
    double place = ceil((double)(count + 1) * level * (1 - rounding));
    return place > (double)count ? INFINITY : order_pick(value_at, scores, count, (uint64_t)fmax(place, 1) - 1);
}

static double noise_share(const struct standing *at)
{
    return 1 / (1. + (double)at->weight * at->leverage);
}

double tilt_at(const struct judgement *judgement, const struct standing *at)
{
    return fmin(fmax(1 + judgement->tilt * (noise_share(at) - judgement->tilt_centre), 0.5), 2);
}

/* Slope and centre of the line through the groups' points. */
static void line_fit(const double *x, const double *y, size_t groups, struct judgement *judgement)
{
    double centre = 0, mean = 0, xx = 0, xy = 0, rest = 0;
    for (size_t g = 0; g < groups; g++) {
        centre += x[g] / (double)groups;
        mean += y[g] / (double)groups;
    }
    for (size_t g = 0; g < groups; g++) {
        xx += (x[g] - centre) * (x[g] - centre);
        xy += (x[g] - centre) * (y[g] - mean);
    }
    if (!(xx > 1e-9) || !isfinite(xy) || xy == 0)
        return; /* leverages are alike */
    double slope = xy / xx;
    for (size_t g = 0; g < groups; g++) {
        double away = y[g] - mean - slope * (x[g] - centre);
        rest += away * away / (double)(groups - 2);
    }
    judgement->tilt = slope * fmax(0, 1 - rest / xx / (slope * slope));
    judgement->tilt_centre = centre;
}

fescue_status tilt_fit(fescue_context *context, const struct judged *pool, double *scores, struct judgement *judgement)
{
    fescue_status status;
    double *share = NULL, *some = NULL, x[GROUPS] = {0}, y[GROUPS], edge[GROUPS + 1];
    uint64_t count = pool->count;
    double all = score_quantile(scores, count, judgement->level);
    if (count < (uint64_t)GROUPS * GROUP_LEAST || !isfinite(all) || !(all > 0))
        return FESCUE_OK;
    TRY(TAKE(context, count, &share));
    TRY(TAKE(context, count, &some));
    for (uint64_t c = 0; c < count; c++)
        share[c] = noise_share(&pool->at[c]);
    for (size_t g = 0; g < GROUPS; g++)
        edge[g] = order_pick(value_at, share, count, g * count / GROUPS);
    edge[0] = -INFINITY;
    edge[GROUPS] = INFINITY;
    for (size_t g = 0; g < GROUPS; g++) {
        uint64_t of = 0;
        for (uint64_t c = 0; c < count; c++)
            if (share[c] >= edge[g] && share[c] < edge[g + 1]) {
                some[of++] = scores[c];
                x[g] += share[c];
            }
        if (of < GROUP_LEAST)
            goto done;
        x[g] /= (double)of;
        y[g] = score_quantile(some, of, judgement->level) / all;
    }
    line_fit(x, y, GROUPS, judgement);
    for (uint64_t c = 0; c < count; c++)
        scores[c] /= tilt_at(judgement, &pool->at[c]);
done:
    GIVE(context, &share);
    GIVE(context, &some);
    return status;
}
