/* SPDX-License-Identifier: MIT
 *
 * Time for a model that was fitted without it, the cheap way: what the model leaves of every series is kriged.
 *
 *     symbol   what it is
 *     h_ij     leverage of a seen cell, the share of its own value in its estimate (leverage.c)
 *     e_ij     x_ij less its estimate
 *     d_ij     e_ij / (1 - h_ij): what would be left had the cell not been seen, h clipped at 0.98
 *     r_j(t)   AR(1), of variance v_j and correlation rho_j a step;   d_ij = r_j(t_i) + N(0, s2_j / w_ij)
 *
 * In-sample residuals e would do worse: a model that bends towards its cells leaves too little, and what it leaves goes
 * the other way. Laws by expectation and maximisation (Shumway, Stoffer 1982) from the series' own moments and a few
 * steps' worth of those of all series; the nugget s2_j from its expected squared errors and four pseudo-cells of the
 * mean. The posterior means at the seen cells are the time part: the process is Markov, so that they give every cell
 * between (time_part.c). Where a series does not hang together, v_j falls and the part says nothing.
 *
 * Cost: two leverages of (r + 1)^2 flops and `ROUNDS` passes of kalman.c a cell; series in parallel, sums block by
 * block.
 */
#include "judge/judgement.h"
#include "judge/tracks.h"

#include <math.h>
#include <string.h>

enum { ROUNDS = 20 };
static const double leverage_most = 0.98, first_share = 0.5, first_correlation = 0.6;
/* Steps' worth of all series' moments, and cells of mean nugget, that every series learns with. */
static const double pool_steps = 10, pool_cells = 4;

struct krige {
    fescue_context *context;
    const struct cells *cells;
    const struct half *series;
    struct tracks tracks;
    struct time_part *part;
    double *value, *weight; /* of the cells, by series in the order of time */
    double *room;           /* of each worker: noise, mean, variance, cross of the longest series */
    struct kalman_tally *tally;
    double *error; /* of each block: squared errors */
    double mean_nugget, share;
    size_t longest;
};

static size_t krige_room(const struct krige *krige)
{
    return team_room(3 * krige->longest, sizeof(double));
}

/* Row and column of the k-th cell of a track. */
static void place_of(const struct krige *krige, const struct time_axis *time, uint32_t sensor, uint64_t k,
                     uint32_t place[2])
{
    uint32_t line = time->order[krige->tracks.rank[k]];
    place[0] = krige->tracks.along_columns ? sensor : line;
    place[1] = krige->tracks.along_columns ? line : sensor;
}

static void residuals_fill(struct krige *krige, const struct model *model, const struct leverage *leverage,
                           const struct time_axis *time)
{
    const struct half *half = &krige->cells->by_row;
    double sum = 0;
    for (uint32_t s = 0; s < krige->tracks.sensors; s++)
        for (uint64_t k = krige->tracks.start[s]; k < krige->tracks.start[s + 1]; k++) {
            uint64_t cell = krige->tracks.cell[k];
            uint32_t place[2];
            place_of(krige, time, s, k, place);
            double own = fmin(leverage_at(leverage, place[0], place[1]), leverage_most);
            double left = cells_value(krige->cells, half, cell) - model_estimate(model, place[0], place[1]);
            krige->value[k] = left / (1 - own);
            krige->weight[k] = half->weight != NULL ? (double)half->weight[cell] : 1;
            krige->part->time[k] = time->at[krige->tracks.along_columns ? place[1] : place[0]];
            sum += krige->value[k] * krige->value[k];
        }
    krige->mean_nugget = krige->cells->count > 0 ? sum / (double)krige->cells->count : 0;
}

