/* SPDX-License-Identifier: MIT
 *
 * Views of row-major matrices and what needs one pass over them.
 *
 * A sum runs over eight partial sums (one a residue of the column), row by row, and these are added in a fixed order:
 * the error grows with an eighth of the length, the loop fits vector registers, and the bits depend on shape alone.
 */
#include "numeric/numeric.h"

#include <assert.h>
#include <math.h>
#include <string.h>

enum { PARTS = 8 }; /* two registers of the widest kind in sight, and what the factor stride is a multiple of */

void matrix_reserve(struct arena *arena, size_t rows, size_t columns)
{
    size_t count;
    if (!size_product(rows, factor_stride(columns), &count))
        arena->overflow = true;
    else
        arena_reserve(arena, count, sizeof(double));
}

struct matrix matrix_carve(struct arena *arena, size_t rows, size_t columns)
{
    size_t stride = factor_stride(columns);
    return (struct matrix){
        .data = arena_carve(arena, rows * stride, sizeof(double)), .rows = rows, .columns = columns, .stride = stride};
}

struct matrix matrix_left(struct matrix a, size_t columns)
{
    assert(columns <= a.columns);
    a.columns = columns;
    return a;
}

/* Two matrices of one shape without gaps are one long row. */
static void rows_join(struct matrix *a, struct matrix *b)
{
    assert(a->rows == b->rows && a->columns == b->columns);
    if (a->columns == a->stride && b->columns == b->stride && a->rows > 0) {
        a->columns = b->columns = a->rows * a->columns;
        a->stride = b->stride = a->columns;
        a->rows = b->rows = 1;
    }
}

void matrix_copy(struct matrix from, struct matrix to)
{
    rows_join(&from, &to);
    for (size_t i = 0; i < from.rows; i++)
        memmove(&MATRIX_AT(to, i, 0), &MATRIX_AT(from, i, 0), from.columns * sizeof(double));
}

void matrix_zero(struct matrix a)
{
    for (size_t i = 0; i < a.rows; i++)
        memset(&MATRIX_AT(a, i, 0), 0, a.columns * sizeof(double));
}

void matrix_scale(double alpha, struct matrix a)
{
    for (size_t i = 0; i < a.rows; i++)
        for (size_t j = 0; j < a.columns; j++)
            MATRIX_AT(a, i, j) *= alpha;
}

void matrix_add(double alpha, struct matrix x, struct matrix y)
{
    rows_join(&x, &y);
    for (size_t i = 0; i < x.rows; i++) {
        const double *from = &MATRIX_AT(x, i, 0);
        double *to = &MATRIX_AT(y, i, 0);
        for (size_t j = 0; j < x.columns; j++)
            to[j] += alpha * from[j];
    }
}

void matrix_scale_columns(struct matrix a, const double *scale)
{
    for (size_t i = 0; i < a.rows; i++)
        for (size_t j = 0; j < a.columns; j++)
            MATRIX_AT(a, i, j) *= scale[j];
}

/* part[j mod PARTS] += a_j b_j */
static void row_dot(const double *a, const double *b, size_t length, double part[PARTS])
{
    size_t j = 0;
    for (; j + PARTS <= length; j += PARTS)
        for (size_t p = 0; p < PARTS; p++)
            part[p] += a[j + p] * b[j + p];
    for (size_t p = 0; j + p < length; p++)
        part[p] += a[j + p] * b[j + p];
}

static double parts_sum(const double part[PARTS])
{
    return ((part[0] + part[4]) + (part[2] + part[6])) + ((part[1] + part[5]) + (part[3] + part[7]));
}

double matrix_dot(struct matrix a, struct matrix b)
{
    double part[PARTS] = {0};
    rows_join(&a, &b);
    for (size_t i = 0; i < a.rows; i++)
        row_dot(&MATRIX_AT(a, i, 0), &MATRIX_AT(b, i, 0), a.columns, part);
    return parts_sum(part);
}

/* The largest |a_ij|; not a number when one is not. */
static double largest(struct matrix a)
{
    double most = 0;
    for (size_t i = 0; i < a.rows; i++)
        for (size_t j = 0; j < a.columns; j++) {
            double size = fabs(MATRIX_AT(a, i, j));
            if (!(size <= most))
                most = size;
            if (isnan(most))
                return most;
        }
    return most;
}

static double norm_scaled(struct matrix a)
{
    double most = largest(a), part[PARTS] = {0};
    if (most == 0 || !isfinite(most))
        return most;
    /* A power of two, so that scaling does not round; its inverse must not overflow, hence the bound. */
    double scale = ldexp(1, ilogb(most) < -1000 ? 1000 : -ilogb(most));
    for (size_t i = 0; i < a.rows; i++)
        for (size_t j = 0; j < a.columns; j++) {
            double entry = MATRIX_AT(a, i, j) * scale;
            part[j % PARTS] += entry * entry;
        }
    return sqrt(parts_sum(part)) / scale;
}

double matrix_norm(struct matrix a)
{
    double square = matrix_dot(a, a);
    /* Squares below 1e-308 lose digits; a sum above 1e-280 owes nothing that can be seen to them. */
    if (square > 1e-280 && square < 1e300)
        return sqrt(square);
    return norm_scaled(a);
}
