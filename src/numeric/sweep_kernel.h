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
 *     TWO_PASSES(n)        whether rows of n registers are gone through twice for residual and gradient
 *     SPREAD               how many numbers SPREAD_LOAD reads, so that SPREAD_LANE gives each in all lanes; or not
 *     NARROW               address of the table to take for rows of 8 numbers; or not
 *     TURNED               numbers of a register whose rows are turned; or not
 *     TURNED_..            what else sweep_kernel_turned.h needs for it: TURNED_MOST, TURNED_WIDTHS(X), MADD_TURNED,
 *                          MSUB_TURNED, MADD_PIECE, TURNED_AHEAD(n), TURNED_MIX, PIECE_REPEAT, PIECE_ALONE, and
 *                          HALVES_.. where rows are paired
 *     COMMON_REGISTERS(X)  X(n) for each number n of registers a row that deserves loops of its own
 *     SWEEP_KERNEL         the name of the table this gives
 *
 * GROUP cells give one register of numbers. For the cells c of a group of a line, with the line's row l in registers:
 *
 *     s_c = sum over registers of l * p_c        p_c the right row of cell c: one register of partial sums a cell
 *     r   = (sum of s_0, sum of s_1, ...) - x    all horizontal sums at once, by a transposing tree
 *     g  += sum over c of r_c p_c                in two chains, so that half of the additions wait for nothing
 *
 * Within a group arithmetic is REAL; what is added over the groups of a line (g, sums of squares) is double. In single
 * precision a term of g so meets GROUP roundings at most, whatever the length of the line. A last group that is not
 * whole goes on into the cells of the next line, with numbers that are made 0: it costs what a whole one costs.
 *
 * What a cell costs is latency, reads from the nearest cache, operations, and memory, each with its remedy:
 *   - From a cell's position to its r it is a long way (position, row, product, tree, difference, and back into every
 *     lane), some 60 cycles, which the processor hides only as far as its window of some 160 to 320 operations
 *     reaches. So a line goes in chunks of up to CHUNK cells, and where TWO_PASSES says so, a chunk is gone through
 *     twice: r of all its cells, then the gradient, which so never waits for an r. The rows are then in the nearest
 *     cache; that is read at some two registers a cycle, so that narrow registers are no disadvantage. Where a group's
 *     rows stay in registers (few cells of many registers, as in double precision), reading them again costs more than
 *     the waiting, and both are done at once.
 *   - An r goes into all lanes by one shuffle of four numbers read at once (SPREAD), not by a read for each.
 *   - The right rows lie anywhere in memory, but the order of cells says where: those of the cells AHEAD are asked for,
 *     unless all of them fit into a core's own cache.
 *   - Positions and values come in order, 12 bytes a cell, faster than the processor itself looks out for them: those
 *     STREAM_AHEAD are asked for.
 *   - The loops are written for any number of registers a row and made once for each common number of them, where
 *     everything is unrolled and stays in registers.
 *   - Where a line ends, a loop ends that the processor cannot foresee, and what the next line reads and writes is not
 *     there yet: its rows are asked for one line ahead.
 *
 * Micro-operations a cell, single precision, eight numbers in a row: 6.1 in the first pass (position 2, product 1, tree
 * 21/8, the rest 1/2), 4.9 in the second (position 2, shuffle 1, product 1, the rest 7/8). Where the time goes, in
 * cycles a cell of Zen 4, for 909 778 cells in lines of 90:
 *
 *                                      8 floats   16 floats
 *     both passes, nearest cache            2.2         3.1
 *     positions and values from afar        0.9         1.4
 *     rows from a core's own cache          0.4         1.0
 *     ends of lines                         0.6         0.9
 *
 * Residuals and gradients of the most common widths are made otherwise, and faster (sweep_kernel_turned.h). Without
 * gain here: sixteen floats a register (512 bits are two halves, and the tree is twice as wide); a flat stream of
 * groups that knows no ends of lines (what leads it costs as much as it saves); positions multiplied beforehand
 * (reading what was just written takes 11 cycles more); the second pass some groups behind the first in one loop;
 * columns in order of their popularity (3 to 6 per cent, and none where rows are turned); values and positions asked
 * for past the caches.
 *
 * A line is worked on by one worker from its first to its last cell, so that bits depend on REAL, LANES and MADD only.
 */
#include <assert.h>
#include <float.h>
#include <math.h>
#include <string.h>

