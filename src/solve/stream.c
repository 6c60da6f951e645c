/* SPDX-License-Identifier: MIT
 *
 * The frame around passes: what all solvers have in common that go through the table a few lines at a time.
 *
 *     begin      warm, from the point that came, when the fall of the objective that its gradient promises,
 *                |g|^2 / (p |R|^2) with p the share of cells seen, is below a tenth; else cold, from a random basis
 *     pass       the solver's own; then U = Q T, the projection is evaluated at Q, and the best point seen is kept
 *     finish     when a pass lowers the objective by less than one in a hundred, or, after the first three, does not
 *                halve it: Gauss-Newton and Newton steps in a trust region (trust.c) from the best point
 *
 * A pass brings a point near the minimum within a few times the cost of reading the table, but not into it: what is
 * left falls like one over the number of passes. The trust region is slow from afar and fast from near. So each does
 * what it can do, and a run ends in a minimum like that of any other solver, unless a limit ends it before.
 *
 * Why cold: the passes weigh the directions of U by how much the table moves along them, and learn from one line at a
 * time what the next is told. From a spectral start, whose weak directions are noise of the pattern and lie on few
 * lines, they end in a bad valley (with a condition of 30 at ten times the error after three passes); from a random
 * basis all directions begin alike. The point that came is not lost: it is the best point until a pass finds a better
 * one. Warm runs are for points of an earlier fit; then the passes count as if one had been made.
 *
 * Cost: a pass and an evaluation (projection.c) an iteration; while finishing that of trust.c.
 */
#include "solve/stream_internal.h"

#include <math.h>

static const double warm_below = 0.1;
/* A fall of the objective by one in a hundred is one in two hundred of the error. */
static const double worth = 1e-2;
/* On a table without noise a pass takes off some such part for ever; then few of them should do as much as a step of
   the trust region. */
enum { PASSES_FEW = 3 };
static const double worth_later = 0.5;
/* As grassmann_trust_region.c has them. */
static const struct trust_rules rules = {.accuracy = 0.1, .inner_most = 200, .exact = true};

void stream_destroy(fescue_context *context, void **state)
{
    struct stream *stream = *state;
    arena_close(context, &stream->arena);
    memory_give(context, state);
}

static void stream_reserve(struct arena *arena, const struct stream_kind *kind, const struct field *field, size_t rank)
{
    const struct cells *target = &field->problem->target;
    size_t shorter = target->rows <= target->columns ? target->rows : target->columns;
    projection_reserve(arena, field, rank);
    trust_reserve(arena, field, rank);
    batches_reserve(arena, field, rank, kind->width(field, rank));
    matrix_reserve(arena, shorter, rank);
    matrix_reserve(arena, rank, rank);
    arena_reserve(arena, dense_work_size(shorter, rank), sizeof(double));
    arena_reserve(arena, 1, kind->own);
    kind->reserve(arena, field, rank);
}

static void stream_carve(struct stream *stream, const struct low_rank *point)
{
    struct arena *arena = &stream->arena;
    size_t rank = point->rank;
    projection_carve(arena, stream->field, point, &stream->projection);
    trust_carve(arena, &stream->projection, &stream->trust);
    batches_carve(arena, stream->field, rank, stream->kind->width(stream->field, rank), &stream->batches);
    size_t shorter = stream->projection.by_short->lines;
    stream->best = matrix_carve(arena, shorter, rank);
    stream->turn = matrix_carve(arena, rank, rank);
    stream->dense = arena_carve(arena, dense_work_size(shorter, rank), sizeof(double));
    stream->own = arena_carve(arena, 1, stream->kind->own);
    stream->kind->carve(stream);
}

static bool is_warm(const struct stream *stream)
{
    const struct cells *target = &stream->field->problem->target;
    double share = (double)target->count / ((double)target->rows * (double)target->columns);
    double gradient = stream->measure.gradient;
    return gradient * gradient <= warm_below * share * stream->measure.square;
}

