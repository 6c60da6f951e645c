/* SPDX-License-Identifier: MIT
 *
 * The inside of hold-outs: each shape marks which cells are kept, one byte a cell in row order.
 */
#ifndef FESCUE_JUDGE_HOLDOUT_INTERNAL_H
#define FESCUE_JUDGE_HOLDOUT_INTERNAL_H

#include "judge/tracks.h"

/* Takes marks away from `keep` until about share of all cells has lost them; *hidden counts these. dark[place] becomes
   1 for places that were hidden whole (rows, or columns when the order goes along columns); it has room for rows +
   columns. */
fescue_status holdout_gaps(fescue_context *context, const struct cells *cells, const struct holdout_request *request,
                           double share, uint8_t *keep, uint8_t *dark);
fescue_status holdout_lines(fescue_context *context, const struct cells *cells, const struct holdout_request *request,
                            uint8_t *keep);
/* A stream of the fold's own. */
struct random_stream holdout_random(const struct holdout_request *request, uint32_t which);
/* order becomes 0 .. count-1 in random order. */
void holdout_shuffle(struct random_stream *random, uint32_t *order, uint32_t count);

#endif
