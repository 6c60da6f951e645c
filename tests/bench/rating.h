/* SPDX-License-Identifier: MIT
 *
 * Sown tables in the shape of ratings, for measurements.
 */
#ifndef BENCH_RATING_H
#define BENCH_RATING_H

#include "figures.h"

#include "table/table.h"

enum { RATING_RANK = 16 };
struct rating {
    fescue_context *context;
    struct cells cells;     /* observed */
    uint32_t *row, *column; /* hidden ones */
    double *value;
    uint64_t hidden;
};
void rating_sow(uint64_t cells, enum fescue_precision precision, struct rating *rating);
void rating_free(struct rating *rating);
/* The observed cells as a packed file of that path, values in their precision. */
void rating_pack(const struct rating *rating, const char *path);

/* ---- fits of it (fits.c) ----------------------------------------------------------------------------------------- */

struct low_rank;
double rating_error(const struct rating *rating, const struct low_rank *point, double scale); /* on the hidden cells */
struct fit_outcome {
    double cpu, wall, rmse;
    double iteration; /* wall seconds, the median of all but the first */
    uint64_t iterations;
    uint64_t bytes; /* most held, with the table */
    const char *stop;
};
enum { FIT_ITERATIONS = 40 }; /* of a whole fit: far beyond where errors on hidden cells have settled */
/* From the observed cells to factors, spectral start included. */
void rating_fit(const struct rating *rating, const char *solver, size_t rank, size_t threads, uint64_t iterations,
                struct fit_outcome *out);

#endif
