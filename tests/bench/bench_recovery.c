/* SPDX-License-Identifier: MIT
 *
 * How many tables without noise are recovered from few cells, and how near the bound tables with noise come.
 *
 *     bench_recovery [tables [lines [file]]]      make bench-recovery: 20 all $(BUILD)/recovery.csv
 *
 *     tables   a line: default 5; never more than 5 of the largest
 *     lines    `small`, the default; `all`; or the number of one
 *     file     where the same goes as CSV
 *
 * A table is U S V' with U, V uniform orthonormal (QR of normal numbers), S falling geometrically from 1 to 1/kappa,
 * scaled to mean square 1. Seen cells: oversampling times r(m + n - r), drawn evenly, then mended until every row and
 * every column has at least r cells, and no row of r cells meets a column of r cells in a seen cell (2r unknowns, 2r -
 * 1 equations: the table would not be unique). Table k of a line uses seed k. The fill has all options at their
 * defaults but the rank, no offsets, and nothing hidden. Times are processor seconds of the whole fill.
 *
 *     recovered   tables whose relative error over all cells is below 1e-4
 *     noise       RMSE over unseen cells over sigma sqrt(r(m + n - r) / seen) (Candes, Plan 2010), sigma 0.1: median
 *                 and worst
 *     tail        of the components asked for five fall geometrically to 1/kappa; those behind begin at 1/100 and
 * halve, for ever: relative error over all cells, median and worst
 *
 * `asked` is what the program is held to: at least so many recovered; a median of at most so much, and no table above
 * 1.1 (noise) or 1.7 (tail) times it.
 */
#include "job/job.h"

#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

enum { TABLES_MOST = 100, LARGE_TABLES = 5, DRAW_SIDES = 1, DRAW_CELLS, DRAW_NOISE };

enum kind { KIND_EXACT, KIND_NOISE, KIND_TAIL };
static const double sigma = 0.1;
enum { TAIL_FROM = 5, TAIL_LENGTH = 20 }; /* after twenty halvings nothing is left */
static const double tail_first = 0.01;

struct line {
    enum kind kind;
    uint32_t rows, columns;
    size_t rank;
    double oversampling, kappa;
    double asked; /* recovered of 20, or the median; 0: nothing */
    bool small;
};
#define SQUARE(oversampling, kappa, asked)                                                                             \
    {                                                                                                                  \
        KIND_EXACT, 300, 300, 5, oversampling, kappa, asked, true                                                      \
    }
#define OBLONG(oversampling, kappa, asked)                                                                             \
    {                                                                                                                  \
        KIND_EXACT, 1000, 300, 10, oversampling, kappa, asked, false                                                   \
    }
#define LARGE(oversampling, kappa, asked)                                                                              \
    {                                                                                                                  \
        KIND_EXACT, 20000, 5000, 10, oversampling, kappa, asked, false                                                 \
    }
#define NOISY(oversampling, kappa, asked)                                                                              \
    {                                                                                                                  \
        KIND_NOISE, 500, 500, 5, oversampling, kappa, asked, true                                                      \
    }
static const struct line lines[] = {
    SQUARE(1.3, 1, 14),
    SQUARE(1.3, 10, 19),
    SQUARE(1.3, 1e3, 19),
    SQUARE(1.3, 1e5, 12),
    SQUARE(1.5, 1, 20),
    SQUARE(1.5, 10, 20),
    SQUARE(1.5, 1e3, 20),
    SQUARE(1.5, 1e5, 17),
    SQUARE(2, 1, 20),
    SQUARE(2, 10, 20),
    SQUARE(2, 1e3, 20),
    SQUARE(2, 1e5, 20),
    SQUARE(3, 1, 20),
    SQUARE(3, 10, 20),
    SQUARE(3, 1e3, 20),
    SQUARE(3, 1e5, 20),
    OBLONG(1.1, 1, 8),
    OBLONG(1.1, 10, 17),
    OBLONG(1.1, 1e3, 15),
    OBLONG(1.2, 1, 20),
    OBLONG(1.2, 10, 20),
    OBLONG(1.2, 1e3, 20),
    OBLONG(1.2, 1e5, 15),
    OBLONG(1.5, 1, 20),
    OBLONG(1.5, 10, 20),
    OBLONG(1.5, 1e3, 20),
    OBLONG(1.5, 1e5, 20),
    OBLONG(2, 1, 20),
    OBLONG(2, 10, 20),
    OBLONG(2, 1e3, 20),
    OBLONG(2, 1e5, 20),
    LARGE(3, 1, 20),
    LARGE(3, 10, 20),
    LARGE(3, 1e3, 20),
    NOISY(3, 10, 1.31),
    NOISY(5, 10, 1.16),
    NOISY(10, 10, 1.07),
    NOISY(3, 100, 1.09),
    NOISY(5, 100, 1.04),
    NOISY(10, 100, 1.02),
    {KIND_TAIL, 300, 300, 8, 1.2, 10, 0.012, true},
};
enum { LINES = sizeof lines / sizeof *lines };

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
    size_t main = line->kind == KIND_TAIL ? TAIL_FROM : line->rank;
    size_t rank = line->kind == KIND_TAIL ? TAIL_FROM + TAIL_LENGTH : line->rank;
    double *work = room(dense_work_size(longer, rank), sizeof *work), square = 0;
    check(low_rank_create(context, line->rows, line->columns, rank, truth));
    struct matrix sides[] = {truth->left, truth->right}, none = {0};
    for (int s = 0; s < 2; s++) {
        for (size_t i = 0; i < sides[s].rows; i++)
            for (size_t k = 0; k < rank; k++)
                MATRIX_AT(sides[s], i, k) = random_normal(&stream);
        check(dense_qr(context, sides[s], none, work));
    }
    for (size_t k = 0; k < rank; k++) {
        truth->spectrum[k] =
            k < main ? pow(line->kappa, -(double)k / (double)(main - 1)) : tail_first * pow(0.5, (double)(k - main));
        square += truth->spectrum[k] * truth->spectrum[k];
    }
    for (size_t k = 0; k < rank; k++)
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

