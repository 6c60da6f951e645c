/* SPDX-License-Identifier: MIT
 *
 * Sums of second moments over the seen cells of lines, for fits that carry the uncertainty of both sides.
 *
 * Each position j of a half brings the second moment M_j = E[g_j g_j'] of d regressors g_j, one of which is the
 * constant 1. It is kept as a packed lower triangle, row by row (packed.c), so d(d+1)/2 numbers, padded. Row `one` of
 * the triangle, that of the constant, holds the mean E[g_j] itself: a position needs nothing but its packed moment. For
 * line i with seen positions j, values z_ij and a weight c_ij, that of the position times that of the cell, the gather
 * gives
 *
 *     S = sum_j c_ij M_j        t = sum_j c_ij z_ij E[g_j]        q = sum_j c_ij z_ij^2
 *
 * from which the posterior of the line, and the expected squared error of its cells, q - 2 h't + <E[hh'], S>, follow
 * without another pass over the cells.
 *
 * Cost: d(d+1)/2 + 2d additions and multiplications a cell, and as many numbers to read, so that what counts is where
 * they are read from. Eight lines go together. Where they see a good share of the positions, they go through these in
 * steps of 48 and through the triangle in tiles of 64 numbers: one tile of 48 positions is read from afar once, and
 * from the nearest cache for each line that has a cell there; its sum stays in registers. Where lines see few
 * positions there is nothing to share, and each goes through its cells alone, asking for those 8 cells ahead.
 *
 * A line that sees most positions takes from the sum over all of them, which is made once for all lines, the moments of
 * those that it does not see: few where tables are those of stations that seldom fail. Only t needs every cell, and d
 * numbers of each.
 *
 * In halves (moments_halves.c) there is half as much to read, and each line goes through its cells alone, up to 176
 * numbers at once, whose sums stay in registers where there are enough of them, asking for those 16 cells ahead.
 *
 * Either way the sums of a line run over its cells in order: the bits depend on the instruction set only in that some
 * round products before they are added, and on the number of threads not at all.
 */
#include "numeric/batch_internal.h"

#include <string.h>

enum { TILE_NUMBERS = 64, PREFETCH_EACH = BATCH_STRETCH / BATCH_LANES };

/* Lines that see a quarter of the positions share each of these between two of eight. */
enum { SHARED_FROM = 4 };

/* Of all positions' halves: what the third cache surely holds. */
enum { FAR_BYTES = 16 << 20 };

/* Where what is left has less than this share of the weight of all, too many digits go. */
#define FULL_WEIGHT 1e-3
enum { TOTAL_PIECES = 32 };

struct gather {
    const struct moments *moments;
    const struct half *half;
    enum fescue_precision precision;
    size_t first, count;            /* lines */
    double *second, *target, *tail; /* of each line: sums as they grow; tail is target behind `one` */
    double *square;
    size_t stride, target_stride; /* of a line of these */
    bool full[BATCH_LANES];       /* lines that take from the total what they do not see */
};

/* Whole blocks, and two of them at least. */
static size_t target_stride(size_t regressors)
{
    size_t whole = (regressors + BATCH_BLOCK - 1) / BATCH_BLOCK * BATCH_BLOCK;
    return whole < 2 * BATCH_BLOCK ? 2 * BATCH_BLOCK : whole;
}

static size_t sum_stride(size_t regressors)
{
    size_t whole = 2 * moments_words(regressors);
    return whole < moments_stride(regressors) ? moments_stride(regressors) : whole;
}

size_t moments_batch_size(size_t regressors)
{
    return BATCH_LANES * (2 * sum_stride(regressors) + 3 * target_stride(regressors) + 1);
}

struct moments_batch moments_batch_carve(double *at, size_t regressors)
{
    struct moments_batch batch = {.second = at};
    batch.target = batch.second + BATCH_LANES * sum_stride(regressors);
    batch.square = batch.target + BATCH_LANES * target_stride(regressors);
    batch.work = batch.square + BATCH_LANES;
    return batch;
}

static double weight_of(const struct moments *moments, size_t position)
{
    return moments->weight != NULL ? moments->weight[position] : 1;
}

