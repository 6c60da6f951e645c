/* SPDX-License-Identifier: MIT
 *
 * How many passes the solvers need that go through a table a few lines at a time.
 *
 *     bench_streams [kappa ...]          default 10 30
 *
 * A table of 2000 x 20000 of rank 10, its spectrum falling geometrically by kappa, mean square 1, noise 0.1, 3 % of the
 * cells seen. Every solver starts from a random point of spectrum 0. One line a pass, on one thread: the times that the
 * table was read to learn from it, and the error on 100000 cells that were not seen, over that of the full fit at the
 * same rank (grassmann-cg from the truth, so that it is in the right valley, to a gradient of 1e-7): the error that a
 * test would find (noise in the hidden cells), and the one against the truth without noise, which is stricter.
 * Processor seconds count passes and the evaluation that ends each, which is one more read; variance reduction uses it.
 */
#include "solve/solve_internal.h"

#include <math.h>
#include <stdio.h>
#include <stdlib.h>
#include <string.h>

enum {
    ROWS = 2000,
    COLUMNS = 20000,
    RANK = 10,
    ASKED = 100000,
    PASSES = 3,
    DRAW_SIDES = 1,
    DRAW_CELLS,
    DRAW_ASKED,
    DRAW_START
};
static const double share = 0.03, noise = 0.1;

struct bench {
    fescue_context *context;
    double kappa;
    struct cells cells;
    struct problem problem;
    struct low_rank truth; /* in the problem's units */
    double full[2];        /* errors of the full fit, as errors_of has them */
};

static void check(const struct bench *bench, fescue_status status)
{
    if (status == FESCUE_OK)
        return;
    fprintf(stderr, "bench_streams: %s\n", fescue_failure_text(bench->context));
    exit(1);
}

static void sides_draw(struct bench *bench, uint32_t which, struct low_rank *point)
{
    struct random_stream stream = random_open(1, RANDOM_TEST, which);
    struct matrix sides[2], none = {0};
    double *work = malloc(dense_work_size(COLUMNS, RANK) * sizeof *work);
    if (work == NULL)
        exit(1);
    check(bench, low_rank_create(bench->context, ROWS, COLUMNS, RANK, point));
    sides[0] = point->left;
    sides[1] = point->right;
    for (int s = 0; s < 2; s++) {
        for (size_t i = 0; i < sides[s].rows; i++)
            for (size_t k = 0; k < RANK; k++)
                MATRIX_AT(sides[s], i, k) = random_normal(&stream);
        check(bench, dense_qr(bench->context, sides[s], none, work));
    }
    free(work);
}

static void truth_make(struct bench *bench)
{
    double size = 0;
    sides_draw(bench, DRAW_SIDES, &bench->truth);
    for (size_t k = 0; k < RANK; k++) {
        bench->truth.spectrum[k] = pow(bench->kappa, -(double)k / (RANK - 1));
        size += bench->truth.spectrum[k] * bench->truth.spectrum[k];
    }
    for (size_t k = 0; k < RANK; k++)
        bench->truth.spectrum[k] *= sqrt((double)ROWS * COLUMNS / size);
}

static void table_make(struct bench *bench)
{
    struct triplet_list list = {.precision = FESCUE_DOUBLE};
    struct random_stream stream = random_open(1, RANDOM_TEST, DRAW_CELLS);
    truth_make(bench);
    for (uint32_t i = 0; i < ROWS; i++)
        for (uint32_t j = 0; j < COLUMNS; j++)
            if (random_uniform(&stream) < share)
                check(bench, triplets_append(bench->context, &list, i, j,
                                             low_rank_entry(&bench->truth, i, j) + noise * random_normal(&stream)));
    check(bench, cells_build(bench->context, ROWS, COLUMNS, &list, &bench->cells));
    triplets_free(bench->context, &list);
    check(bench, problem_create(bench->context, &bench->cells, NULL, 0, &bench->problem));
    for (size_t k = 0; k < RANK; k++)
        bench->truth.spectrum[k] /= bench->problem.scale;
}