/* What is seen goes into a table, as a reader would make it. */
static fescue_table *table_make(const struct line *line, uint64_t seed, const struct low_rank *truth, struct mask *mask,
                                const struct fescue_options *options)
{
    struct random_stream stream = random_open(seed, RANDOM_TEST, DRAW_NOISE);
    uint32_t *row = room(mask->count, sizeof *row), *column = room(mask->count, sizeof *column);
    double *value = room(mask->count, sizeof *value);
    fescue_table *table;
    size_t count = 0;
    for (uint32_t i = 0; i < line->rows; i++)
        for (uint32_t j = 0; j < line->columns; j++)
            if (*cell(mask, i, j)) {
                double noise = line->kind == KIND_NOISE ? sigma * random_normal(&stream) : 0;
                row[count] = i;
                column[count] = j;
                value[count++] = low_rank_entry(truth, i, j) + noise;
            }
    check(fescue_table_from_cells(context, line->rows, line->columns, count, row, column, value, options, &table));
    free(row);
    free(column);
    free(value);
    return table;
}

static void errors_of(const struct low_rank *truth, const fescue_fill *fill, struct mask *mask, struct outcome *outcome)
{
    double all = 0, size = 0, unseen = 0;
    for (uint32_t i = 0; i < mask->rows; i++)
        for (uint32_t j = 0; j < mask->columns; j++) {
            double x = low_rank_entry(truth, i, j), e = fescue_fill_estimate(fill, i, j) - x;
            all += e * e;
            size += x * x;
            unseen += *cell(mask, i, j) ? 0 : e * e;
        }
    outcome->error = sqrt(all / size);
    outcome->unseen = sqrt(unseen / ((double)mask->rows * mask->columns - (double)mask->count));
}

static struct fescue_options options_of(const struct line *line)
{
    struct fescue_options options;
    char rank[16];
    snprintf(rank, sizeof rank, "%zu", line->rank);
    fescue_options_standard(&options);
    check(fescue_options_set(context, &options, "rank", rank));
    check(fescue_options_set(context, &options, "offsets", "none"));
    check(fescue_options_set(context, &options, "holdout", "0"));
    return options;
}

static struct outcome table_fill(const struct line *line, uint64_t seed)
{
    struct fescue_options options = options_of(line);
    struct low_rank truth;
    struct outcome outcome;
    fescue_fill *fill;
    truth_draw(line, seed, &truth);
    struct mask mask = mask_draw(line, seed);
    fescue_table *table = table_make(line, seed, &truth, &mask, &options);
    double started = clock_cpu();
    check(fescue_fill_table(table, &options, &fill));
    outcome.seconds = clock_cpu() - started;
    errors_of(&truth, fill, &mask, &outcome);
    fescue_fill_destroy(&fill);
    fescue_table_destroy(&table);
    low_rank_free(context, &truth);
    mask_free(&mask);
    return outcome;
}

/* ---- lines ----------------------------------------------------------------------------------------------------------
 */

struct tally {
    size_t tables, recovered;
    double median, worst;          /* of the error, in the line's unit */
    double seconds, seconds_worst; /* median, worst */
};

static int number_order(const void *a, const void *b)
{
    double x = *(const double *)a, y = *(const double *)b;
    return (x > y) - (x < y);
}

static double median_of(double *number, size_t count)
{
    qsort(number, count, sizeof *number, number_order);
    return (number[(count - 1) / 2] + number[count / 2]) / 2;
}

static bool is_huge(const struct line *line)
{
    return (double)line->rows * line->columns > 1e7;
}

