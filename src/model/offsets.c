/* SPDX-License-Identifier: MIT
 *
 * Mean, row and column effects by ridge-penalised least squares over the seen cells, all in one:
 *
 *     min over m, a, b of   sum w_ij (x_ij - m - a_i - b_j)^2 + R |a|^2 + C |b|^2
 *
 * with w the weights of the cells, of mean one, or 1 where they have none. Normal equations, with n the weight of a
 * line (the number of its cells), N of the table, T sums of w x (here less the mean, so that only a correction of it is
 * sought) and K the matrix of sparse_two_way_solve, d_i = n_i + ridge:
 *
 *     K (a, b) + n m = T,     n'(a, b) + N m = sum of T
 *     K u = n,  K v = T   =>  m = (sum of T - n'v) / (N - n'u),   (a, b) = v - m u
 *
 * At the minimum a and b sum to zero. When the ridges are tiny m and the sums are hardly determined by rounded numbers,
 * so the sums are moved into m at the end: no estimate changes, and the penalty falls. With one effect alone
 * a_i = n_i/(n_i + R) (mean of line i - m), m the mean of line means weighted by n_i/(n_i + R).
 *
 * The ridges are ratios of variances, noise over effect, by Henderson's method 3 (Henderson 1953, Biometrics 9; Searle,
 * Casella, McCulloch 1992, "Variance components", section 5.5), which is unbiased for unbalanced tables. With
 * Q(.) the weighted sum of squares left by unpenalised least squares on the effects named, p rows, q columns seen, c
 * connected blocks of the pattern, M the number of cells, and s = sum over columns j of (sum_i w_ij^2) / n_j, which is
 * q where weights are 1:
 *
 *     E Q(m, a, b)              = (M - p - q + c) noise
 *     E [Q(m, b) - Q(m, a, b)]  = (N - s) var_a + (p - c) noise       (and with a and b exchanged)
 *     E Q(m, a)                 = (M - p) noise                       one effect alone
 *     E [Q(m) - Q(m, a)]        = (N - sum n_i^2 / N) var_a + (p - 1) noise
 *
 * An effect whose variance comes out as nothing is switched off: ridge infinite, zeros. No ridge falls below 1e-8, so
 * that the system stays definite; then one observation in 1e8 is lost to shrinkage. A table with no degrees of freedom
 * left for noise (its pattern has no cycle) gets ridge 1.
 *
 * Values are taken in units of a power of two above the largest of them: squares stay in range, and tables that differ
 * by a power of two give the same bits. Cost: four passes over the cells and two sparse solves. Parallel: the passes,
 * line by line and summed block by block, so that bits do not depend on threads.
 */
#include "model/model.h"

#include <assert.h>
#include <math.h>
#include <string.h>

/* See above. Anything far below 1 and far above rounding would do. */
static const double ridge_least = 1e-8;
/* A variance this small against the table's is rounding: 100 eps, squared. */
static const double variance_least = 5e-28;

struct side { /* rows or columns */
    const struct half *half;
    size_t seen;                     /* lines with cells */
    double squares;                  /* sum of n_i^2 */
    double shares;                   /* sum over lines of (sum of w^2) / n_i: the lines seen, where weights are 1 */
    double *number, *total, *effect; /* n_i, T_i, a_i; number and total lie behind those of the other side */
    double ridge;
};

struct fit {
    fescue_context *context;
    const struct cells *cells;
    double unit, mean; /* x = unit * (mean + t) */
    double sum;        /* of t: rounding, but it keeps the mean exact */
    double weight;     /* N */
    struct side row, column;
    double *number, *total, *diagonal; /* rows, then columns */
    double *sides, *answers;           /* right-hand sides and solutions of the system, two each */
    double *partial;
    uint32_t *parent; /* rows + columns, for the connected blocks */
};

/* ---- passes over the cells ----------------------------------------------------------------------------------------
 */

struct pass {
    const struct fit *fit;
    const struct side *side;
    double (*line)(const struct pass *pass, uint32_t line);
    double *total;
    const double *row, *column;
};

static double cell_at(const struct fit *fit, const struct half *half, uint64_t k)
{
    return cells_value(fit->cells, half, k) / fit->unit - fit->mean;
}

