/* SPDX-License-Identifier: MIT
 *
 * An iteration and the whole fit of every solver at ranks 8, 16 and 32 on sown ratings, with one thread and two, and
 * the most memory held.
 */
#include "rating.h"

#include "solve/solve.h"

#include <math.h>
#include <stdlib.h>
#include <string.h>

enum { FIT_SECONDS = 20 }; /* what takes longer is cut */
/* On X, per density: what shrinks a row as the sown noise and factors of variance 1/4 ask for, which have a ridge of 1
   on rows beside columns of that variance: 4 / columns, over the density, with 100 cells a row. */
#define RIDGE 0.04

double rating_error(const struct rating *rating, const struct low_rank *point, double scale)
{
    double sum = 0;
    for (uint64_t k = 0; k < rating->hidden; k++) {
        double off = scale * low_rank_entry(point, rating->row[k], rating->column[k]) - rating->value[k];
        sum += off * off;
    }
    return sqrt(sum / (double)rating->hidden);
}

/* The first is left out: it meets memory for the first time. */
static double iteration_median(const struct solve_result *result)
{
    double *step = bench_take(result->trace_count, sizeof *step);
    size_t count = 0;
    for (uint64_t k = 2; k < result->trace_count; k++)
        step[count++] = result->trace[k].seconds - result->trace[k - 1].seconds;
    double median = count > 0 ? bench_median(step, count) : 0;
    free(step);
    return median;
}

/* From the observed cells to factors; in a context of its own, so that what it holds is known. */
void rating_fit(const struct rating *rating, const char *solver, size_t rank, size_t threads, uint64_t iterations,
                struct fit_outcome *out)
{
    struct solve_limits limits = {.iterations = iterations, .gradient = 1e-6, .change = 1e-6};
    struct solve_result result = {0};
    struct problem problem;
    struct low_rank point;
    fescue_context *context;
    if (fescue_context_create(NULL, &context) != FESCUE_OK)
        exit(1);
    bench_check(context, team_resize(context, threads));
    double cpu = clock_cpu(), wall = clock_wall();
    limits.deadline = iterations == FIT_ITERATIONS ? wall + FIT_SECONDS : 0; /* a few are counted, whatever they take */
    bench_check(context, problem_create(context, &rating->cells, NULL, RIDGE, &problem));
    bench_check(context, start_spectral(&problem, rank, 1, &point));
    bench_check(context, solve_run(&problem, solver_find(solver), &limits, &point, &result));
    *out = (struct fit_outcome){.cpu = clock_cpu() - cpu,
                                .wall = clock_wall() - wall,
                                .iteration = iteration_median(&result),
                                .iterations = result.iterations,
                                .stop = solve_stop_word(result.stop)};
    out->rmse = rating_error(rating, &point, problem.scale);
    out->bytes = fescue_memory_usage(rating->context).bytes + fescue_memory_usage(context).peak_bytes;
    low_rank_free(context, &point);
    solve_result_free(context, &result);
    problem_free(&problem);
    fescue_context_destroy(&context);
}

/* Of the whole fits, which take the same iterations on any number of threads; or of an iteration, where one was cut. */
static double times_one_thread(const struct fit_outcome *one, const struct fit_outcome *two)
{
    return one->iterations == two->iterations ? one->cpu / two->wall : one->iteration / two->iteration;
}

static void fit_report(struct bench *bench, const struct rating *rating, const char *solver, size_t rank)
{
    struct fit_outcome outcome[2];
    for (size_t threads = 1; threads <= 2; threads++) {
        struct fit_outcome *own = &outcome[threads - 1];
        rating_fit(rating, solver, rank, threads, FIT_ITERATIONS, own);
        double seconds = threads == 1 ? own->cpu : own->wall;
        json_t *figure = json_pack("{s:s, s:s, s:I, s:I, s:I, s:f, s:f, s:I, s:f, s:s, s:f}", "what", "fit", "solver",
                                   solver, "cells", (json_int_t)rating->cells.count, "rank", (json_int_t)rank,
                                   "threads", (json_int_t)threads, "seconds", seconds, "ns a cell and iteration",
                                   own->iteration / (double)rating->cells.count * 1e9, "iterations",
                                   (json_int_t)own->iterations, "error on hidden cells", own->rmse, "ended by",
                                   own->stop, "MB at most", (double)own->bytes / 1e6);
        if (threads == 2)
            figure_times_add(figure, times_one_thread(&outcome[0], own));
        figure_add(bench, figure);
    }
}

void fits_measure(struct bench *bench, uint64_t cells)
{
    static const size_t ranks[] = {8, 16, 32};
    bool large = cells > 20000000;
    struct rating rating;
    rating_sow(cells, large ? FESCUE_SINGLE : FESCUE_DOUBLE, &rating);
    for (size_t k = 0; solver_at(k) != NULL; k++)
        for (size_t r = 0; r < sizeof ranks / sizeof *ranks; r++)
            if (!large || (k == 0 && ranks[r] == 16))
                fit_report(bench, &rating, solver_name(solver_at(k)), ranks[r]);
    rating_free(&rating);
}