/* One round over a block of series: posterior under the laws as they are, then the next laws. */
static void series_block(void *opaque, size_t block, size_t worker)
{
    struct krige *krige = opaque;
    struct time_part *part = krige->part;
    double *noise = krige->room + worker * krige_room(krige), *variance = noise + krige->longest;
    double *cross = variance + krige->longest, error = 0;
    const struct kalman_tally *all = &krige->tally[krige->series->blocks];
    struct kalman_tally *sum = &krige->tally[block];
    memset(sum, 0, sizeof *sum);
    for (uint32_t line = krige->series->block[block]; line < krige->series->block[block + 1]; line++) {
        uint64_t start = part->start[line];
        size_t count = (size_t)(part->start[line + 1] - start);
        const double *value = krige->value + start, *weight = krige->weight + start;
        double *mean = part->mean + start, own_error = 0;
        for (size_t k = 0; k < count; k++)
            noise[k] = part->noise[line] / weight[k];
        struct kalman_series series = {count, part->time + start, value, noise};
        struct kalman_state state = {mean, variance, cross};
        struct kalman_tally own = {0};
        kalman_smooth(&series, &part->law[line], &state);
        kalman_tally_series(&own, &series, &state);
        kalman_tally_add(sum, 1, &own);
        for (size_t k = 0; k < count; k++)
            own_error += weight[k] * ((value[k] - mean[k]) * (value[k] - mean[k]) + variance[k]);
        kalman_tally_add(&own, krige->share, all);
        kalman_learn(&own, &part->law[line]);
        part->noise[line] = (own_error + pool_cells * krige->mean_nugget) / ((double)count + pool_cells);
        error += own_error;
    }
    krige->error[block] = error;
}

static void laws_learn(struct krige *krige)
{
    size_t blocks = krige->series->blocks;
    struct kalman_tally *all = &krige->tally[blocks];
    for (int round = 0; round < ROUNDS; round++) {
        double count = all->series, error = 0;
        for (size_t c = 0; c < KALMAN_CLASSES; c++)
            count += all->count[c];
        krige->share = count > 0 ? pool_steps / count : 0;
        team_run(krige->context, blocks, series_block, krige);
        memset(all, 0, sizeof *all);
        for (size_t block = 0; block < blocks; block++) {
            kalman_tally_add(all, 1, &krige->tally[block]);
            error += krige->error[block];
        }
        krige->mean_nugget = error / (double)krige->cells->count;
    }
}

static fescue_status krige_open(struct krige *krige, const struct time_axis *time)
{
    fescue_context *context = krige->context;
    const struct half *series = krige->series;
    struct line_order order = {time->along == TIME_COLUMNS, time->at, time->order};
    fescue_status status;
    for (uint32_t line = 0; line < series->lines; line++) {
        size_t count = (size_t)(series->start[line + 1] - series->start[line]);
        krige->longest = count > krige->longest ? count : krige->longest;
    }
    TRY(tracks_create(context, krige->cells, &order, &krige->tracks));
    TRY(TAKE(context, krige->cells->count, &krige->value));
    TRY(TAKE(context, krige->cells->count, &krige->weight));
    TRY(TAKE(context, team_workers(context) * krige_room(krige), &krige->room));
    TRY(TAKE(context, (size_t)series->blocks + 1, &krige->tally));
    TRY(TAKE(context, series->blocks, &krige->error));
    TRY(time_part_create(context, time, series->lines, krige->cells->count, 0, krige->part));
    memcpy(krige->part->start, series->start, ((size_t)series->lines + 1) * sizeof *series->start);
done:
    return status;
}

static void krige_close(struct krige *krige)
{
    tracks_free(krige->context, &krige->tracks);
    GIVE(krige->context, &krige->value);
    GIVE(krige->context, &krige->weight);
    GIVE(krige->context, &krige->room);
    GIVE(krige->context, &krige->tally);
    GIVE(krige->context, &krige->error);
}

fescue_status krige_run(fescue_context *context, const struct cells *cells, const struct model *model,
                        const struct krige_request *request, struct time_part *part)
{
    const struct time_axis *time = request->time;
    struct krige krige = {.context = context,
                          .cells = cells,
                          .series = time->along == TIME_ROWS ? &cells->by_column : &cells->by_row,
                          .part = part};
    struct leverage leverage = {0};
    double noise, density = (double)cells->count / ((double)cells->rows * (double)cells->columns);
    fescue_status status;
    *part = (struct time_part){0};
    TRY(noise_measure(context, cells, model, &noise));
    TRY(leverage_create(context, cells, model, noise, request->ridge * density, &leverage));
    TRY(krige_open(&krige, time));
    residuals_fill(&krige, model, &leverage, time);
    for (uint32_t line = 0; line < krige.series->lines; line++) {
        part->law[line] = (struct kalman_law){first_share * krige.mean_nugget, first_correlation};
        part->noise[line] = (1 - first_share) * krige.mean_nugget;
    }
    if (krige.mean_nugget > 0)
        laws_learn(&krige);
done:
    krige_close(&krige);
    leverage_free(context, &leverage);
    if (status != FESCUE_OK)
        time_part_free(context, part);
    return status;
}
