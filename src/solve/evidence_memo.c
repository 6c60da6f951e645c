/* SPDX-License-Identifier: MIT
 *
 * What the evidence fit leaves in the memo: the state between two rounds, which is its workspace, but for that of
 * the workers, the noise and the trace; and what a finished fit came to.
 */
#include "solve/evidence_internal.h"

#include <string.h>

/* The scalars of a result. */
struct evidence_sums {
    uint64_t rank, trace_count, iterations;
    uint64_t time_cells, time_components; /* of the time part; along which axis it is, the request says */
    int64_t stop, along;
    double objective, rmse, gradient, noise, scale, mean, row_ridge, column_ridge, row_spread, column_spread,
        row_effects, column_effects;
    struct near_part near;
};
enum { RESULT_PARTS = 13 };

static uint64_t bytes_digest(uint64_t digest, const void *bytes, size_t size)
{
    return size > 0 ? memo_digest(digest, bytes, size) : digest;
}

/* The clock, and what the start knows of time. */
static uint64_t time_digest(uint64_t digest, const struct time_axis *axis, const struct time_part *part)
{
    const uint64_t counts[] = {axis != NULL ? (uint64_t)axis->along : 0, axis != NULL ? axis->count : 0,
                               (uint64_t)part->along, part->components};
    digest = memo_digest(digest, counts, sizeof counts);
    if (axis != NULL && axis->along != TIME_NONE)
        digest = bytes_digest(digest, axis->at, axis->count * sizeof *axis->at);
    if (part->along == TIME_NONE)
        return digest;
    digest = bytes_digest(digest, part->law, part->series * sizeof *part->law);
    digest = bytes_digest(digest, part->noise, part->series * sizeof *part->noise);
    return bytes_digest(digest, part->steps_law, part->components * sizeof *part->steps_law);
}

static uint64_t near_digest(uint64_t digest, const struct nearness *near, const struct near_part *part)
{
    const double known[] = {part->is_there, part->components, part->effect};
    digest = memo_digest(digest, known, sizeof known);
    if (near == NULL)
        return digest;
    digest = bytes_digest(digest, near->high, near->count * sizeof *near->high);
    digest = bytes_digest(digest, near->low, near->count * sizeof *near->low);
    return bytes_digest(digest, near->strength, near->count * sizeof *near->strength);
}

uint64_t evidence_digest(const struct cells *cells, const struct evidence_request *request, const struct model *start)
{
    const uint64_t counts[] = {(uint64_t)request->offsets,
                               (uint64_t)request->noise,
                               request->rank,
                               request->is_shrunk,
                               request->seed,
                               request->rounds,
                               cells->count,
                               start->low_rank.rank};
    const double reals[] = {request->noise_start, request->change, request->change_noise, request->change_left,
                            start->offsets.mean};
    uint64_t digest = memo_digest(0, counts, sizeof counts);
    digest = memo_digest(digest, reals, sizeof reals);
    digest = memo_digest(digest, start->offsets.row, start->rows * sizeof(double));
    digest = memo_digest(digest, start->offsets.column, start->columns * sizeof(double));
    if (cells->by_row.weight != NULL)
        digest = bytes_digest(digest, cells->by_row.weight, cells->count * sizeof *cells->by_row.weight);
    digest = time_digest(digest, request->time, &start->time);
    digest = near_digest(digest, request->near, &start->near);
    return low_rank_digest(digest, &start->low_rank);
}

size_t evidence_state(struct evidence *evidence, const struct evidence_request *request, struct evidence_at *at,
                      struct solve_result *result, struct memo_part parts[EVIDENCE_STATE_PARTS])
{
    parts[0] = (struct memo_part){at, sizeof *at};
    parts[1] = (struct memo_part){evidence->arena.base, evidence->state_size};
    parts[2] = (struct memo_part){result->trace, request->rounds * sizeof *result->trace};
    size_t count = 3;
    if (evidence->near != NULL)
        parts[count++] = (struct memo_part){evidence->near->arena.base, evidence->near->arena.reserved};
    if (evidence->time == NULL)
        return count;
    /* The residual has been taken off the targets. */
    struct cells *target = &evidence->problem->target;
    size_t values = target->count * (target->precision == FESCUE_SINGLE ? sizeof(float) : sizeof(double));
    parts[count++] = (struct memo_part){evidence->time->arena.base, evidence->time->state_size};
    parts[count++] = (struct memo_part){target->by_row.value, values};
    parts[count++] = (struct memo_part){target->by_column.value, values};
    return count;
}

void evidence_at_note(const struct evidence *evidence, struct evidence_at *at)
{
    const struct evidence_time *time = evidence->time;
    at->noise = evidence->noise;
    at->near_on = evidence->near != NULL && evidence->near->is_on;
    if (time == NULL)
        return;
    at->residual_on = time->residual_on;
    at->chain_on = time->chain_on;
    at->pool_share = time->pool_share;
}

void evidence_at_take(const struct evidence_at *at, struct evidence *evidence)
{
    struct evidence_time *time = evidence->time;
    evidence->noise = at->noise;
    if (evidence->near != NULL)
        evidence->near->is_on = at->near_on != 0;
    if (time == NULL)
        return;
    time->residual_on = at->residual_on != 0;
    time->chain_on = at->chain_on != 0;
    time->pool_share = at->pool_share;
}

