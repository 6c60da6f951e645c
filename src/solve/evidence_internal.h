/* SPDX-License-Identifier: MIT
 *
 * The inside of the evidence fit, shared by its files:
 *
 *   evidence.c          the loop, the start, the result
 *   evidence_restore.c  the start that such a fit has left
 *   evidence_side.c     the posterior of every line of one side, given the other
 *   evidence_basis.c    the exact change of basis between two rounds
 *   evidence_living.c   which components live
 *   evidence_memo.c     what is left for a later run of the same job
 *   evidence_time.c     when lines are times: what is shared by
 *   evidence_residual.c     a residual of every series, AR(1) in time
 *   evidence_chain.c        factors and effects of the steps, AR(1) in time
 *   evidence_near.c     when some columns are near one another
 *
 * The formulas and the symbols stand at the top of evidence.c.
 */
#ifndef FESCUE_SOLVE_EVIDENCE_INTERNAL_H
#define FESCUE_SOLVE_EVIDENCE_INTERNAL_H

#include "solve/solve.h"

/* One side of the table: its lines' posteriors, as the other side sees them. */
struct evidence_side {
    const struct half *half;
    struct moments moments; /* of the regressors (factor, 1, effect) of each line; weight belongs to evidence */
    double *variance;       /* prior variance of the r components and of the effect; 0: switched off */
    double *line_precision; /* of each line, relative: 1 where all are alike */
    double *excess;         /* of each line, added to line_error: what the time residual does not know; or NULL */
    double *line_error;     /* expected squared error of each line, under the other side's relative precisions */
    double *line_rest;      /* sum over the cells of each line of what its posterior mean leaves of them */
    double *partial;        /* sums of the blocks */
    double *own, *pull;     /* of each line, r + 1 prior precisions in place of 1 / variance, and those times the prior
                               means; NULL: all alike, around 0 */
    size_t effect_at, one_at; /* where effect and constant stand in mean, so that rows' and columns' pair up */
    struct matrix mean, old;  /* lines x (r + 2), this round's and the last one's, or the start's */
};

struct evidence {
    fescue_context *context;
    struct problem *problem; /* z, in units of its scale */
    size_t rank;
    struct evidence_side rows, columns;
    double noise;    /* mean noise variance; that of cell (i, j) is noise / (row precision i * column precision j) */
    double started;  /* clock_wall() second */
    double *scratch; /* one stretch a worker */
    size_t scratch_size;
    struct matrix small[4], gram[4]; /* r x r and (r+2) x (r+2) */
    struct matrix map[2];            /* a change of basis and its transpose */
    double *shift, *basis_work;
    double *dense;              /* for products of a side's lines */
    double *total;              /* room for the sum of the moments of either side */
    uint64_t *halves;           /* room for the moments of either side in halves; NULL: they are gathered as they are */
    struct evidence_time *time; /* NULL: lines have no order */
    struct evidence_near *near; /* NULL: columns are not near one another */
    struct arena arena;
    size_t state_size; /* bytes of the arena that a later run goes on from; behind them is the workers' scratch */
};

enum { EVIDENCE_ROUND_PRIOR = 8, EVIDENCE_ROUND_BASIS = 20, EVIDENCE_BASIS_EVERY = 5 };

/* Prior variances do not fall below this: what is dying squares itself from round to round, and its reciprocal and the
   square of that have to be numbers. */
#define EVIDENCE_VARIANCE_LEAST 1e-60

/* Precision that stands for "switched off": in units where cells have size one, no sum of cells comes near it. */
#define EVIDENCE_PRECISION_OFF 1e30

/* The regressors of a line, as the other side sees it: components 0 .. r-1, the constant, the effect. */
static inline size_t evidence_one(const struct evidence *evidence)
{
    return evidence->rank;
}

/* How many components live, and a model without those behind the first `rank`. */
size_t evidence_living(const struct cells *cells, const struct evidence_result *fit);
void evidence_trim(struct model *model, size_t rank);

/* Between two rounds. */
struct evidence_at {
    uint64_t round, residual_on, chain_on, near_on;
    double change, before, noise, pool_share; /* before: the change of the round before */
};
enum { EVIDENCE_STATE_PARTS = 7 };
/* The scalars of the state, out of the evidence and into it. */
void evidence_at_note(const struct evidence *evidence, struct evidence_at *at);
void evidence_at_take(const struct evidence_at *at, struct evidence *evidence);
/* The whole state between two rounds; how many parts. */
size_t evidence_state(struct evidence *evidence, const struct evidence_request *request, struct evidence_at *at,
                      struct solve_result *result, struct memo_part parts[EVIDENCE_STATE_PARTS]);
uint64_t evidence_digest(const struct cells *cells, const struct evidence_request *request, const struct model *start);
/* A finished fit into the memo, and out of it; `out` is as evidence_fit begins with it. */
void evidence_keep(struct memo_work *work, struct evidence_result *result);
fescue_status evidence_recall(fescue_context *context, struct memo_work *work, const struct evidence_request *request,
                              const struct model *start, struct evidence_result *out);