static double weight_at(const struct half *half, uint64_t k)
{
    return half->weight != NULL ? (double)half->weight[k] : 1;
}

static void block_pass(void *job, size_t block, size_t worker)
{
    const struct pass *pass = job;
    const struct half *half = pass->side->half;
    double sum = 0;
    (void)worker;
    for (uint32_t line = half->block[block]; line < half->block[block + 1]; line++)
        sum += pass->line(pass, line);
    pass->fit->partial[block] = sum;
}

/* The sum over lines of pass->line. */
static double pass_run(const struct pass *pass)
{
    struct pass copy = *pass;
    double sum;
    team_run(pass->fit->context, pass->side->half->blocks, block_pass, &copy);
    team_sum(pass->fit->context, pass->fit->partial, pass->side->half->blocks, 1, &sum);
    return sum;
}

static double line_total(const struct pass *pass, uint32_t line)
{
    const struct half *half = pass->side->half;
    double sum = 0;
    for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++)
        sum += weight_at(half, k) * cell_at(pass->fit, half, k);
    if (pass->total != NULL)
        pass->total[line] = sum;
    return sum;
}

static double line_squares(const struct pass *pass, uint32_t line)
{
    const struct half *half = pass->side->half;
    double sum = 0, row = pass->row == NULL ? 0 : pass->row[line];
    for (uint64_t k = half->start[line]; k < half->start[line + 1]; k++) {
        double rest = cell_at(pass->fit, half, k) - row;
        if (pass->column != NULL)
            rest -= pass->column[half->across[k]];
        sum += weight_at(half, k) * rest * rest;
    }
    return sum;
}

/* The sum of squares that the given effects leave; NULL for none. */
static double squares_left(const struct fit *fit, const double *row, const double *column)
{
    struct pass pass = {.fit = fit, .side = &fit->row, .line = line_squares, .row = row, .column = column};
    return pass_run(&pass);
}

static void block_most(void *job, size_t block, size_t worker)
{
    const struct fit *fit = job;
    const struct half *half = &fit->cells->by_row;
    double most = 0;
    (void)worker;
    for (uint64_t k = half->start[half->block[block]]; k < half->start[half->block[block + 1]]; k++)
        most = fmax(most, fabs(cells_value(fit->cells, half, k)));
    fit->partial[block] = most;
}

/* A power of two above all |x|. */
static double unit_find(struct fit *fit)
{
    double most = 0;
    int exponent = 0;
    team_run(fit->context, fit->cells->by_row.blocks, block_most, fit);
    for (size_t block = 0; block < fit->cells->by_row.blocks; block++)
        most = fmax(most, fit->partial[block]);
    frexp(most, &exponent);
    return most > 0 ? ldexp(1, exponent < 1024 ? exponent : 1023) : 1;
}

static void side_count(struct side *side)
{
    const struct half *half = side->half;
    side->seen = 0;
    side->squares = side->shares = 0;
    for (uint32_t i = 0; i < half->lines; i++) {
        double n = 0, squares = 0;
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++) {
            n += weight_at(half, k);
            squares += weight_at(half, k) * weight_at(half, k);
        }
        side->number[i] = n;
        side->squares += n * n;
        side->shares += n > 0 ? squares / n : 0;
        side->seen += n > 0;
    }
}

static void side_total(const struct fit *fit, const struct side *side)
{
    struct pass pass = {.fit = fit, .side = side, .line = line_total, .total = side->total};
    pass_run(&pass);
}

static double weight_sum(const struct fit *fit)
{
    double sum = 0;
    for (uint32_t i = 0; i < fit->row.half->lines; i++)
        sum += fit->row.number[i];
    return sum;
}

/* Unit, mean, counts, totals. */
static void fit_measure(struct fit *fit)
{
    struct pass pass = {.fit = fit, .side = &fit->row, .line = line_total};
    fit->unit = unit_find(fit);
    side_count(&fit->row);
    side_count(&fit->column);
    fit->weight = weight_sum(fit);
    fit->mean = pass_run(&pass) / fit->weight;
    fit->sum = pass_run(&pass);
    side_total(fit, &fit->row);
    side_total(fit, &fit->column);
}

/* ---- connected blocks of the pattern --------------------------------------------------------------------------------
 */

