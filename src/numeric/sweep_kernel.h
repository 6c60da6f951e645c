/* SPDX-License-Identifier: MIT
 *
 * The loops over observed cells, once for every precision and instruction set. The including file defines
 *
 *     REAL                 float or double, the precision of factors and values
 *     LANES                REALs in a register: 2, 4 or 8
 *     GROUP                cells in flight: LANES, or 4 of doubles, whose halves are added first
 *     WIDES                registers that LANES doubles take
 *     MADD(a, b, c)        a b + c on registers of REAL; MADD_WIDE on registers of double
 *     WIDEN(x, part)       the numbers of a register of floats that go to double register `part` of WIDES; only when
 *                          REAL is float
 *     COMMON_REGISTERS(X)  X(n) for each number n of registers a row that deserves loops of its own
 *     SWEEP_KERNEL         the name of the table this gives
 *
 * A group of cells is in flight, and what they give is one register. For the cells c of a group of a line,
 * with the line's row l in registers:
 *
 *     s_c = sum over registers of l * p_c        p_c the right row of cell c: one register of partial sums a cell
 *     r   = (sum of s_0, sum of s_1, ...) - x    all horizontal sums at once, by a transposing tree
 *     g  += sum over c of r_c p_c                in two chains, so that half of the additions wait for nothing
 *
 * Within a group arithmetic is REAL; what is added over the groups of a line (g, sums of squares) is double. In single
 * precision a term of g so meets GROUP roundings at most, whatever the length of the line. The last cells of a line
 * that are no whole group are filled up to one, and r is then 0 for those that are not there.
 *
 * What a cell costs is, in turn, latency, memory and arithmetic, and each has its remedy:
 *   - From a row to its r it is a long way (product, tree, difference, and back into every lane), which the processor
 *     can hide only as far as its window reaches. So, where a row is at most BESIDE_REGISTERS, the sums s of a group
 * are made before the gradient of the group before it: what stands next in line is always ready. Wider rows are work
 *     enough to hide it, and two groups of them have no room in the registers.
 *   - The right rows lie anywhere in memory, but the order of cells says where: those of the cells AHEAD are asked for,
 *     unless all of them fit into a core's own cache (NEAR_BYTES).
 *   - Positions and values come in order, 12 bytes a cell, faster than the processor itself looks out for them: those
 *     STREAM_AHEAD are asked for.
 *   - The loops are written for any number of registers a row and made once for each common number of them, where
 *     everything is unrolled and stays in registers.
 *
 * A line is worked on by one worker from its first to its last cell, so that bits depend on REAL, LANES and MADD only.
 */
#include <assert.h>
#include <float.h>
#include <math.h>
#include <string.h>

/* Some 32 cells of 2 to 3 ns hide a trip to memory of 80 ns, and what a busy machine adds to it; 4 KB of values. */
enum { AHEAD = 32, STREAM_AHEAD = 512, CACHE_LINE = 64, NEAR_BYTES = 400 << 10 };
enum { MOST_REGISTERS = SWEEP_MOST_WIDTH / LANES, WIDE_LANES = LANES / WIDES, BESIDE_REGISTERS = 2 };

#define REGISTER_OF(type, count)                                                                                       \
    type __attribute__((vector_size((count) * sizeof(type)), aligned(sizeof(type)), may_alias))
typedef REGISTER_OF(REAL, LANES) vec;
typedef REGISTER_OF(double, WIDE_LANES) wide;
/* A number a cell of a group, and sums of their products. */
typedef REGISTER_OF(REAL, GROUP) cells;
typedef REGISTER_OF(double, GROUP / WIDES) squares;
typedef REGISTER_OF(int64_t, GROUP / WIDES) squares_bits;

#define REAL_EPSILON (sizeof(REAL) == sizeof(double) ? DBL_EPSILON : (double)FLT_EPSILON)
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

#ifndef WIDEN
#define WIDEN(x, part) (x)
#endif

/* sum[0 .. WIDES-1] += x */
INLINE void wide_add(wide *sum, const vec *x)
{
    for (int part = 0; part < WIDES; part++)
        sum[part] += WIDEN(*x, part);
}

/* (sum of s[0], sum of s[1], ...). Shuffles that stay within 16 bytes come first, and where eight doubles are done in
   two halves, their halves are added before all: what follows then costs half as much. */
