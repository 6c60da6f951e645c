/* SPDX-License-Identifier: MIT
 *
 * Which cells of a plain table are seen: column by column, from the top, without a mask of the table.
 *
 * Column j is seen to the share p_j. With popularity s, p_j = min(1, c (j+1)^-s) where c makes the mean of p the wanted
 * share; s = 0 gives equal shares.
 *
 *   scattered     every cell by itself with probability p: the number of cells passed over before the next seen one is
 *                 geometric, floor(log(1 - u) / log(1 - p)) with u uniform (inversion)
 *   runs          seen and unseen stretches by turns, both geometric and at least one row long: unseen ones have mean
 *                 length L, seen ones L p/(1 - p), so that the share is p. L is a fortieth of the rows, at least 2,
 *                 and is stretched where a seen stretch would be shorter than one row. A column begins seen with
 *                 probability p, which together with the missing memory of geometric lengths makes every row alike.
 *   late-starts   seen from one row on to the end. The start is rows * u^(p/(1-p)), whose mean is rows * (1-p): most
 *                 columns begin early, some very late, and few or none are there in the first rows.
 */
#include "job/sow_internal.h"

#include <math.h>

enum { HOLES_SCATTERED, HOLES_RUNS, HOLES_LATE_STARTS };

static const double unseen_stretch = 1. / 40; /* of the rows: a day or two of a table of two months */

void holes_shares(const struct fescue_sow_options *options, double *share)
{
    uint64_t columns = (uint64_t)options->columns, full = 0;
    double wanted = options->seen * (double)columns, total = 0;
    for (uint64_t j = 0; j < columns; j++) {
        share[j] = pow((double)j + 1, -options->popularity);
        total += share[j];
    }
    /* Shares fall with j: the first `full` columns are seen whole, the others share what is left. */
    while (full < columns && total > 0 && share[full] * (wanted - (double)full) > total) {
        total -= share[full];
        full++;
    }
    double factor = full < columns && total > 0 ? (wanted - (double)full) / total : 0;
    for (uint64_t j = 0; j < columns; j++)
        share[j] = j < full ? 1 : fmin(1, fmax(0, factor * share[j]));
}

/* Of a geometric number of failures before a success of probability p in (0, 1]; at most `most`. */
static uint64_t geometric_draw(struct random_stream *stream, double p, uint64_t most)
{
    if (p >= 1)
        return 0;
    double failures = log1p(-random_uniform(stream)) / log1p(-p);
    return failures < (double)most ? (uint64_t)failures : most;
}

/* Moves to the first row of the next seen stretch, an unseen one lying before it when `after_unseen`. */
static void stretch_begin(struct holes *holes, bool after_unseen)
{
    double p = holes->share;
    double unseen = fmax(fmax(2, unseen_stretch * (double)holes->rows), (1 - p) / p), seen = unseen * p / (1 - p);
    if (after_unseen)
        holes->next = holes->stop + 1 + geometric_draw(&holes->stream, 1 / unseen, holes->rows);
    holes->stop = holes->next + 1 + geometric_draw(&holes->stream, 1 / seen, holes->rows);
}

void holes_open(const struct sowing *sowing, uint64_t column, double share, struct holes *holes)
{
    *holes = (struct holes){.shape = sowing->options->holes,
                            .rows = sowing->rows,
                            .share = share,
                            .stream = sow_stream(sowing, SOW_HOLES, column << 32)};
    if (share <= 0)
        holes->next = holes->rows;
    else if (share >= 1)
        holes->shape = HOLES_LATE_STARTS; /* from the first row on */
    else if (holes->shape == HOLES_SCATTERED)
        holes->next = geometric_draw(&holes->stream, share, holes->rows);
    else if (holes->shape == HOLES_RUNS)
        stretch_begin(holes, random_uniform(&holes->stream) >= share);
    else
        holes->next = (uint64_t)((double)holes->rows * pow(random_uniform(&holes->stream), share / (1 - share)));
    if (holes->next > holes->rows)
        holes->next = holes->rows;
}

void holes_step(struct holes *holes)
{
    holes->next++;
    if (holes->shape == HOLES_SCATTERED)
        holes->next += geometric_draw(&holes->stream, holes->share, holes->rows);
    else if (holes->shape == HOLES_RUNS && holes->next >= holes->stop)
        stretch_begin(holes, true);
    if (holes->next > holes->rows)
        holes->next = holes->rows;
}
