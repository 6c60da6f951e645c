/* SPDX-License-Identifier: MIT
 *
 * Arithmetic: loops over observed cells (sweep), small dense algebra (dense), sparse symmetric systems (sparse_spd,
 * sparse_field), processes in time (kalman, chain).
 *
 * Factor matrices are tall (lines x rank) and row-major, so that the rank numbers of one line lie together; the stride
 * is the rank rounded up to a multiple of 8 and the padding is zero, so that loops need no remainder. To LAPACK, which
 * is column-major, such a matrix is its own transpose: a QR of it is an LQ there. No routine here allocates.
 */
#ifndef FESCUE_NUMERIC_H
#define FESCUE_NUMERIC_H

#include "table/table.h"

/* A view: owns nothing. Entry (i, j) is data[i*stride + j]. */
struct matrix {
    double *data;
    size_t rows, columns, stride;
};
#define MATRIX_AT(m, i, j) ((m).data[(size_t)(i) * (m).stride + (size_t)(j)])
static inline size_t factor_stride(size_t rank)
{
    return (rank + 7) / 8 * 8;
}
/* Reserving and carving a factor in an arena (lines x rank, padded, zeroed). */
void matrix_reserve(struct arena *arena, size_t rows, size_t columns);
struct matrix matrix_carve(struct arena *arena, size_t rows, size_t columns);
/* The first `columns` columns of a, same data. */
struct matrix matrix_left(struct matrix a, size_t columns);
/* Lines, or columns, from `first` on, `most` of them or as many as are left, same data; in the innermost loops too. */
static inline struct matrix matrix_lines(struct matrix a, size_t first, size_t most)
{
    a.data += first * a.stride;
    a.rows = a.rows - first < most ? a.rows - first : most;
    return a;
}
static inline struct matrix matrix_columns(struct matrix a, size_t first, size_t most)
{
    a.data += first;
    a.columns = a.columns - first < most ? a.columns - first : most;
    return a;
}

/* A function that the compiler makes for several instruction sets; the one that fits is taken when the program starts.
   For elementwise loops, whose results do not depend on it. Not by clang, which calls the choice by another name than
   the function (packed_inverse.ifunc), so that nobody finds it. */
#if defined(__x86_64__) && !defined(__clang__)
#define NUMERIC_VERSIONS __attribute__((target_clones("avx512f", "avx2", "default")))
#else
#define NUMERIC_VERSIONS
#endif

/* ---- dense: all on CBLAS and LAPACKE with the library's own threads held still --------------------------------- */

void matrix_copy(struct matrix from, struct matrix to);
void matrix_zero(struct matrix a);
void matrix_scale(double alpha, struct matrix a);
void matrix_add(double alpha, struct matrix x, struct matrix y); /* y += alpha x */
double matrix_dot(struct matrix a, struct matrix b);             /* sum of a_ij b_ij */
double matrix_norm(struct matrix a);                             /* Frobenius, safe for 1e+-150 */
void matrix_multiply(double alpha, struct matrix a, bool transpose_a, struct matrix b, bool transpose_b, double beta,
                     struct matrix c);                           /* c = alpha op(a) op(b) + beta c */
void matrix_scale_columns(struct matrix a, const double *scale); /* a_ij *= scale_j */
/* Steps of work on tall matrices in one round of the team; they do not depend on each other. A step does, for every
   piece of lines, to = beta to + sum of alpha a op(b) over its terms     (b without data: alpha a) and then its sums,
   over what `to` has become and over others of as many lines cross = a'b, or *dot = sum of a_ij b_ij where that is not
   NULL `to` has no data in a step of sums alone. Sums are written when all steps are done, so that a cross may be some
   term's b. work: tall_run_size(lines, columns, sums) for every step that has sums, with as many columns as its widest
   matrix.
 */
enum { TALL_STEPS = 2, TALL_TERMS = 3, TALL_SUMS = 4 };
struct tall_step {
    struct matrix to;
    double beta;
    size_t terms, sums;
    struct tall_term {
        double alpha;
        struct matrix a, b;
        bool transpose; /* of b */
    } term[TALL_TERMS];
    struct tall_sum {
        struct matrix a, b, cross;
        double *dot;
    } sum[TALL_SUMS];
};
void tall_run(fescue_context *context, const struct tall_step *step, size_t steps, double *work);
size_t tall_run_size(size_t lines, size_t columns, size_t sums);
/* One such thing alone: c = alpha a b + beta c, c = a'b. `work` from dense_work_size(lines,
   the larger number of columns). */
