/* SPDX-License-Identifier: MIT
 *
 * The loops over observed cells, once for every precision and instruction set. The including file defines
 *
 *     REAL           float or double, the precision of factors and values
 *     LANES          REALs in a register: 2, 4, 8 or 16
 *     MADD(a, b, c)  a b + c on registers
 *     SWEEP_KERNEL   the name of the table this gives
 *
 * Four cells are in flight. For the cells k..k+3 of a line, with the line's row l in registers:
 *
 *     s_c = sum over registers of l * p_c        p_c the right row of cell c: one register of partial sums a cell
 *     r   = (sum of s_0, ..., sum of s_3) - x    four horizontal sums by a transposing tree
 *     g  += r_0 p_0 + r_1 p_1 + r_2 p_2 + r_3 p_3
 *
 * Within the four, arithmetic is REAL; what is added over the cells of a line (g, sums of squares) is double. The last
 * one to three cells of a line go through the same loop with r = 0 for those that are not there. The right rows of the
 * cells AHEAD of these are asked for beforehand: they lie anywhere in memory, and the order of cells says where.
 *
 * The loops are written for any number of registers a row and made once for each common number of them, where
 * everything is unrolled and stays in registers. A line is worked on by one worker from its first to its last cell, so
 * that bits depend on REAL, LANES and MADD only.
 *
 * Normal equations: SWEEP_CHUNK right rows are gathered side by side, then the upper triangle of their product is made
 * in tiles of 4 rows x up to 3 registers, held in registers over the chunk.
 */
#include <assert.h>
#include <string.h>

/* Some 20 cells of 4 ns hide a trip to memory of 80 ns. */
enum { AHEAD = 20, CACHE_LINE = 64 };
enum { MOST_REGISTERS = SWEEP_MOST_WIDTH / LANES };

typedef REAL vec __attribute__((vector_size(LANES * sizeof(REAL)), aligned(sizeof(REAL)), may_alias));
typedef double wide __attribute__((vector_size(LANES * sizeof(double)), aligned(sizeof(double)), may_alias));
typedef REAL four __attribute__((vector_size(4 * sizeof(REAL)), aligned(sizeof(REAL)), may_alias));
typedef double four_wide __attribute__((vector_size(4 * sizeof(double)), aligned(sizeof(double)), may_alias));
typedef int64_t four_bits __attribute__((vector_size(4 * sizeof(double)), aligned(sizeof(double)), may_alias));

#define INLINE static inline __attribute__((always_inline))
#if defined(__clang__)
#define UNROLLED /* by itself, where the count is a constant */
#else
#define UNROLLED _Pragma("GCC unroll 16")
#endif

/* ---- the four cells in flight ------------------------------------------------------------------------------------ */

INLINE vec splat(REAL x)
{
    return x - (vec){0};
}

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

INLINE void row_load(const REAL *from, vec *to, const size_t registers)
{
    UNROLLED
    for (size_t v = 0; v < registers; v++)
        to[v] = *(const vec *)(from + v * LANES);
}

INLINE void row_prefetch(const REAL *row, size_t width)
{
    const char *bytes = (const char *)row;
    for (size_t at = 0; at < width * sizeof(REAL); at += CACHE_LINE)
        __builtin_prefetch(bytes + at);
}

/* The right rows of cells k .. k+count-1 (count 1 to 4, a missing one stands for the first); those of cells further on
   are asked for. */
INLINE void cells_take(const struct sweep_rows *rows, const uint32_t *across, size_t count, const REAL *row[4])
{
    const REAL *data = rows->data;
    UNROLLED
    for (size_t c = 0; c < 4; c++)
        row[c] = data + across[c < count ? c : 0] * rows->stride;
}

INLINE void cells_prefetch(const struct sweep_rows *rows, const uint32_t *across, size_t width)
{
    const REAL *data = rows->data;
    UNROLLED
    for (size_t c = 0; c < 4; c++)
        row_prefetch(data + across[AHEAD + c] * rows->stride, width);
}

/* s_c += l * row_c */
INLINE void cells_dot(const vec *l, const REAL *const row[4], vec s[4], const size_t registers)
{
    UNROLLED
    for (size_t v = 0; v < registers; v++)
        for (size_t c = 0; c < 4; c++)
            s[c] = MADD(l[v], *(const vec *)(row[c] + v * LANES), s[c]);
}

