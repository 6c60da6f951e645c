/* SPDX-License-Identifier: MIT
 *
 * One pass over the lines of a tall matrix by the team, in pieces that depend on its shape alone: copied, scaled,
 * solved, squared. Products and what can share a round with others are in tall_step.c.
 */
#include "numeric/dense_internal.h"

#include <assert.h>
#include <string.h>

struct pass {
    struct dense_pieces pieces;
    struct matrix a, b;
    const double *scale; /* of columns, of lines, or a packed factor */
    double *partial;     /* what a piece sums to */
};

static struct pass pass_of(struct matrix a, struct matrix b)
{
    return (struct pass){.pieces = dense_pieces_of(a.rows, a.columns), .a = a, .b = b};
}

static void copy_piece(void *job, size_t piece, size_t worker)
{
    const struct pass *pass = job;
    struct matrix to = dense_piece(pass->b, &pass->pieces, piece);
    (void)worker;
    matrix_copy(dense_piece(pass->a, &pass->pieces, piece), to);
    if (pass->scale != NULL)
        matrix_scale_columns(to, pass->scale);
}

void tall_copy(fescue_context *context, struct matrix from, const double *scale, struct matrix to)
{
    struct pass pass = pass_of(from, to);
    pass.scale = scale;
    team_run(context, pass.pieces.count, copy_piece, &pass);
}

static void scale_piece(void *job, size_t piece, size_t worker)
{
    const struct pass *pass = job;
    struct matrix from = dense_piece(pass->a, &pass->pieces, piece), to = dense_piece(pass->b, &pass->pieces, piece);
    const double *scale = pass->scale + piece * pass->pieces.each;
    (void)worker;
    for (size_t i = 0; i < to.rows; i++)
        for (size_t j = 0; j < to.columns; j++)
            MATRIX_AT(to, i, j) = scale[i] * MATRIX_AT(from, i, j);
}

void tall_scale_lines(fescue_context *context, struct matrix from, const double *scale, struct matrix to)
{
    struct pass pass = pass_of(from, to);
    pass.scale = scale;
    team_run(context, pass.pieces.count, scale_piece, &pass);
}

/* Lines side by side, number j of lane l at [j][l]: every lane goes through the same factor. */
enum { SOLVE_LANES = 8, SOLVE_MOST = 260 };

NUMERIC_VERSIONS static void lanes_solve(const double *factor, size_t k, double lanes[][SOLVE_LANES])
{
    for (size_t j = 0; j < k; j++) {
        double pivot = factor[packed_size(j) + j];
        for (size_t l = 0; l < SOLVE_LANES; l++)
            lanes[j][l] /= pivot;
        for (size_t i = j + 1; i < k; i++)
            for (size_t l = 0; l < SOLVE_LANES; l++)
                lanes[i][l] -= factor[packed_size(i) + j] * lanes[j][l];
    }
    for (size_t i = k; i-- > 0;) {
        const double *row = factor + packed_size(i);
        for (size_t l = 0; l < SOLVE_LANES; l++)
            lanes[i][l] /= row[i];
        for (size_t j = 0; j < i; j++)
            for (size_t l = 0; l < SOLVE_LANES; l++)
                lanes[j][l] -= row[j] * lanes[i][l];
    }
}

static void solve_piece(void *job, size_t piece, size_t worker)
{
    const struct pass *pass = job;
    struct matrix from = dense_piece(pass->a, &pass->pieces, piece), to = dense_piece(pass->b, &pass->pieces, piece);
    double lanes[SOLVE_MOST][SOLVE_LANES];
    (void)worker;
    memset(lanes, 0, to.columns * sizeof *lanes);
    for (size_t first = 0; first < to.rows; first += SOLVE_LANES) {
        size_t count = to.rows - first < SOLVE_LANES ? to.rows - first : SOLVE_LANES;
        for (size_t l = 0; l < count; l++)
            for (size_t j = 0; j < to.columns; j++)
                lanes[j][l] = MATRIX_AT(from, first + l, j);
        lanes_solve(pass->scale, to.columns, lanes);
        for (size_t l = 0; l < count; l++)
            for (size_t j = 0; j < to.columns; j++)
                MATRIX_AT(to, first + l, j) = lanes[j][l];
    }
}

void tall_solve(fescue_context *context, const double *factor, struct matrix from, struct matrix to)
{
    struct pass pass = pass_of(from, to);
    assert(to.columns <= SOLVE_MOST);
    pass.scale = factor;
    team_run(context, pass.pieces.count, solve_piece, &pass);
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
    const struct pass *pass = job;
    struct matrix a = dense_piece(pass->a, &pass->pieces, piece);
    double part[8] = {0}, sum = 0;
    (void)worker;
    for (size_t i = 0; i < a.rows; i++)
        line_square(&MATRIX_AT(a, i, 0), pass->scale, a.columns, part);
    for (size_t p = 0; p < 8; p++)
        sum += part[p];
    pass->partial[piece] = sum;
}

double tall_square(fescue_context *context, struct matrix a, const double *weight)
{
    double partial[DENSE_MOST_PIECES], sum;
    struct pass pass = pass_of(a, a);
    pass.scale = weight;
    pass.partial = partial;
    team_run(context, pass.pieces.count, square_piece, &pass);
    team_sum(context, partial, pass.pieces.count, 1, &sum);
    return sum;
}
