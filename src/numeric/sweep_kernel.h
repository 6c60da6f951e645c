/* SPDX-License-Identifier: MIT
 *
 * The loops over observed cells, once for every precision and instruction set. The including file defines
 *
 *     REAL                 float or double, the precision of factors and values
 *     LANES                REALs in a register: 2, 4, 8 or 16
 *     WIDES                registers that LANES doubles take: 1 when REAL is double, 2 when it is float
 *     MADD(a, b, c)        a b + c on registers of REAL; MADD_WIDE on registers of double
 *     LOWER(x), UPPER(x)   the halves of a register of floats, as doubles
 *     WIDEN_FOUR(x)        four floats as doubles
 *     COMMON_REGISTERS(X)  X(n) for each number n of registers a row that deserves loops of its own
 *     SWEEP_KERNEL         the name of the table this gives
 *
 * Four cells are in flight. For the cells k..k+3 of a line, with the line's row l in registers:
 *
 *     s_c = sum over registers of l * p_c        p_c the right row of cell c: one register of partial sums a cell
 *     r   = (sum of s_0, ..., sum of s_3) - x    four horizontal sums by a transposing tree
 *     g  += r_0 p_0 + r_1 p_1 + r_2 p_2 + r_3 p_3
 *
 * Within the four, arithmetic is REAL; what is added over the cells of a line (g, sums of squares) is double. The last
 * one to three cells of a line are filled up to four, and r is then 0 for those that are not there. The right rows of
 * the cells AHEAD of these are asked for beforehand: they lie anywhere in memory, and the order of cells says where.
 *
 * The loops are written for any number of registers a row and made once for each common number of them, where
 * everything is unrolled and stays in registers. A line is worked on by one worker from its first to its last cell, so
 * that bits depend on REAL, LANES and MADD only.
 */
#include <assert.h>
#include <float.h>
#include <math.h>
#include <string.h>

/* Some 32 cells of 3 to 4 ns hide a trip to memory of 100 ns, and what a busy machine adds to it. */
enum { AHEAD = 32, CACHE_LINE = 64 };
enum { MOST_REGISTERS = SWEEP_MOST_WIDTH / LANES, WIDE_LANES = LANES / WIDES };

#define REGISTER_OF(type, count)                                                                                       \
    type __attribute__((vector_size((count) * sizeof(type)), aligned(sizeof(type)), may_alias))
typedef REGISTER_OF(REAL, LANES) vec;
typedef REGISTER_OF(double, WIDE_LANES) wide;
typedef REGISTER_OF(REAL, 4) four;
typedef REGISTER_OF(double, 4) four_wide;
typedef REGISTER_OF(int64_t, 4) four_bits;

#if WIDES == 1
#define REAL_EPSILON DBL_EPSILON
#else
#define REAL_EPSILON FLT_EPSILON
#endif
#define INLINE static inline __attribute__((always_inline))

/* ---- registers ----------------------------------------------------------------------------------------------------
 */

INLINE vec splat(REAL x)
{
    return x - (vec){0};
}

INLINE wide splat_wide(double x)
{
    return x - (wide){0};
}

/* sum[0 .. WIDES-1] += x, and four REALs as doubles */
#if WIDES == 1
INLINE void wide_add(wide *sum, const vec *x)
{
    *sum += *x;
}
#define WIDEN_FOUR(x) (x)
#else
INLINE void wide_add(wide *sum, const vec *x)
{
    sum[0] += LOWER(*x);
    sum[1] += UPPER(*x);
}
#endif

