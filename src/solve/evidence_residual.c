/* SPDX-License-Identifier: MIT
 *
 * The residual of every series, AR(1) in time, beside the noise of its cells: with time as rows,
 *
 *     z_ij = x_i.w_j + r_j(t_i) + e_ij      r_j stationary, of variance os_j, its correlation falling by rho_j a step
 *
 * In the factorised posterior r_j has a factor of its own. Given the means of x and w it is a scalar process seen with
 * noise s2_ij at the cells of the series: one pass of kalman.c each way. Its mean comes off the targets from which x
 * and w are learnt; its variance adds to the expected squared error of the cell (excess).
 *
 * os_j and rho_j follow by one maximisation a round, from the series' own moments and those of all series together as
 * far as POOL_CELLS of them, so that a short series goes with the others.
 *
 * Cost: O(cells). Series run in parallel; moments of all are summed block by block.
 */
#include "solve/evidence_internal.h"

#include <math.h>
#include <string.h>

/* Steps' worth of the moments of all series with which those of each are learnt. */
#define POOL_CELLS 10.0
/* Longest jump, in steps of the first size, and how far correlations go on it, as log(-log rho). */
#define LENGTH_MOST 8.0
#define PLACE_LOW (-9.0)
#define PLACE_HIGH 1.6

struct residual_job {
    struct evidence *evidence;
    struct evidence_time *time;
};

static void value_put(const struct cells *cells, const struct half *half, uint64_t k, double value)
{
    if (cells->precision == FESCUE_SINGLE)
        ((float *)half->value)[k] = (float)value;
    else
        ((double *)half->value)[k] = value;
}

/* Where the cell of q lies in the half of the series. */
static uint64_t position(const struct evidence_time *time, uint64_t start, uint64_t q)
{
    return time->place != NULL ? start + time->place[q] : q;
}

static double weight_at(const struct half *half, uint64_t k)
{
    return half->weight != NULL ? (double)half->weight[k] : 1;
}

static double mean_at(const struct evidence_time *time, size_t step, size_t line)
{
    const double *x = time->steps->mean.data + step * time->steps->mean.stride;
    const double *w = time->series->mean.data + line * time->series->mean.stride;
    double sum = 0;
    for (size_t k = 0; k < time->series->mean.columns; k++)
        sum += x[k] * w[k];
    return sum;
}

/* What the residual of series `line` is seen as. */
static struct kalman_series series_view(const struct evidence *evidence, size_t line, double *at)
{
    const struct evidence_time *time = evidence->time;
    const struct half *half = time->series->half;
    uint64_t start = half->start[line];
    size_t count = (size_t)(half->start[line + 1] - start);
    double *when = at, *value = at + time->longest, *noise = value + time->longest;
    for (size_t q = 0; q < count; q++) {
        uint64_t k = position(time, start, start + q);
        uint32_t step = half->across[k];
        when[q] = time->axis->at[step];
        value[q] = time->clean[k] - mean_at(time, step, line);
        double precision = time->steps->line_precision[step] * time->series->line_precision[line];
        noise[q] = evidence->noise / (precision * weight_at(half, k));
    }
    return (struct kalman_series){count, when, value, noise};
}

/* The residual's mean off the targets, its variance kept; *moved grows by the squared change of the estimates. */
static void targets_put(const struct evidence *evidence, size_t line, const struct kalman_series *series,
                        const struct kalman_state *state, double *moved)
{
    const struct evidence_time *time = evidence->time;
    const struct cells *cells = &evidence->problem->target;
    uint64_t start = time->series->half->start[line], count = time->series->half->start[line + 1] - start;
    double excess = 0;
    for (uint64_t q = 0; q < count; q++) {
        uint64_t k = position(time, start, start + q);
        double value = time->clean[k] - state->mean[q];
        value_put(cells, time->series->half, k, value);
        value_put(cells, time->steps->half, time->twin[k], value);
        time->mean[start + q] = state->mean[q];
        double total = time->clean[k] - series->value[q] + state->mean[q], change = total - time->total[start + q];
        time->total[start + q] = total;
        *moved += change * change;
        time->spread[time->twin[k]] = state->variance[q];
        double precision = time->steps->line_precision[time->series->half->across[k]];
        excess += state->variance[q] * precision * weight_at(time->series->half, k);
    }
    time->series->excess[line] = excess;
}

