/* SPDX-License-Identifier: MIT
 *
 * Products and sums of tall matrices by the team: pieces of lines, which depend on the shape alone.
 *
 * Narrow ones by the kernels of the instruction set, others by OpenBLAS. A product A B is a product of every piece by
 * itself. One of two tall matrices, A'B, is the sum of those of the pieces, added in their order; so neither has bits
 * that depend on the workers.
 */
#include "numeric/dense_internal.h"
#include "numeric/kernel_internal.h"

#include <assert.h>
#include <string.h>

struct tall {
    struct dense_pieces pieces;
    double alpha, beta;
    struct matrix a, b, c;
    const double *scale;              /* of columns, of lines, or a packed factor */
    bool transpose;                   /* of b: op(b) = b' */
    const struct tall_kernel *kernel; /* NULL: c is wider than it takes */
    const double *factor;             /* alpha op(b), as the kernel has it */
    double *partial;                  /* what a piece sums to: a number, or as many as A'B has */
};

static struct tall tall_of(double alpha, struct matrix a, struct matrix b, double beta, struct matrix c)
{
    size_t width = a.columns > b.columns ? a.columns : b.columns;
    return (struct tall){
        .pieces = dense_pieces_of(a.rows, width), .alpha = alpha, .beta = beta, .a = a, .b = b, .c = c};
}

static void multiply_piece(void *job, size_t piece, size_t worker)
{
    const struct tall *tall = job;
    struct matrix a = dense_piece(tall->a, &tall->pieces, piece), c = dense_piece(tall->c, &tall->pieces, piece);
    (void)worker;
    if (tall->kernel != NULL)
        tall->kernel->multiply(a, tall->factor, tall->beta, c);
    else
        matrix_multiply(tall->alpha, a, false, tall->b, tall->transpose, tall->beta, c);
}

/* Columns first .. of a, as many as the kernels take, with the lines of op(b) that they meet. */
static void columns_multiply(fescue_context *context, const struct tall *whole, size_t first)
{
    double factor[TALL_MOST * TALL_MOST];
    struct tall tall = *whole;
    tall.a = matrix_columns(whole->a, first, TALL_MOST);
    memset(factor, 0, tall.a.columns * TALL_MOST * sizeof *factor);
    for (size_t i = 0; i < tall.a.columns; i++)
        for (size_t j = 0; j < tall.c.columns; j++)
            factor[i * TALL_MOST + j] =
                tall.alpha * (tall.transpose ? MATRIX_AT(tall.b, j, first + i) : MATRIX_AT(tall.b, first + i, j));
    tall.factor = factor;
    tall.kernel = kernel_set_choose()->tall;
    tall.beta = first == 0 ? tall.beta : 1;
    team_run(context, tall.pieces.count, multiply_piece, &tall);
}

static void multiply_run(fescue_context *context, struct tall *tall)
{
    if (tall->c.columns > TALL_MOST || tall->a.columns == 0)
        team_run(context, tall->pieces.count, multiply_piece, tall);
    else
        for (size_t first = 0; first < tall->a.columns; first += TALL_MOST)
            columns_multiply(context, tall, first);
}

void tall_multiply(fescue_context *context, double alpha, struct matrix a, struct matrix b, double beta,
                   struct matrix c)
{
    struct tall tall = tall_of(alpha, a, b, beta, c);
    multiply_run(context, &tall);
}

void tall_multiply_transposed(fescue_context *context, double alpha, struct matrix a, struct matrix b, double beta,
                              struct matrix c)
{
    struct tall tall = tall_of(alpha, a, b, beta, c);
    tall.transpose = true;
    multiply_run(context, &tall);
}

static void cross_piece(void *job, size_t piece, size_t worker)
{
    const struct tall *tall = job;
    struct matrix a = dense_piece(tall->a, &tall->pieces, piece), b = dense_piece(tall->b, &tall->pieces, piece);
    size_t rows = tall->c.rows, columns = tall->c.columns;
    struct matrix sum = {tall->partial + piece * rows * columns, rows, columns, columns};
    (void)worker;
    if (tall->kernel == NULL) {
        matrix_multiply(1, a, true, b, false, 0, sum);
        return;
    }
    for (size_t first = 0; first < rows; first += TALL_MOST) {
        double room[TALL_MOST * TALL_MOST];
        struct matrix left = matrix_columns(a, first, TALL_MOST);
        memset(room, 0, tall_lines(left.columns) * TALL_MOST * sizeof *room);
        tall->kernel->cross(left, b, room);
        matrix_copy((struct matrix){room, left.columns, columns, TALL_MOST},
                    (struct matrix){&MATRIX_AT(sum, first, 0), left.columns, columns, columns});
    }
}

void tall_cross(fescue_context *context, struct matrix a, struct matrix b, struct matrix c, double *work)
{
    struct tall tall = tall_of(1, a, b, 0, c);
    size_t count = c.rows * c.columns;
    assert(a.rows == b.rows && c.rows == a.columns && c.columns == b.columns);
    tall.kernel = b.columns <= TALL_MOST ? kernel_set_choose()->tall : NULL;
    tall.partial = work + count;
    team_run(context, tall.pieces.count, cross_piece, &tall);
    team_sum(context, tall.partial, tall.pieces.count, count, work);
    matrix_copy((struct matrix){work, c.rows, c.columns, c.columns}, c);
}