/* (sum of a, sum of b, sum of c, sum of d), pairs first. */
#if LANES == 2
INLINE void sum_four(const vec s[4], four *out)
{
    vec ab = __builtin_shufflevector(s[0], s[1], 0, 2) + __builtin_shufflevector(s[0], s[1], 1, 3);
    vec cd = __builtin_shufflevector(s[2], s[3], 0, 2) + __builtin_shufflevector(s[2], s[3], 1, 3);
    *out = __builtin_shufflevector(ab, cd, 0, 1, 2, 3);
}
#elif LANES == 4
INLINE void sum_four(const vec s[4], four *out)
{
    vec ab = __builtin_shufflevector(s[0], s[1], 0, 4, 2, 6) + __builtin_shufflevector(s[0], s[1], 1, 5, 3, 7);
    vec cd = __builtin_shufflevector(s[2], s[3], 0, 4, 2, 6) + __builtin_shufflevector(s[2], s[3], 1, 5, 3, 7);
    *out = __builtin_shufflevector(ab, cd, 0, 1, 4, 5) + __builtin_shufflevector(ab, cd, 2, 3, 6, 7);
}
#elif LANES == 8
INLINE void sum_four(const vec s[4], four *out)
{
    vec ab = __builtin_shufflevector(s[0], s[1], 0, 1, 2, 3, 8, 9, 10, 11) +
             __builtin_shufflevector(s[0], s[1], 4, 5, 6, 7, 12, 13, 14, 15);
    vec cd = __builtin_shufflevector(s[2], s[3], 0, 1, 2, 3, 8, 9, 10, 11) +
             __builtin_shufflevector(s[2], s[3], 4, 5, 6, 7, 12, 13, 14, 15);
    vec pairs = __builtin_shufflevector(ab, cd, 0, 8, 2, 10, 4, 12, 6, 14) +
                __builtin_shufflevector(ab, cd, 1, 9, 3, 11, 5, 13, 7, 15); /* a c a c b d b d */
    *out = __builtin_shufflevector(pairs, pairs, 0, 4, 1, 5) + __builtin_shufflevector(pairs, pairs, 2, 6, 3, 7);
}
#else
INLINE void sum_four(const vec s[4], four *out)
{
    vec ab = __builtin_shufflevector(s[0], s[1], 0, 1, 2, 3, 4, 5, 6, 7, 16, 17, 18, 19, 20, 21, 22, 23) +
             __builtin_shufflevector(s[0], s[1], 8, 9, 10, 11, 12, 13, 14, 15, 24, 25, 26, 27, 28, 29, 30, 31);
    vec cd = __builtin_shufflevector(s[2], s[3], 0, 1, 2, 3, 4, 5, 6, 7, 16, 17, 18, 19, 20, 21, 22, 23) +
             __builtin_shufflevector(s[2], s[3], 8, 9, 10, 11, 12, 13, 14, 15, 24, 25, 26, 27, 28, 29, 30, 31);
    vec abcd = __builtin_shufflevector(ab, cd, 0, 1, 2, 3, 8, 9, 10, 11, 16, 17, 18, 19, 24, 25, 26, 27) +
               __builtin_shufflevector(ab, cd, 4, 5, 6, 7, 12, 13, 14, 15, 20, 21, 22, 23, 28, 29, 30, 31);
    vec pairs = abcd + __builtin_shufflevector(abcd, abcd, 1, 0, 3, 2, 5, 4, 7, 6, 9, 8, 11, 10, 13, 12, 15, 14);
    *out = __builtin_shufflevector(pairs, pairs, 0, 4, 8, 12) + __builtin_shufflevector(pairs, pairs, 2, 6, 10, 14);
}
#endif

/* ---- four cells ---------------------------------------------------------------------------------------------------
 */

/* In the three below a broken group goes through a copy, so that whole ones stay in registers. */

/* values[k], zeros for the cells that are not there. */
INLINE void four_load(const REAL *values, uint64_t k, size_t count, four *to)
{
    if (__builtin_expect(count == 4, 1)) {
        *to = *(const four *)(values + k);
    } else {
        REAL number[4] = {0};
        for (size_t c = 0; c < count; c++)
            number[c] = values[k + c];
        *to = (four){number[0], number[1], number[2], 0};
    }
}

