/* SPDX-License-Identifier: MIT
 *
 * Time to a given error on unseen cells: all solvers on one noisy table in one run.
 *
 *     bench_solvers [file]      make bench-solvers: $(BUILD)/solvers.csv, and solvers.png where there is gnuplot
 *
 * A table of 3000 x 2000 of rank 10, its spectrum falling geometrically by 10, mean square 1, noise 0.1, a tenth of the
 * cells seen. The error is the root mean square distance from the truth, without noise, over 100000 unseen cells, as a
 * multiple of sigma sqrt(r(m + n - r) / seen). Times are processor seconds of one thread.
 *
 *     steps   every solver of the list from the spectral start at the rank of the table, without ridge: the error after
 *             each step, until it has settled. The start's own time counts, the measuring does not. The evidence fit by
 *             the number of its final rounds, each a run from nothing.
 *     fill    the whole job through the program's face, for every word of --solver, with --rank 10 --offsets none: it
 *             has a minute, chooses the ridge, hides cells, judges, and fits all cells. One point each.
 *
 * It is said how `auto` stands beside the best fill: its time over the shortest of those that come within one per cent
 * of auto's error (at most 1.5), its error over the least (at most 1.01); and the same of the times of the evidence
 * fit, which auto takes, and the solvers from the bare start.
 */
#include "job/job.h"
#include "solve/solve_internal.h"

#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

enum {
    ROWS = 3000,
    COLUMNS = 2000,
    RANK = 10,
    ASKED = 100000,
    STEPS_MOST = 60,
    STEADY = 8,
    DRAW_SIDES = 1,
    DRAW_CELLS,
    DRAW_ASKED
};
static const double share = 0.1, sigma = 0.1, kappa = 10;
static const double steady = 1e-3, slower_most = 1.5, worse_most = 1.01, near = 1.01;

struct bench {
    fescue_context *context;
    fescue_table *table;
    struct low_rank truth;
    struct problem problem;
    uint32_t *row, *column; /* of the unseen cells that are asked */
    double bound;
    double target; /* within one per cent of auto's error */
    FILE *file;
};

static void check(const struct bench *bench, fescue_status status)
{
    if (status == FESCUE_OK)
        return;
    fprintf(stderr, "bench_solvers: %s\n", fescue_failure_text(bench->context));
    exit(1);
}

static void *room(size_t count, size_t size)
{
    void *block = calloc(count, size);
    if (block == NULL)
        exit(1);
    return block;
}

/* ---- the table -----------------------------------------------------------------------------------------------------
 */

static void truth_draw(struct bench *bench)
{
    struct random_stream stream = random_open(1, RANDOM_TEST, DRAW_SIDES);
    struct matrix sides[2], none = {0};
    double *work = room(dense_work_size(ROWS, RANK), sizeof *work), square = 0;
    check(bench, low_rank_create(bench->context, ROWS, COLUMNS, RANK, &bench->truth));
    sides[0] = bench->truth.left;
    sides[1] = bench->truth.right;
    for (int s = 0; s < 2; s++) {
        for (size_t i = 0; i < sides[s].rows; i++)
            for (size_t k = 0; k < RANK; k++)
                MATRIX_AT(sides[s], i, k) = random_normal(&stream);
        check(bench, dense_qr(bench->context, sides[s], none, work));
    }
    for (size_t k = 0; k < RANK; k++) {
        bench->truth.spectrum[k] = pow(kappa, -(double)k / (RANK - 1));
        square += bench->truth.spectrum[k] * bench->truth.spectrum[k];
    }
    for (size_t k = 0; k < RANK; k++)
        bench->truth.spectrum[k] *= sqrt((double)ROWS * COLUMNS / square);
    free(work);
}

static void table_make(struct bench *bench, const struct fescue_options *options)
{
    struct random_stream stream = random_open(1, RANDOM_TEST, DRAW_CELLS);
    struct random_stream asks = random_open(1, RANDOM_TEST, DRAW_ASKED);
    size_t most = (size_t)(1.1 * share * ROWS * COLUMNS), count = 0;
    uint32_t *row = room(most, sizeof *row), *column = room(most, sizeof *column);
    double *value = room(most, sizeof *value);
    uint8_t *seen = room((size_t)ROWS * COLUMNS, 1);
    for (uint32_t i = 0; i < ROWS; i++)
        for (uint32_t j = 0; j < COLUMNS; j++)
            if (random_uniform(&stream) < share && count < most) {
                seen[(size_t)i * COLUMNS + j] = 1;
                row[count] = i;
                column[count] = j;
                value[count++] = low_rank_entry(&bench->truth, i, j) + sigma * random_normal(&stream);
            }
    check(bench,
          fescue_table_from_cells(bench->context, ROWS, COLUMNS, count, row, column, value, options, &bench->table));
    check(bench, problem_create(bench->context, &bench->table->cells, NULL, 0, &bench->problem));
    bench->bound = sigma * sqrt(RANK * (ROWS + COLUMNS - RANK) / (double)count);
    bench->row = room(ASKED, sizeof *bench->row);
    bench->column = room(ASKED, sizeof *bench->column);
    for (size_t k = 0; k < ASKED;) {
        bench->row[k] = (uint32_t)random_below(&asks, ROWS);
        bench->column[k] = (uint32_t)random_below(&asks, COLUMNS);
        k += !seen[(size_t)bench->row[k] * COLUMNS + bench->column[k]];
    }
    free(row);
    free(column);
    free(value);
    free(seen);
}

