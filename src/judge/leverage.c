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
 * Cost: cells * (r+1)^2 / 2 a side, (m + n)(r+1)^3 / 2, and 2 (r+1)^2 a question. Lines are parallel, each writes its
 * own place.
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
    size_t size, stride;
    double *inverse, *room;
};

/* A line's own regressors are what the other side's systems see: its factor and 1 for their effect. */
static void regressors_set(struct matrix factor, size_t line, size_t size, bool has_effect, double *regressor)
{
    memcpy(regressor, factor.data + line * factor.stride, (size - 1) * sizeof *regressor);
    regressor[size - 1] = has_effect ? 1 : 0;
}

static void system_add(const double *regressor, double weight, size_t size, double *system)
{
    for (size_t k = 0; k < size; k++)
        for (size_t l = 0; l <= k; l++)
            *system++ += weight * regressor[k] * regressor[l];
}

static void line_invert(const struct levering *levering, uint32_t line, double *room)
{
    size_t size = levering->size, packed = packed_size(size);
    double *system = room, *regressor = room + packed;
    memset(system, 0, packed * sizeof *system);
    for (size_t k = 0; k < size; k++)
        system[packed_size(k + 1) - 1] = levering->ridge[k];
    for (uint64_t c = levering->half->start[line]; c < levering->half->start[line + 1]; c++) {
        regressors_set(levering->other, levering->half->across[c], size, levering->has_effect, regressor);
        system_add(regressor, levering->half->weight != NULL ? (double)levering->half->weight[c] : 1, size, system);
    }
    packed_cholesky(system, size);
    packed_inverse(system, size, levering->inverse + line * packed);
}

static void block_invert(void *job, size_t block, size_t worker)
{
    struct levering *levering = job;
    for (uint32_t line = levering->half->block[block]; line < levering->half->block[block + 1]; line++)
        line_invert(levering, line, levering->room + worker * levering->stride);
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
    levering->stride = (packed + levering->size + 7) / 8 * 8;
    TRY(TAKE(context, team_workers(context) * levering->stride, &levering->room));
    TRY(TAKE(context, packed * levering->half->lines, &levering->inverse));
    team_run(context, levering->half->blocks, block_invert, levering);
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
    struct levering rows = {&cells->by_row, model, model->low_rank.right, leverage->has_rows, NULL, size, 0,
                            NULL,           NULL};
    ridges_set(model, cells->rows, noise, lambda, offsets->row_ridge, ridge);
    TRY(side_invert(context, &rows, ridge));
    leverage->row_inverse = rows.inverse;
    struct levering columns = {
        &cells->by_column, model, model->low_rank.left, leverage->has_columns, NULL, size, 0, NULL, NULL};
    ridges_set(model, cells->columns, noise, lambda, offsets->column_ridge, ridge);
    TRY(side_invert(context, &columns, ridge));
    leverage->column_inverse = columns.inverse;
done:
    GIVE(context, &ridge);
    if (status != FESCUE_OK)
        leverage_free(context, leverage);
    return status;
}

/* g' A g for a packed symmetric A; the last regressor is `last`. */
static double form_value(const double *packed, const double *factor, size_t size, double last)
{
    double sum = 0;
    for (size_t k = 0; k < size; k++) {
        double at_k = k + 1 < size ? factor[k] : last, row = 0;
        for (size_t l = 0; l < k; l++)
            row += packed[l] * factor[l];
        sum += at_k * (2 * row + packed[k] * at_k);
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
