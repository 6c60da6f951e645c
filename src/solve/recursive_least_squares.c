/* SPDX-License-Identifier: MIT
 *
 * Recursive least squares: one line of the longer side at a time, each seen line of the shorter side corrected by it
 * (after Chi, Eldar, Calderbank 2013, "PETRELS: parallel subspace estimation and tracking by recursive least squares
 * from partial observations", algorithm 1). A table is read two or three times until the error is that of a full fit.
 *
 *     symbol   name       shape
 *     U        basis      short x r; orthonormal between passes, not within
 *     w        weights    r, of the line j that has come, with targets t
 *     P_i      inverses   r x r a line of the shorter side: inverse of what it has learnt, sum of w w', older ones less
 *     a_i      memory     how many cells that sum goes back
 *
 * Line j comes, seen in the lines O of the shorter side:
 *     w = (U_O'U_O + ridge I)^-1 U_O't_O
 *     for i in O:   e = t_i - U_i w,   v = P_i w,   l = 1 - 1/a_i,   g = l + w'v
 *                   U_i += e v' / g,   P_i = (P_i - v v' / g) / l
 *
 * Growing memory: with c_i the cells of line i and s the passes done so far, fractions counting,
 *     a_i = max(0.1 c_i, 0.5 c_i s, 3 r).
 * At first all that was learnt from a bad U is forgotten soon; later the sum goes over half of all that was seen, so
 * that noise is averaged. At the beginning of a
 * cold run P_i = (3 H)^-1, H the mean of w w' over the first lines: a memory of three cells; of a warm one P_i =
 * (0.5 c_i H)^-1, H over all lines.
 *
 * After a pass U = Q T; what is known stays known when w counts as T w, P_i <- T^-T P_i T^-1 (frame: stream.c).
 *
 * Departures. The paper has one forgetting factor for all, and no second pass. Lines come in batches whose w are all
 * taken from the U before the batch: of one line at first, of at most a hundredth of what has been seen, of at most 64;
 * that changes the error after a pass by some thousandths and lets workers share the work. The ridge (batch_ridge) is
 * there for lines with fewer cells than r.
 *
 * Cost a pass: cells (r^2 for w and 3 r^2 for the corrections), short r^3 for the basis. Workspace: short r^2 / 2 for
 * the inverses. Parallel over lines for w, over bands of the shorter side for the corrections (batches.c): line i meets
 * the lines of the longer side in the pass's order whatever the number of workers.
 */
#include "solve/stream_internal.h"

#include <assert.h>
#include <math.h>

/* The least memory also in unknowns: with fewer cells an unknown, P_i would follow the noise of single ones. */
static const double memory_rank = 3;
static const double first_memory = 3, memory_least = 0.1, memory_growth = 0.5;
enum {
    LAG_MOST = 64,  /* lines a batch: enough work to share */
    LAG_PART = 100, /* and at most this part of what has been seen */
};
/* T is singular when a diagonal entry falls below this part of the largest. */
static const double turn_least = 1e-8;

struct recursion {
    double *inverses; /* short x packed: P_i */
    double *room;     /* rank x rank a worker */
    double *packed;
    struct moment moment; /* H */
    bool known;           /* the inverses are those of what was seen; else they begin anew */
};

static size_t lag_most(const struct field *field, size_t rank)
{
    (void)field;
    (void)rank;
    return LAG_MOST;
}

static size_t room_a_worker(size_t rank)
{
    return team_room(rank * rank, sizeof(double));
}

static void recursion_reserve(struct arena *arena, const struct field *field, size_t rank)
{
    const struct cells *target = &field->problem->target;
    size_t shorter = target->rows <= target->columns ? target->rows : target->columns, entries;
    if (!size_product(shorter, packed_size(rank), &entries))
        entries = SIZE_MAX; /* refused when the arena is opened */
    arena_reserve(arena, entries, sizeof(double));
    arena_reserve(arena, team_workers(field->problem->context) * room_a_worker(rank), sizeof(double));
    arena_reserve(arena, packed_size(rank), sizeof(double));
    moment_reserve(arena, rank);
}