static struct tally line_measure(const struct line *line, size_t tables)
{
    double seconds[TABLES_MOST], error[TABLES_MOST], bound = sigma / sqrt(line->oversampling);
    struct tally tally = {.tables = is_huge(line) && tables > LARGE_TABLES ? LARGE_TABLES : tables};
    for (size_t k = 0; k < tally.tables; k++) {
        struct outcome outcome = table_fill(line, k + 1);
        tally.recovered += outcome.error < 1e-4;
        seconds[k] = outcome.seconds;
        error[k] = line->kind == KIND_NOISE ? outcome.unseen / bound : outcome.error;
    }
    tally.seconds = median_of(seconds, tally.tables);
    tally.median = median_of(error, tally.tables);
    tally.seconds_worst = seconds[tally.tables - 1];
    tally.worst = error[tally.tables - 1];
    return tally;
}

/* So many of the tables must be recovered; of 20 asked for, the same share. */
static size_t asked_count(const struct line *line, const struct tally *tally)
{
    return (size_t)ceil(line->asked * (double)tally->tables / 20 - 1e-9);
}

static bool is_met(const struct line *line, const struct tally *tally)
{
    static const double spread[] = {[KIND_NOISE] = 1.1, [KIND_TAIL] = 1.7};
    if (line->kind == KIND_EXACT)
        return tally->recovered >= asked_count(line, tally);
    return tally->median <= line->asked && tally->worst <= spread[line->kind] * line->asked;
}

static void line_print(const struct line *line, const struct tally *tally)
{
    char size[48], asked[32], reached[48];
    snprintf(size, sizeof size, "%u x %u, %zu", line->rows, line->columns, line->rank);
    if (line->kind == KIND_EXACT) {
        snprintf(asked, sizeof asked, "%zu of %zu", asked_count(line, tally), tally->tables);
        snprintf(reached, sizeof reached, "%zu of %zu", tally->recovered, tally->tables);
    } else {
        snprintf(asked, sizeof asked, "%g", line->asked);
        snprintf(reached, sizeof reached, "%.4g (%.4g)", tally->median, tally->worst);
    }
    static const char *const words[] = {"exact", "noise", "tail"};
    printf("%-15s %5g %7g  %-5s %9s %17s  %4s %8.2f %8.2f\n", size, line->oversampling, line->kappa, words[line->kind],
           asked, reached, is_met(line, tally) ? "" : "MISS", tally->seconds, tally->seconds_worst);
    fflush(stdout);
}

static void line_write(FILE *file, const struct line *line, const struct tally *tally)
{
    static const char *const words[] = {"exact", "noise", "tail"};
    fprintf(file, "%s,%u,%u,%zu,%g,%g,%zu,", words[line->kind], line->rows, line->columns, line->rank,
            line->oversampling, line->kappa, tally->tables);
    if (line->kind == KIND_EXACT)
        fprintf(file, "%zu,%zu,,,", asked_count(line, tally), tally->recovered);
    else
        fprintf(file, "%g,,%.5g,%.5g,", line->asked, tally->median, tally->worst);
    fprintf(file, "%s,%.3f,%.3f\n", is_met(line, tally) ? "yes" : "no", tally->seconds, tally->seconds_worst);
    fflush(file);
}

static int lines_run(size_t tables, const char *which, FILE *file)
{
    bool all = strcmp(which, "all") == 0, small = strcmp(which, "small") == 0;
    size_t only = (size_t)strtoul(which, NULL, 10), missed = 0;
    printf("%-15s %5s %7s  %-5s %9s %17s  %4s %8s %8s\n", "size, rank", "over", "kappa", "kind", "asked", "reached", "",
           "cpu s", "worst");
    if (file != NULL)
        fprintf(file, "kind,rows,columns,rank,oversampling,kappa,tables,asked,recovered,median,worst,met,"
                      "cpu seconds median,cpu seconds worst\n");
    for (size_t k = 0; k < LINES; k++) {
        if (!all && !(small && lines[k].small) && only != k + 1)
            continue;
        struct tally tally = line_measure(&lines[k], tables);
        line_print(&lines[k], &tally);
        if (file != NULL)
            line_write(file, &lines[k], &tally);
        missed += !is_met(&lines[k], &tally);
    }
    return missed == 0 ? 0 : 1;
}

int main(int count, char **argument)
{
    long tables = count > 1 ? strtol(argument[1], NULL, 10) : 5;
    const char *which = count > 2 ? argument[2] : "small";
    FILE *file = NULL;
    if (tables < 1 || tables > TABLES_MOST || count > 4) {
        fprintf(stderr, "usage: bench_recovery [tables, 1 to %d [small|all|1 to %d [file]]]\n", TABLES_MOST, LINES);
        return 64;
    }
    if (count > 3 && (file = fopen(argument[3], "w")) == NULL) {
        perror(argument[3]);
        return 73;
    }
    if (fescue_context_create(NULL, &context) != FESCUE_OK)
        return 71;
    int missed = lines_run((size_t)tables, which, file);
    fescue_context_destroy(&context);
    return file != NULL && fclose(file) != 0 ? 74 : missed;
}