/* g += sum over c of r_c row_c */
INLINE void cells_gather(const four *r, const REAL *const row[4], wide *g, const size_t registers)
{
    vec r0 = splat((*r)[0]), r1 = splat((*r)[1]), r2 = splat((*r)[2]), r3 = splat((*r)[3]);
    UNROLLED
    for (size_t v = 0; v < registers; v++) {
        vec sum = r0 * *(const vec *)(row[0] + v * LANES);
        sum = MADD(r1, *(const vec *)(row[1] + v * LANES), sum);
        sum = MADD(r2, *(const vec *)(row[2] + v * LANES), sum);
        sum = MADD(r3, *(const vec *)(row[3] + v * LANES), sum);
        g[v] += __builtin_convertvector(sum, wide);
    }
}

/* count numbers, zeros behind them. */
INLINE void four_load(const REAL *from, size_t count, four *to)
{
    if (count == 4)
        *to = *(const four *)from;
    else
        *to = (four){from[0], count > 1 ? from[1] : 0, count > 2 ? from[2] : 0, 0};
}

INLINE void four_store(const four *from, size_t count, REAL *to)
{
    if (count == 4)
        *(four *)to = *from;
    else
        for (size_t c = 0; c < count; c++)
            to[c] = (*from)[c];
}

/* Zeros for the cells that are not there. */
INLINE void four_cut(four *r, size_t count)
{
    if (count < 4)
        *r = (four){(*r)[0], count > 1 ? (*r)[1] : 0, count > 2 ? (*r)[2] : 0, 0};
}

/* Single rows may be wider than the double ones: what lies behind is zero, and not ours to write. */
INLINE void product_store(const struct sweep_job *job, uint32_t line, const wide *g, const size_t registers)
{
    double *row = job->product.data + line * job->product.stride;
    size_t width = factor_stride(job->rank);
    UNROLLED
    for (size_t v = 0; v < registers; v++)
        if ((v + 1) * LANES <= width)
            *(wide *)(row + v * LANES) = g[v];
        else
            memcpy(row + v * LANES, &g[v], (width - v * LANES) * sizeof *row);
}

INLINE double lanes_sum(const four_wide *x)
{
    return ((*x)[0] + (*x)[1]) + ((*x)[2] + (*x)[3]);
}

/* ---- residual and gradient ----------------------------------------------------------------------------------------
 */

struct residual_sums {
    four_wide square, absolute;
};

INLINE void residual_four(const struct sweep_job *job, uint64_t k, size_t count, const vec *l, wide *g,
                          struct residual_sums *sums, const size_t registers)
{
    const REAL *row[4];
    vec s[4] = {{0}};
    four r, x;
    cells_take(&job->right, job->half->across + k, count, row);
    cells_dot(l, row, s, registers);
    sum_four(s, &r);
    four_load((const REAL *)job->half->value + k, count, &x);
    r -= x;
    four_cut(&r, count);
    if (job->residual != NULL)
        four_store(&r, count, (REAL *)job->residual + k);
    four_wide wide_r = __builtin_convertvector(r, four_wide);
    sums->square += wide_r * wide_r;
    sums->absolute += (four_wide)((four_bits)wide_r & INT64_MAX); /* without its sign */
    if (g != NULL)
        cells_gather(&r, row, g, registers);
}

INLINE void residual_lines(const struct sweep_job *job, size_t block, double *out, const size_t registers,
                           const bool gradient)
{
    const struct half *half = job->half;
    uint32_t last = half->block[block + 1];
    uint64_t stop = half->start[last];
    struct residual_sums all = {{0}, {0}};
    for (uint32_t line = half->block[block]; line < last; line++) {
        struct residual_sums sums = {{0}, {0}};
        vec l[MOST_REGISTERS];
        wide g[MOST_REGISTERS];
        row_load((const REAL *)job->left.data + line * job->left.stride, l, registers);
        for (size_t v = 0; v < registers; v++)
            g[v] = (wide){0};
        uint64_t k = half->start[line], end = half->start[line + 1];
        for (; k + 4 <= end; k += 4) {
            if (k + AHEAD + 4 <= stop)
                cells_prefetch(&job->right, half->across + k, job->width);
            residual_four(job, k, 4, l, gradient ? g : NULL, &sums, registers);
        }
        if (k < end)
            residual_four(job, k, end - k, l, gradient ? g : NULL, &sums, registers);
        if (gradient)
            product_store(job, line, g, registers);
        all.square += sums.square;
        all.absolute += sums.absolute;
    }
    out[0] = lanes_sum(&all.square);
    out[1] = lanes_sum(&all.absolute);
}