static void recursion_carve(struct stream *stream)
{
    struct recursion *own = stream->own;
    size_t rank = stream->projection.rank;
    own->inverses = arena_carve(&stream->arena, stream->projection.by_short->lines * packed_size(rank), sizeof(double));
    own->room = arena_carve(&stream->arena, team_workers(stream->field->problem->context) * room_a_worker(rank),
                            sizeof(double));
    own->packed = arena_carve(&stream->arena, packed_size(rank), sizeof(double));
    moment_carve(&stream->arena, rank, &own->moment);
}

static double cells_of(const struct half *half, uint32_t line)
{
    return (double)(half->start[line + 1] - half->start[line]);
}

/* ---- the inverses at first -----------------------------------------------------------------------------------------
 */

static void inverses_begin(struct stream *stream, double ridge)
{
    struct recursion *own = stream->own;
    struct batches *b = &stream->batches;
    size_t packed = packed_size(b->rank);
    struct matrix weights = stream->projection.weights;
    if (stream->passes == 0) {
        batches_shuffle(b, 0);
        batches_next(b, LAG_MOST);
        batch_solve(b, stream->projection.basis, ridge);
        weights = b->weights;
        weights.rows = b->count;
    }
    moment_learn(&own->moment, weights, 1);
    packed_inverse(own->moment.factor, b->rank, own->packed);
    for (uint32_t i = 0; i < b->by_short->lines; i++) {
        double memory =
            stream->passes == 0 ? first_memory : fmax(first_memory, memory_growth * cells_of(b->by_short, i));
        for (size_t k = 0; k < packed; k++)
            own->inverses[i * packed + k] = own->packed[k] / memory;
    }
    own->known = true;
}

/* ---- a pass --------------------------------------------------------------------------------------------------------
 */

/* One cell: U_i and P_i learn that w gives x. */
static void cell_learn(double *u, double *inverse, const double *w, double x, double keep, size_t rank)
{
    double v[PACKED_INVERSE_MOST], gain = keep, error = x;
    const double *at = inverse;
    for (size_t p = 0; p < rank; at += ++p) {
        double sum = at[p] * w[p];
        for (size_t q = 0; q < p; q++) {
            sum += at[q] * w[q];
            v[q] += at[q] * w[p];
        }
        v[p] = sum;
        error -= u[p] * w[p];
    }
    for (size_t p = 0; p < rank; p++)
        gain += v[p] * w[p];
    for (size_t p = 0; p < rank; p++) {
        double part = v[p] / gain;
        u[p] += error * part;
        for (size_t q = 0; q <= p; q++, inverse++)
            *inverse = (*inverse - part * v[q]) / keep;
    }
}

struct learn_job {
    struct stream *stream;
    double progress; /* passes, and the part of this one that is done */
};

static void band_learn(void *argument, size_t band, size_t worker)
{
    const struct learn_job *job = argument;
    const struct recursion *own = job->stream->own;
    const struct batches *b = &job->stream->batches;
    const struct cells *target = &job->stream->field->problem->target;
    double part = fmax(memory_least, memory_growth * job->progress);
    (void)worker;
    for (size_t k = 0; k < b->count; k++) {
        struct cell_range cells = batch_cells(b, band, k);
        for (uint64_t c = cells.from; c < cells.to; c++) {
            uint32_t i = b->by_long->across[c];
            double memory = fmax(part * cells_of(b->by_short, i), memory_rank * (double)b->rank);
            cell_learn(&MATRIX_AT(job->stream->projection.basis, i, 0), own->inverses + i * packed_size(b->rank),
                       &MATRIX_AT(b->weights, k, 0), cells_value(target, b->by_long, c), 1 - 1 / memory, b->rank);
        }
    }
}

/* Lines that may come together. */
static size_t lag_of(const struct learn_job *job)
{
    double lag = job->progress * (double)job->stream->batches.by_long->lines / LAG_PART;
    return lag < 1 ? 1 : lag > LAG_MOST ? LAG_MOST : (size_t)lag;
}