static uint32_t root_find(uint32_t *parent, uint32_t i)
{
    while (parent[i] != i) {
        parent[i] = parent[parent[i]];
        i = parent[i];
    }
    return i;
}

/* Of lines with cells; every join of two lowers the number by one. */
static size_t blocks_count(const struct fit *fit)
{
    const struct half *half = fit->row.half;
    size_t count = fit->row.seen + fit->column.seen;
    for (uint32_t i = 0; i < half->lines + half->length; i++)
        fit->parent[i] = i;
    for (uint32_t i = 0; i < half->lines; i++)
        for (uint64_t k = half->start[i]; k < half->start[i + 1]; k++) {
            uint32_t a = root_find(fit->parent, i), b = root_find(fit->parent, half->lines + half->across[k]);
            if (a != b) {
                fit->parent[a > b ? a : b] = a > b ? b : a;
                count--;
            }
        }
    return count;
}

/* ---- the systems ----------------------------------------------------------------------------------------------------
 */

/* K, of the given ridges. A line without cells gets 1, and with it the effect 0. */
static void diagonal_make(const struct fit *fit, double row_ridge, double column_ridge)
{
    size_t rows = fit->cells->rows, size = rows + fit->cells->columns;
    for (size_t i = 0; i < size; i++) {
        double ridge = i < rows ? row_ridge : column_ridge;
        fit->diagonal[i] = fit->number[i] > 0 ? fit->number[i] + ridge : 1;
    }
}

/* Effects of one side alone: m returned. */
static double side_fit(const struct fit *fit, const struct side *side, double ridge)
{
    double sum = 0, weights = 0;
    for (uint32_t i = 0; i < side->half->lines; i++) {
        if (side->number[i] == 0)
            continue;
        double weight = 1 / (side->number[i] + ridge);
        sum += weight * side->total[i];
        weights += weight * side->number[i];
    }
    double mean = weights > 0 && isfinite(ridge) ? sum / weights : fit->sum / fit->weight;
    for (uint32_t i = 0; i < side->half->lines; i++) {
        double n = side->number[i];
        side->effect[i] = n > 0 ? (side->total[i] - n * mean) / (n + ridge) : 0;
    }
    return mean;
}

/* Both effects; m returned. */
static fescue_status both_fit(const struct fit *fit, double *mean)
{
    size_t rows = fit->cells->rows, size = rows + fit->cells->columns;
    double *v = fit->answers, *u = v + size;
    double nu = 0, nv = 0, seen = fit->weight;
    fescue_status status = FESCUE_OK;
    diagonal_make(fit, fit->row.ridge, fit->column.ridge);
    memcpy(fit->sides, fit->total, size * sizeof *fit->sides);
    memcpy(fit->sides + size, fit->number, size * sizeof *fit->sides);
    TRY(sparse_two_way_solve(fit->context, fit->cells, fit->diagonal, 2, fit->sides, fit->answers));
    for (size_t i = 0; i < size; i++) {
        nu += fit->number[i] * u[i];
        nv += fit->number[i] * v[i];
    }
    /* What is left of N - n'u is rounding when the ridges are tiny: then any m does. */
    *mean = seen - nu > 1e-12 * seen ? (fit->sum - nv) / (seen - nu) : 0;
    for (size_t i = 0; i < size; i++)
        (i < rows ? fit->row.effect : fit->column.effect - rows)[i] = v[i] - *mean * u[i];
done:
    return status;
}

/* Moves the mean of a side's effects into m. */
static void side_centre(const struct side *side, double *mean)
{
    double sum = 0;
    if (side->seen == 0)
        return;
    for (uint32_t i = 0; i < side->half->lines; i++)
        sum += side->effect[i];
    sum /= (double)side->seen;
    for (uint32_t i = 0; i < side->half->lines; i++)
        if (side->number[i] > 0)
            side->effect[i] -= sum;
    *mean += sum;
}

/* ---- the ridges
 * ------------------------------------------------------------------------------------------------------ */

/* The ridge from an effect's mean square and the noise: explained = freedom * variance + lines * noise. */
static double ridge_of(double explained, double freedom, double lines, double noise, double whole)
{
    double variance = freedom > 0 ? (explained - lines * noise) / freedom : 0;
    if (!(variance > variance_least * whole))
        return (double)INFINITY;
    return fmax(noise / variance, ridge_least);
}

