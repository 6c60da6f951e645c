/* SPDX-License-Identifier: MIT
 *
 * The Grassmann manifold: workspace, tangents, the retraction by QR, random points. Geodesics are in geodesic.c, what
 * lies between two given points in geodesic_join.c.
 *
 * A subspace of R^m of dimension r is held as an orthonormal basis U, m x r. The tangents are the D with U'D = 0
 * (horizontal lifts: moving U within its own subspace is no movement), so the projection onto them is I - U U' from the
 * left. (Absil, Mahony, Sepulchre 2008, "Optimization algorithms on matrix manifolds", sections 3.4.4, 3.6.2, 4.1.2.)
 *
 * The projection is applied twice. Once leaves U'D of the size of rounding in Z; where Z is nearly normal, as a
 * gradient is that is nearly zero, that is not small beside D. Twice leaves rounding in D.
 *
 * The QR factor is unique only with the signs of R's diagonal fixed; they are made positive, so that the new
 * basis tends to U as t D tends to zero and vectors at the two points can be compared.
 */
#include "manifold/manifold_internal.h"

void grassmann_reserve(struct arena *arena, size_t rows, size_t rank)
{
    assert(rank >= 1 && rank <= rows);
    geodesic_reserve(arena, rows, rank);
    matrix_reserve(arena, rows, rank);
    matrix_reserve(arena, rows, rank);
    matrix_reserve(arena, rank, rank);
    matrix_reserve(arena, rank, rank);
    matrix_reserve(arena, rank, rank);
    arena_reserve(arena, rank, sizeof(double));
    arena_reserve(arena, rank, sizeof(double));
    arena_reserve(arena, dense_work_size(rows, rank), sizeof(double));
    arena_reserve(arena, tall_run_size(rows, rank, 3), sizeof(double));
}

struct grassmann_work grassmann_carve(fescue_context *context, struct arena *arena, size_t rows, size_t rank)
{
    struct grassmann_work work = {.context = context, .rows = rows, .rank = rank};
    work.geodesic = geodesic_carve(arena, rows, rank);
    work.tall = matrix_carve(arena, rows, rank);
    work.other = matrix_carve(arena, rows, rank);
    work.core = matrix_carve(arena, rank, rank);
    work.second_core = matrix_carve(arena, rank, rank);
    work.inverse = matrix_carve(arena, rank, rank);
    work.sine = arena_carve(arena, rank, sizeof(double));
    work.cosine = arena_carve(arena, rank, sizeof(double));
    work.dense = arena_carve(arena, dense_work_size(rows, rank), sizeof(double));
    work.sums = arena_carve(arena, tall_run_size(rows, rank, 3), sizeof(double));
    return work;
}

void grassmann_project(struct grassmann_work *work, struct matrix point, struct matrix z)
{
    assert(is_shape(point, work->rows, work->rank) && is_shape(z, work->rows, work->rank));
    if (work->rows == work->rank) { /* one point only */
        matrix_zero(z);
        return;
    }
    tall_cross(work->context, point, z, work->core, work->dense);
    const struct tall_step once = {.to = z,
                                   .beta = 1,
                                   .terms = 1,
                                   .term = {{-1, point, work->core, false}},
                                   .sums = 1,
                                   .sum = {{.a = point, .b = z, .cross = work->core}}};
    tall_run(work->context, &once, 1, work->sums);
    tall_multiply(work->context, -1, point, work->core, 1, z);
}

/* tall = (U + tD) R^-1 with R'R = (U + tD)'(U + tD) from sums of products, and of that the same once more: Cholesky QR
   (dense_qr.c), the first pass of which need not make U + tD. False where that is not sure enough, or small. */
static bool retract_by_sums(struct grassmann_work *work, struct matrix point, struct matrix d, double t,
                            struct matrix to)
{
    struct matrix gram = work->core, mixed = work->second_core, inverse = work->inverse;
    size_t rank = work->rank;
    const struct tall_step sums = {.sums = 3,
                                   .sum = {{.a = point, .b = point, .cross = gram},
                                           {.a = point, .b = d, .cross = mixed},
                                           {.a = d, .b = d, .cross = inverse}}};
    if (work->rows < DENSE_GRAM_LINES * rank)
        return false;
    tall_run(work->context, &sums, 1, work->sums); /* inverse holds D'D as yet */
    for (size_t i = 0; i < rank; i++)
        for (size_t j = i; j < rank; j++)
            MATRIX_AT(gram, i, j) +=
                t * (MATRIX_AT(mixed, i, j) + MATRIX_AT(mixed, j, i)) + t * t * MATRIX_AT(inverse, i, j);
    if (!dense_gram_triangle(gram, inverse, work->sine))
        return false;
    matrix_copy(inverse, mixed);
    matrix_scale(t, mixed);
    const struct tall_step divided = {.to = work->tall,
                                      .terms = 2,
                                      .term = {{1, point, inverse, false}, {1, d, mixed, false}},
                                      .sums = 1,
                                      .sum = {{.a = work->tall, .b = work->tall, .cross = gram}}};
    tall_run(work->context, &divided, 1, work->sums);
    if (!dense_gram_triangle(gram, inverse, work->sine))
        return false;
    tall_multiply(work->context, 1, work->tall, inverse, 0, to);
    return true;
}

fescue_status grassmann_retract_qr(struct grassmann_work *work, struct matrix point, struct matrix tangent, double t,
                                   struct matrix to)
{
    fescue_status status = FESCUE_OK;
    if (retract_by_sums(work, point, tangent, t, to))
        return status;
    tall_copy(work->context, point, NULL, work->tall);
    tall_add(work->context, t, tangent, 1, work->tall);
    TRY(dense_qr(work->context, work->tall, (struct matrix){0}, work->dense));
    tall_copy(work->context, work->tall, NULL, to);
done:
    return status;
}

static void normals_fill(struct random_stream *stream, struct matrix a)
{
    for (size_t i = 0; i < a.rows; i++)
        for (size_t j = 0; j < a.columns; j++)
            MATRIX_AT(a, i, j) = random_normal(stream);
}

/* The span of independent normal vectors is uniform, since their distribution is the same in every basis. */
fescue_status grassmann_random_point(struct grassmann_work *work, struct random_stream *stream, struct matrix point)
{
    assert(is_shape(point, work->rows, work->rank));
    normals_fill(stream, point);
    return dense_qr(work->context, point, (struct matrix){0}, work->dense);
}

void grassmann_random_tangent(struct grassmann_work *work, struct random_stream *stream, struct matrix point,
                              struct matrix tangent)
{
    normals_fill(stream, tangent);
    grassmann_project(work, point, tangent);
    if (work->rows > work->rank)
        matrix_scale(1 / matrix_norm(tangent), tangent);
}
