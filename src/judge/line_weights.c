/* SPDX-License-Identifier: MIT
 *
 * How precise a reading of an unseen cell would be: as the seen ones of its row and of its column are. With w_ij the
 * weights of the seen cells (a reading's noise has the variance of one of weight one over w),
 *
 *     log w_ij ~ a_i + b_j      by least squares over the seen cells, lines in turns,      weight = exp(a_i + b_j)
 *
 * which gives back weights that are products of those of rows and columns, and of others the geometric mean about the
 * cell. A line without cells has the mean of its side. Each turn lowers the sum of squares (it is the minimum over one
 * side); where the pattern hangs together well, a few do.
 *
 * O(cells) a turn; sides are parallel, each line writes its own place.
 */
#include "judge/judgement.h"

#include <math.h>

enum { TURNS = 30 };
static const double settled = 1e-9;

struct fitting {
    const struct half *half;
    const double *other;
    double *own;
};

static void block_fit(void *job, size_t block, size_t worker)
{
    struct fitting *fitting = job;
    const struct half *half = fitting->half;
    (void)worker;
    for (uint32_t i = half->block[block]; i < half->block[block + 1]; i++) {
        uint64_t from = half->start[i], to = half->start[i + 1];
        double sum = 0;
        for (uint64_t k = from; k < to; k++)
            sum += log((double)half->weight[k]) - fitting->other[half->across[k]];
        fitting->own[i] = to > from ? sum / (double)(to - from) : NAN;
    }
}

/* Lines without cells get the mean of the others, which is handed back; *moved is the greatest change since `before`.
 */
static void side_close(const struct half *half, double *before, double *own, double *moved)
{
    double sum = 0, count = 0;
    for (uint32_t i = 0; i < half->lines; i++)
        if (!isnan(own[i])) {
            sum += own[i];
            count++;
        }
    for (uint32_t i = 0; i < half->lines; i++) {
        if (isnan(own[i]))
            own[i] = count > 0 ? sum / count : 0;
        *moved = fmax(*moved, fabs(own[i] - before[i]));
        before[i] = own[i];
    }
}

static void side_fit(fescue_context *context, struct fitting *fitting, double *before, double *moved)
{
    team_run(context, fitting->half->blocks, block_fit, fitting);
    side_close(fitting->half, before, fitting->own, moved);
}

fescue_status line_weights_find(fescue_context *context, const struct cells *cells, struct line_weights *weights)
{
    fescue_status status = FESCUE_OK;
    double *row_before = NULL, *column_before = NULL, moved = INFINITY;
    *weights = (struct line_weights){0};
    if (cells->by_row.weight == NULL)
        goto done;
    TRY(TAKE(context, cells->rows, &row_before));
    TRY(TAKE(context, cells->columns, &column_before));
    TRY(TAKE(context, cells->rows, &weights->row));
    TRY(TAKE(context, cells->columns, &weights->column));
    struct fitting rows = {&cells->by_row, weights->column, weights->row};
    struct fitting columns = {&cells->by_column, weights->row, weights->column};
    for (int turn = 0; turn < TURNS && moved > settled; turn++) {
        moved = 0;
        side_fit(context, &rows, row_before, &moved);
        side_fit(context, &columns, column_before, &moved);
    }
done:
    GIVE(context, &row_before);
    GIVE(context, &column_before);
    if (status != FESCUE_OK)
        line_weights_free(context, weights);
    return status;
}

double line_weights_at(const struct line_weights *weights, uint32_t row, uint32_t column)
{
    return weights->row == NULL ? 1 : exp(weights->row[row] + weights->column[column]);
}

void line_weights_free(fescue_context *context, struct line_weights *weights)
{
    GIVE(context, &weights->row);
    GIVE(context, &weights->column);
}
