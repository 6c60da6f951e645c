/* SPDX-License-Identifier: MIT
 *
 * Stores of observed cells for tests.
 */
#ifndef FESCUE_TESTS_SUPPORT_TABLE_H
#define FESCUE_TESTS_SUPPORT_TABLE_H

#include "support.h"
#include "table/table.h"

/* A random table: value(i, j) = sum over k < rank of a(i, k) b(j, k), standard normal factors, plus `noise` times a
   standard normal; every cell is seen with probability `share`, independently. Depends on nothing but these. */
struct sowing {
    uint32_t rows, columns, rank;
    double share, noise;
    enum fescue_precision precision;
    uint64_t seed;
};
double sowing_truth(const struct sowing *sowing, uint32_t row, uint32_t column); /* without noise */

/* The seen cells in row order; the caller frees them with triplets_free. */
void sow_triplets(fescue_context *context, const struct sowing *sowing, struct triplet_list *list);
/* The same as a store; the caller frees it with cells_free. */
void sow_cells(fescue_context *context, const struct sowing *sowing, struct cells *cells);

#endif
