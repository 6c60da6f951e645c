/* SPDX-License-Identifier: MIT
 *
 * Products and sums of tall matrices by the team: pieces of lines, which depend on the shape alone.
 *
 * Narrow ones by the kernels of the instruction set, others by OpenBLAS. A product A B is a product of every piece by
 * itself. One of two tall matrices, A'B, is the sum of those of the pieces, added in their order; so neither has bits
 * that depend on the workers.
 *
 * What can be done for one piece after the other, products and then sums of what they gave, is one step, and steps that
 * do not wait for each other are one round of the team: a round costs microseconds, and on small tables an iteration
 * has little more work than that in most of them.
 */
#include "numeric/dense_internal.h"
#include "numeric/kernel_internal.h"

#include <assert.h>
#include <string.h>

/* A round of steps. Blocks of work go by where they lie in their matrices, so that a worker finds the lines that it has
   had in other rounds, whatever the number of steps. */
struct round {
    const struct tall_step *step;
    const struct tall_kernel *kernel;
    struct dense_pieces pieces[TALL_STEPS];
    double *partial[TALL_STEPS][TALL_SUMS]; /* one after the other, what every piece sums to */
    struct round_block {
        uint32_t step, piece;
    } block[TALL_STEPS * DENSE_MOST_PIECES];
    size_t blocks;
};

static size_t wider(size_t width, struct matrix a)
{
    return a.columns > width ? a.columns : width;
}

static struct dense_pieces step_pieces(const struct tall_step *step)
{
    size_t lines = step->to.data != NULL ? step->to.rows : step->sum[0].a.rows, width = step->to.columns;
    for (size_t k = 0; k < step->terms; k++)
        width = wider(width, step->term[k].a);
    for (size_t k = 0; k < step->sums; k++)
        width = wider(wider(width, step->sum[k].a), step->sum[k].b);
    return dense_pieces_of(lines, width);
}

static size_t sum_size(const struct tall_sum *sum)
{
    return sum->dot != NULL ? 1 : sum->a.columns * sum->b.columns;
}

/* Columns first .. of a, as many as the kernels take, with the lines of op(b) that they meet. */
static void columns_multiply(const struct tall_kernel *kernel, const struct tall_term *term, size_t first,
                             struct matrix a, double beta, struct matrix c)
{
    double factor[TALL_MOST * TALL_MOST];
    struct matrix part = matrix_columns(a, first, TALL_MOST);
    for (size_t i = 0; i < part.columns; i++) {
        double *to = factor + i * TALL_MOST;
        const double *from = term->transpose ? &MATRIX_AT(term->b, 0, first + i) : &MATRIX_AT(term->b, first + i, 0);
        size_t step = term->transpose ? term->b.stride : 1;
        for (size_t j = 0; j < c.columns; j++)
            to[j] = term->alpha * from[j * step];
        memset(to + c.columns, 0, (factor_stride(c.columns) - c.columns) * sizeof *to);
    }
    kernel->multiply(part, factor, beta, c);
}

NUMERIC_VERSIONS static void lines_add(double alpha, struct matrix x, double beta, struct matrix y)
{
    for (size_t i = 0; i < y.rows; i++) {
        const double *from = &MATRIX_AT(x, i, 0);
        double *to = &MATRIX_AT(y, i, 0);
        for (size_t j = 0; j < y.columns; j++)
            to[j] = beta == 0 ? alpha * from[j] : alpha * from[j] + beta * to[j];
    }
}

/* c = alpha a b + beta c for one piece. */
static void term_add(const struct tall_kernel *kernel, const struct tall_term *term, struct matrix a, double beta,
                     struct matrix c)
{
    if (term->b.data == NULL && a.columns > 0)
        lines_add(term->alpha, a, beta, c);
    else if (c.columns > TALL_MOST || a.columns == 0)
        matrix_multiply(term->alpha, a, false, term->b, term->transpose, beta, c);
    else
        for (size_t first = 0; first < a.columns; first += TALL_MOST)
            columns_multiply(kernel, term, first, a, first == 0 ? beta : 1, c);
}

/* cross = a'b */
static void piece_cross(const struct tall_kernel *kernel, struct matrix a, struct matrix b, struct matrix cross)
{
    if (b.columns > TALL_MOST) {
        matrix_multiply(1, a, true, b, false, 0, cross);
        return;
    }
    for (size_t first = 0; first < a.columns; first += TALL_MOST) {
        double room[TALL_MOST * TALL_MOST];
        struct matrix left = matrix_columns(a, first, TALL_MOST);
        for (size_t i = 0; i < tall_lines(left.columns); i++)
            memset(room + i * TALL_MOST, 0, factor_stride(b.columns) * sizeof *room);
        kernel->cross(left, b, room);
        matrix_copy((struct matrix){room, left.columns, b.columns, TALL_MOST},
                    (struct matrix){&MATRIX_AT(cross, first, 0), left.columns, b.columns, cross.stride});
    }
}

