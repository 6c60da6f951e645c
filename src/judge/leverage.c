/* SPDX-License-Identifier: MIT
 *
 * The leverage of an unseen cell: how much of the noise goes into its estimate. With the factors of the columns given,
 * the coefficients of row i solve a ridge system, and those of column j likewise,
 *
 *     g_j = (v_j, 1)     A_i = D + sum over seen j of g_j g_j'      of row i, whose coefficients are (u_i S, a_i)
 *     f_i = (u_i, 1)     B_j = E + sum over seen i of f_i f_i'      of column j, with (v_j S, b_j)
 *
 *     lev_ij = g_j' A_i^-1 g_j + f_i' B_j^-1 f_i
 *
 * so that noise * lev is, to first order, the variance of the estimate, and noise * (1 + lev) that of the error against
 * a reading (the delta method for a bilinear model; the two parts are independent to that order).
 *
 *     symbol   what it is
 *     w        the cell's weight, where cells have one: every g g' and f f' counts w times
 *     U, V, S  the model's low-rank part, orthonormal U and V
 *     a, b     effects of rows and columns; without them their regressor is 0
 *     D, E     diagonal: a common ridge lambda on the components where one was chosen; where each component is shrunk
 * by its own size, noise over the component's mean square: noise m / s_k^2 for rows and noise n / s_k^2 for columns
 * (the ratio of variances of a normal prior); for the effects their own ridges
 *
 * A line without cells has the prior alone, which for a learnt ridge is the component's spread over the noise: the
 * error of saying the mean.
 *
 * The inverses are kept packed. Where they would take more than `most_bytes`, a system is taken to be what it is for
 * regressors spread evenly, (r + 1) / (cells of the line + 1) a side.
 *
 * Cost: cells * (r+1)^2 / 2 a side, (m + n)(r+1)^3 / 2, and 2 (r+1)^2 a question. Lines are parallel, eight at a time,
 * and each writes its own place.
 */
#include "judge/judgement.h"

#include <math.h>
#include <string.h>

static const double most_bytes = 4e8;

struct levering {
    const struct half *half;
    const struct model *model;
    struct matrix other; /* factors of the positions */
    bool has_effect;
    const double *ridge; /* of the system, size numbers */
    const struct batch_kernel *kernel;
    size_t size, stride;
    double *inverse, *room;
};

/* Cells whose regressors are set side by side. */
enum { TOGETHER = 32 };

/* What a worker has: eight systems side by side, their inverses, right sides that are not used; eight packed lines; one
   system in rows of a multiple of eight; regressors of cells, as they are and weighted. */
struct levering_room {
    double *system, *inverse, *side, *line, *square, *regressor, *weighted;
};

static size_t line_size(size_t size)
{
    return (packed_size(size) + 7) / 8 * 8;
}

static size_t room_size(size_t size)
{
    return 2 * batch_size(packed_size(size)) + batch_size(size) + BATCH_LANES * line_size(size) +
           (gram_rows(size) + 2 * TOGETHER) * factor_stride(size);
}

static struct levering_room room_carve(double *at, size_t size)
{
    struct levering_room room = {.system = at};
    room.inverse = room.system + batch_size(packed_size(size));
    room.side = room.inverse + batch_size(packed_size(size));
    room.line = room.side + batch_size(size);
    room.square = room.line + BATCH_LANES * line_size(size);
    room.regressor = room.square + gram_rows(size) * factor_stride(size);
    room.weighted = room.regressor + TOGETHER * factor_stride(size);
    return room;
}

/* The regressors of cells c .. and, where these have weights, the same times their weight. Factors of a stretch behind
   them are asked for. */
static void regressors_take(const struct levering *levering, uint64_t c, size_t count, const struct levering_room *room)
{
    const struct half *half = levering->half;
    size_t size = levering->size, stride = factor_stride(size);
    uint64_t last = half->start[half->lines];
    for (size_t t = 0; t < count; t++) {
        double *to = room->regressor + t * stride;
        const double *factor = levering->other.data + half->across[c + t] * levering->other.stride;
        for (size_t k = 0; k + 1 < size; k += 8)
            memcpy(to + k, factor + k, 8 * sizeof *to);
        to[size - 1] = levering->has_effect ? 1 : 0;
        for (size_t k = 0; half->weight != NULL && k < size; k++)
            room->weighted[t * stride + k] = (double)half->weight[c + t] * to[k];
        const double *ahead = levering->other.data;
        if (c + t + TOGETHER < last)
            ahead += half->across[c + t + TOGETHER] * levering->other.stride;
        for (size_t k = 0; k + 1 < size; k += 8)
            __builtin_prefetch(ahead + k);
    }
}

