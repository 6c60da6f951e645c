/* SPDX-License-Identifier: MIT
 *
 * The evidence fit of a table whose rows (or columns) are times: what its two time parts share, and when they begin.
 *
 *     residual   r_j(t), AR(1), of every series                    evidence_residual.c
 *     chain      factors and effects of the steps, AR(1)           evidence_chain.c
 *
 * The order matters. A chain that begins while the loadings still move bends them towards what is smooth, and loses at
 * long outages; so the residual begins first, and the chain when it has settled. Both start from a guess: variance of
 * the residual 0.3 of the noise, correlations 0.6.
 *
 * A fit that starts from a model with a time part takes its laws over and has both parts from the first round: the
 * components of a model come in the order of their strength, in which neighbours rarely change.
 *
 * A blend with interpolation in time on top of it, by the distance to the nearest seen cell, would bring nothing: with
 * the weight of every distance fitted to the truth itself, the error of NOx, ozone and wind (tests/reference/long/
 * open_times.py, cells and gaps, two seeds) falls by 0.1 % in the median and by 1.4 % at most.
 *
 * Times need not be sorted: the steps go by the axis's order, and the cells of each series have a place in time beside
 * their place in the store, unless the two are the same.
 *
 * Memory: 5 numbers a cell, and two small matrices a step.
 */
#include "solve/evidence_internal.h"

#include <assert.h>
#include <math.h>
#include <string.h>

/* Rounds after which the parts begin, and their first laws (above). */
enum { RESIDUAL_ROUND = 2, CHAIN_ROUND = 12 };
#define RESIDUAL_SHARE 0.3
/* Low-rank part and residual go on exchanging what either explains long after the estimates have settled: rms change of
   estimates in a round, in standard deviations of the noise, that no error figure notices. */
#define SETTLED 0.0075
/* But steps in which little was seen hang on the laws: the same for what a step forgets, the mean over components by
   the size of each in the table. */
#define LAWS_SETTLED 0.05
#define FIRST_CORRELATION 0.6

static size_t longest_series(const struct half *half)
{
    uint64_t most = 0;
    for (size_t line = 0; line < half->lines; line++)
        if (half->start[line + 1] - half->start[line] > most)
            most = half->start[line + 1] - half->start[line];
    return (size_t)most;
}

static void time_reserve(struct evidence *evidence, const struct evidence_time *time)
{
    struct arena *arena = &evidence->time->arena;
    const struct half *series = time->series->half, *steps = time->steps->half;
    size_t count = evidence->problem->target.count, d = evidence->rank + 1;
    arena_reserve(arena, count, sizeof *time->twin);
    arena_reserve(arena, time->axis->is_sorted ? 0 : count, sizeof *time->place);
    for (size_t k = 0; k < 4; k++)
        arena_reserve(arena, count, sizeof(double));
    arena_reserve(arena, series->blocks, sizeof *time->moved);
    arena_reserve(arena, series->lines, sizeof *time->law);
    arena_reserve(arena, series->blocks + 1, sizeof *time->partial);
    arena_reserve(arena, d, sizeof *time->steps_law);
    arena_reserve(arena, d, sizeof(double));
    arena_reserve(arena, steps->lines, sizeof(double));
    arena_reserve(arena, steps->lines * evidence_chain_store(evidence->rank), sizeof(double));
    arena_reserve(arena, steps->lines * d, sizeof(double));
    for (size_t k = 0; k < 2; k++)
        arena_reserve(arena, steps->lines * chain_room(d), sizeof(double));
    arena_reserve(arena, steps->lines, sizeof(double));
    arena_reserve(arena, series->lines, sizeof(double));
    evidence->time->state_size = arena->reserved;
    arena_reserve(arena, team_workers(evidence->context) * evidence_series_room(time), sizeof(double));
}

static void time_carve(struct evidence *evidence, struct evidence_time *time)
{
    struct arena *arena = &time->arena;
    const struct half *series = time->series->half, *steps = time->steps->half;
    size_t count = evidence->problem->target.count, d = evidence->rank + 1;
    time->twin = arena_carve(arena, count, sizeof *time->twin);
    time->place = arena_carve(arena, time->axis->is_sorted ? 0 : count, sizeof *time->place);
    time->clean = arena_carve(arena, count, sizeof(double));
    time->mean = arena_carve(arena, count, sizeof(double));
    time->total = arena_carve(arena, count, sizeof(double));
    time->spread = arena_carve(arena, count, sizeof(double));
    time->moved = arena_carve(arena, series->blocks, sizeof *time->moved);
    time->law = arena_carve(arena, series->lines, sizeof *time->law);
    time->partial = arena_carve(arena, series->blocks + 1, sizeof *time->partial);
    time->pool = time->partial + series->blocks;
    time->steps_law = arena_carve(arena, d, sizeof *time->steps_law);
    time->law_moved = arena_carve(arena, d, sizeof(double));
    time->clock = arena_carve(arena, steps->lines, sizeof(double));
    time->store = arena_carve(arena, steps->lines * evidence_chain_store(evidence->rank), sizeof(double));
    time->chain.cross = arena_carve(arena, steps->lines * d, sizeof(double));
    time->chain.forward = arena_carve(arena, steps->lines * chain_room(d), sizeof(double));
    time->chain.backward = arena_carve(arena, steps->lines * chain_room(d), sizeof(double));
    time->steps->excess = arena_carve(arena, steps->lines, sizeof(double));
    time->series->excess = arena_carve(arena, series->lines, sizeof(double));
    time->series_scratch =
        arena_carve(arena, team_workers(evidence->context) * evidence_series_room(time), sizeof(double));
}