/* Some 32 cells of 2 to 3 ns hide a trip to memory of 80 ns, and what a busy machine adds to it; 4 KB of values. */
enum { AHEAD = 32, STREAM_AHEAD = 512, CACHE_LINE = 64 };
/* Cells of a chunk, whose rows are to stay in the nearest cache, of 32 KB, until they are read again. */
enum { CHUNK = 128, CHUNK_BYTES = 16 << 10 };
enum { MOST_REGISTERS = SWEEP_MOST_WIDTH / LANES, WIDE_LANES = LANES / WIDES };

#define REGISTER_OF(type, count)                                                                                       \
    type __attribute__((vector_size((count) * sizeof(type)), aligned(sizeof(type)), may_alias))
typedef REGISTER_OF(REAL, LANES) vec;
typedef REGISTER_OF(double, WIDE_LANES) wide;
typedef REGISTER_OF(double, LANES) doubles;
/* A number a cell of a group, and sums of their products. */
typedef REGISTER_OF(REAL, GROUP) cells;
typedef REGISTER_OF(double, GROUP / WIDES) squares;
typedef REGISTER_OF(int64_t, GROUP / WIDES) squares_bits;
#ifdef REAL_IS_DOUBLE
typedef int64_t BITS;
#else
typedef int32_t BITS;
#endif
typedef REGISTER_OF(BITS, GROUP) bits;

#ifndef MADD_SQUARES
#define MADD_SQUARES MADD_WIDE
#endif
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

/* each[c] = number[c] in all lanes, for SPREAD numbers */
#ifndef SPREAD
#define SPREAD 1
INLINE void numbers_spread(const REAL *number, vec *each)
{
    *each = splat(*number);
}
#else
INLINE void numbers_spread(const REAL *number, vec *each)
{
    vec all = SPREAD_LOAD(number);
    each[0] = SPREAD_LANE(all, 0);
    each[1] = SPREAD_LANE(all, 1);
#if SPREAD == 4
    each[2] = SPREAD_LANE(all, 2);
    each[3] = SPREAD_LANE(all, 3);
#endif
}
#endif

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

/* ---- chunks and groups of cells -----------------------------------------------------------------------------------
 */

INLINE void row_prefetch(const REAL *row, size_t width)
{
    for (size_t at = 0; at < width * sizeof(REAL); at += CACHE_LINE)
        __builtin_prefetch((const char *)row + at);
}

/* A row of a factor that is read once a line. */
INLINE void row_load(const struct matrix *factor, uint32_t line, vec *to, const size_t registers)
{
    const double *row = factor->data + line * factor->stride;
    for (size_t v = 0; v < registers; v++)
        to[v] = __builtin_convertvector(*(const doubles *)(row + v * LANES), vec);
}

/* Where the right rows of a group are. */
INLINE void group_find(const struct sweep_rows *rows, const uint32_t *across, const REAL *row[GROUP])
{
    for (size_t c = 0; c < GROUP; c++)
        row[c] = (const REAL *)rows->data + across[c] * rows->stride;
}

/* s_c = l * row_c, or to what is there; a row of no registers gives what is there, or 0. */
INLINE void rows_dot(const vec *l, const REAL *const row[GROUP], bool add, vec s[GROUP], const size_t registers)
{
    for (size_t c = 0; c < GROUP && !add; c++)
        if (registers > 0)
            s[c] = l[0] * *(const vec *)row[c];
        else
            s[c] = (vec){0};
    for (size_t v = add ? 0 : 1; v < registers; v++)
        for (size_t c = 0; c < GROUP; c++)
            s[c] = MADD(l[v], *(const vec *)(row[c] + v * LANES), s[c]);
}

/* g += sum over the cells of a group of each_c row_c */
INLINE void rows_gather(const vec each[GROUP], const REAL *const row[GROUP], wide *g, const size_t registers)
{
    for (size_t v = 0; v < registers; v++) {
        vec sum[2] = {each[0] * *(const vec *)(row[0] + v * LANES), each[1] * *(const vec *)(row[1] + v * LANES)};
        for (size_t c = 2; c < GROUP; c++)
            sum[c % 2] = MADD(each[c], *(const vec *)(row[c] + v * LANES), sum[c % 2]);
        sum[0] += sum[1];
        wide_add(g + v * WIDES, &sum[0]);
    }
}