static fescue_status recursion_pass(struct stream *stream)
{
    struct batches *b = &stream->batches;
    struct learn_job job = {.stream = stream, .progress = stream->passes};
    double ridge = batch_ridge(stream->field->problem);
    assert(b->rank <= PACKED_INVERSE_MOST);
    if (!((struct recursion *)stream->own)->known)
        inverses_begin(stream, ridge);
    batches_shuffle(b, stream->passes);
    while (batches_next(b, lag_of(&job))) {
        batch_solve(b, stream->projection.basis, ridge);
        batch_bands_run(b, band_learn, &job);
        job.progress = (double)stream->passes + (double)b->next / (double)b->by_long->lines;
    }
    return FESCUE_OK;
}

/* ---- between passes ------------------------------------------------------------------------------------------------
 */

enum { REBASE_LINES = 256 }; /* a piece for one worker */

/* P <- T^-T P T^-1, T upper triangular: rows, then columns, by forward substitution with T'. */
static void inverse_rebase(double *inverse, struct matrix turn, double *full)
{
    size_t rank = turn.rows;
    for (size_t p = 0; p < rank; p++)
        for (size_t q = 0; q <= p; q++)
            full[p * rank + q] = full[q * rank + p] = inverse[packed_size(p) + q];
    for (size_t p = 0; p < rank; p++)
        for (size_t q = 0; q < rank; q++) { /* row p of P T^-1 */
            double *row = full + p * rank;
            for (size_t l = 0; l < q; l++)
                row[q] -= row[l] * MATRIX_AT(turn, l, q);
            row[q] /= MATRIX_AT(turn, q, q);
        }
    for (size_t p = 0; p < rank; p++) { /* row p of T^-T times that */
        for (size_t l = 0; l < p; l++)
            for (size_t q = 0; q < rank; q++)
                full[p * rank + q] -= MATRIX_AT(turn, l, p) * full[l * rank + q];
        for (size_t q = 0; q < rank; q++)
            full[p * rank + q] /= MATRIX_AT(turn, p, p);
        for (size_t q = 0; q <= p; q++)
            inverse[packed_size(p) + q] = full[p * rank + q];
    }
}

static void piece_rebase(void *argument, size_t piece, size_t worker)
{
    struct stream *stream = argument;
    const struct recursion *own = stream->own;
    size_t rank = stream->projection.rank, lines = stream->projection.by_short->lines;
    size_t last = (piece + 1) * REBASE_LINES < lines ? (piece + 1) * REBASE_LINES : lines;
    for (size_t i = piece * REBASE_LINES; i < last; i++)
        inverse_rebase(own->inverses + i * packed_size(rank), stream->turn, own->room + worker * room_a_worker(rank));
}

static void recursion_rebase(struct stream *stream, struct matrix turn)
{
    struct recursion *own = stream->own;
    double least = INFINITY, most = 0;
    for (size_t k = 0; k < turn.rows; k++) {
        least = fmin(least, MATRIX_AT(turn, k, k));
        most = fmax(most, MATRIX_AT(turn, k, k));
    }
    own->known = least > turn_least * most;
    if (own->known)
        team_run(stream->field->problem->context,
                 (stream->projection.by_short->lines + REBASE_LINES - 1) / REBASE_LINES, piece_rebase, stream);
}

static size_t recursion_keep(struct stream *stream, struct memo_part *parts)
{
    struct recursion *own = stream->own;
    size_t numbers = stream->projection.by_short->lines * packed_size(stream->projection.rank);
    parts[0] = (struct memo_part){own->inverses, numbers * sizeof *own->inverses};
    parts[1] = (struct memo_part){&own->known, sizeof own->known};
    return 2;
}

static const struct stream_kind recursion_kind = {
    .own = sizeof(struct recursion),
    .width = lag_most,
    .reserve = recursion_reserve,
    .carve = recursion_carve,
    .pass = recursion_pass,
    .keep = recursion_keep,
    .rebase = recursion_rebase,
};

static fescue_status recursion_create(struct field *field, const struct low_rank *point, void **state)
{
    return stream_create(&recursion_kind, field, point, state);
}

const struct solver recursive_least_squares_solver = {
    .name = "recursive-least-squares",
    .summary = "a line at a time by recursive least squares with growing memory, a few passes, then Newton steps",
    .width = 1,
    .create = recursion_create,
    .measure = stream_measure,
    .step = stream_step,
    .keep = stream_keep,
    .resume = stream_resume,
    .point_write = stream_point_write,
    .destroy = stream_destroy,
};