INLINE void four_store(const four *from, uint64_t k, size_t count, REAL *values)
{
    if (__builtin_expect(count == 4, 1)) {
        *(four *)(values + k) = *from;
    } else {
        const REAL number[3] = {(*from)[0], (*from)[1], (*from)[2]};
        for (size_t c = 0; c < count; c++)
            values[k + c] = number[c];
    }
}

/* Zeros for the cells that are not there. */
INLINE void four_cut(four *r, size_t count)
{
    if (__builtin_expect(count < 4, 0))
        *r = (four){(*r)[0], count > 1 ? (*r)[1] : 0, count > 2 ? (*r)[2] : 0, 0};
}

/* The positions of the cells; those that are not there are at the place of the first. */
INLINE void positions_load(const uint32_t *across, size_t count, uint32_t position[4])
{
    if (__builtin_expect(count == 4, 1))
        memcpy(position, across, 4 * sizeof *across);
    else
        for (size_t c = 0; c < 4; c++)
            position[c] = across[c < count ? c : 0];
}

INLINE void rows_find(const struct sweep_rows *rows, const uint32_t position[4], const REAL *row[4])
{
    const REAL *data = rows->data;
    for (size_t c = 0; c < 4; c++)
        row[c] = data + position[c] * rows->stride;
}

INLINE void row_prefetch(const REAL *row, size_t width)
{
    for (size_t at = 0; at < width * sizeof(REAL); at += CACHE_LINE)
        __builtin_prefetch((const char *)row + at);
}

INLINE void rows_prefetch(const struct sweep_rows *rows, const uint32_t *across, size_t width)
{
    for (size_t c = 0; c < 4; c++)
        row_prefetch((const REAL *)rows->data + across[AHEAD + c] * rows->stride, width);
}

INLINE void row_load(const struct sweep_rows *rows, uint32_t line, vec *to, const size_t registers)
{
    const REAL *row = (const REAL *)rows->data + line * rows->stride;
    for (size_t v = 0; v < registers; v++)
        to[v] = *(const vec *)(row + v * LANES);
}

/* s_c += l * row_c */
INLINE void rows_dot(const vec *l, const REAL *const row[4], vec s[4], const size_t registers)
{
    for (size_t v = 0; v < registers; v++)
        for (size_t c = 0; c < 4; c++)
            s[c] = MADD(l[v], *(const vec *)(row[c] + v * LANES), s[c]);
}

/* g += sum over c of r_c row_c */
INLINE void rows_gather(const four *r, const REAL *const row[4], wide *g, const size_t registers)
{
    vec r0 = splat((*r)[0]), r1 = splat((*r)[1]), r2 = splat((*r)[2]), r3 = splat((*r)[3]);
    for (size_t v = 0; v < registers; v++) {
        vec sum = r0 * *(const vec *)(row[0] + v * LANES);
        sum = MADD(r1, *(const vec *)(row[1] + v * LANES), sum);
        sum = MADD(r2, *(const vec *)(row[2] + v * LANES), sum);
        sum = MADD(r3, *(const vec *)(row[3] + v * LANES), sum);
        wide_add(g + v * WIDES, &sum);
    }
}

INLINE void sums_clear(wide *g, const size_t registers)
{
    for (size_t v = 0; v < registers * WIDES; v++)
        g[v] = (wide){0};
}

/* Single rows may be wider than the double ones: what lies behind is zero, and not ours to write. */
INLINE void product_store(const struct sweep_job *job, uint32_t line, const wide *g, const size_t registers)
{
    double *row = job->product.data + line * job->product.stride;
    size_t width = factor_stride(job->rank);
    for (size_t v = 0; v < registers * WIDES; v++)
        if (v * WIDE_LANES < width)
            *(wide *)(row + v * WIDE_LANES) = g[v];
}

INLINE double lanes_sum(const four_wide *x)
{
    return ((*x)[0] + (*x)[1]) + ((*x)[2] + (*x)[3]);
}

