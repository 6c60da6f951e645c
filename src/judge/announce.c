/* SPDX-License-Identifier: MIT
 *
 * The error over the cells that are really missing, from the errors on cells that were hidden, which as a rule are
 * easier. Three estimates of the mean squared error, over the unseen cells M and the hidden ones H (where holes are
 * gaps those that were hidden in gaps, if there are enough: of a scattered cell both neighbours are seen, as of few
 * others):
 *
 *     by leverage    mean_M (1/w + lev) * mean_H e^2 / (1/w + lev), w the weight of a reading, as a rule 1
 *     by variance    mean_M V s^2 * mean_H e^2 / mean_H V s^2, over the cells hidden in the shape of the holes where
 *                    there are enough (variance.c: V and the sensor's scale s)
 *     by distance    the same over all of H, in strata of the distance d to the nearest seen cell of the sensor; a
 *                    stratum of fewer than ten hidden cells takes its neighbours' with it
 *
 * What is announced is the root of the mean of the last two where distances are known, else of the first and the last.
 *
 * The band: whole sensors are drawn with replacement (Efron, Tibshirani 1993, "An Introduction to the Bootstrap",
 * chapter 8, for data in clusters), twice a draw. Once for the unseen cells, whose error is itself that of the few
 * sensors that miss many: those of every sensor are given the ratio e^2 / (V s^2) that the hidden ones of a drawn
 * sensor have in their stratum. Once for the hidden cells, which were those of some sensors and not of others: what
 * would have been announced from the drawn ones. With T and A the two mean squares, T / A is drawn as the unseen cells'
 * true one over the announced one is, and the band is the 5 % and 95 % points of announced * sqrt(T / A) over `DRAWS`
 * draws, fewer where there are very many sensors. Sums are kept a sensor and stratum, so a draw costs no pass over
 * cells.
 */
#include "judge/judgement.h"

#include <math.h>
#include <string.h>

enum { DRAWS = 400, DRAWS_LEAST = 100, STRATUM_LEAST = 10, SHAPED_LEAST = 200 };
/* Sensors that are drawn in all, as far as DRAWS_LEAST draws do not take more: the band of very many is narrow. */
static const double drawn_most = 5e5;
static const double edges[JUDGE_BINS - 1] = {1.5, 2.5, 5.5, 15.5, 50.5, 150.5};

/* Of one sensor and stratum. */
struct sums {
    double hidden, relative;               /* hidden cells, sum of e^2 / (1/w + lev) */
    double square, expected;               /* sums of e^2 and of V s^2 */
    double shaped_square, shaped_expected; /* of these, over the cells that count for the variance */
    double missing, leverage, variance;    /* unseen cells, sums of 1/w + lev and of V s^2 */
};
struct announcing {
    const struct judgement *judgement;
    bool by_distance, by_shape;
    uint32_t sensors;
    size_t strata;     /* 1 where distances are not known */
    struct sums *sums; /* sensors x strata */
    uint64_t seed;
    double announced; /* mean square */
    uint32_t *room;   /* of each worker: three numbers a sensor */
    double *draws;    /* T / A, times what is announced */
};

/* What a draw has to itself. */
struct draw {
    const struct announcing *announcing;
    uint32_t *drawn, *times; /* sensors drawn, and how often each */
    uint32_t *able;          /* of the drawn ones, those that can stand for others in a stratum */
    struct random_stream random;
};

static size_t stratum_of(const struct announcing *announcing, double distance)
{
    size_t b = 0;
    while (b + 1 < announcing->strata && distance > edges[b])
        b++;
    return b;
}

static void sums_fill(struct announcing *announcing, const struct judged *cells, bool is_hidden)
{
    const struct judgement *judgement = announcing->judgement;
    for (uint64_t c = 0; c < cells->count; c++) {
        uint32_t sensor = judgement->sensors_are_rows ? cells->row[c] : cells->column[c];
        struct sums *sums =
            &announcing->sums[(size_t)sensor * announcing->strata + stratum_of(announcing, cells->at[c].distance)];
        double v = variance_at(&judgement->variance, &cells->at[c]);
        v *= judgement->scale[sensor] * judgement->scale[sensor];
        if (!is_hidden) {
            sums->missing++;
            sums->leverage += 1. / cells->at[c].weight + cells->at[c].leverage;
            sums->variance += v;
            continue;
        }
        sums->hidden++;
        sums->relative += cells->square[c] / (1. / cells->at[c].weight + cells->at[c].leverage);
        sums->square += cells->square[c];
        sums->expected += v;
        if (announcing->by_shape && !(cells->at[c].marks & STANDING_SHAPED))
            continue;
        sums->shaped_square += cells->square[c];
        sums->shaped_expected += v;
    }
}

