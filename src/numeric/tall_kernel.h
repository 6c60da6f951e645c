/* SPDX-License-Identifier: MIT
 *
 * Products of tall, narrow matrices, once for every instruction set: what gemm spends on setting such operands down in
 * its own order is as much as the work itself. The including file defines
 *
 *     LANES                doubles in a register: 2, 4 or 8
 *     TILE_ROWS            rows of a tile, whose sums stay in registers: TILE_ROWS x TILE_REGISTERS
 *     MADD(a, b, c)        a b + c on registers
 *     TALL_KERNEL          the name of the table this gives
 *
 * A line is read up to the end of its last register or tile; what stands there, be it of the next line, comes into no
 * number that is kept. Behind the last line nothing is read.
 */
#include <string.h>

#define INLINE static inline __attribute__((always_inline))
typedef double vec __attribute__((vector_size(LANES * sizeof(double)), aligned(sizeof(double)), may_alias));

enum {
    TILE_REGISTERS = 3,
    CHUNK = 128,      /* lines that a nearest cache holds while the tiles go over them */
    REACH = 8,        /* a multiple of TILE_ROWS and of LANES */
    LAST = REACH - 1, /* lines at the end from which a register or tile might reach behind the last number */
};
_Static_assert(TALL_MOST % REACH == 0, "whole registers and tiles");

INLINE vec splat(double x)
{
    return x - (vec){0};
}

/* ---- a'b -------------------------------------------------------------------------------------------------------- */

/* sum(0 .. TILE_ROWS-1, 0 .. registers*LANES-1) += that part of a'b */
INLINE void cross_tile(const double *a, size_t a_stride, const double *b, size_t b_stride, size_t count, double *sum,
                       const size_t registers)
{
    vec total[TILE_ROWS][TILE_REGISTERS];
    for (size_t t = 0; t < TILE_ROWS; t++)
        for (size_t v = 0; v < registers; v++)
            total[t][v] = *(const vec *)(sum + t * TALL_MOST + v * LANES);
    for (size_t i = 0; i < count; i++, a += a_stride, b += b_stride)
        for (size_t t = 0; t < TILE_ROWS; t++)
            for (size_t v = 0; v < registers; v++)
                total[t][v] = MADD(splat(a[t]), *(const vec *)(b + v * LANES), total[t][v]);
    for (size_t t = 0; t < TILE_ROWS; t++)
        for (size_t v = 0; v < registers; v++)
            *(vec *)(sum + t * TALL_MOST + v * LANES) = total[t][v];
}

static void chunk_cross(struct matrix a, struct matrix b, double *sum)
{
    for (size_t row = 0; row < a.columns; row += TILE_ROWS) {
        const double *left = a.data + row;
        double *to = sum + row * TALL_MOST;
        size_t first = 0, registers = (b.columns + LANES - 1) / LANES;
        for (; registers >= TILE_REGISTERS; registers -= TILE_REGISTERS, first += TILE_REGISTERS * LANES)
            cross_tile(left, a.stride, b.data + first, b.stride, a.rows, to + first, TILE_REGISTERS);
        if (registers == 2)
            cross_tile(left, a.stride, b.data + first, b.stride, a.rows, to + first, 2);
        else if (registers == 1)
            cross_tile(left, a.stride, b.data + first, b.stride, a.rows, to + first, 1);
    }
}

/* A copy of the lines, of which whole registers may be read. */
static struct matrix lines_apart(struct matrix a, double *room)
{
    for (size_t i = 0; i < a.rows; i++) {
        double *to = room + i * TALL_MOST;
        memcpy(to, &MATRIX_AT(a, i, 0), a.columns * sizeof *to);
        memset(to + a.columns, 0, (factor_stride(a.columns) - a.columns) * sizeof *to);
    }
    return (struct matrix){room, a.rows, a.columns, TALL_MOST};
}

static void tall_cross_add(struct matrix a, struct matrix b, double *sum)
{
    double left[LAST * TALL_MOST], right[LAST * TALL_MOST];
    size_t whole = a.rows > LAST ? a.rows - LAST : 0;
    struct matrix left_whole = matrix_lines(a, 0, whole), right_whole = matrix_lines(b, 0, whole);
    for (size_t first = 0; first < whole; first += CHUNK)
        chunk_cross(matrix_lines(left_whole, first, CHUNK), matrix_lines(right_whole, first, CHUNK), sum);
    chunk_cross(lines_apart(matrix_lines(a, whole, LAST), left), lines_apart(matrix_lines(b, whole, LAST), right), sum);
}

/* ---- a b + c ----------------------------------------------------------------------------------------------------- */

/* `lines` lines of c, `numbers` of each, which the registers cover; factor: that part of b, `inner` lines of it */
INLINE void multiply_tile(const double *a, size_t a_stride, const double *factor, size_t inner, double beta, double *c,
                          size_t c_stride, size_t numbers, const size_t lines, const size_t registers)
{
    vec total[TILE_ROWS][TILE_REGISTERS];
    for (size_t t = 0; t < lines; t++)
        for (size_t v = 0; v < registers; v++)
            total[t][v] = (vec){0};
    for (size_t k = 0; k < inner; k++, factor += TALL_MOST)
        for (size_t t = 0; t < lines; t++)
            for (size_t v = 0; v < registers; v++)
                total[t][v] = MADD(splat(a[t * a_stride + k]), *(const vec *)(factor + v * LANES), total[t][v]);
    for (size_t t = 0; t < lines; t++, c += c_stride) {
        double *to = c;
        size_t v = 0;
        for (; (v + 1) * LANES <= numbers && v < registers; v++, to += LANES)
            *(vec *)to = beta == 0 ? total[t][v] : (vec)MADD(splat(beta), *(const vec *)to, total[t][v]);
        for (size_t l = 0; v < registers && v * LANES + l < numbers; l++)
            to[l] = beta == 0 ? total[t][v][l] : beta * to[l] + total[t][v][l];
    }
}

INLINE void lines_multiply(struct matrix a, const double *factor, double beta, struct matrix c, const size_t lines)
{
    size_t first = 0, registers = (c.columns + LANES - 1) / LANES;
    for (; registers >= TILE_REGISTERS; registers -= TILE_REGISTERS, first += TILE_REGISTERS * LANES)
        multiply_tile(a.data, a.stride, factor + first, a.columns, beta, c.data + first, c.stride, c.columns - first,
                      lines, TILE_REGISTERS);
    if (registers == 2)
        multiply_tile(a.data, a.stride, factor + first, a.columns, beta, c.data + first, c.stride, c.columns - first,
                      lines, 2);
    else if (registers == 1)
        multiply_tile(a.data, a.stride, factor + first, a.columns, beta, c.data + first, c.stride, c.columns - first,
                      lines, 1);
}

static void tall_multiply_add(struct matrix a, const double *factor, double beta, struct matrix c)
{
    double room[TILE_ROWS * TALL_MOST];
    bool in_place = a.data == c.data;
    size_t i = 0;
    for (; i + TILE_ROWS <= a.rows; i += TILE_ROWS) {
        struct matrix from = matrix_lines(a, i, TILE_ROWS);
        lines_multiply(in_place ? lines_apart(from, room) : from, factor, beta, matrix_lines(c, i, TILE_ROWS),
                       TILE_ROWS);
    }
    for (; i < a.rows; i++) {
        struct matrix from = matrix_lines(a, i, 1);
        lines_multiply(in_place ? lines_apart(from, room) : from, factor, beta, matrix_lines(c, i, 1), 1);
    }
}

const struct tall_kernel TALL_KERNEL = {tall_cross_add, tall_multiply_add};