/* The system of a line into room->square. */
static void system_write(const struct levering *levering, uint32_t line, const struct levering_room *room)
{
    const struct half *half = levering->half;
    size_t size = levering->size, stride = factor_stride(size);
    memset(room->square, 0, gram_rows(size) * stride * sizeof *room->square);
    for (uint64_t c = half->start[line]; c < half->start[line + 1]; c += TOGETHER) {
        uint64_t left = half->start[line + 1] - c;
        size_t count = left < TOGETHER ? (size_t)left : TOGETHER;
        regressors_take(levering, c, count, room);
        gram_add(levering->kernel, half->weight != NULL ? room->weighted : room->regressor, room->regressor, count,
                 size, room->square);
    }
    for (size_t k = 0; k < size; k++)
        room->square[k * stride + k] += levering->ridge[k];
}

/* The same, packed. */
static void system_pack(const double *square, size_t size, double *packed, size_t step)
{
    for (size_t k = 0, at = 0; k < size; k++)
        for (size_t l = 0; l <= k; l++, at++)
            packed[at * step] = square[k * factor_stride(size) + l];
}

static void batch_invert(void *job, size_t batch, size_t worker)
{
    struct levering *levering = job;
    size_t size = levering->size, packed = packed_size(size), first = batch * BATCH_LANES;
    size_t left = levering->half->lines - first, count = left < BATCH_LANES ? left : BATCH_LANES;
    struct levering_room room = room_carve(levering->room + worker * levering->stride, size);
    double *to[BATCH_LANES];
    memset(room.side, 0, batch_size(size) * sizeof *room.side);
    for (size_t lane = 0; lane < BATCH_LANES; lane++) {
        to[lane] = room.line + lane * line_size(size);
        if (lane < count) /* lanes without a line have the last one's system */
            system_write(levering, (uint32_t)(first + lane), &room);
        system_pack(room.square, size, room.system + lane, BATCH_LANES);
    }
    unsigned broken = packed_batch_solve(levering->kernel, room.system, size, room.side, room.inverse);
    packed_batch_unpack(levering->kernel, room.inverse, packed, to);
    for (size_t lane = 0; lane < count; lane++) {
        double *inverse = levering->inverse + (first + lane) * packed;
        if (broken >> lane & 1) { /* again, and lifted */
            system_write(levering, (uint32_t)(first + lane), &room);
            system_pack(room.square, size, room.system, 1);
            packed_cholesky(room.system, size);
            packed_inverse(room.system, size, inverse);
        } else {
            memcpy(inverse, to[lane], packed * sizeof *inverse);
        }
    }
}

/* Ridges of the systems of one side, whose lines are `lines`. */
static void ridges_set(const struct model *model, double lines, double noise, double lambda, double effect,
                       double *ridge)
{
    static const double little = 1e-3; /* of the learnt ridge: holds in place what nothing else does */
    size_t rank = model->low_rank.rank;
    for (size_t k = 0; k < rank; k++) {
        double size = model->low_rank.spectrum[k], own = size > 0 ? noise * lines / (size * size) : 1;
        ridge[k] = fmax(isnan(lambda) ? own : fmax(lambda, little * own), 1e-300);
    }
    ridge[rank] = isfinite(effect) && effect > 0 ? effect : 1;
}

static fescue_status side_invert(fescue_context *context, struct levering *levering, double *ridge)
{
    size_t packed = packed_size(levering->size);
    fescue_status status;
    levering->ridge = ridge;
    levering->stride = team_room(room_size(levering->size), sizeof(double));
    levering->kernel = batch_kernel_choose();
    TRY(TAKE(context, team_workers(context) * levering->stride, &levering->room));
    TRY(TAKE(context, packed * levering->half->lines, &levering->inverse));
    team_run(context, (levering->half->lines + BATCH_LANES - 1) / BATCH_LANES, batch_invert, levering);
done:
    GIVE(context, &levering->room);
    if (status != FESCUE_OK)
        GIVE(context, &levering->inverse);
    return status;
}

static fescue_status counts_take(fescue_context *context, const struct half *half, uint32_t **count)
{
    fescue_status status = TAKE(context, half->lines, count);
    for (uint32_t i = 0; status == FESCUE_OK && i < half->lines; i++)
        (*count)[i] = (uint32_t)(half->start[i + 1] - half->start[i]);
    return status;
}