static void bench_close(struct bench *bench)
{
    problem_free(&bench->problem);
    low_rank_free(bench->context, &bench->truth);
    fescue_table_destroy(&bench->table);
    fescue_context_destroy(&bench->context);
    free(bench->row);
    free(bench->column);
}

/* ---- errors --------------------------------------------------------------------------------------------------------
 */

/* Of scale * point, over the bound. */
static double point_error(const struct bench *bench, const struct low_rank *point, double scale)
{
    double square = 0;
    for (size_t k = 0; k < ASKED; k++) {
        double e = scale * low_rank_entry(point, bench->row[k], bench->column[k]) -
                   low_rank_entry(&bench->truth, bench->row[k], bench->column[k]);
        square += e * e;
    }
    return sqrt(square / ASKED) / bench->bound;
}

static double fill_error(const struct bench *bench, const fescue_fill *fill)
{
    double square = 0;
    for (size_t k = 0; k < ASKED; k++) {
        double e = fescue_fill_estimate(fill, bench->row[k], bench->column[k]) -
                   low_rank_entry(&bench->truth, bench->row[k], bench->column[k]);
        square += e * e;
    }
    return sqrt(square / ASKED) / bench->bound;
}

static void line_write(const struct bench *bench, const char *way, const char *solver, int step, const double at[2])
{
    if (bench->file != NULL)
        fprintf(bench->file, "%s,%s,%d,%.4f,%.5f\n", way, solver, step, at[0], at[1]);
}

static void line_print(const char *way, const char *solver, int steps, const double at[2], double reached)
{
    char text[32] = "never";
    if (isfinite(reached))
        snprintf(text, sizeof text, "%.2f s", reached);
    printf("%-6s %-28s %4d steps %9.2f s  error %.4f  near auto's: %s\n", way, solver, steps, at[0], at[1], text);
    fflush(stdout);
}

/* When the error first came near auto's. */
static double reached_at(const struct bench *bench, const double at[2], double before)
{
    return at[1] <= bench->target ? fmin(before, at[0]) : before;
}

/* ---- step by step --------------------------------------------------------------------------------------------------
 */

/* Whether the last STEADY errors, of which the newest is at `step`, hardly differ. */
static bool is_steady(const double *error, int step)
{
    if (step < STEADY)
        return false;
    double low = error[step], high = error[step];
    for (int k = step - STEADY + 1; k < step; k++) {
        low = fmin(low, error[k]);
        high = fmax(high, error[k]);
    }
    return high <= (1 + steady) * low;
}

static double solver_follow(struct bench *bench, const struct solver *solver)
{
    struct field field = {.problem = &bench->problem};
    struct low_rank point;
    double error[STEPS_MOST + 1], at[2], reached = INFINITY, begin = clock_cpu();
    bool moved = true;
    void *state;
    int step = 0;
    check(bench, start_spectral(&bench->problem, RANK, 1, &point));
    check(bench, sweep_create(bench->context, &bench->problem.target, RANK * solver->width, &field.sweep));
    check(bench, solver->create(&field, &point, &state));
    at[0] = clock_cpu() - begin;
    for (;; step++) {
        check(bench, solver->point_write(state, &point));
        error[step] = at[1] = point_error(bench, &point, bench->problem.scale);
        line_write(bench, "steps", solver->name, step, at);
        reached = reached_at(bench, at, reached);
        if (step == STEPS_MOST || !moved || is_steady(error, step))
            break;
        begin = clock_cpu();
        check(bench, solver->step(state, &moved));
        at[0] += clock_cpu() - begin;
    }
    line_print("steps", solver->name, step, at, reached);
    solver->destroy(bench->context, &state);
    sweep_destroy(&field.sweep);
    low_rank_free(bench->context, &point);
    return reached;
}

