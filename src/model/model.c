/* SPDX-License-Identifier: MIT
 *
 * What was learnt, asked for one cell at a time.
 */
#include "model/model.h"

double model_estimate(const struct model *model, uint32_t row, uint32_t column)
{
    double estimate = offsets_at(&model->offsets, row, column) + low_rank_entry(&model->low_rank, row, column) +
                      time_part_at(&model->time, row, column) + season_at(&model->season, row, column);
    if (estimate < model->bounds.low)
        return model->bounds.low;
    return estimate > model->bounds.high ? model->bounds.high : estimate;
}

void model_free(fescue_context *context, struct model *model)
{
    if (model == NULL)
        return;
    offsets_free(context, &model->offsets);
    low_rank_free(context, &model->low_rank);
    time_part_free(context, &model->time);
    season_free(context, &model->season);
    *model = (struct model){0};
}