void tall_multiply(fescue_context *context, double alpha, struct matrix a, struct matrix b, double beta,
                   struct matrix c);
void tall_cross(fescue_context *context, struct matrix a, struct matrix b, struct matrix c, double *work);
/* c = alpha a b' + beta c for a small b. */
void tall_multiply_transposed(fescue_context *context, double alpha, struct matrix a, struct matrix b, double beta,
                              struct matrix c);
/* to = from, its columns times `scale` or NULL; its lines times scale; its lines solved with a packed factor; y = alpha
   x + beta y; the sums of a_ij b_ij and of weight_j a_ij^2. */
void tall_copy(fescue_context *context, struct matrix from, const double *scale, struct matrix to);
void tall_scale_lines(fescue_context *context, struct matrix from, const double *scale, struct matrix to);
void tall_solve(fescue_context *context, const double *factor, struct matrix from, struct matrix to);
void tall_add(fescue_context *context, double alpha, struct matrix x, double beta, struct matrix y);
double tall_dot(fescue_context *context, struct matrix a, struct matrix b);
double tall_square(fescue_context *context, struct matrix a, const double *weight);
/* a = q r with r upper triangular and diag(r) >= 0; q overwrites a (lines x k, lines >= k); r is k x k or NULL data. A
   rank-deficient a still gives an orthonormal q. `work` from dense_work_size(lines, k) doubles. */
fescue_status dense_qr(fescue_context *context, struct matrix a, struct matrix r, double *work);
/* Thin SVD a = u diag(s) v' of lines x k, lines >= k: u overwrites a, s descending [k], v is k x k. */
fescue_status dense_svd(fescue_context *context, struct matrix a, double *s, struct matrix v, double *work);
/* The same of a square a, in a fraction of the time where it is near to a diagonal one. */
fescue_status dense_svd_near_diagonal(fescue_context *context, struct matrix a, double *s, struct matrix v,
                                      double *work);
/* Symmetric a (k x k, upper used) = q diag(w) q', w ascending; q overwrites a. */
fescue_status dense_eigen(fescue_context *context, struct matrix a, double *w, double *work);
/* From gram = a'a (k x k, upper triangle used) the r of a = q r, which overwrites it, and the inverse of r, so that q =
   a inverse: orthonormal to rounding times the square of a's condition, with its columns scaled to length 1, which is
   below 30 k where this returns true. Otherwise both are spoilt. `work` of k doubles. With fewer lines a column than
   this, the sums cost what they save. */
enum { DENSE_GRAM_LINES = 4 };
bool dense_gram_triangle(struct matrix gram, struct matrix inverse, double *work);
/* Work, in doubles, that is enough for every dense_ routine on lines x columns. */
size_t dense_work_size(size_t lines, size_t columns);

/* Packed small systems: a symmetric positive definite k x k matrix kept as its lower triangle, row by row
   (k(k+1)/2 numbers). Cholesky in place; on breakdown adds 1e-14 trace/k to the diagonal, tenfold until it goes. */
void packed_cholesky(double *a, size_t k);
void packed_cholesky_lifted(double *a, size_t k, double share); /* begins with share trace/k on the diagonal */
void packed_solve(const double *factor, size_t k, double *b);   /* b <- (L L')^-1 b */
/* moment <- T moment T', packed, for the k x k `map` T and its transpose, both of stride factor_stride(k) with zeros
   behind column k. work: packed_congruence_work(k) doubles. */
void packed_congruence(double *moment, size_t k, struct matrix map, struct matrix transposed, double *work);
size_t packed_congruence_work(size_t k);
/* inverse <- (L L')^-1, packed as the factor is; not in place, k at most PACKED_INVERSE_MOST. */
enum { PACKED_INVERSE_MOST = 260 };
void packed_inverse(const double *factor, size_t k, double *inverse);
static inline size_t packed_size(size_t k)
{
    return k * (k + 1) / 2;
}

/* ---- sweep: one pass over the observed cells of one direction --------------------------------------------------- */

