/* SPDX-License-Identifier: MIT
 *
 * All cells of a table into a file, row by row or column by column, in pieces that the team makes.
 *
 * Pieces are ranges of the walk and do not know of lines. Which seen cell a cell is follows from the one before it in
 * its row; at the begin of a row or of a piece, and always when columns are walked, it is looked up, which costs little
 * beside writing a number.
 */
#include "write/write_internal.h"

enum { PIECE = 4096 }; /* cells: some milliseconds of work, some 100 kB of text */

struct walk {
    const struct cells *cells;
    bool by_columns;
    uint64_t count; /* rows times columns */
    walk_put *put;
    const void *job;
};

static void piece_walk(void *job, size_t piece, struct outfile *sink)
{
    const struct walk *walk = job;
    const struct half *half = &walk->cells->by_row;
    uint64_t first = (uint64_t)piece * PIECE, end = first + PIECE < walk->count ? first + PIECE : walk->count, next = 0;
    uint32_t length = walk->by_columns ? half->lines : half->length;
    for (uint64_t k = first; k < end; k++) {
        uint32_t line = (uint32_t)(k / length), across = (uint32_t)(k % length);
        struct place at = {walk->by_columns ? across : line, walk->by_columns ? line : across, PLACE_UNSEEN};
        if (walk->by_columns || k == first || across == 0)
            next = half_find(half, at.row, at.column);
        if (next < half->start[at.row + 1] && half->across[next] == at.column)
            at.seen = next++;
        walk->put(walk->job, &at, sink);
    }
}

void walk_share(struct outfile *file, const struct cells *cells, bool by_columns, walk_put *put, const void *job)
{
    struct walk walk = {.cells = cells,
                        .by_columns = by_columns,
                        .count = (uint64_t)cells->rows * cells->columns,
                        .put = put,
                        .job = job};
    outfile_share(file, (size_t)(walk.count / PIECE + (walk.count % PIECE != 0)), piece_walk, &walk);
}
