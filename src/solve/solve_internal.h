/* SPDX-License-Identifier: MIT
 *
 * The inside of solve: what a solver is, and the pieces that several solvers share.
 */
#ifndef FESCUE_SOLVE_INTERNAL_H
#define FESCUE_SOLVE_INTERNAL_H

#include "solve/solve.h"

/* What the driver lends a solver for one run. */
struct field {
    struct problem *problem;
    struct sweep sweep; /* for products of up to solver->width times the rank */
};

/* Where a solver stands. */
struct solve_measure {
    double objective;
    double square;   /* sum over seen of (X - t)^2 */
    double gradient; /* norm of the gradient on the embedded manifold of matrices of this rank, with the ridge */
    double step;     /* length of the last step along its direction; 0 at the start */
};

/* What an objective sums over the seen cells, r = X - t: r^2 / 2, or |r|. */
enum solve_loss { LOSS_SQUARE, LOSS_ABSOLUTE };

enum { SOLVER_PARTS = 16 };
/* All numbers of a matrix, for the memo. */
static inline struct memo_part matrix_part(struct matrix a)
{
    return (struct memo_part){a.data, a.rows * a.stride * sizeof(double)};
}

/* A solver, one static constant of this kind a file, listed in solver.c. Its state holds a point of its own; the
   objective never rises from step to step but by rounding (line_accepts says how much), and a step that finds nothing
   better leaves the point alone. */
struct solver {
    const char *name, *summary;
    enum solve_loss loss;
    size_t width; /* the widest product it asks of the sweep, in ranks */
    /* Takes all memory that the iterations need and measures the start; borrows field and point (rank >= 1). */
    fescue_status (*create)(struct field *field, const struct low_rank *point, void **state);
    void (*measure)(const void *state, struct solve_measure *measure);
    /* One iteration; *moved = false when no step lowers the objective. FESCUE_OK or what a routine below reported. */
    fescue_status (*step)(void *state, bool *moved);
    /* What has to be kept of a state between two steps, so that a later run goes on from there: the numbers that cannot
       be computed from one another, none of them depending on the workers. How many parts. */
    size_t (*keep)(void *state, struct memo_part parts[SOLVER_PARTS]);
    /* The parts have come back into a state that was created for the same field: computes the rest. */
    void (*resume)(void *state);
    /* Writes the state's point in orthonormal form; takes no memory. */
    fescue_status (*point_write)(void *state, struct low_rank *point);
    void (*destroy)(fescue_context *context, void **state);
};
extern const struct solver fixed_rank_cg_solver, grassmann_cg_solver, grassmann_trust_region_solver,
    recursive_least_squares_solver, grassmann_stochastic_solver, grassmann_variance_reduced_solver, subgradient_solver,
    alternating_solver;

/* What solve_run is asked, for the memo; and what it came to, into the memo and out of it (run_memo.c). `before`: lines
   of the trace that are none of it. */
uint64_t run_digest(const struct problem *problem, const struct solver *solver, const struct solve_limits *limits,
                    const struct low_rank *point);
void run_keep(struct memo_work *work, struct low_rank *point, struct solve_result *result, uint64_t before);
fescue_status run_recall(fescue_context *context, struct memo_work *work, const struct solver *solver,
                         struct low_rank *point, struct solve_result *result);

/* Room for one value a seen cell, in the store's precision. The caller owns *values. */
fescue_status values_create(struct field *field, void **values);
void values_reserve(struct arena *arena, const struct field *field); /* the same in an arena */
void *values_carve(struct arena *arena, const struct field *field);
/* The seen cells by row of the problem's target. */
static inline const struct half *field_rows(const struct field *field)
{
    return &field->problem->target.by_row;
}
static inline const struct half *field_columns(const struct field *field)
{
    return &field->problem->target.by_column;
}

/* ---- searching along a line ----------------------------------------------------------------------------------------
 */

/* What is known at the foot of the line: the objective there, its slope (negative), and what rounding may add. */
struct line {
    double objective, slope, slack;
};
struct line line_start(const struct problem *problem, const struct solve_measure *measure, double slope);
/* Armijo's condition with rounding forgiven; false for NaN. */
bool line_accepts(const struct line *line, double t, double objective);
/* A shorter step, from the parabola through what is known. */
double line_shorten(const struct line *line, double t, double objective);
enum { LINE_MOST_TRIALS = 25 }; /* after so many shortenings by 2 to 10 a step is below rounding */

/* ---- variable projection -------------------------------------------------------------------------------------------
 */

/* X = U W' seen from the shorter side: `basis` U (short x rank, orthonormal) is free, `weights` W (long x rank) is the
   best one for it, a small least-squares problem for every line of the longer side. */
struct projection {
    struct field *field;
    const struct half *by_short, *by_long; /* lines are the shorter side, the longer side */
    bool rows_short;
    size_t rank;
    struct matrix basis, weights;
    struct matrix gradient; /* (I - U U') R W, short x rank */
    struct matrix core;     /* rank x rank: U'R W while projecting; any use in between */
    void *residual;         /* R in the order of by_short; NULL: not wanted */
    double *ridge;          /* rank numbers: the penalty is sum_k ridge_k |W_k|^2 */
    double *factors;        /* long x packed_size(rank): Cholesky factors of the lines' systems; NULL: not wanted */
    double square, objective;
    struct matrix spare; /* long x rank, for writing the point */
    double *spectrum, *dense;
};
void projection_reserve(struct arena *arena, const struct field *field, size_t rank);
/* Carves what was reserved and takes the basis of a point; residual and factors are none yet. */
void projection_carve(struct arena *arena, struct field *field, const struct low_rank *point,
                      struct projection *projection);
