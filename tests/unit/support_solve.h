/* SPDX-License-Identifier: MIT
 *
 * What the tests of the solvers share: sown problems, dense references by LAPACK, distances.
 */
#ifndef FESCUE_TESTS_SUPPORT_SOLVE_H
#define FESCUE_TESTS_SUPPORT_SOLVE_H

#include "solve/solve_internal.h"
#include "support_table.h"

#include <lapacke.h>
#include <math.h>
#include <stdlib.h>
#include <string.h>

/* A problem and the cells it stands on. */
struct plot {
    fescue_context *context;
    struct sowing sowing;
    struct cells cells;
    struct problem problem;
};

static inline void plot_of_cells(fescue_context *context, double ridge, struct plot *plot)
{
    plot->context = context;
    assert_status(context, problem_create(context, &plot->cells, NULL, ridge, &plot->problem), FESCUE_OK);
}

static inline struct plot plot_sow(fescue_context *context, const struct sowing *sowing, double ridge)
{
    struct plot plot = {.sowing = *sowing};
    sow_cells(context, sowing, &plot.cells);
    plot_of_cells(context, ridge, &plot);
    return plot;
}

/* From a dense row-major array; NaN is a hole. */
static inline struct plot plot_dense(fescue_context *context, uint32_t rows, uint32_t columns, const double *dense,
                                     double ridge)
{
    struct plot plot = {.sowing = {.rows = rows, .columns = columns}};
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    for (uint32_t i = 0; i < rows; i++)
        for (uint32_t j = 0; j < columns; j++)
            if (!isnan(dense[i * columns + j]))
                assert_status(context, triplets_append(context, &list, i, j, dense[i * columns + j]), FESCUE_OK);
    assert_status(context, cells_build(context, rows, columns, &list, &plot.cells), FESCUE_OK);
    triplets_free(context, &list);
    plot_of_cells(context, ridge, &plot);
    return plot;
}

static inline void plot_free(struct plot *plot)
{
    problem_free(&plot->problem);
    cells_free(plot->context, &plot->cells);
}

/* The targets as a dense row-major array, `hole` where nothing was seen; from malloc. */
static inline double *dense_targets(const struct plot *plot, double hole)
{
    const struct half *half = &plot->problem.target.by_row;
    size_t columns = half->length;
    double *dense = malloc(half->lines * columns * sizeof *dense);
    assert_non_null(dense);
    for (size_t k = 0; k < half->lines * columns; k++)
        dense[k] = hole;
    for (uint32_t i = 0; i < half->lines; i++)
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++)
            dense[i * columns + half->across[k]] = cells_value(&plot->problem.target, half, k);
    return dense;
}

/* The truncated singular value decomposition of a dense array (spoilt), by LAPACK's gesvd; spectrum: all values. */
static inline void dense_truncate(fescue_context *context, double *dense, size_t rows, size_t columns, size_t rank,
                                  struct low_rank *point, double *spectrum)
{
    size_t least = rows < columns ? rows : columns;
    double *left = malloc(rows * least * sizeof *left), *right = malloc(least * columns * sizeof *right);
    double *room = malloc(least * sizeof *room);
    assert_int_equal(LAPACKE_dgesvd(LAPACK_ROW_MAJOR, 'S', 'S', (lapack_int)rows, (lapack_int)columns, dense,
                                    (lapack_int)columns, spectrum, left, (lapack_int)least, right, (lapack_int)columns,
                                    room),
                     0);
    assert_status(context, low_rank_create(context, rows, columns, rank, point), FESCUE_OK);
    for (size_t k = 0; k < rank; k++) {
        point->spectrum[k] = spectrum[k];
        for (size_t i = 0; i < rows; i++)
            MATRIX_AT(point->left, i, k) = left[i * least + k];
        for (size_t j = 0; j < columns; j++)
            MATRIX_AT(point->right, j, k) = right[k * columns + j];
    }
    free(left);
    free(right);
    free(room);
}

/* |scale a - b| / |b| over all cells. */
static inline double point_distance(const struct low_rank *a, double scale, const struct low_rank *b)
{
    double difference = 0, size = 0;
    assert_true(a->rows == b->rows && a->columns == b->columns);
    for (size_t i = 0; i < a->rows; i++)
        for (size_t j = 0; j < a->columns; j++) {
            double x = low_rank_entry(b, i, j);
            difference += pow(scale * low_rank_entry(a, i, j) - x, 2);
            size += x * x;
        }
    return sqrt(difference / size);
}