static fescue_status stream_begin(struct stream *stream)
{
    struct random_stream random = random_open(1, RANDOM_BATCH, UINT32_MAX); /* no pass has this number */
    trust_start(&stream->trust);
    tall_copy(stream->trust.work.context, stream->projection.basis, NULL, stream->best);
    stream->measure = stream->trust.measure;
    stream->running = stream->measure.objective;
    if (is_warm(stream)) {
        stream->passes = 1;
        return FESCUE_OK;
    }
    stream->running = INFINITY;
    return grassmann_random_point(&stream->trust.work, &random, stream->projection.basis);
}

fescue_status stream_create(const struct stream_kind *kind, struct field *field, const struct low_rank *point,
                            void **state)
{
    fescue_context *context = field->problem->context;
    struct stream *stream;
    fescue_status status = TAKE(context, 1, &stream);
    if (status != FESCUE_OK)
        return status;
    *state = stream;
    stream->kind = kind;
    stream->field = field;
    stream_reserve(&stream->arena, kind, field, point->rank);
    TRY(arena_open(context, &stream->arena));
    stream_carve(stream, point);
    TRY(stream_begin(stream));
done:
    if (status != FESCUE_OK)
        stream_destroy(context, state);
    return status;
}

void stream_measure(const void *state, struct solve_measure *measure)
{
    *measure = ((const struct stream *)state)->measure;
}

/* The projection stands at the best point, evaluated. */
static void best_recall(struct stream *stream)
{
    tall_copy(stream->trust.work.context, stream->best, NULL, stream->projection.basis);
    trust_start(&stream->trust);
}

static void finish_begin(struct stream *stream)
{
    stream->finishing = true;
    best_recall(stream);
    trust_widen(&stream->trust);
}

/* One pass; ends the passes when it was not worth it, or left numbers that are none. */
static fescue_status pass_make(struct stream *stream)
{
    struct projection *p = &stream->projection;
    fescue_status status;
    TRY(stream->kind->pass(stream));
    stream->passes++;
    if (stream->lost || !isfinite(matrix_norm(p->basis))) {
        finish_begin(stream);
        goto done;
    }
    TRY(dense_qr(stream->field->problem->context, p->basis, stream->turn, stream->dense));
    if (stream->kind->rebase != NULL)
        stream->kind->rebase(stream, stream->turn);
    trust_start(&stream->trust);
    bool worthy = p->objective < (1 - (stream->passes <= PASSES_FEW ? worth : worth_later)) * stream->running;
    stream->running = p->objective;
    if (p->objective <= stream->measure.objective) {
        tall_copy(stream->trust.work.context, p->basis, NULL, stream->best);
        stream->measure = stream->trust.measure;
        stream->measure.step = 1;
    }
    if (!worthy)
        finish_begin(stream);
done:
    return status;
}

fescue_status stream_step(void *state, bool *moved)
{
    struct stream *stream = state;
    *moved = true;
    if (!stream->finishing)
        return pass_make(stream);
    fescue_status status = trust_step(&stream->trust, &rules, moved);
    stream->measure = stream->trust.measure;
    return status;
}

fescue_status stream_point_write(void *state, struct low_rank *point)
{
    struct stream *stream = state;
    if (!stream->finishing)
        best_recall(stream);
    return projection_write(&stream->projection, point);
}

size_t stream_keep(void *state, struct memo_part parts[SOLVER_PARTS])
{
    struct stream *stream = state;
    parts[0] = matrix_part(stream->projection.basis);
    parts[1] = matrix_part(stream->best);
    parts[2] = (struct memo_part){&stream->measure, sizeof stream->measure};
    parts[3] = (struct memo_part){&stream->running, sizeof stream->running};
    parts[4] = (struct memo_part){&stream->passes, sizeof stream->passes};
    parts[5] = (struct memo_part){&stream->finishing, sizeof stream->finishing};
    size_t count = 6 + trust_keep(&stream->trust, parts + 6);
    return count + stream->kind->keep(stream, parts + count);
}

void stream_resume(void *state)
{
    trust_resume(&((struct stream *)state)->trust);
}
