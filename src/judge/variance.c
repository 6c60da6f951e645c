/* SPDX-License-Identifier: MIT
 *
 * The expected squared error of a cell as a sum of terms with weights that are not negative,
 *
 *     V = w_0 / w + w_1 lev + w_2 sqrt(lev) + sum over q of w_q (1 - exp(-(d - 1)/q)) + w_6 [one-sided]
 *         + [dark] sum over q of w_q (1 - exp(-d/q)) + w_9 own (1 - exp(-(d - 1)/30))
 *
 *     symbol       what it is
 *     w            weight of the reading, 1 where cells have none: noise of precision w
 *     lev          leverage (leverage.c); its root stands in where the error grows more slowly than the leverage of a
 *                  model that takes more components than the table has
 *     d            steps to the nearest seen cell of the same sensor; q = 3, 30, 300
 *     one-sided    the sensor was not seen before, or not after
 *     dark         nothing was seen at the cell's place; q = 3, 30
 *     own          the part of lev that the sensor's own coefficients have
 *
 * lev takes the errors of a sensor's cells for independent. Where they hang together in time, as those of a sensor that
 * moves slowly on its own do, its coefficients are worse by as much as such errors are fewer, and w_9 by as much
 * larger. That shows away from seen cells only: near them the same movement is in the estimate.
 *
 * In gaps own is left out of lev: there it grows into the gap as the distance does, by more than the error, and in the
 * folds, where sensors have lost more cells than they really miss, it is larger all over with errors that are not. So
 * it would take the place of the distance and promise less for the cells that are missing.
 *
 * V is fitted to the pooled squared errors y of the folds. The spread of y grows with its mean, so the terms are fitted
 * by least squares under weights 1/V^2, which V itself gives: four rounds, the first with V constant (iteratively
 * reweighted least squares; for normal errors the equations of maximum likelihood). A squared error above fifty times
 * its V is cut to that, 7 standard deviations, so that a few wild cells do not bend the surface; what that takes away
 * comes back with the quantile of |error| / sqrt(V).
 *
 * Weights not below 0: coordinate descent on the normal equations (10 x 10), each step the exact minimum over one
 * weight; it converges for any such problem (Luo, Tseng 1992, "On the convergence of the coordinate descent method for
 * convex differentiable minimization").
 *
 * The scale of a sensor: with x = y / V (mean 1 over all), r_j its mean over the n_j scattered cells of sensor j (those
 * of a gap hang together, and few gaps differ by chance as much as if sensors did), k the kurtosis within sensors, r_j
 * has variance (k - 1)/n_j by chance alone. What the r_j spread beyond that is tau^2, by moments (DerSimonian, Laird
 * 1986, "Meta-analysis in clinical trials"), and r_j is shrunk towards 1 by tau^2 / (tau^2 + (k-1)/n_j). Sensors that
 * began late keep 1: what is missing of them is not like what was seen.
 *
 * O(cells) a round; sums over pieces of them, made by the team and added in their order.
 */
#include "judge/judgement.h"

#include <math.h>
#include <string.h>

enum { ROUNDS = 4, DESCENTS = 400 };
static const double wild = 50;
/* V is not believed below this share of the mean squared error: the terms are a summary. */
static const double least_share = 0.01;

static void terms_set(const struct variance *variance, const struct standing *at, double *term)
{
    bool has_distance = variance->has_distance;
    double leverage = variance->is_of_gaps ? fmax(at->leverage - at->own, 0) : at->leverage;
    double beyond = has_distance ? fmax(at->distance - 1., 0) : 0;
    double dark = has_distance && (at->marks & STANDING_DARK) ? 1 : 0;
    term[0] = 1. / at->weight;
    term[1] = leverage;
    term[2] = sqrt(leverage);
    term[3] = beyond > 0 ? 1 - exp(-beyond / 3) : 0;
    term[4] = beyond > 0 ? 1 - exp(-beyond / 30) : 0;
    term[5] = beyond > 0 ? 1 - exp(-beyond / 300) : 0;
    term[6] = has_distance && (at->marks & STANDING_ONE_SIDED) ? 1 : 0;
    term[7] = dark > 0 ? 1 - exp(-(beyond + 1) / 3) : 0;
    term[8] = dark > 0 ? 1 - exp(-(beyond + 1) / 30) : 0;
    term[9] = at->own * term[4];
}

double variance_at(const struct variance *variance, const struct standing *at)
{
    double term[VARIANCE_TERMS], sum = 0;
    terms_set(variance, at, term);
    for (size_t k = 0; k < VARIANCE_TERMS; k++)
        sum += variance->weight[k] * term[k];
    return fmax(sum, variance->least);
}

/* min over w >= 0 of w'Gw - 2 b'w, from w as it is. */
static void weights_descend(double gram[VARIANCE_TERMS][VARIANCE_TERMS], const double *side, double *weight)
{
    for (int step = 0; step < DESCENTS; step++)
        for (size_t k = 0; k < VARIANCE_TERMS; k++) {
            double rest = side[k];
            for (size_t l = 0; l < VARIANCE_TERMS; l++)
                rest -= l == k ? 0 : gram[k][l] * weight[l];
            weight[k] = gram[k][k] > 0 ? fmax(0, rest / gram[k][k]) : 0;
        }
}

enum { PIECE = 4096 };

/* The normal equations of a round. */
struct equations {
    double gram[VARIANCE_TERMS][VARIANCE_TERMS], side[VARIANCE_TERMS];
};
enum { EQUATION_NUMBERS = sizeof(struct equations) / sizeof(double) };

struct fitting {
    const struct judged *pool;
    const struct variance *variance;
    double mean;
    bool is_first;
    struct equations *partial; /* one a piece */
};