/* Twins and places: the steps in the order of time meet the cells of every series in that order. `next` has a number a
   series. */
static void cells_match(struct evidence *evidence, uint64_t *next)
{
    struct evidence_time *time = evidence->time;
    const struct half *series = time->series->half, *steps = time->steps->half;
    memcpy(next, series->start, series->lines * sizeof *next);
    for (size_t step = 0; step < steps->lines; step++)
        for (uint64_t k = steps->start[step]; k < steps->start[step + 1]; k++)
            time->twin[next[steps->across[k]]++] = k;
    if (time->axis->is_sorted) {
        time->place = NULL;
        return;
    }
    for (size_t k = 0; k < evidence->problem->target.count;
         k++) /* of a cell of the steps: where it lies in the series */
        ((uint64_t *)time->mean)[time->twin[k]] = k;
    memcpy(next, series->start, series->lines * sizeof *next);
    for (size_t t = 0; t < steps->lines; t++) {
        size_t step = time->axis->order[t];
        for (uint64_t k = steps->start[step]; k < steps->start[step + 1]; k++) {
            uint32_t line = steps->across[k];
            time->place[next[line]++] = (uint32_t)(((uint64_t *)time->mean)[k] - series->start[line]);
        }
    }
    memset(time->mean, 0, evidence->problem->target.count * sizeof *time->mean);
}

static void chain_set(struct evidence *evidence)
{
    struct evidence_time *time = evidence->time;
    struct chain *chain = &time->chain;
    chain->steps = time->steps->half->lines;
    chain->size = evidence->rank + 1;
    chain->time = time->clock;
    chain->law = time->steps_law;
    chain->line = time->axis->order;
    chain->precision = time->steps->moments.data;
    chain->precision_stride = time->steps->moments.stride;
    chain->mean = time->steps->mean.data;
    chain->mean_stride = time->steps->mean.stride;
    for (size_t t = 0; t < chain->steps; t++)
        time->clock[t] = time->axis->at[time->axis->order[t]];
}

fescue_status evidence_time_open(struct evidence *evidence, const struct evidence_request *request)
{
    fescue_context *context = evidence->context;
    const struct cells *target = &evidence->problem->target;
    struct evidence_time *time = NULL;
    uint64_t *next = NULL;
    fescue_status status;
    TRY(TAKE(context, 1, &time));
    evidence->time = time;
    time->axis = request->time;
    bool by_rows = time->axis->along == TIME_ROWS;
    time->steps = by_rows ? &evidence->rows : &evidence->columns;
    time->series = by_rows ? &evidence->columns : &evidence->rows;
    assert(time->axis->count == time->steps->half->lines);
    time->change = INFINITY;
    time->longest = longest_series(time->series->half);
    time_reserve(evidence, time);
    TRY(arena_open(context, &time->arena));
    time_carve(evidence, time);
    TRY(TAKE(context, time->series->half->lines, &next));
    cells_match(evidence, next);
    for (uint64_t k = 0; k < target->count; k++)
        time->clean[k] = cells_value(target, time->series->half, k);
    chain_set(evidence);
done:
    GIVE(context, &next);
    return status;
}

void evidence_time_close(struct evidence *evidence)
{
    if (evidence->time == NULL)
        return;
    arena_close(evidence->context, &evidence->time->arena);
    GIVE(evidence->context, &evidence->time);
}

/* The noise of a start, its mean over the cells, and that of every series where they have their own. */
static void noise_take(struct evidence *evidence, const struct time_part *part)
{
    struct evidence_side *series = evidence->time->series;
    double mean = 0, unit = evidence->problem->scale * evidence->problem->scale;
    for (size_t line = 0; line < series->half->lines; line++) {
        double cells = (double)(series->half->start[line + 1] - series->half->start[line]);
        mean += cells * part->noise[line] / (unit * (double)evidence->problem->target.count);
    }
    if (!(mean > 0))
        return;
    evidence->noise = mean;
    for (size_t line = 0; series->moments.weight != NULL && line < series->half->lines; line++)
        series->line_precision[line] = mean * unit / part->noise[line];
}