/* What the loops over the lines of a block need, away from where a store could change it. */
struct span {
    uint32_t line, last;
    uint64_t stop; /* the cell behind the block's last */
    const uint64_t *start;
    const uint32_t *across;
    const REAL *values;
    REAL *residual;
    struct sweep_rows right, b;
};
/* stride: a constant, or 0 for what the rows themselves say. */
INLINE struct span span_of(const struct sweep_job *job, size_t block, const size_t stride)
{
    const struct half *half = job->half;
    uint32_t last = half->block[block + 1];
    return (struct span){.line = half->block[block],
                         .last = last,
                         .stop = half->start[last],
                         .start = half->start,
                         .across = half->across,
                         .values = job->values,
                         .residual = job->residual,
                         .right = {job->right.data, stride > 0 ? stride : job->right.stride},
                         .b = {job->b.data, stride > 0 ? stride : job->b.stride}};
}

/* LINES(n, stride) with the common numbers of registers as constants, where right rows lie close together. */
#define REGISTERS_CASE(n)                                                                                              \
    case n:                                                                                                            \
        LINES(n, (n)*LANES);                                                                                           \
        break;
#define REGISTERS_SWITCH                                                                                               \
    switch (rows_are_close(job) ? job->width / LANES : 0) {                                                            \
        COMMON_REGISTERS(REGISTERS_CASE)                                                                               \
    default:                                                                                                           \
        LINES(job->width / LANES, 0);                                                                                  \
    }

INLINE bool rows_are_close(const struct sweep_job *job)
{
    return job->right.stride == job->width && (job->b.data == NULL || job->b.stride == job->width);
}

/* ---- residual and gradient ----------------------------------------------------------------------------------------
 */

INLINE void residual_four(const struct span *span, uint64_t k, size_t count, const vec *l, wide *g, four_wide sums[2],
                          const size_t registers)
{
    uint32_t position[4];
    const REAL *row[4];
    vec s[4] = {{0}};
    four r, x;
    positions_load(span->across + k, count, position);
    rows_find(&span->right, position, row);
    rows_dot(l, row, s, registers);
    sum_four(s, &r);
    four_load(span->values, k, count, &x);
    r -= x;
    four_cut(&r, count);
    if (span->residual != NULL)
        four_store(&r, k, count, span->residual);
    four_wide wide_r = WIDEN_FOUR(r);
    sums[0] += wide_r * wide_r;
    sums[1] += (four_wide)((four_bits)wide_r & INT64_MAX); /* without its sign */
    if (g != NULL)
        rows_gather(&r, row, g, registers);
}

INLINE void residual_lines(const struct sweep_job *job, size_t block, double *out, const bool gradient,
                           const size_t registers, const size_t stride)
{
    struct span span = span_of(job, block, stride);
    four_wide all[2] = {{0}, {0}};
    for (uint32_t line = span.line; line < span.last; line++) {
        four_wide sums[2] = {{0}, {0}};
        vec l[MOST_REGISTERS];
        wide g[MOST_REGISTERS * WIDES];
        row_load(&job->left, line, l, registers);
        sums_clear(g, registers);
        uint64_t end = span.start[line + 1];
        for (uint64_t k = span.start[line]; k < end; k += 4) {
            if (k + AHEAD + 4 <= span.stop)
                rows_prefetch(&span.right, span.across + k, registers * LANES);
            residual_four(&span, k, end - k < 4 ? end - k : 4, l, gradient ? g : NULL, sums, registers);
        }
        if (gradient)
            product_store(job, line, g, registers);
        all[0] += sums[0];
        all[1] += sums[1];
    }
    out[0] = lanes_sum(&all[0]);
    out[1] = lanes_sum(&all[1]);
}

static void residual_block(const struct sweep_job *job, size_t block, size_t worker, double sums[SWEEP_SUMS])
{
    (void)worker;
    if (job->product.data != NULL) {
#define LINES(registers, stride) residual_lines(job, block, sums, true, registers, stride)
        REGISTERS_SWITCH
#undef LINES
    } else {
#define LINES(registers, stride) residual_lines(job, block, sums, false, registers, stride)
        REGISTERS_SWITCH
#undef LINES
    }
}