/* Lines come in order, but too seldom for the processor to look out for their rows itself. */
INLINE void left_prefetch(const struct matrix *left, uint32_t line, const size_t registers)
{
    for (size_t at = 0; at < registers * LANES; at += CACHE_LINE / sizeof(double))
        __builtin_prefetch(left->data + line * left->stride + at);
}

/* Zeros, or what earlier slabs have come to. The next line's row, which will be written, is asked for. */
INLINE void product_begin(const struct sweep_job *job, uint32_t line, uint32_t last, wide *g, const size_t registers)
{
    const double *row = job->product.data + line * job->product.stride, *next = row + job->product.stride;
    for (size_t at = 0; line + 1 < last && at < registers * LANES; at += CACHE_LINE / sizeof *next)
        __builtin_prefetch(next + at, 1);
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
        sum[part] = MADD_SQUARES(WIDEN(*x, part), WIDEN(*y, part), sum[part]);
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
    uint64_t ahead; /* up to here the rows of later cells are asked for */
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
                         .ahead =
                             !job->near && half->start[last] > AHEAD + GROUP ? half->start[last] - AHEAD - GROUP : 0};
}

/* Asks for what the cells behind k will need, rows as far as they are of this block. */
INLINE void span_prefetch(const struct span *span, uint64_t k, bool both, const size_t registers)
{
    __builtin_prefetch(span->values + k + STREAM_AHEAD);
    __builtin_prefetch(span->across + k + STREAM_AHEAD);
    if (k >= span->ahead)
        return;
    const uint32_t *across = span->across + k + AHEAD;
    for (size_t c = 0; c < GROUP; c++) {
        row_prefetch((const REAL *)span->right.data + across[c] * span->right.stride, registers * LANES);
        if (both)
            row_prefetch((const REAL *)span->b.data + across[c] * span->b.stride, registers * LANES);
    }
}

/* Some cells of a line in whole groups: where they stand in the half. What a last group lacks are cells of the next
   line, with a number that is 0 (so a row that is not finite may spoil the line before its own); where the block ends,
   all are a copy, and what lacks is like the first of them. */
struct chunk {
    const uint32_t *across;
    const REAL *values;
    size_t count;
};
struct chunk_room {
    uint32_t across[CHUNK + GROUP];
    REAL values[CHUNK + GROUP];
};

static __attribute__((noinline)) void chunk_copy(const uint32_t *across, const REAL *values, size_t count,
                                                 struct chunk_room *room)
{
    for (size_t c = 0; c < count + GROUP; c++) {
        room->across[c] = across[c < count ? c : 0];
        room->values[c] = values[c < count ? c : 0];
    }
}

INLINE struct chunk chunk_find(const struct span *span, uint64_t k, uint64_t end, struct chunk_room *room,
                               const size_t registers)
{
    size_t bytes = (registers * LANES + 1) * sizeof(REAL), most = CHUNK_BYTES / bytes / GROUP * GROUP;
    most = most > CHUNK ? CHUNK : most < GROUP ? GROUP : most;
    struct chunk chunk = {span->across + k, span->values + k, end - k < most ? end - k : most};
    if (__builtin_expect(k + chunk.count + GROUP > span->stop, 0)) {
        chunk_copy(chunk.across, chunk.values, chunk.count, room);
        chunk.across = room->across;
        chunk.values = room->values;
    }
    return chunk;
}

/* g += sum over the cells of a group of number_c row_c */
INLINE void numbers_gather(const struct sweep_rows *rows, const uint32_t *across, const REAL *number, wide *g,
                           const size_t registers)
{
    const REAL *row[GROUP];
    vec each[GROUP];
    group_find(rows, across, row);
    for (size_t part = 0; part < GROUP; part += SPREAD)
        numbers_spread(number + part, each + part);
    rows_gather(each, row, g, registers);
}