void evidence_time_begin(struct evidence *evidence, const struct model *start)
{
    struct evidence_time *time = evidence->time;
    const struct time_part *part = &start->time;
    double unit = evidence->problem->scale * evidence->problem->scale;
    if (part->along != time->axis->along)
        return;
    time->residual_on = true;
    noise_take(evidence, part);
    for (size_t line = 0; line < time->series->half->lines; line++) {
        time->law[line] = part->law[line];
        time->law[line].variance /= unit;
    }
    if (part->components == 0)
        return;
    time->chain_on = true;
    for (size_t k = 0; k <= evidence->rank; k++) {
        size_t from = k < evidence->rank ? k : part->components - 1;
        bool is_known = k == evidence->rank || k + 1 < part->components;
        double variance = time->steps->variance[k];
        time->steps_law[k] = (struct kalman_law){variance, is_known ? part->steps_law[from].correlation : 0};
    }
}

static void residual_begin(struct evidence *evidence)
{
    struct evidence_time *time = evidence->time;
    time->residual_on = true;
    for (size_t line = 0; line < time->series->half->lines; line++)
        time->law[line] = (struct kalman_law){RESIDUAL_SHARE * evidence->noise / time->series->line_precision[line],
                                              FIRST_CORRELATION};
}

static void chain_begin(struct evidence *evidence)
{
    struct evidence_time *time = evidence->time;
    time->chain_on = true;
    for (size_t k = 0; k <= evidence->rank; k++)
        time->steps_law[k] = (struct kalman_law){time->steps->variance[k], FIRST_CORRELATION};
}

void evidence_time_round(struct evidence *evidence, uint64_t round)
{
    struct evidence_time *time = evidence->time;
    if (!time->residual_on && round >= RESIDUAL_ROUND)
        residual_begin(evidence);
    if (!time->chain_on && round >= CHAIN_ROUND)
        chain_begin(evidence);
    if (time->residual_on && round > 0)
        evidence_residual_update(evidence);
}

static bool laws_settled(const struct evidence *evidence)
{
    const struct evidence_time *time = evidence->time;
    double moved = 0, size = 0;
    for (size_t k = 0; k <= evidence->rank; k++) {
        double of_table = time->steps_law[k].variance * (k < evidence->rank ? time->series->variance[k] : 1);
        moved += of_table * time->law_moved[k];
        size += of_table;
    }
    return moved <= LAWS_SETTLED * size;
}

bool evidence_time_settled(const struct evidence *evidence, double change)
{
    return evidence->time->chain_on && change <= SETTLED * sqrt(evidence->noise) && laws_settled(evidence);
}

static void part_block(void *opaque, size_t block, size_t worker)
{
    (void)worker;
    void **job = opaque;
    const struct evidence *evidence = job[0];
    const struct evidence_time *time = evidence->time;
    struct time_part *part = job[1];
    const struct half *half = time->series->half;
    double scale = evidence->problem->scale;
    for (size_t line = half->block[block]; line < half->block[block + 1]; line++) {
        uint64_t start = half->start[line];
        for (uint64_t q = start; q < half->start[line + 1]; q++) {
            uint64_t k = time->place != NULL ? start + time->place[q] : q;
            part->time[q] = time->axis->at[half->across[k]];
            part->mean[q] = scale * time->mean[q];
        }
        part->law[line] = time->law[line];
        part->law[line].variance *= scale * scale;
        part->noise[line] = scale * scale * evidence->noise / time->series->line_precision[line];
    }
}

/* The laws of the components in the order of their strength in the table, as a model has them, and of the effect. */
static void laws_put(const struct evidence *evidence, struct kalman_law *law)
{
    const struct evidence_time *time = evidence->time;
    const double *rows = evidence->rows.variance, *columns = evidence->columns.variance;
    for (size_t k = 0; k < evidence->rank; k++) {
        size_t place = 0;
        for (size_t l = 0; l < evidence->rank; l++) {
            double mine = rows[k] * columns[k], other = rows[l] * columns[l];
            place += other > mine || (other == mine && l < k);
        }
        law[place] = time->steps_law[k];
    }
    law[evidence->rank] = time->steps_law[evidence->rank];
}

fescue_status evidence_time_part(struct evidence *evidence, struct time_part *part)
{
    const struct evidence_time *time = evidence->time;
    const struct half *half = time->series->half;
    size_t components = time->chain_on ? evidence->rank + 1 : 0;
    if (!time->residual_on)
        return FESCUE_OK;
    fescue_status status =
        time_part_create(evidence->context, time->axis, half->lines, evidence->problem->target.count, components, part);
    if (status != FESCUE_OK)
        return status;
    memcpy(part->start, half->start, ((size_t)half->lines + 1) * sizeof *part->start);
    if (components > 0)
        laws_put(evidence, part->steps_law);
    void *job[2] = {evidence, part};
    team_run(evidence->context, half->blocks, part_block, job);
    return FESCUE_OK;
}