/* Variance of the plain table, for "next to nothing"; 0 when all cells are equal to rounding. */
static double whole_variance(const struct fit *fit, double squares)
{
    double variance = squares / (double)fit->cells->count;
    /* Rounding of t is eps of the unit. */
    return variance > variance_least ? variance : 0;
}

static void side_means(const struct side *side)
{
    for (uint32_t i = 0; i < side->half->lines; i++)
        side->effect[i] = side->number[i] > 0 ? side->total[i] / side->number[i] : 0;
}

/* The ridge of one effect alone. */
static double side_ridge(const struct fit *fit, const struct side *side)
{
    double seen = (double)fit->cells->count, lines = (double)side->seen, all = squares_left(fit, NULL, NULL);
    double whole = whole_variance(fit, all);
    if (whole == 0)
        return (double)INFINITY;
    side_means(side);
    double rest = side == &fit->row ? squares_left(fit, side->effect, NULL) : squares_left(fit, NULL, side->effect);
    if (seen <= lines)
        return 1;
    double freedom = fit->weight - side->squares / fit->weight;
    return ridge_of(all - rest, freedom, lines - 1, rest / (seen - lines), whole);
}

static fescue_status both_ridges(struct fit *fit)
{
    double seen = (double)fit->cells->count, p = (double)fit->row.seen, q = (double)fit->column.seen;
    double c = (double)blocks_count(fit), freedom = seen - p - q + c;
    double *effects = fit->answers, whole = whole_variance(fit, squares_left(fit, NULL, NULL));
    fescue_status status = FESCUE_OK;
    fit->row.ridge = fit->column.ridge = whole == 0 ? (double)INFINITY : 1;
    if (whole == 0 || freedom <= 0)
        return FESCUE_OK;
    side_means(&fit->row);
    side_means(&fit->column);
    double row_rest = squares_left(fit, fit->row.effect, NULL);
    double column_rest = squares_left(fit, NULL, fit->column.effect);
    diagonal_make(fit, ridge_least, ridge_least);
    TRY(sparse_two_way_solve(fit->context, fit->cells, fit->diagonal, 1, fit->total, effects));
    double rest = squares_left(fit, effects, effects + fit->cells->rows), noise = rest / freedom;
    fit->row.ridge = ridge_of(column_rest - rest, fit->weight - fit->column.shares, p - c, noise, whole);
    fit->column.ridge = ridge_of(row_rest - rest, fit->weight - fit->row.shares, q - c, noise, whole);
done:
    return status;
}

/* ---- the whole ------------------------------------------------------------------------------------------------ */

static fescue_status fit_open(struct fit *fit, struct offsets *offsets, struct arena *arena)
{
    size_t rows = fit->cells->rows, size = rows + fit->cells->columns;
    double **const vector[] = {&fit->number, &fit->total, &fit->diagonal};
    fescue_status status = FESCUE_OK;
    for (size_t v = 0; v < 3; v++)
        arena_reserve(arena, size, sizeof(double));
    arena_reserve(arena, 2 * size, sizeof(double));
    arena_reserve(arena, 2 * size, sizeof(double));
    arena_reserve(arena, CELLS_MOST_BLOCKS, sizeof(double));
    arena_reserve(arena, size, sizeof(uint32_t));
    TRY(arena_open(fit->context, arena));
    for (size_t v = 0; v < 3; v++)
        *vector[v] = arena_carve(arena, size, sizeof(double));
    fit->sides = arena_carve(arena, 2 * size, sizeof(double));
    fit->answers = arena_carve(arena, 2 * size, sizeof(double));
    fit->partial = arena_carve(arena, CELLS_MOST_BLOCKS, sizeof(double));
    fit->parent = arena_carve(arena, size, sizeof(uint32_t));
    fit->row =
        (struct side){.half = &fit->cells->by_row, .number = fit->number, .total = fit->total, .effect = offsets->row};
    fit->column = (struct side){.half = &fit->cells->by_column,
                                .number = fit->number + rows,
                                .total = fit->total + rows,
                                .effect = offsets->column};
done:
    return status;
}