/* From a position to the next, in what is gathered from. */
static size_t moments_step(const struct moments *moments)
{
    return moments->halves != NULL ? moments_words(moments->regressors) : moments->stride;
}

/* Cells k .. of a line, up to position `behind` or as many as there is room for; returns the first that is left. */
static uint64_t stretch_take(const struct gather *gather, uint64_t k, uint64_t end, uint64_t behind, double *square,
                             struct batch_stretch *stretch)
{
    const struct moments *moments = gather->moments;
    const struct half *half = gather->half;
    const uint32_t *across = half->across + k;
    size_t most = end - k < BATCH_STRETCH ? end - k : BATCH_STRETCH, count = 0;
    double sum[2] = {0};
    size_t step = moments_step(moments);
    for (; count < most && across[count] < behind; count++) {
        uint32_t position = across[count];
        double weight = weight_of(moments, position) * (half->weight != NULL ? (double)half->weight[k + count] : 1);
        double z = gather->precision == FESCUE_SINGLE ? (double)((const float *)half->value)[k + count]
                                                      : ((const double *)half->value)[k + count];
        stretch->offset[count] = position * step;
        stretch->factor[count] = weight;
        stretch->pull[count] = weight * z;
        sum[count % 2] += weight * z * z;
    }
    *square += sum[0] + sum[1];
    stretch->count = count;
    return k + count;
}

/* t += sum of c z E[g]: the mean is row `one` of the triangle and, below its diagonal, the column of that number. */
static void stretch_target(const struct gather *gather, const struct batch_stretch *stretch, size_t lane)
{
    const struct moments *moments = gather->moments;
    size_t one = moments->one, stride = gather->target_stride;
    moments->kernel->add(moments->data + packed_size(one), stretch, stretch->pull, one + 1, false,
                         gather->target + lane * stride);
    for (size_t k = one + 1; k < moments->regressors; k++) {
        const double *from = moments->data + packed_size(k) + one;
        double sum[2] = {0};
        for (size_t c = 0; c < stretch->count; c++)
            sum[c % 2] += stretch->pull[c] * from[stretch->offset[c]];
        gather->tail[lane * stride + k] += sum[0] + sum[1];
    }
}

static void tile_add(const struct gather *gather, const struct batch_stretch *stretch, size_t lane, size_t at)
{
    const struct moments *moments = gather->moments;
    size_t left = packed_size(moments->regressors) - at;
    moments->kernel->add(moments->data + at, stretch, stretch->factor, left < TILE_NUMBERS ? left : TILE_NUMBERS, false,
                         gather->second + lane * gather->stride + at);
}

/* A tile of the next few positions, which the lines share the asking for. */
static void tile_prefetch(const struct gather *gather, size_t position, size_t at)
{
    const struct moments *moments = gather->moments;
    size_t last = position + PREFETCH_EACH < gather->half->length ? position + PREFETCH_EACH : gather->half->length;
    for (; position < last; position++)
        for (size_t n = 0; n < TILE_NUMBERS; n += 8)
            __builtin_prefetch(moments->data + position * moments->stride + at + n, 0, 2);
}

static void lines_gather_together(const struct gather *gather)
{
    const struct half *half = gather->half;
    struct batch_stretch stretch[BATCH_LANES];
    uint64_t k[BATCH_LANES];
    for (size_t lane = 0; lane < gather->count; lane++)
        k[lane] = half->start[gather->first + lane + gather->full[lane]]; /* no cell of a line that is done */
    for (size_t begin = 0; begin < half->length; begin += BATCH_STRETCH) {
        for (size_t lane = 0; lane < gather->count; lane++)
            k[lane] = stretch_take(gather, k[lane], half->start[gather->first + lane + 1], begin + BATCH_STRETCH,
                                   gather->square + lane, &stretch[lane]);
        for (size_t at = 0; at < packed_size(gather->moments->regressors); at += TILE_NUMBERS)
            for (size_t lane = 0; lane < gather->count; lane++) {
                tile_prefetch(gather, begin + BATCH_STRETCH + lane * PREFETCH_EACH, at);
                tile_add(gather, &stretch[lane], lane, at);
            }
        for (size_t lane = 0; lane < gather->count; lane++)
            stretch_target(gather, &stretch[lane], lane);
    }
}