/* All take a half (lines x length), `left` with one row a line and `right` with one row a position, equal columns, and
   the team of the context; results are the same bits for any number of workers. The numbers of a row behind its columns
   up to the next multiple of 8 must be there and be zero, in factors read and written (matrix_carve makes such ones).
   Arithmetic in the store's precision, sums over cells in double. All workspace is taken by sweep_create; single
   precision copies each call's factors there. Numbers of factors are finite: one that is not may spoil the
   result of the line before its own as well. The half may be of any store with as many rows and columns as that
   of sweep_create. */
struct sweep_kernel;
struct sweep {
    fescue_context *context;
    enum fescue_precision precision;
    struct arena arena; /* partial sums, copies of rows, one small workspace a worker */
    size_t rank_most;   /* at most 257 */
    const char *kernel; /* which instruction set was chosen: "portable", "avx2", "avx512" */
    const struct sweep_kernel *kernels;
    const struct batch_kernel *batch;
    double *partial, *room;
    struct sweep_copies {
        float *shared; /* in single precision: both factors' rows of a side */
        char *own;     /* of each worker: which opening its rows are of, and the rows; NULL with one worker alone */
        size_t shared_size, own_size, near_most;
        uint64_t openings;
    } copies;                  /* of rows (sweep_rows.c) */
    struct sweep_slabs *slabs; /* of sweep_arrange, or NULL */
    size_t workers;            /* the team may not grow beyond what it was at sweep_create */
};
fescue_status sweep_create(fescue_context *context, const struct cells *cells, size_t rank_most, struct sweep *sweep);
void sweep_destroy(struct sweep *sweep);
/* For many sweeps over a half whose lines are long and read right rows from far away: keeps its cells once more, in an
   order in which they are near. Sweeps with the half's own values that neither keep nor take a residual then use it.
   Does nothing where it would not pay. The half stays as it is for as long as the sweep is used. Once a sweep. */
fescue_status sweep_arrange(struct sweep *sweep, const struct half *half);

/* r_k = left_i . right_j - x_k over all cells; *square = sum r_k^2. gradient (lines x rank, or data NULL) = R right.
   residual (a value array in the half's order and the store's precision, or NULL) receives r. */
void sweep_residual(struct sweep *sweep, const struct half *half, struct matrix left, struct matrix right,
                    struct matrix gradient, void *residual, double *square);
/* product (lines x rank) = S right for the sparse S with the half's pattern and the given values (store's precision).
 */
void sweep_multiply(struct sweep *sweep, const struct half *half, const void *values, struct matrix right,
                    struct matrix product);
/* z_k = a_i . right_j + left_i . b_j (a tangent step seen on the cells): *zz = sum z_k^2 and, with a residual r given
   in the half's order, *zr = sum z_k r_k; both NULL where that is not wanted. */
void sweep_tangent(struct sweep *sweep, const struct half *half, struct matrix a, struct matrix right,
                   struct matrix left, struct matrix b, const void *residual, double *zr, double *zz);
/* Ridge least squares of every line on its own: w_i = argmin sum_j (w . right_j - x_ij)^2 + sum_k ridge_k w_k^2
   (ridge: rank numbers, or NULL for 0). A line without cells gets 0. factors (lines x packed_size(rank), or NULL)
   receives the Cholesky factors. weights is lines x rank. */
void sweep_solve(struct sweep *sweep, const struct half *half, struct matrix right, const double *ridge,
                 struct matrix weights, double *factors);
/* *square and *absolute = sums of (left_i . right_j - x_k)^2 and of its size, for errors on hidden cells. */
void sweep_errors(struct sweep *sweep, const struct half *half, struct matrix left, struct matrix right, double *square,
                  double *absolute);

/* ---- batches: eight lines and their small systems side by side --------------------------------------------------- */

/* Number `at` of lane l stands at [at * BATCH_LANES + l]; arrays of batches are as long as if `at` went up to a whole
   multiple of 8. The kernel is the one of the instruction set (FESCUE_KERNEL=portable|avx2|avx512 overrules). What a
   lane gives does not depend on the other lanes. */
