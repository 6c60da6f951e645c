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

/* A solver, one static constant of this kind a file, listed in solver.c. Its state holds a point of its own; the
   objective never rises from step to step but by rounding (line_accepts says how much), and a step that finds nothing
   better leaves the point alone. */
struct solver {
    const char *name, *summary;
    size_t width; /* the widest product it asks of the sweep, in ranks */
    /* Takes all memory that the iterations need and measures the start; borrows field and point (rank >= 1). */
    fescue_status (*create)(struct field *field, const struct low_rank *point, void **state);
    void (*measure)(const void *state, struct solve_measure *measure);
    /* One iteration; *moved = false when no step lowers the objective. FESCUE_OK or what a routine below reported. */
    fescue_status (*step)(void *state, bool *moved);
    /* Writes the state's point in orthonormal form; takes no memory. */
    fescue_status (*point_write)(void *state, struct low_rank *point);
    void (*destroy)(fescue_context *context, void **state);
};
extern const struct solver fixed_rank_cg_solver, grassmann_cg_solver;

/* Room for one value a seen cell, in the store's precision. The caller owns *values. */
fescue_status values_create(struct field *field, void **values);
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
    void *residual;         /* R in the order of by_short */
    double *ridge;          /* rank numbers */
    double square, objective;
    struct matrix spare; /* long x rank, for writing the point */
    double *spectrum, *dense;
};
void projection_reserve(struct arena *arena, const struct field *field, size_t rank);
/* Carves what was reserved and takes the basis of a point. */
void projection_carve(struct arena *arena, struct field *field, const struct low_rank *point,
                      struct projection *projection);
/* Weights, residual, square, objective and gradient for the basis as it stands. Two passes. */
void projection_evaluate(struct projection *projection);
/* X in orthonormal form. Spoils spare and core. */
fescue_status projection_write(struct projection *projection, struct low_rank *point);

/* The metric in which the longer side's scale does not count: packed Cholesky factor of W'W, and z = g (W'W)^-1.
   False when W is zero; factor and z are then left alone. */
bool projection_metric(struct projection *projection, double *factor);
void projection_precondition(const double *factor, struct matrix g, struct matrix z);

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