/* Relative error of scale * point over the whole of a sown table. */
static inline double truth_distance(const struct plot *plot, const struct low_rank *point)
{
    double difference = 0, size = 0;
    for (uint32_t i = 0; i < plot->sowing.rows; i++)
        for (uint32_t j = 0; j < plot->sowing.columns; j++) {
            double x = sowing_truth(&plot->sowing, i, j);
            difference += pow(plot->problem.scale * low_rank_entry(point, i, j) - x, 2);
            size += x * x;
        }
    return sqrt(difference / size);
}

/* |U'U - I| + |V'V - I|, and fails unless the spectrum is descending and nonnegative. */
static inline double form_error(const struct low_rank *point)
{
    const struct matrix sides[] = {point->left, point->right};
    double square = 0;
    for (size_t k = 0; k < point->rank; k++)
        assert_true(point->spectrum[k] >= 0 && (k == 0 || point->spectrum[k] <= point->spectrum[k - 1]));
    for (int s = 0; s < 2; s++)
        for (size_t k = 0; k < point->rank; k++)
            for (size_t l = 0; l < point->rank; l++) {
                double dot = k == l ? -1 : 0;
                for (size_t i = 0; i < sides[s].rows; i++)
                    dot += MATRIX_AT(sides[s], i, k) * MATRIX_AT(sides[s], i, l);
                square += dot * dot;
            }
    return sqrt(square);
}

/* The objective by its definition, cell by cell. */
static inline double objective_plain(const struct problem *problem, const struct low_rank *point)
{
    const struct half *half = &problem->target.by_row;
    double square = 0, size = 0;
    for (uint32_t i = 0; i < half->lines; i++)
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++)
            square += pow(low_rank_entry(point, i, half->across[k]) - cells_value(&problem->target, half, k), 2);
    for (size_t k = 0; k < point->rank; k++)
        size += point->spectrum[k] * point->spectrum[k];
    return 0.5 * square + 0.5 * problem->lambda * size;
}

/* A random point of the given size: orthonormal sides, spectrum 1, 1/2, 1/3, ... times `size`. */
static inline struct low_rank random_point(fescue_context *context, size_t rows, size_t columns, size_t rank,
                                           double size)
{
    struct random_stream stream = random_open(7, RANDOM_TEST, 77);
    struct low_rank point;
    size_t longer = rows > columns ? rows : columns;
    double *work = malloc(dense_work_size(longer, rank) * sizeof *work);
    assert_status(context, low_rank_create(context, rows, columns, rank, &point), FESCUE_OK);
    struct matrix sides[] = {point.left, point.right}, none = {0};
    for (int s = 0; s < 2; s++) {
        for (size_t i = 0; i < sides[s].rows; i++)
            for (size_t k = 0; k < rank; k++)
                MATRIX_AT(sides[s], i, k) = random_normal(&stream);
        assert_status(context, dense_qr(context, sides[s], none, work), FESCUE_OK);
    }
    for (size_t k = 0; k < rank; k++)
        point.spectrum[k] = size / (double)(k + 1);
    free(work);
    return point;
}

/* Bits of two points. */
static inline bool points_same(const struct low_rank *a, const struct low_rank *b)
{
    for (size_t k = 0; k < a->rank; k++) {
        if (memcmp(&a->spectrum[k], &b->spectrum[k], sizeof(double)) != 0)
            return false;
        for (size_t i = 0; i < a->rows; i++)
            if (memcmp(&MATRIX_AT(a->left, i, k), &MATRIX_AT(b->left, i, k), sizeof(double)) != 0)
                return false;
        for (size_t j = 0; j < a->columns; j++)
            if (memcmp(&MATRIX_AT(a->right, j, k), &MATRIX_AT(b->right, j, k), sizeof(double)) != 0)
                return false;
    }
    return a->rank == b->rank;
}

static const struct solve_limits usual_limits = {.iterations = 1000, .gradient = 1e-9};

/* A fit in which every allocation is refused in turn: it says so, and leaves nothing behind. */
static inline void evidence_refuse_memory(fescue_context *context, const struct cells *cells,
                                          const struct evidence_request *request)
{
    uint64_t alive = fescue_memory_usage(context).blocks;
    for (uint64_t n = 1;; n++) {
        struct evidence_result fit;
        fault_plan(FAULT_TAKE, n, false, 0);
        fescue_status status = evidence_learn(context, cells, request, &fit);
        bool met = fault_met();
        fault_clear();
        if (status == FESCUE_OK)
            evidence_result_free(context, &fit);
        else
            assert_int_equal(status, FESCUE_NO_MEMORY);
        assert_int_equal(fescue_memory_usage(context).blocks, alive);
        fescue_failure_clear(context);
        if (!met)
            break;
        assert_int_not_equal(status, FESCUE_OK);
    }
}

#endif
