/* SPDX-License-Identifier: MIT
 *
 * How many tables without noise are recovered from few cells, and how near the bound tables with noise come.
 *
 *     bench_recovery [tables [large]]       default 5: that many tables a line; `large` adds the lines that take
 * minutes
 *
 * A table is U S V' with U, V uniform orthonormal (QR of normal numbers), S falling geometrically from 1 to 1/kappa,
 * scaled to mean square 1. Seen cells: oversampling times r(m + n - r), drawn evenly, then mended until every row and
 * every column has at least r cells, and no row of r cells meets a column of r cells in a seen cell (2r unknowns, 2r -
 * 1 equations: the table would not be unique). Table k of a line uses seed k. All is done by solve_recover from the
 * pattern and the rank alone, on one thread; times are processor seconds.
 *
 * Recovered: the relative error over the whole table is below 1e-4. With noise: the RMSE over unseen cells over
 * sigma sqrt(r(m + n - r) / seen) (Candes, Plan 2010), median and worst. Lines are CSV.
 */
#include "solve/solve.h"

#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

enum { TABLES_MOST = 100, DRAW_SIDES = 1, DRAW_CELLS, DRAW_NOISE };

struct line {
    uint32_t rows, columns;
    size_t rank;
    double oversampling, kappa, noise;
    bool large;
};
static const struct line lines[] = {
    {300, 300, 5, 1.3, 1, 0, false},    {300, 300, 5, 1.3, 10, 0, false},   {300, 300, 5, 1.3, 1e3, 0, false},
    {300, 300, 5, 1.3, 1e5, 0, false},  {300, 300, 5, 1.5, 1, 0, false},    {300, 300, 5, 1.5, 10, 0, false},
    {300, 300, 5, 1.5, 1e3, 0, false},  {300, 300, 5, 1.5, 1e5, 0, false},  {300, 300, 5, 2, 1, 0, false},
    {300, 300, 5, 2, 10, 0, false},     {300, 300, 5, 2, 1e3, 0, false},    {300, 300, 5, 2, 1e5, 0, false},
    {300, 300, 5, 3, 1, 0, false},      {300, 300, 5, 3, 10, 0, false},     {300, 300, 5, 3, 1e3, 0, false},
    {300, 300, 5, 3, 1e5, 0, false},    {500, 500, 5, 3, 10, 0.1, false},   {500, 500, 5, 5, 10, 0.1, false},
    {500, 500, 5, 10, 10, 0.1, false},  {1000, 300, 10, 1.1, 1, 0, true},   {1000, 300, 10, 1.1, 10, 0, true},
    {1000, 300, 10, 1.1, 1e3, 0, true}, {1000, 300, 10, 1.2, 1, 0, true},   {1000, 300, 10, 1.2, 10, 0, true},
    {1000, 300, 10, 1.2, 1e3, 0, true}, {1000, 300, 10, 1.2, 1e5, 0, true}, {1000, 300, 10, 1.5, 1, 0, true},
    {1000, 300, 10, 1.5, 10, 0, true},  {1000, 300, 10, 1.5, 1e3, 0, true}, {1000, 300, 10, 1.5, 1e5, 0, true},
    {1000, 300, 10, 2, 1, 0, true},     {1000, 300, 10, 2, 10, 0, true},    {1000, 300, 10, 2, 1e3, 0, true},
    {1000, 300, 10, 2, 1e5, 0, true},   {20000, 5000, 10, 3, 1, 0, true},   {20000, 5000, 10, 3, 10, 0, true},
    {20000, 5000, 10, 3, 1e3, 0, true},
};

static fescue_context *context;

static void check(fescue_status status)
{
    if (status == FESCUE_OK)
        return;
    fprintf(stderr, "bench_recovery: %s\n", fescue_failure_text(context));
    exit(1);
}

static void *room(size_t count, size_t size)
{
    void *block = calloc(count, size);
    if (block == NULL)
        exit(1);
    return block;
}

/* ---- the truth -----------------------------------------------------------------------------------------------------
 */

