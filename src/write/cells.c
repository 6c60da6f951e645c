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
#include "write/write.h"

#include <math.h>

static void real_put(struct outfile *file, double value, bool is_blank)
{
    outfile_write(file, ",", 1);
    if (!is_blank && !isnan(value))
        outfile_real(file, value, FESCUE_DOUBLE);
}

static void unseen_put(const struct run *run, struct outfile *file, uint32_t row, uint32_t column)
{
    char buffer[16];
    struct unseen unseen = run_unseen(run, row, column);
    write_field(file, label_text(&run->table->row_labels, row, buffer), ',');
    outfile_write(file, ",", 1);
    write_field(file, label_text(&run->table->column_labels, column, buffer), ',');
    real_put(file, unseen.estimate, unseen.is_blank);
    real_put(file, unseen.lower, unseen.is_blank);
    real_put(file, unseen.upper, unseen.is_blank);
    outfile_write(file, ",", 1);
    outfile_text(file, basis_word(unseen.basis));
    outfile_write(file, ",", 1);
    outfile_count(file, run->determined->row_support[row]);
    outfile_write(file, ",", 1);
    outfile_count(file, run->determined->column_support[column]);
    outfile_write(file, "\n", 1);
}

fescue_status write_cells(const struct run *run, struct output *output)
{
    const struct half *half = &run->table->cells.by_row;
    struct outfile *file;
    fescue_status status = output_add(output, "cells.csv", &file);
    if (status != FESCUE_OK)
        return status;
    outfile_text(file, "row,column,estimate,lower,upper,basis,row_support,column_support\n");
    uint64_t next = 0;
    for (uint32_t row = 0; row < half->lines; row++)
        for (uint32_t column = 0; column < half->length; column++) {
            if (next < half->start[row + 1] && half->across[next] == column)
                next++;
            else
                unseen_put(run, file, row, column);
        }
    return outfile_status(file);
}