static void round_piece(void *job, size_t at, size_t worker)
{
    const struct round *round = job;
    struct round_block block = round->block[at];
    const struct tall_step *step = &round->step[block.step];
    const struct dense_pieces *pieces = &round->pieces[block.step];
    (void)worker;
    for (size_t k = 0; k < step->terms; k++)
        term_add(round->kernel, &step->term[k], dense_piece(step->term[k].a, pieces, block.piece),
                 k == 0 ? step->beta : 1, dense_piece(step->to, pieces, block.piece));
    for (size_t k = 0; k < step->sums; k++) {
        struct matrix a = dense_piece(step->sum[k].a, pieces, block.piece),
                      b = dense_piece(step->sum[k].b, pieces, block.piece);
        double *partial = round->partial[block.step][k] + block.piece * sum_size(&step->sum[k]);
        if (step->sum[k].dot != NULL)
            *partial = matrix_dot(a, b);
        else
            piece_cross(round->kernel, a, b, (struct matrix){partial, a.columns, b.columns, b.columns});
    }
}

/* The next block is that of the step whose next piece lies nearest to the beginning. */
static void round_order(struct round *round, size_t steps)
{
    size_t next[TALL_STEPS] = {0}, total = 0;
    for (size_t s = 0; s < steps; s++)
        total += round->pieces[s].count;
    for (round->blocks = 0; round->blocks < total; round->blocks++) {
        size_t nearest = steps;
        for (size_t s = 0; s < steps; s++)
            if (next[s] < round->pieces[s].count &&
                (nearest == steps ||
                 (2 * next[s] + 1) * round->pieces[nearest].count < (2 * next[nearest] + 1) * round->pieces[s].count))
                nearest = s;
        round->block[round->blocks] = (struct round_block){(uint32_t)nearest, (uint32_t)next[nearest]++};
    }
}

static void sum_finish(fescue_context *context, const struct tall_sum *sum, const double *partial, size_t pieces,
                       double *room)
{
    size_t rows = sum->a.columns, columns = sum->b.columns;
    team_sum(context, partial, pieces, sum_size(sum), sum->dot != NULL ? sum->dot : room);
    if (sum->dot == NULL)
        matrix_copy((struct matrix){room, rows, columns, columns}, sum->cross);
}

void tall_run(fescue_context *context, const struct tall_step *step, size_t steps, double *work)
{
    struct round round = {.step = step, .kernel = kernel_set_choose()->tall};
    assert(steps <= TALL_STEPS);
    for (size_t s = 0; s < steps; s++) {
        round.pieces[s] = step_pieces(&step[s]);
        for (size_t k = 0; k < step[s].sums; k++) {
            round.partial[s][k] = work;
            work += round.pieces[s].count * sum_size(&step[s].sum[k]);
        }
    }
    round_order(&round, steps);
    team_run(context, round.blocks, round_piece, &round);
    for (size_t s = 0; s < steps; s++)
        for (size_t k = 0; k < step[s].sums; k++)
            sum_finish(context, &step[s].sum[k], round.partial[s][k], round.pieces[s].count, work);
}

/* One piece more, since a narrower step may have more of them. */
size_t tall_run_size(size_t lines, size_t columns, size_t sums)
{
    return ((dense_pieces_of(lines, columns).count + 1) * sums + 1) * columns * columns;
}

/* ---- steps of one thing ------------------------------------------------------------------------------------------ */

void tall_multiply(fescue_context *context, double alpha, struct matrix a, struct matrix b, double beta,
                   struct matrix c)
{
    struct tall_step step = {.to = c, .beta = beta, .terms = 1, .term = {{alpha, a, b, false}}};
    tall_run(context, &step, 1, NULL);
}

void tall_multiply_transposed(fescue_context *context, double alpha, struct matrix a, struct matrix b, double beta,
                              struct matrix c)
{
    struct tall_step step = {.to = c, .beta = beta, .terms = 1, .term = {{alpha, a, b, true}}};
    tall_run(context, &step, 1, NULL);
}

void tall_cross(fescue_context *context, struct matrix a, struct matrix b, struct matrix c, double *work)
{
    struct tall_step step = {.sums = 1, .sum = {{.a = a, .b = b, .cross = c}}};
    assert(a.rows == b.rows && c.rows == a.columns && c.columns == b.columns);
    tall_run(context, &step, 1, work);
}

void tall_add(fescue_context *context, double alpha, struct matrix x, double beta, struct matrix y)
{
    struct tall_step step = {.to = y, .beta = beta, .terms = 1, .term = {{.alpha = alpha, .a = x}}};
    tall_run(context, &step, 1, NULL);
}

double tall_dot(fescue_context *context, struct matrix a, struct matrix b)
{
    double partial[DENSE_MOST_PIECES], dot;
    struct tall_step step = {.sums = 1, .sum = {{.a = a, .b = b, .dot = &dot}}};
    tall_run(context, &step, 1, partial);
    return dot;
}
