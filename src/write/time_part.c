/* SPDX-License-Identifier: MIT
 *
 * time-part.csv: the laws of a model that follows lines in time, in the table's units.
 *
 *   part          series: the AR(1) residual of a line across the time axis; component, effect: of the steps
 *   line          label of the series; number of the component, in the fit's own basis, whose scale is free
 *   deviation     standard deviation of the residual; blank for components
 *   correlation   over one step
 *   noise         standard deviation of the noise of a cell of the series; blank for components
 *
 * Values of the residuals are inside the estimates.
 */
#include "write/write.h"

#include <math.h>

static void real_put(struct outfile *file, double value)
{
    outfile_write(file, ",", 1);
    outfile_real(file, value, FESCUE_DOUBLE);
}

fescue_status write_time_part(const struct run *run, struct output *output)
{
    const struct time_part *part = &run->model->time;
    const struct labels *labels = part->along == TIME_ROWS ? &run->table->column_labels : &run->table->row_labels;
    struct outfile *file;
    char buffer[16];
    if (part->along == TIME_NONE)
        return FESCUE_OK;
    fescue_status status = output_add(output, "time-part.csv", &file);
    if (status != FESCUE_OK)
        return status;
    outfile_text(file, "part,line,deviation,correlation,noise\n");
    for (uint32_t line = 0; line < part->series; line++) {
        outfile_text(file, "series,");
        write_field(file, label_text(labels, line, buffer), ',');
        real_put(file, sqrt(part->law[line].variance));
        real_put(file, part->law[line].correlation);
        real_put(file, sqrt(part->noise[line]));
        outfile_text(file, "\n");
    }
    for (size_t k = 0; k < part->components; k++) {
        outfile_text(file, k + 1 < part->components ? "component," : "effect");
        if (k + 1 < part->components)
            outfile_count(file, k + 1);
        else
            outfile_text(file, ",");
        outfile_text(file, ",");
        real_put(file, part->steps_law[k].correlation);
        outfile_text(file, ",\n");
    }
    return outfile_status(file);
}
