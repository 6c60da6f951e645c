/* SPDX-License-Identifier: MIT
 *
 * Products of matrices, and what all dense routines stand on: one thread inside OpenBLAS, pieces of lines, work sizes.
 *
 * Holding OpenBLAS at one thread is a setting of the whole process; a program around us that wants more of them for its
 * own work may set them again between calls, at the price of bits that depend on it.
 */
#include "numeric/dense_internal.h"

#include <assert.h>
#include <pthread.h>

void dense_threads_hold(void)
{
    static pthread_once_t once = PTHREAD_ONCE_INIT;
    pthread_once(&once, openblas_hold);
}

lapack_int dense_size(size_t size)
{
    assert(size <= INT32_MAX);
    return (lapack_int)size;
}

fescue_status dense_check(fescue_context *context, const char *routine, lapack_int info)
{
    if (info == 0)
        return FESCUE_OK;
    return FAIL(context, FESCUE_DEFECT, "%s gave up (%d): the numbers it was given are not all finite", routine,
                (int)info);
}

struct dense_pieces dense_pieces_of(size_t lines, size_t columns)
{
    /* A piece pays for its call into the team (some microseconds), and for a partial sum of columns^2 numbers; many
       pieces share out more evenly. So of 1024 lines, or a quarter of fewer, but not of less than 2^17 products with a
       square, nor of less than eight lines a column. */
    size_t square = columns * columns, pays = square > 128 ? ((size_t)1 << 17) / square : 1024;
    size_t each = lines / 4 < 1024 ? lines / 4 : 1024;
    if (each < pays)
        each = pays;
    if (each < 8 * columns)
        each = 8 * columns;
    size_t least = (lines + DENSE_MOST_PIECES - 1) / DENSE_MOST_PIECES;
    if (each < least)
        each = least;
    return (struct dense_pieces){.lines = lines, .each = each, .count = lines == 0 ? 1 : (lines + each - 1) / each};
}

struct matrix dense_piece(struct matrix a, const struct dense_pieces *pieces, size_t which)
{
    return matrix_lines(a, which * pieces->each, pieces->each);
}

/* c = alpha op(a) op(b) + beta c, nothing empty. */
struct product {
    double alpha;
    struct matrix a, b, c;
    bool transpose_a, transpose_b;
};

static void product_make(const struct product *p, double beta)
{
    size_t inner = p->transpose_a ? p->a.rows : p->a.columns;
    cblas_dgemm(CblasRowMajor, p->transpose_a ? CblasTrans : CblasNoTrans, p->transpose_b ? CblasTrans : CblasNoTrans,
                dense_size(p->c.rows), dense_size(p->c.columns), dense_size(inner), p->alpha, p->a.data,
                dense_size(p->a.stride), p->b.data, dense_size(p->b.stride), beta, p->c.data, dense_size(p->c.stride));
}

/* Products of tall, narrow matrices wait for memory: a piece of lines that stays in the cache at a time is up to three
   times as fast as all at once. Wide ones gemm cuts better by itself. */
enum { NARROW_MOST = 64, PIECE_NUMBERS = 16384 };

void matrix_multiply(double alpha, struct matrix a, bool transpose_a, struct matrix b, bool transpose_b, double beta,
                     struct matrix c)
{
    size_t inner = transpose_a ? a.rows : a.columns;
    struct product part = {.alpha = alpha, .transpose_a = transpose_a, .transpose_b = transpose_b, .b = b, .c = c};
    size_t width = a.columns > c.columns ? a.columns : c.columns;
    assert(c.rows == (transpose_a ? a.columns : a.rows) && c.columns == (transpose_b ? b.rows : b.columns));
    assert(inner == (transpose_b ? b.columns : b.rows));
    dense_threads_hold();
    if (c.rows == 0 || c.columns == 0)
        return;
    if (inner == 0) {
        for (size_t i = 0; i < c.rows; i++)
            for (size_t j = 0; j < c.columns; j++)
                MATRIX_AT(c, i, j) = beta == 0 ? 0 : beta * MATRIX_AT(c, i, j);
        return;
    }
    size_t lines = width <= NARROW_MOST && !(transpose_a && transpose_b) ? PIECE_NUMBERS / width : a.rows;
    for (size_t first = 0; first < a.rows; first += lines) {
        part.a = matrix_lines(a, first, lines);
        if (transpose_a)
            part.b = transpose_b ? b : matrix_lines(b, first, lines);
        else
            part.c = matrix_lines(c, first, lines);
        product_make(&part, transpose_a && first > 0 ? 1 : beta);
    }
}

size_t dense_work_size(size_t lines, size_t columns)
{
    /* QR: one partial sum a piece, two triangles. SVD: two square matrices, LAPACK's room, 64 lines a piece. */
    size_t pieces = dense_pieces_of(lines, columns).count;
    return (pieces + 8) * columns * columns + (pieces + 8) * DENSE_BLOCK * (columns + 1) + 64;
}
