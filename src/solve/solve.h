/* SPDX-License-Identifier: MIT
 *
 * Finding the low-rank part: starting points, solvers, stopping rules. A solver is a small table of functions, listed
 * once in solver.c; adding one touches its own file, the list and the options. The driver (solve_run) owns everything
 * that solvers share: limits, the trace, the best point seen, cancelling.
 */
#ifndef FESCUE_SOLVE_H
#define FESCUE_SOLVE_H

#include "model/model.h"

#define SOLVE_STOP_LIST(X)                                                                                             \
    X(STOP_GRADIENT, "gradient", "the gradient fell below the tolerance")                                              \
    X(STOP_EXACT, "exact", "the seen cells are met to rounding")                                                       \
    X(STOP_CHANGE, "change", "the objective no longer changes")                                                        \
    X(STOP_STALLED, "stalled", "no step lowers the objective any more")                                                \
    X(STOP_ITERATIONS, "iterations", "the limit of iterations was reached")                                            \
    X(STOP_TIME, "time", "the time limit was reached")                                                                 \
    X(STOP_CANCELLED, "cancelled", "it was asked to stop")
enum solve_stop {
#define SOLVE_STOP_ENUM_(name, word, text) name,
    SOLVE_STOP_LIST(SOLVE_STOP_ENUM_)
#undef SOLVE_STOP_ENUM_
};
const char *solve_stop_word(enum solve_stop stop);
const char *solve_stop_text(enum solve_stop stop);
bool solve_converged(enum solve_stop stop); /* gradient, exact, change */

struct solve_limits {
    uint64_t iterations;
    double gradient; /* relative to the gradient at the zero matrix */
    double change;   /* relative change of the objective over ten iterations; 0: never */
    double deadline; /* clock_wall() second, or 0 for none */
};

/* One line an iteration. rmse is over the seen cells, in units of the problem's scale. */
struct solve_step {
    uint32_t rank, iteration;
    double objective, rmse, gradient, step, seconds;
};
struct solve_result {
    const char *solver;
    const char *start; /* the strategy whose end was best, of solve_recover; else NULL */
    enum solve_stop stop;
    uint64_t iterations;
    double objective, rmse, gradient; /* at the point returned; gradient relative as in the limits */
    struct solve_step *trace;         /* owned; solve_result_free */
    uint64_t trace_count;
};
void solve_result_free(fescue_context *context, struct solve_result *result);

/* A digest of its numbers, for the memo (memo_digest). */
uint64_t low_rank_digest(uint64_t digest, const struct low_rank *point);

struct solver;                                      /* name, summary, and its functions: solve_internal.h */
const struct solver *solver_find(const char *name); /* NULL when there is none of that name */
const struct solver *solver_at(size_t k);           /* the k-th of the list, NULL past its end */
const char *solver_name(const struct solver *solver);
bool solver_is_robust(const struct solver *solver); /* its loss is the absolute one */
const char *solver_summary(const struct solver *solver);

/* Improves `point` (its rank fixed) until a limit. The best point seen is left in it, never worse than it came; the
   trace is appended to *result when its trace is not NULL yet or continues. A numerical outcome is a field of the
   result; the status is for memory and cancelling (FESCUE_STOPPED only when cancelled; the point is then valid). */
fescue_status solve_run(struct problem *problem, const struct solver *solver, const struct solve_limits *limits,
                        struct low_rank *point, struct solve_result *result);

/* Start: truncated SVD of the trimmed, rescaled target (Keshavan, Montanari, Oh 2010) by randomised block Krylov
   iteration (Musco, Musco 2015). New point, owned by the caller. */
fescue_status start_spectral(struct problem *problem, size_t rank, uint64_t seed, struct low_rank *out);
/* Rank r to r+1: appends the leading singular pair of the residual with its exact step length and restores the
   orthonormal form. Replaces *point. When the residual is zero the new singular value is 0. */
fescue_status start_grow(struct problem *problem, uint64_t seed, struct low_rank *point);

/* From nothing to the best minimum that several starting strategies lead to, finished by the trust region to the limits
   (recover.c). New point, owned by the caller; the trace of all attempts is in *result, the fields are those of the
   best, iterations counts all finishes. FESCUE_STOPPED when asked to stop: *out is the best so far, or has rank 0 and
   no memory when there is none yet. On another failure *out holds nothing. */
fescue_status solve_recover(struct problem *problem, size_t rank, uint64_t seed, const struct solve_limits *limits,
                            struct low_rank *out, struct solve_result *result);

/* ---- the evidence fit: offsets, components and their shrinkage learnt together (evidence.c) -----------------------
 */

enum evidence_noise { EVIDENCE_NOISE_EQUAL, EVIDENCE_NOISE_COLUMNS, EVIDENCE_NOISE_ROWS };
struct evidence_request {
    enum fescue_offsets offsets; /* never AUTO: which effects are free */
    enum evidence_noise noise;   /* whether every column, or row, has noise of its own */
    size_t rank;                 /* components to begin with, 1 .. min(rows, columns); the data prune them */
    size_t rank_most;            /* to which evidence_learn may grow; rank .. min(rows, columns) */
    double noise_start;          /* first guess of the noise variance, table units; 0: the whole variance */
    bool is_shrunk;              /* the start is what such a fit came to */
    uint64_t seed, rounds;
    const struct time_axis *time; /* borrowed; NULL or along none: lines have no order */
    const struct nearness *near;  /* borrowed; NULL: nothing is known of columns being near one another */
    double change;       /* ends when the rms change of the estimates, over the table's scale, falls below this */
    double change_noise; /* or over the noise's standard deviation below this; 0: never */
    double change_left;  /* or what all rounds left would come to, over that, below this; 0: never */
    double deadline;     /* clock_wall() second, or 0 for none */
};
struct evidence_result { /* evidence_result_free */
    struct model model;  /* posterior means; spectrum descending, pruned components near 0 */
    struct solve_result fit;
    double noise; /* standard deviation, table units */
    /* Variance of the noise of a line over the mean one, beyond what its number of cells leaves to chance, over the
       lines by their cells: what noise of every row's, or column's, own would have to say. */
    double row_spread, column_spread;
    /* Mean squared effect of the rows, of the columns, which the fit has not, over what chance would leave of it. */
    double row_effects, column_effects;
    double scale; /* units of the table in one of the trace's */
};
/* Cancelled: FESCUE_OK with STOP_CANCELLED in evidence_fit, once a round is done; FESCUE_STOPPED in evidence_learn.
   From `start` (its offsets, and its components as far as it has them; further ones start small and random). */
fescue_status evidence_fit(fescue_context *context, const struct cells *cells, const struct evidence_request *request,
                           const struct model *start, struct evidence_result *out);
/* The same from nothing: offsets, the spectral start at request->rank, growth as long as the data support it, all with
   equal noise; then request->noise. */
fescue_status evidence_learn(fescue_context *context, const struct cells *cells, const struct evidence_request *request,
                             struct evidence_result *out);
/* Tables on which a fit is felt: what is known is not learnt again there. */
bool evidence_is_large(const struct cells *cells);
void evidence_result_free(fescue_context *context, struct evidence_result *result);

#endif
