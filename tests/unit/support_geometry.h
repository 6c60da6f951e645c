/* SPDX-License-Identifier: MIT
 *
 * What the tests of the geometry share: room for matrices, plain dense algebra on them, slopes.
 */
#ifndef FESCUE_TESTS_SUPPORT_GEOMETRY_H
#define FESCUE_TESTS_SUPPORT_GEOMETRY_H

#include "manifold/manifold.h"
#include "support.h"

#include <math.h>
#include <stdlib.h>
#include <string.h>

/* Room for the matrices of one test, and its random numbers. */
struct ground {
    fescue_context *context;
    struct arena arena;
    struct random_stream stream;
};

enum { GROUND_BYTES = 1 << 24 };

/* The seed is printed; the environment's TEST_SEED replaces it. */
static inline struct ground ground_open(void **state)
{
    const char *asked = getenv("TEST_SEED");
    unsigned long seed = asked != NULL ? strtoul(asked, NULL, 10) : 20160617;
    struct ground ground = {.context = bench_of(state)->context, .stream = random_open(seed, RANDOM_TEST, 1)};
    print_message("# seed %lu\n", seed);
    arena_reserve(&ground.arena, GROUND_BYTES, 1);
    assert_int_equal(arena_open(ground.context, &ground.arena), FESCUE_OK);
    return ground;
}

static inline void ground_close(struct ground *ground)
{
    arena_close(ground->context, &ground->arena);
}

/* Everything carved so far is free again. */
static inline void ground_clear(struct ground *ground)
{
    memset(ground->arena.base, 0, ground->arena.carved);
    ground->arena.carved = 0;
}

/* Carved places may hold old numbers: zeroed here, padding too. */
static inline struct matrix zeros(struct ground *ground, size_t rows, size_t columns)
{
    struct matrix a = matrix_carve(&ground->arena, rows, columns);
    for (size_t k = 0; k < rows * a.stride; k++)
        a.data[k] = 0;
    return a;
}

static inline struct matrix normals(struct ground *ground, size_t rows, size_t columns)
{
    struct matrix a = zeros(ground, rows, columns);
    for (size_t i = 0; i < rows; i++)
        for (size_t j = 0; j < columns; j++)
            MATRIX_AT(a, i, j) = random_normal(&ground->stream);
    return a;
}

static inline struct matrix copy_of(struct ground *ground, struct matrix from)
{
    struct matrix a = zeros(ground, from.rows, from.columns);
    matrix_copy(from, a);
    return a;
}

/* op(a) op(b) */
static inline struct matrix times(struct ground *ground, struct matrix a, bool transpose_a, struct matrix b,
                                  bool transpose_b)
{
    struct matrix c = zeros(ground, transpose_a ? a.columns : a.rows, transpose_b ? b.rows : b.columns);
    matrix_multiply(1, a, transpose_a, b, transpose_b, 0, c);
    return c;
}

/* |a - b|, Frobenius. */
static inline double gap(struct matrix a, struct matrix b)
{
    double square = 0;
    assert_true(a.rows == b.rows && a.columns == b.columns);
    for (size_t i = 0; i < a.rows; i++)
        for (size_t j = 0; j < a.columns; j++)
            square += pow(MATRIX_AT(a, i, j) - MATRIX_AT(b, i, j), 2);
    return sqrt(square);
}

/* |a'a - I|. */
static inline double orthonormality(struct matrix a)
{
    double square = 0;
    for (size_t j = 0; j < a.columns; j++)
        for (size_t k = 0; k < a.columns; k++) {
            double dot = j == k ? -1 : 0;
            for (size_t i = 0; i < a.rows; i++)
                dot += MATRIX_AT(a, i, j) * MATRIX_AT(a, i, k);
            square += dot * dot;
        }
    return sqrt(square);
}

/* |a'b|. */
static inline double overlap(struct matrix a, struct matrix b)
{
    double square = 0;
    for (size_t j = 0; j < a.columns; j++)
        for (size_t k = 0; k < b.columns; k++) {
            double dot = 0;
            for (size_t i = 0; i < a.rows; i++)
                dot += MATRIX_AT(a, i, j) * MATRIX_AT(b, i, k);
            square += dot * dot;
        }
    return sqrt(square);
}

/* The columns of a made orthonormal. */
static inline struct matrix frame(struct ground *ground, size_t rows, size_t columns)
{
    struct matrix a = normals(ground, rows, columns);
    double *work = arena_carve(&ground->arena, dense_work_size(rows, columns), sizeof *work);
    assert_status(ground->context, dense_qr(ground->context, a, (struct matrix){0}, work), FESCUE_OK);
    return a;
}

/* What rounding may leave in the norm of an a that was computed from numbers of size one: a few units a place, added up
   like independent errors. */
static inline double rounding(struct matrix a)
{
    return 2e-15 * sqrt((double)(a.rows * a.columns)) + 4e-15;
}

/* error[k], a norm, was measured at the step first * 2^-k: every halving must divide it by nearly 2^order, as long as
   it is above the floor that rounding sets. At least two halvings must be above it. */
static inline void assert_order(const double *error, size_t count, double order, double floor)
{
    size_t judged = 0;
    for (size_t k = 1; k < count && error[k] > floor; k++) {
        double slope = log2(error[k - 1] / error[k]);
        if (slope < order - 0.2)
            print_error("halving number %zu: order %.3f where %.0f was expected\n", k, slope, order);
        assert_true(slope >= order - 0.2);
        judged++;
    }
    assert_true(judged >= 2);
}

#endif