fescue_status leverage_create(fescue_context *context, const struct cells *cells, const struct model *model,
                              double noise, double lambda, struct leverage *leverage)
{
    fescue_status status;
    double *ridge = NULL;
    size_t size = model->low_rank.rank + 1;
    const struct offsets *offsets = &model->offsets;
    bool both = offsets->kind == FESCUE_OFFSETS_BOTH;
    *leverage = (struct leverage){.size = size, .model = model, .rows = cells->rows, .columns = cells->columns};
    leverage->has_rows = both || offsets->kind == FESCUE_OFFSETS_ROWS;
    leverage->has_columns = both || offsets->kind == FESCUE_OFFSETS_COLUMNS;
    TRY(counts_take(context, &cells->by_row, &leverage->row_count));
    TRY(counts_take(context, &cells->by_column, &leverage->column_count));
    double lines = (double)cells->rows + (double)cells->columns;
    if (lines * (double)packed_size(size) * sizeof(double) > most_bytes || size > PACKED_INVERSE_MOST)
        return FESCUE_OK;
    TRY(TAKE(context, size, &ridge));
    struct levering rows = {
        .half = &cells->by_row, .model = model, .other = model->low_rank.right, .has_effect = leverage->has_rows};
    rows.size = size;
    ridges_set(model, cells->rows, noise, lambda, offsets->row_ridge, ridge);
    TRY(side_invert(context, &rows, ridge));
    leverage->row_inverse = rows.inverse;
    struct levering columns = {
        .half = &cells->by_column, .model = model, .other = model->low_rank.left, .has_effect = leverage->has_columns};
    columns.size = size;
    ridges_set(model, cells->columns, noise, lambda, offsets->column_ridge, ridge);
    TRY(side_invert(context, &columns, ridge));
    leverage->column_inverse = columns.inverse;
done:
    GIVE(context, &ridge);
    if (status != FESCUE_OK)
        leverage_free(context, leverage);
    return status;
}

enum { SUMS = 4 }; /* that do not wait for one another */

/* g' A g for a packed symmetric A; the last regressor is `last`. */
NUMERIC_VERSIONS
static double form_value(const double *packed, const double *factor, size_t size, double last)
{
    double sum = 0;
    for (size_t k = 0; k < size; k++) {
        double at_k = k + 1 < size ? factor[k] : last, row[SUMS] = {0}, rest = 0;
        size_t l = 0;
        for (; l + SUMS <= k; l += SUMS)
            for (size_t t = 0; t < SUMS; t++)
                row[t] += packed[l + t] * factor[l + t];
        for (; l < k; l++)
            rest += packed[l] * factor[l];
        sum += at_k * (2 * ((row[0] + row[2]) + (row[1] + row[3]) + rest) + packed[k] * at_k);
        packed += k + 1;
    }
    return sum;
}

struct leverage_parts leverage_parts_at(const struct leverage *leverage, uint32_t row, uint32_t column)
{
    struct leverage_parts parts = {(double)leverage->size / (leverage->row_count[row] + 1.),
                                   (double)leverage->size / (leverage->column_count[column] + 1.)};
    size_t size = leverage->size, packed = packed_size(size);
    const struct low_rank *point = &leverage->model->low_rank;
    if (leverage->row_inverse == NULL || leverage->column_inverse == NULL)
        return parts;
    parts.row = form_value(leverage->row_inverse + row * packed, point->right.data + column * point->right.stride, size,
                           leverage->has_rows ? 1 : 0);
    parts.column = form_value(leverage->column_inverse + column * packed, point->left.data + row * point->left.stride,
                              size, leverage->has_columns ? 1 : 0);
    return parts;
}

void leverage_prefetch(const struct leverage *leverage, uint32_t row, uint32_t column)
{
    size_t packed = packed_size(leverage->size);
    if (leverage->row_inverse == NULL || leverage->column_inverse == NULL)
        return;
    for (size_t k = 0; k < packed; k += 8) {
        __builtin_prefetch(leverage->row_inverse + row * packed + k);
        __builtin_prefetch(leverage->column_inverse + column * packed + k);
    }
}

double leverage_at(const struct leverage *leverage, uint32_t row, uint32_t column)
{
    struct leverage_parts parts = leverage_parts_at(leverage, row, column);
    return parts.row + parts.column;
}

void leverage_free(fescue_context *context, struct leverage *leverage)
{
    GIVE(context, &leverage->row_inverse);
    GIVE(context, &leverage->column_inverse);
    GIVE(context, &leverage->row_count);
    GIVE(context, &leverage->column_count);
}