/* Weights, square, objective and gradient for the basis as it stands, and the residual where there is room for it. Two
   passes. */
void projection_evaluate(struct projection *projection);
/* X in orthonormal form. Spoils spare and core. */
fescue_status projection_write(struct projection *projection, struct low_rank *point);

/* The metric in which the longer side's scale does not count: packed Cholesky factor of W'W, with which tall_solve
   makes g (W'W)^-1 of g. False when W is zero; the factor is then left alone. */
bool projection_metric(struct projection *projection, double *factor);

/* ---- second order --------------------------------------------------------------------------------------------------
 */

/* The Hessian of the projected objective at the projection's basis, as an operator on tangents there. */
struct hessian {
    struct projection *projection;
    bool exact;                   /* else Gauss and Newton's part, which is positive semidefinite */
    struct matrix across, follow; /* long x rank: U's, then how the weights follow: -dW */
    struct matrix product;        /* short x rank */
    struct matrix damping;        /* rank x rank: of the ridge */
    void *values, *zeros;         /* one a seen cell */
    void *long_residual;          /* R in the order of the longer side */
};
void hessian_reserve(struct arena *arena, const struct field *field, size_t rank);
/* Carves, and has the projection keep its factors from now on. */
void hessian_carve(struct arena *arena, struct projection *projection, struct hessian *hessian);
/* For the point where the projection was evaluated last. One pass when exact. */
void hessian_start(struct hessian *hessian, bool exact);
/* product = H[d] for a tangent d. Five passes, seven when exact. */
void hessian_apply(struct hessian *hessian, struct matrix d, struct matrix product);

/* Diagonal blocks of the Hessian, one a line of the shorter side, as its preconditioner (hessian_blocks.c). */
struct hessian_blocks {
    struct projection *projection;
    double *scratch;    /* rank numbers a worker */
    struct matrix core; /* rank x rank: what all blocks have */
    double *factors;    /* short x packed_size(rank) */
};
void hessian_blocks_reserve(struct arena *arena, const struct field *field, size_t shorter, size_t rank);
void hessian_blocks_carve(struct arena *arena, struct projection *projection, struct hessian_blocks *blocks);
/* For the point where the projection, which is to keep its factors, was evaluated last; damping: of the ridge. */
void hessian_blocks_start(struct hessian_blocks *blocks, struct matrix damping);
/* z, a tangent, from g. */
void hessian_blocks_precondition(struct hessian_blocks *blocks, struct matrix g, struct matrix z);

/* One step of a trust region, shared by whatever goes down a projected objective with it. */
struct trust {
    struct projection *projection;
    struct hessian hessian;
    struct hessian_blocks blocks;
    struct grassmann_work work;
    struct matrix basis;                      /* where the step began */
    struct matrix step, slope;                /* eta; g + H eta, short x rank */
    struct matrix descent, direction, curved; /* z, d, H d */
    double *metric;                           /* packed factor of W'W */
    struct matrix gram;                       /* W'W */
    double radius;
    bool slow;                    /* Gauss and Newton's part alone leaves too much of the gradient */
    struct solve_measure measure; /* of where the projection stands; step: |eta| */
};
struct trust_rules {
    double accuracy;     /* the inner gradient falls by this factor, or more when the outer one is small */
    unsigned inner_most; /* products at most */
    bool exact;          /* the exact Hessian where that pays */
};
void trust_reserve(struct arena *arena, const struct field *field, size_t rank);
void trust_carve(struct arena *arena, struct projection *projection, struct trust *trust);
/* Evaluates the projection where it stands and measures it. */
void trust_start(struct trust *trust);
/* What trust_step remembers from step to step, beside the projection's basis. */
enum { TRUST_PARTS = 3 };
size_t trust_keep(struct trust *trust, struct memo_part *parts);
/* trust_start once these have come back. */
void trust_resume(struct trust *trust);
/* First radius again, for a new objective. */
void trust_widen(struct trust *trust);
/* *moved = false when no step lowers the objective; the projection is then as it was. */
fescue_status trust_step(struct trust *trust, const struct trust_rules *rules, bool *moved);

/* ---- leading singular triplets -------------------------------------------------------------------------------------
 */

/* A sparse matrix on the pattern of the problem's cells, seen from the shorter side: entry ij of by_short counts as
   scale_i value_ij. */
struct sparse_operator {
    struct sweep *sweep; /* for krylov_width columns */
    const struct half *by_short, *by_long;
    const void *short_values, *long_values; /* in the order of either half */
    const double *short_scale;              /* NULL: 1 */
};
size_t krylov_width(size_t rank, size_t shorter);
/* The `rank` leading triplets by randomised block Krylov iteration: of_short and of_long orthonormal, spectrum
   descending. rank <= the shorter side. FESCUE_NO_MEMORY. */
fescue_status krylov_triplets(const struct sparse_operator *sparse, size_t rank, uint64_t seed, struct matrix of_short,
                              double *spectrum, struct matrix of_long);

#endif