#if LANES == 2
INLINE void sum_each(const vec s[GROUP], cells *out)
{
    *out = __builtin_shufflevector(s[0], s[1], 0, 2) + __builtin_shufflevector(s[0], s[1], 1, 3);
}
#elif LANES == 4 && !defined(REAL_IS_DOUBLE)
#define PAIRS(a, b) (__builtin_shufflevector(a, b, 0, 2, 4, 6) + __builtin_shufflevector(a, b, 1, 3, 5, 7))
INLINE void sum_each(const vec s[GROUP], cells *out)
{
    vec ab = PAIRS(s[0], s[1]), cd = PAIRS(s[2], s[3]);
    *out = PAIRS(ab, cd);
}
#elif defined(REAL_IS_DOUBLE)
typedef REGISTER_OF(double, 4) four;
INLINE void sum_four(const four *a, const four *b, const four *c, const four *d, four *out)
{
    four ab = __builtin_shufflevector(*a, *b, 0, 5, 2, 7) + __builtin_shufflevector(*a, *b, 1, 4, 3, 6);
    four cd = __builtin_shufflevector(*c, *d, 0, 5, 2, 7) + __builtin_shufflevector(*c, *d, 1, 4, 3, 6);
    *out = __builtin_shufflevector(ab, cd, 0, 1, 6, 7) + __builtin_shufflevector(ab, cd, 2, 3, 4, 5);
}
#if LANES == 4
INLINE void sum_each(const vec s[GROUP], cells *out)
{
    sum_four(&s[0], &s[1], &s[2], &s[3], out);
}
#else
INLINE void sum_each(const vec s[GROUP], cells *out)
{
    four half[GROUP];
    for (size_t c = 0; c < GROUP; c++)
        half[c] = __builtin_shufflevector(s[c], s[c], 0, 1, 2, 3) + __builtin_shufflevector(s[c], s[c], 4, 5, 6, 7);
    sum_four(&half[0], &half[1], &half[2], &half[3], out);
}
#endif
#else
#define PAIRS(a, b)                                                                                                    \
    (__builtin_shufflevector(a, b, 0, 2, 8, 10, 4, 6, 12, 14) +                                                        \
     __builtin_shufflevector(a, b, 1, 3, 9, 11, 5, 7, 13, 15))
INLINE void sum_each(const vec s[GROUP], cells *out)
{
    vec ab = PAIRS(s[0], s[1]), cd = PAIRS(s[2], s[3]), ef = PAIRS(s[4], s[5]), gh = PAIRS(s[6], s[7]);
    vec abcd = PAIRS(ab, cd), efgh = PAIRS(ef, gh); /* each number in two parts, four apart */
    *out = __builtin_shufflevector(abcd, efgh, 0, 1, 2, 3, 8, 9, 10, 11) +
           __builtin_shufflevector(abcd, efgh, 4, 5, 6, 7, 12, 13, 14, 15);
}
#endif

/* ---- groups of cells ----------------------------------------------------------------------------------------------
 */

/* Where the right rows of a group are, and a number for each. */
struct group {
    const REAL *row[GROUP];
    cells number;
};

/* In the three below a broken group goes through a copy, so that whole ones stay in registers. */

/* values[k], zeros for the cells that are not there. */
INLINE void group_load(const REAL *values, uint64_t k, size_t count, cells *to)
{
    if (count == GROUP) {
        *to = *(const cells *)(values + k);
    } else {
        REAL number[GROUP] = {0};
        for (size_t c = 0; c < count; c++)
            number[c] = values[k + c];
        *to = *(const cells *)number;
    }
}

INLINE void group_store(const cells *from, uint64_t k, size_t count, REAL *values)
{
    if (count == GROUP) {
        *(cells *)(values + k) = *from;
    } else {
        REAL number[GROUP];
        *(cells *)number = *from;
        for (size_t c = 0; c < count; c++)
            values[k + c] = number[c];
    }
}

/* Zeros for the cells that are not there. */
INLINE void group_cut(cells *r, size_t count)
{
    if (count < GROUP) {
        REAL number[GROUP];
        *(cells *)number = *r;
        for (size_t c = count; c < GROUP; c++)
            number[c] = 0;
        *r = *(const cells *)number;
    }
}

/* The rows of the cells; those that are not there have the row of the first. */
INLINE void group_find(const struct sweep_rows *rows, const uint32_t *across, size_t count, const REAL *row[GROUP])
{
    const REAL *data = rows->data;
    for (size_t c = 0; c < GROUP; c++)
        row[c] = data + across[c < count ? c : 0] * rows->stride;
}