static void truth_draw(const struct line *line, uint64_t seed, struct low_rank *truth)
{
    struct random_stream stream = random_open(seed, RANDOM_TEST, DRAW_SIDES);
    size_t longer = line->rows > line->columns ? line->rows : line->columns;
    double *work = room(dense_work_size(longer, line->rank), sizeof *work), square = 0;
    check(low_rank_create(context, line->rows, line->columns, line->rank, truth));
    struct matrix sides[] = {truth->left, truth->right}, none = {0};
    for (int s = 0; s < 2; s++) {
        for (size_t i = 0; i < sides[s].rows; i++)
            for (size_t k = 0; k < line->rank; k++)
                MATRIX_AT(sides[s], i, k) = random_normal(&stream);
        check(dense_qr(context, sides[s], none, work));
    }
    for (size_t k = 0; k < line->rank; k++) {
        truth->spectrum[k] = pow(line->kappa, -(double)k / (double)(line->rank - 1));
        square += truth->spectrum[k] * truth->spectrum[k];
    }
    for (size_t k = 0; k < line->rank; k++)
        truth->spectrum[k] *= sqrt((double)line->rows * line->columns / square);
    free(work);
}

/* ---- the mask ------------------------------------------------------------------------------------------------------
 */

struct mask {
    uint32_t rows, columns, least; /* least: cells of a line */
    uint8_t *seen;
    uint32_t *in_row, *in_column;
    size_t count;
    struct random_stream stream;
};

static uint8_t *cell(struct mask *mask, uint32_t row, uint32_t column)
{
    return &mask->seen[(size_t)row * mask->columns + column];
}

static bool cell_set(struct mask *mask, uint32_t row, uint32_t column, uint8_t seen)
{
    uint8_t *at = cell(mask, row, column);
    if (*at == seen)
        return false;
    *at = seen;
    mask->in_row[row] += seen ? 1u : -1u;
    mask->in_column[column] += seen ? 1u : -1u;
    mask->count += seen ? (size_t)1 : (size_t)-1;
    return true;
}

static uint32_t pick(struct mask *mask, uint32_t bound)
{
    return (uint32_t)random_below(&mask->stream, bound);
}

/* Lines with too few cells get more; true when there were any. */
static bool thin_lines_mend(struct mask *mask)
{
    bool any = false;
    for (uint32_t i = 0; i < mask->rows; i++)
        while (mask->in_row[i] < mask->least)
            any |= cell_set(mask, i, pick(mask, mask->columns), 1);
    for (uint32_t j = 0; j < mask->columns; j++)
        while (mask->in_column[j] < mask->least)
            any |= cell_set(mask, pick(mask, mask->rows), j, 1);
    return any;
}

/* A thinnest row that meets a thinnest column gets one more cell; true when there was one. */
static bool thin_meetings_mend(struct mask *mask)
{
    bool any = false;
    for (uint32_t i = 0; i < mask->rows; i++)
        for (uint32_t j = 0; j < mask->columns && mask->in_row[i] == mask->least; j++)
            if (mask->in_column[j] == mask->least && *cell(mask, i, j)) {
                while (!cell_set(mask, i, pick(mask, mask->columns), 1))
                    ;
                any = true;
            }
    return any;
}

static struct mask mask_draw(const struct line *line, uint64_t seed)
{
    size_t rank = line->rank, freedom = rank * (line->rows + line->columns - rank);
    size_t wanted = (size_t)llround(line->oversampling * (double)freedom);
    struct mask mask = {.rows = line->rows, .columns = line->columns, .least = (uint32_t)rank};
    mask.stream = random_open(seed, RANDOM_TEST, DRAW_CELLS);
    mask.seen = room((size_t)mask.rows * mask.columns, 1);
    mask.in_row = room(mask.rows, sizeof *mask.in_row);
    mask.in_column = room(mask.columns, sizeof *mask.in_column);
    while (mask.count < wanted)
        cell_set(&mask, pick(&mask, mask.rows), pick(&mask, mask.columns), 1);
    for (bool mended = true; mended;) {
        mended = thin_lines_mend(&mask);
        mended |= thin_meetings_mend(&mask);
        while (mask.count > wanted) {
            uint32_t i = pick(&mask, mask.rows), j = pick(&mask, mask.columns);
            if (mask.in_row[i] > mask.least + 1 && mask.in_column[j] > mask.least + 1)
                cell_set(&mask, i, j, 0);
        }
    }
    return mask;
}

static void mask_free(struct mask *mask)
{
    free(mask->seen);
    free(mask->in_row);
    free(mask->in_column);
}

/* ---- one table ------------------------------------------------------------------------------------------------------
 */

struct outcome {
    double error, unseen; /* relative over all cells; RMSE over the unseen ones */
    double seconds;
};