/* ---- one pass over the numbers ----------------------------------------------------------------------------------- */

static void copy_piece(void *job, size_t piece, size_t worker)
{
    const struct tall *tall = job;
    struct matrix to = dense_piece(tall->b, &tall->pieces, piece);
    (void)worker;
    matrix_copy(dense_piece(tall->a, &tall->pieces, piece), to);
    if (tall->scale != NULL)
        matrix_scale_columns(to, tall->scale);
}

void tall_copy(fescue_context *context, struct matrix from, const double *scale, struct matrix to)
{
    struct tall tall = tall_of(1, from, to, 0, to);
    tall.scale = scale;
    team_run(context, tall.pieces.count, copy_piece, &tall);
}

static void scale_piece(void *job, size_t piece, size_t worker)
{
    const struct tall *tall = job;
    struct matrix from = dense_piece(tall->a, &tall->pieces, piece), to = dense_piece(tall->b, &tall->pieces, piece);
    const double *scale = tall->scale + piece * tall->pieces.each;
    (void)worker;
    for (size_t i = 0; i < to.rows; i++)
        for (size_t j = 0; j < to.columns; j++)
            MATRIX_AT(to, i, j) = scale[i] * MATRIX_AT(from, i, j);
}

void tall_scale_lines(fescue_context *context, struct matrix from, const double *scale, struct matrix to)
{
    struct tall tall = tall_of(1, from, to, 0, to);
    tall.scale = scale;
    team_run(context, tall.pieces.count, scale_piece, &tall);
}

static void solve_piece(void *job, size_t piece, size_t worker)
{
    const struct tall *tall = job;
    struct matrix to = dense_piece(tall->b, &tall->pieces, piece);
    (void)worker;
    matrix_copy(dense_piece(tall->a, &tall->pieces, piece), to);
    for (size_t i = 0; i < to.rows; i++)
        packed_solve(tall->scale, to.columns, &MATRIX_AT(to, i, 0));
}

void tall_solve(fescue_context *context, const double *factor, struct matrix from, struct matrix to)
{
    struct tall tall = tall_of(1, from, to, 0, to);
    tall.scale = factor;
    team_run(context, tall.pieces.count, solve_piece, &tall);
}

static void add_piece(void *job, size_t piece, size_t worker)
{
    const struct tall *tall = job;
    struct matrix y = dense_piece(tall->b, &tall->pieces, piece);
    (void)worker;
    if (tall->beta == 0)
        matrix_zero(y);
    else if (tall->beta != 1)
        matrix_scale(tall->beta, y);
    matrix_add(tall->alpha, dense_piece(tall->a, &tall->pieces, piece), y);
}

void tall_add(fescue_context *context, double alpha, struct matrix x, double beta, struct matrix y)
{
    struct tall tall = tall_of(alpha, x, y, beta, y);
    team_run(context, tall.pieces.count, add_piece, &tall);
}

static void dot_piece(void *job, size_t piece, size_t worker)
{
    const struct tall *tall = job;
    (void)worker;
    tall->partial[piece] =
        matrix_dot(dense_piece(tall->a, &tall->pieces, piece), dense_piece(tall->b, &tall->pieces, piece));
}

double tall_dot(fescue_context *context, struct matrix a, struct matrix b)
{
    double partial[DENSE_MOST_PIECES], sum;
    struct tall tall = tall_of(1, a, b, 0, b);
    tall.partial = partial;
    team_run(context, tall.pieces.count, dot_piece, &tall);
    team_sum(context, partial, tall.pieces.count, 1, &sum);
    return sum;
}

/* sum of weight_j a_j^2 in eight sums, as matrix_dot has them */
static void line_square(const double *a, const double *weight, size_t length, double part[8])
{
    size_t j = 0;
    for (; j + 8 <= length; j += 8)
        for (size_t p = 0; p < 8; p++)
            part[p] += weight[j + p] * (a[j + p] * a[j + p]);
    for (size_t p = 0; j + p < length; p++)
        part[p] += weight[j + p] * (a[j + p] * a[j + p]);
}

static void square_piece(void *job, size_t piece, size_t worker)
{
    const struct tall *tall = job;
    struct matrix a = dense_piece(tall->a, &tall->pieces, piece);
    double part[8] = {0}, sum = 0;
    (void)worker;
    for (size_t i = 0; i < a.rows; i++)
        line_square(&MATRIX_AT(a, i, 0), tall->scale, a.columns, part);
    for (size_t p = 0; p < 8; p++)
        sum += part[p];
    tall->partial[piece] = sum;
}

double tall_square(fescue_context *context, struct matrix a, const double *weight)
{
    double partial[DENSE_MOST_PIECES], sum;
    struct tall tall = tall_of(1, a, a, 0, a);
    tall.scale = weight;
    tall.partial = partial;
    team_run(context, tall.pieces.count, square_piece, &tall);
    team_sum(context, partial, tall.pieces.count, 1, &sum);
    return sum;
}