enum { BATCH_LANES = 8 };
struct batch_kernel;
const struct batch_kernel *batch_kernel_choose(void);
const char *kernel_name(void); /* "portable", "avx2", "avx512" */
static inline size_t batch_size(size_t numbers)
{
    return (numbers + 7) / 8 * 8 * BATCH_LANES;
}
/* Eight packed positive definite k x k matrices a, overwritten by their factors: b <- A^-1 b, and inverse <- A^-1,
   packed, unless NULL. Returns a bit for each lane whose pivots broke down and whose results mean nothing: that one is
   to be done again by packed_cholesky, which lifts such matrices. */
unsigned packed_batch_solve(const struct batch_kernel *kernel, double *a, size_t k, double *b, double *inverse);
/* square += left'right of `count` rows each, the lower triangle of it; all rows are factor_stride(size) long. Above the
   diagonal, right of `size` and below, up to gram_rows(size) rows, square holds nothing. */
void gram_add(const struct batch_kernel *kernel, const double *left, const double *right, size_t count, size_t size,
              double *square);
static inline size_t gram_rows(size_t size)
{
    return (size + 3) / 4 * 4;
}
/* line[l][at] <- batch, `size` numbers each and up to the next multiple of 8. */
void packed_batch_unpack(const struct batch_kernel *kernel, const double *batch, size_t size,
                         double *const line[BATCH_LANES]);

/* ---- moments: sums of second moments over the seen cells of lines ------------------------------------------------ */

/* E[g_j g_j'] of `regressors` regressors for every position j: a packed lower triangle each, at data + j * stride.
   Regressor `one` is the constant 1. weight: one number a position, or NULL for 1. A view; owns nothing. */
struct moments {
    double *data;
    size_t stride, regressors, one;
    const double *weight;
    const struct batch_kernel *kernel;
    const uint64_t *halves; /* the same in half the bytes, kept to 2^-21 of each number, and then gathered from; or
                               NULL (moments_halves.c). A line has moments_words */
    const double *total;    /* weight times moment, summed over all positions; or NULL (moments_total) */
};
/* Whole registers may be read from the beginning of any row of a triangle. */
static inline size_t moments_stride(size_t regressors)
{
    return (packed_size(regressors) + 7 + 7) / 8 * 8;
}
/* Of eight lines side by side: packed_size(regressors), regressors and 1 numbers a lane. */
struct moments_batch {
    double *second, *target, *square;
    double *work;
};
size_t moments_batch_size(size_t regressors); /* doubles, a multiple of 8 */
/* Words of a position in halves, and doubles of room to write them. */
static inline size_t moments_words(size_t regressors)
{
    return (packed_size(regressors) + 15) / 16 * 8;
}
static inline size_t moments_room(size_t regressors)
{
    return 2 * moments_words(regressors);
}
/* For gathers over the lines of this half: where they see most positions, makes total, from which each then takes what
   it does not see; else NULL. Anew whenever moments, halves or weights have changed. room: as many doubles as
   moments_total_size, for as long as total is used. */
void moments_total(fescue_context *context, struct moments *moments, const struct half *half, double *room);
size_t moments_total_size(size_t regressors);
/* The halves of one moment. */
void moments_halve(const struct moments *moments, const double *moment, double *room, uint64_t *halves);
struct moments_batch moments_batch_carve(double *at, size_t regressors);
/* Over the cells of the lines first .. first+7, as far as there are so many: second = sum c M, target = sum c z E[g],
   square = sum c z^2; 0 in lanes without a line. */
void moments_gather(const struct moments *moments, const struct half *half, enum fescue_precision precision,
                    size_t first, const struct moments_batch *out);

/* ---- sparse symmetric positive definite systems, through CHOLMOD ------------------------------------------------- */

/* Solves (diag(d) + [0 B; B' 0]) y = rhs for `count` right-hand sides, where d has rows + columns entries and B is the
   rows x columns matrix with the cells' pattern and weights, or unit values where they have none: the normal equations
   of two-way effects. rhs and
   solution hold count vectors of rows + columns numbers and do not overlap. Direct by CHOLMOD; by conjugate gradients
   to 1e-12 where the factor would be far larger than the data (see the file). The same bits for any number of workers.
   FESCUE_NO_MEMORY; FESCUE_DEFECT when the matrix is not positive definite. */
fescue_status sparse_two_way_solve(fescue_context *context, const struct cells *cells, const double *diagonal,
                                   size_t count, const double *rhs, double *solution);