/* Doubles a worker needs. */
size_t evidence_side_scratch(size_t rank);
size_t evidence_basis_scratch(size_t rank);
size_t evidence_basis_partial(size_t rank); /* numbers a block */

/* New posteriors of all lines of `side` from the moments of `other`; fills side->mean, side->line_error and
   side->line_rest. */
void evidence_side_update(struct evidence *evidence, struct evidence_side *side, const struct evidence_side *other);
/* Readies the moments of `side` to be gathered by the lines of `other`: in halves where that serves, and their total
   where that does. */
void evidence_side_offer(struct evidence *evidence, struct evidence_side *side, const struct evidence_side *other);
/* Prior variances of `side` from its posteriors. */
void evidence_side_prior(struct evidence *evidence, struct evidence_side *side);
/* Writes the moments of a line whose mean is known and certain. */
void evidence_side_plant(struct evidence *evidence, struct evidence_side *side, size_t line, const double *mean);

/* A start of shrunk means gets the variances that belong to them. */
void evidence_restore(struct evidence *evidence);

/* Moves to the basis in which rows have unit second moment and columns a diagonal one, offsets absorbing the means. */
fescue_status evidence_basis_change(struct evidence *evidence);

/* ---- time ------------------------------------------------------------------------------------------------------- */

/* Of one side the lines are steps in time, those of the other are series. Positions of cells: in the half of the series
   (k), by series in the order of time (q, which counts within a series from its start as k does). */
struct evidence_time {
    const struct time_axis *axis;
    struct evidence_side *steps, *series;
    bool residual_on, chain_on;
    /* residual */
    uint64_t *twin;                      /* of position k: the same cell in the half of the steps */
    uint32_t *place;                     /* of q: the offset of k from its series' start; NULL: the same */
    double *clean;                       /* of k: the target without a residual taken off */
    double *mean;                        /* of q: posterior mean of the residual */
    double *total;                       /* of q: that and the rest of the estimate */
    double *spread;                      /* of a cell in the half of the steps: posterior variance of the residual */
    double *moved, change;               /* of a block: squared change of total; of all, root mean square */
    struct kalman_law *law;              /* of each series */
    struct kalman_tally *pool, *partial; /* of all series, the round before; of blocks */
    double pool_share;                   /* of the pool that goes to every series */
    double *series_scratch;              /* of each worker: six numbers a cell of the longest series */
    size_t longest;
    /* chain */
    struct chain chain;
    struct kalman_law *steps_law; /* of each component and the effect */
    double *law_moved;            /* of each: by which share a round changed what a step forgets, 1 - correlation */
    double *clock;                /* of the k-th step in time */
    double *store;                /* of each line, what its error needs: evidence_chain_store(rank) */
    struct arena arena;
    size_t state_size; /* as that of the evidence */
};
/* From the series' room of one worker to the next. */
static inline size_t evidence_series_room(const struct evidence_time *time)
{
    return team_room(6 * time->longest, sizeof(double));
}
fescue_status evidence_time_open(struct evidence *evidence, const struct evidence_request *request);
void evidence_time_close(struct evidence *evidence);
/* Switches residual and chain on when their round has come; laws of a start that has a time part are taken over. */
void evidence_time_begin(struct evidence *evidence, const struct model *start);
void evidence_time_round(struct evidence *evidence, uint64_t round);
/* Whether estimates that moved by `change` in the last round have settled as far as anybody can tell. */
bool evidence_time_settled(const struct evidence *evidence, double change);
fescue_status evidence_time_part(struct evidence *evidence, struct time_part *part);

/* Takes the posterior mean of every series' residual off the targets of both halves, and learns the laws. */
void evidence_residual_update(struct evidence *evidence);
/* In place of evidence_side_update and evidence_side_prior for the steps. */
void evidence_chain_update(struct evidence *evidence);
void evidence_chain_prior(struct evidence *evidence);
size_t evidence_chain_store(size_t rank); /* numbers a line */
size_t evidence_chain_scratch(size_t rank);

/* ---- near columns ------------------------------------------------------------------------------------------------ */

struct evidence_near {
    struct sparse_field *field;
    bool is_on;
    size_t columns;
    double *scale, *strength;                           /* of each component and the effect: variance sv, pull s */
    double *precision, *rhs, *mean, *variance, *factor; /* of a field, one number a column */
    struct arena arena;
};
fescue_status evidence_near_open(struct evidence *evidence, const struct evidence_request *request);
void evidence_near_close(struct evidence *evidence);
/* Switches the fields on when their round has come. */
void evidence_near_begin(struct evidence *evidence, const struct model *start);
void evidence_near_round(struct evidence *evidence, uint64_t round);
/* What the columns are to each other, from their posteriors, before these are learnt again; and the laws of the fields.
   In place of evidence_side_prior for the columns. */
fescue_status evidence_near_update(struct evidence *evidence);
void evidence_near_part(const struct evidence *evidence, struct near_part *part);

/* Second moments of (factor, 1, effect) from mean and covariance of (factor, effect); covariance NULL: none. */
void evidence_moments_write(double *moment, const double *mean, const double *covariance, size_t rank);

#endif
