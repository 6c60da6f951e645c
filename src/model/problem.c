/* SPDX-License-Identifier: MIT
 *
 * The low-rank problem that is left when the offsets are taken out.
 *
 *     t_ij = (x_ij - offset_ij) / scale,      scale^2 = mean over seen of (x_ij - offset_ij)^2
 *
 * so that the targets have mean square 1 in any units. Squares are summed relative to the largest difference, because
 * values around 1e-150 or 1e+150 have no square. All arithmetic is in double; only the stored target is rounded, to the
 * store's precision or to another one.
 *
 * Parallel over the blocks of the store; each block writes its own targets and its own partial sums, which are added in
 * block order, so that the scale does not depend on the workers.
 *
 * Cost: three passes over the cells, and room for one more set of values both ways.
 */
#include "model/model.h"

#include <assert.h>
#include <float.h>
#include <math.h>
#include <string.h>

struct target_pass {
    const struct cells *from;
    const struct offsets *offsets;   /* NULL: none */
    const struct half *half;         /* of `from` */
    void *target;                    /* values in the half's order, when they are written */
    enum fescue_precision precision; /* of the targets */
    bool by_row;
    double largest, scale;
    double largest_of[CELLS_MOST_BLOCKS];    /* |x - offset| */
    double square_of[2 * CELLS_MOST_BLOCKS]; /* (x - offset)^2 and x^2, in units of largest^2 */
};

/* Cells that a pass takes in one go, so that what is done to each of them is done in the widest registers there are. */
enum { STRETCH = 256 };
struct stretch {
    double x[STRETCH], difference[STRETCH]; /* what was seen, and that less its offset */
};

NUMERIC_VERSIONS
static void less_row(double offset, const double *restrict column, const uint32_t *restrict across, size_t count,
                     double *restrict difference)
{
    for (size_t c = 0; c < count; c++)
        difference[c] -= offset + column[across[c]];
}

NUMERIC_VERSIONS
static void less_column(const struct offsets *offsets, double column, const uint32_t *restrict across, size_t count,
                        double *restrict difference)
{
    const double *restrict row = offsets->row;
    double mean = offsets->mean;
    for (size_t c = 0; c < count; c++)
        difference[c] -= mean + row[across[c]] + column;
}

NUMERIC_VERSIONS
static void divide(double divisor, size_t count, double *numbers)
{
    for (size_t c = 0; c < count; c++)
        numbers[c] /= divisor;
}

/* The cells of a line from k on, as many as fit; returns how many. */
static size_t stretch_take(const struct target_pass *pass, uint32_t line, uint64_t k, struct stretch *stretch)
{
    const struct half *half = pass->half;
    const struct offsets *offsets = pass->offsets;
    size_t count = half->start[line + 1] - k < STRETCH ? (size_t)(half->start[line + 1] - k) : STRETCH;
    if (pass->from->precision == FESCUE_SINGLE)
        for (size_t c = 0; c < count; c++)
            stretch->x[c] = (double)((const float *)half->value)[k + c];
    else
        memcpy(stretch->x, (const double *)half->value + k, count * sizeof *stretch->x);
    memcpy(stretch->difference, stretch->x, count * sizeof *stretch->x);
    if (offsets == NULL)
        return count;
    if (pass->by_row)
        less_row(offsets->mean + offsets->row[line], offsets->column, half->across + k, count, stretch->difference);
    else
        less_column(offsets, offsets->column[line], half->across + k, count, stretch->difference);
    return count;
}

static void largest_task(void *job, size_t block, size_t worker)
{
    struct target_pass *pass = job;
    struct stretch stretch;
    double largest = 0;
    (void)worker;
    for (uint32_t line = pass->half->block[block]; line < pass->half->block[block + 1]; line++)
        for (uint64_t k = pass->half->start[line], count; k < pass->half->start[line + 1]; k += count) {
            count = stretch_take(pass, line, k, &stretch);
            for (size_t c = 0; c < count; c++) {
                double size = fabs(stretch.difference[c]);
                largest = size > largest ? size : largest;
            }
        }
    pass->largest_of[block] = largest;
}

