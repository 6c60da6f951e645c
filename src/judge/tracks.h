/* SPDX-License-Identifier: MIT
 *
 * The table as tracks along an order: one track a sensor (a line of the other side), on it the places at which it was
 * seen. Inside of judge.
 */
#ifndef FESCUE_JUDGE_TRACKS_H
#define FESCUE_JUDGE_TRACKS_H

#include "judge/judge_internal.h"

/* Sensor s was seen at the places rank[start[s] .. start[s+1]-1], ascending, 0 .. places-1 along the order; cell[] is
   where the cell stands in row order, at[] when the place is. */
struct tracks {
    bool along_columns; /* the columns are the places and the rows the sensors; else the other way */
    uint32_t sensors, places;
    uint64_t *start, *cell;
    uint32_t *rank;
    double *at;       /* places */
    uint32_t *placed; /* places: the place of each line */
};
/* order NULL or of no direction: the rows as they come. */
fescue_status tracks_create(fescue_context *context, const struct cells *cells, const struct line_order *order,
                            struct tracks *tracks);
void tracks_free(fescue_context *context, struct tracks *tracks);

/* From place to the nearest one where the sensor was seen, in steps; infinite when it never was. *is_one_sided when it
   was not seen before or not after. */
double tracks_distance(const struct tracks *tracks, uint32_t sensor, uint32_t place, bool *is_one_sided);

/* How broken up the tracks are, over the sensors that were seen in part. */
struct tracks_runs {
    double holes;          /* unseen places */
    double runs, expected; /* stretches of seen places: counted, and when the same places lay anywhere */
    double hole_runs;      /* stretches of unseen places */
};
struct tracks_runs tracks_count_runs(const struct tracks *tracks);
/* The same of tracks in the order that lines came in: sensors are the lines of the half. */
struct tracks_runs half_count_runs(const struct half *sensors);

#endif