static size_t result_parts(struct evidence_sums *sums, struct evidence_result *result, struct memo_part *parts)
{
    struct low_rank *point = &result->model.low_rank;
    struct offsets *offsets = &result->model.offsets;
    parts[0] = (struct memo_part){sums, sizeof *sums};
    parts[1] = (struct memo_part){offsets->row, point->rows * sizeof(double)};
    parts[2] = (struct memo_part){offsets->column, point->columns * sizeof(double)};
    parts[3] = (struct memo_part){point->spectrum, sums->rank * sizeof(double)};
    parts[4] = (struct memo_part){point->left.data, point->left.rows * point->left.stride * sizeof(double)};
    parts[5] = (struct memo_part){point->right.data, point->right.rows * point->right.stride * sizeof(double)};
    parts[6] = (struct memo_part){result->fit.trace, sums->trace_count * sizeof *result->fit.trace};
    const struct time_part *time = &result->model.time;
    if (sums->along == TIME_NONE)
        return 7;
    parts[7] = (struct memo_part){time->start, ((size_t)time->series + 1) * sizeof *time->start};
    parts[8] = (struct memo_part){time->time, sums->time_cells * sizeof *time->time};
    parts[9] = (struct memo_part){time->mean, sums->time_cells * sizeof *time->mean};
    parts[10] = (struct memo_part){time->law, time->series * sizeof *time->law};
    parts[11] = (struct memo_part){time->noise, time->series * sizeof *time->noise};
    parts[12] = (struct memo_part){time->steps_law, sums->time_components * sizeof *time->steps_law};
    return RESULT_PARTS;
}

void evidence_keep(struct memo_work *work, struct evidence_result *result)
{
    const struct offsets *offsets = &result->model.offsets;
    const struct time_part *time = &result->model.time;
    struct memo_part parts[RESULT_PARTS];
    struct evidence_sums sums = {.rank = result->model.low_rank.rank,
                                 .trace_count = result->fit.trace_count,
                                 .iterations = result->fit.iterations,
                                 .stop = (int64_t)result->fit.stop,
                                 .along = (int64_t)time->along,
                                 .time_cells = time->along == TIME_NONE ? 0 : time->start[time->series],
                                 .time_components = time->components,
                                 .objective = result->fit.objective,
                                 .rmse = result->fit.rmse,
                                 .gradient = result->fit.gradient,
                                 .noise = result->noise,
                                 .scale = result->scale,
                                 .mean = offsets->mean,
                                 .row_ridge = offsets->row_ridge,
                                 .column_ridge = offsets->column_ridge,
                                 .row_spread = result->row_spread,
                                 .column_spread = result->column_spread,
                                 .row_effects = result->row_effects,
                                 .column_effects = result->column_effects,
                                 .near = result->model.near};
    if (result->fit.stop != STOP_CANCELLED)
        memo_keep(work, parts, result_parts(&sums, result, parts));
}

static void sums_take(const struct evidence_sums *sums, struct evidence_result *out)
{
    struct low_rank *point = &out->model.low_rank;
    out->fit.trace_count = sums->trace_count;
    out->fit.iterations = sums->iterations;
    out->fit.stop = (enum solve_stop)sums->stop;
    out->fit.objective = sums->objective;
    out->fit.rmse = sums->rmse;
    out->fit.gradient = sums->gradient;
    out->noise = sums->noise;
    out->scale = sums->scale;
    out->row_spread = sums->row_spread;
    out->column_spread = sums->column_spread;
    out->row_effects = sums->row_effects;
    out->column_effects = sums->column_effects;
    out->model.offsets.mean = sums->mean;
    out->model.offsets.row_ridge = sums->row_ridge;
    out->model.offsets.column_ridge = sums->column_ridge;
    out->model.near = sums->near;
    point->rank = sums->rank;
    point->left = matrix_left(point->left, sums->rank);
    point->right = matrix_left(point->right, sums->rank);
}

fescue_status evidence_recall(fescue_context *context, struct memo_work *work, const struct evidence_request *request,
                              const struct model *start, struct evidence_result *out)
{
    struct evidence_sums sums = {0};
    struct memo_part parts[RESULT_PARTS];
    struct model *model = &out->model;
    fescue_status status;
    bool good = memo_get(work, &sums, sizeof sums) && sums.rank <= request->rank && sums.trace_count <= request->rounds;
    *model = (struct model){.rows = start->rows, .columns = start->columns, .bounds = start->bounds};
    TRY(TAKE(context, request->rounds, &out->fit.trace));
    TRY(offsets_copy(context, start->rows, start->columns, &start->offsets, &model->offsets));
    TRY(low_rank_create(context, start->rows, start->columns, request->rank, &model->low_rank));
    if (good && sums.along != TIME_NONE) {
        good = request->time != NULL && (int64_t)request->time->along == sums.along;
        uint32_t series = sums.along == TIME_ROWS ? start->columns : start->rows;
        if (good)
            TRY(time_part_create(context, request->time, series, sums.time_cells, sums.time_components, &model->time));
    }
    size_t count = good ? result_parts(&sums, out, parts) : 0;
    for (size_t k = 1; k < count && good; k++)
        good = memo_get(work, parts[k].bytes, parts[k].size);
    if (!good)
        TRY(FAIL(context, FESCUE_DEFECT, "the checkpoint holds another fit than the one that was asked for"));
    sums_take(&sums, out);
done:
    return status;
}
