/* SPDX-License-Identifier: MIT
 *
 * The inside of the write folder.
 */
#ifndef FESCUE_WRITE_INTERNAL_H
#define FESCUE_WRITE_INTERNAL_H

#include "write/write.h"

#include <jansson.h>

/* A cell of the table, and which seen one it is, by row. */
#define PLACE_UNSEEN UINT64_MAX
struct place {
    uint32_t row, column;
    uint64_t seen;
};
/* What is written of a cell; several are at work at the same time. */
typedef void walk_put(const void *job, const struct place *at, struct outfile *sink);
/* Calls it for all cells, row by row or column by column, and what it appends follows in that order (walk.c). */
void walk_share(struct outfile *file, const struct cells *cells, bool by_columns, walk_put *put, const void *job);

#endif