static void square_task(void *job, size_t block, size_t worker)
{
    struct target_pass *pass = job;
    struct stretch stretch;
    double difference = 0, observed = 0;
    (void)worker;
    for (uint32_t line = pass->half->block[block]; line < pass->half->block[block + 1]; line++)
        for (uint64_t k = pass->half->start[line], count; k < pass->half->start[line + 1]; k += count) {
            count = stretch_take(pass, line, k, &stretch);
            divide(pass->largest, count, stretch.difference);
            divide(pass->largest, count, stretch.x);
            for (size_t c = 0; c < count; c++) {
                difference += stretch.difference[c] * stretch.difference[c];
                observed += stretch.x[c] * stretch.x[c];
            }
        }
    pass->square_of[2 * block] = difference;
    pass->square_of[2 * block + 1] = observed;
}

static void target_task(void *job, size_t block, size_t worker)
{
    struct target_pass *pass = job;
    struct stretch stretch;
    (void)worker;
    for (uint32_t line = pass->half->block[block]; line < pass->half->block[block + 1]; line++)
        for (uint64_t k = pass->half->start[line], count; k < pass->half->start[line + 1]; k += count) {
            count = stretch_take(pass, line, k, &stretch);
            divide(pass->scale, count, stretch.difference);
            if (pass->precision == FESCUE_SINGLE)
                for (size_t c = 0; c < count; c++)
                    ((float *)pass->target)[k + c] = (float)stretch.difference[c];
            else
                memcpy((double *)pass->target + k, stretch.difference, count * sizeof(double));
        }
}

static double epsilon_of(enum fescue_precision precision)
{
    return precision == FESCUE_SINGLE ? FLT_EPSILON : DBL_EPSILON;
}

/* Scale and rounding, from two passes over the rows. */
static void problem_measure(struct problem *problem, struct target_pass *pass)
{
    double sum[2] = {0, 0}, count = (double)pass->from->count;
    team_run(problem->context, pass->half->blocks, largest_task, pass);
    for (size_t block = 0; block < pass->half->blocks; block++)
        pass->largest = fmax(pass->largest, pass->largest_of[block]);
    problem->scale = 1;
    problem->rounding = epsilon_of(pass->precision);
    if (pass->largest == 0)
        return;
    problem->norm = sqrt(count);
    team_run(problem->context, pass->half->blocks, square_task, pass);
    team_sum(problem->context, pass->square_of, pass->half->blocks, 2, sum);
    problem->scale = pass->largest * sqrt(sum[0] / count);
    problem->rounding = fmax(problem->rounding, epsilon_of(pass->from->precision) * sqrt(sum[1] / sum[0]));
}

double problem_scale(fescue_context *context, const struct cells *cells, const struct offsets *offsets)
{
    struct problem problem = {.context = context};
    struct target_pass pass = {.from = cells, .offsets = offsets, .half = &cells->by_row, .by_row = true};
    problem_measure(&problem, &pass);
    return problem.scale;
}

fescue_status problem_create(fescue_context *context, const struct cells *cells, const struct offsets *offsets,
                             double ridge, struct problem *problem)
{
    return problem_create_in(context, cells, offsets, ridge, cells->precision, problem);
}

fescue_status problem_create_in(fescue_context *context, const struct cells *cells, const struct offsets *offsets,
                                double ridge, enum fescue_precision precision, struct problem *problem)
{
    fescue_status status;
    *problem = (struct problem){.context = context};
    struct target_pass pass = {
        .from = cells, .offsets = offsets, .half = &cells->by_row, .by_row = true, .precision = precision};
    TRY(cells_alike(context, cells, precision, &problem->target));
    problem_measure(problem, &pass);
    problem_set_ridge(problem, ridge);
    pass.scale = problem->scale;
    pass.target = problem->target.by_row.value;
    team_run(context, pass.half->blocks, target_task, &pass);
    pass.half = &cells->by_column;
    pass.by_row = false;
    pass.target = problem->target.by_column.value;
    team_run(context, pass.half->blocks, target_task, &pass);
done:
    if (status != FESCUE_OK)
        problem_free(problem);
    return status;
}

void problem_set_ridge(struct problem *problem, double ridge)
{
    const struct cells *target = &problem->target;
    double all = (double)target->rows * (double)target->columns;
    assert(ridge >= 0);
    problem->ridge = ridge;
    problem->lambda = all > 0 ? ridge * ((double)target->count / all) : 0;
}

void problem_free(struct problem *problem)
{
    if (problem == NULL)
        return;
    cells_free(problem->context, &problem->target);
    *problem = (struct problem){.context = problem->context};
}