static double side_alone(const struct fit *fit, struct side *side)
{
    side->ridge = side_ridge(fit, side);
    return side_fit(fit, side, side->ridge);
}

/* Both effects; where one of them is nothing, the other alone. */
static fescue_status both_run(struct fit *fit, double *mean)
{
    fescue_status status = FESCUE_OK;
    TRY(both_ridges(fit));
    if (isfinite(fit->row.ridge) && isfinite(fit->column.ridge)) {
        TRY(both_fit(fit, mean));
        side_centre(&fit->row, mean);
        side_centre(&fit->column, mean);
        return FESCUE_OK;
    }
    memset(fit->row.effect, 0, fit->cells->rows * sizeof *fit->row.effect);
    memset(fit->column.effect, 0, fit->cells->columns * sizeof *fit->column.effect);
    if (isfinite(fit->row.ridge))
        *mean = side_alone(fit, &fit->row);
    else if (isfinite(fit->column.ridge))
        *mean = side_alone(fit, &fit->column);
done:
    return status;
}

static fescue_status fit_run(struct fit *fit, struct offsets *offsets)
{
    double mean = 0; /* what is to be added to fit->mean */
    fescue_status status = FESCUE_OK;
    fit_measure(fit);
    mean = fit->sum / fit->weight;
    if (offsets->kind == FESCUE_OFFSETS_BOTH)
        TRY(both_run(fit, &mean));
    else if (offsets->kind == FESCUE_OFFSETS_ROWS)
        mean = side_alone(fit, &fit->row);
    else if (offsets->kind == FESCUE_OFFSETS_COLUMNS)
        mean = side_alone(fit, &fit->column);
    offsets->mean = fit->unit * (fit->mean + mean);
    for (uint32_t i = 0; i < fit->cells->rows; i++)
        offsets->row[i] *= fit->unit;
    for (uint32_t j = 0; j < fit->cells->columns; j++)
        offsets->column[j] *= fit->unit;
    offsets->row_ridge = fit->row.ridge;
    offsets->column_ridge = fit->column.ridge;
done:
    return status;
}

static fescue_status offsets_create(fescue_context *context, uint32_t rows, uint32_t columns, enum fescue_offsets kind,
                                    struct offsets *offsets)
{
    fescue_status status = FESCUE_OK;
    *offsets = (struct offsets){.kind = kind, .row_ridge = (double)INFINITY, .column_ridge = (double)INFINITY};
    TRY(TAKE(context, rows, &offsets->row));
    TRY(TAKE(context, columns, &offsets->column));
done:
    if (status != FESCUE_OK)
        offsets_free(context, offsets);
    return status;
}

fescue_status offsets_fit(fescue_context *context, const struct cells *cells, enum fescue_offsets kind,
                          struct offsets *offsets)
{
    struct fit fit = {.context = context, .cells = cells};
    struct arena arena = {0};
    fescue_status status = FESCUE_OK;
    assert(kind != FESCUE_OFFSETS_AUTO);
    TRY(offsets_create(context, cells->rows, cells->columns, kind, offsets));
    if (cells->count == 0 || kind == FESCUE_OFFSETS_NONE)
        return FESCUE_OK;
    TRY(fit_open(&fit, offsets, &arena));
    fit.row.ridge = fit.column.ridge = (double)INFINITY;
    TRY(fit_run(&fit, offsets));
done:
    arena_close(context, &arena);
    if (status != FESCUE_OK)
        offsets_free(context, offsets);
    return status;
}

fescue_status offsets_copy(fescue_context *context, uint32_t rows, uint32_t columns, const struct offsets *from,
                           struct offsets *to)
{
    fescue_status status = FESCUE_OK;
    TRY(offsets_create(context, rows, columns, from->kind, to));
    if (rows > 0)
        memcpy(to->row, from->row, rows * sizeof *to->row);
    if (columns > 0)
        memcpy(to->column, from->column, columns * sizeof *to->column);
    to->mean = from->mean;
    to->row_ridge = from->row_ridge;
    to->column_ridge = from->column_ridge;
done:
    return status;
}

void offsets_free(fescue_context *context, struct offsets *offsets)
{
    if (offsets == NULL)
        return;
    GIVE(context, &offsets->row);
    GIVE(context, &offsets->column);
    *offsets = (struct offsets){0};
}
