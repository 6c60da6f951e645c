/* SPDX-License-Identifier: MIT
 *
 * What was learnt, as Matrix Market arrays:
 *
 *     estimate = mean + row-offsets + column-offsets' + left diag(spectrum) right' + season-waves season'
 *
 * in the table's units, before bounds (the last term the other way round where columns are times). The mean stands in a
 * comment of both offsets' files and in run.json. A model of rank 0 has no left, spectrum and right, one without a
 * season no season: those files are not written then.
 */
#include "write/write.h"

static struct matrix column_view(double *data, size_t rows)
{
    return (struct matrix){.data = data, .rows = rows, .columns = 1, .stride = 1};
}

fescue_status write_factors(const struct run *run, struct output *output)
{
    const struct model *model = run->model;
    const struct low_rank *point = &model->low_rank;
    const struct season *season = &model->season;
    char mean[32], comment[64] = "mean ";
    fescue_status status;
    size_t length = real_to_text(model->offsets.mean, FESCUE_DOUBLE, mean);
    for (size_t k = 0; k <= length; k++)
        comment[5 + k] = mean[k];
    TRY(write_array(output, "row-offsets.mtx", column_view(model->offsets.row, model->rows), comment));
    TRY(write_array(output, "column-offsets.mtx", column_view(model->offsets.column, model->columns), comment));
    if (season->along != TIME_NONE) {
        size_t width = 2 * season->waves;
        TRY(write_array(output, "season-waves.mtx",
                        (struct matrix){.data = season->wave, .rows = season->steps, .columns = width, .stride = width},
                        "cosine and sine of each wave at every time"));
        TRY(write_array(
            output, "season.mtx",
            (struct matrix){.data = season->amplitude, .rows = season->series, .columns = width, .stride = width},
            "their amplitudes in every series"));
    }
    if (point->rank == 0)
        return FESCUE_OK;
    TRY(write_array(output, "left.mtx", point->left, NULL));
    TRY(write_array(output, "spectrum.mtx", column_view(point->spectrum, point->rank), NULL));
    TRY(write_array(output, "right.mtx", point->right, NULL));
done:
    return status;
}
