/* SPDX-License-Identifier: MIT
 *
 * What the tests of the solvers share that go through a table a few lines at a time: tables of known condition.
 */
#ifndef FESCUE_TESTS_SUPPORT_STREAM_H
#define FESCUE_TESTS_SUPPORT_STREAM_H

#include "solve/stream_internal.h"
#include "support_solve.h"

/* rows x columns, the spectrum falling geometrically from its largest to largest / kappa, mean square 1. Cell (i, j) is
   seen with probability share, or share (1 - skew) ... share (1 + skew) as i goes from the first row to the last. Of
   the seen cells the part `outliers` is wrong by 3 to 10, either way; with `weeded` those are left out. */
struct meadow {
    uint32_t rows, columns;
    size_t rank;
    double kappa, share, skew, noise, outliers;
    bool weeded;
    uint64_t seed;
};

struct field_plot {
    struct plot plot;
    struct low_rank truth; /* in the table's units */
};

static inline void sides_draw(fescue_context *context, struct low_rank *point, struct random_stream *stream)
{
    struct matrix sides[] = {point->left, point->right}, none = {0};
    size_t longer = point->rows > point->columns ? point->rows : point->columns;
    double *work = malloc(dense_work_size(longer, point->rank) * sizeof *work);
    for (int s = 0; s < 2; s++) {
        for (size_t i = 0; i < sides[s].rows; i++)
            for (size_t k = 0; k < point->rank; k++)
                MATRIX_AT(sides[s], i, k) = random_normal(stream);
        assert_status(context, dense_qr(context, sides[s], none, work), FESCUE_OK);
    }
    free(work);
}

static inline struct low_rank meadow_truth(fescue_context *context, const struct meadow *meadow)
{
    struct random_stream stream = random_open(meadow->seed, RANDOM_TEST, 1);
    struct low_rank truth;
    double size = 0;
    assert_status(context, low_rank_create(context, meadow->rows, meadow->columns, meadow->rank, &truth), FESCUE_OK);
    sides_draw(context, &truth, &stream);
    for (size_t k = 0; k < meadow->rank; k++) {
        truth.spectrum[k] = pow(meadow->kappa, meadow->rank < 2 ? 0 : -(double)k / (double)(meadow->rank - 1));
        size += truth.spectrum[k] * truth.spectrum[k];
    }
    for (size_t k = 0; k < meadow->rank; k++)
        truth.spectrum[k] *= sqrt((double)meadow->rows * meadow->columns / size);
    return truth;
}

/* What is wrong with a cell; 0 for most. */
static inline double outlier_draw(const struct meadow *meadow, struct random_stream *stream)
{
    if (meadow->outliers == 0 || random_uniform(stream) >= meadow->outliers)
        return 0;
    double size = 3 + 7 * random_uniform(stream);
    return random_uniform(stream) < 0.5 ? -size : size;
}

static inline struct field_plot meadow_sow(fescue_context *context, const struct meadow *meadow)
{
    struct field_plot out = {.truth = meadow_truth(context, meadow)};
    struct random_stream stream = random_open(meadow->seed, RANDOM_TEST, 2);
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    for (uint32_t i = 0; i < meadow->rows; i++)
        for (uint32_t j = 0; j < meadow->columns; j++) {
            double turn = meadow->skew * (2.0 * i / (meadow->rows - 1.0) - 1), value;
            if (random_uniform(&stream) >= meadow->share * (1 + turn))
                continue;
            value = low_rank_entry(&out.truth, i, j) + meadow->noise * random_normal(&stream);
            double outlier = outlier_draw(meadow, &stream);
            if (!meadow->weeded || outlier == 0)
                assert_status(context, triplets_append(context, &list, i, j, value + outlier), FESCUE_OK);
        }
    assert_status(context, cells_build(context, meadow->rows, meadow->columns, &list, &out.plot.cells), FESCUE_OK);
    triplets_free(context, &list);
    plot_of_cells(context, 0, &out.plot);
    return out;
}

static inline void meadow_free(struct field_plot *field)
{
    low_rank_free(field->plot.context, &field->truth);
    plot_free(&field->plot);
}

/* rms of scale * point - truth over all cells. */
static inline double meadow_error(const struct field_plot *field, const struct low_rank *point)
{
    double square = 0, cells = (double)point->rows * (double)point->columns;
    for (size_t i = 0; i < point->rows; i++)
        for (size_t j = 0; j < point->columns; j++)
            square +=
                pow(field->plot.problem.scale * low_rank_entry(point, i, j) - low_rank_entry(&field->truth, i, j), 2);
    return sqrt(square / cells);
}

/* The minimum next to the truth, by the trust region: what a full fit gives. */
static inline struct low_rank meadow_minimum(const struct field_plot *field)
{
    struct low_rank point;
    struct solve_result result = {0};
    struct problem *problem = (struct problem *)&field->plot.problem;
    assert_status(field->plot.context, low_rank_copy(field->plot.context, &field->truth, &point), FESCUE_OK);
    for (size_t k = 0; k < point.rank; k++)
        point.spectrum[k] /= field->plot.problem.scale;
    assert_status(field->plot.context,
                  solve_run(problem, solver_find("grassmann-trust-region"), &usual_limits, &point, &result), FESCUE_OK);
    assert_true(solve_converged(result.stop));
    solve_result_free(field->plot.context, &result);
    return point;
}

/* Error after so many iterations from the zero matrix, over that of the full fit. */
static inline double passes_error(struct field_plot *field, const struct low_rank *minimum, const char *solver,
                                  uint64_t passes)
{
    fescue_context *context = field->plot.context;
    struct low_rank point;
    struct solve_result result = {0};
    const struct solve_limits limits = {.iterations = passes};
    double ratio;
    point = random_point(context, field->truth.rows, field->truth.columns, field->truth.rank, 0);
    assert_status(context, solve_run(&field->plot.problem, solver_find(solver), &limits, &point, &result), FESCUE_OK);
    assert_int_equal(result.iterations, passes);
    ratio = meadow_error(field, &point) / meadow_error(field, minimum);
    solve_result_free(context, &result);
    low_rank_free(context, &point);
    return ratio;
}

#endif