INLINE void row_prefetch(const REAL *row, size_t width)
{
    for (size_t at = 0; at < width * sizeof(REAL); at += CACHE_LINE)
        __builtin_prefetch((const char *)row + at);
}

INLINE void row_load(const struct sweep_rows *rows, uint32_t line, vec *to, const size_t registers)
{
    const REAL *row = (const REAL *)rows->data + line * rows->stride;
    for (size_t v = 0; v < registers; v++)
        to[v] = *(const vec *)(row + v * LANES);
}

/* s_c += l * row_c */
INLINE void rows_dot(const vec *l, const REAL *const row[GROUP], vec s[GROUP], const size_t registers)
{
    for (size_t v = 0; v < registers; v++)
        for (size_t c = 0; c < GROUP; c++)
            s[c] = MADD(l[v], *(const vec *)(row[c] + v * LANES), s[c]);
}

/* g += sum over c of number_c row_c */
INLINE void group_gather(const struct group *group, wide *g, const size_t registers)
{
    vec number[GROUP];
    for (size_t c = 0; c < GROUP; c++)
        number[c] = splat(group->number[c]);
    for (size_t v = 0; v < registers; v++) {
        vec sum[2] = {number[0] * *(const vec *)(group->row[0] + v * LANES),
                      number[1] * *(const vec *)(group->row[1] + v * LANES)};
        for (size_t c = 2; c < GROUP; c++)
            sum[c % 2] = MADD(number[c], *(const vec *)(group->row[c] + v * LANES), sum[c % 2]);
        sum[0] += sum[1];
        wide_add(g + v * WIDES, &sum[0]);
    }
}

/* Zeros, or what earlier slabs have come to. */
INLINE void product_begin(const struct sweep_job *job, uint32_t line, wide *g, const size_t registers)
{
    const double *row = job->product.data + line * job->product.stride;
    size_t width = job->more ? factor_stride(job->rank) : 0;
    for (size_t v = 0; v < registers * WIDES; v++)
        g[v] = v * WIDE_LANES < width ? *(const wide *)(row + v * WIDE_LANES) : (wide){0};
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

INLINE double squares_sum(const squares sums[WIDES])
{
    double sum = 0;
    for (size_t part = 0; part < WIDES; part++)
        for (size_t lane = 0; lane < GROUP / WIDES; lane++)
            sum += sums[part][lane];
    return sum;
}

/* sum += x y, in double */
INLINE void squares_add(squares sum[WIDES], const cells *x, const cells *y)
{
    for (int part = 0; part < WIDES; part++)
        sum[part] += WIDEN(*x, part) * WIDEN(*y, part);
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
    bool far; /* right rows do not fit into a core's own cache */
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
                         .b = {job->b.data, stride > 0 ? stride : job->b.stride},
                         .far = half->length * job->width * sizeof(REAL) > NEAR_BYTES};
}

