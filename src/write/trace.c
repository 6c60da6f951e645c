/* SPDX-License-Identifier: MIT
 *
 * trace.csv: one line an iteration of the final fit, the ranks it grew through among them.
 *
 *   rank, iteration    of that rank, from 0
 *   objective          in units of the fit: half the sum of squares, observed minus offsets over scale, and the ridge
 *   rmse               over the seen cells, in the table's units
 *   gradient           its norm relative to the one at the zero matrix
 *   step               length of the step taken
 *
 * Times are left out, so that the file is the same every time; run.json has them in sum.
 */
#include "write/write.h"

fescue_status write_trace(const struct run *run, struct output *output)
{
    struct outfile *file;
    fescue_status status = output_add(output, "trace.csv", &file);
    if (status != FESCUE_OK)
        return status;
    outfile_text(file, "rank,iteration,objective,rmse,gradient,step\n");
    for (uint64_t k = 0; k < run->fit->trace_count; k++) {
        const struct solve_step *step = &run->fit->trace[k];
        const double reals[] = {step->objective, step->rmse * run->scale, step->gradient, step->step};
        outfile_count(file, step->rank);
        outfile_write(file, ",", 1);
        outfile_count(file, step->iteration);
        for (size_t r = 0; r < sizeof reals / sizeof reals[0]; r++) {
            outfile_write(file, ",", 1);
            outfile_real(file, reals[r], FESCUE_DOUBLE);
        }
        outfile_write(file, "\n", 1);
    }
    return outfile_status(file);
}
