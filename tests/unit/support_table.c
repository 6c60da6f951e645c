/* SPDX-License-Identifier: MIT
 *
 * Random stores of observed cells.
 */
#include "support_table.h"

#include <math.h>

/* Which numbers a draw is: one stream each. */
enum { DRAW_SEEN, DRAW_NOISE, DRAW_ROW, DRAW_COLUMN };

static double normal_at(uint64_t seed, uint32_t which, uint64_t index)
{
    struct random_stream stream = random_open(seed, RANDOM_TEST, which);
    stream.index = index;
    return random_normal(&stream);
}

double sowing_truth(const struct sowing *sowing, uint32_t row, uint32_t column)
{
    double sum = 0;
    for (uint32_t k = 0; k < sowing->rank; k++)
        sum += normal_at(sowing->seed, DRAW_ROW, (uint64_t)row * sowing->rank + k) *
               normal_at(sowing->seed, DRAW_COLUMN, (uint64_t)column * sowing->rank + k);
    return sum;
}

void sow_triplets(fescue_context *context, const struct sowing *sowing, struct triplet_list *list)
{
    *list = (struct triplet_list){.precision = sowing->precision};
    for (uint32_t i = 0; i < sowing->rows; i++)
        for (uint32_t j = 0; j < sowing->columns; j++) {
            uint64_t cell = (uint64_t)i * sowing->columns + j;
            if (random_uniform_at(sowing->seed, RANDOM_TEST, DRAW_SEEN, cell) >= sowing->share)
                continue;
            double value = sowing_truth(sowing, i, j) + sowing->noise * normal_at(sowing->seed, DRAW_NOISE, cell);
            assert_status(context, triplets_append(context, list, i, j, value), FESCUE_OK);
        }
}

void sow_cells(fescue_context *context, const struct sowing *sowing, struct cells *cells)
{
    struct triplet_list list;
    sow_triplets(context, sowing, &list);
    assert_status(context, cells_build(context, sowing->rows, sowing->columns, &list, cells), FESCUE_OK);
    triplets_free(context, &list);
}