/* The unseen cells of all sensors, and the hidden ones of each as often as drawn (NULL: once). */
static void sums_add(const struct announcing *announcing, const uint32_t *drawn, struct sums total[JUDGE_BINS])
{
    memset(total, 0, JUDGE_BINS * sizeof *total);
    for (uint32_t s = 0; s < announcing->sensors; s++) {
        double times = drawn == NULL ? 1 : drawn[s];
        for (size_t b = 0; b < announcing->strata; b++) {
            const struct sums *sums = &announcing->sums[(size_t)s * announcing->strata + b];
            total[b].hidden += times * sums->hidden;
            total[b].relative += times * sums->relative;
            total[b].square += times * sums->square;
            total[b].expected += times * sums->expected;
            total[b].shaped_square += times * sums->shaped_square;
            total[b].shaped_expected += times * sums->shaped_expected;
            total[b].missing += sums->missing;
            total[b].leverage += sums->leverage;
            total[b].variance += sums->variance;
        }
    }
}

/* What e^2 is of V s^2 in a stratum; where it holds too few, in the nearest ones with it. */
static double stratum_ratio(const struct sums total[JUDGE_BINS], size_t b)
{
    double hidden = total[b].hidden, square = total[b].square, expected = total[b].expected;
    for (size_t away = 1; hidden < STRATUM_LEAST && away < JUDGE_BINS; away++) {
        size_t near[2] = {b - away, b + away}; /* below 0 comes round to a number that is too large */
        for (size_t k = 0; k < 2; k++) {
            if (near[k] >= JUDGE_BINS)
                continue;
            hidden += total[near[k]].hidden;
            square += total[near[k]].square;
            expected += total[near[k]].expected;
        }
    }
    return square / expected;
}

/* Mean squared errors. */
struct estimates {
    double by_leverage, by_distance, by_variance, all;
};

static struct estimates estimate(const struct announcing *announcing, const struct sums total[JUDGE_BINS])
{
    struct sums sum = {0};
    double strata = 0;
    for (size_t b = 0; b < JUDGE_BINS; b++) {
        sum.hidden += total[b].hidden;
        sum.relative += total[b].relative;
        sum.shaped_square += total[b].shaped_square;
        sum.shaped_expected += total[b].shaped_expected;
        sum.missing += total[b].missing;
        sum.leverage += total[b].leverage;
        sum.variance += total[b].variance;
        if (total[b].missing > 0)
            strata += total[b].variance * stratum_ratio(total, b);
    }
    struct estimates found;
    found.by_leverage = sum.leverage / sum.missing * sum.relative / sum.hidden;
    found.by_distance = strata / sum.missing;
    found.by_variance = sum.variance / sum.missing * sum.shaped_square / sum.shaped_expected;
    found.all = ((announcing->by_distance ? found.by_distance : found.by_leverage) + found.by_variance) / 2;
    return found;
}

static double draw_at(const void *draws, uint64_t k)
{
    return ((const double *)draws)[k];
}

static void sensors_draw(struct draw *draw)
{
    uint32_t sensors = draw->announcing->sensors;
    memset(draw->times, 0, sensors * sizeof *draw->times);
    for (uint32_t s = 0; s < sensors; s++) {
        draw->drawn[s] = (uint32_t)random_below(&draw->random, sensors);
        draw->times[draw->drawn[s]]++;
    }
}

/* The sum of squared errors over the unseen cells of a stratum if those of every sensor had errors like the hidden ones
   of the sensor drawn with it; of another drawn one where that has too few there; where none has enough, of the nearest
   strata together. */
static double stratum_draw(struct draw *draw, const struct sums total[JUDGE_BINS], size_t b)
{
    const struct announcing *announcing = draw->announcing;
    double square = 0;
    uint32_t able = 0;
    for (uint32_t s = 0; s < announcing->sensors; s++)
        if (announcing->sums[(size_t)draw->drawn[s] * announcing->strata + b].hidden >= STRATUM_LEAST)
            draw->able[able++] = draw->drawn[s];
    for (uint32_t s = 0; s < announcing->sensors; s++) {
        const struct sums *own = &announcing->sums[(size_t)s * announcing->strata + b];
        const struct sums *other = &announcing->sums[(size_t)draw->drawn[s] * announcing->strata + b];
        if (own->missing == 0)
            continue;
        if (able > 0 && other->hidden < STRATUM_LEAST) {
            uint32_t stands = draw->able[random_below(&draw->random, able)];
            other = &announcing->sums[(size_t)stands * announcing->strata + b];
        }
        square += own->variance * (able > 0 ? other->square / other->expected : stratum_ratio(total, b));
    }
    return square;
}