/* ---- product with given values ------------------------------------------------------------------------------------
 */

INLINE void multiply_four(const struct span *span, uint64_t k, size_t count, wide *g, const size_t registers)
{
    uint32_t position[4];
    const REAL *row[4];
    four x;
    positions_load(span->across + k, count, position);
    rows_find(&span->right, position, row);
    four_load(span->values, k, count, &x);
    rows_gather(&x, row, g, registers);
}

INLINE void multiply_lines(const struct sweep_job *job, size_t block, const size_t registers, const size_t stride)
{
    struct span span = span_of(job, block, stride);
    for (uint32_t line = span.line; line < span.last; line++) {
        wide g[MOST_REGISTERS * WIDES];
        sums_clear(g, registers);
        uint64_t end = span.start[line + 1];
        for (uint64_t k = span.start[line]; k < end; k += 4) {
            if (k + AHEAD + 4 <= span.stop)
                rows_prefetch(&span.right, span.across + k, registers * LANES);
            multiply_four(&span, k, end - k < 4 ? end - k : 4, g, registers);
        }
        product_store(job, line, g, registers);
    }
}

static void multiply_block(const struct sweep_job *job, size_t block, size_t worker, double sums[SWEEP_SUMS])
{
    (void)worker;
    (void)sums;
#define LINES(registers, stride) multiply_lines(job, block, registers, stride)
    REGISTERS_SWITCH
#undef LINES
}

/* ---- a tangent step seen on the cells ------------------------------------------------------------------------------
 */

INLINE void tangent_four(const struct span *span, uint64_t k, size_t count, const vec *a, const vec *l,
                         four_wide sums[2], const size_t registers)
{
    uint32_t position[4];
    const REAL *row[4];
    vec s[4] = {{0}};
    four z, r;
    positions_load(span->across + k, count, position);
    rows_find(&span->right, position, row);
    rows_dot(a, row, s, registers);
    rows_find(&span->b, position, row);
    rows_dot(l, row, s, registers);
    sum_four(s, &z);
    four_cut(&z, count);
    four_load(span->values, k, count, &r);
    four_wide wide_z = WIDEN_FOUR(z), wide_r = WIDEN_FOUR(r);
    sums[0] += wide_z * wide_r;
    sums[1] += wide_z * wide_z;
}

INLINE void tangent_lines(const struct sweep_job *job, size_t block, double *out, const size_t registers,
                          const size_t stride)
{
    struct span span = span_of(job, block, stride);
    four_wide all[2] = {{0}, {0}};
    for (uint32_t line = span.line; line < span.last; line++) {
        four_wide sums[2] = {{0}, {0}};
        vec l[MOST_REGISTERS], a[MOST_REGISTERS];
        row_load(&job->left, line, l, registers);
        row_load(&job->a, line, a, registers);
        uint64_t end = span.start[line + 1];
        for (uint64_t k = span.start[line]; k < end; k += 4) {
            if (k + AHEAD + 4 <= span.stop) {
                rows_prefetch(&span.right, span.across + k, registers * LANES);
                rows_prefetch(&span.b, span.across + k, registers * LANES);
            }
            tangent_four(&span, k, end - k < 4 ? end - k : 4, a, l, sums, registers);
        }
        all[0] += sums[0];
        all[1] += sums[1];
    }
    out[0] = lanes_sum(&all[0]);
    out[1] = lanes_sum(&all[1]);
}

static void tangent_block(const struct sweep_job *job, size_t block, size_t worker, double sums[SWEEP_SUMS])
{
    (void)worker;
#define LINES(registers, stride) tangent_lines(job, block, sums, registers, stride)
    REGISTERS_SWITCH
#undef LINES
}

#include "numeric/sweep_kernel_solve.h"

const struct sweep_kernel SWEEP_KERNEL = {.lanes = LANES,
                                          .residual = residual_block,
                                          .multiply = multiply_block,
                                          .tangent = tangent_block,
                                          .solve = solve_block};