/* Asks for what the cells behind k will need, as far as they are of this block. */
INLINE void span_prefetch(const struct span *span, uint64_t k, bool both, const size_t registers)
{
    if (k + STREAM_AHEAD + GROUP > span->stop)
        return;
    __builtin_prefetch(span->values + k + STREAM_AHEAD);
    __builtin_prefetch(span->across + k + STREAM_AHEAD);
    const uint32_t *across = span->across + k + AHEAD;
    for (size_t c = 0; span->far && c < GROUP; c++) {
        row_prefetch((const REAL *)span->right.data + across[c] * span->right.stride, registers * LANES);
        if (both)
            row_prefetch((const REAL *)span->b.data + across[c] * span->b.stride, registers * LANES);
    }
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

/* The group's rows and residuals. */
INLINE void residual_group(const struct span *span, uint64_t k, size_t count, const vec *l, struct group *group,
                           squares *square, squares *absolute, const size_t registers)
{
    vec s[GROUP] = {{0}};
    cells x;
    group_find(&span->right, span->across + k, count, group->row);
    rows_dot(l, group->row, s, registers);
    sum_each(s, &group->number);
    group_load(span->values, k, count, &x);
    group->number -= x;
    group_cut(&group->number, count);
    if (span->residual != NULL)
        group_store(&group->number, k, count, span->residual);
    squares_add(square, &group->number, &group->number);
    for (int part = 0; absolute != NULL && part < WIDES; part++) /* without its sign */
        absolute[part] += (squares)((squares_bits)WIDEN(group->number, part) & INT64_MAX);
}

/* All groups of a line; those of narrow rows beside the gradient of the one before. */
INLINE void residual_line(const struct span *span, uint64_t k, uint64_t end, const vec *l, wide *g, squares *square,
                          squares *absolute, const size_t registers)
{
    const bool beside = registers <= BESIDE_REGISTERS;
    struct group before, now;
    uint64_t whole = end - (end - k) % GROUP;
    for (; !beside && k < whole; k += GROUP) {
        span_prefetch(span, k, false, registers);
        residual_group(span, k, GROUP, l, &now, square, absolute, registers);
        if (g != NULL)
            group_gather(&now, g, registers);
    }
    if (k < whole) {
        residual_group(span, k, GROUP, l, &before, square, absolute, registers);
        for (k += GROUP; k < whole; k += GROUP) {
            span_prefetch(span, k, false, registers);
            residual_group(span, k, GROUP, l, &now, square, absolute, registers);
            if (g != NULL)
                group_gather(&before, g, registers);
            before = now;
        }
        if (g != NULL)
            group_gather(&before, g, registers);
    }
    if (k < end) {
        residual_group(span, k, end - k, l, &now, square, absolute, registers);
        if (g != NULL)
            group_gather(&now, g, registers);
    }
}

INLINE void residual_lines(const struct sweep_job *job, size_t block, double *out, const bool gradient,
                           const size_t registers, const size_t stride)
{
    struct span span = span_of(job, block, stride);
    squares square[WIDES] = {{0}}, absolute[WIDES] = {{0}};
    for (uint32_t line = span.line; line < span.last; line++) {
        vec l[MOST_REGISTERS];
        wide g[MOST_REGISTERS * WIDES];
        row_load(&job->left, line, l, registers);
        if (gradient)
            product_begin(job, line, g, registers);
        residual_line(&span, span.start[line], span.start[line + 1], l, gradient ? g : NULL, square,
                      gradient ? NULL : absolute, registers);
        if (gradient)
            product_store(job, line, g, registers);
    }
    out[0] = squares_sum(square);
    out[1] = squares_sum(absolute);
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

INLINE void multiply_group(const struct span *span, uint64_t k, size_t count, wide *g, const size_t registers)
{
    struct group group;
    group_find(&span->right, span->across + k, count, group.row);
    group_load(span->values, k, count, &group.number);
    group_gather(&group, g, registers);
}

INLINE void multiply_lines(const struct sweep_job *job, size_t block, const size_t registers, const size_t stride)
{
    struct span span = span_of(job, block, stride);
    for (uint32_t line = span.line; line < span.last; line++) {
        wide g[MOST_REGISTERS * WIDES];
        product_begin(job, line, g, registers);
        uint64_t k = span.start[line], end = span.start[line + 1];
        for (; k + GROUP <= end; k += GROUP) {
            span_prefetch(&span, k, false, registers);
            multiply_group(&span, k, GROUP, g, registers);
        }
        if (k < end)
            multiply_group(&span, k, end - k, g, registers);
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

INLINE void tangent_group(const struct span *span, uint64_t k, size_t count, const vec *a, const vec *l, squares *zr,
                          squares *zz, const size_t registers)
{
    const REAL *row[GROUP];
    vec s[GROUP] = {{0}};
    cells z, r;
    group_find(&span->right, span->across + k, count, row);
    rows_dot(a, row, s, registers);
    group_find(&span->b, span->across + k, count, row);
    rows_dot(l, row, s, registers);
    sum_each(s, &z);
    group_cut(&z, count);
    group_load(span->values, k, count, &r);
    squares_add(zr, &z, &r);
    squares_add(zz, &z, &z);
}

INLINE void tangent_lines(const struct sweep_job *job, size_t block, double *out, const size_t registers,
                          const size_t stride)
{
    struct span span = span_of(job, block, stride);
    squares zr[WIDES] = {{0}}, zz[WIDES] = {{0}};
    for (uint32_t line = span.line; line < span.last; line++) {
        vec l[MOST_REGISTERS], a[MOST_REGISTERS];
        row_load(&job->left, line, l, registers);
        row_load(&job->a, line, a, registers);
        uint64_t k = span.start[line], end = span.start[line + 1];
        for (; k + GROUP <= end; k += GROUP) {
            span_prefetch(&span, k, true, registers);
            tangent_group(&span, k, GROUP, a, l, zr, zz, registers);
        }
        if (k < end)
            tangent_group(&span, k, end - k, a, l, zr, zz, registers);
    }
    out[0] = squares_sum(zr);
    out[1] = squares_sum(zz);
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