static void piece_sum(void *job, size_t piece, size_t worker)
{
    const struct fitting *fitting = job;
    const struct judged *pool = fitting->pool;
    struct equations *sum = &fitting->partial[piece];
    uint64_t from = (uint64_t)piece * PIECE, to = from + PIECE < pool->count ? from + PIECE : pool->count;
    double mean = fitting->mean, term[VARIANCE_TERMS];
    (void)worker;
    *sum = (struct equations){0};
    for (uint64_t c = from; c < to; c++) {
        double fit = fitting->is_first ? mean : variance_at(fitting->variance, &pool->at[c]);
        double y = fmin(pool->square[c], wild * fit), weight = mean * mean / (fit * fit);
        terms_set(fitting->variance, &pool->at[c], term);
        for (size_t k = 0; k < VARIANCE_TERMS; k++) {
            sum->side[k] += weight * y * term[k];
            for (size_t l = 0; l < VARIANCE_TERMS; l++)
                sum->gram[k][l] += weight * term[k] * term[l];
        }
    }
}

static void rounds_fit(fescue_context *context, struct fitting *fitting, struct variance *variance)
{
    size_t pieces = (size_t)((fitting->pool->count + PIECE - 1) / PIECE);
    for (int round = 0; round < ROUNDS; round++) {
        struct equations sum;
        fitting->is_first = round == 0;
        team_run(context, pieces, piece_sum, fitting);
        team_sum(context, (const double *)fitting->partial, pieces, EQUATION_NUMBERS, (double *)&sum);
        weights_descend(sum.gram, sum.side, variance->weight);
    }
}

fescue_status variance_fit(fescue_context *context, const struct judged *pool, bool has_distance, bool is_of_gaps,
                           struct variance *variance)
{
    struct fitting fitting = {.pool = pool, .variance = variance};
    fescue_status status = FESCUE_OK;
    double mean = 0;
    for (uint64_t c = 0; c < pool->count; c++)
        mean += pool->square[c] / (double)pool->count;
    *variance = (struct variance){
        .weight = {mean}, .least = least_share * mean, .has_distance = has_distance, .is_of_gaps = is_of_gaps};
    if (!(mean > 0) || !isfinite(mean))
        return FESCUE_OK;
    fitting.mean = mean;
    TRY(TAKE(context, (pool->count + PIECE - 1) / PIECE, &fitting.partial));
    rounds_fit(context, &fitting, variance);
done:
    GIVE(context, &fitting.partial);
    return status;
}

/* ---- the scale of a sensor -----------------------------------------------------------------------------------------
 */

struct spread {
    double count, sum, square; /* of x */
};

static void spreads_fill(const struct judged *pool, const struct judgement *judgement, struct spread *spread)
{
    static const double cut = 25; /* five standard deviations: one cell does not make a noisy sensor */
    for (uint64_t c = 0; c < pool->count; c++) {
        if (pool->at[c].marks & STANDING_SHAPED)
            continue;
        double v = variance_at(&judgement->variance, &pool->at[c]);
        double x = fmin(pool->square[c] / v, cut);
        struct spread *of = &spread[judgement->sensors_are_rows ? pool->row[c] : pool->column[c]];
        of->count++;
        of->sum += x;
        of->square += x * x;
    }
}

/* The spread tau^2 of the true r_j; *noise is k - 1, *mean that of all x. */
static double spread_between(const struct spread *spread, uint32_t sensors, double *mean, double *noise)
{
    enum { ENOUGH = 10 };
    double count = 0, sum = 0, within = 0, cells = 0, q = 0, squares = 0, judged = 0;
    for (uint32_t s = 0; s < sensors; s++) {
        count += spread[s].count;
        sum += spread[s].sum;
        if (spread[s].count < ENOUGH || spread[s].sum <= 0)
            continue;
        double r = spread[s].sum / spread[s].count;
        within += spread[s].square / (r * r);
        cells += spread[s].count;
    }
    *mean = count > 0 ? sum / count : 1;
    *noise = cells > 0 ? fmax(1, within / cells - 1) : 2;
    for (uint32_t s = 0; s<sensors && * mean> 0; s++) {
        if (spread[s].count == 0)
            continue;
        double away = spread[s].sum / spread[s].count / *mean - 1;
        q += spread[s].count * away * away / *noise;
        squares += spread[s].count * spread[s].count;
        judged++;
    }
    if (judged < 2 || q < judged + 3 * sqrt(2 * judged)) /* three standard errors of chi-square */
        return 0;
    return *noise * (q - (judged - 1)) / (count - squares / count);
}

static bool began_late(const struct tracks *tracks, uint32_t sensor)
{
    static const double late = 0.25;
    uint64_t from = tracks->start[sensor];
    return from < tracks->start[sensor + 1] && tracks->rank[from] > late * tracks->places;
}

fescue_status scales_fit(fescue_context *context, const struct judged *pool, const struct tracks *tracks,
                         struct judgement *judgement)
{
    fescue_status status;
    struct spread *spread = NULL;
    uint32_t sensors = judgement->sensors_are_rows ? judgement->leverage.rows : judgement->leverage.columns;
    double mean, noise;
    TRY(TAKE(context, sensors, &spread));
    TRY(TAKE(context, sensors, &judgement->scale));
    spreads_fill(pool, judgement, spread);
    double between = spread_between(spread, sensors, &mean, &noise);
    for (uint32_t s = 0; s < sensors; s++) {
        double scale = 1;
        bool is_like = between > 0 && spread[s].count > 0 && (tracks == NULL || !began_late(tracks, s));
        if (is_like)
            scale += (spread[s].sum / spread[s].count / mean - 1) * between / (between + noise / spread[s].count);
        judgement->scale[s] = sqrt(scale);
    }
done:
    GIVE(context, &spread);
    return status;
}