/* Calls lines(job, block, sums, registers, ...) with the common numbers of registers as constants. */
#define REGISTERS_CONSTANT(lines, ...)                                                                                 \
    switch (job->width / LANES) {                                                                                      \
    case 1:                                                                                                            \
        lines(job, block, sums, 1, ##__VA_ARGS__);                                                                     \
        break;                                                                                                         \
    case 2:                                                                                                            \
        lines(job, block, sums, 2, ##__VA_ARGS__);                                                                     \
        break;                                                                                                         \
    case 3:                                                                                                            \
        lines(job, block, sums, 3, ##__VA_ARGS__);                                                                     \
        break;                                                                                                         \
    case 4:                                                                                                            \
        lines(job, block, sums, 4, ##__VA_ARGS__);                                                                     \
        break;                                                                                                         \
    case 6:                                                                                                            \
        lines(job, block, sums, 6, ##__VA_ARGS__);                                                                     \
        break;                                                                                                         \
    case 8:                                                                                                            \
        lines(job, block, sums, 8, ##__VA_ARGS__);                                                                     \
        break;                                                                                                         \
    default:                                                                                                           \
        lines(job, block, sums, job->width / LANES, ##__VA_ARGS__);                                                    \
    }

static void residual_block(const struct sweep_job *job, size_t block, size_t worker, double sums[SWEEP_SUMS])
{
    (void)worker;
    if (job->product.data != NULL)
        REGISTERS_CONSTANT(residual_lines, true)
    else
        REGISTERS_CONSTANT(residual_lines, false)
}

/* ---- product with given values ------------------------------------------------------------------------------------
 */

INLINE void multiply_four(const struct sweep_job *job, uint64_t k, size_t count, wide *g, const size_t registers)
{
    const REAL *row[4];
    four x;
    cells_take(&job->right, job->half->across + k, count, row);
    four_load((const REAL *)job->values + k, count, &x);
    cells_gather(&x, row, g, registers);
}

INLINE void multiply_lines(const struct sweep_job *job, size_t block, double *sums, const size_t registers)
{
    const struct half *half = job->half;
    uint32_t last = half->block[block + 1];
    uint64_t stop = half->start[last];
    for (uint32_t line = half->block[block]; line < last; line++) {
        wide g[MOST_REGISTERS];
        for (size_t v = 0; v < registers; v++)
            g[v] = (wide){0};
        uint64_t k = half->start[line], end = half->start[line + 1];
        for (; k + 4 <= end; k += 4) {
            if (k + AHEAD + 4 <= stop)
                cells_prefetch(&job->right, half->across + k, job->width);
            multiply_four(job, k, 4, g, registers);
        }
        if (k < end)
            multiply_four(job, k, end - k, g, registers);
        product_store(job, line, g, registers);
    }
    (void)sums;
}

static void multiply_block(const struct sweep_job *job, size_t block, size_t worker, double sums[SWEEP_SUMS])
{
    (void)worker;
    REGISTERS_CONSTANT(multiply_lines)
}

/* ---- a tangent step seen on the cells ------------------------------------------------------------------------------
 */

INLINE void tangent_four(const struct sweep_job *job, uint64_t k, size_t count, const vec *a, const vec *l,
                         four_wide sums[2], const size_t registers)
{
    const REAL *row[4], *other[4];
    vec s[4] = {{0}};
    four z, r;
    cells_take(&job->right, job->half->across + k, count, row);
    cells_take(&job->b, job->half->across + k, count, other);
    cells_dot(a, row, s, registers);
    cells_dot(l, other, s, registers);
    sum_four(s, &z);
    four_cut(&z, count);
    four_load((const REAL *)job->values + k, count, &r);
    four_wide wide_z = __builtin_convertvector(z, four_wide), wide_r = __builtin_convertvector(r, four_wide);
    sums[0] += wide_z * wide_r;
    sums[1] += wide_z * wide_z;
}

INLINE void tangent_lines(const struct sweep_job *job, size_t block, double *out, const size_t registers)
{
    const struct half *half = job->half;
    uint32_t last = half->block[block + 1];
    uint64_t stop = half->start[last];
    four_wide all[2] = {{0}, {0}};
    for (uint32_t line = half->block[block]; line < last; line++) {
        four_wide sums[2] = {{0}, {0}};
        vec l[MOST_REGISTERS], a[MOST_REGISTERS];
        row_load((const REAL *)job->left.data + line * job->left.stride, l, registers);
        row_load((const REAL *)job->a.data + line * job->a.stride, a, registers);
        uint64_t k = half->start[line], end = half->start[line + 1];
        for (; k + 4 <= end; k += 4) {
            if (k + AHEAD + 4 <= stop) {
                cells_prefetch(&job->right, half->across + k, job->width);
                cells_prefetch(&job->b, half->across + k, job->width);
            }
            tangent_four(job, k, 4, a, l, sums, registers);
        }
        if (k < end)
            tangent_four(job, k, end - k, a, l, sums, registers);
        all[0] += sums[0];
        all[1] += sums[1];
    }
    out[0] = lanes_sum(&all[0]);
    out[1] = lanes_sum(&all[1]);
}

static void tangent_block(const struct sweep_job *job, size_t block, size_t worker, double sums[SWEEP_SUMS])
{
    (void)worker;
    REGISTERS_CONSTANT(tangent_lines)
}

/* ---- normal equations ----------------------------------------------------------------------------------------------
 */

enum { TILE_ROWS = 4, TILE_REGISTERS = 3 };

/* gram(row .. row+3, first .. first + registers*LANES - 1) += sum over the chunk's rows p of p p' */
INLINE void tile_add(const REAL *rows, size_t count, size_t width, size_t row, size_t first, double *gram,
                     const size_t registers)
{
    vec sum[TILE_ROWS][TILE_REGISTERS] = {{{0}}};
    for (const REAL *p = rows; p < rows + count * width; p += width) {
        vec right[TILE_REGISTERS];
        row_load(p + first, right, registers);
        UNROLLED
        for (size_t t = 0; t < TILE_ROWS; t++) {
            vec left = splat(p[row + t]);
            UNROLLED
            for (size_t v = 0; v < registers; v++)
                sum[t][v] = MADD(left, right[v], sum[t][v]);
        }
    }
    UNROLLED
    for (size_t t = 0; t < TILE_ROWS; t++)
        for (size_t v = 0; v < registers; v++) {
            wide *to = (wide *)(gram + (row + t) * width + first + v * LANES);
            *to += __builtin_convertvector(sum[t][v], wide);
        }
}

/* The upper triangle of the chunk's products, and what whole tiles cover beside it. */
static void chunk_gram(const REAL *rows, size_t count, size_t width, double *gram)
{
    for (size_t row = 0; row < width; row += TILE_ROWS) {
        size_t first = row / LANES * LANES, left = (width - first) / LANES;
        for (; left >= TILE_REGISTERS; left -= TILE_REGISTERS, first += TILE_REGISTERS * LANES)
            tile_add(rows, count, width, row, first, gram, TILE_REGISTERS);
        if (left == 2)
            tile_add(rows, count, width, row, first, gram, 2);
        else if (left == 1)
            tile_add(rows, count, width, row, first, gram, 1);
    }
}

/* side += sum over the chunk of x_c row_c */
static void chunk_side(const REAL *rows, const REAL *values, size_t count, size_t width, double *side)
{
    for (size_t at = 0; at < width; at += LANES) {
        vec sum = {0};
        for (size_t c = 0; c < count; c++)
            sum = MADD(splat(values[c]), *(const vec *)(rows + c * width + at), sum);
        *(wide *)(side + at) += __builtin_convertvector(sum, wide);
    }
}

static void chunk_take(const struct sweep_job *job, uint64_t k, size_t count, REAL *rows)
{
    const REAL *data = job->right.data;
    for (size_t c = 0; c < count; c++) {
        const REAL *from = data + job->half->across[k + c] * job->right.stride;
        for (size_t at = 0; at < job->width; at += LANES)
            *(vec *)(rows + c * job->width + at) = *(const vec *)(from + at);
    }
}

static void solve_block(const struct sweep_job *job, size_t block, size_t worker, double sums[SWEEP_SUMS])
{
    const struct half *half = job->half;
    struct sweep_room room = sweep_room_of(job->sweep, worker);
    (void)sums;
    for (uint32_t line = half->block[block]; line < half->block[block + 1]; line++) {
        memset(room.gram, 0, job->width * job->width * sizeof *room.gram);
        memset(room.side, 0, job->width * sizeof *room.side);
        uint64_t end = half->start[line + 1];
        for (uint64_t k = half->start[line]; k < end; k += SWEEP_CHUNK) {
            size_t count = end - k < SWEEP_CHUNK ? end - k : SWEEP_CHUNK;
            chunk_take(job, k, count, room.rows);
            chunk_gram(room.rows, count, job->width, room.gram);
            chunk_side(room.rows, (const REAL *)half->value + k, count, job->width, room.side);
        }
        sweep_line_solve(job, &room, line);
    }
}

const struct sweep_kernel SWEEP_KERNEL = {.lanes = LANES,
                                          .residual = residual_block,
                                          .multiply = multiply_block,
                                          .tangent = tangent_block,
                                          .solve = solve_block};