/* One draw, with random numbers of its own. */
static void truth_draw(void *job, size_t number, size_t worker)
{
    const struct announcing *announcing = job;
    uint32_t *room = announcing->room + worker * team_room(3 * (size_t)announcing->sensors, sizeof(uint32_t));
    struct draw draw = {.announcing = announcing,
                        .drawn = room,
                        .times = room + announcing->sensors,
                        .able = room + 2 * (size_t)announcing->sensors,
                        .random = random_open(announcing->seed, RANDOM_FOLD, 0x90000000u + (uint32_t)number)};
    struct sums total[JUDGE_BINS];
    double square = 0, missing = 0;
    sensors_draw(&draw);
    sums_add(announcing, draw.times, total);
    for (size_t b = 0; b < JUDGE_BINS; b++) {
        square += total[b].missing > 0 ? stratum_draw(&draw, total, b) : 0;
        missing += total[b].missing;
    }
    sensors_draw(&draw);
    sums_add(announcing, draw.times, total);
    announcing->draws[number] = square / missing * announcing->announced / estimate(announcing, total).all;
}

static fescue_status band_find(fescue_context *context, struct announcing *announcing, struct judgement *judgement)
{
    fescue_status status;
    uint32_t sensors = announcing->sensors;
    double draws[DRAWS];
    uint64_t count = 0;
    TRY(TAKE(context, team_workers(context) * team_room(3 * (size_t)sensors, sizeof(uint32_t)), &announcing->room));
    size_t most = (size_t)fmin(DRAWS, fmax(DRAWS_LEAST, drawn_most / sensors));
    announcing->draws = draws;
    team_run(context, most, truth_draw, announcing);
    for (size_t d = 0; d < most; d++)
        if (isfinite(draws[d]))
            draws[count++] = sqrt(draws[d]);
    if (2 * count >= (uint64_t)most && sensors > 1) {
        judgement->rmse_low = fmin(order_pick(draw_at, draws, count, count / 20), judgement->rmse);
        judgement->rmse_high = fmax(order_pick(draw_at, draws, count, count - 1 - count / 20), judgement->rmse);
    }
done:
    GIVE(context, &announcing->room);
    return status;
}

static double rmse_where(const struct judged *pool, bool is_shaped)
{
    double sum = 0, count = 0;
    for (uint64_t c = 0; c < pool->count; c++)
        if (((pool->at[c].marks & STANDING_SHAPED) != 0) == is_shaped) {
            sum += pool->at[c].weight * pool->square[c];
            count += pool->at[c].weight;
        }
    return count > 0 ? sqrt(sum / count) : NAN;
}

/* Mean |error| over the unseen cells: sizes over their standard deviations, times those. */
static double mae_find(const struct judgement *judgement, const struct judged *pool, const struct judged *missing)
{
    double size = 0, deviation = 0;
    for (uint64_t c = 0; c < pool->count; c++)
        size += sqrt(pool->square[c] / variance_at(&judgement->variance, &pool->at[c]));
    for (uint64_t c = 0; c < missing->count; c++)
        deviation += sqrt(variance_at(&judgement->variance, &missing->at[c]));
    return size / (double)pool->count * deviation / (double)missing->count;
}

fescue_status announce(fescue_context *context, const struct judged *pool, const struct judged *speaking,
                       const struct judged *missing, const struct judge_request *request, struct judgement *judgement)
{
    fescue_status status;
    uint64_t shaped = 0;
    struct announcing announcing = {.judgement = judgement, .by_distance = judgement->variance.has_distance};
    struct sums total[JUDGE_BINS];
    for (uint64_t c = 0; c < speaking->count; c++)
        shaped += (speaking->at[c].marks & STANDING_SHAPED) != 0;
    announcing.by_shape = shaped >= SHAPED_LEAST;
    announcing.strata = announcing.by_distance ? JUDGE_BINS : 1;
    announcing.sensors = judgement->sensors_are_rows ? request->cells->rows : request->cells->columns;
    TRY(TAKE(context, announcing.sensors * announcing.strata, &announcing.sums));
    judgement->scattered_rmse = rmse_where(pool, false);
    judgement->shaped_rmse = rmse_where(pool, true);
    sums_fill(&announcing, speaking, true);
    sums_fill(&announcing, missing, false);
    sums_add(&announcing, NULL, total);
    struct estimates found = estimate(&announcing, total);
    judgement->by_leverage = sqrt(found.by_leverage);
    judgement->by_distance = announcing.by_distance ? sqrt(found.by_distance) : NAN;
    judgement->by_variance = sqrt(found.by_variance);
    judgement->rmse = sqrt(found.all);
    judgement->mae = mae_find(judgement, speaking, missing);
    announcing.seed = (uint64_t)request->options->seed;
    announcing.announced = found.all;
    TRY(band_find(context, &announcing, judgement));
done:
    GIVE(context, &announcing.sums);
    return status;
}