/* One expectation and maximisation step for series under `law`: its tally alone in *own (may be NULL), the next law. */
static double law_step(const struct evidence_time *time, const struct kalman_series *series,
                       const struct kalman_state *state, const struct kalman_law *law, struct kalman_law *next)
{
    struct kalman_tally tally = {0};
    double likelihood = kalman_smooth(series, law, state);
    kalman_tally_series(&tally, series, state);
    if (time->pool_share > 0)
        kalman_tally_add(&tally, time->pool_share, time->pool);
    *next = *law;
    kalman_learn(&tally, next);
    return likelihood;
}

/* Coordinates in which laws are extrapolated. */
static void law_place(const struct kalman_law *law, double place[2])
{
    place[0] = log(law->variance);
    place[1] = log(-log(law->correlation));
}

/* Two steps, the jump along them (Varadhan, Roland 2008, "Simple and globally convergent methods for accelerating the
   convergence of any EM algorithm", scheme 3), and the better of both ends; the state is that of the law before the
   last step. Series too weak to have a law keep theirs. */
static void law_learn(const struct evidence_time *time, const struct kalman_series *series,
                      const struct kalman_state *state, struct kalman_law *law)
{
    struct kalman_law first, second, jump, last;
    double a[2], b[2], c[2], step = 0, bend = 0;
    law_step(time, series, state, law, &first);
    double before = law_step(time, series, state, &first, &second);
    law_place(law, a);
    law_place(&first, b);
    law_place(&second, c);
    for (size_t k = 0; k < 2; k++) {
        step += (b[k] - a[k]) * (b[k] - a[k]);
        bend += (c[k] - 2 * b[k] + a[k]) * (c[k] - 2 * b[k] + a[k]);
    }
    double length = bend > 0 ? fmin(fmax(sqrt(step / bend), 1), LENGTH_MOST) : 1;
    for (size_t k = 0; k < 2; k++)
        c[k] = a[k] + 2 * length * (b[k] - a[k]) + length * length * (c[k] - 2 * b[k] + a[k]);
    c[1] = fmin(fmax(c[1], PLACE_LOW), PLACE_HIGH);
    jump = (struct kalman_law){exp(c[0]), exp(-exp(c[1]))};
    if (length > 1 && isfinite(c[0]) && law_step(time, series, state, &jump, &last) >= before) {
        *law = last;
        return;
    }
    law_step(time, series, state, &second, law);
}

static void residual_block(void *opaque, size_t block, size_t worker)
{
    struct residual_job *job = opaque;
    struct evidence_time *time = job->time;
    const struct half *half = time->series->half;
    double *at = time->series_scratch + worker * evidence_series_room(time), *out = at + 3 * time->longest;
    struct kalman_state state = {out, out + time->longest, out + 2 * time->longest};
    struct kalman_tally *sum = time->partial + block;
    memset(sum, 0, sizeof *sum);
    time->moved[block] = 0;
    for (size_t line = half->block[block]; line < half->block[block + 1]; line++) {
        struct kalman_series series = series_view(job->evidence, line, at);
        law_learn(time, &series, &state, &time->law[line]);
        kalman_tally_series(sum, &series, &state);
        targets_put(job->evidence, line, &series, &state, time->moved + block);
    }
}

static void excess_block(void *opaque, size_t block, size_t worker)
{
    (void)worker;
    struct evidence_time *time = ((struct residual_job *)opaque)->time;
    const struct half *half = time->steps->half;
    for (size_t line = half->block[block]; line < half->block[block + 1]; line++) {
        double sum = 0;
        for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++)
            sum += time->spread[k] * time->series->line_precision[half->across[k]] * weight_at(half, k);
        time->steps->excess[line] = sum;
    }
}

void evidence_residual_update(struct evidence *evidence)
{
    struct evidence_time *time = evidence->time;
    struct residual_job job = {evidence, time};
    size_t blocks = time->series->half->blocks;
    double count = time->pool->series;
    for (size_t c = 0; c < KALMAN_CLASSES; c++)
        count += time->pool->count[c];
    time->pool_share = count > 0 ? POOL_CELLS / count : 0;
    team_run(evidence->context, blocks, residual_block, &job);
    team_run(evidence->context, time->steps->half->blocks, excess_block, &job);
    team_sum(evidence->context, time->moved, blocks, 1, &time->change);
    time->change = sqrt(time->change / (double)evidence->problem->target.count);
    memset(time->pool, 0, sizeof *time->pool);
    for (size_t block = 0; block < blocks; block++)
        kalman_tally_add(time->pool, 1, time->partial + block);
}
