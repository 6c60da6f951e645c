/* SPDX-License-Identifier: MIT
 *
 * cells.csv: one line an unseen cell, row by row. Labels are those of the table, numbers from 1 where it has none.
 *
 *   row, column        labels
 *   estimate           blank when --strict leaves the cell blank
 *   lower, upper       the interval; blank where there is none
 *   basis              low-rank, smooth, offsets or mean: what the data determine of the cell
 *   row_support        observed cells of its row
 *   column_support     and of its column
 */
#include "write/write_internal.h"

#include <math.h>

static void real_put(struct outfile *file, double value, bool is_blank)
{
    outfile_write(file, ",", 1);
    if (!is_blank && !isnan(value))
        outfile_real(file, value, FESCUE_DOUBLE);
}

static void cell_put(const void *job, const struct place *at, struct outfile *file)
{
    const struct run *run = job;
    char buffer[16];
    if (at->seen != PLACE_UNSEEN)
        return;
    struct unseen unseen = run_unseen(run, at->row, at->column);
    write_field(file, label_text(&run->table->row_labels, at->row, buffer), ',');
    outfile_write(file, ",", 1);
    write_field(file, label_text(&run->table->column_labels, at->column, buffer), ',');
    real_put(file, unseen.estimate, unseen.is_blank);
    real_put(file, unseen.lower, unseen.is_blank);
    real_put(file, unseen.upper, unseen.is_blank);
    outfile_write(file, ",", 1);
    outfile_text(file, basis_word(unseen.basis));
    outfile_write(file, ",", 1);
    outfile_count(file, run->determined->row_support[at->row]);
    outfile_write(file, ",", 1);
    outfile_count(file, run->determined->column_support[at->column]);
    outfile_write(file, "\n", 1);
}

fescue_status write_cells(const struct run *run, struct output *output)
{
    struct outfile *file;
    fescue_status status = output_add(output, "cells.csv", &file);
    if (status != FESCUE_OK)
        return status;
    outfile_text(file, "row,column,estimate,lower,upper,basis,row_support,column_support\n");
    walk_share(file, &run->table->cells, false, cell_put, run);
    return outfile_status(file);
}