/* A Gaussian field over near columns, of precision A = diag(d) + strength * (graph Laplacian), d > 0 (sparse_field.c).
   What is solved with, and whose inverse is asked for, is the last factor. FESCUE_NO_MEMORY; FESCUE_DEFECT when A is
   not positive definite. */
struct sparse_field;
fescue_status sparse_field_create(fescue_context *context, const struct nearness *near, struct sparse_field **out);
fescue_status sparse_field_factor(struct sparse_field *field, const double *diagonal, double strength);
fescue_status sparse_field_solve(struct sparse_field *field, const double *rhs, double *solution); /* may overlap */
void sparse_field_variances(struct sparse_field *field, double *variance);     /* the diagonal of A^-1 */
double sparse_field_energy(const struct sparse_field *field, const double *x); /* x'Lx */
void sparse_field_destroy(fescue_context *context, struct sparse_field **field);

/* ---- kalman: a scalar AR(1) process seen with noise (kalman.c) ----------------------------------------------------
 */

struct kalman_law {
    double variance, correlation; /* correlation over one step, 0 <= it < 1 */
};
struct kalman_series {
    size_t count;
    const double *time, *value, *noise; /* ascending; noise: variance of each value, INFINITY: not seen */
};
struct kalman_state { /* posterior, count numbers each; cross: covariance with the step before, 0 for the first */
    double *mean, *variance, *cross;
};
/* Length of a step; two lines at the same time are told apart. */
double kalman_step(double from, double to);
/* Posterior of all steps; returns the log likelihood of the values. */
double kalman_smooth(const struct kalman_series *series, const struct kalman_law *law,
                     const struct kalman_state *state);
/* Mean between two steps of known mean (their covariances do not matter), step[0] after the one, step[1] before the
   other. */
double kalman_between(const struct kalman_law *law, const double step[2], const double mean[2]);

/* Sums of second moments by length of step, for learning the law. All members are doubles and add up. */
enum { KALMAN_CLASSES = 128 };
struct kalman_tally {
    double series, first; /* first steps: how many, their E x^2 */
    double count[KALMAN_CLASSES], length[KALMAN_CLASSES];
    double now[KALMAN_CLASSES], both[KALMAN_CLASSES], before[KALMAN_CLASSES]; /* E x^2, E x x-, E x-^2 */
};
void kalman_tally_step(struct kalman_tally *tally, double step, double now, double both, double before);
void kalman_tally_series(struct kalman_tally *tally, const struct kalman_series *series,
                         const struct kalman_state *state);
void kalman_tally_add(struct kalman_tally *tally, double share, const struct kalman_tally *more); /* += share more */
/* The law that the tally makes most likely. Stays as it is where all moments are 0. */
void kalman_learn(const struct kalman_tally *tally, struct kalman_law *law);

/* ---- chain: vectors in time whose components are AR(1) (chain.c) --------------------------------------------------
 */

struct chain {
    size_t steps, size;
    const double *time;           /* ascending, one a step */
    const struct kalman_law *law; /* one a component; variance 0: held at 0 */
    const uint32_t *line;         /* of each step; precision, mean, cross are by line. NULL: the same */
    const double *precision;      /* of the data of each line, packed */
    size_t precision_stride;
    const double *mean; /* size numbers a line: right side of the data */
    size_t mean_stride;
    double *cross;              /* size numbers a line: covariance of each component with itself one step before */
    double *forward, *backward; /* room: steps x chain_room(size) each */
};
size_t chain_room(size_t size);
size_t chain_work(size_t size); /* doubles of `work` in all three */
/* Both messages, in any order or at once; then the marginals of steps first .. first+7, as far as there are so many,
   into `out` (BATCH_LANES x chain_room(size)). */
void chain_forward(const struct chain *chain, double *work);
void chain_backward(const struct chain *chain, double *work);
void chain_marginals(const struct chain *chain, const struct batch_kernel *kernel, size_t first, double *out,
                     double *work);
/* Of step first + lane: where its mean and its covariance, packed, stand in `out`. */
const double *chain_mean(const struct chain *chain, const double *out, size_t lane);
const double *chain_covariance(const struct chain *chain, const double *out, size_t lane);

#endif