static void cells_make(const struct line *line, uint64_t seed, const struct low_rank *truth, struct mask *mask,
                       struct cells *cells)
{
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    struct random_stream stream = random_open(seed, RANDOM_TEST, DRAW_NOISE);
    for (uint32_t i = 0; i < line->rows; i++)
        for (uint32_t j = 0; j < line->columns; j++)
            if (*cell(mask, i, j)) {
                double noise = line->noise > 0 ? line->noise * random_normal(&stream) : 0;
                check(triplets_append(context, &list, i, j, low_rank_entry(truth, i, j) + noise));
            }
    check(cells_build(context, line->rows, line->columns, &list, cells));
    triplets_free(context, &list);
}

static void errors_of(const struct low_rank *truth, const struct low_rank *found, double scale, struct mask *mask,
                      struct outcome *outcome)
{
    double all = 0, size = 0, unseen = 0;
    for (uint32_t i = 0; i < mask->rows; i++)
        for (uint32_t j = 0; j < mask->columns; j++) {
            double x = low_rank_entry(truth, i, j), e = scale * low_rank_entry(found, i, j) - x;
            all += e * e;
            size += x * x;
            unseen += *cell(mask, i, j) ? 0 : e * e;
        }
    outcome->error = sqrt(all / size);
    outcome->unseen = sqrt(unseen / ((double)mask->rows * mask->columns - (double)mask->count));
}

static struct outcome table_recover(const struct line *line, uint64_t seed)
{
    static const struct solve_limits limits = {.iterations = 300, .gradient = 1e-9};
    struct low_rank truth, found;
    struct cells cells;
    struct problem problem;
    struct solve_result result = {0};
    struct outcome outcome;
    truth_draw(line, seed, &truth);
    struct mask mask = mask_draw(line, seed);
    cells_make(line, seed, &truth, &mask, &cells);
    check(problem_create(context, &cells, NULL, 0, &problem));
    double started = clock_cpu();
    check(solve_recover(&problem, line->rank, 1, &limits, &found, &result));
    outcome.seconds = clock_cpu() - started;
    errors_of(&truth, &found, problem.scale, &mask, &outcome);
    solve_result_free(context, &result);
    low_rank_free(context, &found);
    low_rank_free(context, &truth);
    problem_free(&problem);
    cells_free(context, &cells);
    mask_free(&mask);
    return outcome;
}

/* ---- lines ----------------------------------------------------------------------------------------------------------
 */

static int number_order(const void *a, const void *b)
{
    double x = *(const double *)a, y = *(const double *)b;
    return (x > y) - (x < y);
}

static void line_measure(const struct line *line, size_t tables)
{
    double seconds[TABLES_MOST], ratio[TABLES_MOST];
    double bound = line->noise / sqrt(line->oversampling);
    size_t recovered = 0;
    tables = line->rows * (size_t)line->columns > 10000000 && tables > 5 ? 5 : tables;
    for (size_t k = 0; k < tables; k++) {
        struct outcome outcome = table_recover(line, k + 1);
        recovered += outcome.error < 1e-4;
        seconds[k] = outcome.seconds;
        ratio[k] = outcome.unseen / bound;
    }
    qsort(seconds, tables, sizeof *seconds, number_order);
    qsort(ratio, tables, sizeof *ratio, number_order);
    printf("%u,%u,%zu,%g,%g,%g,%zu,", line->rows, line->columns, line->rank, line->oversampling, line->kappa,
           line->noise, tables);
    if (line->noise > 0)
        printf(",%.3f,%.3f,", ratio[tables / 2], ratio[tables - 1]);
    else
        printf("%zu,,,", recovered);
    printf("%.2f,%.2f\n", seconds[tables / 2], seconds[tables - 1]);
    fflush(stdout);
}

int main(int count, char **argument)
{
    long tables = count > 1 ? strtol(argument[1], NULL, 10) : 5;
    bool large = count > 2 && strcmp(argument[2], "large") == 0;
    if (tables < 1 || tables > TABLES_MOST || (count > 2 && !large)) {
        fprintf(stderr, "usage: bench_recovery [tables, 1 to %d [large]]\n", TABLES_MOST);
        return 64;
    }
    if (fescue_context_create(NULL, &context) != FESCUE_OK)
        return 71;
    printf("rows,columns,rank,oversampling,kappa,noise,tables,recovered,ratio median,ratio worst,"
           "cpu seconds median,cpu seconds worst\n");
    for (size_t k = 0; k < sizeof lines / sizeof *lines; k++)
        if (large || !lines[k].large)
            line_measure(&lines[k], (size_t)tables);
    fescue_context_destroy(&context);
    return 0;
}
