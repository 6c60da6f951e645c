/* SPDX-License-Identifier: MIT
 *
 * Figures of a run: printed as they come, and kept for bench.json.
 */
#ifndef BENCH_FIGURES_H
#define BENCH_FIGURES_H

#include "base/base.h"

#include <jansson.h>

enum bench_limit { LIMIT_DGEMM, LIMIT_SGEMM, LIMIT_COPY, LIMIT_INFLATE, LIMIT_TWO_DGEMM, LIMIT_TWO_COPY, LIMIT_COUNT };

struct bench {
    json_t *figures;           /* an array of objects */
    double limit[LIMIT_COUNT]; /* flops a second; bytes a second of the two others; two threads over one */
    const char *build;         /* where results go */
};

/* Ends the program with the context's sentence when `status` is one of failure. */
void bench_check(fescue_context *context, fescue_status status);
void *bench_take(size_t count, size_t size); /* zeroed, aligned to 64; ends the program when there is no memory */

/* The table of a file, in a context that has so many workers; ends the program when it is not to be had. */
fescue_table *bench_load(const char *path, enum fescue_precision precision, size_t workers, fescue_context **context);

/* Work that is timed. */
typedef void bench_work(void *argument);
/* Seconds of a run, the processor's on one thread and the wall's on several. What else the machine does strikes the
   median; of the least, there are runs without it. */
struct bench_time {
    double median, least;
};
/* Of `work`, and in *limit of `other` on one thread, by turns for some time each; NULL: no other. */
struct bench_time bench_measure(size_t threads, bench_work *work, void *argument, bench_work *other,
                                struct bench_time *limit);
double bench_seconds(size_t threads, bench_work *work, void *argument); /* the median of that alone */
double bench_median(double *values, size_t count);                      /* orders them */

/* Takes over `figure`, an object with "what", prints it and keeps it. */
void figure_add(struct bench *bench, json_t *figure);
/* How many times as fast two threads were as one (processor seconds of one over wall seconds of two), and beside it
   what the machine gives two of them now, of matrix products and of copies. */
void figure_times_add(json_t *figure, double times);
/* bench.json, and the chart when gnuplot is there. */
void figures_write(const struct bench *bench);

/* ---- the parts of a run ------------------------------------------------------------------------------------------ */

void limits_measure(struct bench *bench);
void gemm_double_run(void *none); /* GEMM_FLOPS each */
void gemm_single_run(void *none);
#define GEMM_FLOPS (2.0 * 768 * 768 * 768)

void loading_measure(struct bench *bench, uint64_t cells);
void kernels_measure(struct bench *bench, uint64_t cells, enum fescue_precision precision);
void moments_measure(struct bench *bench, uint64_t cells);
void fits_measure(struct bench *bench, uint64_t cells);
void alternation_measure(struct bench *bench, uint64_t cells);
void growth_measure(struct bench *bench, bool with_large);

#endif