static double evidence_follow(struct bench *bench)
{
    static const int rounds[] = {1, 2, 4, 8, 16, 32};
    enum { RUNS = sizeof rounds / sizeof *rounds };
    double at[2] = {0}, reached = INFINITY;
    for (size_t k = 0; k < RUNS; k++) {
        struct evidence_request request = {.offsets = FESCUE_OFFSETS_NONE,
                                           .rank = RANK,
                                           .rank_most = RANK,
                                           .seed = 1,
                                           .rounds = (uint64_t)rounds[k],
                                           .change = 1e-5};
        struct evidence_result result = {0};
        double begin = clock_cpu();
        check(bench, evidence_learn(bench->context, &bench->table->cells, &request, &result));
        at[0] = clock_cpu() - begin;
        at[1] = point_error(bench, &result.model.low_rank, 1);
        line_write(bench, "steps", "evidence", rounds[k], at);
        reached = reached_at(bench, at, reached);
        evidence_result_free(bench->context, &result);
    }
    line_print("steps", "evidence", rounds[RUNS - 1], at, reached);
    return reached;
}

/* ---- whole fills ---------------------------------------------------------------------------------------------------
 */

static void options_make(struct bench *bench, const char *solver, struct fescue_options *options)
{
    static const char *const set[][2] = {{"rank", "10"}, {"offsets", "none"}, {"threads", "1"}, {"time-limit", "1m"}};
    fescue_options_standard(options);
    for (size_t k = 0; k < sizeof set / sizeof *set; k++)
        check(bench, fescue_options_set(bench->context, options, set[k][0], set[k][1]));
    check(bench, fescue_options_set(bench->context, options, "solver", solver));
}

static void fill_measure(struct bench *bench, const char *solver, double at[2])
{
    struct fescue_options options;
    fescue_fill *fill;
    options_make(bench, solver, &options);
    double begin = clock_cpu();
    check(bench, fescue_fill_table(bench->table, &options, &fill));
    at[0] = clock_cpu() - begin;
    at[1] = fill_error(bench, fill);
    line_write(bench, "fill", solver, 1, at);
    bench->target = fmax(bench->target, near * at[1] * (strcmp(solver, "auto") == 0));
    line_print("fill", solver, 1, at, reached_at(bench, at, INFINITY));
    fescue_fill_destroy(&fill);
}

/* How auto, the first, stands among them; false when it is not good enough. */
static bool autos_rank(const struct bench *bench, const double (*at)[2], size_t count)
{
    double shortest = INFINITY, least = INFINITY;
    for (size_t k = 1; k < count; k++) {
        least = fmin(least, at[k][1]);
        shortest = reached_at(bench, at[k], shortest);
    }
    double slower = isfinite(shortest) ? at[0][0] / shortest : 0, worse = at[0][1] / least;
    printf("auto: %.2f times the shortest time to its error (at most %g), %.4f times the least error (at most %g)\n",
           slower, slower_most, worse, worse_most);
    return slower <= slower_most && worse <= worse_most;
}

static bool fills_compare(struct bench *bench)
{
    enum { WORDS_MOST = 16 };
    double at[WORDS_MOST][2];
    size_t count = 2;
    fill_measure(bench, "auto", at[0]);
    fill_measure(bench, "evidence", at[1]);
    for (size_t k = 0; solver_at(k) != NULL && count < WORDS_MOST; k++)
        fill_measure(bench, solver_name(solver_at(k)), at[count++]);
    return autos_rank(bench, (const double(*)[2])at, count);
}

int main(int count, char **argument)
{
    struct bench bench = {0};
    struct fescue_options options;
    if (count > 1 && (bench.file = fopen(argument[1], "w")) == NULL) {
        perror(argument[1]);
        return 73;
    }
    if (fescue_context_create(NULL, &bench.context) != FESCUE_OK)
        return 71;
    options_make(&bench, "auto", &options);
    truth_draw(&bench);
    table_make(&bench, &options);
    if (bench.file != NULL)
        fprintf(bench.file, "way,solver,step,cpu seconds,error over the bound\n");
    bool good = fills_compare(&bench);
    double shortest = INFINITY;
    for (size_t k = 0; solver_at(k) != NULL; k++)
        shortest = fmin(shortest, solver_follow(&bench, solver_at(k)));
    double learns = evidence_follow(&bench) / shortest;
    printf("the evidence fit, which auto takes: %.2f times the shortest time of a bare solver (at most %g)\n", learns,
           slower_most);
    good = good && learns <= slower_most;
    bench_close(&bench);
    return bench.file != NULL && fclose(bench.file) != 0 ? 74 : good ? 0 : 1;
}