/* Where the cells that come behind a stretch lie, up to the last one of the half. */
static void stretch_look_ahead(const struct gather *gather, uint64_t k, struct batch_stretch *stretch)
{
    const struct half *half = gather->half;
    uint64_t cells = half->start[half->lines];
    size_t step = moments_step(gather->moments);
    for (size_t c = 0; c < BATCH_AHEAD; c++)
        stretch->offset[stretch->count + c] = k + c < cells ? half->across[k + c] * step : stretch->offset[0];
}

/* A line by itself; of one that takes from the total what it does not see the target alone. */
static void line_gather(const struct gather *gather, size_t lane)
{
    const struct moments *moments = gather->moments;
    const struct half *half = gather->half;
    size_t d = moments->regressors, words = moments_words(d);
    struct batch_stretch stretch = {.is_far = half->length * words * sizeof(uint64_t) > FAR_BYTES};
    uint64_t k = half->start[gather->first + lane], end = half->start[gather->first + lane + 1];
    double *second = gather->full[lane] ? NULL : gather->second + lane * gather->stride;
    while (k < end) {
        k = stretch_take(gather, k, end, half->length, gather->square + lane, &stretch);
        stretch_look_ahead(gather, k, &stretch);
        if (moments->halves != NULL) {
            moments->kernel->add_halves(moments->halves, &stretch, words / 8, d, second,
                                        gather->target + lane * gather->target_stride);
            continue;
        }
        if (second != NULL)
            moments->kernel->add(moments->data, &stretch, stretch.factor, packed_size(d), true, second);
        stretch_target(gather, &stretch, lane);
    }
}

/* ---- lines that see most positions -------------------------------------------------------------------------------
 */

/* sum += factor times moment, of whole triangles. */
static void stretch_sum(const struct moments *moments, struct batch_stretch *stretch, double *sum)
{
    size_t d = moments->regressors, count = stretch->count;
    if (count == 0)
        return;
    for (size_t c = count; c < count + BATCH_AHEAD; c++)
        stretch->offset[c] = stretch->offset[count - 1];
    if (moments->halves != NULL)
        moments->kernel->add_halves(moments->halves, stretch, moments_words(d) / 8, d, sum, NULL);
    else
        moments->kernel->add(moments->data, stretch, stretch->factor, packed_size(d), true, sum);
    stretch->count = 0;
}

static void position_sum(const struct moments *moments, size_t position, double factor, struct batch_stretch *stretch,
                         double *sum)
{
    stretch->offset[stretch->count] = position * moments_step(moments);
    stretch->factor[stretch->count++] = factor;
    if (stretch->count == BATCH_STRETCH)
        stretch_sum(moments, stretch, sum);
}

/* S = total - what is not seen. */
static void line_lack(const struct gather *gather, size_t lane)
{
    const struct moments *moments = gather->moments;
    const struct half *half = gather->half;
    struct batch_stretch stretch = {0};
    double *second = gather->second + lane * gather->stride;
    memcpy(second, moments->total, gather->stride * sizeof *second);
    size_t position = 0;
    for (uint64_t k = half->start[gather->first + lane], end = half->start[gather->first + lane + 1]; k <= end; k++) {
        for (size_t seen = k < end ? half->across[k] : half->length; position < seen; position++)
            position_sum(moments, position, -weight_of(moments, position), &stretch, second);
        position++;
    }
    stretch_sum(moments, &stretch, second);
}

/* Whether that is less work, and leaves enough of the total. */
static bool line_is_full(const struct moments *moments, const struct half *half, size_t line)
{
    size_t d = moments->regressors, blocks = moments_words(d) / 8, mean = (d + BATCH_BLOCK - 1) / BATCH_BLOCK;
    uint64_t begin = half->start[line], end = half->start[line + 1], seen = end - begin;
    if (moments->total == NULL || 2 * seen <= half->length || blocks * (2 * seen - half->length) <= 2 * mean * seen)
        return false;
    double weight = 0;
    for (uint64_t k = begin; moments->weight != NULL && k < end; k++)
        weight += moments->weight[half->across[k]];
    size_t one = moments->halves != NULL ? moments->one : packed_size(moments->one) + moments->one;
    return moments->weight == NULL || weight >= FULL_WEIGHT * moments->total[one];
}