static bool is_seen(const struct cells *cells, uint32_t row, uint32_t column)
{
    for (uint64_t k = cells->by_row.start[row]; k < cells->by_row.start[row + 1]; k++)
        if (cells->by_row.across[k] == column)
            return true;
    return false;
}

/* rms of estimate - value over cells that were not seen: values with noise, and without. */
static void errors_of(const struct bench *bench, const struct low_rank *point, double error[2])
{
    struct random_stream stream = random_open(1, RANDOM_TEST, DRAW_ASKED);
    double square[2] = {0};
    for (int asked = 0; asked < ASKED;) {
        uint32_t i = (uint32_t)random_below(&stream, ROWS), j = (uint32_t)random_below(&stream, COLUMNS);
        if (is_seen(&bench->cells, i, j))
            continue;
        double off = bench->problem.scale * (low_rank_entry(point, i, j) - low_rank_entry(&bench->truth, i, j));
        square[0] += pow(off - noise * random_normal(&stream), 2);
        square[1] += off * off;
        asked++;
    }
    for (int k = 0; k < 2; k++)
        error[k] = sqrt(square[k] / ASKED);
}

static void full_fit(struct bench *bench)
{
    const struct solve_limits limits = {.iterations = 200, .gradient = 1e-7};
    struct solve_result result = {0};
    struct low_rank point;
    double begin = clock_cpu();
    check(bench, low_rank_copy(bench->context, &bench->truth, &point));
    check(bench, solve_run(&bench->problem, solver_find("grassmann-cg"), &limits, &point, &result));
    double seconds = clock_cpu() - begin;
    errors_of(bench, &point, bench->full);
    printf("kappa %g: full fit ends by %s after %d iterations and %.2f s; error %.5f on hidden cells, %.5f against the "
           "truth\n",
           bench->kappa, solve_stop_word(result.stop), (int)result.iterations, seconds, bench->full[0], bench->full[1]);
    solve_result_free(bench->context, &result);
    low_rank_free(bench->context, &point);
}

static void solver_report(struct bench *bench, const char *name)
{
    const struct solver *solver = solver_find(name);
    struct field field = {.problem = &bench->problem};
    struct low_rank point;
    bool reduced = strcmp(name, "grassmann-variance-reduced") == 0, moved;
    double seconds = 0, error[2];
    void *state;
    sides_draw(bench, DRAW_START, &point);
    check(bench, sweep_create(bench->context, &bench->problem.target, RANK * solver->width, &field.sweep));
    check(bench, solver->create(&field, &point, &state));
    for (int pass = 1; pass <= PASSES; pass++) {
        double begin = clock_cpu();
        check(bench, solver->step(state, &moved));
        seconds += clock_cpu() - begin;
        check(bench, solver->point_write(state, &point));
        errors_of(bench, &point, error);
        printf("kappa %-3g %-28s pass %d  reads %d  hidden cells %.4f  truth %.4f  %.2f s\n", bench->kappa, name, pass,
               reduced ? 2 * pass - 1 : pass, error[0] / bench->full[0], error[1] / bench->full[1], seconds);
    }
    solver->destroy(bench->context, &state);
    sweep_destroy(&field.sweep);
    low_rank_free(bench->context, &point);
}

int main(int count, char **argument)
{
    static const char *const names[] = {"recursive-least-squares", "grassmann-variance-reduced",
                                        "grassmann-stochastic"};
    static const double standard[] = {10, 30};
    for (int k = 0; k < (count > 1 ? count - 1 : 2); k++) {
        struct bench bench = {.kappa = count > 1 ? strtod(argument[1 + k], NULL) : standard[k]};
        if (fescue_context_create(NULL, &bench.context) != FESCUE_OK)
            return 1;
        table_make(&bench);
        full_fit(&bench);
        for (size_t s = 0; s < sizeof names / sizeof *names; s++)
            solver_report(&bench, names[s]);
        low_rank_free(bench.context, &bench.truth);
        problem_free(&bench.problem);
        cells_free(bench.context, &bench.cells);
        fescue_context_destroy(&bench.context);
    }
    return 0;
}
