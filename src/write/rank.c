/* SPDX-License-Identifier: MIT
 *
 * rank.csv: one line a point of the cross-validation.
 *
 *   offsets       the kind
 *   rank          components; of the evidence fit the least and the greatest over the folds, as 3-4, when they differ
 *   ridge         blank: learnt, one a component
 *   rmse          over the hidden cells of all folds, table units, weighted where cells have weights
 *   worse         mean squared error over that of the best rank, the mean of the folds' differences
 *   worse_error   its standard error
 *   mark          "chosen", "best", both with a blank between, "learnt" for the evidence fit, "interpolation" in time,
 *                 "rival" for what the other kind of offsets comes to, or nothing
 *   fold_1 ...    mean squared error of each fold
 */
#include "write/write.h"

#include <math.h>

static void real_put(struct outfile *file, double value)
{
    outfile_write(file, ",", 1);
    if (!isnan(value))
        outfile_real(file, value, FESCUE_DOUBLE);
}

static void point_put(struct outfile *file, const struct ranking *ranking, const struct ranking_point *point,
                      const char *mark)
{
    static const char *const kinds[] = {"auto", "both", "rows", "columns", "mean", "none"};
    outfile_format(file, "%s,%u", kinds[point->offsets], point->rank_least);
    if (point->rank_greatest > point->rank_least)
        outfile_format(file, "-%u", point->rank_greatest);
    real_put(file, point->rank == 0 ? 0 : point->ridge);
    real_put(file, point->rmse);
    real_put(file, point->worse);
    real_put(file, point->worse_error);
    outfile_format(file, ",%s", mark);
    for (uint32_t k = 0; k < ranking->folds; k++)
        real_put(file, point->fold[k]);
    outfile_write(file, "\n", 1);
}

fescue_status write_ranking(const struct ranking *ranking, struct output *output)
{
    struct outfile *file;
    fescue_status status = output_add(output, "rank.csv", &file);
    if (status != FESCUE_OK)
        return status;
    outfile_text(file, "offsets,rank,ridge,rmse,worse,worse_error,mark");
    for (uint32_t k = 0; k < ranking->folds; k++)
        outfile_format(file, ",fold_%u", k + 1);
    outfile_text(file, "\n");
    for (uint64_t k = 0; k < ranking->count; k++) {
        bool is_best = k == ranking->best, is_chosen = k == ranking->chosen;
        point_put(file, ranking, &ranking->point[k],
                  is_best && is_chosen ? "chosen best"
                  : is_chosen          ? "chosen"
                  : is_best            ? "best"
                                       : "");
    }
    if (ranking->learnt.fold != NULL)
        point_put(file, ranking, &ranking->learnt, "learnt");
    if (ranking->interpolation.fold != NULL)
        point_put(file, ranking, &ranking->interpolation, "interpolation");
    if (ranking->rival.fold != NULL)
        point_put(file, ranking, &ranking->rival, "rival");
    return outfile_status(file);
}