size_t moments_total_size(size_t regressors)
{
    return (1 + TOTAL_PIECES) * sum_stride(regressors);
}

struct total_job {
    const struct moments *moments;
    size_t positions, stride;
    double *partial;
};

static void total_piece(void *argument, size_t piece, size_t worker)
{
    const struct total_job *job = argument;
    struct batch_stretch stretch = {0};
    double *sum = job->partial + piece * job->stride;
    (void)worker;
    memset(sum, 0, job->stride * sizeof *sum);
    size_t last = job->positions * (piece + 1) / TOTAL_PIECES;
    for (size_t position = job->positions * piece / TOTAL_PIECES; position < last; position++)
        position_sum(job->moments, position, weight_of(job->moments, position), &stretch, sum);
    stretch_sum(job->moments, &stretch, sum);
}

void moments_total(fescue_context *context, struct moments *moments, const struct half *half, double *room)
{
    size_t stride = sum_stride(moments->regressors);
    struct total_job job = {moments, half->length, stride, room + stride};
    uint64_t cells = half->start[half->lines];
    moments->total = NULL;
    if (half->weight != NULL || 2 * cells <= (uint64_t)half->lines * half->length)
        return;
    team_run(context, TOTAL_PIECES, total_piece, &job);
    team_sum(context, job.partial, TOTAL_PIECES, stride, room);
    moments->total = room;
}

/* ---- gathers -----------------------------------------------------------------------------------------------------
 */

static void lines_gather_halves(const struct gather *gather)
{
    const struct moments *moments = gather->moments;
    for (size_t lane = 0; lane < gather->count; lane++) {
        if (gather->full[lane])
            line_lack(gather, lane);
        line_gather(gather, lane);
        moments_restore(moments->regressors, moments->one, gather->tail, gather->second + lane * gather->stride);
    }
}

static void lines_gather(const struct gather *gather)
{
    const struct moments *moments = gather->moments;
    const struct half *half = gather->half;
    uint64_t cells = half->start[gather->first + gather->count] - half->start[gather->first];
    size_t behind = moments->one + 1, stride = gather->target_stride;
    bool together = cells * SHARED_FROM >= (uint64_t)gather->count * half->length;
    for (size_t lane = 0; lane < gather->count; lane++)
        if (gather->full[lane]) {
            line_lack(gather, lane);
            line_gather(gather, lane);
            together = true;
        }
    if (together)
        lines_gather_together(gather);
    else
        for (size_t lane = 0; lane < gather->count; lane++)
            line_gather(gather, lane);
    for (size_t lane = 0; lane < BATCH_LANES; lane++)
        memcpy(gather->target + lane * stride + behind, gather->tail + lane * stride + behind,
               (moments->regressors - behind) * sizeof *gather->target);
}

void moments_gather(const struct moments *moments, const struct half *half, enum fescue_precision precision,
                    size_t first, const struct moments_batch *out)
{
    size_t d = moments->regressors, left = half->lines - first;
    struct gather gather = {.moments = moments, .half = half, .precision = precision, .first = first};
    gather.count = left < BATCH_LANES ? left : BATCH_LANES;
    gather.stride = sum_stride(d);
    gather.target_stride = target_stride(d);
    gather.second = out->work;
    gather.target = gather.second + BATCH_LANES * gather.stride;
    gather.tail = gather.target + BATCH_LANES * gather.target_stride;
    gather.square = out->square;
    memset(out->work, 0, BATCH_LANES * (gather.stride + 2 * gather.target_stride) * sizeof *out->work);
    memset(out->square, 0, BATCH_LANES * sizeof *out->square);
    for (size_t lane = 0; lane < gather.count; lane++)
        gather.full[lane] = line_is_full(moments, half, first + lane);
    if (moments->halves != NULL)
        lines_gather_halves(&gather);
    else
        lines_gather(&gather);
    moments->kernel->pack(gather.second, gather.stride, packed_size(d), out->second);
    moments->kernel->pack(gather.target, gather.target_stride, d, out->target);
}