/* Zeros for the cells of a group that are not there. */
static const BITS cells_there[2 * GROUP] = {[0 ... GROUP - 1] = -1};
INLINE void group_cut(cells *number, size_t left)
{
    size_t count = left < GROUP ? left : GROUP;
    *number = (cells)((bits)*number & *(const bits *)(cells_there + (GROUP - count)));
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

/* The rows and residuals of the group at cell c of the chunk. */
INLINE void residual_group(const struct span *span, uint64_t k, struct chunk chunk, size_t c, const vec *l,
                           const REAL *row[GROUP], cells *r, const size_t registers)
{
    vec s[GROUP];
    span_prefetch(span, k + c, false, registers);
    group_find(&span->right, chunk.across + c, row);
    rows_dot(l, row, false, s, registers);
    sum_each(s, r);
    *r -= *(const cells *)(chunk.values + c);
    group_cut(r, chunk.count - c);
}

INLINE void group_store(const cells *number, size_t left, REAL *to)
{
    if (left >= GROUP)
        *(cells *)to = *number;
    else
        for (size_t c = 0; c < left; c++)
            to[c] = (*number)[c];
}

INLINE void group_gather(const cells *r, const REAL *const row[GROUP], wide *g, const size_t registers)
{
    vec each[GROUP];
    for (size_t c = 0; c < GROUP; c++)
        each[c] = splat((*r)[c]);
    rows_gather(each, row, g, registers);
}

/* square += r^2, and absolute += |r| unless it is NULL */
INLINE void numbers_measure(const cells *r, squares *square, squares *absolute)
{
    squares_add(square, r, r);
    for (int part = 0; absolute != NULL && part < WIDES; part++) /* without its sign */
        absolute[part] += (squares)((squares_bits)WIDEN(*r, part) & INT64_MAX);
}

/* number_c = l . row_c - value_c, and the gradient, unless g is NULL. */
INLINE void chunk_residual(const struct span *span, uint64_t k, struct chunk chunk, const vec *l, wide *g, REAL *number,
                           squares *square, squares *absolute, const bool kept, const size_t registers)
{
    for (size_t c = 0; c < chunk.count; c += GROUP) {
        const REAL *row[GROUP];
        cells r;
        residual_group(span, k, chunk, c, l, row, &r, registers);
        *(cells *)(number + c) = r;
        if (kept)
            group_store(&r, chunk.count - c, span->residual + k + c);
        numbers_measure(&r, square, absolute);
        if (g != NULL)
            group_gather(&r, row, g, registers);
    }
}

/* All chunks of a line. */
INLINE void residual_line(const struct span *span, uint64_t k, uint64_t end, const vec *l, wide *g, squares *square,
                          squares *absolute, const bool kept, const size_t registers)
{
    REAL r[CHUNK + GROUP];
    struct chunk chunk;
    struct chunk_room room;
    for (; k < end; k += chunk.count) {
        chunk = chunk_find(span, k, end, &room, registers);
        chunk_residual(span, k, chunk, l, TWO_PASSES(registers) ? NULL : g, r, square, absolute, kept, registers);
        if (g != NULL && TWO_PASSES(registers))
            for (size_t c = 0; c < chunk.count; c += GROUP)
                numbers_gather(&span->right, chunk.across + c, r + c, g, registers);
    }
}

INLINE void residual_lines(const struct sweep_job *job, size_t block, double *out, const bool gradient, const bool kept,
                           const size_t registers, const size_t stride)
{
    struct span span = span_of(job, block, stride);
    squares square[WIDES] = {{0}}, absolute[WIDES] = {{0}};
    for (uint32_t line = span.line; line < span.last; line++) {
        vec l[MOST_REGISTERS];
        wide g[MOST_REGISTERS * WIDES];
        row_load(&job->left, line, l, registers);
        if (line + 1 < span.last)
            left_prefetch(&job->left, line + 1, registers);
        if (gradient)
            product_begin(job, line, span.last, g, registers);
        residual_line(&span, span.start[line], span.start[line + 1], l, gradient ? g : NULL, square,
                      gradient ? NULL : absolute, kept, registers);
        if (gradient)
            product_store(job, line, g, registers);
    }
    out[0] = squares_sum(square);
    out[1] = squares_sum(absolute);
}

#ifdef TURNED
#include "numeric/sweep_kernel_turned.h"
/* Whether the job's rows are of a width that is turned: then, what residual_lines would do for a gradient. */
INLINE bool turned_block(const struct sweep_job *job, size_t block, double *square)
{
    bool close = rows_are_close(job), kept = job->residual != NULL;
#define TURNED_CASE(width, n, paired)                                                                                  \
    case width:                                                                                                        \
        if (!close)                                                                                                    \
            *square = turned_lines(job, block, kept, n, paired, 0);                                                    \
        else if (kept)                                                                                                 \
            *square = turned_lines(job, block, true, n, paired, width);                                                \
        else                                                                                                           \
            *square = turned_lines(job, block, false, n, paired, width);                                               \
        return true;
    switch (job->width) {
        TURNED_WIDTHS(TURNED_CASE)
    default:
        return false;
    }
}
#else
INLINE bool turned_block(const struct sweep_job *job, size_t block, double *square)
{
    return (void)job, (void)block, (void)square, false;
}
#endif

static void residual_block(const struct sweep_job *job, size_t block, size_t worker, double sums[SWEEP_SUMS])
{
    bool gradient = job->product.data != NULL;
    (void)worker;
    if (gradient && turned_block(job, block, &sums[0]))
        return;
    if (gradient && job->residual == NULL) {
#define LINES(registers, stride) residual_lines(job, block, sums, true, false, registers, stride)
        REGISTERS_SWITCH
#undef LINES
    } else if (gradient) {
#define LINES(registers, stride) residual_lines(job, block, sums, true, true, registers, stride)
        REGISTERS_SWITCH
#undef LINES
    } else if (job->residual != NULL) {
#define LINES(registers, stride) residual_lines(job, block, sums, false, true, registers, stride)
        REGISTERS_SWITCH
#undef LINES
    } else {
#define LINES(registers, stride) residual_lines(job, block, sums, false, false, registers, stride)
        REGISTERS_SWITCH
#undef LINES
    }
}

/* ---- product with given values ------------------------------------------------------------------------------------
 */

INLINE void multiply_line(const struct span *span, uint64_t k, uint64_t end, wide *g, const size_t registers)
{
    struct chunk chunk;
    struct chunk_room room;
    for (; k < end; k += chunk.count) {
        size_t c = 0;
        chunk = chunk_find(span, k, end, &room, registers);
        for (; c + GROUP <= chunk.count; c += GROUP) {
            span_prefetch(span, k + c, false, registers);
            numbers_gather(&span->right, chunk.across + c, chunk.values + c, g, registers);
        }
        if (c < chunk.count) {
            REAL number[GROUP];
            cells x = *(const cells *)(chunk.values + c);
            group_cut(&x, chunk.count - c);
            *(cells *)number = x;
            numbers_gather(&span->right, chunk.across + c, number, g, registers);
        }
    }
}

INLINE void multiply_lines(const struct sweep_job *job, size_t block, const size_t registers, const size_t stride)
{
    struct span span = span_of(job, block, stride);
    for (uint32_t line = span.line; line < span.last; line++) {
        wide g[MOST_REGISTERS * WIDES];
        product_begin(job, line, span.last, g, registers);
        multiply_line(&span, span.start[line], span.start[line + 1], g, registers);
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

INLINE void tangent_lines(const struct sweep_job *job, size_t block, double *out, const size_t registers,
                          const size_t stride)
{
    struct span span = span_of(job, block, stride);
    squares zr[WIDES] = {{0}}, zz[WIDES] = {{0}};
    for (uint32_t line = span.line; line < span.last; line++) {
        vec l[MOST_REGISTERS], a[MOST_REGISTERS];
        struct chunk chunk;
        struct chunk_room room;
        row_load(&job->left, line, l, registers);
        row_load(&job->a, line, a, registers);
        if (line + 1 < span.last) {
            left_prefetch(&job->left, line + 1, registers);
            left_prefetch(&job->a, line + 1, registers);
        }
        for (uint64_t k = span.start[line], end = span.start[line + 1]; k < end; k += chunk.count) {
            chunk = chunk_find(&span, k, end, &room, registers);
            for (size_t c = 0; c < chunk.count; c += GROUP) {
                vec s[GROUP];
                cells z, r = *(const cells *)(chunk.values + c);
                span_prefetch(&span, k + c, true, registers);
                const REAL *row[GROUP];
                group_find(&span.right, chunk.across + c, row);
                rows_dot(a, row, false, s, registers);
                group_find(&span.b, chunk.across + c, row);
                rows_dot(l, row, true, s, registers);
                sum_each(s, &z);
                group_cut(&z, chunk.count - c);
                group_cut(&r, chunk.count - c);
                squares_add(zr, &z, &r);
                squares_add(zz, &z, &z);
            }
        }
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

#ifndef NARROW
#define NARROW NULL
#endif
const struct sweep_kernel SWEEP_KERNEL = {.lanes = LANES,
                                          .residual = residual_block,
                                          .multiply = multiply_block,
                                          .tangent = tangent_block,
                                          .solve = solve_block,
                                          .narrow = NARROW};
