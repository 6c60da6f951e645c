/* SPDX-License-Identifier: MIT
 *
 * Between the sweeps (one file an operation, precision-blind) and their kernels (sweep_kernel.h, included once for each
 * precision and instruction set).
 */
#ifndef FESCUE_NUMERIC_SWEEP_INTERNAL_H
#define FESCUE_NUMERIC_SWEEP_INTERNAL_H

#include "numeric/batch_internal.h"

/* Numbers a line of a factor may have: rank 256, one more for a solver's constant, up to whole registers. */
enum { SWEEP_MOST_WIDTH = 272 };
/* Cells in flight at once, and cells gathered before their products are added to a line's normal equations. */
enum { SWEEP_CHUNK = 32 };

/* A factor whose rows are read for every cell: rows of `width` numbers in the sweep's precision, `stride` apart. */
struct sweep_rows {
    const void *data;
    size_t stride;
};

/* What a kernel does to one block of lines. Sums of the block go to `sums`. */
struct sweep_job {
    struct sweep *sweep;
    const struct half *half;
    struct matrix left, a;        /* read once a line, and rounded then */
    struct matrix right_of, b_of; /* rows read for every cell; b's data may be NULL */
    struct sweep_rows right, b;   /* those of the half's positions, as kernels see them (sweep_rows.c) */
    size_t first;                 /* of them, in the factors */
    bool near;                    /* that all of them fit into a core's own cache */
    bool own;                     /* that every worker takes a copy of its own of them */
    size_t width; /* numbers worked on in each row: the rank up to whole registers, zeros behind the rank */
    size_t rank;
    const void *values;    /* of cells, in the half's order: the half's own, or residuals, or others */
    void *residual;        /* written by residual; may be NULL */
    struct matrix product; /* gradient, product or weights; data may be NULL */
    const double *ridge;
    double *factors;
    bool more; /* residual and multiply add to what stands in product */
};

enum { SWEEP_SUMS = 2 };
typedef void sweep_block(const struct sweep_job *job, size_t block, size_t worker, double sums[SWEEP_SUMS]);
struct sweep_kernel {
    size_t lanes; /* numbers in a register */
    sweep_block *residual, *multiply, *tangent, *solve;
    const struct sweep_kernel *narrow; /* for multiply and tangent of rows of 8 numbers; or NULL for itself */
};
extern const struct sweep_kernel sweep_portable_double, sweep_portable_single;
#if defined(__x86_64__)
extern const struct sweep_kernel sweep_avx2_double, sweep_avx2_single, sweep_avx512_double, sweep_avx512_single;
#endif

/* Room for copies of rows, of sides of at most `lines`: reserved in the sweep's arena, and carved from it. */
void sweep_rows_reserve(struct sweep *sweep, size_t lines);
void sweep_rows_carve(struct sweep *sweep);
/* Lets kernels see `lines` rows of the job's factors, from `first` on: the rows themselves, or copies. */
void sweep_rows_open(struct sweep_job *job, size_t first, size_t lines);
/* All rows of the half's positions, without copies of a worker's own. */
void sweep_rows_open_shared(struct sweep_job *job);
/* Before a block, by the worker who goes through it, in a job of the block's own. */
void sweep_rows_take(struct sweep_job *job, size_t worker);
/* Runs one kernel over all blocks and adds up its sums. */
void sweep_run(struct sweep_job *job, sweep_block *kernel, double sums[SWEEP_SUMS]);

/* A half's cells in the order of slabs (sweep_slabs.c). */
struct sweep_slabs {
    const uint64_t *of; /* start and values of the half */
    const void *of_value;
    size_t count;
    uint32_t positions; /* of a slab; the last may have less */
    struct half *half;  /* one a slab, with positions from 0 on */
    uint64_t *start;    /* count x lines + 1: of a slab, its lines and the beginning of the next slab */
    uint32_t *across;
    void *value;
};
/* sweep_run over the slabs of the job's half, where it has been arranged and nothing is asked in its own order. */
void sweep_slabs_run(struct sweep_job *job, sweep_block *kernel, double sums[SWEEP_SUMS]);
void sweep_slabs_free(struct sweep *sweep);

/* Width of the job's rows for factors of this rank. */
size_t sweep_width(const struct sweep *sweep, size_t rank);

/* One worker's room in sweep_solve. Squares are width x width. */
struct sweep_room {
    void *rows;                        /* SWEEP_CHUNK x width, gathered */
    double *gram, *factor, *lower;     /* upper triangles of G and U, and U' */
    double *side, *solution, *inverse; /* width each */
    double *systems, *sides;           /* of eight lines side by side, where ranks are small */
};
/* Up to here systems are solved eight at a time: 133 KB of factors stay in a core's own cache. */
enum { SWEEP_BATCH_RANK = 64 };
struct sweep_room sweep_room_of(const struct sweep *sweep, size_t worker);

/* The same of lane `lane` of a batch. */
void sweep_lane_store(const struct sweep_job *job, const struct sweep_room *room, uint32_t line, size_t lane);
/* A line whose U' is in lower and whose weights are in solution: writes both where they belong. */
void sweep_line_store(const struct sweep_job *job, const struct sweep_room *room, uint32_t line);
/* A line that has no cells, or whose factor broke down: from gram on by the rules of packed_cholesky. */
void sweep_line_solve(const struct sweep_job *job, const struct sweep_room *room, uint32_t line);

#endif
