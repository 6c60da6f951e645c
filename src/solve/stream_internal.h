/* SPDX-License-Identifier: MIT
 *
 * What the solvers share that go through the table a few lines at a time: batches of lines of the longer side, and the
 * frame around their passes.
 */
#ifndef FESCUE_STREAM_INTERNAL_H
#define FESCUE_STREAM_INTERNAL_H

#include "solve/solve_internal.h"

/* ---- batches -------------------------------------------------------------------------------------------------------
 */

/* Lines of the longer side in an order drawn anew for every pass, cut into batches. What a batch does to the shorter
   side is done band by band: a band is a range of the shorter side's lines, one worker has it to itself and goes
   through the batch in order, so that nothing depends on who it was, nor on how the bands were cut. */
struct batches {
    struct field *field;
    const struct half *by_short, *by_long;
    size_t rank, width;    /* width: lines a batch at most */
    uint32_t *order;       /* of the longer side's lines */
    size_t next, count;    /* the batch now: order[next - count .. next - 1] */
    size_t bands;          /* for the batch now */
    struct matrix weights; /* width x rank: of the batch's lines */
    double *room;          /* a packed system a worker */
};
void batches_reserve(struct arena *arena, const struct field *field, size_t rank, size_t width);
void batches_carve(struct arena *arena, struct field *field, size_t rank, size_t width, struct batches *batches);
/* Begins a pass: another order for each. */
void batches_shuffle(struct batches *batches, uint32_t pass);
/* The next batch of the pass, of `width` lines at most; false when there is none. */
bool batches_next(struct batches *batches, size_t width);
/* The line of the longer side that is the k-th of the batch. */
static inline uint32_t batch_line(const struct batches *batches, size_t k)
{
    return batches->order[batches->next - batches->count + k];
}
/* weights: w_j = (U_j'U_j + ridge I)^-1 U_j't_j for every line of the batch. */
void batch_solve(struct batches *batches, struct matrix basis, double ridge);
/* A ridge for weights that something is to be learnt from: lambda, or a ten-thousandth of what U_j'U_j has on average
   when that is larger, for lines with fewer cells than the rank. */
double batch_ridge(const struct problem *problem);
/* Calls the task for every line of the batch; each worker has room for one packed system. */
void batch_lines_run(struct batches *batches, team_task *task, void *job);
double *batch_room(const struct batches *batches, size_t worker);
/* Calls the task for every band. */
void batch_bands_run(struct batches *batches, team_task *task, void *job);
/* The lines of the shorter side that are a band. */
struct line_range {
    uint32_t first, end;
};
struct line_range batch_band(const struct batches *batches, size_t band);
/* The cells, by_long, of the batch's k-th line that lie in a band: from .. to - 1. */
struct cell_range {
    uint64_t from, to;
};
struct cell_range batch_cells(const struct batches *batches, size_t band, size_t k);

/* H, a mean of w w' over lines: what a move of U costs, and what steps are measured in. */
struct moment {
    struct matrix second; /* H */
    double *factor;       /* its packed Cholesky factor, lifted: directions without weight keep a finite inverse */
};
void moment_reserve(struct arena *arena, size_t rank);
void moment_carve(struct arena *arena, size_t rank, struct moment *moment);
/* H <- (1 - share) H + share times the mean over these lines. */
void moment_learn(struct moment *moment, struct matrix weights, double share);

/* ---- absolute loss -------------------------------------------------------------------------------------------------
 */

/* For every line j of the batch, rounds of reweighting towards the w_j that minimises sum |U_j w - t_j| +
   ridge/2 |w|^2, from the one that is there; residuals below `least` count as squares (least > 0). Then what is left of
   the line. */
struct absolute_fit {
    struct matrix basis, weights; /* weights: long x rank, in and out; also copied to the batch's */
    double ridge, least;
    unsigned rounds;
    double *sums; /* two a line: of |r| and of r^2 */
};
void batch_fit_absolute(struct batches *batches, const struct absolute_fit *fit);

/* ---- passes --------------------------------------------------------------------------------------------------------
 */

/* A solver of this family: what it adds to the frame. Its functions may take no memory but in reserve and carve. */
struct stream;
struct stream_kind {
    size_t own; /* bytes of its own state, zeroed */
    size_t (*width)(const struct field *field, size_t rank);
    void (*reserve)(struct arena *arena, const struct field *field, size_t rank);
    void (*carve)(struct stream *stream); /* from stream->arena, in the same order */
    /* One pass from projection.basis, orthonormal, to another one that need not be. The projection is evaluated there,
       except before the first pass of a cold run. */
    fescue_status (*pass)(struct stream *stream);
    /* What it remembers from pass to pass (struct solver has the rest); how many parts. */
    size_t (*keep)(struct stream *stream, struct memo_part *parts);
    /* projection.basis = Q where the pass left Q T. NULL: nothing to do. */
    void (*rebase)(struct stream *stream, struct matrix turn);
};
struct stream {
    const struct stream_kind *kind;
    struct field *field;
    struct arena arena;
    struct projection projection; /* where the passes stand; while finishing, the point itself */
    struct trust trust;
    struct batches batches;
    struct matrix best;           /* basis of the best point seen */
    struct solve_measure measure; /* of that */
    struct matrix turn;           /* rank x rank */
    double *dense;
    double running;  /* objective where the passes stand; infinite before the first of a cold run */
    uint32_t passes; /* done; a warm run begins with one */
    bool finishing;
    bool lost; /* a pass met numbers that are none: its basis counts for nothing */
    void *own;
};
fescue_status stream_create(const struct stream_kind *kind, struct field *field, const struct low_rank *point,
                            void **state);
/* Functions of struct solver. */
void stream_measure(const void *state, struct solve_measure *measure);
fescue_status stream_step(void *state, bool *moved);
size_t stream_keep(void *state, struct memo_part parts[SOLVER_PARTS]);
void stream_resume(void *state);
fescue_status stream_point_write(void *state, struct low_rank *point);
void stream_destroy(fescue_context *context, void **state);

/* ---- minibatches ---------------------------------------------------------------------------------------------------
 */

struct minibatch {
    struct matrix base, base_gradient; /* U~, G~ */
    struct matrix gradient;            /* G, then -D */
    struct matrix mean;
    struct moment moment;
    struct matrix core, core_right; /* rank x rank */
    double *spectrum;
    size_t step; /* of this pass, from 0 */
};
/* What tells the two solvers apart that take gradient steps, one a batch (minibatch.c). */
struct minibatch_rules {
    bool reduced;   /* variance reduction by the gradient at the point where the pass began */
    bool shrinking; /* steps get shorter, and the mean weighs later points more */
};
size_t minibatch_width(const struct field *field, size_t rank);
void minibatch_reserve(struct arena *arena, const struct field *field, size_t rank);
void minibatch_carve(struct stream *stream);
size_t minibatch_keep(struct stream *stream, struct memo_part *parts);
fescue_status minibatch_pass(struct stream *stream, const struct minibatch_rules *rules);

#endif
